"""The strength at which the network as declared really breaks: every link exactly at its strength and delay.

Theory (section 9): the endless pattern is exponentially stable iff, at every angle theta, all roots of its symbol have
negative real parts. The stable set of strengths need not be an interval, so strengths are scanned outward and the
*first* failure is bracketed. The stable end of the bracket is then shown stable at every angle by a covering
(cover.py), the unstable end by one polished root.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import inf, pi

import numpy as np

from synth.base.progress import Listener, silent
from synth.margin.cover import Covering, no_crossing_between, stable_at_every_angle
from synth.margin.large import LargeFamily, LargeLoop, rightmost_of_large
from synth.margin.roots import Root, candidates, encircled, polished
from synth.margin.symbol import Loop, LoopFamily

CAP = 1000.0
_RATIO = 1.1
_FLOOR = 1e-3
_BETWEEN = 1_200_000  # boxes: a few seconds for small cells
_COVERED = 40  # rows of a symbol up to which coverings are tried
_WOUND = 120  # rows up to which a winding number is followed
_GRID = {2: 13, 3: 7}  # angles per direction between 0 and pi
Family = LoopFamily | LargeFamily


@dataclass(frozen=True)
class ExactLimit:
    """Bracket [lower, upper] of the first factor at which the declared network breaks (see ``note``).

    ``theta`` (rad per cell, 0 to pi; one number per direction in two and three dimensions, None for members),
    ``wavelength`` (cells per period, inf: all alike) and ``frequency`` (rad/s) describe the mode that breaks.
    ``lower_certified``: a covering shows the network stable at ``lower``;
    ``upper_certified``: a polished root with positive real part, and a winding number about it, at ``upper``.
    ``capped``: nothing failed up to ``cap``, so ``upper`` is inf only because nothing more is known.
    ``between_certified``: a covering shows that nothing breaks between today's strength (or the factor proven by other
    means) and ``lower``, so that this is the first failure; otherwise the factors in between were scanned in steps.
    ``about`` says in words what breaks at ``upper``. Where nothing could be judged the bracket is [0, inf) and ``note``
    says why.
    """

    lower: float
    upper: float
    theta: float | tuple[float, ...] | None = None
    wavelength: float | None = None
    frequency: float | None = None
    cap: float = CAP
    capped: bool = False
    nominal_stable: bool = True
    lower_certified: bool = False
    upper_certified: bool = False
    between_certified: bool = False
    with_delays: bool = True
    note: str = ""
    about: str = "the nominal network"

    def as_json(self) -> dict[str, object]:
        """Plain data; infinity as 'inf'."""
        found: dict[str, object] = {}
        for key, value in self.__dict__.items():
            found[key] = "inf" if isinstance(value, float) and value == inf else value
        return found


def rightmost(loop: Loop | LargeLoop) -> Root | None:
    """The root with the largest real part over all angles: a grid in theta, refined about its best points.

    None if no candidate could be polished. A search, not a proof; theta in [0, pi] is enough by conjugation (in more
    directions: for the first of them).
    """
    from scipy.optimize import minimize_scalar

    if isinstance(loop, LargeLoop):
        return rightmost_of_large(loop)
    if loop.directions > 1:
        return _rightmost_on_lattice(loop)
    if not any(t.at or t.delay for t in loop.terms) and loop.A.shape[0] == loop.states > _WOUND:
        values = np.linalg.eigvals(loop.A + sum(t.J for t in loop.terms))  # many members: one matrix, nothing to polish
        return Root(complex(values[np.argmax(values.real)]), 0.0, 0.0)
    turns = max((int(np.abs(t.at).sum()) for t in loop.terms), default=0)
    grid = np.linspace(0.0, pi, 24 * max(turns, 1) + 1) if turns else np.array([0.0])
    heights = candidates(loop, grid, fine=False)[:, 0].real

    def low(theta: float) -> float:
        return -float(candidates(loop, np.array([theta]), fine=False)[0, 0].real)

    tries = list(grid[np.argsort(-heights)[:2]])
    peaks = [
        k
        for k in range(1, len(grid) - 1)
        if heights[k] >= max(heights[k - 1], heights[k + 1])
        and heights[k] > heights.max() - 0.1 * np.ptp(heights) - 1e-9
    ]
    for k in sorted(peaks, key=lambda k: -heights[k])[:2]:
        best = minimize_scalar(low, bounds=(grid[k - 1], grid[k + 1]), method="bounded", options={"xatol": 1e-6})
        tries.append(float(best.x))
    found = [root for theta in tries for root in polished(loop, float(theta), 2)]
    return max(found, key=lambda r: r.s.real, default=None)


def _rightmost_on_lattice(loop: Loop) -> Root | None:
    """The same in two or three directions: a grid of waves, and a search downhill from the best of them."""
    from scipy.optimize import minimize

    d = loop.directions
    reach = max((max(map(abs, t.at)) for t in loop.terms if not isinstance(t.at, int)), default=1) or 1
    half = np.linspace(0.0, pi, (_GRID[d] - 1) * reach + 1)
    full = np.concatenate([-half[:0:-1], half])
    grid = np.stack(np.meshgrid(half, *[full] * (d - 1), indexing="ij"), axis=-1).reshape(-1, d)
    heights = candidates(loop, grid, fine=False)[:, 0].real

    def low(theta: np.ndarray) -> float:
        return -float(candidates(loop, theta[None, :], fine=False)[0, 0].real)

    best = grid[np.argsort(-heights)[:3]]
    step = half[1] - half[0]
    tries = [*best]
    for start in best:
        corners = np.vstack([start, start + step / 2 * np.eye(d)])
        found = minimize(low, start, method="Nelder-Mead", options={"initial_simplex": corners, "xatol": 1e-6})
        tries.append(np.asarray(found.x))
    roots = [root for theta in tries for root in polished(loop, tuple(map(float, theta)), 2)]
    return max(roots, key=lambda r: r.s.real, default=None)


def _shown_stable(loop: Loop | LargeLoop, budget: int = 400_000) -> bool:
    """Whether a covering shows every root in Re s < 0; not tried where the symbol is large."""
    return isinstance(loop, Loop) and loop.A.shape[0] <= _COVERED and stable_at_every_angle(loop, budget).complete


def _shown_between(family: Family, low: float, high: float) -> Covering:
    if isinstance(family, LargeFamily) or family.A0.shape[0] > _COVERED:
        return Covering(False, 0)
    return no_crossing_between(family, low, high, _BETWEEN)


def _shown_unstable(loop: Loop | LargeLoop, root: Root) -> bool:
    return isinstance(loop, Loop) and loop.A.shape[0] <= _WOUND and encircled(loop, root)


def unjudged(note: str, cap: float = CAP, delays: bool = True) -> ExactLimit:
    """Nothing is known: the bracket [0, inf) and the reason."""
    return ExactLimit(0.0, inf, cap=cap, with_delays=delays, note=note)


def exact_limit(
    family: Family,
    start: float = 1.0,
    cap: float = CAP,
    width: float = 1e-3,
    unaffected: bool = False,
    progress: Listener = silent,
) -> ExactLimit:
    """Bracket the first failure of ``family``, going up from ``start``, or down from 1 if the nominal network fails.

    ``start`` >= 1 is a factor up to which stability is already proven (1: nothing known); ``cap`` ends the scan;
    ``width`` is the relative width of the bracket; ``unaffected`` says that the scaled links lie on no cycle, so that
    the factor does not move any root. Law: lower <= upper, and the network at ``upper`` is unstable unless capped.
    """
    delays = family.delayed
    first = rightmost(family.at(start))
    if first is None:
        return ExactLimit(0.0, inf, cap=cap, with_delays=delays, note="no root could be computed; nothing is claimed.")
    if unaffected:
        return _unaffected(family, first, cap, delays)
    if _stable(first):
        return _upward(family, start, max(cap, 2 * start), width, progress)
    if start > 1:
        return exact_limit(family, 1.0, cap, width, unaffected, progress)
    return _downward(family, first, cap, width, progress)


def _stable(root: Root | None) -> bool:
    """Negative real part beyond rounding (a root on the axis counts as failure)."""
    return root is not None and root.s.real < -1e-9 * (1 + abs(root.s))


def _unaffected(family: Family, root: Root, cap: float, delays: bool) -> ExactLimit:
    stable = _stable(root)
    certified = stable and _shown_stable(family.at(1.0))
    note = "the scaled links lie on no closed path, so no mode depends on their strength."
    value = inf if stable else 0.0
    return ExactLimit(
        value, value, cap=cap, nominal_stable=stable, lower_certified=certified, with_delays=delays, note=note
    )


def _upward(family: Family, start: float, cap: float, width: float, progress: Listener) -> ExactLimit:
    low = start
    while low < cap:
        high = min(low * _RATIO, cap)
        root = rightmost(family.at(high))
        if not _stable(root):
            return _first(family, start, _bracket(family, low, high, width, cap, True))
        progress(f"declared network stable at {high:.4g} times today's strength")
        low = high
    certified = _shown_stable(family.at(cap))
    limit = ExactLimit(cap, inf, cap=cap, capped=True, lower_certified=certified, with_delays=family.delayed)
    limit = _first(family, start, limit)
    word = "nothing fails" if limit.between_certified else "no failure was found"
    return replace(limit, note=f"{word} up to {cap:g} times today's strength; beyond that nothing is said.")


def _first(family: Family, start: float, limit: ExactLimit) -> ExactLimit:
    """Try to show that nothing breaks between ``start`` and the lower end, and say which it is."""
    sure = limit.lower_certified and _shown_between(family, start, limit.lower).complete
    ending = (
        "a covering shows that nothing breaks before it."
        if sure
        else "factors in between were scanned in steps of a tenth, not proven."
    )
    return replace(limit, between_certified=sure, note=f"first failure going up from today's strength; {ending}")


def _downward(family: Family, first: Root, cap: float, width: float, progress: Listener) -> ExactLimit:
    high = 1.0
    while high > _FLOOR:
        low = high / _RATIO**2
        if _stable(rightmost(family.at(low))):
            return _bracket(family, low, high, width, cap, False)
        progress(f"declared network unstable at {low:.4g} times today's strength")
        high = low
    return replace(
        _describe(first, family.delayed, cap),
        lower=0.0,
        upper=high,
        nominal_stable=False,
        upper_certified=_shown_unstable(family.at(1.0), first),
        note=f"the network is not stable at any factor tried between {high:.2g} and 1, today's strength included.",
    )


def _bracket(family: Family, low: float, high: float, width: float, cap: float, stable: bool) -> ExactLimit:
    """Bisect between a stable and a failing factor, then certify both ends (moving them outward within the width)."""
    while high - low > width / 4 * high:
        middle = (low + high) / 2
        if _stable(rightmost(family.at(middle))):
            low = middle
        else:
            high = middle
    witness = rightmost(family.at(high))
    upper, upper_ok = high, False
    for step in range(4):
        upper = high * (1 + step * width / 8)
        found = rightmost(family.at(upper))
        if found is not None and _shown_unstable(family.at(upper), found):
            upper_ok, witness = True, found
            break
    if not upper_ok:
        upper = high
    lower, lower_ok = low, False
    for step in range(3):
        lower = low * (1 - step * width / 8)
        if _shown_stable(family.at(lower), 300_000):
            lower_ok = True
            break
    if not lower_ok:
        lower = low
    note = (
        ""
        if stable
        else "today's network is unstable as declared; this is the first stable strength going down from it."
    )
    return replace(
        _describe(witness, family.delayed, cap),
        lower=lower,
        upper=upper,
        nominal_stable=stable,
        lower_certified=lower_ok,
        upper_certified=upper_ok,
        note=note,
    )


def _describe(root: Root | None, delays: bool, cap: float) -> ExactLimit:
    """The mode that breaks, in the words of a person who watches the line."""
    if root is None:
        return ExactLimit(0.0, inf, cap=cap, with_delays=delays)
    length = float(np.linalg.norm(root.theta))
    return ExactLimit(
        0.0,
        inf,
        theta=root.theta,
        wavelength=inf if length < 1e-9 else 2 * pi / length,
        frequency=abs(root.s.imag),
        cap=cap,
        with_delays=delays,
    )

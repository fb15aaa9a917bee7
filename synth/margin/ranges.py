"""At which strengths the network as declared is stable: all ranges of the factor, not only the first.

The stable set of factors need not be an interval (a network that breaks at twice today's strength may be calm again at
three times), so the factor is scanned, every range is bracketed, and both the first failure and the later ranges are
reported. A scan in steps can overlook what happens inside a step; the inner end of every range is shown stable by a
covering of all angles (patterns) or a verified Lyapunov norm (members).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from math import inf

import numpy as np

from synth.base.errors import InputError
from synth.base.progress import Listener, silent
from synth.margin.cover import stable_at_every_angle
from synth.margin.exact import Family, rightmost
from synth.margin.large import LargeLoop, large_family
from synth.margin.members_exact import members_loop
from synth.margin.symbol import Loop, loop_family
from synth.network.gains import Gains
from synth.network.model import Network

_RATIO = 1.1
_BOXES = 1_200_000
_DENSE = 300  # states of members up to which their loop is kept dense
_WHOLE = 1500  # and up to which all modes are computed


@dataclass(frozen=True)
class StableRange:
    """Stable from ``lower`` to ``upper`` as scanned; ``..._certified``: that end is proven stable.

    ``upper_open``: the scan ended there without a failure.
    """

    lower: float
    upper: float
    lower_certified: bool
    upper_certified: bool
    upper_open: bool = False


@dataclass(frozen=True)
class StableRanges:
    """Factors on today's strengths at which the declared network is stable, from ``low`` to ``most``.

    ``first_failure``: the first factor going up from today's at which it is not (inf: none up to ``most``; 1 or less:
    today's network itself is not stable). ``theta`` of the mode that breaks there (one angle per dimension; None for
    members or where nothing breaks) and its ``frequency`` in rad/s. ``static_gain``: of members, at today's strength.
    """

    ranges: tuple[StableRange, ...]
    first_failure: float
    low: float
    most: float
    theta: tuple[float, ...] | None = None
    frequency: float | None = None
    own_parts: bool = True
    static_gain: float | None = None

    @property
    def interrupted(self) -> bool:
        """Whether the network is stable again beyond a failure."""
        return len(self.ranges) > 1


@dataclass(frozen=True)
class _Modes:
    height: Callable[[float], tuple[float, tuple[float, ...] | None, float]]
    certified: Callable[[float], bool]


def stable_ranges(
    network: Network, gains: Gains, classes: tuple[str, ...] | None = None, own_parts: bool = True,
    low: float = 0.05, most: float = 20.0, width: float = 1e-3, certify: bool = True, progress: Listener = silent,
) -> StableRanges:  # fmt: skip
    """Scan the factor on the links of ``classes`` (None: all) from ``low`` to ``most`` in steps of a tenth.

    ``own_parts``: whether own parts of relative links grow with it. ``width``: relative width of every bracket.
    Patterns of any dimension and members, with
    constant delays. Raises InputError for other descriptions and
    numbers out of range. Law: a factor in a certified end is stable; every range lies in the stable set as scanned.
    """
    if not 0 < low <= 1 < most:
        raise InputError(f"the scan must run from a factor in (0, 1] to one above 1, not from {low!r} to {most!r}.")
    if not 1e-6 <= width <= 0.1:
        raise InputError(f"width is {width}; a relative width between 1e-6 and 0.1 is accepted.")
    modes = _modes(network, gains, classes, own_parts)
    down = [1.0]
    while down[-1] > low:
        down.append(max(down[-1] / _RATIO, low))
    up = [1.0]
    while up[-1] < most:
        up.append(min(up[-1] * _RATIO, most))
    grid = [*reversed(down[1:]), *up]
    good = []
    for k in grid:
        good.append(_stable(modes, k))
        progress(f"declared network {'stable' if good[-1] else 'unstable'} at {k:.4g} times today's strength")
    ranges = _ranges(modes, grid, good, width, certify)
    first, theta, frequency = inf, None, None
    here = next((r for r in ranges if r.lower <= 1 <= r.upper), None)
    if here is None:
        first = 1.0
    elif not here.upper_open:
        first = _beyond(modes, here.upper, width)
    if first < inf:
        _, theta, frequency = modes.height(first)
    fresh_members = network.members is not None and not any(link.delay for link in network.links)
    gain = members_loop(network, gains, certify=False).static_gain if fresh_members else None
    return StableRanges(tuple(ranges), first, low, most, theta, frequency, own_parts, gain)


def _modes(network: Network, gains: Gains, classes: tuple[str, ...] | None, own_parts: bool) -> _Modes:
    network.refuse_beyond("the ranges of stable strengths", "pattern", "members")
    still = network.without_self_links()
    family: Family
    if network.members is not None and _states(network) > _DENSE:
        family = large_family(still, gains, classes, own_parts)
    else:
        family = loop_family(still, gains, classes, own_parts)

    def height(kappa: float) -> tuple[float, tuple[float, ...] | None, float]:
        loop = family.at(kappa)
        if isinstance(loop, LargeLoop) and loop.A.shape[0] <= _WHOLE:
            # Many modes decay alike where damping is light, and then searching for the rightmost takes longer than all.
            values = np.linalg.eigvals(loop.A.toarray())
            first = complex(values[int(np.argmax(values.real))])
            return first.real, None, abs(first.imag)
        root = rightmost(loop)
        if root is None:
            return inf, None, 0.0
        theta = None if network.members is not None else root.theta
        angles = theta if theta is None or isinstance(theta, tuple) else (theta,)
        return root.s.real, angles, abs(root.s.imag)

    def of_members(kappa: float) -> bool:
        return members_loop(network, gains, Fraction(kappa), classes, own_parts).stable_certified

    def of_pattern(kappa: float) -> bool:
        loop = family.at(kappa)
        return isinstance(loop, Loop) and stable_at_every_angle(loop, _BOXES).complete

    late = any(link.delay for link in network.links)
    return _Modes(height, of_members if network.members is not None and not late else of_pattern)


def _states(network: Network) -> int:
    members = network.members
    assert members is not None
    counts = [len(kind.states) for kind in network.kinds]
    return sum(counts[k] for k in members.kind.tolist())


def _stable(modes: _Modes, kappa: float) -> bool:
    return modes.height(kappa)[0] < -1e-9


def _ranges(modes: _Modes, grid: list[float], good: list[bool], width: float, certify: bool) -> list[StableRange]:
    found = []
    i = 0
    while i < len(grid):
        if not good[i]:
            i += 1
            continue
        j = i
        while j + 1 < len(grid) and good[j + 1]:
            j += 1
        low = grid[i] if i == 0 else _edge(modes, grid[i], grid[i - 1], width)
        high = grid[j] if j + 1 == len(grid) else _edge(modes, grid[j], grid[j + 1], width)
        low, low_sure = _inward(modes, low, high, width, 1, certify)
        high, high_sure = _inward(modes, high, low, width, -1, certify)
        found.append(StableRange(low, high, low_sure, high_sure, j + 1 == len(grid)))
        i = j + 1
    return found


def _edge(modes: _Modes, good: float, bad: float, width: float) -> float:
    while abs(good - bad) > width / 4 * max(good, bad):
        middle = (good + bad) / 2
        if _stable(modes, middle):
            good = middle
        else:
            bad = middle
    return good


def _inward(modes: _Modes, end: float, other: float, width: float, way: int, certify: bool) -> tuple[float, bool]:
    """The end of a range, moved inward within the width until it is proven stable."""
    if not certify:
        return end, False
    for step in range(4):
        tried = end * (1 + way * step * width / 8)
        if (other - tried) * way < 0:
            break
        if modes.certified(tried):
            return tried, True
    return end, False


def _beyond(modes: _Modes, good: float, width: float) -> float:
    """A factor just above a stable one at which the network is not."""
    step = width / 4
    while _stable(modes, good * (1 + step)) and step < _RATIO - 1:
        step *= 2
    return float(good * (1 + step))

"""How much stronger the links may get before the peak route stops proving: theory (1), (2), own parts section 6.

At a factor kappa the closed units are formed (own parts of relative links grow with kappa where asked), their peak
gains are enclosed, and the radius of the gain operator is enclosed. Upper end below one: proven. Lower end one or more:
the class "every link independently any causal operator with |v| <= g sup|z|" is lost there, exactly (2).

Between two factors nothing is taken for granted: where own parts grow, the closed unit itself changes, the radius need
not be monotone, and a drift of the own part by delta is counted as a link of a unit to itself of strength
delta * own (section 6). That proves whole intervals of factors, not points; for edge patterns whose own parts grow only
points are proven.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from math import inf

import numpy as np

from synth.base.errors import InputError, SolverFailure
from synth.base.progress import Listener, silent
from synth.gain.sensitivity import slopes
from synth.margin.folded import Folded, Scaling, tidy

__all__ = ["CAP", "CouplingLimit", "Folded", "Scaling", "bottleneck", "coupling_limit", "tidy"]

CAP = 1000.0
_RATIO = 1.1
_SHARP = 300  # rows up to which the bracket of a monotone radius is narrowed as far as doubles allow
_FLOOR = 1e-4
_COVER_WORK = 1000.0  # in units of response length times fastest mode; about twenty seconds
_COVER_STEP = 10.0


@dataclass(frozen=True)
class CouplingLimit:
    """``proven``: largest factor found whose radius is below one; ``lost``: first factor at which the class is lost.

    ``covered``: every factor from today's strength to this one is proven (equal to ``proven`` where nothing is left
    open). ``capped``: nothing failed up to the cap; ``lost`` is then the cap too. ``proven`` is 0 if not even units
    without links are stable. ``unlimited``: the factor provably changes nothing; both are infinite.
    ``lost_confirmed``: an enclosure agrees that the class is lost at ``lost``; otherwise that number is an estimate.
    """

    proven: float
    lost: float
    covered: float
    capped: bool = False
    unlimited: bool = False
    nominal_proven: bool = True
    lost_confirmed: bool = True


def coupling_limit(
    scaling: Scaling, width: float = 1e-3, cap: float = CAP, progress: Listener = silent
) -> CouplingLimit:
    """Bracket the first factor at which the peak route fails, going up from 1, or down from 1 if it fails there.

    ``width``: relative width of the bracket, > 0. ``cap`` ends the upward scan where own parts grow; otherwise the
    radius is monotone in the factor and no cap is needed. Law: scaling all strengths of a network without relative
    links by c divides the result by c.
    """
    nominal = scaling.folded(1.0)
    proven_now = nominal.radius()[1] < 1
    if scaling.unaffected:
        value = inf if proven_now else 0.0
        return CouplingLimit(value, value, value, unlimited=True, nominal_proven=proven_now)
    if not scaling.moves_units:
        return _monotone(nominal, width, proven_now)
    if proven_now:
        low = 1.0
        while low < cap:
            high = min(low * _RATIO, cap)
            if scaling.guess(high) >= 1:
                proven, lost, sure = _confirmed(scaling, *_guided(scaling, low, high, width), width)
                return CouplingLimit(proven, lost, _cover(scaling, proven, width), lost_confirmed=sure)
            progress(f"radius below 1 at {high:.4g} times today's strength")
            low = high
        proven, _, _ = _confirmed(scaling, cap, inf, width)
        return CouplingLimit(proven, proven, _cover(scaling, proven, width), capped=True)
    high = 1.0
    while high > _FLOOR:
        low = high / _RATIO**2
        if scaling.guess(low) < 1:
            proven, lost, sure = _confirmed(scaling, *_guided(scaling, low, high, width), width)
            return CouplingLimit(proven, lost, proven, nominal_proven=False, lost_confirmed=sure)
        high = low
    return CouplingLimit(0.0, high, 0.0, nominal_proven=False)


def _guided(scaling: Scaling, low: float, high: float, width: float) -> tuple[float, float]:
    """Narrow a bracket by fast estimates; what they say is confirmed afterwards."""
    while high - low > width / 4 * high:
        middle = (low + high) / 2
        if scaling.guess(middle) < 1:
            low = middle
        else:
            high = middle
    return low, high


def _confirmed(scaling: Scaling, low: float, high: float, width: float) -> tuple[float, float, bool]:
    """Guaranteed ends of a bracket found by estimates, each moved outward until its enclosure agrees.

    The last value is False where no enclosure agreed that the class is lost near ``high``: an estimate then.
    """
    steps = [width / 8 * (2**step - 1) for step in range(6)]
    proven = 0.0
    for tried in [*(low * (1 - step) for step in steps), *([1.0] if low > 1 else [])]:
        if scaling.folded(tried).radius()[1] < 1:
            proven = float(tidy(tried))
            break
    if high == inf:
        return proven, proven, True
    for tried in (high * (1 + step) for step in steps):
        if scaling.folded(tried).radius()[0] >= 1:
            return proven, tried, True
    return proven, high, False


def _monotone(nominal: Folded, width: float, proven_now: bool) -> CouplingLimit:
    """Own parts fixed: the radius grows with the factor, so one bracket says everything (theory (2): 1/radius)."""
    if not nominal.stable:
        return CouplingLimit(0.0, 0.0, 0.0, nominal_proven=False)
    least = 1e-9 if nominal.scaling.has_edges else 0.0  # windows need something to hold
    if nominal.radius(least)[1] >= 1:  # links outside the chosen classes alone are too strong
        return CouplingLimit(0.0, 0.0, 0.0, nominal_proven=False)
    low, high = (1.0, 2.0) if proven_now else (0.5, 1.0)
    while nominal.radius(high)[1] < 1:
        low, high = high, 2 * high
        if high > 1e15:
            return CouplingLimit(low, low, low, capped=True)
    while nominal.radius(low)[1] >= 1:
        low, high = low / 2, low
        if low < 1e-15:
            return CouplingLimit(0.0, high, 0.0, nominal_proven=False)
    sharp = 1e-6 if nominal.plan is not None and nominal.plan.size <= _SHARP and not nominal.scaling.has_edges else 1e-3
    proven, lost = _bisect(nominal.radius, low, high, min(width, sharp))
    return CouplingLimit(proven, lost, proven, nominal_proven=proven_now)


def _bisect(
    check: Callable[[float], tuple[float, float]], low: float, high: float, width: float
) -> tuple[float, float]:
    """From a proven ``low`` and a failing ``high``: (proven, lost), as close as ``width`` where enclosures allow."""
    lost = high if check(high)[0] >= 1 else inf
    while high - low > width / 2 * high:
        middle = (low + high) / 2
        lower, upper = check(middle)
        if upper < 1:
            low = middle
        else:
            high = middle
            lost = middle if lower >= 1 else lost
    for step in range(60):  # the enclosure straddles one just above ``low``: go on until the class is certainly lost
        if lost <= high * (1 + width):
            break
        tried = high * (1 + width / 4 * 2**step)
        if tried < lost and check(tried)[0] >= 1:
            lost = tried
            break
    return float(tidy(low)), lost


def _cover(scaling: Scaling, proven: float, width: float) -> float:
    """How far every factor from 1 on is proven, by steps that each prove an interval (own drift as a self-link).

    The work is limited by the length of the units' responses, so slowly decaying units are covered less far.
    """
    if scaling.has_edges:
        return min(1.0, proven)
    back = _reach(scaling.folded(proven), proven, 0.0)
    at, left = 1.0, _COVER_WORK
    while left > 0:
        if at >= min(back, proven):
            return proven
        left -= scaling.effort(at) + _COVER_STEP
        step = _reach(scaling.folded(at), at, proven)
        if step <= at * (1 + width * 1e-3):
            return at
        at = step
    return at


def _reach(base: Folded, near: float, far: float) -> float:
    """The factor nearest to ``far`` such that everything between it and ``near`` is proven from this one folding."""

    def ends(edge: float) -> tuple[float, float]:
        return max(edge, near, base.kappa), max(abs(edge - base.kappa), abs(near - base.kappa))

    if not base.stable or base.drifted(*ends(near)) >= 1:
        return near
    good, bad = near, far
    if base.estimate(*ends(far)) < 1:
        good = far
    for _ in range(40):
        middle = (good + bad) / 2
        if base.estimate(*ends(middle)) < 1:
            good = middle
        else:
            bad = middle
    for back in (0.0, 1e-9, 1e-6, 1e-3, 1e-1):  # what doubles suggest is kept only if the guaranteed radius agrees
        edge = good + (near - good) * back
        if base.drifted(*ends(edge)) < 1:
            return edge
    return near


def bottleneck(folded: Folded) -> tuple[tuple[str, float], ...]:
    """Link classes by their share in the radius: d log radius / d log strength, from theory (15); shares sum to one.

    A guide computed in doubles; empty where the radius is zero. Where a maximum is attained by several alternatives it
    is the share of the active ones. Raises SolverFailure if the eigenproblem fails.
    """
    if not folded.stable or folded.operator is None or folded.plan is None or not np.any(folded.operator.gain):
        return ()
    try:
        found = slopes(folded.operator).share
    except InputError:  # the radius is zero
        return ()
    except np.linalg.LinAlgError as error:
        raise SolverFailure("the eigenvectors of the gain operator could not be computed.") from error
    names = [link.name for link in folded.plan.links]
    by_link = np.bincount(folded.plan.link, weights=found, minlength=len(names))
    shares: dict[str, float] = {}
    for name, share in zip(names, by_link.tolist(), strict=True):
        shares[name] = shares.get(name, 0.0) + share
    total = sum(shares.values())
    if not total > 0:
        return ()
    kept = [(name, share / total) for name, share in shares.items() if share > 1e-12 * total]
    return tuple(sorted(kept, key=lambda item: -item[1]))

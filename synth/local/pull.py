"""From the end of the search to gains one can write down: strictly inside every limit, as short exact decimals.

Modes that gather at one point of the boundary move by the n-th root of a rounding error, so the limits are narrowed
step by step until the rounded gains pass. Six significant digits are tried first; more are used only where six would
cost more than ``_COST`` of the radius.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.base.progress import Listener, silent
from synth.local.aims import aims_of, role_of
from synth.local.descent import descend
from synth.local.finish import TIGHT, Chart, Found, Gain
from synth.local.guarantee import Guarantee, broken_bounds, guarantee
from synth.local.merit import measure
from synth.local.plant import Field
from synth.network.gains import Gains, GainSet, gain_set

DIGITS = (6, 8, 10, 12)
_COST = 0.01
_NOTHING = 1e-6  # a radius this small is not worth more digits
_HOPELESS = 0.01  # limits exceeded by more than this at the end of the search will not be met by rounding
_LADDER = tuple(TIGHT * 1.5**k for k in range(13))


@dataclass(frozen=True)
class Pulled:
    """Rounded gains with what is guaranteed about them, the digits used and how far limits were narrowed."""

    gains: Gains
    guarantee: Guarantee
    digits: int
    narrowed: float


def score(field: Field, result: Guarantee) -> float:
    """What the field's search makes small, guaranteed: the upper end of the radius, or the largest aimed peak."""
    if field.ceiling is None:
        return result.upper
    aims = {(kind, role_of(group), name): value for (kind, group, name), value in aims_of(field.network).items()}
    return max(p.value / float(aims[key]) for p in result.peaks if (key := (p.kind, p.role, p.signal)) in aims)


def rounded(field: Field, gains: Gain, digits: int) -> Gains:
    """Scaled gains in the user's units with ``digits`` significant digits, exact; zeros of the structure stay zero."""
    sets: dict[int, GainSet] = {}
    for spec, plant, K in zip(field.plan.specs, field.plants, gains, strict=True):
        if spec.kind in sets:
            continue  # another specification of the same kind
        rows = [[Fraction(f"{value:.{digits - 1}e}") for value in row] for row in plant.to_user(K)]
        sets[spec.kind] = gain_set(plant.kind, ExactMatrix.of(rows, plant.allowed.shape))
    for k, kind in enumerate(field.network.kinds):
        if k not in sets:  # no unit is of this kind
            sets[k] = gain_set(kind, ExactMatrix.zeros(len(kind.inputs), len(kind.sensors)))
    return Gains(tuple(sets[k] for k in sorted(sets)))


def scaled(field: Field, gains: Gains) -> Gain:
    """Exact gains as scaled floats, plant by plant."""
    known = {gain.kind: gain.K for gain in gains.sets}
    return tuple(plant.to_scaled(known[plant.kind.name].floats()) for plant in field.plants)


def pull(field: Field, found: Found, width: float = 1e-6, workers: int = 1, progress: Listener = silent) -> Pulled:
    """Round ``found`` so that every limit holds, if any rounding of it does; else the best rounding with its faults."""
    narrowed: dict[float, Gain] = {TIGHT: found.gains}
    best: Pulled | None = None
    for digits in DIGITS if found.merit.excess < _HOPELESS else ():
        for candidate, tight in _inside(field, found, digits, narrowed):
            result = guarantee(field.network, candidate, width, workers, progress)
            if result.broken or (field.ceiling is not None and result.upper > field.ceiling):
                continue
            if best is None or score(field, result) < score(field, best.guarantee):
                best = Pulled(candidate, result, digits, tight)
            break
        if found.merit.excess > 1e-6 and best is None:
            break  # the limits cannot be met: more digits would not help
        wanted = found.merit.radius if field.ceiling is None else found.merit.aim
        if best is not None and score(field, best.guarantee) <= max((1 + _COST) * wanted, _NOTHING):
            break
    if best is not None:
        return best
    candidate, digits, tight = _within_bounds(field, found, narrowed)
    return Pulled(candidate, guarantee(field.network, candidate, width, workers, progress), digits, tight)


def _within_bounds(field: Field, found: Found, narrowed: dict[float, Gain]) -> tuple[Gains, int, float]:
    """Where peaks cannot be kept: rounded gains that at least keep the bounds on modes and gains, if any do."""
    for digits in DIGITS[:2]:
        for tight in _LADDER:
            if tight not in narrowed:
                narrowed[tight] = _again(field, found, tight)
            candidate = rounded(field, narrowed[tight], digits)
            if not broken_bounds(field.network, candidate):
                return candidate, digits, tight
    return rounded(field, found.gains, DIGITS[0]), DIGITS[0], TIGHT


def _inside(field: Field, found: Found, digits: int, narrowed: dict[float, Gain]) -> Iterator[tuple[Gains, float]]:
    """Rounded gains for ever narrower limits that pass the exact bounds and, by estimate, the peaks."""
    for tight in _LADDER:
        if tight not in narrowed:
            narrowed[tight] = _again(field, found, tight)
        candidate = rounded(field, narrowed[tight], digits)
        if broken_bounds(field.network, candidate):
            continue
        merit = measure(field, scaled(field, candidate), mode_excess=(False,) * len(field.plants))
        if merit.excess == 0.0:
            yield candidate, tight


def _again(field: Field, found: Found, tight: float) -> Gain:
    """The same optimum under limits narrowed by ``tight``.

    In mode coordinates the same point does, unless a peak or gain then breaks its narrowed limit; a short descent mends
    that.
    """
    chart = Chart(field, tight)
    gains, _ = chart.gains(found.point)
    if not chart.size or measure(field, gains, tight=tight, mode_excess=chart.free_modes).excess == 0.0:
        return gains

    def objective(x: NDArray[np.float64]) -> tuple[float, NDArray[np.float64]]:
        return chart.value(x, 300.0)

    run = descend(objective, found.point, 60)
    return chart.gains(run.point)[0]

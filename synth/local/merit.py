"""What the search makes small: the radius on exact peak gains, with every broken limit as an exact penalty.

merit = log radius + weight * (excess of actuator peaks, bands, gain bounds and modes), each excess zero inside its
limit and growing linearly outside, so that a finite weight makes the constrained optimum a minimum (exact penalty).
With a ceiling on the radius, the logarithm of the largest aimed peak takes the place of log radius, and the radius
beyond the ceiling is one more excess.
Peaks follow theory (3): z = (I - M)^{-1} M_w w, then u = U-gains applied to what the links bring and to w. When the
radius reaches one they are infinite; their excess saturates there, which keeps the merit continuous.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.gain.guide import Guide, peak_gain_guide
from synth.local.intake import Loop
from synth.local.plant import Field, Plant, Region

Array = NDArray[np.float64]

_FLAT = 10.0  # the excess of a peak saturates at this value
_TIE = 1e-5  # weight of peak gains that no loop uses, so that units outside every loop are designed as well
_ASIDE = 1e-5  # weight of the radius below its ceiling, so that freedom the aim leaves is used to lower it
_MARGINAL = 1e-6  # a unit whose slowest mode decays by less than this, in parts of the disc, counts as not settling
UNSTABLE = 1e4  # merits at or above this mean that some closed unit is not Hurwitz


@dataclass(frozen=True)
class Merit:
    """One evaluation: ``value`` to be made small, ``slopes`` its derivative by every K, and the parts behind it.

    ``excess`` is the sum of all broken limits (relative, zero if every limit holds); ``peaks`` are, plant by plant, the
    largest peak over its units of each row of H over its band and of each actuator over its limit (infinite from
    radius one on). ``aim`` is the largest aimed peak, in parts of what counts as one (infinite from radius one on, 0
    without a ceiling).
    """

    value: float
    slopes: tuple[Array, ...]
    radius: float
    excess: float
    peaks: tuple[Array, ...]
    aim: float = 0.0


def measure(
    field: Field,
    gains: tuple[Array, ...],
    weight: float = 30.0,
    tight: float = 0.0,
    mode_excess: tuple[bool, ...] | None = None,
    steep: bool = True,
) -> Merit:
    """Evaluate scaled ``gains`` (one K per plant); limits are narrowed by the relative amount ``tight``.

    ``mode_excess`` says for which plants modes outside their region count (absent: all); a plant searched in mode
    coordinates cannot leave it, and eigenvalues of a cluster carry errors that would only disturb. ``steep`` False
    saves the derivatives of the peak gains; ``slopes`` then means nothing.
    """
    units: list[Guide] = []
    excess, slopes = 0.0, [np.zeros_like(K) for K in gains]
    for i, (plant, K) in enumerate(zip(field.plants, gains, strict=True)):
        if mode_excess is None or mode_excess[i]:
            out, by_A = mode_excess_of(plant.A + plant.B @ K @ plant.C, field, tight)
            excess += out
            slopes[i] += plant.B.T @ by_A @ plant.C.T
        over = np.where(plant.allowed, np.abs(K) / plant.bound - (1 - tight), 0.0)
        excess += float(over[over > 0].sum())
        slopes[i] += np.where(over > 0, np.sign(K) / plant.bound, 0.0)
        unit = unit_guide(plant, K, steep)
        if unit is None:
            out, by_A = growth_of(plant.A + plant.B @ K @ plant.C)
            flat = tuple(np.zeros_like(K) for K in gains)
            up = tuple(plant.B.T @ by_A @ plant.C.T if j == i else flat[j] for j in range(len(gains)))
            return Merit(UNSTABLE * (1 + out), tuple(UNSTABLE * s for s in up), np.inf, np.inf, ())
        units.append(unit)
    loop = loop_of(field, units)
    radius, by_radius, tie, by_tie = _radius(field, loop, units)
    peaks = _peaks(field, loop, units, radius, tight)
    height = float(np.log(max(radius, 1e-12)))
    weights = (1.0, 0.0)  # of log radius and of the aimed peak
    excess += peaks.excess
    value = height + tie
    over_radius = 0.0
    if field.ceiling is not None:
        above = height - float(np.log(field.ceiling * (1 - tight)))
        over_radius = weight if above > 0 else 0.0
        excess += max(above, 0.0)
        weights = (_ASIDE, 1.0)
        value = _ASIDE * height + peaks.height + tie
    value += weight * excess
    for i, unit in enumerate(units):
        if not steep:
            break
        by_entry = (weights[0] + over_radius) * by_radius[i] + by_tie[i] + weight * peaks.by_excess[i]
        by_entry = by_entry + weights[1] * peaks.by_height[i]
        slopes[i] = weight * slopes[i] + slope_by_gain(field.plants[i], unit, by_entry)
    slopes = [np.where(p.allowed, s, 0.0) for p, s in zip(field.plants, slopes, strict=True)]
    return Merit(value, tuple(slopes), radius, excess, peaks.ratios, peaks.aim)


def unit_guide(plant: Plant, K: Array, steep: bool) -> Guide | None:
    """Peak gains from [takes, disturbances] to [rows of H, actuators], with slopes by each allowed entry of K."""
    actuators, w = plant.B.shape[1], plant.E.shape[1]
    closed = plant.A + plant.B @ K @ plant.C
    if len(closed) and not float(np.linalg.eigvals(closed).real.max()) < -_MARGINAL:
        return None
    found = peak_gain_guide(
        closed,
        np.concatenate((plant.D + plant.B @ K @ plant.N, plant.E), axis=1),
        np.concatenate((plant.H + plant.Fu @ K @ plant.C, K @ plant.C)),
        np.block([[plant.F + plant.Fu @ K @ plant.N, plant.Fw], [K @ plant.N, np.zeros((actuators, w))]]),
        *(plant.directions if steep else (None,) * 4),
    )
    # Close to the imaginary axis the estimate may break down; what it then says must not attract a search.
    good = found is not None and bool(np.all(np.isfinite(found.gains)) and np.all(found.gains >= 0))
    return found if good else None


def slope_by_gain(plant: Plant, unit: Guide, by_entry: Array) -> Array:
    """Derivative by K from the derivative by the unit's peak gains."""
    found = np.zeros(plant.allowed.shape)
    found[plant.allowed] = unit.slopes.reshape(len(unit.slopes), by_entry.size) @ by_entry.ravel()
    return found


def loop_of(field: Field, units: Sequence[Guide]) -> Loop:
    """The operator of the peak gains of every plant."""
    own = [unit.gains[: p.offers, : p.D.shape[1]] for p, unit in zip(field.plants, units, strict=True)]
    return Loop.of(field.intake, own)


def _radius(field: Field, loop: Loop, units: list[Guide]) -> tuple[float, list[Array], float, list[Array]]:
    """Radius, the derivative of its logarithm by every peak gain, the tie-break, and its derivative."""
    radius, left, right, chosen = loop.radius()
    left = left / max(radius, 1e-12)
    brought = loop.intake.matrix(chosen) @ right
    by_gain, by_tie, tie = [], [], 0.0
    for i, (plant, unit) in enumerate(zip(field.plants, units, strict=True)):
        part, aside = np.zeros_like(unit.gains), np.zeros_like(unit.gains)
        part[: plant.offers, : plant.D.shape[1]] = left[field.intake.rows[i]].T @ brought[field.intake.takes[i]]
        if not part.any():
            heads = plant.H.shape[0]
            total = float(unit.gains[:heads].sum())
            if total > 0:
                tie += _TIE * float(np.log(total))
                aside[:heads] = _TIE / total
        by_gain.append(part)
        by_tie.append(aside)
    return radius, by_gain, tie, by_tie


@dataclass(frozen=True)
class _Peaks:
    """Peaks over limits; the saturated sum of their excesses and the logarithm of the aimed peak, with derivatives."""

    ratios: tuple[Array, ...]
    excess: float
    by_excess: list[Array]
    height: float
    by_height: list[Array]
    aim: float


@dataclass(frozen=True)
class _Settled:
    """Sizes z = (I - M)^{-1} M_w w; by plant what arrives (units, takes) and peaks (units, heads and actuators)."""

    loop: Loop
    chosen: NDArray[np.intp]
    brought: list[Array]
    peaks: list[Array]


def _settled(field: Field, loop: Loop, units: list[Guide]) -> _Settled:
    intake = field.intake
    forced = np.zeros(intake.size)
    for plant, unit, rows in zip(field.plants, units, intake.rows, strict=True):
        forced[rows] = unit.gains[: plant.offers, plant.D.shape[1] :].sum(axis=1)
    z, chosen = loop.sizes(forced)
    arriving = intake.matrix(chosen) @ z
    brought = [arriving[takes] for takes in intake.takes]
    peaks = [
        v @ unit.gains[:, : v.shape[1]].T + unit.gains[:, v.shape[1] :].sum(axis=1)
        for unit, v in zip(units, brought, strict=True)
    ]
    return _Settled(loop, chosen, brought, peaks)


def settled_arrivals(field: Field, loop: Loop, units: list[Guide]) -> list[Array]:
    """What arrives at the takes (units, takes) of every plant under the declared disturbances; radius below one."""
    return _settled(field, loop, units).brought


def _peaks(field: Field, loop: Loop, units: list[Guide], radius: float, tight: float) -> _Peaks:
    """Every peak by theory (3), each excess with its derivative by every peak gain."""
    limits = [np.concatenate((p.band, p.limit)) * (1 - tight) for p in field.plants]
    none = [np.zeros_like(unit.gains) for unit in units]
    counted = sum(int(np.isfinite(limit).sum()) for limit in limits)
    if not counted and field.ceiling is None:
        return _Peaks(tuple(np.zeros_like(limit) for limit in limits), 0.0, none, 0.0, none, 0.0)
    if radius >= 1 - 1e-9:
        out = tuple(np.where(np.isfinite(limit), np.inf, 0.0) for limit in limits)
        return _Peaks(out, _FLAT * counted, none, _FLAT, none, np.inf)
    found = _settled(field, loop, units)
    ratios = [peak / limit for peak, limit in zip(found.peaks, limits, strict=True)]
    total, steep = 0.0, [np.zeros_like(peak) for peak in found.peaks]
    for slope, ratio, peak in zip(steep, ratios, found.peaks, strict=True):
        for place in zip(*np.nonzero(ratio > 1), strict=True):
            log = float(np.log(ratio[place]))
            total += log / (1 + log / _FLAT)
            slope[place] = 1 / (1 + log / _FLAT) ** 2 / float(peak[place])
    by_excess = _by_peaks(field, units, steep, found)
    kept = tuple(np.asarray(ratio.max(axis=0, initial=0.0)) * (1 - tight) for ratio in ratios)
    if field.ceiling is None:
        return _Peaks(kept, total, by_excess, 0.0, none, 0.0)
    parts = [plant.aimed * peak for plant, peak in zip(field.plants, found.peaks, strict=True)]
    i = int(np.argmax([part.max(initial=0.0) for part in parts]))
    at = np.unravel_index(int(np.argmax(parts[i])), parts[i].shape)
    aim = max(float(parts[i][at]), 1e-12)
    log = float(np.log(aim))
    share = 1.0 if log <= 0 else 1 / (1 + log / _FLAT)
    top = [np.zeros_like(peak) for peak in found.peaks]
    top[i][at] = share**2 / max(float(found.peaks[i][at]), 1e-300)
    by_height = _by_peaks(field, units, top, found) if aim > 1e-12 else none
    return _Peaks(kept, total, by_excess, log * share, by_height, aim)


def _by_peaks(field: Field, units: list[Guide], steep: list[Array], found: _Settled) -> list[Array]:
    """Derivative by every peak gain of a function of the peaks whose derivative by each peak is ``steep``."""
    intake = field.intake
    by = [np.zeros_like(unit.gains) for unit in units]
    by_take = np.zeros(intake.width)
    for i, (unit, slope, v) in enumerate(zip(units, steep, found.brought, strict=True)):
        takes = v.shape[1]
        by[i][:, :takes] += slope.T @ v
        by[i][:, takes:] += slope.sum(axis=0)[:, None]
        by_take[intake.takes[i]] = slope @ unit.gains[:, :takes]
    if not by_take.any():
        return by
    back = found.loop.back(found.chosen, intake.matrix(found.chosen).T @ by_take)
    for i, (plant, v) in enumerate(zip(field.plants, found.brought, strict=True)):
        own = back[intake.rows[i]]
        by[i][: plant.offers, : v.shape[1]] += own.T @ v
        by[i][: plant.offers, v.shape[1] :] += own.sum(axis=0)[:, None]
    return by


def mode_excess_of(A: Array, field: Region, tight: float) -> tuple[float, Array]:
    """Sum over modes of how far each lies outside the disc and right of the decay bound, and its derivative by A."""
    if not len(A):
        return 0.0, np.zeros_like(A)
    values, right = np.linalg.eig(A)
    disc, decay = field.fastest * (1 - tight), field.slowest * (1 + tight)
    beyond = np.abs(values) / disc - 1
    slow = (values.real + decay) / disc
    total = float(beyond[beyond > 0].sum() + slow[slow > 0].sum())
    if total == 0.0:
        return 0.0, np.zeros_like(A)
    left = _left(right)
    slope = np.zeros(A.shape)
    for i in range(len(values)):
        turn = 0.0 + 0.0j
        if beyond[i] > 0:
            turn += np.conj(values[i]) / abs(values[i]) / disc
        if slow[i] > 0:
            turn += 1.0 / disc
        if turn:
            slope += np.real(turn * np.outer(left[i], right[:, i]))
    return total, slope


def growth_of(A: Array) -> tuple[float, Array]:
    """Largest real part of the modes of A and its derivative by A."""
    values, right = np.linalg.eig(A)
    i = int(np.argmax(values.real))
    return float(values[i].real), np.real(np.outer(_left(right)[i], right[:, i]))


def _left(right: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Rows of left eigenvectors, scaled so that row i times column i of ``right`` is one."""
    try:
        return np.asarray(np.linalg.inv(right), dtype=np.complex128)
    except np.linalg.LinAlgError:
        return np.asarray(np.linalg.pinv(right), dtype=np.complex128)

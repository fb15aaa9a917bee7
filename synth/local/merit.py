"""What the search makes small: the radius on exact peak gains, with every broken limit as an exact penalty.

merit = log radius + weight * (excess of actuator peaks, bands, gain bounds and modes), each excess zero inside its
limit and growing linearly outside, so that a finite weight makes the constrained optimum a minimum (exact penalty).
Peaks follow theory (3): z = (I - M)^{-1} M_w w, then u = U-gains applied to what the links bring and to w. When the
radius reaches one they are infinite; their excess saturates there, which keeps the merit continuous.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.gain.guide import Guide, peak_gain_guide, radius_guide
from synth.local.plant import Field, Plant

Array = NDArray[np.float64]

_FLAT = 10.0  # the excess of a peak saturates at this value
_TIE = 1e-5  # weight of peak gains that no loop uses, so that units outside every loop are designed as well
UNSTABLE = 1e4  # merits at or above this mean that some closed unit is not Hurwitz


@dataclass(frozen=True)
class Merit:
    """One evaluation: ``value`` to be made small, ``slopes`` its derivative by every K, and the parts behind it.

    ``excess`` is the sum of all broken limits (relative, zero if every limit holds); ``peaks`` are, kind by kind, the
    peak of each row of H over its band and of each actuator over its limit (infinite from radius one on).
    """

    value: float
    slopes: tuple[Array, ...]
    radius: float
    excess: float
    peaks: tuple[Array, ...]


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
            out, by_A = _mode_excess(plant.A + plant.B @ K @ plant.C, field, tight)
            excess += out
            slopes[i] += plant.B.T @ by_A @ plant.C.T
        over = np.where(plant.allowed, np.abs(K) / plant.bound - (1 - tight), 0.0)
        excess += float(over[over > 0].sum())
        slopes[i] += np.where(over > 0, np.sign(K) / plant.bound, 0.0)
        unit = _unit(plant, K, steep)
        if unit is None:
            out, by_A = _growth(plant.A + plant.B @ K @ plant.C)
            flat = tuple(np.zeros_like(K) for K in gains)
            up = tuple(plant.B.T @ by_A @ plant.C.T if j == i else flat[j] for j in range(len(gains)))
            return Merit(UNSTABLE * (1 + out), tuple(UNSTABLE * s for s in up), np.inf, np.inf, ())
        units.append(unit)
    radius, by_gain, tie = _radius(field, units)
    peaks, out, more = _peak_excess(field, units, radius, tight)
    excess += out
    value = float(np.log(max(radius, 1e-12))) + weight * excess + tie
    for i, unit in enumerate(units):
        if not steep:
            break
        by_entry = by_gain[i] + weight * more[i]
        slopes[i] = weight * slopes[i] + _by_gain(field.plants[i], unit, by_entry)
    return Merit(value, tuple(np.where(p.allowed, s, 0.0) for p, s in zip(field.plants, slopes, strict=True)),
                 radius, excess, peaks)  # fmt: skip


def _unit(plant: Plant, K: Array, steep: bool) -> Guide | None:
    """Peak gains from [takes, disturbances] to [rows of H, actuators], with slopes by each allowed entry of K."""
    actuators, w = plant.B.shape[1], plant.E.shape[1]
    return peak_gain_guide(
        plant.A + plant.B @ K @ plant.C,
        np.concatenate((plant.D + plant.B @ K @ plant.N, plant.E), axis=1),
        np.concatenate((plant.H + plant.Fu @ K @ plant.C, K @ plant.C)),
        np.block([[plant.F + plant.Fu @ K @ plant.N, plant.Fw], [K @ plant.N, np.zeros((actuators, w))]]),
        *(plant.directions if steep else (None,) * 4),
    )


def _by_gain(plant: Plant, unit: Guide, by_entry: Array) -> Array:
    """Derivative by K from the derivative by the unit's peak gains."""
    found = np.zeros(plant.allowed.shape)
    found[plant.allowed] = unit.slopes.reshape(len(unit.slopes), by_entry.size) @ by_entry.ravel()
    return found


def gain_matrix(field: Field, units: list[Guide]) -> Array:
    """M (all offers, all offers) from the peak gains of every unit and the link strengths."""
    return np.concatenate(
        [
            unit.gains[: plant.offers, : plant.D.shape[1]] @ field.strengths[field.takes(i)]
            for i, (plant, unit) in enumerate(zip(field.plants, units, strict=True))
        ]
    )


def _radius(field: Field, units: list[Guide]) -> tuple[float, list[Array], float]:
    """Radius, the derivative of its logarithm (and of the tie-break) by every peak gain, and the tie-break."""
    matrix = gain_matrix(field, units)
    radius, slope = radius_guide(matrix, field.blocks)
    slope = slope / max(radius, 1e-12)
    by_gain, tie = [], 0.0
    for i, (plant, unit) in enumerate(zip(field.plants, units, strict=True)):
        part = np.full_like(unit.gains, 0.0)
        part[: plant.offers, : plant.D.shape[1]] = slope[field.rows(i)] @ field.strengths[field.takes(i)].T
        if not part.any():
            heads = plant.H.shape[0]
            total = float(unit.gains[:heads].sum())
            if total > 0:
                tie += _TIE * float(np.log(total))
                part[:heads] = _TIE / total
        by_gain.append(part)
    return radius, by_gain, tie


def _peak_excess(
    field: Field, units: list[Guide], radius: float, tight: float
) -> tuple[tuple[Array, ...], float, list[Array]]:
    """Peaks over limits, the sum of their saturated excesses, and its derivative by every peak gain."""
    limits = [np.concatenate((p.band, p.limit)) * (1 - tight) for p in field.plants]
    more = [np.zeros_like(unit.gains) for unit in units]
    counted = sum(int(np.isfinite(limit).sum()) for limit in limits)
    if not counted:
        return tuple(np.zeros_like(limit) for limit in limits), 0.0, more
    if radius >= 1 - 1e-9:
        out = tuple(np.where(np.isfinite(limit), np.inf, 0.0) for limit in limits)
        return out, _FLAT * counted, more
    matrix = gain_matrix(field, units)
    inverse = np.linalg.inv(np.eye(len(matrix)) - matrix)
    from_w = np.concatenate(
        [u.gains[: p.offers, p.D.shape[1] :].sum(axis=1) for p, u in zip(field.plants, units, strict=True)]
    )
    z = inverse @ from_w
    total, peaks = 0.0, []
    adjoint = np.zeros(len(z))
    for i, (plant, unit) in enumerate(zip(field.plants, units, strict=True)):
        takes = plant.D.shape[1]
        brought = field.strengths[field.takes(i)] @ z
        peak = unit.gains[:, :takes] @ brought + unit.gains[:, takes:].sum(axis=1)
        ratio = peak / limits[i]
        peaks.append(ratio * (1 - tight))
        for row in np.nonzero(ratio > 1)[0]:
            log = float(np.log(ratio[row]))
            total += log / (1 + log / _FLAT)
            steep = 1 / (1 + log / _FLAT) ** 2 / float(peak[row])
            more[i][row, :takes] += steep * brought
            more[i][row, takes:] += steep
            adjoint += steep * (unit.gains[row, :takes] @ field.strengths[field.takes(i)])
    if adjoint.any():
        back = adjoint @ inverse
        for i, plant in enumerate(field.plants):
            takes = plant.D.shape[1]
            own = back[field.rows(i)]
            more[i][: plant.offers, :takes] += np.outer(own, field.strengths[field.takes(i)] @ z)
            more[i][: plant.offers, takes:] += own[:, None]
    return tuple(peaks), total, more


def _mode_excess(A: Array, field: Field, tight: float) -> tuple[float, Array]:
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


def _growth(A: Array) -> tuple[float, Array]:
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

"""The local problem of one gain set: the smallest size against sizes that the neighbours promise (theory section 5).

Given what arrives at the takes of its units, the gain set makes small the largest of its offers in parts of the sizes
promised for them, exactly by peak gains and not by an ellipsoid, within every limit. With the sizes of the whole
network's Perron vector no gain set can then raise the radius (10), which is why sweeps of such problems descend.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.local.coordinates import Coordinates, coordinates
from synth.local.descent import descend
from synth.local.journal import key_of
from synth.local.merit import UNSTABLE, growth_of, mode_excess_of, slope_by_gain, unit_guide
from synth.local.plant import Plant

Array = NDArray[np.float64]

_FLAT = 10.0
_WEIGHTS = (30.0, 3000.0)


@dataclass(frozen=True, eq=False)
class LocalWork:
    """One gain set with what its units hear.

    ``plants`` carry the set; per plant ``arriving`` (units, takes) and ``promised`` (units, offers) are the sizes whose
    ratio is made small, ``bearing`` (units, takes) what arrives under the declared disturbances, for the limits (None:
    nothing is known yet, limits on peaks are left out). ``starts`` are search vectors, ``steps`` bounds each descent.
    """

    plants: tuple[Plant, ...]
    slowest: float
    fastest: float
    tight: float
    arriving: tuple[Array, ...]
    promised: tuple[Array, ...]
    bearing: tuple[Array, ...] | None
    starts: tuple[Array, ...]
    steps: int

    @property
    def key(self) -> str:
        """Hash of all numbers: equal work is done once."""
        arrays: list[Array] = [*self.arriving, *self.promised, *(self.bearing or ()), *self.starts]
        for p in self.plants:
            arrays += [p.A, p.B, p.C, p.D, p.N, p.E, p.H, p.F, p.Fw, p.Fu, p.allowed.astype(float)]
            arrays += [p.bound, p.limit, p.band]
        return key_of("local", self.slowest, self.fastest, self.tight, self.steps, len(self.bearing or ()), *arrays)


def solve_chunk(works: tuple[LocalWork, ...]) -> list[Array]:
    """The search vector of every piece of work."""
    return [solve_local(work) for work in works]


def solve_local(work: LocalWork) -> Array:
    """The best search vector met from the starts; deterministic, and never worse than the first start."""
    chart = coordinates(work, 0, work.tight)
    best_value, best = np.inf, work.starts[0]
    for weight in _WEIGHTS:
        runs = [
            descend(lambda x, w=weight: _value(work, chart, x, w), start, work.steps, 1e-6)  # type: ignore[misc]
            for start in (work.starts if best_value == np.inf else (best,))
        ]
        run = min(runs, key=lambda r: r.value)
        best_value, best = run.value, run.point
        if _excess(work, chart, best) < 1e-6:
            break
    return best


def _excess(work: LocalWork, chart: Coordinates, point: Array) -> float:
    """How far limits are exceeded at a point: the difference that a weight makes."""
    return _value(work, chart, point, 1.0)[0] - _value(work, chart, point, 0.0)[0]


def _value(work: LocalWork, chart: Coordinates, point: Array, weight: float) -> tuple[float, Array]:
    """log of the largest ratio + weight * excess, and its gradient; infinite where an eigenvalue solver breaks down."""
    nothing = np.zeros_like(point)
    if float(np.abs(point).max(initial=0.0)) > 1e8:
        return np.inf, nothing
    try:
        K, by_point = chart.gains(point)
        value, slope = _by_gains(work, K, weight, chart.placed is None)
    except np.linalg.LinAlgError:
        return np.inf, nothing
    gradient = by_point.reshape(len(by_point), -1) @ slope.ravel()
    if not np.isfinite(value) or not np.all(np.isfinite(gradient)):
        return np.inf, nothing
    return value, np.asarray(gradient)


def _by_gains(work: LocalWork, K: Array, weight: float, free_modes: bool) -> tuple[float, Array]:
    excess, slope = 0.0, np.zeros_like(K)
    top, top_slope = 0.0, np.zeros_like(K)
    for i, plant in enumerate(work.plants):
        closed = plant.A + plant.B @ K @ plant.C
        if free_modes or i:
            out, by_A = mode_excess_of(closed, work, work.tight)
            excess += out
            slope += plant.B.T @ by_A @ plant.C.T
        over = np.where(plant.allowed, np.abs(K) / plant.bound - (1 - work.tight), 0.0)
        excess += float(over[over > 0].sum())
        slope += np.where(over > 0, np.sign(K) / plant.bound, 0.0)
        unit = unit_guide(plant, K, True)
        if unit is None:
            out, by_A = growth_of(closed)
            return UNSTABLE * (1 + out), UNSTABLE * np.where(plant.allowed, plant.B.T @ by_A @ plant.C.T, 0.0)
        takes, offers = plant.D.shape[1], plant.offers
        v = work.arriving[i]
        ratio = (v @ unit.gains[:offers, :takes].T) / work.promised[i]
        if ratio.size and float(ratio.max()) > top:
            u, k = np.unravel_index(int(np.argmax(ratio)), ratio.shape)
            top = float(ratio[u, k])
            by_entry = np.zeros_like(unit.gains)
            by_entry[k, :takes] = v[u] / work.promised[i][u, k]
            top_slope = slope_by_gain(plant, unit, by_entry)
        if work.bearing is not None:
            more, by_entry = _over_limits(plant, unit.gains, work.bearing[i], work.tight)
            excess += more
            slope += slope_by_gain(plant, unit, by_entry)
    height = max(top, 1e-12)
    total = top_slope / height + weight * slope
    return float(np.log(height)) + weight * excess, np.where(work.plants[0].allowed, total, 0.0)


def _over_limits(plant: Plant, gains: Array, v: Array, tight: float) -> tuple[float, Array]:
    """Excess of peaks over bands and actuator limits with what arrives held, and its derivative by the peak gains."""
    takes = v.shape[1]
    limit = np.concatenate((plant.band, plant.limit)) * (1 - tight)
    peaks = v @ gains[:, :takes].T + gains[:, takes:].sum(axis=1)
    total, by_entry = 0.0, np.zeros_like(gains)
    for u, k in zip(*np.nonzero(peaks > limit), strict=True):
        log = float(np.log(peaks[u, k] / limit[k]))
        total += log / (1 + log / _FLAT)
        steep = 1 / (1 + log / _FLAT) ** 2 / float(peaks[u, k])
        by_entry[k, :takes] += steep * v[u]
        by_entry[k, takes:] += steep
    return total, by_entry

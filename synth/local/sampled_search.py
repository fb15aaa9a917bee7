"""The search on sampled units: radius and peaks estimated in doubles, slopes by central differences.

The merit is that of the continuous search (logarithm of the radius, broken limits as an exact penalty) with the sampled
radius and peaks in it; limits on modes and gains, and the continuous peaks, count as they do there.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.base.progress import Listener
from synth.gain.sampled.network import SampledSizes, sampled_estimate, sampled_units
from synth.local.descent import Descent, descend
from synth.local.finish import TIGHT, Chart, Gain, _simplex
from synth.local.merit import UNSTABLE, measure
from synth.local.plant import Field
from synth.network.gains import Gains, gain_set
from synth.network.model import Network

Array = NDArray[np.float64]

_STEP = 1e-5  # of a central difference, in search coordinates of order one
_TRIALS, _KEPT = 10, 2
_STEPS = 20
_FLAT = 10.0  # the excess of one peak saturates here, as in the continuous search
_WEIGHT = 300.0


@dataclass(frozen=True)
class SampledFound:
    """Ends of the search, best first, and what to say about it."""

    chart_points: tuple[Array, ...]
    value: float
    evaluations: int
    words: str = "the sampled radius was made least, as far as the search could tell"


@dataclass(frozen=True)
class Code:
    """A network whose controllers sample, the target, and every limit by (kind, role, signal), in declared units."""

    network: Network
    target: float
    limits: Mapping[tuple[str, str, str], float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """List every limit and band once."""
        found: dict[tuple[str, str, str], float] = {}
        for kind in self.network.kinds:
            for role, signals in (("offer", kind.offers), ("state", kind.states)):
                found |= {(kind.name, role, s.name): float(s.band) for s in signals if s.band is not None}
            found |= {(kind.name, "actuator", a.name): float(a.limit) for a in kind.inputs if a.limit is not None}
        object.__setattr__(self, "limits", found)

    def holds(self, sizes: SampledSizes | None) -> bool:
        """Whether the radius is within the target and every peak strictly within its limit."""
        return (
            sizes is not None
            and sizes.radius <= self.target
            and all(sizes.peaks[key] < limit for key, limit in self.limits.items())
        )

    def at(self, plants: Field, point: Any, tight: float) -> Gain:
        """The scaled gains of a point of the search, modes kept inside limits narrowed by ``tight``."""
        gains, _ = Chart(plants, tight).gains(point)
        return gains

    def gains(self, plants: Field, scaled_gains: Gain) -> Gains:
        """Scaled gains in declared units, as the doubles they are."""
        return Gains(
            tuple(
                gain_set(plant.kind, ExactMatrix.of([[Fraction(float(v)) for v in row] for row in plant.to_user(K)],
                                                    plant.allowed.shape))
                for plant, K in zip(plants.plants, scaled_gains, strict=True)
            )
        )  # fmt: skip

    def excess(self, sizes: SampledSizes, tight: float) -> float:
        """How far peaks lie beyond their limits, in parts of these, each at most _FLAT."""
        over = [sizes.peaks[key] / (limit * (1 - tight)) - 1 for key, limit in self.limits.items()]
        return float(sum(min(max(v, 0.0), _FLAT) for v in over))


class SampledMerit:
    """The merit as a function of the search vector."""

    def __init__(self, code: Code, plants: Field, tight: float = TIGHT) -> None:
        """``tight``: limits are narrowed by this part."""
        self.code, self.plants, self.tight = code, plants, tight
        self.chart = Chart(plants, tight)
        self.evaluations = 0

    def height(self, point: Array) -> float:
        """The merit; at and above UNSTABLE some loop does not settle."""
        self.evaluations += 1
        if float(np.abs(point).max(initial=0.0)) > 1e8:
            return np.inf
        try:
            gains, _ = self.chart.gains(point)
            still = measure(self.plants, gains, _WEIGHT, self.tight, self.chart.free_modes, steep=False)
            if not still.value < UNSTABLE or not np.isfinite(still.excess):
                return 2 * still.value
            units = sampled_units(self.code.network, self.code.gains(self.plants, gains))
            sizes = sampled_estimate(self.code.network, units, grid=3, rest=1e-6)
        except (np.linalg.LinAlgError, ValueError, OverflowError):
            return np.inf
        if sizes is None:
            modes = [np.abs(np.linalg.eigvals(unit.loop.transition())).max(initial=0.0) for unit in units]
            return float(UNSTABLE * max(1.0, *modes))
        broken = still.excess + self.code.excess(sizes, self.tight)
        return float(np.log(max(sizes.radius, 1e-12)) + _WEIGHT * broken)

    def value(self, point: Array) -> tuple[float, Array]:
        """The merit and its slope by central differences."""
        slope = np.zeros_like(point)
        for k in range(len(point)):
            step = np.zeros_like(point)
            step[k] = _STEP
            slope[k] = (self.height(point + step) - self.height(point - step)) / (2 * _STEP)
        here = self.height(point)
        return (here, slope) if np.all(np.isfinite(slope)) else (np.inf, np.zeros_like(point))


def search_sampled(code: Code, plants: Field, start: Gain, seed: int, progress: Listener) -> SampledFound:
    """Make the sampled radius small from scaled gains ``start`` and from placed modes, which ``seed`` >= 0 fixes."""
    merit = SampledMerit(code, plants)
    chart = merit.chart
    rng = np.random.default_rng(seed)
    points = [chart.point(start), *(chart.random(rng, clustered=k % 3 == 2) for k in range(_TRIALS))]
    heights = [merit.height(point) for point in points]
    order = np.argsort(heights, kind="stable")[:_KEPT]
    runs = [descend(merit.value, points[int(k)], _STEPS, 1e-5) for k in order if np.isfinite(heights[int(k)])]
    if not runs:
        return SampledFound((), np.inf, merit.evaluations)
    runs.sort(key=lambda run: run.value)
    best: Descent = _simplex(merit.height, runs[0], 20 + 10 * chart.size)
    runs = [best, *runs]
    progress(f"sampled search: {merit.evaluations} evaluations, merit {best.value:.6g}")
    return SampledFound(tuple(run.point for run in runs), best.value, merit.evaluations)

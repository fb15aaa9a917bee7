"""The search on exact peak gains: many starts, nonsmooth descent on the best, polish (theory (16)).

Deterministic for a given seed. Work is counted in evaluations of the merit, not in seconds.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.base.progress import Listener, silent
from synth.local.coordinates import Coordinates, coordinates
from synth.local.descent import Descent, descend
from synth.local.merit import Merit, measure
from synth.local.plant import Field
from synth.local.starts import lmi_starts, random_start, riccati_starts

Array = NDArray[np.float64]
Gain = tuple[Array, ...]

TIGHT = 2e-4  # limits are narrowed by this much while searching, so that the answer lies inside them
_TRIALS = 40  # random starts that are looked at where modes cannot be placed
_KEPT_STARTS = 8
_WEIGHTS = (30.0, 300.0, 3000.0, 30000.0)


@dataclass(frozen=True)
class Found:
    """Scaled gains at the end of a search, their merit (limits as narrowed), and what led there."""

    gains: Gain
    point: Array
    merit: Merit
    evaluations: int
    history: tuple[str, ...]


class Chart:
    """The search vector of all gain groups together, and the merit as a function of it."""

    def __init__(self, field: Field, tight: float) -> None:
        """Choose coordinates for every gain group; limits narrowed by ``tight``.

        A group's search vector is that of its first plant, so only the modes of that one keep to their region by
        themselves.
        """
        self.field, self.tight = field, tight
        self.parts: tuple[Coordinates, ...] = tuple(coordinates(field, group[0], tight) for group in field.groups)
        self.ends = np.cumsum([0, *(part.size for part in self.parts)])
        self.part_of = {i: k for k, group in enumerate(field.groups) for i in group}
        placed = {group[0] for group, part in zip(field.groups, self.parts, strict=True) if part.placed is not None}
        self.free_modes = tuple(i not in placed for i in range(len(field.plants)))
        self.evaluations = 0

    @property
    def size(self) -> int:
        """Length of the search vector."""
        return int(self.ends[-1])

    def gains(self, point: Array) -> tuple[Gain, list[Array]]:
        """Scaled gains and their derivatives, plant by plant."""
        pairs = [part.gains(point[self._slice(k)]) for k, part in enumerate(self.parts)]
        spread = [pairs[self.part_of[i]] for i in range(len(self.field.plants))]
        return tuple(K for K, _ in spread), [J for _, J in spread]

    def point(self, gains: Sequence[Array]) -> Array:
        """The search vector closest to given gains (of a group, to those of its first plant)."""
        first = [gains[group[0]] for group in self.field.groups]
        return np.concatenate([part.point(K) for part, K in zip(self.parts, first, strict=True)] or [np.zeros(0)])

    def value(self, point: Array, weight: float) -> tuple[float, Array]:
        """Merit and its gradient; a point where the map or an eigenvalue solver breaks down counts as infinite."""
        self.evaluations += 1
        if float(np.abs(point).max(initial=0.0)) > 1e8:
            return np.inf, np.zeros_like(point)
        try:
            gains, slopes = self.gains(point)
            merit = measure(self.field, gains, weight, self.tight, self.free_modes)
        except np.linalg.LinAlgError:
            return np.inf, np.zeros_like(point)
        gradient = np.zeros(self.size)
        for i, (J, s) in enumerate(zip(slopes, merit.slopes, strict=True)):
            gradient[self._slice(self.part_of[i])] += J.reshape(len(J), -1) @ s.ravel()
        if not np.isfinite(merit.value) or not np.all(np.isfinite(gradient)):
            return np.inf, np.zeros_like(point)
        return merit.value, gradient

    def height(self, point: Array, weight: float) -> float:
        """The merit alone, for methods that use no slope."""
        self.evaluations += 1
        if float(np.abs(point).max(initial=0.0)) > 1e8:
            return np.inf
        try:
            own = [part.gains_only(point[self._slice(k)]) for k, part in enumerate(self.parts)]
            gains = tuple(own[self.part_of[i]] for i in range(len(self.field.plants)))
            return measure(self.field, gains, weight, self.tight, self.free_modes, steep=False).value
        except np.linalg.LinAlgError:
            return np.inf

    @property
    def all_placed(self) -> bool:
        """Whether every gain group is searched in the coordinates of its modes."""
        return all(part.placed is not None for part in self.parts)

    def random(self, rng: np.random.Generator, clustered: bool) -> Array:
        """A start with placed modes for the first plant of every group."""
        return np.concatenate([random_start(part, rng, clustered) for part in self.parts] or [np.zeros(0)])

    def _slice(self, k: int) -> slice:
        return slice(int(self.ends[k]), int(self.ends[k + 1]))


def search(
    field: Field,
    seed: int = 0,
    starts: int | None = None,
    warm: Sequence[Gain] = (),
    quick: bool = False,
    enough: float | None = None,
    tight: float = TIGHT,
    progress: Listener = silent,
) -> Found:
    """Minimise the radius over all allowed gains.

    ``starts`` number of placed starts besides the cell problem's and the ``warm`` ones (absent: 8 and two per
    coordinate, at most 32); ``quick`` leaves out the cell problem and the long polish; the
    search ends as soon as a descent keeps every limit at a radius below ``enough``.
    """
    chart = Chart(field, tight)
    if chart.size == 0:
        gains, _ = chart.gains(np.zeros(0))
        return Found(gains, np.zeros(0), measure(field, gains, tight=tight), 1, ("no gain may be chosen",))
    rng = np.random.default_rng(seed)
    points = [chart.point(gains) for gains in warm]
    history: list[str] = []
    if not quick:
        from_cells = lmi_starts(field)
        history.append(f"cell problem: {len(from_cells)} usable answers")
        if chart.all_placed:
            points.extend(chart.point(gains) for gains in from_cells)
        else:
            points.extend(_promising(chart, [*from_cells, *riccati_starts(field)], rng))
    count = starts if starts is not None else min(32, 8 + 2 * chart.size)
    points.extend(chart.random(rng, clustered=k % 3 == 2) for k in range(count))
    runs = _race(chart, points, 15 if quick else 40, 3 if quick else 5, enough)
    best = runs[0] if _suffices(chart, runs[0], enough) else _polish(chart, runs, quick, history)
    progress(f"search: {chart.evaluations} evaluations, merit {best.value:.6g}")
    gains, _ = chart.gains(best.point)
    merit = measure(field, gains, tight=tight, mode_excess=chart.free_modes)
    history.append(f"search: {len(points)} starts, {chart.evaluations} evaluations, radius {merit.radius:.6g}")
    return Found(gains, best.point, merit, chart.evaluations, tuple(history))


def _promising(chart: Chart, made: Sequence[Gain], rng: np.random.Generator) -> list[Array]:
    """The best of many starts by their merit alone: where modes cannot be placed, most starts lead nowhere."""
    points = [chart.point(gains) for gains in made]
    points.extend(chart.random(rng, clustered=k % 3 == 2) for k in range(_TRIALS))
    heights = [chart.height(point, _WEIGHTS[0]) for point in points]
    order = np.argsort(heights, kind="stable")[:_KEPT_STARTS]
    return [points[int(k)] for k in order]


def _race(chart: Chart, points: list[Array], steps: int, agree: int, enough: float | None) -> list[Descent]:
    """A short descent from every start, best first; stops early once ``agree`` starts share the lowest value."""
    runs: list[Descent] = []
    for point in points:
        runs.append(descend(lambda x: chart.value(x, _WEIGHTS[0]), point, steps))
        runs.sort(key=lambda run: run.value)
        if (len(runs) > agree and runs[agree - 1].value - runs[0].value < 1e-4) or _suffices(chart, runs[0], enough):
            break
    return runs


def _suffices(chart: Chart, run: Descent, enough: float | None) -> bool:
    """Whether a run keeps every limit at a radius below ``enough``."""
    if enough is None or not run.value < np.log(enough) + 1e-3:
        return False
    gains, _ = chart.gains(run.point)
    merit = measure(chart.field, gains, _WEIGHTS[0], chart.tight, chart.free_modes)
    return merit.excess < 1e-6 and merit.radius <= enough


def _polish(chart: Chart, runs: list[Descent], quick: bool, history: list[str]) -> Descent:
    """Long descents from the best few, then simplex and descent in turn; heavier penalties while a limit is broken."""
    best = runs[0]
    left = np.inf
    for weight in _WEIGHTS[1:2] if quick else _WEIGHTS:

        def objective(x: Array, weight: float = weight) -> tuple[float, Array]:
            return chart.value(x, weight)

        def height(x: Array, weight: float = weight) -> float:
            return chart.height(x, weight)

        pool = [run.point for run in runs[: 1 if quick else 4]] if best is runs[0] else [best.point]
        long = [descend(objective, point, 50 if quick else 200) for point in pool]
        best = min(long, key=lambda run: run.value)
        for _ in range(0 if quick else 3):
            before = best.value
            best = _simplex(height, best, 120 + 30 * chart.size)
            again = descend(objective, best.point, 100)
            best = again if again.value < best.value else best
            if before - best.value < 1e-5:
                break
        gains, _ = chart.gains(best.point)
        excess = measure(chart.field, gains, weight, chart.tight, chart.free_modes).excess
        if excess < 1e-6:
            break
        history.append(f"penalty weight {weight:g}: limits still exceeded by {excess:.3g}")
        if excess > 0.8 * left:
            break  # a heavier penalty no longer helps: the limits cannot all be met
        left = excess
    return best


def _simplex(height: Callable[[Array], float], start: Descent, budget: int) -> Descent:
    """Nelder-Mead around a point: it needs no slope, which a kink does not have."""
    from scipy.optimize import minimize

    size = len(start.point)
    simplex = np.concatenate((start.point[None], start.point + 0.03 * np.eye(size)))
    answer = minimize(
        height,
        start.point,
        method="Nelder-Mead",
        options={"initial_simplex": simplex, "maxfev": budget, "xatol": 1e-7, "fatol": 1e-9, "adaptive": size > 3},
    )
    if answer.fun < start.value:
        return Descent(np.asarray(answer.x), float(answer.fun), start.evaluations + int(answer.nfev))
    return start

"""Descent for functions that are smooth almost everywhere: BFGS with a weak Wolfe line search.

Algorithm: Lewis and Overton, "Nonsmooth optimization via quasi-Newton methods", Mathematical Programming 141 (2013),
algorithms 2.1 and 2.6: bisection for the Armijo and weak Wolfe conditions, no smoothness assumed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Objective = Callable[[Array], tuple[float, Array]]

_ARMIJO = 1e-4
_WOLFE = 0.5


@dataclass(frozen=True)
class Descent:
    """Where a descent ended: ``point``, ``value``, and how many evaluations it took."""

    point: Array
    value: float
    evaluations: int


def descend(objective: Objective, start: Array, steps: int = 200, gain: float = 1e-9) -> Descent:
    """Lower ``objective`` (value, gradient) from ``start`` by at most ``steps`` BFGS steps.

    Stops when ten steps together gain less than ``gain`` or no step satisfying the conditions is found. The returned
    value is never above the one at the start. A value that is not finite counts as infinitely high.
    """
    point = np.array(start, dtype=float)
    value, slope = objective(point)
    count = 1
    inverse = np.eye(len(point))
    fresh = True
    history = [value]
    for _ in range(steps):
        direction = -inverse @ slope
        downhill = float(direction @ slope)
        if not downhill < 0 or not np.isfinite(downhill):
            if fresh:
                break
            inverse, fresh = np.eye(len(point)), True
            continue
        if fresh:
            direction = direction / max(1.0, float(np.linalg.norm(direction)) / 0.3)
            downhill = float(direction @ slope)
        new, new_value, new_slope, used = _weak_wolfe(objective, point, value, direction, downhill)
        count += used
        if not new_value < value:
            if fresh:
                break
            inverse, fresh = np.eye(len(point)), True
            continue
        moved, turned = new - point, new_slope - slope
        curve = float(moved @ turned)
        if curve > 1e-14 * float(np.linalg.norm(moved) * np.linalg.norm(turned)):
            if fresh:
                inverse = np.eye(len(point)) * (curve / float(turned @ turned))
            side = np.eye(len(point)) - np.outer(moved, turned) / curve
            inverse = side @ inverse @ side.T + np.outer(moved, moved) / curve
            fresh = False
        point, value, slope = new, new_value, new_slope
        history.append(value)
        if len(history) > 10 and history[-11] - value < gain:
            break
    return Descent(point, value, count)


def _weak_wolfe(
    objective: Objective, point: Array, value: float, direction: Array, downhill: float
) -> tuple[Array, float, Array, int]:
    """Bisection line search; the best point met is returned when forty trials do not satisfy both conditions."""
    low, high, step = 0.0, np.inf, 1.0
    best = (point, value, np.zeros_like(point))
    trials = 0
    for trials in range(1, 41):
        trial = point + step * direction
        height, slope = objective(trial)
        if not np.isfinite(height) or height > value + _ARMIJO * step * downhill:
            high = step
        else:
            if height < best[1]:
                best = (trial, height, slope)
            if float(slope @ direction) >= _WOLFE * downhill:
                return trial, height, slope, trials
            low = step
        step = 0.5 * (low + high) if np.isfinite(high) else 2.0 * step
        if high - low < 1e-12 * max(1.0, step):
            break
    return (*best, trials)

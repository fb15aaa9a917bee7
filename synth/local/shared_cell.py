"""The cell problem of several kinds that carry one gain: one Q and one Y for all (theory (18)).

Each kind keeps its own tau, because each has its own disturbances; what is minimised is the largest size of any.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import cvxpy as cp
import numpy as np
from numpy.typing import NDArray

from synth.local.cell import GRID, CellData, broken, outside

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SharedAnswer:
    """One state feedback K for all kinds; ``sizes`` holds, kind by kind, sqrt(H_k Q H_k')."""

    K: Array
    Q: Array
    decay: float
    size: float
    sizes: tuple[Array, ...]


def best_shared(units: Sequence[CellData], grid: tuple[float, ...] = GRID[::2]) -> SharedAnswer | None:
    """The smallest common size over the grid of decay rates; None if no rate gives a usable answer.

    ``units`` must have equal numbers of states and inputs and be scaled alike (the plants of one field are). Every
    answer is rechecked for every kind.
    """
    answers = [_solve(units, decay) for decay in grid if decay >= max(unit.slowest for unit in units)]
    return min((a for a in answers if a is not None), key=lambda answer: answer.size, default=None)


def _solve(units: Sequence[CellData], decay: float) -> SharedAnswer | None:
    n, inputs = units[0].B.shape
    Q, Y, size2 = cp.Variable((n, n), symmetric=True), cp.Variable((inputs, n)), cp.Variable()
    taus = [cp.Variable(outside(unit).shape[1], nonneg=True) for unit in units]
    rules: list[cp.Constraint] = [Q >> 1e-9 * np.eye(n)]
    for unit, tau in zip(units, taus, strict=True):
        W = outside(unit)
        loop = unit.A @ Q + unit.B @ Y
        both = loop + loop.T
        rules.append(cp.sum(tau) <= 2 * decay)
        block = both + 2 * decay * Q
        rules.append((cp.bmat([[block, W], [W.T, -cp.diag(tau)]]) if W.shape[1] else block) << 0)
        rules.append(cp.bmat([[unit.fastest * Q, loop], [loop.T, unit.fastest * Q]]) >> 0)
        rules.append(both + 2 * unit.slowest * Q << 0)
        for q, budget in enumerate(unit.budget):
            if np.isfinite(budget):
                row = cp.reshape(Y[q], (1, n), order="C")
                rules.append(cp.bmat([[np.array([[budget**2]]), row], [row.T, Q]]) >> 0)
        rules.extend(h @ Q @ h / c**2 <= size2 for h, c in zip(unit.H, unit.size, strict=True))
    problem = cp.Problem(cp.Minimize(size2), rules)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # what is inaccurate is refused by the recheck
            problem.solve(solver=cp.CLARABEL)
    except (cp.SolverError, ValueError, ArithmeticError):
        return None
    if problem.status != cp.OPTIMAL or Q.value is None:
        return None
    found = 0.5 * (Q.value + Q.value.T)
    for unit, tau in zip(units, taus, strict=True):
        takes = unit.D.shape[1]
        if broken(unit, decay, found, Y.value, tau.value[:takes], tau.value[takes:]):
            return None
    sizes = tuple(np.sqrt(np.maximum(np.einsum("ki,ij,kj->k", u.H, found, u.H), 0.0)) for u in units)
    size = max((float((s / u.size).max()) for s, u in zip(sizes, units, strict=True) if len(s)), default=0.0)
    return SharedAnswer(np.asarray(np.linalg.solve(found, Y.value.T).T), found, decay, size, sizes)

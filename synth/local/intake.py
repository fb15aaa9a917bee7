"""What arrives at the takes of every unit, and the operator and its radius in floats: guides for a search, no claims.

Units with one specification share a plant; ``Intake`` keeps, plant by plant, which rows its units offer and what
reaches their takes. Of rays that are alternatives (links that may weaken, rules) only the largest counts, so what
arrives is a maximum of sums; the radius is then found by policies: choose the largest ray everywhere, solve, choose
again. Gradients belong to the choice that is active (theory (15)).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from synth.gain.guide import connected_blocks

Array = NDArray[np.float64]
Places = NDArray[np.intp]
Matrix = Any  # a dense array, or a sparse one where there are many rows

_DENSE = 120  # up to so many rows matrices are kept dense
_POLICIES = 20
_SLIVER = 1e-6  # distance of the resolvent from the radius, relative
_CHANGE = 1e-12


@dataclass(frozen=True, eq=False)
class Intake:
    """Rays into the takes of all units, in scaled signals.

    ``rows[i]`` (units of plant i, offers) and ``takes[i]`` (units, takes) number the operator's rows and the takes;
    ray r brings ``factor[r]`` times row ``source[r]`` to take ``take[r]``. Rays with equal ``choice`` >= 0 are
    alternatives of one take.
    """

    rows: tuple[Places, ...]
    takes: tuple[Places, ...]
    take: Places
    source: Places
    factor: Array
    choice: Places

    @cached_property
    def size(self) -> int:
        """Number of rows."""
        return sum(part.size for part in self.rows)

    @cached_property
    def width(self) -> int:
        """Number of takes."""
        return sum(part.size for part in self.takes)

    @cached_property
    def alternatives(self) -> bool:
        """Whether some rays are alternatives."""
        return bool(self.choice.size and self.choice.max() >= 0)

    @cached_property
    def _together(self) -> Places:
        """Group number of every ray: a ray alone is a group of its own."""
        alone = self.choice < 0
        found = np.where(alone, 0, self.choice)
        found[alone] = (int(self.choice.max(initial=-1)) + 1) + np.arange(int(alone.sum()))
        return np.unique(found, return_inverse=True)[1].reshape(-1)

    def chosen(self, z: Array) -> Places:
        """The rays that count at sizes ``z`` (rows,): all that are alone, and the largest of each choice."""
        if not self.alternatives:
            return np.arange(self.take.size)
        value = self.factor * z[self.source]
        # Among equals the strongest link counts, so that sizes of zero do not hide a link.
        order = np.lexsort((-np.arange(value.size), self.factor, value, self._together))
        last = np.append(self._together[order][1:] != self._together[order][:-1], True)
        return np.sort(order[last])

    @cached_property
    def small(self) -> bool:
        """Whether its matrices are kept dense: sparse ones only pay where there are many rows."""
        return self.size <= _DENSE and self.width <= 2 * _DENSE

    def matrix(self, chosen: Places) -> Matrix:
        """(takes, rows): what each row contributes to each take for the rays ``chosen``."""
        if not self.alternatives:
            return self._whole
        return self._matrix(chosen)

    @cached_property
    def _whole(self) -> Matrix:
        return self._matrix(np.arange(self.take.size))

    def _matrix(self, chosen: Places) -> Matrix:
        ends = (self.take[chosen], self.source[chosen])
        if self.small:
            found = np.zeros((self.width, self.size))
            np.add.at(found, ends, self.factor[chosen])
            return found
        return sparse.coo_array((self.factor[chosen], ends), shape=(self.width, self.size)).tocsr()

    @cached_property
    def patterns(self) -> dict[bytes, list[Places]]:
        """Classes by the pattern of a small matrix, kept because gains seldom change which entries are zero."""
        return {}

    def brought(self, z: Array) -> Array:
        """What arrives at every take (takes,) from sizes ``z`` (rows,), at most."""
        chosen = self.chosen(z)
        weights = self.factor[chosen] * z[self.source[chosen]]
        found: Array = np.bincount(self.take[chosen], weights=weights, minlength=self.width).astype(np.float64)
        return found


@dataclass(frozen=True, eq=False)
class Loop:
    """The operator of given peak gains: rows from takes (``heads``), takes from rows by the intake's rays."""

    intake: Intake
    heads: Matrix

    @staticmethod
    def of(intake: Intake, peaks: Sequence[Array]) -> Loop:
        """``peaks[i]`` (offers, takes) are the peak gains of plant i, one scaled signal per another."""
        if intake.small:
            dense = np.zeros((intake.size, intake.width))
            for rows, takes, peak in zip(intake.rows, intake.takes, peaks, strict=True):
                dense[rows[:, :, None], takes[:, None, :]] = peak
            return Loop(intake, dense)
        down, across, value = [], [], []
        for rows, takes, peak in zip(intake.rows, intake.takes, peaks, strict=True):
            shape = (len(rows), rows.shape[1], takes.shape[1])
            down.append(np.broadcast_to(rows[:, :, None], shape).reshape(-1))
            across.append(np.broadcast_to(takes[:, None, :], shape).reshape(-1))
            value.append(np.broadcast_to(peak[None], shape).reshape(-1))
        ends = (np.concatenate(down), np.concatenate(across))
        return Loop(intake, sparse.coo_array((np.concatenate(value), ends), (intake.size, intake.width)).tocsr())

    def matrix(self, chosen: Places) -> Matrix:
        """(rows, rows): the operator for the rays ``chosen``."""
        found = self.heads @ self.intake.matrix(chosen)
        if isinstance(found, np.ndarray):
            return found
        found = found.tocsr()
        found.eliminate_zeros()
        return found

    def radius(self) -> tuple[float, Array, Array, Places]:
        """Radius, and at the active choice left and right vectors (left'right = 1 on the leading class) and the rays.

        Method: policies, with the resolvent sum of (M/t)^k 1, t just above the radius, as the sizes to choose at.
        """
        chosen = self.intake.chosen(np.ones(self.intake.size))
        best = _leading(self.matrix(chosen), self.intake.patterns)
        if not self.intake.alternatives or not best[0] >= 0:
            return (*best, chosen)
        for _ in range(_POLICIES):
            matrix = self.matrix(chosen)
            shift = max(best[0], 1e-300) * (1 + _SLIVER)
            sizes = _solved(matrix / shift, np.ones(self.intake.size))
            again = self.intake.chosen(np.abs(sizes))
            if np.array_equal(again, chosen):
                break
            found = _leading(self.matrix(again), self.intake.patterns)
            if found[0] <= best[0] * (1 + _CHANGE):
                break
            chosen, best = again, found
        return (*best, chosen)

    def sizes(self, forced: Array) -> tuple[Array, Places]:
        """The least z with z = G(z) + ``forced`` (rows,) for a radius below one, and the rays that are active there."""
        chosen = self.intake.chosen(np.ones(self.intake.size))
        z = _solved(self.matrix(chosen), forced)
        for _ in range(_POLICIES if self.intake.alternatives else 0):
            again = self.intake.chosen(z)
            if np.array_equal(again, chosen):
                break
            chosen, before = again, z
            z = _solved(self.matrix(chosen), forced)
            if not np.any(z > before * (1 + _CHANGE) + 1e-300):
                break
        return z, chosen

    def forward(self, chosen: Places, target: float) -> Array:
        """sum (M/target)^k 1 for the rays ``chosen`` and a target above their radius; the largest entry is one."""
        found = np.abs(_solved(self.matrix(chosen) / target, np.ones(self.intake.size)))
        return np.asarray(found / found.max())

    def back(self, chosen: Places, slope: Array) -> Array:
        """(I - M')^{-1} ``slope`` for the rays ``chosen``: the adjoint of ``sizes``."""
        return _solved(self.matrix(chosen).T, slope)


def _solved(matrix: Matrix, right: Array) -> Array:
    """(I - matrix)^{-1} right."""
    size = len(right)
    if isinstance(matrix, np.ndarray):
        return np.asarray(np.linalg.solve(np.eye(size) - matrix, right))
    return np.asarray(sparse.linalg.spsolve((sparse.eye_array(size, format="csc") - matrix).tocsc(), right))


def _leading(matrix: Matrix, patterns: dict[bytes, list[Places]]) -> tuple[float, Array, Array]:
    """Largest Perron root over the classes of a non-negative matrix, with its left and right vectors."""
    left, right = np.zeros(matrix.shape[0]), np.zeros(matrix.shape[0])
    best, where = 0.0, None
    for block in _classes(matrix, patterns):
        value = float(matrix[block[0], block[0]]) if block.size == 1 else _root(_part(matrix, block))[0]
        if where is None or value > best:
            best, where = value, block
    if where is None:
        return 0.0, left, right
    if where.size == 1:
        left[where], right[where] = 1.0, 1.0
        return best, left, right
    part = _part(matrix, where)
    ahead, behind = _root(part)[1], _root(part.T if isinstance(part, np.ndarray) else part.T.tocsr())[1]
    left[where], right[where] = behind / max(float(behind @ ahead), 1e-300), ahead
    return best, left, right


def _part(matrix: Matrix, block: Places) -> Matrix:
    if block.size == matrix.shape[0]:
        return matrix
    return matrix[np.ix_(block, block)] if isinstance(matrix, np.ndarray) else matrix[block][:, block]


def _classes(matrix: Matrix, patterns: dict[bytes, list[Places]]) -> list[Places]:
    """The strongly connected classes that hold a loop, each as sorted rows."""
    if isinstance(matrix, np.ndarray):
        pattern = matrix > 0
        key = pattern.tobytes()
        if key not in patterns:
            if len(patterns) > 1000:
                patterns.clear()
            patterns[key] = list(connected_blocks(pattern))
        return patterns[key]
    count, label = sparse.csgraph.connected_components(matrix, directed=True, connection="strong")
    sizes = np.bincount(label, minlength=count)
    looped = np.zeros(count, dtype=bool)
    looped[label[matrix.diagonal() > 0]] = True
    order = np.argsort(label, kind="stable")
    ends = np.concatenate(([0], np.cumsum(sizes)))
    wanted = np.flatnonzero((sizes > 1) | looped)
    return [np.sort(order[ends[k] : ends[k + 1]]) for k in wanted.tolist()]


def _root(matrix: Matrix) -> tuple[float, Array]:
    """Perron root and vector (largest entry one) of one class."""
    size = matrix.shape[0]
    if not isinstance(matrix, np.ndarray) and size > _DENSE:
        try:
            values, vectors = sparse.linalg.eigs(matrix, k=1, which="LR", v0=np.ones(size), tol=1e-10)
            vector = np.abs(vectors[:, 0].real)
            if np.isfinite(values[0]) and vector.max() > 0:
                return float(values[0].real), vector / vector.max()
        except (sparse.linalg.ArpackError, ArithmeticError):
            pass
    values, vectors = np.linalg.eig(matrix if isinstance(matrix, np.ndarray) else matrix.toarray())
    k = int(np.argmax(values.real))
    vector = np.abs(vectors[:, k].real)
    return float(values[k].real), vector / max(float(vector.max()), 1e-300)

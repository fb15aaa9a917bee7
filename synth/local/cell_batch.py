"""Many cell problems of one shape at once: a barrier method in arrays, a unit per slice (theory section 5).

The inequalities are those of ``synth.local.cell`` for decay rates no smaller than ``slowest`` (the bound on the slowest
mode then follows from the first one). Every unit starts strictly inside, at gains that put all modes into one point
(Ackermann 1972): with M = A + BK + cI nilpotent, Q = sum M^k M'^k / rho^2k satisfies |M| < r in the norm of Q^{-1}, so
the disc of centre -c and radius r, which lies inside both regions, holds the closed unit; Q is then made large enough
for the disturbances. Only the actuator budgets may fail there, and a slack on them is driven below zero first. Along a
Newton step the barrier is known in full from eigenvalues, so the best length is found without trials. Nothing is
accepted that ``answer_of`` does not find to hold; where the method breaks down, ``solve_cells`` asks a solver.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.local.cell import GRID, CellAnswer, CellData, answer_of, best_cell, outside

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

CHUNK = 256  # units that are solved side by side
_ROUGH, _FINE = 1e-2, 1e-6  # relative gap while decay rates are compared, and for the best of them
_STEPS = 150  # Newton steps before a unit counts as failed
_PUSH = 12.0  # factor of the weight between centrings
_CENTRED = 0.6  # a decrement below this counts as centred


@dataclass(frozen=True)
class Outcome:
    """``answer`` that was rechecked, or None; ``infeasible`` where every decay rate of the grid was found to be so."""

    answer: CellAnswer | None
    infeasible: bool


def solve_cells(cells: Sequence[CellData], grid: Sequence[float] = GRID) -> list[Outcome]:
    """The smallest size of every unit over the decay rates of the grid, in order.

    Units of other shapes may be mixed. Raises InputError where a budget is used up by what neighbours send.
    """
    found: dict[int, Outcome] = {}
    shapes: dict[tuple[object, ...], list[int]] = {}
    for i, cell in enumerate(cells):
        limited = tuple(bool(v) for v in np.isfinite(cell.budget))
        shape = (cell.B.shape, outside(cell).shape[1], len(cell.H), limited)
        shapes.setdefault(shape, []).append(i)
    for members in shapes.values():
        for a in range(0, len(members), CHUNK):
            part = members[a : a + CHUNK]
            found |= dict(zip(part, _chunk([cells[i] for i in part], grid), strict=True))
    return [found[i] for i in range(len(cells))]


def quick_cells(cells: Sequence[CellData], grid: Sequence[float] = GRID[2::3]) -> list[Array | None]:
    """State feedback K of every cell at the best of a few decay rates, roughly solved: starts for a search, no claims.

    None where the method has no answer; no solver is asked.
    """
    found: list[Array | None] = [None] * len(cells)
    shapes: dict[tuple[object, ...], list[int]] = {}
    for i, cell in enumerate(cells):
        limited = tuple(bool(v) for v in np.isfinite(cell.budget))
        shapes.setdefault((cell.B.shape, outside(cell).shape[1], len(cell.H), limited), []).append(i)
    for members in shapes.values():
        for a in range(0, len(members), CHUNK):
            part = members[a : a + CHUNK]
            if not cells[part[0]].B.size:
                continue
            batch, best = _Batch([cells[i] for i in part]), np.full(len(part), np.inf)
            for decay in grid:
                rough = batch.run(decay, _ROUGH)
                for k in np.flatnonzero(rough.solved & (rough.size < best)).tolist():
                    best[k] = rough.size[k]
                    found[part[k]] = np.linalg.solve(rough.Q[k], rough.Y[k].T).T
    return found


def _chunk(cells: Sequence[CellData], grid: Sequence[float]) -> list[Outcome]:
    n, inputs = cells[0].B.shape
    best: list[tuple[float, float]] = [(np.inf, 0.0)] * len(cells)
    hopeless = np.ones(len(cells), dtype=bool)
    if n and inputs:
        batch = _Batch(cells)
        for decay in grid:
            rough = batch.run(decay, _ROUGH)
            for i in range(len(cells)):
                if rough.solved[i] and rough.size[i] < best[i][0]:
                    best[i] = (float(rough.size[i]), decay)
            hopeless &= rough.infeasible
    answers: list[CellAnswer | None] = [None] * len(cells)
    for decay in dict.fromkeys(rate for size, rate in best if np.isfinite(size)):
        mine = [i for i, (size, rate) in enumerate(best) if np.isfinite(size) and rate == decay]
        part = [cells[i] for i in mine]
        fine = _Batch(part).run(decay, _FINE)
        for k, i in enumerate(mine):
            if fine.solved[k]:
                takes = cells[i].D.shape[1]
                tau = fine.tau[k]
                answers[i] = answer_of(cells[i], decay, fine.Q[k], fine.Y[k], tau[:takes], tau[takes:])
    outcomes = []
    for i, cell in enumerate(cells):
        if answers[i] is None and not (n and inputs and hopeless[i]):
            answers[i] = best_cell(cell, tuple(grid))
        outcomes.append(Outcome(answers[i], answers[i] is None and bool(hopeless[i])))
    return outcomes


@dataclass(frozen=True)
class _Found:
    solved: Flags
    infeasible: Flags
    size: Array
    Q: Array
    Y: Array
    tau: Array


class _Batch:
    """The numbers of units of one shape, with what enters from outside scaled to one."""

    def __init__(self, cells: Sequence[CellData]) -> None:
        self.A, self.B = (np.stack([getattr(c, name) for c in cells]) for name in ("A", "B"))
        W = np.stack([outside(c) for c in cells])
        level = np.abs(W).max(axis=(1, 2), initial=0.0)
        self.level = np.where(level > 0, level, 1.0)
        self.W = W / self.level[:, None, None]
        heads = np.stack([c.H / c.size[:, None] for c in cells])
        self.budget = np.stack([c.budget for c in cells]) / self.level[:, None]
        self.heads, self.fast = heads, np.array([c.fastest for c in cells])
        self.slow = np.array([c.slowest for c in cells])
        count, n, inputs = self.B.shape
        self.count, self.n, self.inputs, self.width = count, n, inputs, W.shape[2]
        self.limited = [q for q in range(inputs) if np.isfinite(self.budget[0, q])]
        self.pairs = [(i, j) for i in range(n) for j in range(i, n)]
        self.size = len(self.pairs) + inputs * n + self.width + 2  # ..., largest size squared, slack of the budgets

    def run(self, decay: float, gap: float) -> _Found:
        """Minimise the size at one decay rate to a relative gap."""
        x, blocks, lines, good = self._start(decay)
        wanted = good & (decay >= self.slow)
        infeasible = decay < self.slow
        with np.errstate(all="ignore"):
            if self.limited:
                x, fits, none = self._descend(x, blocks, lines[:, :1], wanted, -1, gap)
                infeasible |= none
                wanted &= fits
                x[wanted, -1] = 0.0
                x[:, -2] = 2 * self._reach(self._parts(x)[0])
            x, solved, _ = self._descend(x, blocks, lines, wanted, -2, gap)
        Q, Y, tau = self._parts(x)
        size = np.sqrt(np.maximum(x[:, -2], 0.0)) * self.level
        square = self.level[:, None, None] ** 2
        return _Found(solved, infeasible, size, Q * square, Y * square, tau)

    def _parts(self, x: Array) -> tuple[Array, Array, Array]:
        Q = np.zeros((len(x), self.n, self.n))
        for k, (i, j) in enumerate(self.pairs):
            Q[:, i, j] = Q[:, j, i] = x[:, k]
        start = len(self.pairs)
        Y = x[:, start : start + self.inputs * self.n].reshape(-1, self.inputs, self.n)
        return Q, Y, x[:, start + self.inputs * self.n : -2]

    def _reach(self, Q: Array) -> Array:
        """The largest squared size of every unit."""
        return np.asarray(np.einsum("bki,bij,bkj->bk", self.heads, Q, self.heads).max(axis=1, initial=1e-300))

    def _start(self, decay: float) -> tuple[Array, list[Array], Array, Flags]:
        """A strictly interior point (slack included), blocks and lines as affine maps, and where there is one."""
        n, count = self.n, self.count
        with np.errstate(all="ignore"):
            low = np.maximum(decay, self.slow)
            centre, radius = 0.5 * (self.fast + low), 0.5 * (self.fast - low)
            K = _gathered(self.A, self.B, centre)
            M = self.A + self.B @ K + centre[:, None, None] * np.eye(n)
            rho2 = (0.9 * radius) ** 2
            Q, power = np.tile(np.eye(n), (count, 1, 1)), np.tile(np.eye(n), (count, 1, 1))
            for k in range(1, n):
                power = M @ power
                Q = Q + power @ power.transpose(0, 2, 1) / rho2[:, None, None] ** k
            loop = (self.A + self.B @ K) @ Q
            left = -(loop + loop.transpose(0, 2, 1)) - 2 * decay * Q
            tau = np.full((count, self.width), 2 * decay / (self.width + 1))
            need = np.zeros(count)
            ok = np.isfinite(left).all(axis=(1, 2)) & (radius > 0)
            if self.width:
                inner = np.where(ok[:, None, None], left, np.eye(n))
                pushed = self.W @ (self.W.transpose(0, 2, 1) / tau[:, :, None])
                need = np.trace(np.linalg.solve(inner, pushed), axis1=1, axis2=2)
            Q = Q * np.maximum(2 * np.abs(need), 1e-12)[:, None, None]
            Y = K @ Q
            x = np.zeros((count, self.size))
            for k, (i, j) in enumerate(self.pairs):
                x[:, k] = Q[:, i, j]
            x[:, len(self.pairs) : len(self.pairs) + self.inputs * n] = Y.reshape(count, -1)
            x[:, len(self.pairs) + self.inputs * n : -2] = tau
            x[:, -2] = 2 * self._reach(Q)
            over = np.zeros(count)
            for q in self.limited:
                used = np.einsum("bi,bi->b", K[:, q], Y[:, q])
                over = np.maximum(over, used - self.budget[:, q] ** 2)
            x[:, -1] = np.where(over > -1e-3 * np.abs(x[:, -2]), 1.5 * np.abs(over) + 1e-3, 0.0)
        ok &= np.isfinite(x).all(axis=1)
        return x, self._blocks(decay), self._lines(decay), ok

    def _blocks(self, decay: float) -> list[Array]:
        """Matrices F[:, 0] + sum x_i F[:, i + 1] that must be positive definite."""
        n, m, count = self.n, self.inputs, self.count
        first = np.zeros((count, self.size + 1, n + self.width, n + self.width))
        disc = np.zeros((count, self.size + 1, 2 * n, 2 * n))
        budgets = [np.zeros((count, self.size + 1, n + 1, n + 1)) for _ in self.limited]

        def enter(k: int, loop: Array, Q: Array | None) -> None:
            first[:, k, :n, :n] = -(loop + loop.transpose(0, 2, 1))
            disc[:, k, :n, n:], disc[:, k, n:, :n] = loop, loop.transpose(0, 2, 1)
            if Q is not None:
                first[:, k, :n, :n] -= 2 * decay * Q
                disc[:, k, :n, :n] = disc[:, k, n:, n:] = self.fast[:, None, None] * Q

        for k, (i, j) in enumerate(self.pairs, 1):
            Q = np.zeros((n, n))
            Q[i, j] = Q[j, i] = 1.0
            enter(k, self.A @ Q, Q)
            for block in budgets:
                block[:, k, 1:, 1:] = Q
        start = len(self.pairs) + 1
        for q in range(m):
            for j in range(n):
                Y = np.zeros((m, n))
                Y[q, j] = 1.0
                enter(start + q * n + j, self.B @ Y, None)
                if q in self.limited:
                    block = budgets[self.limited.index(q)]
                    block[:, start + q * n + j, 0, 1 + j] = block[:, start + q * n + j, 1 + j, 0] = 1.0
        first[:, 0, :n, n:], first[:, 0, n:, :n] = -self.W, -self.W.transpose(0, 2, 1)
        for k in range(self.width):
            first[:, start + m * n + k, n + k, n + k] = 1.0
        for block, q in zip(budgets, self.limited, strict=True):
            block[:, 0, 0, 0] = self.budget[:, q] ** 2
            block[:, self.size, 0, 0] = 1.0
        return [first, disc, *budgets]

    def _lines(self, decay: float) -> Array:
        """(units, lines, 1 + variables): numbers that must be positive."""
        found = np.zeros((self.count, self.heads.shape[1] + 1, self.size + 1))
        found[:, 0, 0] = 2 * decay
        start = len(self.pairs) + self.inputs * self.n + 1
        found[:, 0, start : start + self.width] = -1.0
        for k in range(self.heads.shape[1]):
            h = self.heads[:, k]
            for p, (i, j) in enumerate(self.pairs, 1):
                found[:, k + 1, p] = -h[:, i] * h[:, j] * (1.0 if i == j else 2.0)
            found[:, k + 1, self.size - 1] = 1.0
        return found

    def _descend(
        self, x: Array, blocks: list[Array], lines: Array, wanted: Flags, aim: int, gap: float
    ) -> tuple[Array, Flags, Flags]:
        """Follow the path of variable ``aim``: -1 the slack, until it is negative, -2 the size.

        Returns the points, where the aim was reached, and where no negative slack exists.
        """
        x, done, none = x.copy(), np.zeros(len(x), dtype=bool), np.zeros(len(x), dtype=bool)
        budget = aim == -1
        if budget:
            done |= wanted & (x[:, -1] <= 0)
        deep = np.min(self.budget[:, self.limited] ** 2, axis=1, initial=np.inf)
        order = sum(block.shape[-1] for block in blocks) + lines.shape[1]
        weight = order / np.maximum(np.abs(x[:, aim]), 1e-12)
        alive = np.flatnonzero(wanted & ~done)
        for _ in range(_STEPS):
            if not alive.size:
                break
            move, decrement, good = _newton(x[alive], [b[alive] for b in blocks], lines[alive], weight[alive], aim)
            alive, move, decrement = alive[good], move[good], decrement[good]
            x[alive] += move
            value = x[alive, aim]
            centred = decrement < _CENTRED
            if budget:
                # Well inside if that can be had, else just inside: the next descent starts here.
                over = (value < -0.2 * deep[alive]) | ((value < 0) & centred)
                done[alive[over]] = True
                lost = centred & (value > 2 * order / weight[alive])  # beyond the gap that is left
                none[alive[lost]] = True
                ended = over | lost
            else:
                ended = centred & (order / weight[alive] <= gap * np.abs(value))
                done[alive[ended]] = True
            grown = alive[centred & ~ended]
            weight[grown] *= _PUSH
            alive = alive[~ended]
        return x, done, none


def _newton(x: Array, blocks: list[Array], lines: Array, weight: Array, aim: int) -> tuple[Array, Array, Flags]:
    """Newton step of weight * x[aim] + barrier with its best length, its decrement, and where all went well."""
    count, size = x.shape
    slope, curve = np.zeros((count, size)), np.zeros((count, size, size))
    slope[:, aim] = weight
    good = np.ones(count, dtype=bool)
    whole = np.concatenate((np.ones((count, 1)), x), axis=1)
    flats: list[Array] = []
    for block in blocks:
        d = block.shape[-1]
        value = (whole[:, None, :] @ block.reshape(count, size + 1, d * d)).reshape(count, d, d)
        value = np.where(np.isfinite(value), value, -1.0)
        inverse, fine = _lower_inverse(value)
        good &= fine
        turned = inverse[:, None] @ block[:, 1:] @ inverse.transpose(0, 2, 1)[:, None]
        slope -= np.trace(turned, axis1=2, axis2=3)
        flat = turned.reshape(count, size, d * d)
        curve += flat @ flat.transpose(0, 2, 1)
        flats.append(flat)
    value = (lines @ whole[:, :, None])[:, :, 0]
    good &= (value > 0).all(axis=1)
    rays = lines[:, :, 1:] / np.where(value > 0, value, 1.0)[:, :, None]
    slope -= rays.sum(axis=1)
    curve += rays.transpose(0, 2, 1) @ rays
    still = -1 if aim == -2 else -2  # the slack, or the size while the budgets are mended
    slope[:, still], curve[:, still, :], curve[:, :, still] = 0.0, 0.0, 0.0
    curve[:, still, still] = 1.0
    scale = 1.0 / np.sqrt(np.maximum(np.einsum("bii->bi", curve), 1e-300))
    scaled = curve * scale[:, :, None] * scale[:, None, :] + 1e-13 * np.eye(size)
    good &= np.isfinite(scaled).all(axis=(1, 2)) & np.isfinite(slope).all(axis=1)
    scaled[~good], slope[~good] = np.eye(size), 0.0
    move = -np.linalg.solve(scaled, (slope * scale)[:, :, None])[:, :, 0] * scale
    decrement2 = -np.einsum("bi,bi->b", slope, move)
    good &= np.isfinite(decrement2) & (decrement2 >= 0)
    shares = [(rays @ move[:, :, None])[:, :, 0]]
    for flat, block in zip(flats, blocks, strict=True):
        d = block.shape[-1]
        turned = (move[:, None, :] @ flat).reshape(count, d, d)
        turned[~good] = 0.0
        shares.append(np.linalg.eigvalsh(turned))
    length = _length(np.concatenate(shares, axis=1), weight * move[:, aim])
    decrement: Array = np.sqrt(np.maximum(decrement2, 0.0))
    return move * length[:, None], decrement, good


def _length(shares: Array, slope: Array) -> Array:
    """The s > 0 that minimises slope s - sum log(1 + s shares): along a line the barrier is known in full."""
    most = 0.999 / np.maximum(-shares.min(axis=1), 1e-300)
    low, high = np.zeros(len(slope)), np.minimum(most, 1e6)
    s = np.minimum(1.0, 0.5 * high)
    for _ in range(15):
        part = shares / (1.0 + s[:, None] * shares)
        first, second = slope - part.sum(axis=1), (part**2).sum(axis=1)
        low, high = np.where(first < 0, s, low), np.where(first < 0, high, s)
        trial = s - first / np.maximum(second, 1e-300)
        s = np.where((trial > low) & (trial < high), trial, 0.5 * (low + high))
    return np.asarray(s)


def _lower_inverse(value: Array) -> tuple[Array, Flags]:
    """L^{-1} of the Cholesky factors, and which matrices had one."""
    try:
        return np.asarray(np.linalg.inv(np.linalg.cholesky(value)), dtype=float), np.ones(len(value), dtype=bool)
    except np.linalg.LinAlgError:
        fine: Flags = np.asarray(np.linalg.eigvalsh(value)[:, 0] > 0)
        kept = np.where(fine[:, None, None], value, np.eye(value.shape[1]))
        try:
            return np.asarray(np.linalg.inv(np.linalg.cholesky(kept)), dtype=float), fine
        except np.linalg.LinAlgError:
            one = [_one(matrix) for matrix in kept]
            fine = fine & np.array([factor is not None for factor in one])
            eye = np.eye(value.shape[1])
            return np.asarray(np.linalg.inv(np.stack([eye if f is None else f for f in one])), dtype=float), fine


def _one(matrix: Array) -> Array | None:
    try:
        return np.asarray(np.linalg.cholesky(matrix))
    except np.linalg.LinAlgError:
        return None


def _gathered(A: Array, B: Array, centre: Array) -> Array:
    """K (units, inputs, states) with every mode of A + BK at -centre, all inputs moving together (Ackermann)."""
    count, n = A.shape[:2]
    inputs = B.shape[2]
    share = 1.0 / np.maximum(np.abs(B).max(axis=1), 1e-300)  # every input about equally strong
    share[:, 1:] *= np.linspace(0.7, 0.4, inputs)[1:]
    column = np.einsum("bni,bi->bn", B, share)
    reach = np.empty((count, n, n))
    reach[:, :, 0] = column
    for j in range(1, n):
        reach[:, :, j] = np.einsum("bij,bj->bi", A, reach[:, :, j - 1])
    last = np.zeros(n)
    last[-1] = 1.0
    steady: Flags = np.asarray(np.abs(np.linalg.det(reach)) > 1e-290, dtype=bool)
    finite: Flags = np.asarray(np.isfinite(reach).all(axis=(1, 2)), dtype=bool)
    reach = np.where((steady & finite)[:, None, None], reach, np.eye(n))
    row = np.linalg.solve(reach.transpose(0, 2, 1), np.broadcast_to(last[:, None], (count, n, 1)))[:, :, 0]
    shifted = A + centre[:, None, None] * np.eye(n)
    for _ in range(n):
        row = np.einsum("bi,bij->bj", row, shifted)
    row[~steady] = np.nan
    return np.asarray(-share[:, :, None] * row[:, None, :])

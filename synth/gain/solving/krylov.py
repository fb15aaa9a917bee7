"""Loose solves of (lambda I - B) x = 1 for non-negative B: enough that x > 0 and the residual stays below one.

Then B x = lambda x - 1 + r <= lambda x, so x proves lambda an upper bound; it need not be accurate, and whether it
proves anything is decided elsewhere, by rounded quotients. BiCGStab: van der Vorst, SIAM J. Sci. Stat.
Comput. 13, 1992.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array, eye_array
from scipy.sparse.linalg import SuperLU, splu

from synth.gain.solving.points import Floats

# Where lambda is below the radius there is no positive solution; BiCGStab shows it by not settling.
_STEPS = 600
# A sparse factorisation of a graph with more links per outlet than this may fill up; allowed sizes by thinness.
_THIN, _THIN_SIZE = 2.3, 3_000_000
_FLAT, _FLAT_SIZE = 4.6, 150_000
_ANY_SIZE = 2_000
_BUSY = 60
# So many loops more than one are eliminated quickly wherever they run.
_LOOPS = 1_500
# Balls of so many outlets reached in fewer layers than these, seen from most of the seeds, mean links that spread.
_BALL, _LAYERS, _SEEDS = 3_000, 10, 3


@dataclass(frozen=True)
class Solve:
    """``x`` (size,) and the largest modulus of the residual; ``work`` counts products with B."""

    x: Floats
    residual: float
    work: int

    @property
    def settled(self) -> bool:
        """Whether it solves the system, with whatever signs."""
        return self.residual < 1 and bool(np.all(np.isfinite(self.x)))

    @property
    def proves(self) -> bool:
        """Whether x is a point for lambda in doubles."""
        return self.settled and float(self.x.min()) > 0


def bicgstab(B: csr_array, level: float, goal: float = 0.5, steps: int = _STEPS, right: Floats | None = None) -> Solve:
    """(level I - B) x = right (ones) until the residual is below ``goal`` in every row, or the steps are used up."""
    size = B.shape[0]
    x = np.zeros(size)
    r = np.ones(size) if right is None else right.copy()
    shadow = r.copy()
    p = np.zeros(size)
    v = np.zeros(size)
    rho = alpha = omega = 1.0
    work = 0
    for step in range(steps):
        new = float(shadow @ r)
        if new == 0 or omega == 0 or not np.isfinite(new):
            break
        beta = new / rho * (alpha / omega)
        p -= omega * v
        p *= beta
        p += r
        v = level * p
        v -= B @ p
        along = float(shadow @ v)
        if along == 0 or not np.isfinite(along):
            break
        alpha = new / along
        r -= alpha * v
        t = level * r
        t -= B @ r
        length = float(t @ t)
        if length == 0:
            x += alpha * p
            work += 2
            break
        omega = float(t @ r) / length
        x += alpha * p
        x += omega * r
        r -= omega * t
        rho = new
        work += 2
        if step % 2 == 0 or step < 12:
            most = max(float(r.max()), -float(r.min()))
            if not np.isfinite(most):
                break
            if most < goal:
                break
    # The residual is computed afresh: the recurrence drifts away from it.
    true = (1.0 if right is None else right) - (level * x - B @ x)
    return Solve(x, float(np.abs(true).max()) if np.all(np.isfinite(true)) else np.inf, work + 1)


def is_thin(B: csr_array) -> bool:
    """Whether there are so few links per outlet that elimination creates next to none."""
    size = B.shape[0]
    if B.nnz > _THIN * size or size > _THIN_SIZE or _busiest(B) > _BUSY:
        return False
    return B.nnz <= size + _LOOPS or not spreads(B)


def may_factor(B: csr_array) -> bool:
    """Whether a sparse factorisation of level I - B can be expected to stay small."""
    size = B.shape[0]
    if size <= _ANY_SIZE:
        return True
    if _busiest(B) > _BUSY or B.nnz > _FLAT * size or size > _THIN_SIZE:
        return False  # hubs fill a factorisation up whatever the average
    return is_thin(B) or (size <= _FLAT_SIZE and not spreads(B))


def spreads(B: csr_array) -> bool:
    """Whether balls grow so fast that no small set of outlets separates the network: elimination would fill up.

    Counted from a few outlets: links from where a ball holds 100 outlets to where it holds 3,000. On a line there are
    thousands, on a square grid 30, in three dimensions 9, among links drawn at random 5.
    """
    size = B.shape[0]
    most = min(_BALL, size // 2)
    fast = 0
    for turn, seed in enumerate((np.arange(_SEEDS) * size) // _SEEDS):
        if 2 * fast > _SEEDS or 2 * (fast + _SEEDS - turn) < _SEEDS:
            break
        fast += _ball_fills(B, int(seed), most)
    return 2 * fast > _SEEDS


def _ball_fills(B: csr_array, seed: int, most: int) -> bool:
    """Whether the ball round ``seed`` holds ``most`` outlets within a few layers of holding a hundred."""
    taken = np.zeros(B.shape[0], dtype=bool)
    taken[seed] = True
    edge, count, early, late = np.array([seed]), 1, 0, 0
    while edge.size and early < 2 * _LAYERS and late < _LAYERS:
        begin, length = B.indptr[edge], B.indptr[edge + 1] - B.indptr[edge]
        within = np.arange(int(length.sum())) - np.repeat(np.cumsum(length) - length, length)
        near = B.indices[np.repeat(begin, length) + within]
        edge = np.unique(near[~taken[near]])
        taken[edge] = True
        count += edge.size
        if count >= most:
            return True
        early += count <= 100
        late += count > 100
    return False


def has_hubs(B: csr_array) -> bool:
    """Whether some outlet has so many links that every ball soon reaches it and elimination fills up."""
    return _busiest(B) > _BUSY


def _busiest(B: csr_array) -> int:
    """The largest number of links at one outlet, coming or going: hubs make elimination fill up."""
    return int(max(np.diff(B.indptr).max(initial=0), np.bincount(B.indices).max(initial=0)))


def factors(B: csr_array, level: float) -> SuperLU | None:
    """A sparse factorisation of level I - B; None if it breaks down.

    Pivots stay on the diagonal: for level above the radius the matrix is an M-matrix, of which elimination without
    pivoting keeps all signs, so that even the smallest entries of a positive solution come out accurate.
    """
    size = B.shape[0]
    if not (np.isfinite(level) and np.all(np.isfinite(B.data))):
        return None  # a factorisation that meets a NaN may end the process
    system = (level * eye_array(size, format="csc") - B.tocsc()).tocsc()
    try:
        return splu(system, "MMD_AT_PLUS_A", 0.0, options={"SymmetricMode": True})
    except (RuntimeError, ValueError, MemoryError):
        return None


def factored(B: csr_array, level: float, right: Floats | None = None) -> Floats | None:
    """(level I - B)^-1 right (ones unless given) by a sparse factorisation; None if it breaks down."""
    found = factors(B, level)
    if found is None:
        return None
    x: Floats = found.solve(np.ones(B.shape[0]) if right is None else right)
    return x if np.all(np.isfinite(x)) else None

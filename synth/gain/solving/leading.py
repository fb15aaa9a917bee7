"""A leading eigenvalue and its vector, good to rounding in the large entries only, and the two points made of them.

Krylov vectors (ARPACK; Lehoucq, Sorensen, Yang 1998) give theta and v quickly, but with an error that is small against
the largest entry only: where v is small its quotients are worthless. So v is kept where it is large, and the rest is
fenced in by one loose solve there, which is far from singular and takes a dozen products:

    (theta - B_TT) u = 1 on T = {v < a few tenths},  u = 0 elsewhere,
    x = v + c u:          B x <= lambda x,   as c covers the error of v on T and stays below what the rest can spare,
    y = max(v - c u, 0):  B y >= mu y        for the same reason, with mu just below theta.

So v only has to be good to c, about 1e-13 of its largest entry, and may come from a part of the network. Ours.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.linalg import ArpackError, SuperLU, eigs

from synth.gain.solving.krylov import bicgstab, factored, factors, may_factor
from synth.gain.solving.points import Floats

# The part of the vector that is used as it is.
_LARGE = 0.3
_VECTORS, _RESTARTS = 14, 40
# Up to this size all eigenvalues are the quickest.
_DENSE = 40
# Up to this size factorisations are tried where Krylov vectors fail.
_FACTORED = 5_000
_QUICK_STEPS, _STEPS = 40, 250
_WIDEST = 1e100
# Fewer links per outlet than this: long loops with few that cross.
_LONG = 1.2
_NODA_STEPS = 14
# Errors of v: a vector that is of use at all, and what needs no continuing into the tail.
_USEFUL, _CLEAN = 1e-8, 1e-12


@dataclass(frozen=True, eq=False)
class Fenced:
    """``x`` > 0 for the upper and ``y`` >= 0 for the lower bound, or None each; ``spot``: where to look next (or -1).

    ``work`` counts products and solves; ``closes``: whether v was good enough in doubles. The points are trusted no
    further than their quotients.
    """

    x: Floats | None
    y: Floats | None
    spot: int
    work: int
    closes: bool = False


def leading_pair(B: csr_array, start: Floats, goal: float) -> tuple[float, Floats] | None:
    """(theta, v) with v >= 0, largest entry 1, for the eigenvalue of largest real part; None where nothing came."""
    if not (B.nnz and B.data.max() < _WIDEST):
        return None
    if B.shape[0] <= _DENSE:
        return _dense_pair(B)
    if is_long(B):
        # Long loops have eigenvalues close to each other all round, which Krylov vectors do not tell apart.
        return _by_factors(B, start, goal)
    try:
        values, vectors = eigs(B, k=1, which="LR", v0=start, tol=goal, ncv=_VECTORS, maxiter=_RESTARTS)
    except (ArpackError, RuntimeError, ValueError):
        return _by_factors(B, start, goal) if B.shape[0] <= _FACTORED else None
    v = np.abs(vectors[:, 0].real)
    most = float(v.max())
    theta = float(values[0].real)
    if not (np.isfinite(most) and most > 0 and np.isfinite(theta) and theta > 0):
        return None
    return theta, v / most


def _dense_pair(B: csr_array) -> tuple[float, Floats] | None:
    """The same for few outlets."""
    try:
        values, vectors = np.linalg.eig(B.toarray())
    except np.linalg.LinAlgError:
        return None
    k = int(np.argmax(values.real))
    v, theta = np.abs(vectors[:, k].real), float(values[k].real)
    return (theta, v / v.max()) if theta > 0 and v.max() > 0 else None


def _by_factors(B: csr_array, start: Floats, goal: float) -> tuple[float, Floats] | None:
    """The same by Noda's iteration, each step one factorisation in the coordinates of the vector so far."""
    if not may_factor(B):
        return None
    row = np.repeat(np.arange(B.shape[0]), np.diff(B.indptr))
    x = np.maximum(start / start.max(), 1e-100)
    theta, error = 0.0, np.inf
    for _ in range(_NODA_STEPS):
        image = B @ x
        quotients = image / x
        high = float(quotients.max())
        here = float(quotients[np.argmax(x)])
        error = float(np.abs(image - here * x).max())
        theta = here
        if error <= goal * here:
            break
        scaled = csr_array((B.data * x[B.indices] / x[row], B.indices, B.indptr), shape=B.shape)
        # A hair above: closer, rounding would turn signs.
        factor = factored(scaled, high * (1 + 1e-12))
        if factor is None or factor.min() <= 0:
            break
        x = x * np.maximum(factor / factor.max(), 1e-100)
        x = np.maximum(x / x.max(), 1e-200)
    return (theta, x) if error <= _USEFUL * theta else None


def fence(B: csr_array, theta: float, v: Floats, width: float) -> Fenced:
    """Both points from a leading pair; ``width`` relative, of the enclosure that is wanted."""
    tail = v < _LARGE
    if not tail.any():
        return Fenced(v, v, -1, 0, True)
    side = _Side(B, tail, theta)
    solved = side.solve(None, 0.5)
    if solved is None:
        return Fenced(None, None, -1, side.work)
    if solved.min() <= 0:
        return Fenced(None, None, int(np.argmin(solved)), side.work)
    u = np.where(tail, solved, 0.0)
    added = B @ u
    fenced = _joined(B, theta, v, u, added, tail, width, side)
    if fenced.closes:
        return fenced
    # v continued into the tail, so that a part too small for it or a rough vector do not matter.
    error = np.where(tail, B @ v - theta * v, 0.0)
    left = float(error.max())
    if left > _CLEAN:
        more = side.solve(error / left, max(_CLEAN / left / 10, 1e-13))
        if more is not None:
            v = np.maximum(v + left * np.where(tail, more, 0.0), 0.0)
            return _joined(B, theta, v, u, added, tail, width, side)
    return fenced


def _joined(
    B: csr_array, theta: float, v: Floats, u: Floats, added: Floats, tail: NDArray[np.bool_], width: float, side: _Side
) -> Fenced:
    """v + c u and v - c u with the c that serves both; ``added`` is B u."""
    upper, lower = theta * (1 + 0.3 * width), theta * (1 - 0.3 * width)
    image = B @ v
    most_wrong = np.maximum(image - upper * v, lower * v - image)
    # On the tail a larger c covers more; elsewhere what comes in from there must not exceed what is to spare.
    room = (lower * u - added)[tail]
    spare = np.maximum(-most_wrong[~tail], 0.0) / np.maximum(added[~tail], 1e-300)
    if room.min() <= 0:
        return Fenced(None, None, -1, side.work)
    least, most = float(np.max(most_wrong[tail] / room)), min(1.0, float(spare.min()))
    least = max(least, 1e-4 * most, 1e-200)
    c = np.sqrt(least * most) if most > least else least
    return Fenced(v + c * u, np.maximum(v - c * u, 0.0), -1, side.work, most > least)


class _Side:
    """Systems (level - B) u = right with only the links between outlets of the tail, by Krylov steps or factors."""

    def __init__(self, B: csr_array, tail: NDArray[np.bool_], level: float) -> None:
        mask = tail.astype(float)
        data = np.repeat(mask, np.diff(B.indptr))
        data *= mask[B.indices]
        data *= B.data
        self.whole, self.level = B, level
        self.part = csr_array((data, B.indices, B.indptr), shape=B.shape)
        self.work = 0
        self.direct: SuperLU | None = None

    def solve(self, right: Floats | None, goal: float) -> Floats | None:
        """A solution with residual below ``goal`` (right: at most 1; None: ones), or None."""
        if self.direct is None:
            steps = _QUICK_STEPS if is_long(self.whole) else _STEPS
            found = bicgstab(self.part, self.level, goal, steps, right)
            self.work += found.work
            if found.residual < 2 * goal:
                return found.x
            if not may_factor(self.whole):
                return None
            # A copy, as what is left out shares its places with the whole.
            part = self.part.copy()
            part.eliminate_zeros()
            self.direct = factors(part, self.level)
            self.work += 1
        if self.direct is None:
            return None
        x: Floats = self.direct.solve(np.ones(self.part.shape[0]) if right is None else right)
        return x if np.all(np.isfinite(x)) else None


def is_long(B: csr_array) -> bool:
    """Whether long loops dominate, which Krylov steps cannot overlook."""
    return bool(B.nnz <= _LONG * B.shape[0])

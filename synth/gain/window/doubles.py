"""Doubles with known rounding: a-priori error bounds, and a window's exact numbers as sparse arrays of doubles.

Bounds are those of Higham (Accuracy and Stability of Numerical Algorithms, 2002, chapter 3): a sum of n products in any
order is off by at most gamma_n times the sum of the absolute products, gamma_n = n u/(1 - n u), u = 2^-53. Every bound
here is taken a little larger, so that working it out in doubles does no harm.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array, diags_array

from synth.gain.window.build import Sparse, Window

Floats = NDArray[np.float64]
U = 2.0**-53
# Factor on every bound that is itself worked out in doubles.
LOOSE = 1 + 2.0**-20
# Numbers smaller than this could lose digits to underflow; they are refused.
_TINY = 1e-200


def gamma(count: int) -> float:
    """A bound of gamma_count, with room for the rounding of the bound itself."""
    return count * U / (1 - count * U) * LOOSE


@dataclass(frozen=True, eq=False)
class Doubles:
    """A window in scaled doubles: every number is within a factor 1 +- u of the exact one.

    ``A`` (n, n); ``D`` (n, inlets); ``H`` (outlets, n); ``longest``: most entries in any row or column of A;
    ``norm``: at least the 2-norm of |A|. The states are the window's divided by ``scale``, powers of two.
    """

    A: csr_array
    D: csr_array
    H: Floats
    longest: int
    norm: float
    scale: Floats

    @property
    def size(self) -> int:
        """Number of states."""
        return int(self.A.shape[0])


def doubles_of(window: Window, alpha: Fraction = Fraction(0)) -> Doubles | None:
    """The window with A + alpha I in doubles, or None where a number is outside the range in which that is safe."""
    n = window.size
    shifted = [{**row, i: row.get(i, Fraction(0)) + alpha} if alpha else row for i, row in enumerate(window.A)]
    A, D, H = (
        _sparse(shifted, n),
        _sparse(window.columns, n).T.tocsr(),
        _sparse(window.rows, n).toarray(),
    )
    scale = _scale(A)
    A = _scaled(A, 1 / scale, scale)
    D = csr_array(diags_array(1 / scale) @ D)
    H = H * scale
    for values in (A.data, D.data, H[H != 0]):
        if values.size and not (np.all(np.isfinite(values)) and np.min(np.abs(values)) > _TINY):
            return None
    count = (np.diff(A.indptr).max(initial=0), np.diff(A.tocsc().indptr).max(initial=0))
    size = abs(A)
    norm = float(np.sqrt(size.sum(axis=0).max(initial=0.0) * size.sum(axis=1).max(initial=0.0)))
    return Doubles(A, D, H, int(max(count)), norm * LOOSE, scale)


def _sparse(rows: tuple[Sparse, ...] | list[Sparse], width: int) -> csr_array:
    start = np.cumsum([0, *(len(row) for row in rows)])
    place = np.array([j for row in rows for j in row], dtype=np.intp)
    values = np.array([float(value) for row in rows for value in row.values()], dtype=float)
    found = csr_array((values, place, start), shape=(len(rows), width))
    found.eliminate_zeros()
    return found


def _scaled(A: csr_array, left: Floats, right: Floats) -> csr_array:
    return csr_array(diags_array(left) @ A @ diags_array(right))


def _scale(A: csr_array) -> Floats:
    """Powers of two that make rows and columns alike in size (a few sweeps; a guide, exact whatever it is)."""
    n = A.shape[0]
    scale = np.ones(n)
    off: Any = abs(A).tolil()
    off.setdiag(0.0)
    off = csr_array(off)
    for _ in range(24):
        now = _scaled(off, 1 / scale, scale)
        row, column = now.sum(axis=1), now.sum(axis=0)
        both = (row > 0) & (column > 0)
        step = np.where(both, np.sqrt(np.divide(row, column, out=np.ones(n), where=both)), 1.0)
        step = 2.0 ** np.round(np.log2(step) / 2)
        if np.all(step == 1):
            break
        scale = np.clip(scale * step, 2.0**-100, 2.0**100)
    return scale

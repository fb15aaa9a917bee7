"""The adjoint row y(t)' = H e^{At} of a window, cell by cell, with a bound of its error: one row serves all inlets.

On a cell of length h (a power of two) y is replaced by the polynomial with the coefficients C_0 = y(t0) and
C_{j+1} = h A' C_j/(j+1) as computed. What that leaves out is its residual A'y - y', which rounding and the last term
make, and the jump to the next cell; both are bounded in the Euclidean norm and carried along in the dual norm, in which
every trajectory decays (norm.py). Nothing is assumed about the size of the errors: they are added up.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from synth.gain.window.doubles import LOOSE, Doubles, Floats, U, gamma
from synth.gain.window.norm import Norm

# With h |A| <= 2 the first term left out is below 2^24/24!, about 3e-17.
DEGREE = 24
# Stands for all that underflow may lose in one step: far below any rounding, far above the smallest double.
_UNDERFLOW = 1e-250
_DENSE = 160


@dataclass(frozen=True, eq=False)
class Cell:
    """``coefficients`` (degree + 1, n, outlets) in the powers of (t - t0)/h; ``start`` t0 in s.

    ``off`` per outlet bounds |true y - polynomial| in the dual norm on the cell; ``left`` bounds |true y(t0 + h)| in
    it; ``size`` per outlet is the sum of the largest absolute entries of the coefficients.
    """

    start: float
    coefficients: Floats
    off: Floats
    left: Floats
    size: Floats


def step_of(system: Doubles) -> float:
    """The length of a cell in s: the largest power of two with h |A| <= 2."""
    return 2.0 ** math.floor(math.log2(2.0 / system.norm)) if system.norm > 0 else 1.0


def cells(system: Doubles, norm: Norm) -> Iterator[Cell]:
    """The cells from t = 0 on, without end."""
    h = step_of(system)
    # Zeros add no rounding, so the same bounds hold for a dense product, which is quicker while the window is small.
    back = system.A.T.toarray() if system.size <= _DENSE else system.A.T.tocsr()
    y = np.ascontiguousarray(system.H.T)
    n, outlets = y.shape
    rounding, jump = gamma(system.longest + 6), gamma(DEGREE + 2)
    shrink = math.exp(-norm.rate * h) * LOOSE
    length = 1 + n * U * 4
    error = norm.dual * 2 * U * np.sqrt((y * y).sum(axis=0)) * length
    factors = [h / (j + 1) for j in range(DEGREE)]
    count = 0
    while True:
        C = np.empty((DEGREE + 1, n, outlets))
        C[0] = y
        for j in range(DEGREE):
            C[j + 1] = (back @ C[j]) * factors[j]
        lengths = np.sqrt((C * C).sum(axis=1)) * length + _UNDERFLOW
        total = lengths.sum(axis=0)
        residual = h * system.norm * (rounding * total + lengths[DEGREE])
        off = (error + norm.dual * residual) * LOOSE
        y = C.sum(axis=0)
        error = (shrink * error + norm.dual * (residual + jump * total)) * LOOSE
        left = norm.dual * np.sqrt((y * y).sum(axis=0)) * length + error
        yield Cell(count * h, C, off, left, np.abs(C).max(axis=1, initial=0.0).sum(axis=0))
        count += 1

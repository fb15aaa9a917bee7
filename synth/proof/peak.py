"""Evidence for the peak route: a norm in which each closed unit decays, a rate, and points of the gain operator.

Floats guide the choice; what is chosen is written as exact numbers and verified by the checker, so a bad choice can
cost a proof but never fake one.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.gain.closed import ClosedUnit
from synth.gain.guide import peak_gain_guide
from synth.proof.numbers import decimal_down, dyadic
from synth.proof.points import PeakRows, Terms, point_at, radius_and_point

Array = NDArray[np.float64]
_NEAREST = 0.9  # a claimed rate stays below this part of the slowest mode of every unit
_BISECTIONS = 24
_MANY = 50  # different units: beyond, the rate is found less finely


def decay(A: ExactMatrix) -> float:
    """Slowest decay of x' = A x in 1/s: minus the largest real part of an eigenvalue (negative if unstable)."""
    return -float(np.linalg.eigvals(A.floats()).real.max()) if A.shape[0] else 1.0


def decaying_norm(A: ExactMatrix, a: Fraction) -> ExactMatrix:
    """P with A'P + PA + 2aP < 0 for ``a`` below the decay of A (1/s), rounded to short exact numbers.

    Lyapunov's equation in balanced coordinates; the checker decides whether the rounded P still does it.
    """
    size = A.shape[0]
    floats = A.floats()
    _, (scale, _) = scipy.linalg.matrix_balance(floats, permute=False, separate=True)
    shifted = floats / scale[:, None] * scale[None, :] + float(a) * np.eye(size)
    P = scipy.linalg.solve_continuous_lyapunov(shifted.T, -np.eye(size))
    top = float(np.abs(P).max())
    return rounded_norm(_array((P + P.T) / (2 * top)), _array(scale))


def _array(values: object) -> Array:
    """The values as double precision, for the type checker's sake."""
    return np.asarray(values, dtype=np.float64)


def rounded_norm(P: Array, scale: Array) -> ExactMatrix:
    """diag(1/scale) P diag(1/scale) with P (symmetric, largest entry near 1) rounded to 2^-44."""
    size = len(P)
    grid = [
        [Fraction(round(float(P[min(i, j), max(i, j)]) * 2.0**44), 2**44) for j in range(size)] for i in range(size)
    ]
    exact = [Fraction(float(v)) for v in scale]
    return ExactMatrix.of([[grid[i][j] / exact[i] / exact[j] for j in range(size)] for i in range(size)], (size, size))


def radius_of(M: Array | None) -> float:
    """Spectral radius; infinity for None."""
    if M is None:
        return float("inf")
    return float(np.abs(np.linalg.eigvals(M)).max()) if len(M) else 0.0


def choose_rate(units: Sequence[ClosedUnit], terms: Terms) -> Fraction:
    """The rate alpha (1/s) to claim: the largest that leaves the weighted radius at most half-way from radius to one.

    A larger rate would be true too, but C contains 1/(1 - weighted radius) and would grow without bound. Never above
    nine tenths of the slowest mode. The rate is cut to three digits. Law: larger strengths never raise it.
    ``units``: the closed units of the system that ``terms`` is about, by specification.
    """
    slowest = min(decay(unit.A) for unit in units)
    now = _weighted(units, terms, 0.0)
    allowed = (1 + (float("inf") if now is None else radius_and_point(now, 1e-5)[0])) / 2

    def holds(alpha: float) -> bool:
        rows = _weighted(units, terms, alpha)
        return rows is not None and (rows.size == 0 or point_at(rows, allowed) is not None)

    few = len(units) > _MANY
    return bisect_rate(holds, _NEAREST * slowest, _BISECTIONS // 3 if few else _BISECTIONS)


def _weighted(units: Sequence[ClosedUnit], terms: Terms, alpha: float) -> PeakRows | None:
    """Estimate of the operator with every signal weighted by e^(alpha t) (theory (1), (4)); None if a unit grows."""
    gains = []
    for unit in units:
        A = unit.A.floats() + alpha * np.eye(unit.A.shape[0])
        guide = peak_gain_guide(A, unit.D.floats(), unit.H.floats(), unit.F.floats())
        if guide is None or not np.all(np.isfinite(guide.gains)):
            return None
        gains.append(guide.gains)
    rows = PeakRows(terms, gains, alpha)
    return None if rows.weights is None else rows


def bisect_rate(allowed: Callable[[float], bool], most: float, steps: int = 24) -> Fraction:
    """The largest rate up to ``most`` that is allowed, cut to three digits (``allowed`` must be falling)."""
    low, high = 0.0, most
    if allowed(most):
        low = most
    else:
        for _ in range(steps):
            middle = (low + high) / 2
            low, high = (middle, high) if allowed(middle) else (low, middle)
    return Fraction(decimal_down(Fraction(low), 3))


def point_above(M: Array) -> tuple[Fraction, ...]:
    """s > 0 with M s < lambda s for lambda just above the radius: (I - M/lambda) s = 1 (theory (10), (12))."""
    size = len(M)
    level = max(radius_of(M) * (1 + 1e-7), 1e-6)
    s = np.linalg.solve(np.eye(size) - M / level, np.ones(size)) if size else np.zeros(0)
    return tuple(dyadic(v) for v in s / s.max()) if size else ()


def point_below(M: Array) -> tuple[Fraction, ...]:
    """low >= 0 whose smallest ratio (M low)_i/low_i is near the radius: a Perron vector, tiny entries set to zero."""
    size = len(M)
    if not size:
        return ()
    values, vectors = np.linalg.eig(M)
    low = np.abs(vectors[:, int(np.argmax(values.real))])
    low = np.where(low < 1e-9 * low.max(), 0.0, low / low.max())
    return tuple(dyadic(v) if v else Fraction(0) for v in low)

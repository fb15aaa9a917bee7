"""A verified norm in which a large window decays, in doubles: what bounds the tail and every error of a trajectory.

P > 0 and a > 0 with A'P + PA + 2aP < 0 give |e^{At}x|_P <= e^{-at}|x|_P, hence for an adjoint row y' = A'y
|y(t)|_* <= e^{-at}|y(0)|_* in the dual norm, and |d'y| <= |d|_P |y|_*. Floating point suggests P; that both matrices
are definite is shown by a Cholesky factorisation that succeeds after more than the largest possible rounding has been
taken off the diagonal (Rump, BIT Numerical Mathematics 46, 2006). The true A is within a factor 1 +- u of the doubles,
which is part of that rounding.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray
from scipy.sparse import csr_array

from synth.gain.window.doubles import LOOSE, Doubles, Floats, U, gamma

# Dense n x n matrices and n^3 work: beyond this the norm is not looked for, and a result is an estimate.
MOST_STATES = 2500
# Where rounding in the dual norm is enlarged by more than this, a slower rate is tried, with a better conditioned P.
_WORST = 1e7


@dataclass(frozen=True, eq=False)
class Norm:
    """``rate`` a in 1/s; ``dual``: |y|_* <= dual |y|_2; ``columns``: |d|_P of every inlet.

    ``guaranteed``: the inequalities are verified; otherwise the numbers are estimates and prove nothing. ``P`` (n, n)
    as used; it is kept so that a certificate can carry it. ``euclid``: |y|_2 <= euclid |y|_*.
    """

    rate: float
    dual: float
    columns: Floats
    guaranteed: bool
    P: Floats | None = None
    euclid: float = math.nan


def rightmost_real(system: Doubles) -> float:
    """The largest real part of A's eigenvalues in doubles (a guide)."""
    if not system.size:
        return -math.inf
    if system.size <= MOST_STATES:
        return float(np.linalg.eigvals(system.A.toarray()).real.max())
    from scipy.sparse.linalg import eigs

    return float(eigs(system.A, k=6, which="LR", return_eigenvectors=False, maxiter=20_000).real.max())


def guessed_norm(system: Doubles, rightmost: float) -> Norm:
    """Not verified: the rate of the slowest mode and Euclidean lengths."""
    lengths = np.sqrt(np.asarray((system.D * system.D).sum(axis=0), dtype=float)).reshape(-1)
    return Norm(-rightmost, 1.0, lengths, False)


def verified_norm(system: Doubles, rightmost: float) -> Norm | None:
    """A verified norm, or None if none was found (the window then decays too slowly, or is too large)."""
    if rightmost >= 0 or not 0 < system.size <= MOST_STATES:
        return None
    dense = system.A.toarray()
    found: Norm | None = None
    for share in (0.9, 0.6, 0.25, 0.05):
        rate = -share * rightmost
        P = _suggested(dense, rate)
        checked = None if P is None else _checked(system, P, rate)
        if checked is None:
            continue
        if found is None or checked.dual * checked.columns.max(initial=0) < 1e-3 * (
            found.dual * found.columns.max(initial=0)
        ):
            found = checked
        if found.dual * found.columns.max(initial=0) <= _WORST:
            break
    return found


def _suggested(A: Floats, rate: float) -> Floats | None:
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # a poor suggestion does no harm: it is checked
            P = scipy.linalg.solve_continuous_lyapunov((A + rate * np.eye(len(A))).T, -np.eye(len(A)))
    except (np.linalg.LinAlgError, ValueError):
        return None
    P = (P + P.T) / 2
    return np.asarray(P, dtype=float) if np.all(np.isfinite(P)) else None


def _checked(system: Doubles, P: Floats, rate: float) -> Norm | None:
    n = system.size
    product = system.A.T @ P
    falling = -(product + product.T) - 2 * rate * P
    falling = (falling + falling.T) / 2
    size_P, ones = np.abs(P), np.ones(n)
    size_A: csr_array = abs(system.A)
    sums = size_P @ ones
    spread = size_A.T @ sums + size_P @ (size_A @ ones) + 2 * rate * sums
    error = gamma(system.longest + 8) * float(spread.max()) * LOOSE
    if not _above(falling, error):
        return None
    with np.errstate(all="ignore"):
        guess = float(scipy.linalg.eigvalsh(P, subset_by_index=[0, 0])[0])
    for least in (0.9 * guess, 0.5 * guess):
        if least > 0 and _above(P, least):
            break
    else:
        return None
    columns = _lengths(system.D, P, float(sums.max()))
    return Norm(rate, LOOSE / math.sqrt(least), columns, True, P, LOOSE * math.sqrt(float(sums.max())))


def _above(S: Floats, shift: float) -> bool:
    """Whether the symmetric matrix S - shift I is certainly positive definite."""
    n = len(S)
    diagonal = np.abs(np.diagonal(S))
    if not np.all(np.isfinite(diagonal)):
        return False
    slack = 2 * gamma(n + 2) * float(diagonal.sum()) + 2 * U * (float(diagonal.max()) + shift)
    lowered = S.copy()
    lowered[np.diag_indices(n)] -= (shift + slack) * LOOSE
    try:
        scipy.linalg.cholesky(lowered, lower=True, overwrite_a=True, check_finite=True)
    except (np.linalg.LinAlgError, ValueError):
        return False
    return True


def _lengths(D: csr_array, P: Floats, largest: float) -> NDArray[np.float64]:
    """Upper bounds of |d|_P per column, for every d within a factor 1 +- u of the doubles."""
    n = D.shape[0]
    size: csr_array = abs(D)
    square = np.asarray((D * (P @ D)).sum(axis=0) if D.shape[1] else np.zeros(0)).reshape(-1)
    spread = np.asarray((size * (np.abs(P) @ size)).sum(axis=0) if D.shape[1] else np.zeros(0)).reshape(-1)
    euclid = np.sqrt(np.asarray((size * size).sum(axis=0)).reshape(-1)) if D.shape[1] else np.zeros(0)
    upper = np.sqrt(np.maximum(square, 0.0) + gamma(2 * n + 4) * spread)
    return np.asarray(upper * LOOSE + 2 * U * euclid * math.sqrt(largest), dtype=float)

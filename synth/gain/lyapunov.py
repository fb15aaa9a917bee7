"""A verified rate of decay for one closed unit: the Lyapunov norm that bounds what an enclosure has not looked at yet.

For a Hurwitz matrix A this module finds P > 0 and a > 0 with A'P + PA + 2aP < 0 and checks both signs rigorously, so
that |e^{At} x|_P <= e^{-at} |x|_P for every x and t >= 0, and |H e^{At} x| <= zeta e^{-at} |x|_P with
zeta^2 = H P^{-1} H' (theory: section 10). Floats only suggest P; whether A is Hurwitz is decided in exact arithmetic.
"""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import scipy.linalg
from flint import arb_mat, ctx, fmpq, fmpq_mat
from numpy.typing import NDArray

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix

# Precision of the sign checks, in bits; entries are doubles, so products of three of them are close to exact.
_CHECK_BITS = 256
# Where the eigenvectors are worse conditioned than this, a norm built from them would be too loose to be of use.
_WORST_EIGENBASIS = 1e3


@dataclass(frozen=True)
class Decay:
    """A verified Lyapunov norm: A'P + PA + 2 a P < 0, P > 0.

    ``P`` n x n exact (flint rationals), ``a`` exact rate in 1/s, ``modes`` the eigenvalues of A as doubles (a guide).
    """

    P: fmpq_mat
    a: fmpq
    modes: NDArray[np.complex128]


def rationals(matrix: ExactMatrix) -> fmpq_mat:
    """The same matrix as a flint rational matrix (shape kept, also where a side is empty)."""
    entries = [fmpq(v.numerator, v.denominator) for row in matrix.rows for v in row]
    return fmpq_mat(matrix.shape[0], matrix.shape[1], entries)


def positive_definite(matrix: arb_mat) -> bool:
    """Whether LDL' of a symmetric ball matrix has only certainly positive pivots: True is a proof, False is not one."""
    size = matrix.nrows()
    rows = [[matrix[i, j] for j in range(size)] for i in range(size)]
    for k in range(size):
        pivot = rows[k][k]
        if not pivot > 0:
            return False
        for i in range(k + 1, size):
            factor = rows[i][k] / pivot
            for j in range(k + 1, i + 1):
                rows[i][j] = rows[i][j] - factor * rows[j][k]
    return True


def is_hurwitz(A: fmpq_mat) -> bool:
    """Exact decision whether every eigenvalue has negative real part: Routh's test on the characteristic polynomial."""
    coefficients = A.charpoly().coeffs()[::-1]
    upper, lower = list(coefficients[0::2]), list(coefficients[1::2])
    while lower:
        if not lower[0] > 0:
            return False
        factor = upper[0] / lower[0]
        padded = [*lower[1:], *([fmpq(0)] * (len(upper) - len(lower)))]
        following = [u - factor * v for u, v in zip(upper[1:], padded, strict=True)]
        upper, lower = lower, following
    return True


def find_decay(A: ExactMatrix) -> Decay:
    """A verified Lyapunov norm of the square matrix ``A`` (entries in 1/s, already balanced).

    Raises UnstableLoop if A is not Hurwitz (decided exactly; the message names the eigenvalue) and InputError if an
    entry is too large for a double.
    """
    size = A.shape[0]
    if size == 0:
        return Decay(fmpq_mat(0, 0, []), fmpq(1), np.zeros(0, dtype=complex))
    floats = A.floats()
    if not np.all(np.isfinite(floats)):
        raise InputError(
            "an entry of A is beyond the range of a double; choose units in which the model is less extreme."
        )
    exact_A = rationals(A)
    modes = np.asarray(np.linalg.eigvals(floats), dtype=complex)
    slowest = modes[int(np.argmax(modes.real))]
    if slowest.real < 0:
        for P, a in _suggestions(floats, -float(slowest.real)):
            checked = _checked(exact_A, P, a)
            if checked is not None:
                return Decay(*checked, modes)
    if not is_hurwitz(exact_A):
        raise UnstableLoop(
            f"the closed unit is not Hurwitz: its rightmost mode is {_mode(slowest)} 1/s, so no peak gain is finite; "
            "change the gains so that every mode decays."
        )
    return Decay(*_exact_norm(exact_A), modes)


def _mode(value: complex) -> str:
    real, imag = value.real + 0.0, abs(value.imag)
    return f"{real:.6g}" if imag == 0 else f"{real:.6g} +- {imag:.6g}i"


def _suggestions(A: NDArray[np.float64], rate: float) -> Iterator[tuple[NDArray[np.float64], float]]:
    """Candidates (P, a), tightest first: the eigenvectors' norm where they are well conditioned, then Lyapunov's."""
    _, V = np.linalg.eig(A)
    if np.linalg.cond(V) < _WORST_EIGENBASIS:
        W = np.linalg.inv(V)
        yield np.asarray(np.real(W.conj().T @ W), dtype=np.float64), 0.9375 * rate
    for share in (0.75, 0.5, 0.125, 0.01):
        a = share * rate
        try:
            with warnings.catch_warnings():
                # A poor candidate is no harm: every candidate is checked before it is used.
                warnings.simplefilter("ignore", RuntimeWarning)
                P = scipy.linalg.solve_continuous_lyapunov((A + a * np.eye(len(A))).T, -np.eye(len(A)))
        except (np.linalg.LinAlgError, ValueError):
            continue
        yield np.asarray(P, dtype=np.float64), a


def _checked(A: fmpq_mat, P: NDArray[np.float64], a: float) -> tuple[fmpq_mat, fmpq] | None:
    """The candidate as exact numbers if both inequalities hold for certain, else None."""
    size = A.nrows()
    P = (P + P.T) / 2
    if not np.all(np.isfinite(P)):
        return None
    entries = [fmpq(*value.as_integer_ratio()) for value in P.ravel().tolist()]
    exact_P, rate = fmpq_mat(size, size, entries), fmpq(*a.as_integer_ratio())
    product = exact_P * A
    falling = (product + product.transpose() + exact_P * (2 * rate)) * fmpq(-1)
    with ctx.workprec(_CHECK_BITS):
        if positive_definite(arb_mat(exact_P)) and positive_definite(arb_mat(falling)):
            return exact_P, rate
    return None


def _exact_norm(A: fmpq_mat) -> tuple[fmpq_mat, fmpq]:
    """P with A'P + PA = -I solved exactly, and the rate 1/(2 trace P): works for every Hurwitz matrix, seldom tight."""
    size = A.nrows()
    pairs = [(i, j) for i in range(size) for j in range(i + 1)]
    place = {pair: k for k, pair in enumerate(pairs)}
    equations = fmpq_mat(len(pairs), len(pairs), [0] * len(pairs) ** 2)
    right = fmpq_mat(len(pairs), 1, [-int(i == j) for i, j in pairs])
    for row, (i, j) in enumerate(pairs):
        for k in range(size):
            # (A'P + PA)_ij = sum_k A_ki P_kj + P_ik A_kj
            for entry, p, q in ((A[k, i], k, j), (A[k, j], i, k)):
                column = place[(max(p, q), min(p, q))]
                equations[row, column] = equations[row, column] + entry
    solved = equations.solve(right)
    P = fmpq_mat(size, size, [solved[place[(max(i, j), min(i, j))], 0] for i in range(size) for j in range(size)])
    with ctx.workprec(_CHECK_BITS):
        if not positive_definite(arb_mat(P)):
            # A is Hurwitz by Routh's test, so P > 0; only the check's precision was too low.
            ctx.prec = 8192
            if not positive_definite(arb_mat(P)):
                raise UnstableLoop("the closed unit is Hurwitz by too narrow a margin for its decay to be verified.")
    return P, 1 / (2 * sum((P[i, i] for i in range(size)), fmpq(0)))


def balance(A: ExactMatrix) -> tuple[Fraction, ...]:
    """Powers of two t for which diag(1/t) A diag(t) has rows and columns of similar size (a guide, never a claim)."""
    floats = A.floats()
    if A.shape[0] == 0 or not np.all(np.isfinite(floats)):
        return (Fraction(1),) * A.shape[0]
    _, (scale, _) = scipy.linalg.matrix_balance(floats, permute=False, separate=True)
    return tuple(Fraction(float(value)) for value in scale)


def rescaled(
    A: ExactMatrix, D: ExactMatrix, H: ExactMatrix, scale: tuple[Fraction, ...]
) -> tuple[ExactMatrix, ExactMatrix, ExactMatrix]:
    """The same system in the states x/scale; H e^{At} D is unchanged, exactly."""
    n = len(scale)
    A = ExactMatrix(tuple(tuple(A[i, j] * scale[j] / scale[i] for j in range(n)) for i in range(n)), A.shape)
    D = ExactMatrix(tuple(tuple(v / scale[i] for v in D.rows[i]) for i in range(n)), D.shape)
    H = ExactMatrix(tuple(tuple(v * t for v, t in zip(row, scale, strict=True)) for row in H.rows), H.shape)
    return A, D, H

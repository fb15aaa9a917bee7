"""Matrices of one step: exponentials, their integrals against powers of time, and the blocks they are stacked from.

J_q(tau) = integral_0^tau e^{A(tau-r)} M (r/h)^q dr is read off the exponential of one block matrix (Van Loan, IEEE TAC
23(3) 1978); large sparse matrices are exponentiated by a scaled Taylor series, which keeps the band of a chain.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import comb, factorial
from typing import Any

import numpy as np

from synth.simulate.model import System

_DENSE = 400  # matrices with fewer rows are exponentiated dense


def inlet_maps(
    s: System, h: float, f: float, count: int, nv: int
) -> tuple[list[Any], list[Any], list[Any], list[Any], list[Any]]:
    """Step weights of one group's coefficients, and the rows that give v and v' at both ends of the step from them.

    On the first piece v(s) = sum_q c_q (f + s/h)^q for s < (1-f) h; on the second sum_q c_q ((s - (1-f) h)/h)^q.
    """
    one = eye(nv)
    if count == 1:
        return [input_map(s, s.D, h)], [one], [one], [0 * one], [0 * one]
    ones = [one] * 4
    if f == 0:
        weights = [input_map(s, s.D, h, q) for q in range(4)]
        at0 = [one] + [0 * one] * 3
        d0 = [0 * one, one / h, 0 * one, 0 * one]
        return weights, at0, ones, d0, [q * one / h for q in range(4)]
    early = [input_map(s, s.D, (1 - f) * h, q, h) for q in range(4)]
    rest = like_system(exponential(s.A * (f * h)), s)
    first = [rest @ sum((comb(q, j) * f ** (q - j) * early[j] for j in range(q + 1)), 0 * early[0]) for q in range(4)]
    second = [input_map(s, s.D, f * h, q, h) for q in range(4)]
    nothing = [0 * one] * 4
    at0, at1 = [f**q * one for q in range(4)] + nothing, nothing + [f**q * one for q in range(4)]
    slopes = [(q * f ** (q - 1) / h if q else 0.0) * one for q in range(4)]
    return first + second, at0, at1, slopes + nothing, nothing + slopes


def input_map(s: System, matrix: Any, tau: float, q: int = 0, h: float | None = None) -> Any:
    """integral_0^tau e^{A(tau-r)} M (r/h)^q dr, from the exponential of [[A tau, M tau, 0], [0, 0, I], [0, 0, 0]]."""
    from scipy import sparse

    M: Any = as_sparse(matrix)
    n, width = M.shape
    if width == 0 or n == 0:
        return zeros(n, width)
    one = eye(width)
    grid: list[list[Any]] = [[None] * (q + 2) for _ in range(q + 2)]
    grid[0][0], grid[0][1] = as_sparse(s.A) * tau, M * tau
    for i in range(1, q + 2):
        grid[i][i] = 0 * one
        if i <= q:
            grid[i][i + 1] = one
    whole = as_sparse(sparse.bmat(grid, format="csr"))
    top = exponential(whole)[:n, n + q * width :]
    ratio = 1.0 if h is None else (tau / h) ** q
    return as_sparse(top) * (factorial(q) * ratio)


def exponential(matrix: Any) -> Any:
    """e^M; dense by scipy, large sparse by scaled Taylor series with entries below rounding dropped."""
    from scipy.linalg import expm

    if isinstance(matrix, np.ndarray):
        return expm(matrix)
    return _sparse_exponential(matrix) if matrix.shape[0] > _DENSE else _drop(as_sparse(expm(matrix.toarray())))


def _sparse_exponential(matrix: Any) -> Any:
    """Taylor series of e^{M/2^k} (19 terms, |M|/2^k <= 1/2: remainder below 1e-22), squared k times."""
    norm = abs(matrix).sum(axis=1).max()
    halvings = max(0, int(np.ceil(np.log2(max(norm, 1e-300)))) + 1)
    small = as_sparse(matrix) * 0.5**halvings
    term = eye(matrix.shape[0])
    total = term
    for j in range(1, 20):
        term = _drop(term @ small / j)
        total = total + term
    for _ in range(halvings):
        total = _drop(total @ total)
    return total


def _drop(matrix: Any) -> Any:
    """Without the entries that are below rounding beside the largest of their row and of their column."""
    matrix = matrix.tocoo()
    if matrix.nnz == 0:
        return matrix.tocsr()
    size = np.abs(matrix.data)
    row, column = np.zeros(matrix.shape[0]), np.zeros(matrix.shape[1])
    np.maximum.at(row, matrix.row, size)
    np.maximum.at(column, matrix.col, size)
    keep = size > 1e-19 * np.minimum(row[matrix.row], column[matrix.col])
    from scipy import sparse

    return sparse.csr_matrix((matrix.data[keep], (matrix.row[keep], matrix.col[keep])), shape=matrix.shape)


def settle(rows: Sequence[Any], width: int) -> Any:
    """The rows as one matrix: dense, or sparse where fewer than a fifth of the entries are not zero and it is large."""
    from scipy import sparse

    matrix = sparse.vstack([as_sparse(r) for r in rows], format="csr")
    matrix.eliminate_zeros()
    if matrix.shape[0] * width < 20_000 or matrix.nnz > 0.2 * matrix.shape[0] * width:
        return matrix.toarray()
    return matrix


def like_system(matrix: Any, s: System) -> Any:
    """The matrix as the system keeps its own: sparse for a whole system, dense for a block."""
    return as_sparse(matrix) if s.whole else matrix


def as_sparse(matrix: Any) -> Any:
    """Any matrix as a scipy CSR matrix."""
    from scipy import sparse

    return sparse.csr_matrix(matrix)


def side_by_side(parts: Sequence[Any]) -> Any:
    """Matrices of one height beside each other, sparse."""
    from scipy import sparse

    return sparse.hstack([as_sparse(p) for p in parts], format="csr")


def zeros(height: int, width: int) -> Any:
    """A sparse zero matrix."""
    from scipy import sparse

    return sparse.csr_matrix((height, width))


def eye(size: int) -> Any:
    """A sparse identity."""
    from scipy import sparse

    return sparse.identity(size, format="csr")

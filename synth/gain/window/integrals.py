"""The integral of |h| over cells on which h is a polynomial, between bounds, for many kernels at once.

In Bernstein form a polynomial lies between its coefficients: where all have one sign the integral is their mean times
the length; where they have not, the cell is halved (de Casteljau), and what is still mixed at the end counts from
|mean| to mean of |coefficients|. Each halving divides that gap by four for a simple root. Rounding is bounded a priori.
"""

from __future__ import annotations

from functools import cache
from math import comb

import numpy as np

from synth.gain.window.doubles import Floats, U, gamma
from synth.gain.window.trajectory import DEGREE


@cache
def _to_bernstein() -> Floats:
    """Power basis on [0, 1] to Bernstein coefficients, (degree + 1, degree + 1); entries in [0, 1]."""
    return np.array(
        [[comb(i, j) / comb(DEGREE, j) if j <= i else 0.0 for j in range(DEGREE + 1)] for i in range(DEGREE + 1)]
    )


@cache
def _halves() -> tuple[Floats, Floats]:
    """Coefficients on the left and right half from those on the whole; the entries are exact and rows add up to one."""
    left = np.array([[comb(i, j) / 2.0**i if j <= i else 0.0 for j in range(DEGREE + 1)] for i in range(DEGREE + 1)])
    return left, left[::-1, ::-1].copy()


def bernstein_pieces(coefficients: Floats, depth: int) -> Floats:
    """Bernstein coefficients on 2^depth equal pieces of a cell, (pieces, degree + 1, ...) from (degree + 1, ...).

    Off by at most gamma(degree + 4) (depth + 2) times the sum of the absolute coefficients.
    """
    pieces = [np.tensordot(_to_bernstein(), coefficients, axes=1)]
    left, right = _halves()
    for _ in range(depth):
        pieces = [np.tensordot(half, piece, axes=1) for piece in pieces for half in (left, right)]
    return np.stack(pieces)


def absolute_integrals(
    coefficients: Floats, length: float, spread: Floats, depth: int, small: Floats
) -> tuple[Floats, Floats]:
    """Bounds of the integral of |p + e| over a cell of ``length``, |e| <= ``spread``, per polynomial.

    ``coefficients`` (polynomials, degree + 1) in powers of the cell's own time; ``depth``: how often a mixed piece is
    halved; ``small`` (polynomials,): pieces whose gap is below this are left. Returns lower and upper, (polynomials,).
    """
    b = coefficients @ _to_bernstein().T
    largest = np.abs(b).max(axis=1)
    # Errors of the conversion and of up to ``depth`` halvings, each a sum of degree + 1 products.
    slip = gamma(DEGREE + 4) * (np.abs(coefficients).sum(axis=1) + (depth + 1) * largest)
    loose = length * (spread + slip)
    lower, upper = np.zeros(len(b)), np.zeros(len(b))
    owner = np.arange(len(b))
    piece = length
    left, right = _halves()
    for level in range(depth + 1):
        mean = b.mean(axis=1)
        sizes = np.abs(b).mean(axis=1)
        mixed = np.minimum(b.min(axis=1), 0) * np.maximum(b.max(axis=1), 0) < 0
        mixed &= piece * (sizes - np.abs(mean)) > small[owner]
        done = ~mixed if level < depth else np.ones(len(b), dtype=bool)
        np.add.at(lower, owner[done], piece * np.abs(mean[done]))
        np.add.at(upper, owner[done], piece * sizes[done])
        if done.all():
            break
        b, owner = b[mixed], owner[mixed]
        b, owner = np.concatenate([b @ left.T, b @ right.T]), np.concatenate([owner, owner])
        piece /= 2
    sums = (2**depth + DEGREE + 8) * 2 * U
    return np.maximum(lower * (1 - sums) - loose, 0.0), upper * (1 + sums) + loose * (1 + sums)

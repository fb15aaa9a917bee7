"""Exact and outward-rounded arithmetic."""

from __future__ import annotations

from fractions import Fraction
from math import factorial, isqrt

from synth.proof.checking.reading import Matrix, Rejected, Row, need


def mul(X: Matrix, Y: Matrix, width: int) -> Matrix:
    """X Y, where Y has the given width (needed when Y has no rows)."""
    return [[sum((x * Y[k][j] for k, x in enumerate(row) if x), Fraction(0)) for j in range(width)] for row in X]


def plus(X: Matrix, Y: Matrix) -> Matrix:
    """X + Y."""
    return [[a + b for a, b in zip(*rows, strict=True)] for rows in zip(X, Y, strict=True)]


def transpose(X: Matrix) -> Matrix:
    """The transpose of a matrix with at least one row."""
    return [list(column) for column in zip(*X, strict=True)]


def definite(X: Matrix) -> bool:
    """Whether a symmetric matrix is positive definite: every pivot of its LDL' elimination is positive."""
    rest = [row[:] for row in X]
    while rest:
        top = rest[0]
        if top[0] <= 0:
            return False
        rest = [[v - row[0] * w / top[0] for v, w in zip(row[1:], top[1:], strict=True)] for row in rest[1:]]
    return True


def solve(X: Matrix, Y: Matrix) -> Matrix:
    """The matrix Z with X Z = Y, by exact Gauss-Jordan elimination; Rejected if X is singular."""
    size = len(X)
    rows = [list(x) + list(y) for x, y in zip(X, Y, strict=True)]
    for i in range(size):
        pivot = next((k for k in range(i, size) if rows[k][i]), None)
        if pivot is None:
            raise Rejected("a linear system of the proof is singular")
        rows[i], rows[pivot] = rows[pivot], rows[i]
        rows[i] = [v / rows[i][i] for v in rows[i]]
        for k in range(size):
            if k != i and rows[k][i]:
                rows[k] = [v - rows[k][i] * w for v, w in zip(rows[k], rows[i], strict=True)]
    return [row[size:] for row in rows]


def rounded(value: Fraction, up: bool) -> Fraction:
    """A number >= 0 cut to about 70 binary digits, upward or downward, so that fractions stay short."""
    shift = 70 + value.denominator.bit_length() - value.numerator.bit_length()
    scaled = value * Fraction(2) ** shift
    return Fraction(-(-scaled.numerator // scaled.denominator) if up else scaled.numerator // scaled.denominator) / (
        Fraction(2) ** shift
    )


def root(value: Fraction, up: bool = True) -> Fraction:
    """The square root of a number >= 0, rounded upward (or downward) at about 70 binary digits."""
    need(value >= 0, "a square root of a negative number was met")
    shift = 70 + max(0, value.denominator.bit_length() - value.numerator.bit_length())
    low = isqrt((value.numerator << (2 * shift)) // value.denominator)
    return Fraction(low + (1 if up and value else 0), 1 << shift)


def exp_above(x: Fraction) -> Fraction:
    """An upper bound of e^x for x >= 0: the series of x/2^k with its remainder, squared k times."""
    need(0 <= x <= 700, "an exponent is out of range")
    halvings = max(0, x.numerator.bit_length() - x.denominator.bit_length() + 3)
    y = rounded(x / 2**halvings, up=True)
    total = sum((y**j / factorial(j) for j in range(20)), Fraction(0)) + 2 * y**20 / factorial(20)
    for _ in range(halvings + 1):
        total = rounded(total, up=True)
        total = total * total if _ < halvings else total
    return total


def apply(M: Matrix, s: Row) -> Row:
    """M s."""
    return [sum((m * v for m, v in zip(row, s, strict=True)), Fraction(0)) for row in M]


def resolvent(M: Matrix, b: Row) -> Row:
    """y with (I - M) y = b, exactly."""
    system = [[Fraction(i == j) - v for j, v in enumerate(row)] for i, row in enumerate(M)]
    return [row[0] for row in solve(system, [[v] for v in b])]


def contraction(M: Matrix) -> None:
    """Rejected unless the radius of M >= 0 is below 1: y = M y + 1 > M y with y > 0 (10)."""
    y = resolvent(M, [Fraction(1)] * len(M))
    need(all(v > 0 for v in y), "the weighted gain operator does not contract at the claimed rate")


def least(images: Row, low: Row) -> Fraction:
    """The lower bound inf over {low > 0} of image/low of the radius (10); zero where low vanishes altogether."""
    return min((v / w for v, w in zip(images, low, strict=True) if w), default=Fraction(0))

"""Linear algebra over the rationals, for tests that must not depend on a tolerance.

Law: ``null_space`` spans exactly the vectors that the rows send to zero; ``hurwitz`` is true if and only if every root
has a negative real part.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

Rows = list[list[Fraction]]


def reduced(rows: Sequence[Sequence[Fraction]], width: int) -> tuple[Rows, list[int]]:
    """The reduced row echelon form without zero rows, and the pivot columns."""
    table = [list(row) for row in rows]
    pivots: list[int] = []
    for column in range(width):
        at = len(pivots)
        found = next((i for i in range(at, len(table)) if table[i][column]), None)
        if found is None:
            continue
        table[at], table[found] = table[found], table[at]
        lead = table[at][column]
        table[at] = [v / lead for v in table[at]]
        for i, row in enumerate(table):
            if i != at and row[column]:
                factor = row[column]
                table[i] = [a - factor * b for a, b in zip(row, table[at], strict=True)]
        pivots.append(column)
    return table[: len(pivots)], pivots


def rank(rows: Sequence[Sequence[Fraction]], width: int) -> int:
    """The exact rank."""
    return len(reduced(rows, width)[1])


def null_space(rows: Sequence[Sequence[Fraction]], width: int) -> tuple[Rows, list[int]]:
    """Vectors spanning the null space, and the columns in which they form an identity."""
    table, pivots = reduced(rows, width)
    free = [j for j in range(width) if j not in pivots]
    basis: Rows = []
    for j in free:
        vector = [Fraction(0)] * width
        vector[j] = Fraction(1)
        for row, pivot in zip(table, pivots, strict=True):
            vector[pivot] = -row[j]
        basis.append(vector)
    return basis, free


def times(matrix: Sequence[Sequence[Fraction]], vector: Sequence[Fraction]) -> list[Fraction]:
    """Matrix times vector."""
    return [sum((a * b for a, b in zip(row, vector, strict=True) if a and b), Fraction(0)) for row in matrix]


def transposed(matrix: Sequence[Sequence[Fraction]], width: int) -> Rows:
    """The transpose; ``width`` is the number of columns (needed where there are no rows)."""
    return [[row[j] for row in matrix] for j in range(width)]


def unseen(A: Sequence[Sequence[Fraction]], C: Sequence[Sequence[Fraction]]) -> tuple[Rows, Rows]:
    """A basis of the largest A-invariant subspace in the kernel of C, and the matrix of A on that basis.

    Textbook construction: the rows C, C A, C A^2, ... are collected until no new direction appears.
    """
    n = len(A)
    across = transposed(A, n)
    table, pivots = reduced(C, n)
    fresh = [list(row) for row in table]
    while fresh and len(pivots) < n:
        images = [times(across, row) for row in fresh]
        before = len(pivots)
        table, pivots = reduced([*table, *images], n)
        fresh = table if len(pivots) > before else []
    basis, free = null_space(table, n)
    images = [times(A, vector) for vector in basis]
    inner = [[image[row] for image in images] for row in free]
    return basis, inner


def characteristic(A: Sequence[Sequence[Fraction]]) -> list[Fraction]:
    """Coefficients of det(sI - A), highest power first (Faddeev and LeVerrier)."""
    n = len(A)
    coefficients = [Fraction(1)]
    current = [[Fraction(int(i == j)) for j in range(n)] for i in range(n)]
    columns = transposed(A, n)
    for k in range(1, n + 1):
        product = [[sum((a * b for a, b in zip(row, c, strict=True)), Fraction(0)) for c in columns] for row in current]
        c = -sum((product[i][i] for i in range(n)), Fraction(0)) / k
        coefficients.append(c)
        for i in range(n):
            product[i][i] += c
        current = product
    return coefficients


def hurwitz(coefficients: Sequence[Fraction]) -> bool:
    """Whether every root of the polynomial (leading coefficient 1 first) has a negative real part (Routh's array)."""
    above, below = list(coefficients[0::2]), list(coefficients[1::2])
    for _ in range(len(coefficients) - 1):
        if not below or below[0] <= 0:
            return False
        padded = below + [Fraction(0)] * (len(above) - len(below))
        following = [
            above[i + 1] - above[0] * padded[i + 1] / below[0] for i in range(len(above) - 1)
        ]  # the array's next row
        above, below = below, following
    return True

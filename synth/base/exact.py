"""Matrices of exact rational numbers, so that what is proven is about the numbers the user wrote.

A decimal such as ``0.1`` stays one tenth; floats enter only as the dyadic rationals they are.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, TypeAlias

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

Number: TypeAlias = int | float | str | Fraction


def exact(value: Number) -> Fraction:
    """Turn a number into the rational it is: text by its decimal digits, a float by its binary digits.

    Raises ValueError for text that is no number and OverflowError for infinities and NaN.
    """
    return value if isinstance(value, Fraction) else Fraction(value)


@dataclass(frozen=True)
class ExactMatrix:
    """A frozen matrix of rationals; ``shape`` is kept apart so that empty matrices keep their width.

    Law: ``(a @ b).floats()`` is the correctly rounded product of the exact entries.
    """

    rows: tuple[tuple[Fraction, ...], ...]
    shape: tuple[int, int]

    @staticmethod
    def of(rows: Iterable[Iterable[Number]], shape: tuple[int, int] | None = None) -> ExactMatrix:
        """Build from nested sequences (or a 2-D array); ``shape`` is needed only where a side is empty.

        Raises ValueError if rows differ in length or the shape does not fit.
        """
        table = tuple(tuple(exact(_plain(value)) for value in row) for row in rows)
        found = (len(table), len(table[0]) if table else (shape[1] if shape else 0))
        if any(len(row) != found[1] for row in table):
            raise ValueError("the rows of a matrix differ in length")
        if shape is not None and found != tuple(shape):
            raise ValueError(f"a matrix of shape {shape} was expected, not {found}")
        return ExactMatrix(table, found)

    @staticmethod
    def zeros(height: int, width: int) -> ExactMatrix:
        """The zero matrix of the given shape."""
        return ExactMatrix(((Fraction(0),) * width,) * height, (height, width))

    @staticmethod
    def identity(size: int) -> ExactMatrix:
        """The identity of the given size."""
        return ExactMatrix(tuple(tuple(Fraction(int(i == j)) for j in range(size)) for i in range(size)), (size, size))

    def floats(self) -> NDArray[np.float64]:
        """The nearest doubles, as a writable array of the same shape."""
        import numpy as np

        return np.array([[float(v) for v in row] for row in self.rows], dtype=float).reshape(self.shape)

    @property
    def T(self) -> ExactMatrix:
        """The transpose."""
        height, width = self.shape
        return ExactMatrix(tuple(tuple(self.rows[i][j] for i in range(height)) for j in range(width)), (width, height))

    def __getitem__(self, key: tuple[int, int]) -> Fraction:
        """Entry (row, column), counted from 0."""
        return self.rows[key[0]][key[1]]

    def column(self, j: int) -> ExactMatrix:
        """Column j as a matrix of width one."""
        return ExactMatrix(tuple((row[j],) for row in self.rows), (self.shape[0], 1))

    def row(self, i: int) -> ExactMatrix:
        """Row i as a matrix of height one."""
        return ExactMatrix((self.rows[i],), (1, self.shape[1]))

    def __add__(self, other: ExactMatrix) -> ExactMatrix:
        """Entrywise sum; ValueError unless the shapes are equal."""
        if self.shape != other.shape:
            raise ValueError(f"shapes {self.shape} and {other.shape} cannot be added")
        return ExactMatrix(
            tuple(tuple(a + b for a, b in zip(r, s, strict=True)) for r, s in zip(self.rows, other.rows, strict=True)),
            self.shape,
        )

    def __sub__(self, other: ExactMatrix) -> ExactMatrix:
        """Entrywise difference."""
        return self + other.scaled(-1)

    def __matmul__(self, other: ExactMatrix) -> ExactMatrix:
        """Matrix product; ValueError unless the inner sizes agree."""
        if self.shape[1] != other.shape[0]:
            raise ValueError(f"shapes {self.shape} and {other.shape} cannot be multiplied")
        columns = other.T.rows
        return ExactMatrix(
            tuple(
                tuple(sum((a * b for a, b in zip(row, col, strict=True)), Fraction(0)) for col in columns)
                for row in self.rows
            ),
            (self.shape[0], other.shape[1]),
        )

    def scaled(self, factor: Number) -> ExactMatrix:
        """Every entry times ``factor``."""
        f = exact(factor)
        return ExactMatrix(tuple(tuple(f * v for v in row) for row in self.rows), self.shape)

    def texts(self) -> list[list[str]]:
        """Entries as exact texts ('1/10'), the form in which certificates carry them."""
        return [[str(value) for value in row] for row in self.rows]


def _plain(value: object) -> Number:
    """Numpy scalars become Python numbers; everything else is passed on."""
    item = getattr(value, "item", None)
    return item() if callable(item) else value  # type: ignore[return-value]


def vector(values: Sequence[Number]) -> ExactMatrix:
    """A column of rationals."""
    return ExactMatrix.of([[v] for v in values], (len(values), 1))

"""A non-negative matrix in the coordinates of a positive point: entry g_ij p_j / p_i, whose row sums are the quotients.

The point p = mantissa * 2**exponent may leave the range of doubles as long as neighbours stay within it of each other;
entries that fall out of range below become zero, those above are cut, and only the guide suffers, never a bound.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from synth.gain.operator import GainOperator
from synth.gain.points import Exponents, Floats, from_logarithms, normal

_LARGEST = 1e200


class Frame:
    """The matrix ``B`` (csr) of a linear operator in the coordinates of the current point."""

    def __init__(self, inner: GainOperator, squared: bool) -> None:
        """Coordinates one; ``squared``: with the squares of all gains."""
        into = inner.links_into
        small = np.int32 if max(inner.size, inner.gain.size) < 2**31 - 1 else np.int64
        self.size = inner.size
        self.start: NDArray[np.signedinteger] = into.start.astype(small)
        self.source: NDArray[np.signedinteger] = inner.source[into.order].astype(small)
        self.row: NDArray[np.signedinteger] = np.repeat(np.arange(inner.size, dtype=small), np.diff(into.start))
        factor, power = np.frexp(inner.gain[into.order])
        # Gains times a common power of two, so that the largest is near one whatever the units.
        self.shift = int(power.max())
        if squared:
            factor, power = factor * factor, 2 * power
            self.shift *= 2
        self.gain = factor
        self.power = power.astype(np.int64) - self.shift
        self.mantissa: Floats = np.ones(inner.size)
        self.exponent: Exponents = np.zeros(inner.size, dtype=np.int64)
        self.wide = bool(self.power.min() < -10)
        self.build()

    def build(self) -> None:
        """B from the links and the point."""
        with np.errstate(all="ignore"):
            data = self.gain * self.mantissa[self.source]
            data /= self.mantissa[self.row]
            power = self.power + self.exponent[self.source]
            power -= self.exponent[self.row]
            data = np.ldexp(data, np.clip(power, -1200, 1000).astype(np.int32))
        self.B = csr_array((np.minimum(data, _LARGEST), self.source, self.start), shape=(self.size, self.size))

    def move(self, mantissa: Floats, exponent: Exponents | None) -> None:
        """Take another point as the coordinates."""
        self.mantissa, self.exponent = normal(mantissa, exponent)
        self.build()

    def rescale(self, x: Floats) -> None:
        """Multiply the point by x > 0."""
        x = np.maximum(x / x.max(), 1e-250)
        new = self.mantissa * x
        if self.wide or new.min() < 1e-100 or self.exponent.any():
            self.move(new, self.exponent)
            return
        # All within doubles: the matrix follows, and its rounding only concerns the guide.
        self.mantissa = new
        data = self.B.data * x[self.source]
        data /= x[self.row]
        self.B = csr_array((data, self.source, self.start), shape=self.B.shape)

    def move_by_logarithms(self, logarithm: Floats) -> None:
        """Take the point with the given binary logarithms."""
        self.move(*from_logarithms(logarithm))

    @property
    def quotients(self) -> Floats:
        """Row sums: the quotients of the point, divided by 2**shift."""
        return np.asarray(np.bincount(self.row, weights=self.B.data, minlength=self.size), dtype=float)

    def place(self, x: Floats) -> tuple[Floats, Exponents]:
        """A vector in these coordinates (zeros allowed) as mantissa and exponent of the original ones."""
        return normal(self.mantissa * x, self.exponent)

    def ball(self, seeds: NDArray[np.intp], most: int) -> NDArray[np.intp]:
        """Outlets within as many links upstream of ``seeds`` as keep their number near ``most``, seeds first."""
        taken = np.zeros(self.size, dtype=bool)
        taken[seeds] = True
        found, count, edge = [seeds], seeds.size, seeds
        while count < most and edge.size:
            begin, length = self.start[edge], self.start[edge + 1] - self.start[edge]
            within = np.arange(int(length.sum())) - np.repeat(np.cumsum(length) - length, length)
            near = self.source[np.repeat(begin, length) + within]
            edge = np.unique(near[~taken[near]]).astype(np.intp)
            taken[edge] = True
            found.append(edge)
            count += edge.size
        return np.concatenate(found)

    def block(self, members: NDArray[np.intp]) -> csr_array:
        """B between the given outlets, in their order."""
        return self.B[members][:, members]

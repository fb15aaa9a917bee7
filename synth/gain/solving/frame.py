"""A non-negative matrix in the coordinates of a positive point: entry g_ij p_j / p_i, whose row sums are the quotients.

The point p = mantissa * 2**exponent may leave the range of doubles as long as neighbours stay within it of each other;
entries that fall out of range below become zero, those above are cut, and only the guide suffers, never a bound.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import breadth_first_order

from synth.gain.operator import GainOperator
from synth.gain.solving.points import Exponents, Floats, normal

_LARGEST = 1e200


class Frame:
    """The matrix ``B`` (csr) of a linear operator in the coordinates of the current point."""

    def __init__(self, inner: GainOperator, squared: bool) -> None:
        """Coordinates one; ``squared``: with the squares of all gains."""
        self.size = inner.size
        self.mantissa: Floats = np.ones(inner.size)
        self.exponent: Exponents = np.zeros(inner.size, dtype=np.int64)
        if inner.linear:
            matrix = inner.matrix
            gain, self.start, self.source = matrix.data, matrix.indptr, matrix.indices
        else:
            into = inner.links_into
            small = np.int32 if max(inner.size, inner.gain.size) < 2**31 - 1 else np.int64
            gain, self.start = inner.gain[into.order], into.start.astype(small)
            self.source = inner.source[into.order].astype(small)
        # Gains times a common power of two, so that the largest is near one whatever the units.
        self.shift = int(np.frexp(gain.max())[1])
        self.wide = bool(np.frexp(gain.min())[1] - self.shift < (-5 if squared else -10))
        self._gain, self._squared = gain, squared
        # Of what is out of range here only wide gains have something: they are built anew from mantissas.
        data = np.ldexp(gain, -self.shift)
        self.B = csr_array((data * data if squared else data, self.source, self.start), shape=(self.size, self.size))

    @cached_property
    def row(self) -> NDArray[np.signedinteger]:
        """The outlet every entry of B belongs to."""
        return np.repeat(np.arange(self.size, dtype=self.source.dtype), np.diff(self.start))

    @cached_property
    def _factors(self) -> tuple[Floats, NDArray[np.int64]]:
        """Mantissas and exponents of the entries in coordinates one."""
        factor, power = np.frexp(self._gain)
        power = power.astype(np.int64) - self.shift
        return (factor * factor, 2 * power) if self._squared else (factor, power)

    def build(self) -> None:
        """B from the links and the point."""
        factor, power = self._factors
        with np.errstate(all="ignore"):
            data = factor * self.mantissa[self.source]
            data /= self.mantissa[self.row]
            power = power + self.exponent[self.source]
            power -= self.exponent[self.row]
            data = np.ldexp(data, np.clip(power, -1200, 1000).astype(np.int32))
        self.B.data = np.minimum(data, _LARGEST)

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
        self.B.data = data

    @property
    def quotients(self) -> Floats:
        """Row sums: the quotients of the point, divided by 2**shift."""
        return np.asarray(self.B @ np.ones(self.size), dtype=float)

    def place(self, x: Floats) -> tuple[Floats, Exponents]:
        """A vector in these coordinates (zeros allowed) as mantissa and exponent of the original ones."""
        return normal(self.mantissa * x, self.exponent)

    def ball(self, seeds: NDArray[np.intp], most: int) -> NDArray[np.intp]:
        """Outlets within as many links upstream of ``seeds`` as keep their number near ``most``, seeds first."""
        if seeds.size == 1:
            # Compiled, as on a line the layers are many; whole networks take a millisecond per 50,000 links.
            return breadth_first_order(self.B, int(seeds[0]), return_predecessors=False)[:most].astype(np.intp)
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

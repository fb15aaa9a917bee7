"""Points with one binary exponent per outlet: positive numbers that may span far more than the range of doubles.

A chain of units that amplifies ten times per unit spans e^700000 over its length. The value of such a point at outlet i
is ``mantissa[i] * 2**exponent[i]``; doubles alone cannot hold it, and a point that left their range would prove
nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Exponents = NDArray[np.int64]
# Exponents beyond this would overflow when they are subtracted from each other; no finite operator needs them.
LARGEST_EXPONENT = 2**61


@dataclass(frozen=True, eq=False)
class ClassPoint:
    """What a solver of one strongly connected class hands back; bounds are worked out from it, never taken from it.

    ``point`` (size,) > 0, for the upper bound, is ``point * 2**exponent`` (``exponent`` int64 (size,), or None: zero);
    ``low_point`` (size,) >= 0, not all zero, for the lower bound, may be zero on a part, with ``low_exponent`` alike;
    ``method`` names the way in words; ``work`` counts operator evaluations and solves. ``loop``: where the solver found
    it, the closed loop of links (each followed by the one that feeds it) that holds the radius of max rows up.
    """

    point: Floats
    exponent: Exponents | None
    low_point: Floats
    low_exponent: Exponents | None
    method: str
    work: int
    loop: tuple[int, ...] | None = None


def normal(mantissa: Floats, exponent: Exponents | None) -> tuple[Floats, Exponents]:
    """The same point with every positive mantissa in [1/2, 1) (exactly); zeros stay zero with exponent 0."""
    fraction, shift = np.frexp(mantissa)
    total = shift.astype(np.int64) if exponent is None else shift.astype(np.int64) + exponent
    return fraction, np.where(fraction > 0, total, 0)


def plain(mantissa: Floats, exponent: Exponents | None) -> Floats | None:
    """The point as doubles with largest entry above 1/2, at most 1; None where doubles cannot hold it precisely."""
    fraction, shift = normal(mantissa, exponent)
    positive = fraction > 0
    if not positive.any():
        return None
    shift = shift - shift[positive].max()
    if shift[positive].min() < -1000:
        return None
    values: Floats = np.ldexp(fraction, shift)
    return 2.0 * values if values.max() == 0.5 else values


def from_logarithms(logarithm: Floats) -> tuple[Floats, Exponents]:
    """The point whose binary logarithms are given (-inf: zero), to rounding."""
    finite = np.isfinite(logarithm)
    whole = np.where(finite, np.floor(logarithm), 0.0)
    mantissa = np.where(finite, np.exp2(np.where(finite, logarithm, 0.0) - whole), 0.0)
    return mantissa, whole.astype(np.int64)

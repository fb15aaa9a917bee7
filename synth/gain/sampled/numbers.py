"""Numbers as a controller stores them: fixed point and binary floating point, exactly, and what rounding can add up to.

Everything is rational arithmetic on the stored values themselves, so that a proof is about the numbers as flashed.
"""

from __future__ import annotations

import math
import struct
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix, Number, exact
from synth.network.gains import Gains, GainSet
from synth.network.rounding import Rounding

ROUNDINGS = ("half away from zero", "half to even", "down")


@dataclass(frozen=True)
class FixedPoint:
    """Two's complement numbers of ``word`` bits of which ``fraction`` stand behind the point (Q15: 16 and 15).

    Law: for values in range |x - round(x)| <= step/2 (rounding down: < step); beyond the range the nearest end counts
    (saturation), so that -1 times -1 in Q15 is 1 - 2^-15.
    """

    word: int = 16
    fraction: int = 15
    rounding: str = "half away from zero"

    def __post_init__(self) -> None:
        """Refuse words without a sign bit, and roundings that are not known."""
        if not (2 <= self.word <= 64 and -64 <= self.fraction <= 128):
            raise InputError("a fixed-point word has 2 to 64 bits, and -64 to 128 of them behind the point.")
        if self.rounding not in ROUNDINGS:
            raise InputError(f"rounding {self.rounding!r} is not known; use one of: {', '.join(ROUNDINGS)}.")

    @property
    def step(self) -> Fraction:
        """The distance of neighbouring numbers."""
        return Fraction(2) ** -self.fraction

    @property
    def lowest(self) -> Fraction:
        """The most negative number."""
        return -(Fraction(2) ** (self.word - 1)) * self.step

    @property
    def highest(self) -> Fraction:
        """The largest number."""
        return (Fraction(2) ** (self.word - 1) - 1) * self.step

    def round(self, value: Number) -> Fraction:
        """The stored number for ``value``: rounded, then saturated."""
        return min(max(rounded(exact(value) / self.step, self.rounding) * self.step, self.lowest), self.highest)

    def fits(self, value: Number) -> bool:
        """Whether ``value`` is stored without saturating."""
        return self.lowest <= rounded(exact(value) / self.step, self.rounding) * self.step <= self.highest


def rounded(value: Fraction, rounding: str) -> int:
    """The whole number that ``value`` is rounded to."""
    low = value.numerator // value.denominator
    rest = value - low
    if rounding == "down" or rest < Fraction(1, 2):
        return low
    if rest > Fraction(1, 2):
        return low + 1
    if rounding == "half to even":
        return low + low % 2
    return low + 1 if value > 0 else low


def gains_as_flashed(gains: Gains, numbers: FixedPoint) -> Gains:
    """The gains as fixed-point words hold them; InputError names every gain that would saturate.

    Law: every row of n gains changes by at most n step/2 in the sum of absolute values.
    """
    wrong = [
        f"{one.kind}: {actuator} {signal} = {float(value):g}"
        for one in gains.sets
        for actuator, row in zip(one.actuators, one.K.rows, strict=True)
        for signal, value in zip(one.signals, row, strict=True)
        if not numbers.fits(value)
    ]
    if wrong:
        raise InputError(
            f"these gains do not fit into [{float(numbers.lowest):g}, {float(numbers.highest):g}]: {'; '.join(wrong)}; "
            "give the word fewer bits behind the point, or scale the signals."
        )
    return _each(gains, numbers.round)


def stored_gains(gains: Gains, rounding: Rounding) -> Gains:
    """The gains as the code stores them: in fixed-point words, in single or double precision, or digit for digit.

    ``rounding`` says which. Law: stored_gains(stored_gains(g, r), r) == stored_gains(g, r). InputError where a gain is
    beyond the range of such numbers.
    """
    if rounding.word is not None and rounding.fraction is not None:
        return gains_as_flashed(gains, FixedPoint(rounding.word, rounding.fraction))
    if rounding.form == "exact":
        return gains
    return _each(gains, _single if rounding.form == "single" else _double)


def _each(gains: Gains, change: Callable[[Fraction], Fraction]) -> Gains:
    return Gains(
        tuple(
            GainSet(
                one.kind,
                one.actuators,
                one.signals,
                ExactMatrix(tuple(tuple(change(v) for v in row) for row in one.K.rows), one.K.shape),
            )
            for one in gains.sets
        )
    )


def _double(value: Fraction) -> Fraction:
    """The nearest number of double precision."""
    if abs(value) > Fraction(10) ** 300:
        raise InputError(f"the gain {float(value):g} is too large to be kept in floating point; scale the signals.")
    return Fraction(float(value))


def _single(value: Fraction) -> Fraction:
    """The number of single precision nearest to the double that is nearest to the value."""
    try:
        (found,) = struct.unpack("f", struct.pack("f", float(_double(value))))
    except OverflowError:
        found = math.inf
    if not math.isfinite(found):
        raise InputError(f"the gain {float(value):g} is too large for single precision; scale the signals.")
    return Fraction(found)


def unit_roundoff(form: str) -> Fraction:
    """Largest relative rounding error of IEEE 754-2019 'single' (2^-24) or 'double' (2^-53) arithmetic."""
    known = {"single": Fraction(1, 2**24), "double": Fraction(1, 2**53)}
    if form not in known:
        raise InputError(f"{form!r} is not a floating-point form; use 'single' or 'double'.")
    return known[form]


def row_error(products: int, form: str = "single") -> tuple[Fraction, Fraction]:
    """(relative, absolute) bound of the error of a sum of that many products in floating point, in any order.

    The error is at most relative * sum |K_j| |y_j| + absolute, for 0 <= products <= 1000 and values that do not
    overflow; each product rounds once and each of them passes at most products - 1 sums: ((1 + u)^n - 1) <= (n + 1) u;
    absolute covers products below the smallest normal number. Source: the standard model of rounding, ours to (n + 1).
    """
    if not 0 <= products <= 1000:
        raise InputError(f"a row of 0 to 1000 products was expected, not {products}.")
    smallest = Fraction(1, 2**150) if form == "single" else Fraction(1, 2**1075)
    return (products + 1) * unit_roundoff(form), products * 2 * smallest

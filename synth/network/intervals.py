"""Intervals of rationals with outward rounding: what bounds nonlinear terms and uncertain coefficients.

Sums, products and quotients are exact until an end gets longer than ``KEPT`` bits; it is then rounded outward to
``BITS`` bits. Irrational functions are enclosed by ball arithmetic at the ends, where they are monotone.

Law: if x is in X, then f(x) is in ``apply(f, X)`` and every slope of f on X is in ``slope(f, X)``; where f is not
defined on all of X, Undefined is raised. (Moore, Kearfott, Cloud, Introduction to Interval Analysis, 2009.)
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache

KEPT = 240
BITS = 120
LARGEST_ARGUMENT = 10**6


class Undefined(Exception):
    """A function has no value, or no bounded slope, somewhere on an interval; one sentence without full stop."""


def rounded_down(value: Fraction, kept: int = KEPT, bits: int = BITS) -> Fraction:
    """The value, or the largest number of ``bits`` bits below it if it is longer than ``kept`` bits."""
    above, below = value.numerator, value.denominator
    if above.bit_length() + below.bit_length() <= kept:
        return value
    shift = bits - above.bit_length() + below.bit_length()
    if shift >= 0:
        return Fraction((above << shift) // below, 1 << shift)
    return Fraction((above // (below << -shift)) << -shift)


@dataclass(frozen=True)
class Interval:
    """All numbers from ``low`` to ``high``, both included."""

    low: Fraction
    high: Fraction

    @staticmethod
    def of(low: Fraction, high: Fraction | None = None) -> Interval:
        """The interval with these ends, rounded outward; one number counts as both."""
        return Interval(rounded_down(low), -rounded_down(-(low if high is None else high)))

    @property
    def middle(self) -> Fraction:
        """Half way between the ends."""
        return (self.low + self.high) / 2

    @property
    def half(self) -> Fraction:
        """Half the width."""
        return (self.high - self.low) / 2

    @property
    def size(self) -> Fraction:
        """The largest absolute value."""
        return max(abs(self.low), abs(self.high))

    def __contains__(self, value: Fraction | int) -> bool:
        """Whether the number lies in it."""
        return self.low <= value <= self.high

    def __neg__(self) -> Interval:
        """All negatives."""
        return Interval(-self.high, -self.low)

    def __add__(self, other: Interval) -> Interval:
        """All sums."""
        return Interval.of(self.low + other.low, self.high + other.high)

    def __sub__(self, other: Interval) -> Interval:
        """All differences."""
        return Interval.of(self.low - other.high, self.high - other.low)

    def __mul__(self, other: Interval) -> Interval:
        """All products."""
        if self.low == self.high and other.low == other.high:
            return Interval.of(self.low * other.low)
        ends = [a * b for a in (self.low, self.high) for b in (other.low, other.high)]
        return Interval.of(min(ends), max(ends))

    def __truediv__(self, other: Interval) -> Interval:
        """All quotients; Undefined if the divisor may be zero."""
        if 0 in other:
            raise Undefined("the divisor may be zero")
        return self * Interval.of(1 / other.high, 1 / other.low)

    def __pow__(self, power: int) -> Interval:
        """All whole powers; Undefined for a negative power of what may be zero."""
        if power < 0:
            return ONE / self**-power
        low, high = self.low**power, self.high**power
        if power % 2 == 0 and power:
            return Interval.of(Fraction(0) if 0 in self else min(low, high), max(low, high))
        return Interval.of(low, high)

    def hull(self, other: Interval) -> Interval:
        """The smallest interval that holds both."""
        return Interval(min(self.low, other.low), max(self.high, other.high))

    def common(self, other: Interval) -> Interval:
        """What both hold; both are known to hold one true value, so it is never empty."""
        return Interval(max(self.low, other.low), min(self.high, other.high))

    def halves(self) -> tuple[Interval, Interval]:
        """Two parts that cover it."""
        middle = self.middle
        return Interval(self.low, middle), Interval(middle, self.high)


ZERO = Interval(Fraction(0), Fraction(0))
ONE = Interval(Fraction(1), Fraction(1))


@lru_cache(maxsize=1024)
def ball(name: str, value: Fraction, power: Fraction = Fraction(1)) -> Interval:
    """An enclosure of exp, sin, cos, tanh, log or x**power at one point (or of pi); about 38 digits."""
    from flint import arb, ctx, fmpq

    before, ctx.prec = ctx.prec, 140
    try:
        x = arb(fmpq(value.numerator, value.denominator))
        if name == "power":
            found = x ** arb(fmpq(power.numerator, power.denominator))
        elif name == "pi":
            found = arb.pi()
        else:
            found = getattr(x, name)()
        if not found.is_finite():
            raise Undefined(f"{name} is too large here")
        ends = [end.man_exp() for end in (found.lower(), found.upper())]
    finally:
        ctx.prec = before
    low, high = (Fraction(int(m)) * Fraction(2) ** int(e) for m, e in ends)
    return Interval.of(low, high)


def root(X: Interval) -> Interval:
    """Square roots, exact where they are rational; Undefined if a number may be negative."""
    if X.low < 0:
        raise Undefined("sqrt of what may be negative")

    def down(value: Fraction) -> Fraction:
        above, below = math.isqrt(value.numerator), math.isqrt(value.denominator)
        if above**2 == value.numerator and below**2 == value.denominator:
            return Fraction(above, below)
        shift = max(0, BITS - (value.numerator.bit_length() - value.denominator.bit_length()) // 2)
        return Fraction(math.isqrt((value.numerator << 2 * shift) // value.denominator), 1 << shift)

    low, high = down(X.low), down(X.high)
    if high * high < X.high:
        shift = max(0, BITS - (X.high.numerator.bit_length() - X.high.denominator.bit_length()) // 2)
        high += Fraction(1, 1 << shift)
    return Interval(low, high)


def real_power(X: Interval, power: Fraction) -> Interval:
    """x**power for a power that is not whole; Undefined if x may be negative (or zero, for a negative power)."""
    if X.low < 0 or (X.low == 0 and power < 0):
        raise Undefined(
            "a power that is not whole, of what may be negative" if X.low < 0 else "the divisor may be zero"
        )

    def at(value: Fraction) -> Interval:
        return ZERO if value == 0 else ball("power", value, power)

    return at(X.low).hull(at(X.high))


def _monotone(name: str) -> Callable[[Interval], Interval]:
    def function(X: Interval) -> Interval:
        if X.size > LARGEST_ARGUMENT:
            raise Undefined(f"the argument of {name} may be larger than {LARGEST_ARGUMENT}")
        return Interval(_at(name, X.low).low, _at(name, X.high).high)

    return function


def _at(name: str, value: Fraction) -> Interval:
    if value == 0:
        return ONE if name in ("exp", "cos") else ZERO
    return ball(name, value)


def _wave(name: str, crest: Fraction) -> Callable[[Interval], Interval]:
    """sin or cos; ``crest`` is the place of its maximum in turns."""

    def holds(X: Interval, at: Fraction) -> bool:
        """Whether X may hold a point at ``at`` turns plus a whole number of turns."""
        turn = ball("pi", Fraction(0)) * Interval.of(Fraction(2))
        turns = X / turn - Interval.of(at)
        return math.ceil(turns.low) <= math.floor(turns.high)

    def function(X: Interval) -> Interval:
        if X.size > LARGEST_ARGUMENT:
            raise Undefined(f"the argument of {name} may be larger than {LARGEST_ARGUMENT}")
        ends = _at(name, X.low).hull(_at(name, X.high))
        if X.low == X.high:
            return ends
        low = Fraction(-1) if holds(X, crest + Fraction(1, 2)) else max(ends.low, Fraction(-1))
        return Interval(low, Fraction(1) if holds(X, crest) else min(ends.high, Fraction(1)))

    return function


def absolute(X: Interval) -> Interval:
    """All absolute values."""
    low = Fraction(0) if 0 in X else min(abs(X.low), abs(X.high))
    return Interval(low, X.size)


def least(X: Interval, Y: Interval) -> Interval:
    """All smaller values of pairs."""
    return Interval(min(X.low, Y.low), min(X.high, Y.high))


def greatest(X: Interval, Y: Interval) -> Interval:
    """All larger values of pairs."""
    return Interval(max(X.low, Y.low), max(X.high, Y.high))


_sine, _cosine = _wave("sin", Fraction(1, 4)), _wave("cos", Fraction(0))
_APPLY: dict[str, Callable[[Interval], Interval]] = {
    "sqrt": root,
    "abs": absolute,
    "exp": _monotone("exp"),
    "tanh": _monotone("tanh"),
    "sin": _sine,
    "cos": _cosine,
}


def apply(name: str, X: Interval) -> Interval:
    """All values of the function of one argument called ``name``."""
    return _APPLY[name](X)


def slope(name: str, X: Interval) -> Interval:
    """All slopes of that function (at a corner: everything between the two sides)."""
    if name == "abs":
        return Interval(Fraction(1 if X.low >= 0 else -1), Fraction(-1 if X.high <= 0 else 1)) if X.size else _BOTH
    if name == "sqrt":
        if X.low <= 0:
            raise Undefined("sqrt of what may be negative" if X.low < 0 else "the slope of sqrt has no bound at zero")
        return ONE / (Interval.of(Fraction(2)) * root(X))
    if name == "exp":
        return apply("exp", X)
    if name == "tanh":
        return ONE - apply("tanh", X) ** 2
    return apply("cos", X) if name == "sin" else -apply("sin", X)


def bend_of(name: str, X: Interval) -> Interval | None:
    """All second derivatives of that function; None where it has a corner."""
    if name == "abs":
        return ZERO if 0 not in X else None
    if name == "sqrt":
        return -slope("sqrt", X) / (Interval.of(Fraction(2)) * X)
    if name == "exp":
        return apply("exp", X)
    if name == "tanh":
        return Interval.of(Fraction(-2)) * apply("tanh", X) * slope("tanh", X)
    return -apply(name, X)


_BOTH = Interval(Fraction(-1), Fraction(1))


def real_power_slope(X: Interval, power: Fraction) -> Interval:
    """All slopes of x**power on X, x positive (zero too if the power is above one)."""
    if X.low == 0 and power < 1:
        raise Undefined("the slope of this power has no bound at zero")
    return Interval.of(power) * real_power(X, power - 1)


def real_power_bend(X: Interval, power: Fraction) -> Interval | None:
    """All second derivatives of x**power on X; None where they have no bound."""
    if X.low == 0 and power < 2:
        return None
    return Interval.of(power * (power - 1)) * real_power(X, power - 2)

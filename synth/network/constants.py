"""Functions of constants in expressions: exact where the value is rational, otherwise rounded to 40 digits."""

from __future__ import annotations

import math
from collections.abc import Callable
from decimal import Context, Decimal
from fractions import Fraction

from synth.base.units import NONE, PI, Dimension, UnitError, dimension_text

PI_CONSTANT = PI
LARGEST_BITS = 20_000
_CONTEXT = Context(prec=60)
_DIGITS = Context(prec=40)


def _rounded(value: Decimal | Fraction) -> Fraction:
    if isinstance(value, Fraction):
        value = _CONTEXT.divide(Decimal(value.numerator), Decimal(value.denominator))
    return Fraction(_DIGITS.plus(value))


def _root(dimension: Dimension | None, value: Fraction) -> tuple[Fraction, Dimension | None]:
    if value < 0:
        raise UnitError("sqrt of a negative number is not real")
    halved = None if dimension is None else tuple(d // 2 for d in dimension)
    if dimension is not None and any(d % 2 for d in dimension):
        raise UnitError(
            f"sqrt of the unit {dimension_text(dimension)} is not a whole power; multiply by parameters under "
            "the root, as in sqrt(2*g*h)"
        )
    above, below = math.isqrt(value.numerator), math.isqrt(value.denominator)
    if above**2 == value.numerator and below**2 == value.denominator:
        return Fraction(above, below), halved
    quotient = _CONTEXT.divide(Decimal(value.numerator), Decimal(value.denominator))
    return _rounded(_CONTEXT.sqrt(quotient)), halved


def _plain(dimension: Dimension | None, name: str, value: Fraction, largest: int) -> None:
    if dimension not in (None, NONE):
        raise UnitError(f"{name} needs a number without unit, not {dimension_text(dimension or NONE)}")
    if abs(value) > largest:
        raise UnitError(f"{name} accepts arguments up to {largest} either way")


def _exponential(dimension: Dimension | None, value: Fraction) -> tuple[Fraction, Dimension | None]:
    _plain(dimension, "exp", value, 200)
    if value == 0:
        return Fraction(1), NONE
    quotient = _CONTEXT.divide(Decimal(value.numerator), Decimal(value.denominator))
    return _rounded(_CONTEXT.exp(quotient)), NONE


def _series(value: Fraction, start: int) -> Fraction:
    """The Taylor series of sin (start 1) or cos (start 0) for an argument of at most pi either way."""
    x = _rounded(value)
    term = x if start else Fraction(1)
    total, n = Fraction(0), start
    while abs(term) > Fraction(1, 10**50):
        total += term
        term = Fraction(_CONTEXT.divide(*_parts(-term * x * x / ((n + 1) * (n + 2)))))
        n += 2
    return _rounded(total)


def _parts(value: Fraction) -> tuple[Decimal, Decimal]:
    return Decimal(value.numerator), Decimal(value.denominator)


def _wave(name: str, start: int) -> Callable[[Dimension | None, Fraction], tuple[Fraction, Dimension | None]]:
    def wave(dimension: Dimension | None, value: Fraction) -> tuple[Fraction, Dimension | None]:
        _plain(dimension, name, value, 1000)
        if value == 0:
            return Fraction(1 - start), None if start else NONE
        turns = round(value / (2 * PI))
        result = _series(value - 2 * PI * turns, start)
        # pi itself is rounded at the 40th decimal, so what is smaller than 1e-36 is a zero of the true function.
        return (result, NONE) if abs(result) > Fraction(1, 10**36) else (Fraction(0), None)

    return wave


def _absolute(dimension: Dimension | None, value: Fraction) -> tuple[Fraction, Dimension | None]:
    return abs(value), dimension


def _least(dimension: Dimension | None, *values: Fraction) -> tuple[Fraction, Dimension | None]:
    return min(values), dimension


def _greatest(dimension: Dimension | None, *values: Fraction) -> tuple[Fraction, Dimension | None]:
    return max(values), dimension


def _tangent(dimension: Dimension | None, value: Fraction) -> tuple[Fraction, Dimension | None]:
    _plain(dimension, "tanh", value, 200)
    if value == 0:
        return Fraction(0), None
    raised = Fraction(_CONTEXT.exp(_CONTEXT.divide(*_parts(2 * value))))
    return _rounded((raised - 1) / (raised + 1)), NONE


def _limited(dimension: Dimension | None, value: Fraction, limit: Fraction) -> tuple[Fraction, Dimension | None]:
    return max(-limit, min(limit, value)), dimension


def _rest(dimension: Dimension | None, value: Fraction, width: Fraction) -> tuple[Fraction, Dimension | None]:
    return value - max(-width, min(width, value)), dimension


FUNCTIONS: dict[str, Callable[..., tuple[Fraction, Dimension | None]]] = {
    "sqrt": _root,
    "abs": _absolute,
    "min": _least,
    "max": _greatest,
    "sin": _wave("sin", 1),
    "cos": _wave("cos", 0),
    "exp": _exponential,
    "tanh": _tangent,
    "sat": _limited,
    "deadzone": _rest,
}


def constant_power(base: Fraction, power: Fraction) -> Fraction:
    """A power of a constant: exact if it is whole, otherwise rounded to 40 digits; UnitError if it is not real."""
    if power.denominator == 1:
        return base ** int(power)
    if base < 0:
        raise UnitError("a power that is not whole of a negative number is not real")
    if base == 0:
        return Fraction(0)
    logarithm = _CONTEXT.ln(_CONTEXT.divide(*_parts(base)))
    return _rounded(_CONTEXT.exp(_CONTEXT.multiply(logarithm, _CONTEXT.divide(*_parts(power)))))

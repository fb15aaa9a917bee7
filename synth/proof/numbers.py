"""Short decimal texts on the safe side of an exact number, and short exact numbers near a float."""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, Context, Decimal
from fractions import Fraction

DIGITS = 7


def _decimal(value: Fraction, rounding: str, digits: int) -> str:
    context = Context(prec=digits, rounding=rounding)
    found = context.divide(Decimal(value.numerator), Decimal(value.denominator))
    return format(found.normalize(), "f") if found else "0"


def decimal_up(value: Fraction, digits: int = DIGITS) -> str:
    """The least decimal of that many significant digits that is not below ``value``, as text without exponent."""
    return _decimal(value, ROUND_CEILING, digits)


def decimal_down(value: Fraction, digits: int = DIGITS) -> str:
    """The largest decimal of that many significant digits that is not above ``value``, as text without exponent."""
    return _decimal(value, ROUND_FLOOR, digits)


def dyadic(value: float, bits: int = 44) -> Fraction:
    """A nearby number with at most ``bits`` significant binary digits: exact, and short in a file."""
    mantissa, exponent = math.frexp(value)
    return Fraction(round(math.ldexp(mantissa, bits))) * Fraction(2) ** (exponent - bits)

"""Numbers as a person reads them: few digits, and never rounded towards the pleasant side of a guarantee."""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal
from fractions import Fraction

_ROUNDING = {"nearest": ROUND_HALF_EVEN, "up": ROUND_CEILING, "down": ROUND_FLOOR}


def digits(value: float | Fraction, count: int = 4, rounding: str = "nearest") -> str:
    """``value`` with at most ``count`` significant digits, without trailing zeros; infinities as words.

    ``rounding`` is 'nearest', 'up' (towards plus infinity, for upper bounds) or 'down'. Powers of ten are written out
    from 0.0001 to 999999, beyond as ``1.2e-7``. Raises ValueError for NaN: a number that is none is never printed.
    A double stands for its shortest decimal, the one that ``repr`` shows, so a bound stated as 0.703 prints as 0.703.
    Law: with 'up' the printed number is never below that decimal (or the Fraction), with 'down' never above it.
    """
    if isinstance(value, float) and not math.isfinite(value):
        if math.isnan(value):
            raise ValueError("a number to be printed is not a number (NaN)")
        return "unlimited" if value > 0 else "-unlimited"
    context = Context(prec=count, rounding=_ROUNDING[rounding])
    if isinstance(value, Fraction):
        rounded = context.divide(Decimal(value.numerator), Decimal(value.denominator))
    else:
        rounded = context.create_decimal(Decimal(repr(float(value))))
    return _plain(rounded)


def _plain(number: Decimal) -> str:
    """A decimal without trailing zeros; exponent form only outside 1e-4 <= |number| < 1e6."""
    if number == 0:
        return "0"
    sign, figures, exponent = number.normalize().as_tuple()
    assert isinstance(exponent, int)
    text = "".join(map(str, figures))
    leading = len(text) + exponent - 1  # power of ten of the first digit
    minus = "-" if sign else ""
    if not -4 <= leading < 6:
        mantissa = text[0] + (f".{text[1:]}" if len(text) > 1 else "")
        return f"{minus}{mantissa}e{leading}"
    if exponent >= 0:
        return minus + text + "0" * exponent
    text = text.rjust(-exponent + 1, "0")
    return f"{minus}{text[:exponent]}.{text[exponent:]}"

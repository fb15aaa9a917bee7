"""Exact rationals to doubles on the safe side.

Law: down(q) <= q <= up(q), and both are the double nearest to q on their side.
"""

from __future__ import annotations

import math
from fractions import Fraction


def down(value: Fraction) -> float:
    """The largest double at or below a rational (-inf below the range of doubles)."""
    try:
        near = float(value)
    except OverflowError:
        return math.nextafter(math.inf, 0.0) if value > 0 else -math.inf
    return near if Fraction(near) <= value else math.nextafter(near, -math.inf)


def up(value: Fraction) -> float:
    """The smallest double at or above a rational (inf above the range of doubles)."""
    return -down(-value)


def root_down(value: Fraction) -> float:
    """A double at or below the square root of a non-negative rational, within two roundings of it."""
    near = min(_root(value), math.nextafter(math.inf, 0.0))
    while near > 0 and Fraction(near) ** 2 > value:
        near = math.nextafter(near, 0.0)
    return near


def root_up(value: Fraction) -> float:
    """A double at or above the square root of a non-negative rational, within two roundings of it (inf beyond)."""
    near = _root(value)
    while math.isfinite(near) and Fraction(near) ** 2 < value:
        near = math.nextafter(near, math.inf)
    return near


def _root(value: Fraction) -> float:
    """The square root nearly rounded, also where the rational itself is outside the range of doubles."""
    if value == 0:
        return 0.0
    # Scale by a power of four so that the integer root has 60 bits or more.
    shift = 64 - (value.numerator.bit_length() - value.denominator.bit_length()) // 2
    scaled = value * Fraction(4) ** shift
    try:
        return float(Fraction(math.isqrt(int(scaled))) / Fraction(2) ** shift)
    except OverflowError:
        return math.inf

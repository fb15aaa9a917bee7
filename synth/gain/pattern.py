"""Bounds for a pattern that never ends, from a point that is given on a window and stays constant beyond it.

Theory (10) asks for 0 < inf s and sup s < infinity over all units. A point without such bounds proves nothing: the
one-way chain with gain 2 and s_i = 4^i has every quotient equal to one half, and its radius is 2. So the point is taken
in a form whose bounds can be seen: numbers on a window of units, one number for every unit to the left of it and one
for every unit to the right. Every row that differs from the two constant ends is checked, in exact rationals.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from fractions import Fraction

from synth.base.errors import InputError
from synth.gain.rounding import up

Real = int | float | Fraction


def pattern_upper_bound(
    offsets: Sequence[int],
    gains: Sequence[Real],
    window: Sequence[Real] | Callable[[int], Real] = (),
    left: Real = 1,
    right: Real = 1,
) -> float:
    """An upper bound of the radius of the infinite pattern G(s)_i = sum_l gains[l] s_{i + offsets[l]}.

    Units have one outlet each. ``offsets``: integer position of the unit each link comes from, relative to the one that
    listens; ``gains`` >= 0, one per link; ``window``: s at the units 0, 1, ..., len(window) - 1; ``left`` and
    ``right``: s at every unit before and after it. Returns sup_i G(s)_i / s_i, rounded up.

    Raises InputError unless every value of s is positive and finite (a function of i is refused: nothing shows that it
    stays between two positive bounds), and for gains that are negative or not finite. Theory (10) and (14).
    """
    if callable(window):
        raise InputError(
            "s must be given as numbers on a window and one constant on either side of it: of a function of i nobody "
            "can see that it stays between two positive bounds, and an unbounded s proves nothing."
        )
    if len(offsets) != len(gains) or not all(isinstance(at, int) for at in offsets):
        raise InputError("offsets must hold one whole number per link, as many as there are gains.")
    factors = [_number(g, f"gains[{k}]", zero_too=True) for k, g in enumerate(gains)]
    inside = [_number(value, f"window[{i}]") for i, value in enumerate(window)]
    before, after = _number(left, "left"), _number(right, "right")

    def s(i: int) -> Fraction:
        return before if i < 0 else after if i >= len(inside) else inside[i]

    reach = max((abs(at) for at in offsets), default=0)
    # Beyond these rows a unit and all it listens to lie in one constant end: the quotient is the sum of the gains.
    rows = range(-reach - 1, len(inside) + reach + 1)
    links = list(zip(factors, offsets, strict=True))
    return up(max(sum((g * s(i + at) for g, at in links), Fraction(0)) / s(i) for i in rows))


def _number(value: Real, name: str, zero_too: bool = False) -> Fraction:
    if not isinstance(value, (int, float, Fraction)) or not math.isfinite(value):
        raise InputError(f"{name} = {value!r}; an upper bound needs finite numbers: an unbounded s proves nothing.")
    if value < 0 or (value == 0 and not zero_too):
        wanted = "must not be negative" if zero_too else "must be positive: s has to stay away from zero"
        raise InputError(f"{name} = {value!r}; it {wanted}.")
    return Fraction(value)

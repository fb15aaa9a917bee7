"""Rows of a gain operator in exact rationals: slow, for small operators and for the few rows that decide a bound."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.gain.operator import MAX, SQUARE, Floats, GainOperator
from synth.gain.rounding import down, root_down, root_up, up


def exact_row(operator: GainOperator, i: int, s: Floats, exponent: NDArray[np.int64] | None) -> tuple[Fraction, bool]:
    """G(s)_i / s_i as a rational, or its square (then the flag is set); ``s`` times 2**exponent, s_i > 0."""
    links = operator.links_into[i].tolist()
    kind = operator.codes[i]
    own = Fraction(float(s[i]))
    # Largest term per choice, sums per inlet; a max row is one choice, a sum row one inlet.
    pieces: dict[tuple[int, int], Fraction] = {}
    for k in links:
        j = int(operator.source[k])
        term = Fraction(float(operator.gain[k])) * Fraction(float(s[j])) / own
        if exponent is not None:
            term *= Fraction(2) ** int(exponent[j] - exponent[i])
        inlet = int(operator.inlet[k]) if kind == SQUARE else 0
        choice = int(operator.choice[k])
        place = (inlet, 0 if kind == MAX else choice if choice >= 0 else -1 - k)
        pieces[place] = max(pieces.get(place, Fraction(0)), term)
    inlets: dict[int, Fraction] = {}
    for (inlet, _), term in pieces.items():
        inlets[inlet] = inlets.get(inlet, Fraction(0)) + term
    if kind != SQUARE:
        return inlets.get(0, Fraction(0)), False
    return sum((value * value for value in inlets.values()), Fraction(0)), True


def exact_quotient(
    operator: GainOperator, i: int, s: Floats, exponent: NDArray[np.int64] | None
) -> tuple[float, float]:
    """G(s)_i / s_i between two doubles rounded outward; ``s`` times 2**exponent, s_i > 0."""
    exact, squared = exact_row(operator, i, s, exponent)
    return (root_down(exact), root_up(exact)) if squared else (down(exact), up(exact))

"""Outward rounded quotients against exact rationals, also where doubles underflow or overflow."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.solving.certify import row_bounds
from tests.gain.operators import operators


def exact(op, s, exponent):
    """G(s)_i / s_i from the definition in rationals; squared in rows of roots (flag)."""
    point = [Fraction(float(v)) * Fraction(2) ** int(e) for v, e in zip(s, exponent, strict=True)]
    found = []
    for i in range(op.size):
        pieces = {}
        for k in np.flatnonzero(op.to == i).tolist():
            term = Fraction(float(op.gain[k])) * point[op.source[k]]
            name = (int(op.inlet[k]), int(op.choice[k]) if op.choice[k] >= 0 else -1 - k)
            pieces[name] = max(pieces.get(name, Fraction(0)), term)
        if op.rows[i] == "max":
            value = max(pieces.values(), default=Fraction(0)) / point[i]
        elif op.rows[i] == "sum":
            # Sum rows do not look at inlets: alternatives are merged over all of them.
            merged = {}
            for (_, choice), term in pieces.items():
                merged[choice] = max(merged.get(choice, Fraction(0)), term)
            value = sum(merged.values(), Fraction(0)) / point[i]
        else:
            inlets = {}
            for (inlet, _), term in pieces.items():
                inlets[inlet] = inlets.get(inlet, Fraction(0)) + term
            value = sum((v * v for v in inlets.values()), Fraction(0)) / point[i] ** 2
        found.append((value, op.rows[i] == "root_sum_square"))
    return found


def holds(low, high, value, squared):
    below, above = Fraction(low), Fraction(high) if math.isfinite(high) else None
    if squared:
        return below**2 <= value and (above is None or value <= above**2)
    return below <= value and (above is None or value <= above)


@settings(max_examples=60, deadline=None)
@given(operators(alternatives=True), st.sampled_from([0, 3, 60, 900, 1100, 3000]), st.data())
def test_bounds_contain_the_exact_quotients(op, spread, data):
    """Exponents up to 6000 apart: terms that doubles cannot hold, sums that they would lose."""
    exponent = np.array(data.draw(st.lists(st.integers(-spread, spread), min_size=op.size, max_size=op.size)))
    s = np.array(data.draw(st.lists(st.floats(1e-3, 1e3), min_size=op.size, max_size=op.size)))
    low, high = row_bounds(op, s, exponent)
    values = exact(op, s, exponent)
    for i, (value, squared) in enumerate(values):
        assert holds(low[i], high[i], value, squared)
        if 1e-200 < value < 1e200:
            assert high[i] <= low[i] * (1 + 1e-13)
    upper, lower = op.upper_bound(s, exponent), op.lower_bound(s, exponent)
    assert all(holds(0.0, upper, value, squared) for value, squared in values)
    assert all(holds(lower, math.inf, value, squared) for value, squared in values)


def test_the_smallest_and_largest_gains():
    """Gains at both ends of doubles: the product of a subnormal gain with a large point is not lost."""
    for gain in (5e-324, 1e-310, 1e-200, 1e200, 1.7e308):
        for kind in ("sum", "max", "root_sum_square"):
            op = GainOperator.from_links(2, [0, 1, 0], [1, 0, 0], [gain, gain, gain], kind)
            for s in ([1.0, 1.0], [1e-300, 1e300], [5e-324, 1.0]):
                low, high = row_bounds(op, np.array(s), None)
                values = exact(op, s, [0, 0])
                assert all(holds(low[i], high[i], *values[i]) for i in range(2))


def test_squares_that_underflow_keep_the_upper_bound_safe():
    """Roots of squares of 1e-170: unscaled, the squares vanish and the bound reads 0; true is 1e-170 sqrt(2)."""
    op = GainOperator.from_links(1, [0, 0], [0, 0], [1e-170, 1e-170], "root_sum_square")
    assert 1e-170**2 == 0.0
    assert Fraction(op.upper_bound([1.0])) ** 2 >= 2 * Fraction(1e-170) ** 2
    radius = op.radius()
    assert radius.lower == pytest.approx(math.sqrt(2) * 1e-170, rel=1e-12)
    assert radius.reached


def test_no_infinite_bound_is_certified():
    """Two gains of 1e308 add up beyond doubles: refused with advice; a little smaller is enclosed."""
    with pytest.raises(InputError, match="other units"):
        GainOperator.from_links(1, [0, 0], [0, 0], [1e308, 1e308]).radius()
    with pytest.raises(InputError, match="other units"):
        GainOperator.from_links(2, [0, 0, 1, 1], [0, 1, 0, 1], [1e308] * 4).radius()
    for size in (1, 2):
        to, source = np.divmod(np.arange(size * size), size)
        radius = GainOperator.from_links(size, to, source, [8e307 / size] * (size * size)).radius()
        assert math.isfinite(radius.upper)
        assert radius.lower <= 8e307 <= radius.upper


def test_a_point_out_of_range_neither_proves_too_much_nor_too_little():
    """Loop 0 -> 1 -> 0 with gains 1: at s = (1, 2^e) the quotients are 2^e and 2^-e."""
    op = GainOperator.from_links(2, [1, 0], [0, 1], [1.0, 1.0])
    assert op.upper_bound([1.0, 1.0], [0, 5000]) == math.inf  # true value 2^5000
    assert op.lower_bound([1.0, 1.0], [0, 5000]) == 0.0
    assert op.upper_bound([1.0, 1.0], [0, 1000]) == 2.0**1000
    assert op.lower_bound([1.0, 0.0], [0, 0]) == 0.0
    for bad in ([0.5, 1.0], [0], [2**61, 0]):
        with pytest.raises(InputError, match="exponent"):
            op.upper_bound([1.0, 1.0], bad)


@pytest.mark.parametrize("size", [70, 5000])
def test_large_rows_are_rounded_outward(size):
    """A row of many terms whose sum doubles miss: 1 + (n - 1) 2^-54 rounds to 1 term by term."""
    gain = np.full(size, 2.0**-54)
    gain[0] = 1.0
    op = GainOperator.from_links(size, np.zeros(size, dtype=int), np.arange(size), gain)
    low, high = row_bounds(op, np.ones(size), None)
    true = 1 + (size - 1) * Fraction(2) ** -54
    assert Fraction(low[0]) <= true <= Fraction(high[0])
    assert op.upper_bound(np.ones(size)) >= true

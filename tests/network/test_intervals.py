"""Intervals: every value and every slope at a point of the argument lies in the result, exactly or rounded outward."""

from __future__ import annotations

import math
from fractions import Fraction

import pytest
from hypothesis import assume, example, given
from hypothesis import strategies as st

from synth.network.intervals import (
    BITS,
    KEPT,
    ONE,
    ZERO,
    Interval,
    Undefined,
    apply,
    ball,
    bend_of,
    greatest,
    least,
    real_power,
    real_power_bend,
    real_power_slope,
    root,
    rounded_down,
    slope,
)

numbers = st.fractions(min_value=-20, max_value=20, max_denominator=1000)
FUNCTIONS = {"exp": math.exp, "tanh": math.tanh, "sin": math.sin, "cos": math.cos, "abs": abs}
SLOPES = {
    "exp": math.exp,
    "tanh": lambda x: 1 - math.tanh(x) ** 2,
    "sin": math.cos,
    "cos": lambda x: -math.sin(x),
    "abs": lambda x: math.copysign(1, x),
}
BENDS = {
    "exp": math.exp,
    "tanh": lambda x: -2 * math.tanh(x) * (1 - math.tanh(x) ** 2),
    "sin": lambda x: -math.sin(x),
    "cos": lambda x: -math.cos(x),
    "abs": lambda x: 0.0,
}


@st.composite
def inside(draw: st.DrawFn) -> tuple[Interval, Fraction]:
    """An interval and a point of it."""
    low, point, high = sorted(draw(st.tuples(numbers, numbers, numbers)))
    return Interval(low, high), point


def holds(found: Interval, truth: float) -> bool:
    """Whether a float that is right to a few units in its last place can be the value of a point inside."""
    slack = 1e-14 * max(1.0, abs(truth))
    return float(found.low) - slack <= truth <= float(found.high) + slack


@given(inside(), inside())
def test_arithmetic_holds_every_result(a: tuple[Interval, Fraction], b: tuple[Interval, Fraction]) -> None:
    (X, x), (Y, y) = a, b
    assert x + y in X + Y and x - y in X - Y and x * y in X * Y and -x in -X
    assert min(x, y) in least(X, Y) and max(x, y) in greatest(X, Y)
    assert x in X.hull(Y) and y in X.hull(Y)
    for power in range(5):
        assert x**power in X**power
    if 0 not in Y:
        assert x / y in X / Y and y**-3 in Y**-3
    else:
        with pytest.raises(Undefined, match="may be zero"):
            X / Y
    first, second = X.halves()
    assert x in first or x in second


@given(inside(), st.sampled_from(sorted(FUNCTIONS)))
@example((Interval(Fraction(1), Fraction(2)), Fraction(157, 100)), "sin")
@example((Interval(Fraction(-1), Fraction(1)), Fraction(0)), "cos")
def test_functions_and_slopes_hold_every_value(pair: tuple[Interval, Fraction], name: str) -> None:
    X, x = pair
    assert holds(apply(name, X), FUNCTIONS[name](float(x)))
    if name != "abs" or x != 0:  # at the corner itself there is no slope
        assert holds(slope(name, X), SLOPES[name](float(x)))
    bend = bend_of(name, X)
    assert (name == "abs" and 0 in X) if bend is None else holds(bend, BENDS[name](float(x)))


@given(inside())
def test_roots_and_real_powers(pair: tuple[Interval, Fraction]) -> None:
    X, x = pair
    if X.low < 0:
        with pytest.raises(Undefined):
            root(X)
        with pytest.raises(Undefined):
            real_power(X, Fraction(3, 2))
        return
    found = root(X)
    assert found.low**2 <= x <= found.high**2
    for power in (Fraction(1, 2), Fraction(3, 2), Fraction(7, 3)):
        assert holds(real_power(X, power), float(x) ** float(power))
    assume(X.low > 0)
    p = Fraction(-5, 4)
    assert holds(real_power(X, p), float(x) ** -1.25)
    assert holds(real_power_slope(X, p), -1.25 * float(x) ** -2.25)
    bend = real_power_bend(X, p)
    assert bend is not None and holds(bend, 1.25 * 2.25 * float(x) ** -3.25)
    assert holds(slope("sqrt", X), 0.5 / math.sqrt(x))
    assert holds(bend_of("sqrt", X) or ZERO, -0.25 / float(x) ** 1.5)


def test_enclosures_are_narrow_and_exact_where_they_can_be() -> None:
    """An interval that holds everything would pass the other tests; these are points, so the width is rounding."""
    for name in ("exp", "tanh", "sin", "cos"):
        assert 0 < apply(name, Interval.of(Fraction(1))).half < Fraction(1, 10**30)
    assert root(Interval.of(Fraction(9, 4))) == Interval.of(Fraction(3, 2))
    assert 0 < root(Interval.of(Fraction(2))).half < Fraction(1, 10**30)
    assert apply("exp", ZERO) == apply("cos", ZERO) == ONE
    assert apply("sin", Interval(Fraction(0), Fraction(2))).high == 1
    assert apply("cos", Interval(Fraction(3), Fraction(4))).low == -1
    assert apply("sin", Interval(Fraction(-100), Fraction(100))) == Interval(Fraction(-1), Fraction(1))
    assert float(apply("cos", Interval(Fraction(1), Fraction(2))).high) == pytest.approx(math.cos(1))
    assert Fraction("3.14159265358979323846264338327950288") in Interval(
        ball("pi", Fraction(0)).low - Fraction(1, 10**30), ball("pi", Fraction(0)).high
    )


@given(st.integers(1, 10**150), st.integers(1, 10**150), st.booleans())
def test_rounding_is_down_and_short(above: int, below: int, negative: bool) -> None:
    value = Fraction(-above if negative else above, below)
    found = rounded_down(value)
    assert found <= value and value - found <= abs(value) / 2 ** (BITS - 2)
    assert found == value or value.numerator.bit_length() + value.denominator.bit_length() > KEPT
    interval = Interval.of(value)
    assert value in interval and interval.low <= interval.middle <= interval.high


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda: slope("sqrt", Interval(Fraction(0), Fraction(1))), "no bound at zero"),
        (lambda: slope("sqrt", Interval(Fraction(-1), Fraction(1))), "negative"),
        (lambda: apply("exp", Interval.of(Fraction(10**7))), "larger than"),
        (lambda: apply("sin", Interval.of(Fraction(10**7))), "larger than"),
        (lambda: real_power_slope(Interval(Fraction(0), Fraction(1)), Fraction(1, 2)), "no bound at zero"),
        (lambda: real_power(Interval(Fraction(0), Fraction(1)), Fraction(-1, 2)), "zero"),
    ],
)
def test_what_is_not_defined_is_said(call: object, said: str) -> None:
    with pytest.raises(Undefined, match=said):
        call()  # type: ignore[operator]

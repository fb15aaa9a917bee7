"""Thousands of random operators: the enclosure contains an independent slow value every time, and its width is met."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from synth.gain.dense import apply_literally
from tests.gain.campaign import Case, by_choices, by_definition, exact_bounds, literally, random_case, slow_radius


def run(seed: int, count: int) -> None:
    rng = np.random.default_rng(seed)
    missed, open_ended, told = [], [], 0
    for number in range(count):
        case = random_case(rng)
        radius = case.operator().radius(1e-9)
        low, high = slow_radius(case)
        told += high - low <= 1e-10 * high
        if not (radius.lower <= high and low <= radius.upper):
            missed.append((number, case, radius.lower, radius.upper, low, high))
        if not radius.reached or radius.upper - radius.lower > 1e-9 * radius.upper:
            open_ended.append((number, case, radius.lower, radius.upper))
    assert not missed, missed[0]
    assert not open_ended, (len(open_ended), open_ended[0])
    # The slow value is sharp nearly always, so that "contains" says something.
    assert told >= 0.98 * count


def test_two_thousand_random_operators() -> None:
    run(20, 2_000)


@pytest.mark.long
def test_twenty_thousand_random_operators() -> None:
    run(21, 20_000)


def test_upper_ends_hold_in_exact_rationals() -> None:
    """The point of every enclosure, put through the definition in rationals, stays below the upper end it is said to
    prove (one class, so that the point proves it; squares are compared)."""
    rng = np.random.default_rng(22)
    seen = 0
    for _ in range(400):
        case = random_case(rng)
        op = case.operator()
        radius = op.radius(1e-9)
        if radius.upper == 0 or radius.exponent is not None:
            continue
        bound = Fraction(op.upper_bound(radius.point))
        assert exact_bounds(case, [Fraction(value) for value in radius.point.tolist()]) <= bound * bound
        seen += 1
    assert seen > 250


def test_the_slow_value_is_able_to_fail() -> None:
    """Known radii: a loop of 4 and 9 (6 for max and sum rows), two links of 3 and 4 on two inlets (5), on one (7)."""
    loop = Case(2, [0, 1], [1, 0], [4.0, 9.0], ["sum", "max"], [0, 0], [-1, -1])
    assert slow_radius(loop) == pytest.approx((6, 6))
    for inlets, value in (([0, 1], 5), ([0, 0], 7)):
        pair = Case(1, [0, 0], [0, 0], [3.0, 4.0], ["root_sum_square"], inlets, [-1, -1])
        assert slow_radius(pair) == pytest.approx((value, value))
    alternatives = Case(1, [0, 0, 0], [0, 0, 0], [3.0, 4.0, 1.0], ["sum"], [5, 5, 0], [0, 0, -1])
    assert slow_radius(alternatives) == pytest.approx((5, 5))


def test_both_slow_ways_agree() -> None:
    rng = np.random.default_rng(23)
    both = 0
    while both < 40:
        case = random_case(rng)
        rows = literally(case, list(range(case.size)))
        if any(not inlets for inlets in rows) or len(slow_classes(case)) > 1:
            continue
        chosen = by_choices(rows)
        if chosen is None:
            continue
        low, high = by_definition(rows)
        assert low <= chosen[1]
        assert high >= chosen[0]
        both += 1


def slow_classes(case: Case) -> list[list[int]]:
    from tests.gain.campaign import classes

    return classes(case)


def test_choices_are_what_the_definition_says() -> None:
    """The lists that the slow value reads give the same numbers as the literal definition of the package."""
    rng = np.random.default_rng(24)
    for _ in range(100):
        case = random_case(rng)
        s = rng.uniform(0.1, 10, case.size)
        image = apply_literally(case.operator(), s.tolist())
        for i, row in enumerate(literally(case, list(range(case.size)))):
            sums = [sum(max(g * s[j] for g, j in piece) for piece in inlet) for inlet in row]
            assert image[i] == pytest.approx(float(np.sqrt(np.sum(np.square(sums)))), rel=1e-12, abs=1e-300)

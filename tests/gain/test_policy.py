"""Mixed rows: the points of the policy search give a narrow guaranteed enclosure around an independent value."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.gain import GainOperator
from synth.gain.solving.certify import certified_lower, certified_upper
from synth.gain.solving.policy import solve
from tests.gain.campaign import Case, classes, random_case, slow_radius
from tests.gain.families import built, families, width
from tests.gain.operators import operators
from tests.speed.graphs import FAMILIES


def inner_of(case: Case, members: list[int]) -> Case:
    """One class by itself, links of no gain left out."""
    place = {i: k for k, i in enumerate(members)}
    kept = [k for k in range(len(case.gain)) if case.gain[k] > 0 and case.to[k] in place and case.source[k] in place]
    return Case(
        len(members),
        [place[case.to[k]] for k in kept],
        [place[case.source[k]] for k in kept],
        [case.gain[k] for k in kept],
        [case.rows[i] for i in members],
        [case.inlet[k] for k in kept],
        [case.choice[k] for k in kept],
    )


def run(seed: int, count: int) -> None:
    rng = np.random.default_rng(seed)
    done = 0
    while done < count:
        whole = random_case(rng)
        for members in classes(whole):
            case = inner_of(whole, members)
            if not case.gain:
                continue
            op = case.operator()
            found = solve(op, 1e-9)
            low, high = slow_radius(case)
            assert certified_lower(op, found.low_point, found.low_exponent) <= high, case
            assert certified_upper(op, found.point, found.exponent) >= low, case
            assert width(op, found) <= 1e-9, case
            done += 1


def test_random_classes_of_all_row_types() -> None:
    run(31, 250)


@pytest.mark.long
def test_ten_thousand_random_classes() -> None:
    run(32, 10_000)


def closes(size: int) -> None:
    for name, to, source, gain in families(size):
        op = built(to, source, gain, "mixed")
        found = solve(op, 1e-9)
        assert width(op, found) <= 1e-9, name
        print(f"{name}: {op.size} outlets, {found.method}, {found.work} products and solves")


def test_every_family_closes() -> None:
    closes(900)


@pytest.mark.long
def test_every_family_closes_at_a_hundred_thousand() -> None:
    closes(100_000)


def test_roots_of_squares_with_several_links_per_inlet() -> None:
    """No matrix has this radius: s0 = sqrt((s0 + s1)^2 + s1^2), s1 = s0 / 2 gives r with r^2 x^2 = (x + 1)^2 + 1 and
    r = x / 2 at x = s0/s1; the root is found here by bisection."""
    op = GainOperator.from_links(
        2, [0, 0, 0, 1], [0, 1, 1, 0], [1, 1, 1, 0.5], ["root_sum_square", "sum"], inlet=[0, 0, 1, 2]
    )
    low, high = 1.0, 10.0
    for _ in range(200):
        x = (low + high) / 2
        if (x * x / 2) ** 2 < (x + 1) ** 2 + 1:
            low = x
        else:
            high = x
    found = solve(op, 1e-9)
    assert certified_lower(op, found.low_point) <= low / 2 * (1 + 1e-14)
    assert certified_upper(op, found.point) >= low / 2 * (1 - 1e-14)
    assert width(op, found) <= 1e-9


def test_slopes_that_leave_the_class_reducible() -> None:
    """Max rows choose so that the active links fall apart: a strong loop 0 <-> 1, outlets 2 and 3 that only listen at
    the solution but close the class through weak links."""
    op = GainOperator.from_links(
        4,
        [1, 0, 2, 3, 0, 2],
        [0, 1, 1, 2, 3, 3],
        [0.9, 0.8, 5.0, 7.0, 1e-3, 1e-3],
        ["max", "max", "sum", "max"],
    )
    found = solve(op, 1e-9)
    assert width(op, found) <= 1e-9
    assert certified_upper(op, found.point, found.exponent) == pytest.approx(0.8485281374, rel=1e-9)


def test_no_links_is_left_to_others() -> None:
    assert solve(GainOperator.from_links(1, [], [], []), 1e-9) is None


CASES = operators(fewest=1)


@settings(max_examples=80, deadline=None)
@given(CASES, st.data())
def test_change_of_coordinates_leaves_the_radius(op, data):
    """Law: diag(t) G diag(1/t) has the same radius for every row type."""
    t = 2.0 ** np.array(data.draw(st.lists(st.integers(-30, 30), min_size=op.size, max_size=op.size)))
    moved = op.replaced(op.gain * t[op.to] / t[op.source])
    one, other = op.radius(1e-10), moved.radius(1e-10)
    assert max(one.lower, other.lower) <= min(one.upper, other.upper)


def speed_family(name: str, size: int) -> GainOperator:
    count, to, source, gain = FAMILIES[name](size, np.random.default_rng(1))
    kinds = [("sum", "max", "root_sum_square")[i % 3] for i in range(count)]
    return GainOperator.from_links(count, to, source, gain, kinds)


@pytest.mark.parametrize("name", ["smooth grid", "homogeneous ring", "string"])
def test_mixed_rows_that_hide_their_hot_spot_close(name: str) -> None:
    """Slopes far from normal, or alike everywhere: plain steps and Krylov vectors of the whole mislead here."""
    op = speed_family(name, 10_000)
    found = op.radius()
    assert found.reached and found.upper <= found.lower * (1 + 1e-9)
    assert certified_upper(op, found.point, found.exponent) == pytest.approx(found.upper, rel=1e-12)


@pytest.mark.long
@pytest.mark.parametrize("name", sorted(FAMILIES))
def test_every_speed_family_closes_at_a_hundred_thousand(name: str) -> None:
    assert speed_family(name, 100_000).radius().reached

"""The enclosure of the radius: independent values inside, laws, reducible and nilpotent operators, honest widths."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.dense import apply_literally, largest_loop_literally, radius_literally
from tests.gain.operators import operators


def contains(radius, value, slack=1e-12):
    return radius.lower * (1 - slack) <= value <= radius.upper * (1 + slack)


@settings(max_examples=250, deadline=None)
@given(operators())
def test_enclosure_contains_the_definition(op):
    """|G^n(1)|^{1/n} is above the radius for every n and tends to it; min and max growth over many steps bracket it."""
    radius = op.radius(1e-9)
    assert radius.reached
    assert radius.lower <= radius_literally(op, 40) * (1 + 1e-12)
    assert radius.upper >= _growth_from_below(op) * (1 - 1e-12)


def _growth_from_below(op):
    """A lower bound of the radius by other means: |G^n e_i| along a closed walk from i, the largest over i and n."""
    best = 0.0
    for i in range(op.size):
        s = [float(j == i) for j in range(op.size)]
        for n in range(1, 2 * op.size + 1):
            s = apply_literally(op, s)
            # G^n(e_i)_i >= c gives G^{kn}(e_i)_i >= c^k by monotonicity and homogeneity.
            best = max(best, s[i] ** (1 / n))
    return best


@settings(max_examples=100, deadline=None)
@given(operators(rows="sum"))
def test_sum_rows_give_the_perron_root(op):
    # Eigenvalues of a defective matrix are only good to the n-th root of the rounding.
    expected = max(abs(np.linalg.eigvals(op.dense())))
    radius = op.radius(1e-9)
    assert radius.lower <= expected + 1e-2 * (op.gain.max(initial=0) > 0)
    assert contains(radius, expected, 1e-9) or not _simple(op.dense(), expected)


def _simple(matrix, root):
    return sum(abs(abs(v) - root) < 1e-3 * (1 + root) for v in np.linalg.eigvals(matrix)) == 1


@settings(max_examples=100, deadline=None)
@given(operators(rows="max"))
def test_max_rows_give_the_largest_loop(op):
    assert contains(op.radius(1e-9), largest_loop_literally(op))


@settings(max_examples=80, deadline=None)
@given(st.integers(1, 5), st.data())
def test_roots_of_squares_with_one_link_per_inlet_give_the_root_of_the_squared_matrix(n, data):
    """Theory (11), with every link present so that the Perron root is simple."""
    gains = np.array(data.draw(st.lists(st.floats(0.01, 10), min_size=n * n, max_size=n * n)))
    to, source = np.divmod(np.arange(n * n), n)
    op = GainOperator.from_links(n, to, source, gains, "root_sum_square")
    expected = math.sqrt(max(abs(np.linalg.eigvals((gains**2).reshape(n, n)))))
    assert contains(op.radius(1e-10), expected, 1e-10)


@settings(max_examples=100, deadline=None)
@given(operators(), st.floats(0.01, 100))
def test_scaling_all_links_scales_the_radius(op, c):
    one, other = op.radius(1e-10), op.scaled(c).radius(1e-10)
    assert other.lower <= c * one.upper * (1 + 1e-12)
    assert other.upper >= c * one.lower * (1 - 1e-12)


@settings(max_examples=100, deadline=None)
@given(operators(), st.randoms(use_true_random=False))
def test_renumbering_leaves_the_radius(op, random):
    order = list(range(op.size))
    random.shuffle(order)
    new = np.array(order)
    rows = [None] * op.size
    for i, kind in enumerate(op.rows):
        rows[order[i]] = kind
    renamed = GainOperator.from_links(op.size, new[op.to], new[op.source], op.gain, rows, op.inlet)
    one, other = op.radius(1e-10), renamed.radius(1e-10)
    assert max(one.lower, other.lower) <= min(one.upper, other.upper)


@settings(max_examples=100, deadline=None)
@given(operators(fewest=1), st.data())
def test_more_gain_never_lowers_the_radius(op, data):
    k = data.draw(st.integers(0, op.gain.size - 1))
    more = op.gain.copy()
    more[k] *= data.draw(st.floats(1, 5))
    raised = GainOperator.from_links(op.size, op.to, op.source, more, op.rows, op.inlet)
    assert raised.radius(1e-10).upper >= op.radius(1e-10).lower


@settings(max_examples=150, deadline=None)
@given(operators())
def test_the_point_proves_the_upper_end(op):
    """op.upper_bound(point) is an upper bound in its own right, near the upper end also for reducible operators."""
    radius = op.radius(1e-9)
    assert np.all(radius.point > 0)
    bound = op.upper_bound(radius.point)
    assert bound >= radius.lower
    if radius.upper > 0:
        assert bound <= radius.upper * (1 + 1e-6)
    else:
        assert bound <= 1e-6


@settings(max_examples=150, deadline=None)
@given(operators(), st.data())
def test_every_point_bounds_the_radius(op, data):
    """Theory (10): quotients of any positive point bracket the radius."""
    s = data.draw(st.lists(st.floats(1e-3, 1e3), min_size=op.size, max_size=op.size))
    radius = op.radius(1e-9)
    assert op.lower_bound(s) <= radius.upper
    assert op.upper_bound(s) >= radius.lower


@pytest.mark.parametrize("size", [1, 2, 30, 200])
def test_a_finite_one_way_chain_has_radius_exactly_zero(size):
    op = GainOperator.from_links(size, np.arange(1, size), np.arange(size - 1), np.full(size - 1, 5.0))
    radius = op.radius()
    assert (radius.lower, radius.upper, radius.bottleneck) == (0.0, 0.0, None)
    assert radius.reached
    assert np.all(radius.point > 0)
    assert np.all(np.isfinite(radius.point))


def test_exact_values_come_out_exact():
    for kind in ("sum", "max", "root_sum_square"):
        radius = GainOperator.from_links(2, [0, 1], [1, 0], [0.5, 0.5], kind).radius()
        assert (radius.lower, radius.upper) == (0.5, 0.5)


def test_reducible_operator_takes_its_largest_class():
    """A loop of .9 that feeds a long tail of strong links: the tail does not count."""
    op = GainOperator.from_links(4, [0, 1, 2, 3, 3], [0, 0, 1, 2, 3], [0.9, 1e6, 1e6, 1e6, 0.2])
    radius = op.radius(1e-9)
    assert radius.lower <= 0.9 <= radius.upper
    assert op.upper_bound(radius.point) <= 0.9 * (1 + 1e-6)


def test_badly_scaled_outlets():
    """diag(t) G diag(1/t) has the same radius however far apart the units of the outlets are."""
    matrix = np.array([[0.2, 0.5, 0.0], [0.3, 0.1, 0.4], [0.6, 0.0, 0.2]])
    t = np.array([1e-9, 1.0, 1e9])
    to, source = np.nonzero(matrix)
    op = GainOperator.from_links(3, to, source, (t[:, None] * matrix / t)[to, source])
    assert contains(op.radius(1e-9), 0.75668192221, 1e-10)


def test_hundreds_of_rows():
    rng = np.random.default_rng(7)
    size, links = 300, 1200
    rows = [("sum", "max", "root_sum_square")[i % 3] for i in range(size)]
    op = GainOperator.from_links(
        size, rng.integers(0, size, links), rng.integers(0, size, links), rng.uniform(0.1, 1, links), rows
    )
    radius = op.radius(1e-9)
    assert radius.reached
    assert radius.work < 200


def test_max_rows_name_the_loop():
    """Loops: 0 -> 1 -> 0 with mean sqrt(.5 * .8), 2 -> 2 with .6; the first one is the larger."""
    op = GainOperator.from_links(3, [1, 0, 2, 2], [0, 1, 2, 1], [0.5, 0.8, 0.6, 3.0], "max")
    bottleneck = op.radius().bottleneck
    assert bottleneck.loop
    assert sorted(bottleneck.links) == [0, 1]
    for link, following in zip(bottleneck.links, (*bottleneck.links[1:], bottleneck.links[0]), strict=True):
        assert op.to[link] == op.source[following]


@settings(max_examples=60, deadline=None)
@given(operators(rows="sum", fewest=1), st.data())
def test_shares_are_the_slopes_of_the_radius(op, data):
    """Theory (15) by finite differences, where the radius belongs to one simple Perron root."""
    radius = op.radius(1e-12)
    assume(radius.upper > 0)
    assume(_simple(op.dense(), radius.upper))
    bottleneck = radius.bottleneck
    k = data.draw(st.integers(0, len(bottleneck.links) - 1))
    ends = []
    for factor in (1 + 1e-4, 1 - 1e-4):
        gain = op.gain.copy()
        gain[bottleneck.links[k]] *= factor
        ends.append(GainOperator.from_links(op.size, op.to, op.source, gain).radius(1e-12).upper)
    slope = (math.log(ends[0]) - math.log(ends[1])) / 2e-4
    assert slope == pytest.approx(bottleneck.shares[k], abs=1e-3)


def test_a_width_beyond_doubles_is_admitted_not_hidden():
    op = GainOperator.from_links(2, [0, 0, 1], [0, 1, 0], [0.3, 0.7, 0.9])
    assert op.radius(1e-9).reached
    radius = op.radius(1e-300)
    assert not radius.reached
    assert radius.lower < radius.upper


@pytest.mark.parametrize("width", [0, -1, 1, float("nan"), "small"])
def test_widths_out_of_range_are_refused(width):
    with pytest.raises(InputError, match="width"):
        GainOperator.from_links(1, [0], [0], [0.5]).radius(width)

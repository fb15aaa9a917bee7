"""The enclosure of the radius: independent values inside, laws, reducible and nilpotent operators, honest widths."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.sparse import csr_array
from scipy.sparse.linalg import eigsh

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.dense import apply_literally, largest_loop_literally, radius_literally
from synth.gain.solving.certify import row_bounds
from tests.gain.operators import operators


def contains(radius, value, slack=1e-12):
    return radius.lower * (1 - slack) <= value <= radius.upper * (1 + slack)


@settings(max_examples=150, deadline=None)
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


@settings(max_examples=80, deadline=None)
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


@settings(max_examples=80, deadline=None)
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
    assert radius.work < 400


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


def test_parallel_links_do_not_split_a_class():
    """A hub that hears each of its neighbours three times: one class, whatever the order of the links."""
    rng = np.random.default_rng(5)
    leaf = np.repeat(np.arange(1, 200), 3)
    zero = np.zeros(leaf.size, dtype=int)
    order = rng.permutation(2 * leaf.size)
    to, source = np.concatenate([leaf, zero])[order], np.concatenate([zero, leaf])[order]
    radius = GainOperator.from_links(200, to, source, np.full(to.size, 0.1)).radius()
    assert radius.reached
    assert contains(radius, 0.3 * math.sqrt(199), 1e-12)
    assert "classes" not in radius.method


def two_way_chain(size, ahead, back):
    i = np.arange(1, size)
    to, source = np.concatenate([i, i - 1]), np.concatenate([i - 1, i])
    return size, to, source, np.repeat([ahead, back], size - 1)


@pytest.mark.parametrize(("rows", "p"), [("sum", 1), ("root_sum_square", 2)])
def test_a_chain_whose_point_spans_e_to_the_700000(rows, p):
    """Forward 1e30, back 1e-30 on 10150 outlets: the symmetrised chain has radius (2 cos(pi/(n + 1)))^(1/p), and the
    point grows by 1e30 per outlet, e^700000 in all: no doubles hold it, one exponent per outlet does."""
    size = 10_150
    op = GainOperator.from_links(*two_way_chain(size, 1e30, 1e-30), rows)
    radius = op.radius(1e-9)
    assert radius.reached
    assert contains(radius, (2 * math.cos(math.pi / (size + 1))) ** (1 / p), 0)
    assert np.ptp(radius.exponent) * math.log(2) > 700_000
    assert op.upper_bound(radius.point, radius.exponent) <= radius.upper


def test_a_one_way_chain_of_classes_needs_no_width():
    """2000 loops of .9, each fed by the one before with gain 1e6: a point of ordinary doubles could not join them."""
    size = 2000
    i = np.arange(size)
    to, source = np.concatenate([i, i[1:]]), np.concatenate([i, i[:-1]])
    op = GainOperator.from_links(size, to, source, np.concatenate([np.full(size, 0.9), np.full(size - 1, 1e6)]))
    radius = op.radius(1e-9)
    assert radius.lower == radius.upper == 0.9
    assert op.upper_bound(radius.point, radius.exponent) <= 0.9 * (1 + 1e-9)


@pytest.mark.parametrize("rows", ["sum", "max", "root_sum_square"])
def test_gains_over_twelve_decades(rows):
    rng = np.random.default_rng(11)
    size, links = 400, 1600
    ends = np.concatenate(
        [np.stack([np.arange(size), (np.arange(size) + 1) % size]), rng.integers(0, size, (2, links))], 1
    )
    gains = 10.0 ** rng.uniform(-7, 7, ends.shape[1])
    op = GainOperator.from_links(size, *ends, gains, rows)
    radius = op.radius(1e-9)
    assert radius.reached
    if rows != "max":
        matrix = np.zeros((size, size))
        np.add.at(matrix, tuple(ends), gains if rows == "sum" else gains**2)
        expected = max(abs(np.linalg.eigvals(matrix))) ** (1 if rows == "sum" else 0.5)
        assert contains(radius, expected, 1e-8)


def test_nearly_decoupled_blocks():
    """Two rings of equal radius .5 joined by links of 1e-12 and 1e-9: the radius is .5 + about sqrt(1e-21)/n."""
    n = 100
    i = np.arange(n)
    to = np.concatenate([i, i + n, [0, n]])
    source = np.concatenate([(i - 1) % n, (i - 1) % n + n, [n, 0]])
    gains = np.concatenate([np.full(2 * n, 0.5), [1e-12, 1e-9]])
    radius = GainOperator.from_links(2 * n, to, source, gains).radius(1e-9)
    assert radius.reached
    assert radius.upper >= 0.5
    assert radius.lower <= 0.5 + 1e-11


@pytest.mark.parametrize("size", [64, 2001])
def test_periodic_graphs(size):
    """Even rings are bipartite: plain power steps never settle. Radius by hand: the two-step operator is a ring again,
    with gains (a b) and so on; for alternating gains a, b to both sides it is a + b."""
    i = np.arange(size - size % 2)
    n = i.size
    to, source = np.concatenate([i, i]), np.concatenate([(i - 1) % n, (i + 1) % n])
    gains = np.where(np.concatenate([i, i - 1]) % 2 == 0, 0.4, 0.3)
    radius = GainOperator.from_links(n, to, source, gains).radius(1e-12)
    assert radius.reached
    assert contains(radius, 0.7, 1e-15)


def test_bounds_do_not_come_from_a_localised_vector():
    """A hot spot on a long line: the Perron vector falls by orders of magnitude away from it and drowns in rounding;
    quotients taken there would give [0.08, 5.6e6]-like bounds. The enclosure closes, and the spot sets it."""
    size = 4000
    links = two_way_chain(size, 0.3, 0.3)
    op = GainOperator.from_links(size, np.append(links[1], 2000), np.append(links[2], 2000), np.append(links[3], 0.8))
    radius = op.radius(1e-10)
    assert radius.reached
    # s_i = x^|i - 2000| with lambda = .8 + .6 x and lambda x = .3 + .3 x^2: lambda^2 = .8^2 + 4 .3^2.
    assert contains(radius, 1.0, 1e-12)
    # What a vector from an eigenvalue solver would have given.
    vector = np.abs(eigsh(op.matrix, k=1)[1][:, 0])
    naive = row_bounds(op, np.maximum(vector, 1e-300), None)
    assert naive[1].max() / naive[0].min() > 10


def test_bad_numbers_never_reach_a_factorisation():
    """A sparse factorisation that is handed a NaN may abort the process: it is refused before."""
    from synth.gain.solving.krylov import factored

    good = csr_array(np.array([[0.2, 0.3], [0.1, 0.2]]))
    assert factored(good, 1.0) is not None
    for bad in (float("nan"), float("inf")):
        assert factored(csr_array(np.array([[0.2, bad], [0.1, 0.2]])), 1.0) is None
        assert factored(good, bad) is None


@settings(max_examples=60, deadline=None)
@given(operators(alternatives=True))
def test_alternatives_keep_the_enclosure(op):
    radius = op.radius(1e-9)
    assert radius.reached
    assert radius.lower <= radius_literally(op, 40) * (1 + 1e-12)
    assert radius.upper >= _growth_from_below(op) * (1 - 1e-12)


def test_the_strongest_links_of_a_large_network():
    """Ring of 3000 with one hot pair: the shares of its two links, from the symmetric Perron vector."""
    size = 3000
    i = np.arange(size)
    to, source = np.concatenate([i, i]), np.concatenate([(i - 1) % size, (i + 1) % size])
    gains = np.full(2 * size, 0.2)
    gains[[1, size]] = 0.8  # 0 -> 1 and 1 -> 0
    radius = GainOperator.from_links(size, to, source, gains).radius()
    # s falls by x per outlet: lambda = .8 + .2 x and lambda x = .2 + .2 x^2 give lambda = .85, x = .25.
    assert contains(radius, 0.85, 1e-12)
    found = radius.bottleneck
    assert set(found.links[:2]) == {1, size}
    # d log lambda / d log g = g s_0 s_1 / (lambda sum s^2), sum s^2 = 2 / (1 - x^2).
    assert found.shares[0] == pytest.approx(0.8 / (0.85 * 2 / (1 - 0.25**2)), rel=1e-6)

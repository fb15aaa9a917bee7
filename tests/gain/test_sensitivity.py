"""Slopes and link tolerances for all links at once against their definitions, and at sizes no inverse fits."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.sensitivity import LinkNetwork, selected_inverse, slopes
from tests.gain.families import built, families


def tolerances_literally(peaks, source, outlet, to, inlet, strength):
    """Theory (15) as it reads: M_link entry by entry, R by an inverse, R_ll / (R_ll - 1)."""
    count = len(source)
    M = np.zeros((count, count))
    for a in range(count):
        for b in range(count):
            if to[b] == source[a]:
                M[a, b] = peaks[source[a]][outlet[a]][inlet[b]] * strength[b]
    R = np.linalg.inv(np.eye(count) - M)
    return [R[k, k] / (R[k, k] - 1) if R[k, k] - 1 > 1e-12 else math.inf for k in range(count)]


@st.composite
def networks(draw):
    """Up to 5 units with 1 to 3 outlets and inlets, up to 12 links, scaled to a radius below one."""
    count = draw(st.integers(1, 5))
    shapes = [draw(st.tuples(st.integers(1, 3), st.integers(1, 3))) for _ in range(count)]
    gain = st.one_of(st.just(0.0), st.floats(0.01, 1))
    peaks = [[[draw(gain) for _ in range(w)] for _ in range(h)] for h, w in shapes]
    links = []
    for _ in range(draw(st.integers(1, 12))):
        a, b = draw(st.integers(0, count - 1)), draw(st.integers(0, count - 1))
        outlet, inlet = draw(st.integers(0, shapes[a][0] - 1)), draw(st.integers(0, shapes[b][1] - 1))
        links.append((a, outlet, b, inlet, draw(st.floats(0.05, 1))))
    columns = [list(c) for c in zip(*links, strict=True)]
    radius = LinkNetwork.of(peaks, *columns).operator().radius().upper
    if radius > 0:
        columns[4] = [g * 0.8 / radius for g in columns[4]]
    return peaks, columns


@settings(max_examples=60, deadline=None)
@given(networks())
def test_tolerances_are_what_theory_15_says(network):
    peaks, columns = network
    found = LinkNetwork.of(peaks, *columns).tolerances()
    truth = tolerances_literally(peaks, *columns)
    for value, expected in zip(found, truth, strict=True):
        if expected > 1e8:
            assert value > 1e7
        else:
            assert value == pytest.approx(expected, rel=1e-8)


@settings(max_examples=12, deadline=None)
@given(networks(), st.data())
def test_a_tolerance_is_where_the_radius_certainly_stays_below_one_and_certainly_does_not(network, data):
    """A hair below the factor the enclosure proves the network, a hair above it the enclosure excludes it."""
    peaks, columns = network
    net = LinkNetwork.of(peaks, *columns)
    k = data.draw(st.integers(0, len(columns[0]) - 1))
    factor = float(net.tolerances()[k])
    assume(factor < 1e6)
    assert net.proven(k, factor * (1 - 1e-7))
    assert net.operator(k, factor * (1 + 1e-7)).radius(1e-12).lower > 1


def test_trap_6_the_link_is_not_an_entry():
    """Unit 0 with peak gains [1 1], unit 1 with [1; 1]: the link 0 -> 1 of .4 feeds two outlets that both come back
    with .5. It tolerates 2.5 (2.5 * .4 * (.5 + .5) = 1); the formula on one entry of the outlet matrix says 4."""
    net = LinkNetwork.of([[[1, 1]], [[1], [1]]], [0, 1, 1], [0, 0, 1], [1, 0, 0], [0, 0, 1], [0.4, 0.5, 0.5])
    assert net.tolerances() == pytest.approx([2.5, 4, 4])
    # The wrong way: with the outlets x (unit 0), a and b (unit 1), strengthen the one entry from x to a.
    M = net.operator().dense()
    Z = np.linalg.inv(np.eye(3) - M)
    back = Z[0, 1] * M[1, 0]
    assert (1 + back) / back == pytest.approx(4.0)
    assert net.proven(0, 2.49)
    assert not net.proven(0, 2.51)


def test_networks_that_cannot_be_answered_are_refused():
    good = [[[0.5]]], [0], [0], [0], [0], [1.0]
    assert LinkNetwork.of(*good).tolerances() == pytest.approx([2.0])
    with pytest.raises(InputError, match="below 1"):
        LinkNetwork.of([[[1.0]]], *good[1:]).tolerances()
    for wrong in (-0.5, math.nan, math.inf):
        with pytest.raises(InputError, match="not negative"):
            LinkNetwork.of([[[wrong]]], *good[1:])
        with pytest.raises(InputError, match="not negative"):
            LinkNetwork.of(*good[:5], [wrong])
    with pytest.raises(InputError, match="radius is zero"):
        slopes(GainOperator.from_links(2, [1], [0], [3.0]))


def grid_network(side):
    """Units with one outlet on a side x side grid, four neighbours, total intake .9."""
    i = np.arange(side * side)
    x, y = i % side, i // side
    source, to = [], []
    for dx, dy in ((1, 0), (-1, 0), (0, 1), (0, -1)):
        ok = (x + dx >= 0) & (x + dx < side) & (y + dy >= 0) & (y + dy < side)
        to.append(i[ok])
        source.append((y + dy)[ok] * side + (x + dx)[ok])
    source, to = np.concatenate(source), np.concatenate(to)
    zero = np.zeros(source.size, dtype=int)
    return [[[1.0]]] * (side * side), source, zero, to, zero, np.full(source.size, 0.225)


def test_a_grid_and_its_columns():
    """Takahashi's equations against plain solves, on every place of a grid's matrix."""
    net = LinkNetwork.of(*grid_network(12))
    matrix = np.eye(net.size) - net.operator().dense()
    inverse = np.linalg.inv(matrix)
    rows, columns = np.nonzero(matrix)
    found = selected_inverse(net.operator().matrix.tocsc() * -1.0 + _eye(net.size), rows, columns)
    assert found == pytest.approx(inverse[rows, columns], rel=1e-12)
    # All links alike but for where they are: those near the middle have more ways back, hence less tolerance.
    tolerance = net.tolerances()
    to = grid_network(12)[3]
    assert tolerance[to == 0].min() > tolerance[to == 66].max()


def _eye(size):
    from scipy.sparse import eye_array

    return eye_array(size, format="csc")


def test_full_factors_are_solved_by_columns(monkeypatch):
    from synth.gain import sensitivity

    net = LinkNetwork.of(*grid_network(15))
    quick = net.tolerances()
    monkeypatch.setattr(sensitivity, "_SELECTED_FILL", 0)
    assert net.tolerances() == pytest.approx(quick, rel=1e-11)


@pytest.mark.long
def test_tolerances_of_a_ring_of_a_million_and_a_large_grid():
    """Ring with g to both neighbours, closed form of the endless chain: R_ll - 1 = (1/sqrt(1 - 4 g^2) - 1)/2."""
    size, g = 1_000_000, 0.4
    i = np.arange(size)
    source, to = np.concatenate([(i + 1) % size, (i - 1) % size]), np.concatenate([i, i])
    zero = np.zeros(2 * size, dtype=int)
    net = LinkNetwork.of([[[1.0]]] * size, source, zero, to, zero, np.full(2 * size, g))
    back = (1 / math.sqrt(1 - 4 * g * g) - 1) / 2
    assert net.tolerances() == pytest.approx(np.full(2 * size, (1 + back) / back), rel=1e-9)
    assert np.all(LinkNetwork.of(*grid_network(150)).tolerances() > 1 / 0.9)


@settings(max_examples=40, deadline=None)
@given(st.integers(2, 6), st.sampled_from(["sum", "root_sum_square", "mixed"]), st.integers(0, 10**6))
def test_slopes_are_finite_differences(n, rows, seed):
    """All links present, so that the Perron root is simple."""
    rng = np.random.default_rng(seed)
    to, source = np.divmod(np.arange(n * n), n)
    gain = rng.uniform(0.1, 1, n * n)
    kinds = [("sum", "root_sum_square")[i % 2] for i in range(n)] if rows == "mixed" else rows
    op = GainOperator.from_links(n, to, source, gain, kinds)
    found = slopes(op)
    assert found.settled
    assert found.active is (rows != "sum")
    assert found.share.sum() == pytest.approx(1, abs=1e-6)
    k = int(rng.integers(0, n * n))
    ends = []
    for step in (1e-4, -1e-4):
        changed = gain.copy()
        changed[k] += step
        ends.append(op.replaced(changed).radius(1e-13).upper)
    assert found.per_gain[k] == pytest.approx((ends[0] - ends[1]) / 2e-4, rel=1e-4, abs=1e-6)


def test_slopes_of_max_rows_are_the_loop():
    """Loop 0 -> 1 -> 0 carries the radius sqrt(.5 * .8): half the share each, nothing elsewhere."""
    op = GainOperator.from_links(3, [1, 0, 2, 2, 0], [0, 1, 2, 1, 2], [0.5, 0.8, 0.6, 3.0, 1e-3], "max")
    found = slopes(op)
    assert found.active
    assert found.share == pytest.approx([0.5, 0.5, 0, 0, 0], abs=1e-6)
    assert found.per_gain[0] == pytest.approx(math.sqrt(0.4) / 2 / 0.5, rel=1e-6)


def test_slopes_of_every_family():
    for name, to, source, gain in families(900):
        if name == "chain that amplifies":
            continue
        op = built(to, source, gain, "sum")
        found = slopes(op)
        assert found.share.sum() == pytest.approx(1, abs=1e-6), name
        strongest = int(np.argmax(found.share))
        ends = []
        for factor in (1 + 1e-4, 1 - 1e-4):
            changed = gain.copy()
            changed[strongest] *= factor
            ends.append(math.log(op.replaced(changed).radius(1e-12).upper))
        assert found.share[strongest] == pytest.approx((ends[0] - ends[1]) / 2e-4, abs=1e-3), name

"""The largest loop of max rows: value, loop and points, on every family, at sizes where only good methods end."""

from __future__ import annotations

import itertools
import math
import time

import networkx as nx
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from synth.gain import GainOperator
from synth.gain.dense import largest_loop_literally
from synth.gain.solving.certify import certified_lower, certified_upper
from synth.gain.solving.loops import solve
from tests.gain.families import built, families, width


def connected(op: GainOperator) -> bool:
    graph = nx.DiGraph(zip(op.source.tolist(), op.to.tolist(), strict=True))
    return len(graph) == op.size and nx.is_strongly_connected(graph)


@st.composite
def max_classes(draw):
    """One strongly connected class of up to 6 outlets with gains over many decades, parallel links included."""
    n = draw(st.integers(1, 6))
    extra = draw(st.lists(st.tuples(st.integers(0, n - 1), st.integers(0, n - 1)), max_size=10))
    order = draw(st.permutations(range(n)))
    loop = [(order[k], order[k - 1]) for k in range(n)]
    ends = loop + extra
    gains = draw(st.lists(st.floats(-6, 6).map(lambda e: 10.0**e), min_size=len(ends), max_size=len(ends)))
    return GainOperator.from_links(n, [t for t, _ in ends], [s for _, s in ends], gains, "max")


def mean_of(op: GainOperator, loop: tuple[int, ...]) -> float:
    return math.exp(math.fsum(math.log(op.gain[k]) for k in loop) / len(loop))


@settings(max_examples=60, deadline=None)
@given(max_classes())
def test_value_loop_and_points_against_all_simple_loops(op):
    found = solve(op, 1e-9)
    truth = largest_loop_literally(op)
    assert certified_lower(op, found.low_point, found.low_exponent) <= truth * (1 + 1e-13)
    assert certified_upper(op, found.point, found.exponent) >= truth * (1 - 1e-13)
    assert width(op, found) <= 1e-9
    assert mean_of(op, found.loop) == pytest.approx(truth, rel=1e-12)
    for link, feeder in itertools.pairwise((*found.loop, found.loop[0])):
        assert op.source[link] == op.to[feeder]
    assert len(set(found.loop)) == len(found.loop)


@settings(max_examples=40, deadline=None)
@given(max_classes(), st.integers(-20, 20), st.data())
def test_scaling_and_renumbering(op, power, data):
    """Law: powers of two change nothing but the scale; a diagonal change of coordinates leaves the mean."""
    one = mean_of(op, solve(op, 1e-9).loop)
    scaled = op.scaled(2.0**power)
    assert mean_of(scaled, solve(scaled, 1e-9).loop) == pytest.approx(one * 2.0**power, rel=1e-12)
    t = 10.0 ** np.array(data.draw(st.lists(st.floats(-9, 9), min_size=op.size, max_size=op.size)))
    moved = op.replaced(op.gain * t[op.to] / t[op.source])
    assert width(moved, solve(moved, 1e-9)) <= 1e-9
    assert mean_of(moved, solve(moved, 1e-9).loop) == pytest.approx(one, rel=1e-12)


def closes(size: int) -> None:
    for name, to, source, gain in families(size):
        op = built(to, source, gain, "max")
        found = solve(op, 1e-9)
        assert width(op, found) <= 1e-9, name
        # On the loop the quotients are equal up to rounding.
        low = certified_lower(op, found.low_point, found.low_exponent)
        assert low == pytest.approx(mean_of(op, found.loop), rel=1e-11), name
        assert np.count_nonzero(found.low_point) == len(found.loop), name
        print(f"{name}: {op.size} outlets, loop of {len(found.loop)}, {found.work} sweeps")


def test_every_family_closes() -> None:
    closes(10_000)


@pytest.mark.long
def test_a_million_outlets() -> None:
    start = time.process_time()
    closes(1_000_000)
    print(f"all families: {time.process_time() - start:.0f} s of processor time")


def test_a_loop_of_many_links_that_needs_every_one() -> None:
    """Breaking any link of a single loop leaves none; its mean is that of all its gains, whatever they are."""
    size = 50_000
    gain = 10.0 ** np.random.default_rng(5).uniform(-6, 6, size)
    i = np.arange(size)
    op = GainOperator.from_links(size, i, i - 1 + size * (i == 0), gain, "max")
    found = solve(op, 1e-9)
    assert sorted(found.loop) == list(range(size))
    assert width(op, found) <= 1e-12


def test_two_loops_that_differ_in_the_last_digits() -> None:
    """Means 1 and 1 + 1e-12: the enclosure holds whichever is taken; at 1 + 1e-6 the larger one is named."""
    ends = [1, 0, 2, 0], [0, 1, 0, 2]
    near = GainOperator.from_links(3, *ends, [1, 1, 1 + 1e-12, 1 + 1e-12], "max")
    found = solve(near, 1e-9)
    assert certified_upper(near, found.point, found.exponent) >= 1 + 1e-12
    assert certified_lower(near, found.low_point, found.low_exponent) <= 1 + 1e-12
    clear = GainOperator.from_links(3, *ends, [1, 1, 1 + 1e-6, 1 + 1e-6], "max")
    assert sorted(solve(clear, 1e-9).loop) == [2, 3]


def test_other_rows_and_empty_rows_are_left_to_others() -> None:
    assert solve(GainOperator.from_links(1, [0], [0], [1.0], "max"), 1e-9) is not None
    assert solve(GainOperator.from_links(1, [0], [0], [1.0], "sum"), 1e-9) is None
    assert solve(GainOperator.from_links(2, [0], [0], [1.0], "max"), 1e-9) is None
    assert solve(GainOperator.from_links(1, [], [], [], "max"), 1e-9) is None


@settings(max_examples=40, deadline=None)
@given(max_classes())
def test_stated_class_is_what_the_strategy_makes(op):
    assume(op.size > 1)
    assert connected(op)

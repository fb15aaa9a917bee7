"""The gain operator: definition loop against fast code, its laws, and what it refuses."""

from __future__ import annotations

import math
import tracemalloc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.dense import apply_literally
from tests.gain.operators import operators, vectors


@settings(max_examples=120, deadline=None)
@given(operators(alternatives=True), st.data())
def test_fast_code_equals_the_definition_loop(op, data):
    s = data.draw(vectors(op.size))
    assert op(s) == pytest.approx(apply_literally(op, s), rel=1e-12, abs=1e-300)


@settings(max_examples=90, deadline=None)
@given(operators(alternatives=True), st.data())
def test_monotone_homogeneous_subadditive(op, data):
    """Law of the operator (theory: section 4)."""
    s, t = np.array(data.draw(vectors(op.size))), np.array(data.draw(vectors(op.size)))
    c = data.draw(st.floats(0.01, 100))
    slack = 1e-12 * (op(s) + op(t)) + 1e-300
    assert np.all(op(s) <= op(np.maximum(s, t)) + slack)
    assert op(c * s) == pytest.approx(c * op(s), rel=1e-12, abs=1e-300)
    assert np.all(op(s + t) <= op(s) + op(t) + slack)


@given(operators(rows="sum"), st.data())
@settings(max_examples=60, deadline=None)
def test_sum_rows_are_their_matrix(op, data):
    s = np.array(data.draw(vectors(op.size)))
    assert op(s) == pytest.approx(op.dense() @ s, rel=1e-12, abs=1e-300)


def test_dense_refuses_rows_that_are_no_matrix():
    with pytest.raises(InputError, match="is a matrix"):
        GainOperator.from_links(1, [0], [0], [1.0], "max").dense()


def test_parallel_links_follow_their_row_type():
    """Two links 3 and 4 from the same outlet: 7, 4, 5, and 7 again where both enter one inlet."""
    pair = (1, [0, 0], [0, 0], [3.0, 4.0])
    assert GainOperator.from_links(*pair, "sum")([1.0])[0] == 7
    assert GainOperator.from_links(*pair, "max")([1.0])[0] == 4
    assert GainOperator.from_links(*pair, "root_sum_square")([1.0])[0] == 5
    assert GainOperator.from_links(*pair, "root_sum_square", inlet=[8, 8])([1.0])[0] == 7


def test_alternatives_count_once():
    """Terms 3 and 4 as alternatives, 2 beside them: 6 as a sum, sqrt(4^2 + 2^2) as a root, 4 as a maximum."""
    links = (1, [0, 0, 0], [0, 0, 0], [3.0, 4.0, 2.0])
    for kind, value in (("sum", 6.0), ("max", 4.0), ("root_sum_square", math.sqrt(20))):
        op = GainOperator.from_links(*links, kind, choice=[5, 5, -1])
        assert op([1.0])[0] == value
        assert op.radius().lower <= value <= op.radius().upper
    # At one inlet all of it adds before the square.
    assert GainOperator.from_links(*links, "root_sum_square", [0, 0, 0], [5, 5, -1])([1.0])[0] == 6.0
    # Equal numbers in different rows are different choices.
    two = GainOperator.from_links(2, [0, 1, 1], [0, 0, 0], [3.0, 4.0, 2.0], "sum", choice=[5, 5, 5])
    assert two([1.0, 1.0]).tolist() == [3.0, 4.0]


def test_a_link_that_may_weaken_is_a_sum_of_maxima():
    """x_i hears (neighbour, or itself in its place) on two sides: max(.4 s_-, .3 s_i) + max(.4 s_+, .2 s_i) on a ring
    of 5 has radius .8 at s = 1, and not 1.3, which the four terms would add up to."""
    i = np.arange(5)
    to, source = np.concatenate([i, i, i, i]), np.concatenate([(i - 1) % 5, i, (i + 1) % 5, i])
    gain = np.repeat([0.4, 0.3, 0.4, 0.2], 5)
    radius = GainOperator.from_links(5, to, source, gain, choice=np.repeat([0, 0, 1, 1], 5)).radius()
    assert radius.lower <= 0.8 <= radius.upper <= 0.8 * (1 + 1e-12)
    assert GainOperator.from_links(5, to, source, gain).radius().upper == pytest.approx(1.3)


def test_alternatives_at_several_inlets_are_refused():
    links = (1, [0, 0], [0, 0], [3.0, 4.0])
    GainOperator.from_links(*links, "root_sum_square", inlet=[1, 1], choice=[0, 0])
    GainOperator.from_links(*links, "sum", inlet=[1, 2], choice=[0, 0])  # sums do not look at inlets
    with pytest.raises(InputError, match="same inlet"):
        GainOperator.from_links(*links, "root_sum_square", inlet=[1, 2], choice=[0, 0])


@pytest.mark.parametrize("kind", ["sum", "max", "root_sum_square", "mixed"])
def test_large_operators_equal_the_definition(kind):
    """Beyond the size where sparse matrices and counting sorts take over."""
    rng = np.random.default_rng(3)
    size, links = 80, 1500
    rows = kind if kind != "mixed" else [("sum", "max", "root_sum_square")[i % 3] for i in range(size)]
    ends = rng.integers(0, size, (2, links))
    s = rng.uniform(0, 2, size)
    for inlet, choice in ((None, None), (rng.integers(0, 3, links), None), (None, rng.integers(-1, 3, links))):
        op = GainOperator.from_links(size, *ends, rng.uniform(0, 1, links), rows, inlet, choice)
        assert op(s) == pytest.approx(apply_literally(op, s), rel=1e-12)
        assert [int(k) for k in op.links_into[7]] == np.flatnonzero(op.to == 7).tolist()


def test_memory_is_proportional_to_links():
    """A million outlets: building, applying and looking at rows makes no Python object per row."""
    size = 1_000_000
    i = np.arange(size)
    op = GainOperator.from_links(size, i, (i + 1) % size, np.full(size, 0.5), "max")
    tracemalloc.start()
    assert op(np.ones(size))[-1] == 0.5
    assert op.links_into[size - 1].tolist() == [size - 1]
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 200 * size  # bytes


def test_root_of_squares_neither_overflows_nor_vanishes():
    op = GainOperator.from_links(1, [0, 0], [0, 0], [3.0, 4.0], "root_sum_square")
    assert op([1e300])[0] == pytest.approx(5e300)
    assert op([1e-300])[0] == pytest.approx(5e-300)


GOOD = {"size": 2, "to": [0, 1], "source": [1, 0], "gain": [0.5, 0.25], "rows": "sum"}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"gain": [0.5, -0.1]}, "not negative"),
        ({"gain": [0.5, float("nan")]}, "finite"),
        ({"gain": [float("inf"), 0.1]}, "finite"),
        ({"gain": [[0.5, 0.1]]}, "one per link"),
        ({"gain": ["a", "b"]}, "numbers"),
        ({"to": [0, 2]}, "numbered 0 to 1"),
        ({"source": [-1, 0]}, "numbered 0 to 1"),
        ({"to": [0]}, "one entry per link"),
        ({"to": [0.0, 1.0]}, "whole numbers"),
        ({"rows": "summ"}, "did you mean 'sum'"),
        ({"rows": ["sum"]}, "one per outlet"),
        ({"inlet": [0]}, "one entry per link"),
        ({"choice": [0]}, "one entry per link"),
        ({"choice": [0.5, 1.0]}, "whole numbers"),
        ({"choice": [-2, 0]}, "-1 for a link alone"),
        ({"size": 0}, "positive whole number"),
        ({"size": 2.5}, "positive whole number"),
    ],
)
def test_each_wrong_argument_is_refused(change, words):
    GainOperator.from_links(**GOOD)  # the unchanged case is accepted
    with pytest.raises(InputError, match=words):
        GainOperator.from_links(**{**GOOD, **change})


@pytest.mark.parametrize(
    "s", [[1.0], [1.0, 2.0, 3.0], [1.0, -1.0], [1.0, float("nan")], [1.0, float("inf")], ["a", "b"]]
)
def test_points_that_are_no_points_are_refused(s):
    op = GainOperator.from_links(**GOOD)
    op([1.0, 1.0])
    for call in (op, op.upper_bound, op.lower_bound):
        with pytest.raises(InputError, match="s"):
            call(s)


def test_arrays_are_frozen():
    op = GainOperator.from_links(**GOOD)
    with pytest.raises(ValueError, match="read-only"):
        op.gain[0] = 2.0

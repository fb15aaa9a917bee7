"""The gain operator: definition loop against fast code, its laws, and what it refuses."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.gain.dense import apply_literally
from tests.gain.operators import operators, vectors


@settings(max_examples=200, deadline=None)
@given(operators(), st.data())
def test_fast_code_equals_the_definition_loop(op, data):
    s = data.draw(vectors(op.size))
    assert op(s) == pytest.approx(apply_literally(op, s), rel=1e-12, abs=1e-300)


@settings(max_examples=150, deadline=None)
@given(operators(), st.data())
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

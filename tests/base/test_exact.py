"""Law: exact matrices obey the ring laws exactly, and their floats are correctly rounded."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix, exact, vector

fractions = st.fractions(min_value=-100, max_value=100, max_denominator=1000)


def matrices(height: int, width: int) -> st.SearchStrategy[ExactMatrix]:
    row = st.lists(fractions, min_size=width, max_size=width)
    return st.lists(row, min_size=height, max_size=height).map(lambda r: ExactMatrix.of(r, (height, width)))


@given(matrices(2, 3), matrices(3, 2), matrices(3, 2))
def test_product_distributes_exactly(a: ExactMatrix, b: ExactMatrix, c: ExactMatrix) -> None:
    assert a @ (b + c) == a @ b + a @ c
    assert (a @ b).T == b.T @ a.T
    assert b - c == b + c.scaled(-1)


@given(matrices(2, 2), matrices(2, 2))
def test_floats_of_a_product_match_numpy(a: ExactMatrix, b: ExactMatrix) -> None:
    np.testing.assert_allclose((a @ b).floats(), a.floats() @ b.floats(), rtol=1e-12, atol=1e-9)


def test_decimals_stay_decimals_and_floats_stay_binary() -> None:
    assert exact("0.1") == Fraction(1, 10)
    assert exact(0.1) == Fraction(3602879701896397, 36028797018963968)
    assert ExactMatrix.of(np.array([[0.5, 2.0]])) == ExactMatrix.of([["1/2", 2]])


def test_shapes_are_checked() -> None:
    with pytest.raises(ValueError, match="differ in length"):
        ExactMatrix.of([[1, 2], [3]])
    with pytest.raises(ValueError, match="shape"):
        ExactMatrix.of([[1, 2]], (2, 1))
    with pytest.raises(ValueError, match="multiplied"):
        ExactMatrix.zeros(2, 3) @ ExactMatrix.zeros(2, 3)
    with pytest.raises(ValueError, match="added"):
        ExactMatrix.zeros(2, 3) + ExactMatrix.zeros(3, 2)


def test_empty_sides_keep_their_width() -> None:
    empty = ExactMatrix.of([], (0, 3))
    assert empty.shape == (0, 3)
    assert (empty @ ExactMatrix.zeros(3, 2)).shape == (0, 2)
    assert empty.T.shape == (3, 0)
    assert empty.floats().shape == (0, 3)


def test_infinity_and_nan_are_refused() -> None:
    for bad in (float("inf"), float("nan")):
        with pytest.raises((OverflowError, ValueError)):
            vector([bad])

"""The largest free response: dense sampling and closed forms inside the enclosure, refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import InputError, UnstableLoop
from synth.gain import largest_free_response
from tests.gain.test_peak import hurwitz


def sampled(A, H, points=4000):
    """max over a grid of sum_q |(H e^{At})_kq|: a lower bound, close to the supremum."""
    values = np.linalg.eigvals(A)
    step = 12 / min(-values.real) / points
    E, rows = scipy.linalg.expm(A * step), np.asarray(H, dtype=float)
    best = np.abs(rows).sum(axis=1)
    for _ in range(points):
        rows = rows @ E
        best = np.maximum(best, np.abs(rows).sum(axis=1))
    return best


@pytest.mark.parametrize("seed", range(25))
def test_contains_dense_sampling(seed):
    A, _, H = hurwitz(seed, 1 + seed % 5, 0.3)
    found = largest_free_response(A, H, 1e-7)
    assert found.width <= 1e-7
    best = sampled(A, H)
    assert np.all(best <= found.upper * (1 + 1e-10))
    assert np.all(best >= found.lower * (1 - 1e-3))


def test_closed_forms():
    """t e^-t + e^-t falls from 1; 9 t e^-t + e^-t peaks at 1 - 1/9 with 9 e^{-8/9}."""
    falls = largest_free_response([[-1, 1], [0, -1]], [[1, 0]], 1e-10)
    assert (falls.lower[0], falls.upper[0]) == pytest.approx((1, 1), rel=1e-10)
    peaks = largest_free_response([[-1, 9], [0, -1]], [[1, 0]], 1e-10)
    assert peaks.lower[0] <= 9 * math.exp(-8 / 9) <= peaks.upper[0]
    assert peaks.width <= 1e-10


def test_rows_of_zeros_and_no_rows():
    assert largest_free_response([[-1]], [[0]]).upper.tolist() == [0.0]
    assert largest_free_response([[-1]], np.zeros((0, 1))).upper.shape == (0,)


def test_scaling_law():
    A, _, H = hurwitz(4, 3)
    one, other = largest_free_response(A, H, 1e-9), largest_free_response(A, -8 * H, 1e-9)
    assert other.lower[0] <= 8 * one.upper[0]
    assert other.upper[0] >= 8 * one.lower[0]


def test_refusals():
    largest_free_response([[-1]], [[1]])
    with pytest.raises(UnstableLoop):
        largest_free_response([[0]], [[1]])
    with pytest.raises(InputError, match="outlets"):
        largest_free_response([[-1]], [[1, 2]])
    with pytest.raises(InputError, match="width"):
        largest_free_response([[-1]], [[1]], 0)

"""The fast estimates against closed forms, the guaranteed enclosures, a literal definition and finite differences."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.linalg import expm

from synth.gain import peak_to_peak_gain
from synth.gain.guide import connected_blocks, peak_gain_guide

Array = NDArray[np.float64]


def random_unit(seed: int, n: int, outlets: int = 2, inlets: int = 2) -> tuple[Array, Array, Array, Array]:
    """A stable unit with real and complex modes."""
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(n, n))
    A = A - (np.linalg.eigvals(A).real.max() + rng.uniform(0.15, 1.0)) * np.eye(n)
    return A, rng.normal(size=(n, inlets)), rng.normal(size=(outlets, n)), rng.normal(size=(outlets, inlets))


@pytest.mark.parametrize("damping", [0.05, 0.1, 0.2, 0.3, 0.5, 0.7, 0.9, 1.0, 1.4])
def test_second_order_closed_form(damping: float) -> None:
    """wn^2/(s^2 + 2 zeta wn s + wn^2): coth(pi zeta/(2 sqrt(1 - zeta^2))), 1 from zeta = 1 on (elementary)."""
    w = 3.0
    guide = peak_gain_guide(
        np.array([[0, 1], [-w * w, -2 * damping * w]]), np.array([[0], [w * w]]), np.array([[1.0, 0]]), np.zeros((1, 1))
    )
    assert guide is not None
    truth = 1 / math.tanh(math.pi * damping / 2 / math.sqrt(1 - damping**2)) if damping < 1 else 1.0
    assert guide.gains[0, 0] == pytest.approx(truth, rel=1e-7)


@given(st.integers(0, 10_000), st.integers(1, 5))
@settings(max_examples=15, deadline=None)
def test_lies_in_the_guaranteed_enclosure(seed: int, n: int) -> None:
    A, D, H, F = random_unit(seed, n)
    guide = peak_gain_guide(A, D, H, F)
    truth = peak_to_peak_gain(A, D, H, F)
    assert guide is not None
    assert np.all(guide.gains >= truth.lower * (1 - 1e-5))
    assert np.all(guide.gains <= truth.upper * (1 + 1e-5))


def test_literal_definition() -> None:
    """A Riemann sum of |H e^{At} D| over steps far shorter than the cells."""
    A, D, H, F = random_unit(3, 4)
    step = 2e-3
    forward = expm(A * step)
    middle = expm(A * step / 2) @ D
    total = np.abs(F)
    for _ in range(int(30 / -np.linalg.eigvals(A).real.max() / step)):
        total = total + step * np.abs(H @ middle)
        middle = forward @ middle
    guide = peak_gain_guide(A, D, H, F)
    assert guide is not None
    np.testing.assert_allclose(guide.gains, total, rtol=1e-5)


@given(st.integers(0, 10_000), st.integers(1, 4))
@settings(max_examples=15, deadline=None)
def test_slopes_are_finite_differences(seed: int, n: int) -> None:
    A, D, H, F = random_unit(seed, n)
    rng = np.random.default_rng(seed + 1)
    dA, dD, dH, dF = rng.normal(size=(1, n, n)), rng.normal(size=(1, n, 2)), rng.normal(size=(1, 2, n)), F[None] / 7

    def gains(t: float) -> Array:
        found = peak_gain_guide(A + t * dA[0], D + t * dD[0], H + t * dH[0], F + t * dF[0])
        assert found is not None
        return found.gains

    step = 1e-4
    guide = peak_gain_guide(A, D, H, F, dA, dD, dH, dF)
    assert guide is not None
    # Between the one-sided differences: where a response is about to change sign the gain has a kink within the step.
    right, left = (gains(step) - guide.gains) / step, (guide.gains - gains(-step)) / step
    slack = 2e-3 * (1 + np.abs(right).max() + np.abs(left).max())
    assert np.all(guide.slopes[0] >= np.minimum(left, right) - slack)
    assert np.all(guide.slopes[0] <= np.maximum(left, right) + slack)


def test_unstable_and_empty_units() -> None:
    assert peak_gain_guide(np.array([[0.0]]), np.eye(1), np.eye(1), np.zeros((1, 1))) is None
    assert peak_gain_guide(np.array([[0.1]]), np.eye(1), np.eye(1), np.zeros((1, 1))) is None
    static = peak_gain_guide(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), np.array([[-2.0]]))
    assert static is not None and static.gains[0, 0] == 2.0
    silent = peak_gain_guide(-np.eye(2), np.zeros((2, 0)), np.eye(2), np.zeros((2, 0)))
    assert silent is not None and silent.gains.shape == (2, 0)


def test_blocks_of_a_reducible_pattern() -> None:
    pattern = np.array([[0, 1, 0, 0], [1, 0, 1, 0], [0, 0, 0, 1], [0, 0, 0, 1]], dtype=bool)
    assert [block.tolist() for block in connected_blocks(pattern)] == [[0, 1], [3]]

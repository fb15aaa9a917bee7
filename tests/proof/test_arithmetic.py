"""The checker's arithmetic against closed forms and against the ball arithmetic of synth.gain."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix
from synth.gain.free import largest_free_response
from synth.gain.peak import peak_to_peak_gain
from synth.proof import check, peak


def exact_rows(array: np.ndarray) -> list[list[Fraction]]:
    return [[Fraction(v) for v in row] for row in array.tolist()]


def flow_of(A: np.ndarray) -> check.Flow:
    exact = ExactMatrix.of(A)
    a = Fraction(peak.decay(exact) * 0.7).limit_denominator(10**6)
    P = [list(row) for row in peak.decaying_norm(exact, a).rows]
    PA = check.mul(P, exact_rows(A), len(P))
    falling = [[-(PA[i][j] + PA[j][i] + 2 * a * P[i][j]) for j in range(len(P))] for i in range(len(P))]
    assert check.definite(P) and check.definite(falling)
    return check.Flow(exact_rows(A), P, a)


@pytest.mark.parametrize("seed", range(12))
def test_enclosures_meet_those_of_ball_arithmetic(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 5))
    A = np.round(rng.normal(size=(n, n)) * rng.choice([1, 4]), 3)
    A -= np.eye(n) * round(float(np.linalg.eigvals(A).real.max()) + float(rng.choice([0.3, 1])), 3)
    D, H = np.round(rng.normal(size=(n, 1)), 3), np.round(rng.normal(size=(2, n)), 3)
    H[1, rng.integers(n)] = 0
    flow = flow_of(A)
    known = peak_to_peak_gain(A, D, H, 0, 1e-8)
    free = largest_free_response(A, H, 1e-6)
    back = check.Flow(check.transpose(exact_rows(A)), flow.inverse, flow.decay)
    for k, (low, high) in enumerate(check.peak_gain(flow, [row[0] for row in exact_rows(D)], exact_rows(H))):
        assert low <= known.upper[k, 0] and high >= known.lower[k, 0]
        assert high - low <= high * Fraction(1, 10**7)
        bound = check.free_response(back, exact_rows(H)[k])
        assert free.lower[k] <= bound <= free.upper[k] * (1 + 1e-6)


def test_second_order_unit_in_closed_form():
    """Theory (5): wn^2/(s^2 + 2 zeta wn s + wn^2) has peak gain coth(pi zeta/(2 sqrt(1 - zeta^2)))."""
    for zeta in (0.1, 0.5):
        A = np.array([[0.0, 1.0], [-1.0, -2 * zeta]])
        ((low, high),) = check.peak_gain(flow_of(A), [Fraction(0), Fraction(1)], [[Fraction(1), Fraction(0)]])
        known = 1 / np.tanh(np.pi * zeta / (2 * np.sqrt(1 - zeta**2)))
        assert float(low) <= known * (1 + 1e-12) and float(high) >= known * (1 - 1e-12)
        assert float(high - low) < 1e-8


def test_unseen_response_is_exactly_zero():
    A = np.array([[-1.0, 0.0], [1.0, -2.0]])
    assert check.peak_gain(flow_of(A), [Fraction(0), Fraction(1)], [[Fraction(1), Fraction(0)]]) == [(0, 0)]
    assert check.free_response(flow_of(A.T), [Fraction(0), Fraction(0)]) == 0


@given(st.lists(st.integers(-1000, 1000), min_size=4, max_size=4), st.integers(0, 5))
@settings(max_examples=60, deadline=None)
def test_integral_of_a_modulus_is_enclosed(coefficients, error):
    """Law: bounds enclose every integral of |p + e| with |e| <= error, hardly wider than the error makes them."""
    scale = 1 << 60
    c = [v * scale for v in coefficients]
    low, high = check.absolute_integral(c, error * scale, scale >> 20)
    tau = (np.arange(20000) + 0.5) / 20000
    modulus = np.abs(np.polyval(coefficients[::-1], tau))
    truth, least = float(modulus.mean()), float(np.maximum(modulus - error, 0).mean())
    assert truth - error - 1e-2 <= low / scale <= least + 1e-2
    assert truth + error - 1e-2 <= high / scale <= truth + error + 1e-2


@given(st.fractions(min_value=0, max_value=50, max_denominator=10**6))
@settings(max_examples=60, deadline=None)
def test_roots_and_exponentials_are_on_the_safe_side(x):
    assert check.root(x, up=False) ** 2 <= x <= check.root(x) ** 2
    assert check.rounded(x, up=False) <= x <= check.rounded(x, up=True)
    above = float(check.exp_above(x))
    assert np.exp(float(x)) * (1 - 1e-13) <= above <= np.exp(float(x)) * (1 + 1e-12)


@given(st.lists(st.integers(-6, 6), min_size=9, max_size=9))
@settings(max_examples=80, deadline=None)
def test_definite_agrees_with_eigenvalues(entries):
    B = np.array(entries).reshape(3, 3)
    X = B + B.T + 3 * np.eye(3, dtype=int)
    smallest = np.linalg.eigvalsh(X).min()
    if abs(smallest) > 1e-9:
        assert check.definite([[Fraction(int(v)) for v in row] for row in X]) == (smallest > 0)


def test_solve_is_exact_and_refuses_singular_systems():
    X = [[Fraction(0), Fraction(2)], [Fraction(1, 3), Fraction(1)]]
    assert check.mul(X, check.solve(X, [[Fraction(1)], [Fraction(5)]]), 1) == [[1], [5]]
    with pytest.raises(check.Rejected, match="singular"):
        check.solve([[Fraction(1), Fraction(2)], [Fraction(2), Fraction(4)]], [[Fraction(1)], [Fraction(1)]])


@pytest.mark.parametrize("text", ["nan", "inf", "1e9999", "0x1", "1/0", "", "1.", "--1", " 1", "1_000", "١"])
def test_odd_numbers_are_refused(text):
    with pytest.raises(check.Rejected):
        check.number(text, "n")
    assert check.number("-1/4", "n") == check.number("-0.25", "n") == check.number("-25e-2", "n")

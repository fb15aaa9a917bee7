"""Peak gains: independent quadrature inside the enclosure, laws, hard kernels, refusals."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError, UnstableLoop, WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain import peak_to_peak_gain


def literal(A, D, H, points=100_001):
    """integral |H e^{At} D| by the trapezium rule on modal sums: slow, independent of the walk, good to about 1e-7."""
    values, vectors = np.linalg.eig(np.asarray(A, dtype=float))
    weights = (np.asarray(H) @ vectors).ravel() * np.linalg.solve(vectors, np.asarray(D, dtype=float)).ravel()
    # Steps that grow like sinh, so that fast and slow modes are both resolved.
    slow, fast = min(-values.real), max(abs(values))
    u = np.linspace(0, 1, points)
    t = np.sinh(u * np.arcsinh(40 / slow * fast)) / fast
    h = np.real(np.exp(np.outer(t, values)) @ weights)
    return float(np.trapezoid(np.abs(h), t))


def contains(found, value, slack):
    return np.all(found.lower <= value * (1 + slack)) and np.all(value <= found.upper * (1 + slack))


def hurwitz(seed, n, spread=1.0):
    """A random Hurwitz matrix with damping that is neither negligible nor overwhelming, and one inlet and outlet."""
    rng = np.random.default_rng(seed)
    A = rng.normal(size=(n, n)) * 10 ** rng.uniform(-2, 2)
    A = np.diag(10 ** rng.uniform(-spread, spread, n)) @ A
    values = np.linalg.eigvals(A)
    A = A - (max(values.real) + rng.uniform(0.05, 1) * max(abs(values))) * np.eye(n)
    return A, rng.normal(size=(n, 1)), rng.normal(size=(1, n))


@pytest.mark.parametrize("seed", range(40))
def test_contains_an_independent_quadrature(seed):
    A, D, H = hurwitz(seed, 1 + seed % 5)
    for width in (1e-3, 1e-9):
        found = peak_to_peak_gain(A, D, H, width=width)
        assert found.width <= width
        assert found.lower[0, 0] <= found.upper[0, 0]
        assert contains(found, literal(A, D, H), 2e-6)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 4), st.sampled_from([0.5, 3.0, 1e-3, 100.0]))
def test_time_scaling(seed, n, c):
    """p(cA, cD, H) = p(A, D, H): the size of the time unit does not count (factors exact up to the rounding of c A)."""
    A, D, H = hurwitz(seed, n, 0.5)
    c = Fraction(c)
    exact = [ExactMatrix.of(M) for M in (A, D, H)]
    one = peak_to_peak_gain(*exact, width=1e-9)
    other = peak_to_peak_gain(exact[0].scaled(c), exact[1].scaled(c), exact[2], width=1e-9)
    assert max(one.lower[0, 0], other.lower[0, 0]) <= min(one.upper[0, 0], other.upper[0, 0])


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 4))
def test_transposition(seed, n):
    """p(A', H', D') is the transpose of p(A, D, H)."""
    A, D, H = hurwitz(seed, n, 0.5)
    one, other = peak_to_peak_gain(A, D, H, width=1e-9), peak_to_peak_gain(A.T, H.T, D.T, width=1e-9)
    assert max(one.lower[0, 0], other.lower[0, 0]) <= min(one.upper[0, 0], other.upper[0, 0])


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10**6), st.integers(2, 4), st.floats(0.01, 8))
def test_scaling_and_change_of_coordinates(seed, n, size):
    """p(A, cD, H) = |c| p(A, D, H), and rescaled states (exact rationals, 16 decades apart) change nothing."""
    A, D, H = (ExactMatrix.of(M) for M in hurwitz(seed, n, 0.5))
    c = Fraction(-size)
    t = [Fraction(10) ** (k * 8 - 8) * 3 for k in range(n)]
    A2 = ExactMatrix.of([[A[i, j] * t[j] / t[i] for j in range(n)] for i in range(n)])
    D2 = ExactMatrix.of([[D[i, 0] / t[i] * c] for i in range(n)])
    H2 = ExactMatrix.of([[H[0, i] * t[i] for i in range(n)]])
    one, other = peak_to_peak_gain(A, D, H, width=1e-9), peak_to_peak_gain(A2, D2, H2, width=1e-9)
    factor = abs(float(c))
    assert other.lower[0, 0] <= factor * one.upper[0, 0] * (1 + 1e-15)
    assert other.upper[0, 0] >= factor * one.lower[0, 0] * (1 - 1e-15)


def test_several_outlets_and_inlets_are_the_single_ones():
    rng = np.random.default_rng(3)
    A = rng.normal(size=(4, 4)) - 3 * np.eye(4)
    D, H, F = rng.normal(size=(4, 3)), rng.normal(size=(2, 4)), rng.normal(size=(2, 3))
    found = peak_to_peak_gain(A, D, H, F, width=1e-8)
    for k in range(2):
        for q in range(3):
            single = peak_to_peak_gain(A, D[:, [q]], H[[k]], width=1e-8)
            low, high = single.lower[0, 0] + abs(F[k, q]), single.upper[0, 0] + abs(F[k, q])
            assert found.lower[k, q] <= high * (1 + 1e-15)
            assert low <= found.upper[k, q] * (1 + 1e-15)


TRIPLE = [[-1, 1, 0], [0, -1, 1], [0, 0, -1]]  # e^{At} holds e^-t, t e^-t, t^2/2 e^-t


@pytest.mark.parametrize(
    ("A", "D", "H", "value"),
    [
        # h = (1 - t)^2 e^-t touches zero without a sign change: integral 1.
        (TRIPLE, [[1], [-2], [2]], [[1, 0, 0]], 1.0),
        # h = (1 - t) e^-t: one root, 2/e.
        (TRIPLE, [[1], [-1], [0]], [[1, 0, 0]], 2 / math.e),
        # h = t^2/2 e^-t starts at a double zero.
        (TRIPLE, [[0], [0], [1]], [[1, 0, 0]], 1.0),
        # h = e^-t - e^{-1.0000001 t}: nearly nothing left of two large parts.
        ([[-1, 0], [0, Fraction("-1.0000001")]], [[1], [-1]], [[1, 1]], 1 - 1 / 1.0000001),
        # Stiff: modes six decades apart, three lobes of certain sign.
        ([["-1000000", 0, 0], [0, -1, 0], [0, 0, "-0.001"]], [[1], [1], [1]], [[1, 1, 1]], 1001.000001),
        # Defective: six equal modes, h = t^5/5! 10^5 e^-t.
        (np.diag([-1.0] * 6) + np.diag([10.0] * 5, 1), np.eye(6)[:, 5:], np.eye(6)[:1], 1e5),
        # Badly scaled units: the oscillator z = .1 with states nine decades apart.
        ([[0, "1000000000"], ["-0.000000001", "-0.2"]], [[0], ["0.000000001"]], [[1, 0]], 6.386823184357733),
        # Rationals that no double holds: 2/3 of exp(-t/3).
        ([["-1/3"]], [["2/3"]], [[1]], 2.0),
    ],
)
def test_hard_kernels_with_closed_forms(A, D, H, value):
    found = peak_to_peak_gain(A, D, H, width=1e-9)
    assert found.width <= 1e-9
    assert contains(found, value, 1e-9 if value < 1e-6 else 1e-15)


def test_a_vanishing_kernel_gives_exactly_the_feedthrough():
    """H A^k D = 0 for all k although neither H nor D is zero."""
    for F in (0, -0.75):
        found = peak_to_peak_gain([[-1, 0], [0, -2]], [[1], [0]], [[0, 1]], F)
        assert (found.lower[0, 0], found.upper[0, 0], found.width) == (abs(F), abs(F), 0.0)
    third = peak_to_peak_gain([[-1, 0], [0, -2]], [[1], [0]], [[0, 1]], Fraction(1, 3))
    assert Fraction(third.lower[0, 0]) < Fraction(1, 3) < Fraction(third.upper[0, 0])


def test_empty_sides():
    assert peak_to_peak_gain(np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), [[-2]]).upper.tolist() == [[2.0]]
    assert peak_to_peak_gain([[-1]], np.zeros((1, 0)), [[1]]).upper.shape == (1, 0)
    assert peak_to_peak_gain([[-1]], [[1]], np.zeros((0, 1))).upper.shape == (0, 1)


@pytest.mark.parametrize(
    ("A", "words"),
    [
        ([[0, 1], [1, 0]], "rightmost mode is 1 1/s"),
        ([[0, 1], [-1, 0]], r"0 \+- 1i"),
        ([[-1, 0], [0, 0]], "is 0 1/s"),
        # A double root at zero moved by less than doubles see: decided exactly.
        ([[0, 1], [0, 0]], "not Hurwitz"),
    ],
)
def test_loops_that_are_not_hurwitz_are_refused(A, words):
    with pytest.raises(UnstableLoop, match=words):
        peak_to_peak_gain(A, [[1], [0]], [[0, 1]])


def test_hurwitz_is_decided_exactly():
    """s^3 + 3 s^2 + 3 s + 9 has roots on the axis; 1e-30 more or less in the last coefficient decides."""
    from synth.gain.lyapunov import find_decay, is_hurwitz, rationals

    for change, stable in (("0", False), ("1e-30", False), ("-1e-30", True)):
        last = -(Fraction(9) + Fraction(change))
        A = ExactMatrix.of([[0, 1, 0], [0, 0, 1], [last, -3, -3]])
        assert is_hurwitz(rationals(A)) is stable
        if stable:
            assert find_decay(A).a > 0
        else:
            with pytest.raises(UnstableLoop):
                peak_to_peak_gain(A, [[0], [0], [1]], [[1, 0, 0]], width=1e-3)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 6))
def test_hurwitz_agrees_with_eigenvalues(seed, n):
    from synth.gain.lyapunov import is_hurwitz, rationals

    A = np.random.default_rng(seed).normal(size=(n, n)) - 0.7 * np.sqrt(n) * np.eye(n)
    assert is_hurwitz(rationals(ExactMatrix.of(A))) is bool(max(np.linalg.eigvals(A).real) < 0)


def test_a_loop_that_hardly_decays_is_given_up_and_said():
    with pytest.raises(WidthNotReached, match="decays too slowly"):
        peak_to_peak_gain([[0, 1], [-1, "-1e-8"]], [[0], [1]], [[1, 0]])


GOOD = {"A": [[-1, 0], [0, -2]], "D": [[1], [1]], "H": [[1, 1]], "F": 0, "width": 1e-6}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"A": [[-1, 0, 0], [0, -2, 0]]}, "square"),
        ({"A": [[-1, float("nan")], [0, -2]]}, "finite"),
        ({"A": [[-1, 0], [0]]}, "equal length"),
        ({"A": 3}, "matrix"),
        ({"D": [[1]]}, "D has shape"),
        ({"D": np.ones(2)}, "two dimensions"),
        ({"D": [[1], [float("inf")]]}, "finite"),
        ({"H": [[1]]}, "H has shape"),
        ({"H": [["x", 1]]}, "finite numbers"),
        ({"F": [[1, 2]]}, "F has shape"),
        ({"F": float("nan")}, "finite"),
        ({"width": 0}, "width"),
        ({"width": 1}, "width"),
        ({"width": float("nan")}, "width"),
        ({"width": "narrow"}, "width"),
    ],
)
def test_each_wrong_argument_is_refused(change, words):
    peak_to_peak_gain(**GOOD)  # the unchanged case is accepted
    with pytest.raises(InputError, match=words):
        peak_to_peak_gain(**{**GOOD, **change})


def test_results_cannot_be_changed():
    found = peak_to_peak_gain(**GOOD)
    with pytest.raises(ValueError, match="read-only"):
        found.lower[0, 0] = 0.0


def test_working_precision_of_the_caller_is_left_alone():
    from flint import ctx

    before = ctx.prec
    peak_to_peak_gain(**GOOD)
    with pytest.raises(UnstableLoop):
        peak_to_peak_gain(**{**GOOD, "A": [[1, 0], [0, -2]]})
    assert ctx.prec == before


def test_the_lyapunov_norm_bounds_the_trajectory():
    """|e^{At} x|_P <= e^{-at} |x|_P, sampled with an independent exponential."""
    from synth.gain.lyapunov import find_decay

    for seed in range(10):
        A, x, _ = hurwitz(seed, 4)
        decay = find_decay(ExactMatrix.of(A))
        P = np.array([[float(Fraction(int(v.p), int(v.q))) for v in row] for row in decay.P.table()])
        a = float(Fraction(int(decay.a.p), int(decay.a.q)))
        assert a > 0
        start = math.sqrt(x[:, 0] @ P @ x[:, 0])
        for t in np.linspace(0, 5 / a, 7)[1:]:
            y = scipy.linalg.expm(A * t) @ x[:, 0]
            assert math.sqrt(max(y @ P @ y, 0)) <= math.exp(-a * t) * start * (1 + 1e-9)

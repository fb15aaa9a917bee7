"""Peak gains against published formulas and numbers; where each comes from stands beside the check."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize

from synth.gain import GainOperator, peak_to_peak_gain


def companion(numerator, denominator):
    """(A, D, H) of num(s)/den(s), coefficients from the highest power down, exact rationals."""
    den = [Fraction(c) for c in denominator]
    n = len(den) - 1
    num = [Fraction(0)] * (n - len(numerator)) + [Fraction(c) for c in numerator]
    A = [[Fraction(int(j == i + 1)) for j in range(n)] for i in range(n - 1)]
    A.append([-c / den[0] for c in den[:0:-1]])
    return A, [[0]] * (n - 1) + [[1]], [[c / den[0] for c in reversed(num)]]


def single(*system, width=1e-9):
    found = peak_to_peak_gain(*system, width=width)
    assert found.width <= width
    return found.lower[0, 0], found.upper[0, 0]


def encloses(ends, value, slack=2e-15):
    return ends[0] <= value * (1 + slack) and value * (1 - slack) <= ends[1]


def follower(h, tau, lam):
    """Vehicle with a constant time gap: (s + lam)/(h tau s^3 + h s^2 + (1 + lam h) s + lam)."""
    h, tau, lam = Fraction(h), Fraction(tau), Fraction(lam)
    return companion([1, lam], [h * tau, h, 1 + lam * h, lam])


@pytest.mark.parametrize(("lam", "digits"), [("0.1", 1.12116), ("0.4", 1.19563), ("1", 1.27887)])
def test_a3_time_gap_twice_the_lag(lam, digits):
    """Derived (no published source): L1 norm of the law of Swaroop & Rajagopal 1999-2001 at h = 2 tau, tau = .5."""
    low, high = single(*follower("1", "0.5", lam))
    assert round(low, 5) == round(high, 5) == digits


def test_a3_slow_law():
    """Derived: lam -> 0 gives coth(pi/2) = 1.0903314 at h = 2 tau, and 1 from h = 4 tau on but not before."""
    limit = 1 / math.tanh(math.pi / 2)
    assert limit == pytest.approx(1.0903314, abs=5e-8)
    ends = [single(*follower("1", "0.5", lam), width=1e-6) for lam in ("0.01", "0.001", "0.0001")]
    gaps = [low - limit for low, _ in ends]
    assert gaps[0] > gaps[1] > gaps[2] > 0
    assert gaps[2] < 2e-3

    def without_lam(h):
        """lam = 0 cancelled: 1/(h tau s^2 + h s + 1)."""
        return single(*companion([1], [Fraction(h) * Fraction(1, 2), h, 1]))

    assert encloses(without_lam(1), limit)
    for h in (2, 3):
        assert encloses(without_lam(h), 1.0)
    assert without_lam("1.8")[0] > 1


@pytest.mark.parametrize(
    ("lam_tau", "ratio"),
    [(".005", 3.818), (".05", 3.641), (".2", 3.4906), (".5", 3.3863), ("1", 3.3119), ("1.5", 3.2718)],
)
def test_a3_least_time_gap_for_peaks(lam_tau, ratio):
    """Derived: least h/tau with a one-signed impulse response, where the L1 norm reaches |T(0)| = 1."""
    tau = Fraction(1)
    above = single(*follower(Fraction(str(ratio)) + Fraction(1, 500), tau, lam_tau))
    below = single(*follower(Fraction(str(ratio)) - Fraction(1, 4), tau, lam_tau))
    assert encloses(above, 1.0)
    assert below[0] > 1


SECOND_ORDER = {
    ".05": 12.742671918,
    ".1": 6.386823184,
    ".2": 3.224940919,
    ".3": 2.186367978,
    ".5": 1.389582000,
    ".7": 1.096409492,
    ".9": 1.003052162,
}


@pytest.mark.parametrize("z", SECOND_ORDER)
@pytest.mark.parametrize("wn", [1, 40])
def test_b2_second_order(z, wn):
    """Derived: wn^2/(s^2 + 2 z wn s + wn^2) has the L1 norm coth(pi z/(2 sqrt(1 - z^2)))."""
    zeta = float(Fraction(z))
    value = 1 / math.tanh(math.pi * zeta / (2 * math.sqrt(1 - zeta * zeta)))
    assert value == pytest.approx(SECOND_ORDER[z], abs=6e-10)
    assert encloses(single(*companion([wn**2], [1, 2 * Fraction(z) * wn, wn**2])), value)


@pytest.mark.parametrize("z", ["1", "1.5", "4"])
def test_b2_no_overshoot(z):
    """Derived: the L1 norm is 1 for z >= 1."""
    assert encloses(single(*companion([1], [1, 2 * Fraction(z), 1])), 1.0)


def test_b2_ratio_to_the_resonance():
    """Derived: L1/Hinf -> 4/pi as z -> 0, with Hinf = 1/(2 z sqrt(1 - z^2))."""
    ratios = [single(*companion([1], [1, 2 * Fraction(z), 1]))[0] * 2 * float(z) for z in ("0.1", "0.02")]
    assert abs(ratios[1] - 4 / math.pi) < abs(ratios[0] - 4 / math.pi) < 0.01
    assert ratios[1] == pytest.approx(4 / math.pi, rel=1e-3)


@pytest.mark.parametrize(("z", "digits"), [(".1", 6.371876409), (".3", 2.139796046), (".5", 1.305411958)])
def test_b3_differentiating_oscillator(z, digits):
    """Derived: s/(s^2 + 2 z s + 1) has the L1 norm 2 e^{-z phi/wd}/(1 - e^{-pi z/wd})."""
    zeta = float(Fraction(z))
    wd = math.sqrt(1 - zeta * zeta)
    value = 2 * math.exp(-zeta * math.atan2(wd, zeta) / wd) / (1 - math.exp(-math.pi * zeta / wd))
    assert value == pytest.approx(digits, abs=6e-10)
    assert encloses(single(*companion([1, 0], [1, 2 * Fraction(z), 1])), value)


@pytest.mark.parametrize(
    ("n", "digits"), [(1, 3.0), (2, 3.943036), (3, 4.664982), (4, 5.272665), (5, 5.807510), (6, 6.290717)]
)
def test_b4_powers_of_an_all_pass(n, digits):
    """Hinf <= L1 <= (2n+1) Hankel: Boyd & Barratt, Linear Controller Design, 1991, eq. 5.33; Boyd & Doyle, SCL 9(1)
    1987 (formula seen; digits by our own run). ((1-s)/(1+s))^n has all Hankel singular values 1; tight at n = 1."""
    # Stage: x' = -x + in, out = 2 x - in; stages in series, so stage i hears all earlier ones.
    A = [[0] * n for _ in range(n)]
    D = [[(-1) ** i] for i in range(n)]
    H = [[2 * (-1) ** (n - 1 - i) for i in range(n)]]
    for i in range(n):
        A[i][i] = -1
        for j in range(i):
            A[i][j] = 2 * (-1) ** (i - 1 - j)
    low, high = single(A, D, H, (-1) ** n)
    assert round(low, 6) == round(high, 6) == digits
    assert low >= 1
    # At n = 1 the bound is attained, so only the width separates the two.
    assert low <= 2 * n + 1
    for w in (0.0, 0.3, 1.0, 7.0):
        response = np.array(H) @ np.linalg.solve(1j * w * np.eye(n) - np.array(A), np.array(D)) + (-1) ** n
        assert abs(response[0, 0]) == pytest.approx(1.0)


def ellipsoid_bound(A, B, C):
    """min over a of sqrt(C Q C'), A Q + Q A' + a Q + B B'/a = 0 (inlet bounded by one at every instant)."""
    A, B, C = (np.array(M, dtype=float) for M in (A, B, C))
    fastest = -2 * max(np.linalg.eigvals(A).real)

    def size(share):
        a = share * fastest
        Q = scipy.linalg.solve_continuous_lyapunov(A + a / 2 * np.eye(len(A)), -B @ B.T / a)
        return math.sqrt(float((C @ Q @ C.T)[0, 0]))

    return scipy.optimize.minimize_scalar(size, bounds=(1e-3, 0.999), method="bounded", options={"xatol": 1e-10}).fun


@pytest.mark.parametrize(
    ("z", "ratio"), [(".05", 1.1109), (".2", 1.1131), (".5", 1.1255), (".7", 1.1350), (".9", 1.1156)]
)
def test_b7_ellipsoids_are_an_upper_bound(z, ratio):
    """Concept: Abedor, Nagpal, Poolla, Int. J. Robust Nonlinear Control 6, 1996 (seen; the ratios by our own run)."""
    system = companion([1], [1, 2 * Fraction(z), 1])
    low, high = single(*system)
    bound = ellipsoid_bound(*system)
    assert bound >= low
    assert bound / high == pytest.approx(ratio, abs=6e-5)


def test_b7_first_order_is_exact():
    """Same source: for x' = -a x + b w the ellipsoid bound is the peak gain."""
    system = [[-2]], [[3]], [[1]]
    assert ellipsoid_bound(*system) == pytest.approx(single(*system)[1], rel=1e-6)


def test_b9_positive_systems():
    """Topic: Rantzer & Valcher, CDC 2018 (seen): gains of positive systems are static gains; digits by our own run."""
    A, B = [["-1", ".2", 0], [".3", "-1", ".4"], [".1", ".2", "-0.8"]], [[1, 0], [0, 1], [".5", ".2"]]
    C = [[1, 1, 0], [0, 0, 1]]
    found = peak_to_peak_gain(A, B, C, width=1e-10)
    doubles = [np.array([[float(Fraction(v)) for v in row] for row in M]) for M in (A, B, C)]
    static = -doubles[2] @ np.linalg.solve(doubles[0], doubles[1])
    assert np.all(found.lower <= static * (1 + 1e-14))
    assert np.all(static * (1 - 1e-14) <= found.upper)
    assert found.upper.sum(axis=1).max() == pytest.approx(3.4578313253, abs=1e-9)
    assert found.upper.sum(axis=0).max() == pytest.approx(2.8162650602, abs=1e-9)
    assert np.linalg.norm(found.upper, 2) == pytest.approx(2.6975006800, abs=1e-9)


def test_b8_scaling_by_the_perron_vector():
    """From memory: Khammash & Pearson, IEEE TAC 36(4), 1991; Dahleh & Diaz-Bobillo, 1995."""
    matrix = np.array([[0.2, 0.5, 0.0], [0.3, 0.1, 0.4], [0.6, 0.0, 0.2]])
    to, source = np.nonzero(matrix)
    op = GainOperator.from_links(3, to, source, matrix[to, source])
    radius = op.radius(1e-12)
    assert radius.reached
    assert radius.lower <= 0.75668192221 + 5e-12
    assert radius.upper >= 0.75668192221 - 5e-12
    rows = (matrix * radius.point / radius.point[:, None]).sum(axis=1)
    assert rows == pytest.approx([0.75668192221] * 3, abs=1e-10)

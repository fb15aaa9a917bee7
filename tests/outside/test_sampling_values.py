"""Sampling and number formats against published values; where each comes from stands beside the check."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import UnstableLoop
from synth.base.exact import ExactMatrix
from synth.gain.sampled.numbers import FixedPoint, gains_as_flashed, row_error, unit_roundoff
from synth.gain.sampled.peaks import sampled_peak_gain, sampled_peaks, sampled_unit
from synth.gain.sampled.period import cycle_radius, longest_period
from synth.network.gains import Gains, GainSet
from tests.build import M, scalar_kind

F5 = ([[0, 1], [0, "-0.1"]], [[0], ["0.1"]], [["-3.75", "-11.5"]])


def test_f5_sampling_limit_of_a_networked_loop():
    """Plant and gains as used throughout the literature on networked control (Zhang, Branicky, Phillips, IEEE Control
    Systems Magazine 21(1) 2001); the digits of the limit are from memory and reproduced here."""
    found = longest_period(*F5)
    assert found.lower <= 1.7294142795 + 5e-11
    assert found.upper >= 1.7294142795 - 5e-11
    assert found.upper - found.lower < 1e-11
    # The guaranteed gains agree about the side: finite just below, refused just above.
    below, above = ("1.72", "1.7295")
    assert math.isfinite(sampled_peak_gain(*F5, [[0], [1]], [[1, 0]], below, width=1e-2).upper[0, 0])
    with pytest.raises(UnstableLoop):
        sampled_peak_gain(*F5, [[0], [1]], [[1, 0]], above, width=1e-2)


def test_f6_two_stable_periods_in_turn():
    """Phenomenon as in Wittenmark, Nilsson, Torngren (American Control Conference 1995); matrices from memory."""
    loop = ([[1, 3], [2, 1]], [[1], ["0.6"]], [[-1, -6]])
    assert cycle_radius(*loop, ["0.18"]) == pytest.approx(0.776053, abs=5e-7)
    assert cycle_radius(*loop, ["0.54"]) == pytest.approx(0.708291, abs=5e-7)
    alternating = cycle_radius(*loop, ["0.18", "0.54"])
    assert alternating == pytest.approx(1.004947, abs=5e-7)
    assert alternating > 1


@pytest.mark.parametrize(("k1", "k2"), [(1.0, 1.0), (1.0, 3.0), (4.0, 2.0), (9.0, 3.5)])
def test_f8_double_integrator(k1, k2):
    """Derived: x'' = u held, u = -k1 x - k2 v is stable exactly for T < min(2/k2, 2 k2/k1)."""
    found = longest_period([[0, 1], [0, 0]], [[0], [1]], [[-k1, -k2]], longest=5.0)
    assert found.lower <= min(2 / k2, 2 * k2 / k1) * (1 + 1e-9)
    assert found.upper >= min(2 / k2, 2 * k2 / k1) * (1 - 1e-9)
    assert found.upper - found.lower < 1e-9


@pytest.mark.parametrize(("a", "k"), [(1.0, 2.0), (0.5, 3.0), (2.0, 2.5)])
def test_f8_one_unstable_state(a, k):
    """Derived: x' = a x + u, u = -k x held is stable exactly for T < ln((k + a)/(k - a))/a."""
    found = longest_period([[a]], [[1]], [[-k]])
    exact = math.log((k + a) / (k - a)) / a
    assert found.lower <= exact * (1 + 1e-12) and found.upper >= exact * (1 - 1e-12)
    assert found.upper - found.lower < 1e-11


def test_g1_q15():
    """Two's complement fractions of 16 bits, as in textbooks on digital signal processing (Oppenheim & Schafer)."""
    q15 = FixedPoint(16, 15)
    assert (q15.step, q15.lowest, q15.highest) == (Fraction(1, 2**15), Fraction(-1), 1 - Fraction(1, 2**15))
    assert q15.round(q15.lowest * q15.lowest) == q15.highest  # (-1)(-1) must saturate
    rng = np.random.default_rng(4)
    values = [Fraction(float(v)) for v in rng.uniform(-0.999, 0.999, 4000)]
    errors = np.array([float(q15.round(v) - v) for v in values])
    assert np.abs(errors).max() <= 2.0**-16
    assert errors.var() == pytest.approx(2.0**-30 / 12, rel=0.1)
    K = ExactMatrix.of([[float(v) for v in rng.uniform(-1, 0.99, 6)] for _ in range(5)])
    one = GainSet("tank", ("a",) * 5, ("s",) * 6, K)
    flashed = gains_as_flashed(Gains((one,)), q15)["tank"].K
    change = [sum(abs(a - b) for a, b in zip(*rows, strict=True)) for rows in zip(K.rows, flashed.rows, strict=True)]
    assert 0 < max(change) <= 6 * Fraction(1, 2**16)


def test_g2_limit_cycle_of_rounding():
    """y[n] = Q(a y[n-1]) + x[n], a = -1/2, 3 bits behind the point, x = 7/8 at n = 0, half away from zero: 7/8, -1/2,
    1/4, -1/8, 1/8, -1/8 ... (Ingle & Proakis, Digital Signal Processing Using MATLAB, Ex. 10.5)."""
    numbers = FixedPoint(4, 3)
    y = [Fraction(7, 8)]
    for _ in range(7):
        y.append(numbers.round(-y[-1] / 2))
    assert y == [Fraction(v) for v in ("7/8", "-1/2", "1/4", "-1/8", "1/8", "-1/8", "1/8", "-1/8")]
    assert float(np.round(-0.5 * 0.125 * 8)) == 0.0  # half to even would let it die out
    # The register as a state that the firmware keeps: x += T (-1.5/T) x. The proven ball is attained by the cycle.
    kind = replace(scalar_kind("1.5"), E=M([[0]]))
    unit = sampled_unit(kind, (), M([[0]]), 1, stored=("x",))
    ball = sampled_peaks(unit).gains["states"]["stored"].upper[0, 0] * float(numbers.step) / 2
    assert ball == pytest.approx(1 / 8, rel=1e-6)


def test_g5_floating_point():
    """IEEE 754-2019: u = 2^-53 and 2^-24; the first whole numbers that one cannot be added to."""
    assert unit_roundoff("double") == Fraction(1, 2**53)
    assert unit_roundoff("single") == Fraction(1, 2**24)
    assert 2.0**53 + 1 == 2.0**53
    assert np.float32(2**24) + np.float32(1) == np.float32(2**24)
    # The bound for sums of products covers what single precision does, and is not idle.
    rng = np.random.default_rng(5)
    worst = 0.0
    for _ in range(300):
        K, y = (rng.normal(size=6).astype(np.float32) for _ in range(2))
        total = np.float32(0)
        for a, b in zip(K, y, strict=True):
            total = np.float32(total + np.float32(a * b))
        exact = sum((Fraction(float(a)) * Fraction(float(b)) for a, b in zip(K, y, strict=True)), Fraction(0))
        relative, absolute = row_error(6)
        size = sum((abs(Fraction(float(a)) * Fraction(float(b))) for a, b in zip(K, y, strict=True)), Fraction(0))
        worst = max(worst, float(abs(Fraction(float(total)) - exact) / (relative * size + absolute)))
    assert 0.1 < worst <= 1

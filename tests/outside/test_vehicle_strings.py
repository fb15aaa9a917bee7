"""Vehicle strings against published limits and numbers; where each comes from stands beside the check."""

from __future__ import annotations

import math
from fractions import Fraction

import pytest

from synth.gain import QuasiPolynomial, hop_gains, hop_growth, mean_square_gain, peak_to_peak_gain
from synth.gain.strings.dead_time import loop_of_transfer
from synth.gain.strings.mean_square_loop import fraction_mean_square, level_holds
from synth.margin.gap import TimeGapPolicy, smallest_gap
from tests.gain.strings import classic

Q, F = QuasiPolynomial.of, Fraction


def relative(found, value, most):
    """Whether the bracket of a smallest gap lies within ``most`` (relative) of the value from outside."""
    assert found.proven is not None and found.breaks is not None
    return max(abs(float(found.proven) / value - 1), abs(float(found.breaks) / value - 1)) <= most


@pytest.mark.parametrize("lag", ["0.1", "0.3", "0.5", "0.7"])
@pytest.mark.parametrize("lam", ["0.05", "0.4", "1.5"])
def test_mean_square_gap_is_twice_the_lag(lag, lam):
    """Seen and derived: Swaroop & Rajagopal 1999-2001; Rajamani, Vehicle Dynamics and Control, chapter on ACC."""
    found = smallest_gap(TimeGapPolicy(lag, lam), "mean square", width=2e-3)
    assert relative(found, 2 * float(lag), 0.005)


@pytest.mark.parametrize(
    ("share", "digits"), [("1", 1.31985), ("1.5", 1.11242), ("1.9", 1.01769), ("1.99", 1.00168), ("2", 1.0)]
)
def test_mean_square_gains_below_that_gap(share, digits):
    """Derived from the same law; lag .5 s, lambda .4 1/s."""
    loop = TimeGapPolicy("0.5", "0.4").loop(F(share) / 2)
    found = mean_square_gain(loop.now, loop.D[F(0)], loop.H["hop"])
    assert round(found.lower, 5) == round(found.upper, 5) == digits


@pytest.mark.parametrize(
    ("lag", "dead", "lam", "value"),
    [
        ("0.3", "0.1", "0.05", 0.805),
        ("0.3", "0.1", "0.2", 0.817),
        ("0.3", "0.1", "0.5", 0.845),
        ("0.5", "0.2", "0.05", 1.415),
        ("0.5", "0.2", "0.2", 1.459),
        ("0.5", "0.2", "0.5", 1.554),
    ],
)
def test_mean_square_gap_with_lag_and_dead_time(lag, dead, lam, value):
    """Seen: h > 2 (lag + delay), an infimum as lambda -> 0 (Xiao, Darbha, Gao, IEEE ITSC 2008).

    The values are from a grid; a finer one gives .84147 where .845 stands.
    """
    found = smallest_gap(TimeGapPolicy(lag, lam, dead_time=dead), "mean square", width=5e-4)
    assert relative(found, value, 0.005)
    assert found.breaks > 2 * (F(lag) + F(dead))


@pytest.mark.parametrize(
    ("product", "value"),
    [
        ("0.00005", 3.943),
        ("0.005", 3.818),
        ("0.05", 3.641),
        ("0.2", 3.4906),
        ("0.5", 3.3863),
        ("1", 3.3119),
        ("1.5", 3.2718),
    ],
)
def test_peak_gap_over_the_lag(product, value):
    """Derived (no published source): least h/lag whose impulse response has one sign, by lambda times lag."""
    assert relative(smallest_gap(TimeGapPolicy(1, product), "peak", width=2e-3), value, 0.005)


@pytest.mark.parametrize(("lam", "digits"), [("0.1", 1.12116), ("0.4", 1.19563), ("1", 1.27887)])
def test_twice_the_lag_is_mean_square_only(lam, digits):
    """Derived: peak hop gains at h = 2 lag, lag .5 s. A mean-square result is not a peak result."""
    found = hop_gains(*classic("0.5", 1, lam), gap_error="spacing")
    assert round(found.peak.lower, 5) == round(found.peak.upper, 5) == digits
    assert found.claim == "mean square"


def test_peaks_and_pushes_far_down_the_string():
    """Derived, reproduced by our own run: |T^100|_1 = 2.07 at h = 2 lag; pushes 39.6 and 56.2 at h = 1.9, lag .5."""
    loud = hop_growth(hop_gains(*classic("0.5", 1, "0.4"), gap_error="spacing"), 100)
    assert loud.at(100)[0] == pytest.approx(2.07, rel=0.01)
    calm = hop_gains(*classic("0.5", "1.9", "0.4"), gap_error="spacing")
    growth = hop_growth(calm, 200)
    assert growth.at(100)[2] == pytest.approx(39.6, rel=0.01)
    assert growth.at(200)[2] == pytest.approx(56.2, rel=0.01)
    assert growth.error < 0.01
    assert calm.gap_error() == pytest.approx(0.9530, rel=1e-4)


def test_constant_distance_amplifies_for_every_gain():
    """Seen, numbers from memory: Seiler, Pant, Hedrick, IEEE TAC 49(10) 2004; 1.2103 at .926 rad/s.

    Plant 1/(s^2 (0.1 s + 1)), controller (2 s + 1)/(0.05 s + 1).
    """
    loop = loop_of_transfer(Q({0: [1, 2]}), Q({0: [1, 2, 1, "0.15", "0.005"]}))
    found = mean_square_gain(loop.now, loop.D[F(0)], loop.H["hop"])
    assert found.lower == pytest.approx(1.2103, abs=5e-5)
    assert found.frequency == pytest.approx(0.926, abs=5e-4)
    refused = smallest_gap(lambda h: (Q({0: [1, 2]}), Q({0: [1, 2, 1, "0.15", "0.005"]})), "mean square", width=0.1)
    assert refused.proven is None
    assert refused.constant_distance


@pytest.mark.parametrize(
    ("z", "digits"), [("0.5", 1.467890), ("1", 2 / math.sqrt(3)), ("2", 1.047096), ("5", 1.008797)]
)
def test_proportional_and_speed_feedback_on_a_double_integrator(z, digits):
    """Derived: T = (2 z s + 1)/(s^2 + 2 z s + 1) is above 1 for every z."""
    num, den = Q({0: [1, 2 * F(z)]}), Q({0: [1, 2 * F(z), 1]})
    found = fraction_mean_square(num, den)
    assert found.lower == pytest.approx(digits, abs=1e-6)
    assert level_holds(num, den, F(1)) is not True


def cooperative(radio, actuator, heard=True):
    """K = .2 + .7 s, G = e^{-actuator s}/(s^2 (.1 s + 1)), spacing H = 1 + h s, radio delay: speed to speed."""

    def build(h):
        plant, law = Q({0: [0, 0, 1, "0.1"]}), Q({actuator: ["0.2", "0.7"]})
        num = law + plant * Q({radio: [1]}) if heard else law
        return num, Q({0: [1, h]}) * (plant + law)

    return build


@pytest.mark.parametrize(
    ("radio", "actuator", "value"),
    [
        ("0.02", 0, 0.24318),
        ("0.15", 0, 0.67250),
        ("0.20", 0, 0.77928),
        ("0.02", "0.2", 0.25217),
        ("0.15", "0.2", 0.69908),
        ("0.20", "0.2", 0.81082),
    ],
)
def test_cooperative_gap_with_radio_delay(radio, actuator, value):
    """From memory, paper seen: Ploeg, van de Wouw, Nijmeijer, IEEE TCST 22(2) 2014."""
    found = smallest_gap(cooperative(F(radio), F(actuator)), "mean square", low="0.05", high=10, width=2e-3)
    assert relative(found, value, 0.01)


def test_cooperative_gap_without_radio():
    """From memory, same paper: sqrt(2/kp) = 3.16228."""
    found = smallest_gap(cooperative(F(0), F(0), heard=False), "mean square", width=1e-3)
    assert relative(found, math.sqrt(10), 0.01)


@pytest.mark.parametrize(("lag", "weight", "value"), [("0.5", 0, 1.0), ("0.5", "0.5", 0.6667), ("0.3", "0.8", 0.3333)])
def test_predecessor_acceleration_by_radio(lag, weight, value):
    """From memory and derived: infimum 2 lag/(1 + weight) (Darbha, Konduri, Pagilla, IEEE T-ITS 20(5) 2019)."""
    found = smallest_gap(TimeGapPolicy(lag, "0.001", radio_weight=weight), "mean square", width=1e-3)
    assert relative(found, value, 0.01)


@pytest.mark.parametrize("share", ["0", "0.3", "1"])
def test_leader_information(share):
    """From memory; the identity is elementary: eps_i/eps_(i-1) = ((1 - C1) s + wn)/(s + wn), both gains 1.

    Rajamani, Tan, Law, Zhang, IEEE TCST 8(4) 2000; 0 <= C1 <= 1. Written as 1 - C1 s/(s + wn) in states.
    """
    c = F(share)
    system = [[-2]], [[2 * c]], [[1]], 1 - c
    peak, mean = peak_to_peak_gain(*system), mean_square_gain(*system)
    assert peak.lower[0, 0] <= 1 <= peak.upper[0, 0] <= 1 + 1e-6
    assert mean.lower <= 1 <= mean.upper <= 1 + 1e-6

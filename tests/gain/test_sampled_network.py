"""Sizes of a pattern of sampled units: estimate, guarantee and certificate agree; gains as the code stores them."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain.sampled.network import guaranteed_sizes, sampled_estimate, sampled_units, why_not_sampled
from synth.gain.sampled.numbers import stored_gains
from synth.network.gains import Gains, gain_set
from synth.network.rounding import Rounding
from synth.proof import prove_firmware
from tests.build import M
from tests.proof.networks import chain, tanks


def test_estimate_guarantee_and_certificate_agree():
    network, _ = chain(strength="0.3")
    gains = Gains((gain_set(network.kinds[0], M([["-1"]])),))
    rounding = Rounding({"tank.x": "0.05"}, {"tank.push": "0.1"}, {"tank.push": "0.02"})
    goal = replace(network.goal, period=Fraction(1, 2), computation_delay=Fraction(1, 5), rounding=rounding)
    network = replace(network, goal=goal)
    assert why_not_sampled(network) is None
    units = sampled_units(network, gains)
    guide, sure, proven = (
        sampled_estimate(network, units),
        guaranteed_sizes(network, units),
        prove_firmware(network, gains),
    )
    assert proven.proven
    assert guide.radius == pytest.approx(sure.radius, rel=2e-3)
    assert sure.radius == pytest.approx(proven.radius.upper, rel=1e-3)
    for peak in proven.peaks:
        assert sure.peaks["tank", peak.role, peak.signal] == pytest.approx(peak.value, rel=1e-3)
        assert guide.peaks["tank", peak.role, peak.signal] == pytest.approx(peak.value, rel=3e-3)
    quiet = replace(network, goal=replace(goal, rounding=Rounding()))
    assert guaranteed_sizes(quiet, units).peaks["tank", "state", "x"] < sure.peaks["tank", "state", "x"] - 0.02


def test_two_kinds_by_hand_with_numpy():
    """Peaks are (I - M)^-1 of what disturbances do, with the enclosed gains in M: the literal formula in doubles."""
    from synth.gain.sampled.peaks import sampled_peaks

    network, gains = tanks()
    network = replace(network, goal=replace(network.goal, period=Fraction(1, 2)))
    units = sampled_units(network, gains)
    sure = guaranteed_sizes(network, units)
    tank, basin = (sampled_peaks(unit, width=1e-4).gains for unit in units)
    p, q = tank["offers"]["takes"].upper[0, 0], basin["offers"]["takes"].upper[0, 0]
    M_ = np.array([[0.3 * p, 0.5 * p], [0.6 * q, 0.0]])  # the own part of the side link is folded into the tank
    assert sure.radius == pytest.approx(np.abs(np.linalg.eigvals(M_)).max(), rel=1e-3)
    own = np.array([0.2 * tank["offers"]["waves"].upper[0, 0], 0.1 * basin["offers"]["waves"].upper[0, 0]])
    z = np.linalg.solve(np.eye(2) - M_, own)
    found = [sure.peaks["tank", "offer", "level"], sure.peaks["basin", "offer", "out"]]
    assert found == pytest.approx(z.tolist(), rel=2e-3)
    assert all(a >= b * (1 - 1e-9) for a, b in zip(found, z, strict=True))


def test_gains_as_stored():
    network, _ = chain()
    kind = network.kinds[0]

    def gains(value):
        return Gains((gain_set(kind, M([[value]])),))

    third = gains("-1/3")
    assert stored_gains(third, Rounding()) == third
    single = stored_gains(third, Rounding(form="single"))["tank"].K[0, 0]
    assert float(single) == float(np.float32(-1 / 3))
    assert stored_gains(third, Rounding(form="double"))["tank"].K[0, 0] == Fraction(-1 / 3)
    words = Rounding(word=16, fraction=12)
    assert stored_gains(third, words)["tank"].K[0, 0] == Fraction(-1365, 4096)
    for rounding in (Rounding(form="single"), Rounding(form="double"), words):
        once = stored_gains(third, rounding)
        assert stored_gains(once, rounding) == once
    with pytest.raises(InputError, match="do not fit"):
        stored_gains(gains("9"), words)
    with pytest.raises(InputError, match="single precision"):
        stored_gains(gains(Fraction(10) ** 60), Rounding(form="single"))

"""Design for code that samples: kept where it holds, sought in discrete time where it does not (invented networks)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain.sampled.network import sampled_estimate, sampled_units
from synth.gain.sampled.numbers import stored_gains
from synth.local import design
from synth.local.plant import field_of
from synth.local.pull import scaled
from synth.local.sampled_search import Code, SampledMerit
from synth.network.gains import Gains, gain_set
from synth.network.model import Goal
from synth.network.rounding import Rounding
from synth.proof.firmware_limits import prove_as_flashed
from tests.build import M
from tests.proof.networks import chain


def quick_tanks(period: str | None, delay: str = "0", rounding: Rounding | None = None, fastest: str = "8"):
    """Scalar tanks whose continuous design is as fast as allowed: too fast for long periods."""
    network, _ = chain(strength="0.4")
    goal = Goal(Fraction("0.9"), Fraction("0.1"), Fraction(fastest))
    if period is not None:
        goal = replace(
            goal, period=Fraction(period), computation_delay=Fraction(delay), rounding=rounding or Rounding()
        )
    return replace(network, goal=goal)


def test_a_continuous_design_that_holds_is_kept():
    plain, sampled = design(quick_tanks(None)), design(quick_tanks("0.05"))
    assert plain.sampled is None
    assert sampled.gains == plain.gains
    assert sampled.sampled.reached and not sampled.sampled.searched
    assert plain.upper <= sampled.sampled.upper < 1.2 * plain.upper


def test_the_search_finds_what_a_scan_finds():
    """At 0.4 s the continuous gain has a radius above one as sampled; a scan over the one gain must find no better."""
    network = quick_tanks("0.4", "0.1")
    continuous = design(network, sampled=False)
    assert not continuous.reached and continuous.upper < 0.2 and continuous.sampled.upper > 1
    found = design(network)
    assert found.reached and found.sampled.searched and found.sampled.reached
    assert "discrete time" in found.explain() and found.as_json()["sampled"]["in_discrete_time"] is True
    kind, best = network.kinds[0], np.inf
    for k in np.linspace(-7, 0, 141):
        sizes = sampled_estimate(network, sampled_units(network, Gains((gain_set(kind, M([[Fraction(k)]])),))))
        best = min(best, np.inf if sizes is None else sizes.radius)
    assert best * 0.995 <= found.sampled.upper <= best * 1.01
    assert prove_as_flashed(network, found, timing=False).proven


def test_stored_numbers_are_what_is_designed():
    words = Rounding(word=12, fraction=6)
    found = design(quick_tanks("0.05", rounding=words, fastest="7.03"))
    assert stored_gains(found.gains, words) == found.gains
    assert found.reached and found.sampled.reached and not found.sampled.searched
    single = design(quick_tanks("0.05", rounding=Rounding(form="single")))
    value = float(single.gains["tank"].K[0, 0])
    assert value == float(np.float32(value)) and single.reached


def test_nothing_is_promised_where_no_gains_hold():
    """At 2 s the links act for that long unanswered: p is at least 1 - e^-2, so the radius at least 0.69."""
    found = design(quick_tanks("2"), target=0.3)
    assert found.upper < 0.3 and not found.reached and not found.sampled.reached
    assert found.sampled.upper > 0.69
    assert "no gains were found" in found.explain()


def test_slopes_are_those_of_a_finer_stencil():
    network = quick_tanks("0.4", "0.1")
    plants = field_of(network)
    merit = SampledMerit(Code(network, 0.9), plants)
    point = merit.chart.point(scaled(plants, Gains((gain_set(network.kinds[0], M([["-0.6"]])),))))
    value, slope = merit.value(point)
    assert value == merit.height(point)
    h = 1e-3
    for k in range(len(point)):
        e = np.zeros_like(point)
        e[k] = h
        f = [merit.height(point + j * e) for j in (-2, -1, 1, 2)]
        assert slope[k] == pytest.approx((f[0] - 8 * f[1] + 8 * f[2] - f[3]) / (12 * h), rel=1e-3)


def test_asking_for_a_sampled_design_without_a_period():
    with pytest.raises(InputError, match="no sample period"):
        design(quick_tanks(None), sampled=True)

"""Counterexamples about sampling and rounding: each must stay caught."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import pytest

from synth.gain.sampled.numbers import FixedPoint
from synth.gain.sampled.peaks import _enclosed, sampled_peak_gain, sampled_unit
from synth.network.gains import Gains, gain_set
from synth.network.model import Network
from synth.proof.firmware import Rounding, prove_firmware
from tests.build import M, scalar_kind
from tests.gain.sampled_truth import Adjoint

A9 = [[0, 1, 0], [0, 0, 1], [0, 0, -2]]
LOOP9 = (A9, [[0], [0], [2]], [["-1.2", "-2", "-0.6"]])


def test_trap_9_the_sampling_instants_alone_are_no_bound():
    """T = .6, d = .3: between the samples the signal reaches 29.1, at them 26.4; the adjoint simulation agrees."""
    found = sampled_peak_gain(*LOOP9, [[0], [1], [0]], [[0, 0, 1]], "0.6", "0.3", width=1e-6)
    assert found.upper[0, 0] == pytest.approx(29.1, abs=0.01)
    truth = Adjoint([[float(v) for v in row] for row in A9], [[0], [0], [2.0]], [[-1.2, -2.0, -0.6]], 0.6, 0.3)
    at_sample, at_update = truth.gains([0.0, 0.3], [0.0, 0.0, 1.0, 0.0], D=[0.0, 1.0, 0.0])
    assert at_sample == pytest.approx(26.4, abs=0.05)
    assert at_update == pytest.approx(found.upper[0, 0], rel=1e-6)
    assert at_sample < 0.92 * found.lower[0, 0]


@pytest.mark.parametrize(("T", "quanta"), [("0.1", 5), ("0.01", 50), ("0.001", 500)])
def test_trap_11_a_stored_integrator_rounded_every_period(T, quanta):
    """x' = -x kept in the firmware and rounded to q once per period sticks at q/(2T), not at q/2."""
    T, q = Fraction(T), Fraction(1, 1000)
    kind = replace(scalar_kind(1), E=M([[0]]))
    unit = sampled_unit(kind, (), M([[0]]), T, stored=("x",))
    bound = _enclosed(unit.loop, Fraction(0), unit.stored, unit.states, (), 1e-4)[1][0, 0] * float(q) / 2
    assert bound == pytest.approx(quanta * float(q), rel=2e-4)
    # The register as it runs: it stops moving just inside the bound (a tie rounds away from zero and stays).
    numbers = FixedPoint(32, 0)
    register = Fraction(quanta + 1)
    for _ in range(20 * int(1 / T)):
        register = numbers.round(register - T * register)
    assert quanta - 1 <= register <= quanta
    # What rounding adds once per sample, q/2, is far below.
    assert bound > 9 * float(q) / 2


def test_trap_11_in_a_certificate():
    """The certificate's R counts the stored rounding at its rate."""
    kind = replace(scalar_kind(1), E=M([[0]]))
    network = Network("Invented register", (kind,), ())
    gains = Gains((gain_set(kind, M([[0]])),))
    found = prove_firmware(network, gains, "0.1", rounding=Rounding(stored={"tank.x": "0.001"}))
    assert found.proven, found.reasons
    assert float(found.document["constants"]["R"]) == pytest.approx(0.005, rel=1e-3)
    assert float(found.document["constants"]["R"]) >= 0.005

"""Networks beyond the plain convoy: what later stages can use goes all the way; the rest is refused in words."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest

import synth
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain import assemble
from synth.gain.closed import close_network
from synth.network.gains import Gains, gain_set
from synth.report.page import write_report
from tests.across.conftest import CASES
from tests.build import convoy, convoy_gains

UNCERTAIN = CASES / "convoy" / "uncertain.yaml"
EXAMPLES = Path(__file__).parents[1] / "network" / "examples"


@pytest.fixture(scope="module")
def uncertain() -> tuple[object, object, object]:
    network = synth.read(UNCERTAIN)
    design = synth.design(network)
    return network, design, synth.prove(network, design)


def test_tolerances_and_nonlinear_terms_are_proven_and_said(uncertain) -> None:  # type: ignore[no-untyped-def]
    network, design, certificate = uncertain
    assert design.reached
    assert certificate.proven, certificate.reasons
    sorts = {link.sort for link in network.links}
    assert sorts == {"link", "tolerance", "curve"}
    told = " ".join(certificate.covers)
    assert "tolerance of lag (hauler): any value, steady or varying" in told
    assert "inside its sector" in told
    assert any("reader of the problem file" in line for line in certificate.excludes)


def test_a_tolerance_costs_radius_and_is_never_scaled_as_a_coupling(uncertain) -> None:  # type: ignore[no-untyped-def]
    network, design, certificate = uncertain
    closed = close_network(network, design.gains)
    still = network.without_self_links()
    assert assemble(close_network(still, design.gains), still.links).radius().upper < certificate.radius.lower
    assert assemble(closed, network.links).radius().upper == pytest.approx(certificate.radius.upper, rel=1e-5)
    stronger = network.scaled(Fraction(2))
    assert [a.strength == b.strength for a, b in zip(network.links, stronger.links, strict=True)] == [
        link.sort != "link" for link in network.links
    ]


def test_the_adversary_moves_tolerances_too_and_breaks_nothing(uncertain) -> None:  # type: ignore[no-untyped-def]
    network, design, certificate = uncertain
    run = synth.simulate(network, design, certificate, units=12, seconds=15, scenarios=("step", "adversary"))
    assert run.violations == 0
    assert 0.9 < run.worst.G_ratio <= 1
    assert any("tolerances" in note for note in run.notes)


def test_true_parameters_and_the_true_drag_stay_inside_the_guaranteed_peaks(uncertain) -> None:  # type: ignore[no-untyped-def]
    """The nonlinear equations themselves, with the lag at both ends of its range, against the certificate."""
    import numpy as np

    _, design, certificate = uncertain
    K = design.gains["hauler"].K.floats()[0]
    peaks = {(p.role, p.signal): float(p.value) for p in certificate.peaks}
    step, cells, late = 0.01, 12, 10  # 10 steps of 0.01 s: the declared delay
    for lag in (0.45, 0.5, 0.55):
        for period in (1.5, 4.0, 12.0):
            x, past, worst = np.zeros((cells, 3)), [np.zeros(cells)] * (late + 1), np.zeros(3)
            for k in range(3000):
                push = 0.2 if (k * step) % period < period / 2 else -0.2
                ahead = 0.5 * (np.concatenate(([0.0], past[-1 - late][:-1])) - x[:, 0])
                rate = np.stack(
                    (
                        x[:, 1],
                        x[:, 2] + push - 0.05 * x[:, 1] * np.abs(x[:, 1]),
                        (x @ K + ahead - x[:, 2]) / lag,
                    ),
                    axis=1,
                )
                x = x + step * rate
                past = [*past[1:], x[:, 0].copy()]
                worst = np.maximum(worst, np.abs(x).max(axis=0))
            for name, reached in zip(("slot", "speed", "drive"), worst, strict=True):
                assert reached <= peaks["state", name] * 1.02, (lag, period, name)
            assert worst[0] > 0.2 * peaks["state", "slot"]


@pytest.mark.parametrize(
    ("name", "says"), [("edge", "edge"), ("members", "members"), ("rules", "rules"), ("field", "weaken")]
)
def test_every_description_is_proven_as_a_loop_and_refused_in_words_as_flashed(name: str, says: str) -> None:
    network = synth.read(EXAMPLES / f"{name}.yaml")
    gains = Gains(tuple(gain_set(kind, ExactMatrix.of([["-0.5", "-2"]])) for kind in network.kinds))
    certificate = synth.prove(network, gains)
    assert certificate.proven, certificate.reasons
    with pytest.raises(InputError, match=f"{says}.*not offered by this version"):
        synth.prove(network, gains, route="firmware")


def test_a_link_that_may_weaken_is_an_alternative_and_no_sum() -> None:
    network = convoy()
    links = tuple(replace(link, weakens=True, strength=2 * link.strength) for link in network.links)
    fixed = assemble(close_network(network, convoy_gains()), network.links).radius()
    found = assemble(close_network(network, convoy_gains()), links)
    # Row p max(2 g s_source, g s_self): twice the fixed row, where a sum would make it three times as large.
    assert found.radius().upper == pytest.approx(2 * fixed.upper, rel=1e-5)
    assert set(found.upper.choice.tolist()) != {-1} or found.upper.gain.size == 1


def test_a_path_in_place_of_a_network_is_answered_with_a_sentence() -> None:
    for call in (synth.design, lambda n: synth.prove(n, convoy_gains()), lambda n: synth.margin(n, convoy_gains())):
        with pytest.raises(InputError, match=r"needs a network, not str; read a problem file first"):
            call("convoy.yaml")


def test_members_whose_parameters_differ_have_a_report(tmp_path) -> None:  # type: ignore[no-untyped-def]
    network = synth.read(EXAMPLES / "members.yaml")
    assert len(network.kinds) > 1  # one declared kind with parameters of its members' own
    row = ExactMatrix.of([["-0.4", "-2"]])
    gains = Gains(tuple(gain_set(kind, row) for kind in network.kinds))
    certificate = synth.prove(network, gains)
    assert certificate.proven, certificate.reasons
    trajectory = synth.simulate(network, gains, certificate, scenarios=["step", "start"], seconds=5)
    assert trajectory.violations == 0
    write_report(tmp_path / "report.html", network, gains, certificate, None, trajectory)
    assert "Peaks of basin.depth" in (tmp_path / "report.html").read_text(encoding="utf-8")

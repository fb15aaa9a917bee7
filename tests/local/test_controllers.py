"""Designs of controllers with states of their own: from the kind to a certificate that the checker accepts."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from synth.base.exact import ExactMatrix
from synth.gain import close_network
from synth.local import Design, design
from synth.local.core import core_of, estimator_gain, regulator, with_core_feedback
from synth.local.finish import Chart, search
from synth.local.merit import measure
from synth.local.plant import field_of
from synth.local.pull import pull
from synth.local.starts import riccati_starts
from synth.network.controller import Wanted, firmware_rows, innovation_rows, with_controller
from synth.network.gains import Gains
from synth.network.model import Goal, Link, Network
from synth.proof import Certificate
from tests.build import M, scalar_kind
from tests.local.unreachable import roomy


def with_states(wanted: Wanted, sensors: int = 1) -> Network:
    """Carts that measure their place only (or everything), with the controller asked for."""
    network = roomy()
    kind = network.kinds[0]
    if sensors == 1:
        kind = replace(kind, sensors=kind.sensors[:1], C=M([[1, 0]]), N=ExactMatrix.zeros(1, 1))
    kind = with_controller(kind, wanted)
    uses = {} if kind.controller is None else {kind.name: kind.controller.structure}
    goal = replace(network.goal, gain_bounds={}, uses=uses, fastest=Fraction(12))
    return replace(network, kinds=(kind,), goal=goal)


def tanks(wanted: Wanted) -> Network:
    """The smallest unit there is, x' = -x + u + v + w, with the controller asked for; quick to prove."""
    kind = with_controller(scalar_kind(), wanted)
    links = tuple(Link("pipe", "tank", "level", (at,), "tank", "inflow", Fraction(1, 2)) for at in (-1, 1))
    uses = {} if kind.controller is None else {"tank": kind.controller.structure}
    return Network("Invented tanks", (kind,), links, Goal(Fraction("0.9"), Fraction("0.2"), Fraction(4), uses=uses))


SORTS = {
    "integral": (Wanted(integrals=("place",)), 2),
    "memory": (Wanted(memory=1), 1),
    "estimator": (Wanted(estimator=("place",)), 1),
    "estimator and integral": (Wanted(estimator=("place",), integrals=("place",)), 1),
}


def assert_sound(network: Network, found: Design) -> None:
    """Reached, accepted by the checker, zeros where they belong, and no lasting error where an integral is kept."""
    from synth.proof import prove

    assert found.reached
    assert prove(network, found).proven
    (unit,) = close_network(network, found.gains)
    for i, actuator in enumerate(unit.kind.inputs):
        may = network.goal.uses.get("cart", {}).get(actuator.name)
        for j, sensor in enumerate(unit.kind.sensors):
            assert may is None or sensor.name in may or unit.K[i, j] == 0
    if unit.kind.controller is not None and unit.kind.controller.integrals:
        at_rest = np.linalg.solve(unit.A.floats(), unit.E.floats())
        assert abs(at_rest[0, 0]) < 1e-9


def assert_firmware_is_told(network: Network, gains: Gains, certificate: Certificate, folder: Path) -> None:
    """The bundle carries the rows that the controller runs beside the gains, and its checker accepts."""
    from synth.handoff import hand_off

    hand_off(network, gains, certificate, folder)
    text = " ".join((folder / "README.txt").read_text(encoding="utf-8").split())
    for state, parts in firmware_rows(network.kinds[0]):
        assert f"tank: rate of {state} = " in text and all(name in text for name, _ in parts)
    for name, _ in innovation_rows(network.kinds[0]):
        assert f"tank: {name} = x + (-1) x_estimate" in text
    command = [sys.executable, "-I", "check.py", "certificate.json"]
    assert subprocess.run(command, cwd=folder, capture_output=True, check=False).returncode == 0


@pytest.mark.parametrize(
    "wanted", [Wanted(memory=1), pytest.param(Wanted(estimator=("x",), integrals=("x",)), marks=pytest.mark.long)]
)
def test_a_textbook_start_is_refined_and_proven(wanted: Wanted, tmp_path: Path) -> None:
    """The quick search from one Riccati controller: everything downstream takes the widened unit as any other."""
    network = tanks(wanted)
    field = field_of(network)
    start = min((K for (K,) in riccati_starts(field)), key=lambda K: measure(field, (K,)).value)
    found = search(field, starts=1, warm=((start,),), quick=True)
    result = pull(field, found)
    assert found.merit.excess <= 1e-6 and found.merit.value <= measure(field, (start,)).value + 1e-2
    assert not result.guarantee.broken and result.guarantee.upper <= 0.9
    from synth.proof import prove

    certificate = prove(network, result.gains, target="0.9")
    assert certificate.proven
    assert_firmware_is_told(network, result.gains, certificate, tmp_path / "out")


@pytest.mark.long
@pytest.mark.parametrize("name", SORTS)
def test_designed_reached_and_proven(name: str) -> None:
    network = with_states(*SORTS[name])
    assert_sound(network, design(network, starts=2))


@pytest.mark.long
def test_memory_does_what_the_bare_sensor_cannot() -> None:
    """One state of memory makes up for the speed that nobody measures."""
    bare = design(with_states(Wanted()), target=0.3, starts=4)
    assert not bare.reached and bare.blocking is not None and bare.blocking.cause in ("sensors", "gain bound")
    found = design(with_states(Wanted(memory=1)), target=0.3, starts=4)
    assert found.reached and found.upper < 0.8 * bare.lower


@pytest.mark.parametrize("name", SORTS)
def test_starts_settle_the_unit(name: str) -> None:
    """The textbook controllers that the search begins with are stable, and carry over to the search's coordinates."""
    field = field_of(with_states(*SORTS[name]))
    starts = riccati_starts(field)
    assert starts
    (plant,) = field.plants
    settled = [K for (K,) in starts if np.linalg.eigvals(plant.A + plant.B @ K @ plant.C).real.max() < 0]
    assert len(settled) >= len(starts) // 3
    chart = Chart(field, 2e-4)
    if not chart.all_placed:
        again, _ = chart.gains(chart.point((settled[0],)))
        assert again[0] == pytest.approx(settled[0])


def test_the_estimator_start_separates() -> None:
    """Modes of the started loop are those of the regulator and of the estimator, in the plant's scaled time."""
    field = field_of(with_states(Wanted(estimator=("place",))))
    (plant,) = field.plants
    core = core_of(plant)
    A, B = plant.A[np.ix_(core.fed, core.fed)], plant.B[np.ix_(core.fed, core.inputs)]
    C = plant.C[np.ix_(core.states[:1], core.states)]
    K = regulator(A, B, np.eye(2), 0.3)
    noise = np.concatenate((B, plant.D[core.states], plant.E[core.states]), axis=1)
    L = estimator_gain(A, C, noise, 0.3)
    assert K is not None and L is not None
    whole = with_core_feedback(plant, core, K, 0.3, field.omega)
    assert whole is not None
    # the own part of relative links is absent here, so separation is exact
    expected = np.poly(np.concatenate((np.linalg.eigvals(A + B @ K), np.linalg.eigvals(A - L @ C)))).real
    assert np.poly(plant.A + plant.B @ whole @ plant.C) == pytest.approx(expected, rel=1e-6)


def test_no_regulator_where_a_mode_cannot_be_moved() -> None:
    A, B = np.array([[0.5, 0.0], [0.0, -1.0]]), np.array([[0.0], [1.0]])
    found = regulator(A, B, np.eye(2), 1.0)
    assert found is None or np.linalg.eigvals(A + B @ found).real.max() > 0

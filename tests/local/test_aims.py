"""Least effort and least peak: what is promised is met by an adversary over the whole class, and never exceeded."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction
from functools import cache

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.local import Design, design
from synth.local.finish import Chart
from synth.local.merit import measure
from synth.local.plant import field_of
from synth.network.model import Goal, Network
from synth.simulate.adversary import attack_class
from synth.simulate.model import build_section
from tests.build import convoy
from tests.local.cases import light_unit, mixed_convoy
from tests.local.unreachable import roomy


def aimed(network: Network, target: str = "0.5", aim: str = "effort", of: tuple[tuple[str, str], ...] = ()) -> Network:
    goal: Goal = replace(network.goal, aim=aim, aim_of=of, target=Fraction(target))
    return replace(network, goal=goal)


@cache
def least_effort(name: str) -> Design:
    networks = {"masses": light_unit(), "carts": roomy(strength="2", limit="5"), "convoy": convoy()}
    return design(aimed(networks[name]), starts=2)


def reached_by_the_class(found: Design, cells: int = 9, step: str = "0.005", epoch: int = 1600) -> np.ndarray:
    """Peaks of the commands that an adversary with a free hand over delays and signs of every link brings about."""
    section = build_section(found.network, found.gains, cells)
    seen = np.zeros(section.block.sizes[3])

    def listen(block: object) -> None:
        commands = np.maximum(np.abs(block.y0), np.abs(block.y1))  # type: ignore[attr-defined]
        np.maximum(seen, commands.max(axis=(0, 2, 3)), out=seen)

    attack_class(section, section.peaks, Fraction(step), epoch, 60_000, listen, listen)
    return seen


@pytest.mark.parametrize("name", ["masses", "carts", pytest.param("convoy", marks=pytest.mark.long)])
def test_the_promised_effort_is_met_and_never_exceeded(name: str) -> None:
    found = least_effort(name)
    assert found.reached and found.aim == "effort" and len(found.aimed) == 1
    promised = found.aimed[0].guaranteed
    assert promised == next(p.value for p in found.peaks if p.role == "actuator")
    (met,) = reached_by_the_class(found)
    assert 0.98 * promised <= met <= promised * (1 + 1e-9)


@pytest.mark.parametrize(("name", "widest"), [("masses", (24.0, 9.9)), ("carts", (200.0, 39.0))])
def test_no_gains_on_a_grid_need_less_effort(name: str, widest: tuple[float, float]) -> None:
    """Every pair of gains on a fine grid that keeps target and limits needs at least the peak that was found."""
    found = least_effort(name)
    field = field_of(found.network, ceiling=found.target)
    (plant,) = field.plants
    unit = float(found.aimed[0].limit or 1)
    best = np.inf
    for first in np.geomspace(0.02, widest[0], 16):
        for second in np.geomspace(0.1, widest[1], 16):
            merit = measure(field, (plant.to_scaled(np.array([[-first, -second]])),), steep=False)
            if merit.excess <= 1e-9:
                best = min(best, merit.aim * unit)
    assert np.isfinite(best)
    assert found.aimed[0].guaranteed <= 1.005 * best


@pytest.mark.long
def test_less_effort_than_the_smallest_radius_needs() -> None:
    network = roomy(strength="2", limit="5")
    free = design(network, target=0.5, starts=4)
    assert next(p.value for p in free.peaks if p.role == "actuator") > 1.02 * least_effort("carts").aimed[0].guaranteed
    assert free.upper < least_effort("carts").upper <= 0.5


def test_nominal_peak_is_that_of_the_network_as_written() -> None:
    """A ring of cells, its whole matrix exponential step by step: the slow literal definition."""
    from scipy.linalg import expm

    from synth.gain import close_network

    found = least_effort("masses")
    (unit,) = close_network(found.network, found.gains)
    cells, h = 24, 0.01
    n = 2
    A = np.kron(np.eye(cells), unit.A.floats())
    for link in found.network.links:
        shift = np.roll(np.eye(cells), -link.at[0], axis=0).T if link.at[0] else np.eye(cells)
        A += np.kron(shift, float(link.strength) * unit.D.floats() @ unit.H.floats())
    E = np.kron(np.eye(cells), unit.E.floats()) * float(found.network.kinds[0].disturbances[0].peak)
    big = np.zeros((A.shape[0] + cells,) * 2)
    big[: A.shape[0]] = np.hstack([A, E]) * h
    step = expm(big)[: A.shape[0]]
    state, total = step[:, A.shape[0] :], 0.0
    for _ in range(1500):
        total += float(np.abs(unit.U.floats() @ state[:n]).sum())
        state = step[:, : A.shape[0]] @ state
    assert found.aimed[0].nominal == pytest.approx(total, rel=5e-3)
    assert found.aimed[0].nominal <= found.aimed[0].guaranteed


def test_least_peak_of_a_named_signal() -> None:
    network = aimed(light_unit(), "0.9", "peak", (("mass", "speed"),))
    found = design(network, starts=1)
    assert found.reached and found.aimed[0].signal == "speed" and found.aimed[0].role == "state"
    least = least_effort("masses")
    assert found.aimed[0].guaranteed <= next(p.value for p in least.peaks if p.signal == "speed") * (1 + 1e-3)
    assert "mass.speed: at most" in found.explain()


def test_out_of_reach_is_answered_with_the_radius(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("synth.local.designing.find_blocking", lambda *_: None)
    found = design(aimed(replace(light_unit(), goal=replace(light_unit().goal, fastest=Fraction(2))), "0.01"), starts=1)
    assert not found.reached and found.aim == "radius" and found.aimed == ()
    assert "not what the aim names" in found.explain()


def test_the_document_carries_the_aim() -> None:
    data = json.loads(json.dumps(least_effort("masses").as_json(), allow_nan=False))
    assert data["aim"] == "effort"
    (peak,) = data["aimed"]
    assert peak["signal"] == "push" and 0 < peak["nominal"] <= peak["guaranteed"] < peak["limit"]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"aim": "calm"}, "'radius', 'effort' and 'peak'"),
        ({"aim": "peak"}, "needs the signals"),
        ({"aim": "peak", "aim_of": (("mass", "sped"),)}, "no signal 'sped'"),
        ({"aim": "peak", "aim_of": (("lorry", "speed"),)}, "no kind 'lorry'"),
        ({"aim": "peak", "aim_of": (("mass", "speed"), ("mass", "push"))}, "has no band"),
    ],
)
def test_aims_that_mean_nothing_are_refused(change: dict[str, object], words: str) -> None:
    network = light_unit()
    with pytest.raises(InputError, match=words):
        design(replace(network, goal=replace(network.goal, **change)))  # type: ignore[arg-type]


def test_an_aim_without_disturbances_is_refused() -> None:
    network = aimed(light_unit())
    still = replace(network.kinds[0], disturbances=(replace(network.kinds[0].disturbances[0], peak=Fraction(0)),))
    with pytest.raises(InputError, match="no disturbance has a peak"):
        design(replace(network, kinds=(still,)))


@pytest.mark.parametrize("aim", ["effort", "peak", "groups"])
def test_gradients_are_the_differences(aim: str) -> None:
    """Aimed merits and shared gains: the derivative along a random direction against central differences."""
    if aim == "groups":
        network = mixed_convoy()
        field = field_of(replace(network, kinds=tuple(replace(kind, group="all") for kind in network.kinds)))
    else:
        of = (("mass", "speed"), ("mass", "offset")) if aim == "peak" else ()
        network = aimed(light_unit(), aim=aim, of=of)
        kind = network.kinds[0]
        bands = {"states": (kind.states[0], replace(kind.states[1], band=Fraction(2)))}
        offers = (replace(kind.offers[0], band=Fraction(3)),)
        field = field_of(replace(network, kinds=(replace(kind, states=bands["states"], offers=offers),)), ceiling=0.5)
    chart, rng = Chart(field, 2e-4), np.random.default_rng(3)
    looked = 0
    for k in range(8):
        point = chart.random(rng, clustered=k % 3 == 2)
        value, slope = chart.value(point, 30.0)
        if not value < 1e3:
            continue
        along, h = rng.normal(size=len(point)), 1e-6
        change = (chart.value(point + h * along, 30.0)[0] - chart.value(point - h * along, 30.0)[0]) / (2 * h)
        assert slope @ along == pytest.approx(change, rel=1e-3, abs=1e-3)
        looked += 1
    assert looked >= 4

"""Runs of the equations as written: they agree with exact stepping where nothing is nonlinear, and with an independent
integrator where something is; a plant that breaks its declaration is caught.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import synth
from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.reader import read
from synth.simulate.model import build_section, fold_fresh
from synth.simulate.prepare import fresh_if_short
from synth.simulate.run import simulate
from synth.simulate.stepper import Stepper, march
from synth.simulate.written import Written, parameter_runs, run_written
from tests.simulate.nets import two_kinds

STEP = Fraction(1, 50)

DRAG = {
    "synth": 1,
    "title": "Invented carts with drag",
    "kinds": {
        "cart": {
            "parameters": {"drag": "0.2 1/m +- 20%"},
            "states": {"place": "m", "speed": {"in": "m/s", "band": "1 m/s"}},
            "inputs": {"push": {"in": "m/s^2", "limit": 20}},
            "disturbances": {"wind": {"in": "m/s^2", "peak": 0.3}},
            "takes": {"pull": "m/s^2"},
            "offers": {"position": {"is": "place"}},
            "sensors": ["place", "speed"],
            "equations": {"place'": "speed", "speed'": "push + pull + wind - drag*speed*abs(speed)"},
        }
    },
    "network": {
        "pattern": {
            "dimension": 1,
            "links": [
                {"name": "rope", "from": "cart.position", "at": -1, "to": "cart.pull", "strength": "0.5 1/s^2",
                 "relative": True, "late": "neighbour", "delay": "0.1 s"},
            ],
        }
    },
    "design": {"target": 0.9, "period": "0.05 s"},
    "simulation": {"units": 6, "seconds": "8 s"},
}  # fmt: skip


def carts():
    network = read(DRAG)
    gains = Gains((gain_set(network.kinds[0], ExactMatrix.of([["-4", "-4"]])),))
    return network, gains


def ends(collected):
    def listener(block):
        collected.append((block.times.copy(), block.x.copy(), block.z1.copy(), block.y1.copy()))

    return listener


def joined(collected, part):
    return np.concatenate([one[part] for one in collected])


@pytest.mark.parametrize("delay", ["0", "0.1", "0.13"])
def test_linear_networks_agree_with_exact_stepping(delay):
    network, gains = two_kinds(Fraction(delay))
    section = build_section(network, gains, 5)
    wires = fresh_if_short(section.wires, STEP)
    n, _, nw = section.block.sizes[:3]
    rng = np.random.default_rng(4)
    x0 = rng.uniform(-1, 1, (n, 5, 2))
    waves = rng.uniform(-1, 1, (200, nw, 5, 2))
    system, late = fold_fresh(section.block, wires)
    exact, found = [], []
    march(Stepper(system, late, STEP), x0, 200, lambda first, count: waves[first : first + count], ends(exact))
    drift, uncertain = parameter_runs(section, 0, 10, ["middle"] * 2)
    assert not uncertain
    supply = lambda first, count: waves[first : first + count]  # noqa: E731
    run_written(Written(section, gains, wires), x0, STEP, 200, supply, drift, ends(found), None)
    assert np.allclose(joined(exact, 0), joined(found, 0))
    # With 0.13 s a late value jumps in the middle of a step, because the disturbance jumps at every one: an error O(h).
    size = {"0": 1e-7, "0.1": 3e-5, "0.13": 1e-3}[delay]
    for part in (1, 2, 3):
        assert np.max(np.abs(joined(exact, part) - joined(found, part))) < size


def test_halving_the_step_shows_fourth_order():
    network, gains = two_kinds(Fraction(0))
    section = build_section(network, gains, 4)
    x0 = np.ones((section.block.sizes[0], 4, 1))
    still = np.zeros((section.block.sizes[2], 4, 1))
    drift, _ = parameter_runs(section, 0, 10, ["middle"])
    last = []
    for many in (10, 20, 40):
        supply = lambda first, count: np.broadcast_to(still, (count, *still.shape))  # noqa: E731
        written = Written(section, gains, section.wires)
        last.append(run_written(written, x0, Fraction(2, many), many, supply, drift, lambda _: None, None))
    ratio = np.abs(last[0] - last[1]).max() / np.abs(last[1] - last[2]).max()
    assert 10 < ratio < 24


def test_nonlinear_equations_agree_with_an_independent_integrator():
    network, gains = carts()
    still = replace(network, links=tuple(replace(link, delay=Fraction(0)) for link in network.links))
    section = build_section(still.without_self_links(), gains, 2)
    x0 = np.array([[[1.0], [-2.0]], [[0.5], [1.5]]])
    drag = {"cart": {"drag": np.array([[0.16], [0.24]])}}
    supply = lambda first, count: np.full((count, section.block.sizes[2], 2, 1), 0.3)  # noqa: E731
    written = Written(section, gains, section.wires)
    end = run_written(written, x0, STEP, 150, supply, lambda _: drag, lambda _: None, None)

    def rate(_, x):  # places, then speeds, of the two carts; the first has no cart ahead
        place, speed = x[:2], x[2:]
        ahead = np.array([0.0, place[0]])
        pull = 0.5 * (ahead - place) - 4 * place - 4 * speed + 0.3
        return np.concatenate([speed, pull - np.array([0.16, 0.24]) * speed * np.abs(speed)])

    truth = solve_ivp(rate, (0, 3), [1.0, -2.0, 0.5, 1.5], rtol=1e-10, atol=1e-12, method="DOP853").y[:, -1]
    assert np.allclose(end[..., 0].reshape(-1), truth, atol=1e-6)


def test_the_scenario_runs_and_a_plant_that_breaks_its_declaration_is_caught():
    network, gains = carts()
    certificate = synth.prove(network, gains)
    assert certificate.proven
    fair = simulate(network, gains, certificate, scenarios=["written"])
    assert fair.violations == 0
    assert {"as written, step, low", "as written, random extreme, changing"} <= {run.name for run in fair.runs}
    worst = max(run.G_ratio for run in fair.runs)
    assert 0.2 < worst <= 1
    # The same file with a drag that drives instead of braking: outside what was declared and proven.
    text = DRAG["kinds"]["cart"]["equations"] | {"speed'": "push + pull + wind + 60*drag*speed*abs(speed) + rise*speed"}
    names = DRAG["kinds"]["cart"]["parameters"] | {"rise": "3 1/s"}
    other = read(DRAG | {"kinds": {"cart": DRAG["kinds"]["cart"] | {"equations": text, "parameters": names}}}).kinds[0]
    wrong = replace(network, kinds=(replace(network.kinds[0], dynamics=other.dynamics),))
    assert simulate(wrong, gains, certificate, scenarios=["written"]).violations > 0


def test_a_formula_that_leaves_its_domain_stops_the_run():
    network, gains = carts()
    text = DRAG["kinds"]["cart"]["equations"] | {
        "speed'": "push + pull + wind - drag*speed*sqrt((edge - speed**2)/edge)"
    }
    kinds = {"cart": DRAG["kinds"]["cart"] | {"equations": text}}
    narrow = {**kinds["cart"], "states": {"place": "m", "speed": {"in": "m/s", "band": "0.1 m/s"}}}
    narrow["parameters"] = {"drag": "0.2 1/s +- 20%", "edge": "0.04 m^2/s^2"}
    other = read(DRAG | {"kinds": {"cart": narrow}}).kinds[0]
    wrong = replace(network, kinds=(replace(network.kinds[0], dynamics=other.dynamics),))
    runs = simulate(wrong, gains, None, scenarios=["written"]).runs
    assert any(run.stopped is not None for run in runs)

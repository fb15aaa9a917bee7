"""The adversaries reach what theory says can be reached, and never more."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy.linalg import expm

from synth.simulate import simulate
from synth.simulate.adversary import attack_class, intake, wired_kernel
from synth.simulate.kernels import held_kernels, lines_of, stack_rows, targets
from synth.simulate.model import build_section, fold_fresh
from synth.simulate.stepper import Stepper, march
from tests.build import convoy, convoy_gains
from tests.simulate.claims import stand_in
from tests.simulate.nets import tanks, two_kinds
from tests.simulate.test_stepper import by_hand


def test_wired_adversary_attains_the_peak_gain_of_the_nominal_network():
    """Without delays: integral of |kernel| from every unit's disturbance by a fine exponential of the whole network."""
    network, gains = convoy(strength="1.5", delay=0, offsets=(-1, 1)), convoy_gains()
    cells = 6
    run = simulate(network, gains, units=cells, seconds=20, scenarios=["adversary"])
    A, E = by_hand(network, gains, cells)
    cell, h = build_section(network, gains, cells).deepest, 1e-3
    big = np.zeros((A.shape[0] + cells,) * 2)
    big[: A.shape[0]] = np.hstack([A, E]) * h
    step = expm(big)[: A.shape[0]]
    Phi, Gamma = step[:, : A.shape[0]], step[:, A.shape[0] :]
    K, total = np.eye(A.shape[0])[3 * cell : 3 * cell + 3], np.zeros(3)
    for _ in range(20_000):
        total += np.abs(K @ Gamma).sum(axis=1)
        K = K @ Phi
    for i, name in enumerate(("slot", "speed", "drive")):
        reached = np.abs(run.run(f"adversary against hauler.{name}").states["hauler"][:, cell, i]).max()
        assert 0.99 * 0.3 * total[i] <= reached <= 0.3 * total[i] * (1 + 1e-9)


@pytest.mark.parametrize(
    "network, gains", [(convoy(strength="1.5", delay="0.13", offsets=(-1, 2)), convoy_gains()), two_kinds("0.14")]
)
def test_time_reversed_network_gives_the_kernels_of_forward_pulses(network, gains):
    """Slow literal definition: one pulse at each disturbance of each cell, forward in time; jumps of an offer fall on
    the grid.
    """
    cells, cell, step, steps = 5, 2, Fraction("0.02"), 150
    section = build_section(network, gains, cells)
    nw = section.block.sizes[2]
    pulses = np.zeros((steps, nw, cells, nw * cells))
    for c in range(nw):
        for j in range(cells):
            pulses[0, c, j, c * cells + j] = 1.0
    kept = {"states": [], "offers": [], "inputs": []}

    def keep(block):
        kept["states"].append(block.x[:, :, cell].copy())
        kept["offers"].append(block.z1[:, :, cell].copy())
        kept["inputs"].append(block.y1[:, :, cell].copy())

    system, late = fold_fresh(section.block, section.wires)
    march(
        Stepper(system, late, step),
        np.zeros((section.block.sizes[0], cells, nw * cells)),
        steps,
        lambda f, n: pulses[f : f + n],
        keep,
    )
    for group, parts in kept.items():
        forward = np.concatenate(parts).reshape(steps, -1, nw, cells)
        back = wired_kernel(section, lines_of(section, group), cell, step, steps).transpose(0, 3, 1, 2)
        assert np.abs(forward - back).max() < 1e-7 * np.abs(forward).max()


def test_held_kernel_sums_to_the_peak_gain_from_below():
    """theory (5): 1/(s^2 + 2 zeta s + 1) has peak gain coth(pi zeta / (2 sqrt(1 - zeta^2))); here through a scalar
    tank: 1/a.
    """
    network, gains = tanks(a=2)
    section = build_section(network, gains, 1)
    for h in (0.1, 0.01):
        _, Kv, Kw = held_kernels(section.block, stack_rows(lines_of(section, "offers")), h, int(20 / h))
        assert np.abs(Kv).sum() == pytest.approx(0.5, abs=1e-12)
        assert np.abs(Kw).sum() == pytest.approx(0.5, abs=1e-12)


def class_run(network, gains, cells, most=60_000, step="0.02", epoch=600):
    """Peaks [offer, cell] and states [state, cell, run] that the class adversary reaches, without any claim."""
    section = build_section(network, gains, cells)
    seen = {}

    def listen(name):
        def inner(block):
            for key, values in (
                ("x", block.x),
                ("z", np.maximum(abs(block.z0), abs(block.z1))),
                ("u", np.maximum(abs(block.y0), abs(block.y1))),
            ):
                here = np.abs(values).max(axis=(0, 2, 3))
                seen[key] = np.maximum(seen.get(key, 0 * here), here)

        return inner

    done = attack_class(section, section.peaks, Fraction(step), epoch, most, listen("climb"), listen("final"))
    return seen, done


@pytest.mark.parametrize(
    "strength, offsets",
    [("0.5", (-1,)), ("2", (-1, 1))],
)
def test_class_adversary_reaches_the_printed_constants_from_below(strength, offsets):
    network, gains = convoy(strength=strength, delay="0.1", offsets=offsets), convoy_gains()
    claim = stand_in(network, gains, alpha=1e-3, cells=8000, slack=1e-5)
    seen, done = class_run(network, gains, 40)
    reached = seen["x"].max() / (0.3 * claim.constants.G)
    assert done.settled
    assert 0.99 <= reached <= 1 + 1e-9
    for peak in claim.peaks:
        key = {"state": "x", "offer": "z", "actuator": "u"}[peak.role]
        index = {"slot": 0, "speed": 1, "drive": 2, "place": 0, "demand": 0}[peak.signal]
        assert 0.99 <= seen[key][index] / peak.value <= 1 + 1e-9, peak


def test_class_adversary_near_radius_one_climbs_to_the_bound():
    """x' = -x + g z + w, p = 1: radius g = 0.9 and G = 1/(1 - 0.9) = 10, known in closed form."""
    network, gains = tanks(strength="0.9", delay="0.1")
    seen, done = class_run(network, gains, 70, step="0.05", epoch=200)
    assert done.settled
    assert 9.9 <= seen["x"].max() <= 10 * (1 + 1e-9)


def test_a_one_way_string_is_calm_when_finite_but_the_class_bound_grows_with_its_length():
    """Radius 1.1 > 1 although every finite string is nilpotent: sum of 1.1^k, so no bound holds for every length."""
    network, gains = tanks(strength="1.1", delay="0.1")
    reached = [class_run(network, gains, cells, step="0.05", epoch=200)[0]["x"].max() for cells in (5, 10, 20)]
    for cells, value in zip((5, 10, 20), reached, strict=True):
        assert value == pytest.approx((1.1**cells - 1) / 0.1, rel=0.01)


@pytest.mark.parametrize("delay", ["0", "0.2"])
def test_class_adversary_on_two_kinds_with_feed_through(delay):
    network, gains = two_kinds(delay)
    claim = stand_in(network, gains, cells=8000, slack=1e-5)
    run = simulate(network, gains, claim, units=20, seconds=20, scenarios=["adversary", "start"])
    assert run.violations == 0
    assert 0.9 <= run.worst.G_ratio <= 1 + 1e-9
    best = {(row["kind"], row["role"], row["signal"]): row["ratio"] for row in run.measures["signals"]}
    assert min(best.values()) > 0.9
    assert max(best.values()) <= 1 + 1e-9


def test_links_of_the_class_adversary_stay_within_the_class():
    """Law: what an inlet receives never exceeds the sum of |g| sup |z| of its sources up to then."""
    network, gains = convoy(strength="2", offsets=(-1, 1)), convoy_gains()
    section = build_section(network, gains, 9)
    peak = np.random.default_rng(1).uniform(0, 1, (1, 9))
    expected = 2 * (np.concatenate([[0], peak[0, :-1]]) + np.concatenate([peak[0, 1:], [0]]))
    assert np.allclose(intake(section, peak)[0], expected)
    names = [name for name, _ in targets(section, ("states", "offers", "inputs"))]
    assert names == ["hauler.slot", "hauler.speed", "hauler.drive", "hauler.place (offer)", "hauler.demand (actuator)"]


def test_late_links_respect_the_envelope_and_use_the_delay():
    network, gains = convoy(strength="2", delay="0.5"), convoy_gains()
    claim = stand_in(network, gains, alpha=0.2, cells=8000)
    run = simulate(network, gains, claim, units=10, seconds=20, scenarios=["adversary"])
    late = [r for r in run.runs if r.name.startswith("late links")]
    assert late and all(r.violations == 0 and 0 < r.envelope_ratio <= 1 for r in late)
    assert all(r.X0 > 0 for r in late)

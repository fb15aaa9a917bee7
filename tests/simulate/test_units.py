"""Sections unit by unit: members, edges, rules, fields and links that weaken, against slow independent answers."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from math import ceil

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from synth.base.errors import InputError
from synth.gain.descriptions import wiring_of
from synth.network.gains import Gains, gain_set
from synth.network.layout import Edge, EdgeUnit, Members, Rule
from synth.network.model import Link, Network
from synth.simulate import simulate
from synth.simulate.prepare import prepare
from synth.simulate.rewiring import random_wiring
from synth.simulate.unit_attacks import attack_weakening
from synth.simulate.units import build_units, section_units
from synth.simulate.weave import Weave, run_woven
from tests.build import M, convoy, convoy_gains, scalar_kind
from tests.margin.networks import kind_of, link, network_of, no_gains, oscillator
from tests.simulate.nets import tanks, two_kinds
from tests.simulate.unit_claims import unit_stand_in


def members_of(kinds, kind, links, ends, title="Invented members"):
    """Members from (to, source, link number) triples."""
    to, source, form = (np.array(column, dtype=np.int32) for column in zip(*ends, strict=True))
    names = tuple(f"u{i}" for i in range(len(kind)))
    parts = tuple((n,) for n in range(len(links)))
    array = np.array(kind, dtype=np.int32)
    members = Members(names, array, to, source, form, parts, tuple((k.name, {}) for k in kinds))
    return Network(title, kinds, links, dimension=0, description="members", members=members)


def flat(one):
    return replace(one, at=())


def random_members(seed=3, units=7):
    """Two kinds (one of two states) and a tangle of absolute and relative links, calm; invented."""
    rng = np.random.default_rng(seed)
    tank, osc = scalar_kind(2, "tank"), kind_of([[0, 1], [-2, "-1.5"]], [[0], [1]], [[1, "0.2"]], "lever")
    tank = replace(tank, offers=tuple(replace(s, name="z0") for s in tank.offers))
    kind = [int(k) for k in rng.integers(0, 2, units)]
    kinds, links, ends = (tank, osc), [], []
    for i in range(units):
        for _ in range(2):
            j = int(rng.integers(0, units))
            if i != j:
                g = Fraction(int(rng.integers(-6, 7)) or 3, 20)
                own = g if rng.integers(0, 2) else 0
                links.append(flat(link(kinds[kind[i]], 0, g, own, source=kinds[kind[j]])))
                ends.append((i, j, len(links) - 1))
    return members_of(kinds, kind, tuple(links), ends)


def literal_loop(network, gains):
    """Dense A, E of all members, written out link by link: x' = A x + E w."""
    members = network.members
    sizes = [len(network.kinds[k].states) for k in members.kind]
    first = np.concatenate([[0], np.cumsum(sizes)])
    A = np.zeros((first[-1], first[-1]))
    E = np.zeros((first[-1], len(sizes)))
    for i, k in enumerate(members.kind):
        unit = network.kinds[k]
        mine = slice(first[i], first[i + 1])
        A[mine, mine] += unit.A.floats() + unit.B.floats() @ gains[unit.name].K.floats() @ unit.C.floats()
        E[mine, i] = unit.E.floats()[:, 0]
    for i, j, f in zip(members.to, members.source, members.form, strict=True):
        one = network.links[members.parts[f][0]]
        to, sender = network.kinds[members.kind[i]], network.kinds[members.kind[j]]
        D = to.D.floats()[:, to.index("takes", one.take)]
        z = sender.H.floats()[sender.index("offers", one.offer)]
        A[first[i] : first[i + 1], first[j] : first[j + 1]] += float(one.strength) * np.outer(D, z)
        if one.own_strength:
            own = to.H.floats()[to.index("offers", one.offer)]
            A[first[i] : first[i + 1], first[i] : first[i + 1]] -= float(one.own_strength) * np.outer(D, own)
    return A, E


def test_members_run_as_a_slow_solver_says():
    """A step of every disturbance, against scipy's adaptive solver on the loop written out link by link."""
    network = random_members()
    gains = no_gains(network)
    run = simulate(network, gains, None, seconds=5, scenarios=["step"]).run("step")
    A, E = literal_loop(network, gains)
    slow = solve_ivp(
        lambda t, x: A @ x + E.sum(axis=1), (0, 5), np.zeros(len(A)), rtol=1e-10, atol=1e-12, t_eval=run.time
    )
    first = np.concatenate([[0], np.cumsum([len(network.kinds[k].states) for k in network.members.kind])])
    for name, position in (("tank", 0), ("lever", 1)):
        units = np.flatnonzero(network.members.kind == position)
        expected = np.stack([slow.y[first[u] : first[u + 1]].T for u in units], axis=1)
        assert run.states[name].shape == expected.shape
        assert run.states[name] == pytest.approx(expected, abs=2e-7)


@pytest.mark.parametrize("delay", ["0", "0.13"])
def test_a_line_unit_by_unit_agrees_with_the_stepper(delay):
    """The same open section, cell by cell (exact stepping) and unit by unit, feed-through and late links included."""
    network, gains = two_kinds(delay)
    fast = simulate(network, gains, None, units=4, seconds=3, scenarios=["pulse"])
    units = build_units(network, gains, 4)
    job = prepare(units.section, None, 3.0, True, lambda text: None)
    seen = []
    weave = Weave(units.bare, [replace(t, delay=t.delay) for t in units.section.wires])
    pulse = units.alive["disturbances"] * units.section.peaks[:, None]
    names = [network.kinds[k].name for k in units.wiring.kind]
    end = fast.run("pulse").words.split("for ")[1].split(" s")[0]
    length = round(float(end) / float(job.step))
    x0 = np.zeros((units.section.block.sizes[0], units.section.cells, 1))
    steps = ceil(3 / float(job.step))

    def wave(first, count):
        return ((first + np.arange(count)) < length)[:, None, None, None] * pulse[None, :, :, None]

    run_woven(weave, x0, job.step, steps, wave, lambda block: seen.append(block.x.copy()))
    x = np.concatenate(seen)[-1, :, :, 0]
    low, high = units.section.shape.states["tank"]
    tank = x[low:high][:, [i for i, name in enumerate(names) if name == "tank"]].T
    if float(job.step) == fast.measures["step"] and fast.run("pulse").time[-1] == pytest.approx(
        steps * float(job.step)
    ):
        assert tank == pytest.approx(fast.run("pulse").states["tank"][-1], abs=3e-6)
    else:
        raise AssertionError("both runs must use one grid")


def test_peaks_of_members_climb_to_the_proven_bound_and_never_above():
    """x_i' = -x_i + links + w, all positive: (I - M)^{-1} 1 unit by unit, reached from below (theory (2), (3))."""
    kind = scalar_kind(1)
    links = tuple(flat(link(kind, 0, g)) for g in ("0.5", "0.3"))
    network = members_of((kind,), [0] * 4, links, [(1, 0, 0), (2, 1, 0), (3, 2, 0), (0, 3, 1), (2, 0, 1)])
    gains = no_gains(network)
    claim = unit_stand_in(wiring_of(network), gains, 0.2)
    run = simulate(network, gains, claim, seconds=10)
    assert run.violations == 0
    gain = np.array([[0, 0, 0, 0.3], [0.5, 0, 0, 0], [0.3, 0.5, 0, 0], [0, 0, 0.5, 0]])
    expected = np.linalg.solve(np.eye(4) - gain, np.ones(4))
    assert {p.kind: p.value for p in claim.peaks if p.role == "state"} == pytest.approx(
        {f"u{i}": v for i, v in enumerate(expected)}, rel=1e-3
    )
    assert run.measures["signals"][0]["peak"] == pytest.approx(expected.max(), rel=3e-3)
    assert run.worst.G_ratio == pytest.approx(1, abs=3e-3)
    lowered = tuple(
        replace(p, value=0.97 * p.value) if p.kind == "u2" and p.role == "state" else p for p in claim.peaks
    )
    assert simulate(network, gains, replace(claim, peaks=lowered), seconds=10, scenarios=["adversary"]).violations > 0


def test_random_members_keep_every_bound():
    network = random_members(5, 9)
    gains = no_gains(network)
    claim = unit_stand_in(wiring_of(network), gains, 0.1)
    run = simulate(network, gains, claim, seconds=4)
    assert run.checked and run.violations == 0
    assert {"step", "random", "pulse", "leader"} <= {r.name for r in run.runs}
    assert run.worst.envelope_ratio <= 1 < 1.5 * run.worst.G_ratio + 1
    assert run.units == 9


def fed(most=2, strength="0.4", relative=False, delay="0"):
    """Tanks (or lightly damped units, relative) that hear at most ``most`` others; invented."""
    kind = oscillator() if relative else scalar_kind(1)
    g = Fraction(strength) * most
    one = link(kind, 0, g, g if relative else 0, delay, name="feed")
    one = replace(one, at=(), choice="feed", weakens=relative)
    return Network(
        "Invented rules", (kind,), (one,), description="rules", dimension=0,
        rules=(Rule("feed", kind.name, one.take, most),),
    )  # fmt: skip


def test_rules_are_attacked_up_to_the_bound_of_every_wiring():
    """x' = -x + .4 (two others) + w: 1/(1 - .8) for any wiring; the full one reaches it (theory (13))."""
    network = fed()
    gains = no_gains(network)
    claim = unit_stand_in(wiring_of(network), gains, 0.05, by_kind=True)
    assert next(p.value for p in claim.peaks if p.role == "state") == pytest.approx(5, rel=1e-3)
    run = simulate(network, gains, claim, units=6, seconds=12)
    assert run.violations == 0
    assert run.worst.G_ratio == pytest.approx(1, abs=5e-3)
    assert run.worst.envelope_ratio is not None
    assert any("joining unit" in note for note in run.notes)


def test_relative_rules_run_rewired_inside_their_bounds():
    network = fed(2, "0.02", relative=True, delay="0.1")
    gains = no_gains(network)
    claim = unit_stand_in(wiring_of(network), gains, 0.01, slack=3e-3, by_kind=True)
    run = simulate(network, gains, claim, units=4, seconds=3, scenarios=["random", "start", "adversary"])
    assert run.violations == 0
    assert run.worst.G_ratio > 0.8
    again = simulate(network, gains, claim, units=4, seconds=3, scenarios=["random"])
    other = simulate(network, gains, claim, units=4, seconds=3, scenarios=["random"], seed=1)
    same = simulate(network, gains, claim, units=4, seconds=3, scenarios=["random"])
    first = same.run("random").states["oscillator"]
    assert np.array_equal(first, again.run("random").states["oscillator"])
    assert not np.array_equal(first, other.run("random").states["oscillator"])


@pytest.mark.parametrize("relative", [False, True])
def test_random_wirings_obey_the_rules(relative):
    """Never more sources than allowed; with what is absent, the own part folded is that of the largest intake."""
    network = fed(3, "0.1", relative)
    for seed in range(5):
        wiring = random_wiring(network, 6, np.random.default_rng(seed))
        heard = np.bincount(wiring.to[wiring.source >= 0], minlength=6)
        assert heard.max() <= 3
        assert not np.any(wiring.to == wiring.source)
        if relative:
            own = np.zeros(6)
            np.add.at(own, wiring.to, [float(wiring.links[n].own_strength) for n in wiring.link])
            assert own == pytest.approx(0.3)
    full = random_wiring(network, 6, np.random.default_rng(0), full=True)
    assert np.all(np.bincount(full.to[full.source >= 0], minlength=6) == 3)


def pumped():
    """x'' + .1 x' + x = .5 m(t) (z_b - x) beside y' = -y + .05 x: calm for every fixed m, pumped up by switching."""
    swing = kind_of([[0, 1], [-1, "-0.1"]], [[0], [1]], [[1, 0]], "swing")
    damp = replace(scalar_kind(1, "damper"), offers=tuple(replace(s, name="z0") for s in scalar_kind(1).offers))
    weak = replace(flat(link(swing, 0, "0.5", "0.5", source=damp)), weakens=True)
    return members_of((swing, damp), [0, 1], (weak, flat(link(damp, 0, "0.05", source=swing))), [(0, 1, 0), (1, 0, 1)])


def test_an_adversary_pumps_up_a_link_that_weakens():
    """Growth though every fixed strength is calm, found by switching one link on and off."""
    network = pumped()
    gains = no_gains(network)
    job = prepare(build_units(network, gains, 2).section, None, 100.0, True, lambda text: None)
    runs = []
    attack_weakening(
        build_units(network, gains, 2), job, ceil(100 / float(job.step)), lambda _, __, kept, ___: runs.append(kept)
    )
    x = np.abs(runs[0].samples(-1)[1]["states"]["swing"]).max(axis=(1, 2))
    assert x[len(x) // 2 :].max() > 1.2 * x[: len(x) // 2].max()
    calm = simulate(network, gains, None, seconds=40, scenarios=["step"]).run("step").states["swing"]
    assert x.max() > 5 * np.abs(calm).max()
    for m in (Fraction(0), Fraction(1, 4), Fraction(1, 2)):
        weak = replace(network.links[0], strength=m, own_strength=m)
        fixed = replace(network, links=(weak, network.links[1]))
        assert np.linalg.eigvals(literal_loop(fixed, no_gains(network))[0]).real.max() < -0.04


def test_links_that_weaken_keep_their_bounds_where_there_is_one():
    kind = oscillator()
    links = [replace(link(kind, at, "0.01", "0.01", "0.2"), weakens=True) for at in (-1, 1)]
    network = network_of(kind, links)
    gains = no_gains(network)
    claim = unit_stand_in(section_units(network, 3, 0), gains, 0.01, slack=3e-3)
    run = simulate(network, gains, claim, units=3, seconds=3)
    assert run.violations == 0
    assert run.worst.G_ratio > 0.9
    kinds = {r.name.split(",")[0].split(" against")[0] for r in run.runs}
    assert {"weakening", "late links", "any links"} <= kinds


def test_a_section_begins_at_its_edge():
    """A lead unit that hears nobody stands first; a constant disturbance: x_0 = 1, x_i = 1 + .5 x_{i-1}."""
    tank, lead = scalar_kind(1), scalar_kind(1, "lead")
    edge = Edge("first", (EdgeUnit("front", "lead", 0, "tank"),))
    network = Network(
        "Invented line",
        (tank, lead),
        (link(tank, -1, "0.5"),),
        description="edge pattern",
        edges=(edge,),
        cell=("tank",),
    )
    gains = no_gains(network)
    claim = unit_stand_in(section_units(network, 5, 0), gains, 0.2)
    run = simulate(network, gains, claim, units=5, seconds=20, scenarios=["step", "adversary"])
    assert run.violations == 0
    assert run.run("step").states["lead"].shape[1:] == (1, 1)
    assert run.run("step").states["lead"][-1, 0, 0] == pytest.approx(1, abs=1e-6)
    assert run.run("step").states["tank"][-1, :, 0] == pytest.approx([1.5, 1.75, 1.875, 1.9375], abs=1e-5)
    both = replace(network, edges=(edge, Edge("last", ())))
    assert simulate(both, gains, None, units=6, seconds=5, scenarios=["step"]).units == 6


@pytest.mark.parametrize("dimension", [2, 3])
def test_fields_are_blocks_with_open_ends(dimension):
    """Links from every neighbour: the steady state of the block solves the graph's equations."""
    tank = scalar_kind(1)
    steps = [tuple(s if k == axis else 0 for k in range(dimension)) for axis in range(dimension) for s in (-1, 1)]
    network = replace(network_of(tank, [replace(link(tank, 0, "0.1"), at=at) for at in steps]), dimension=dimension)
    gains = no_gains(network)
    side = 3 if dimension == 2 else 2
    run = simulate(network, gains, None, units=side**dimension, seconds=60, scenarios=["step"])
    line = np.eye(side, k=1) + np.eye(side, k=-1)
    neighbours = sum(
        np.kron(np.kron(np.eye(side**axis), line), np.eye(side ** (dimension - axis - 1))) for axis in range(dimension)
    )
    expected = np.linalg.solve(np.eye(side**dimension) - 0.1 * neighbours, np.ones(side**dimension))
    assert run.run("step").states["tank"][-1, :, 0] == pytest.approx(expected, abs=1e-6)


def test_actuators_stop_at_their_limits_unit_by_unit():
    """Members of a ring of haulers whose demand is limited: saturation is seen, and the pattern's claim holds."""
    network = convoy()
    links = tuple(replace(one, at=()) for one in network.links)
    ring = members_of(network.kinds, [0] * 3, links, [(i, (i - 1) % 3, 0) for i in range(3)])
    run = simulate(ring, convoy_gains(("-60", "-5", "-1.5")), None, seconds=6, scenarios=["step"])
    free = simulate(ring, convoy_gains(("-60", "-5", "-1.5")), None, seconds=6, scenarios=["step"], saturate=False)
    assert run.checked is False
    assert not np.array_equal(run.run("step").states["hauler"], free.run("step").states["hauler"])


def test_what_cannot_be_simulated_is_named():
    network = random_members()
    with pytest.raises(InputError, match="no gains for"):
        simulate(network, Gains(()), None)
    with pytest.raises(InputError, match="needs a network"):
        simulate("network", Gains(()), None)
    base, gains = tanks()
    field = replace(base, dimension=2, links=(replace(base.links[0], at=(-1, 0)),))
    with pytest.raises(InputError, match="units cannot be simulated"):
        simulate(field, gains, None, units=60_000)


def test_units_with_different_numbers_share_their_rows():
    """Parameters that differ make kinds of their own with the same signals: one form, one table of samples."""
    kinds = tuple(replace(scalar_kind(a, f"tank_{a}"), group="tank") for a in (1, 2, 4))
    links = tuple(Link("pipe", "tank_1", "level", (), k.name, "inflow", Fraction(1, 4)) for k in kinds[1:])
    network = members_of(kinds, [0, 1, 2], links, [(1, 0, 0), (2, 0, 1)])
    network = replace(network, members=replace(network.members, origins=(("tank", {}),) * 3))
    gains = Gains(tuple(gain_set(k, M([[0]])) for k in kinds))
    run = simulate(network, gains, None, seconds=20, scenarios=["step"]).run("step")
    assert run.states["tank"][-1, :, 0] == pytest.approx([1, 1.25 / 2, 1.25 / 4], abs=1e-6)

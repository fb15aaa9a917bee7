"""Counterexamples about which units there are and which links may change: each must stay caught (data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from scipy.linalg import expm

from synth.base.exact import ExactMatrix
from synth.gain import network_radius
from synth.network.gains import Gains, gain_set
from synth.network.layout import Edge, EdgeUnit, Members
from synth.network.model import Kind, Link, Network, Signal
from tests.build import scalar_kind

M = ExactMatrix.of


def resting(*kinds: Kind) -> Gains:
    """No feedback: what the trap is about is the open network."""
    return Gains(tuple(gain_set(kind, ExactMatrix.zeros(len(kind.inputs), len(kind.sensors))) for kind in kinds))


def swing() -> Kind:
    """x'' + .1 x' + x = inflow, offering x."""
    base = scalar_kind(1, "swing")
    return replace(
        base,
        states=(Signal("x", "m"), Signal("v", "m/s")),
        A=M([[0, 1], [-1, "-0.1"]]),
        B=M([[0], [1]]),
        D=M([[0], [1]]),
        E=M([[0], [1]]),
        C=M([[1, 0]]),
        H=M([[1, 0]]),
    )


def test_trap_5_a_link_that_switches_is_not_the_worse_of_two_frozen_ones() -> None:
    """a: x'' + .1x' + x = .5 m(t) (z_b - x), m in {0, 1}; b: y' = -y + .05 z_a. Frozen, the radii are 0 (m = 0) and .51
    (m = 1, folded); a switch that follows the motion makes it grow 34-fold. The row of a link that weakens says 5.2."""
    a, b = swing(), scalar_kind(1, "b")
    half = Fraction(1, 2)
    weak = Link("tie", "b", "level", (0,), "swing", "inflow", half, half, weakens=True)
    back = Link("back", "swing", "level", (0,), "b", "inflow", Fraction(1, 20))
    network = Network("Invented pair", (a, b), (weak, back))
    gains = resting(a, b)
    off = replace(network, links=(replace(weak, strength=Fraction(0), own_strength=Fraction(0), weakens=False), back))
    on = replace(network, links=(replace(weak, weakens=False), back))
    assert network_radius(off, gains).upper == 0
    assert network_radius(on, gains).upper == pytest.approx(0.51, abs=5e-3)
    found = network_radius(network, gains)
    assert found.lower > 1 and found.upper == pytest.approx(5.2, abs=0.05)
    # The growth is real (in 200 s): stiff while the swing returns, soft while it moves out.
    step = 0.01
    flows = [expm(step * np.array([[0, 1, 0], [-1 - m, -0.1, m], [0.05, 0, -1]])) for m in (0.0, 0.5)]
    x = np.array([1.0, 0.0, 0.0])
    for _ in range(20_000):
        x = flows[int(x[0] * x[1] < 0)] @ x
    assert np.hypot(x[0], x[1]) > 30  # 33.5; the phase at which it is read matters


def line_of(strengths: dict[int, str], *edges: Edge, kinds: tuple[Kind, ...] = ()) -> Network:
    links = tuple(Link("tie", "tank", "level", (at,), "tank", "inflow", Fraction(g)) for at, g in strengths.items())
    return Network(
        "Invented line", (scalar_kind(1), *kinds), links, description="edge pattern", edges=edges, cell=("tank",)
    )


def test_trap_7_sections_of_a_half_line_are_not_enough() -> None:
    """Forward .9 and back .2 on a half line: every section stays below .8485, and the radius is 1.1."""
    network = line_of({-1: "0.9", 1: "0.2"}, Edge("first", ()))
    found = network_radius(network, resting(*network.kinds))
    assert found.reached and found.leading.upper >= 1.1
    assert found.lower == pytest.approx(1.1, rel=2e-6) and found.upper == pytest.approx(1.1, rel=2e-6)
    section = found.pieces[1].assembly.upper
    assert section.radius().upper < 2 * np.sqrt(0.18) + 1e-5 < 0.86
    # The point serves the whole line: bounded, away from zero, constant behind the window.
    point = found.pieces[1].point
    assert np.all(point > 0) and np.all(point[found.pieces[1].window :] == found.pieces[0].point[0])


def test_trap_14_a_finite_string_says_nothing_about_longer_ones() -> None:
    """Five units of a one-way string with gain 2 have radius 0, and say so about themselves only; as a pattern with two
    ends the radius for all lengths is 2."""
    tank = scalar_kind(1)
    link = Link("tie", "tank", "level", (), "tank", "inflow", Fraction(2))
    arrays = ([0] * 5, [1, 2, 3, 4], [0, 1, 2, 3], [0] * 4)
    members = Members(tuple("abcde"), *(np.array(a, dtype=np.int32) for a in arrays), ((0,),), (("tank", {}),))
    five = Network("Invented", (tank,), (link,), dimension=0, description="members", members=members)
    found = network_radius(five, resting(tank))
    assert found.upper == 0 and found.size == 5
    assert found.covers == "these 5 units with their links, and no larger network"
    ends = (Edge("first", (EdgeUnit("head", "lead", 0, "tank"),)), Edge("last", ()))
    every = network_radius(
        line_of({-1: "2"}, *ends, kinds=(scalar_kind(1, "lead"),)), resting(tank, scalar_kind(1, "lead"))
    )
    assert every.lower == pytest.approx(2, rel=2e-6) and every.upper == pytest.approx(2, rel=2e-6)
    assert every.covers.startswith("every line of 2 or more cells") and every.size is None
    lines = [piece for piece in every.pieces if piece.name.startswith("line of")]
    assert lines and all(piece.assembly.radius().upper == 0 for piece in lines)  # each alone would claim zero

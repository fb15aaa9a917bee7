"""Obstructions in two and three dimensions, and the cases that every reader of theory (26) should know by heart."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from synth.network import Network, obstruction, read
from synth.network.model import Link
from synth.network.obstructions import examine
from synth.network.phases import findings, worst_at
from synth.network.symbol import symbol_of
from tests.build import scalar_kind


def field(dimension: int, sensors: Any, links: list[tuple[str, Any, list[int], Any]], states: Any = None) -> Network:
    """Units x' = v, v' = push + pull on a lattice; ``links`` are (take, at, strength) of the relative kind."""
    kind = {
        "states": states or {"x": "m", "v": "m/s"},
        "inputs": {"push": "m/s^2"},
        "takes": {"pull": "m/s^2", "gap": "m", "closing": "m/s"},
        "offers": {"place": "x", "pace": "v"},
        "sensors": sensors,
        "equations": {"x'": "v", "v'": "push + pull"},
    }
    written = [
        {"name": take, "from": f"unit.{offer}", "at": at, "to": f"unit.{take}", "strength": g, "relative": True}
        for take, offer, at, g in links
    ]
    pattern = {"dimension": dimension, "links": written}
    return read({"synth": 1, "kinds": {"unit": kind}, "network": {"pattern": pattern}})


def around(dimension: int, take: str, offer: str, g: Any) -> list[tuple[str, Any, list[int], Any]]:
    steps = [[s * (i == j) for j in range(dimension)] for i in range(dimension) for s in (-1, 1)]
    return [(take, offer, at, g) for at in steps]


@pytest.mark.parametrize("dimension", [1, 2, 3])
@pytest.mark.parametrize(
    ("sensors", "refused"),
    [(["gap"], True), (["gap", "v"], True), (["gap", "closing"], True), (["gap", "x"], False), (["x"], False)],
)
def test_gap_only_gap_and_own_speed_gap_and_relative_speed(dimension: int, sensors: list[str], refused: bool) -> None:
    """Gaps alone, with the own speed, with relative speed: refused in every dimension; with an own position: not."""
    links = [
        *around(dimension, "pull", "place", "1 1/s^2"),
        *around(dimension, "gap", "place", 1),
        *around(dimension, "closing", "pace", 1),
    ]
    found = obstruction(field(dimension, sensors, links))
    assert (found is not None) == refused
    if found is not None:
        assert found.theta == (0.0,) * dimension and found.s == 0 and found.cause == "not seen"
        assert dict(found.direction) == {"unit.x": 1}
        assert "leader at the edge does not help" in found.advice
        assert ("along the line" in found.advice) == (dimension == 1)


def test_areas_with_angle_differences_on_a_grid() -> None:
    """Areas that are tied by synchronising power and hear only differences of angle and their own frequency."""
    area = {
        "parameters": {"inertia": "10 s", "base": "1 1/s"},
        "states": {"angle": "rad", "rate": "rad/s"},
        "inputs": {"power": "1"},
        "takes": {"tie": "1", "seen": "rad"},
        "offers": {"phase": "angle"},
        "sensors": ["seen", "rate"],
        "equations": {"angle'": "rate", "rate'": "base*(power + tie)/inertia - base*rate/inertia/base*base"},
    }
    area["equations"] = {"angle'": "rate", "rate'": "(base*(power + tie) - rate)/inertia"}
    ties = [
        {"name": name, "from": "area.phase", "at": at, "to": f"area.{take}", "strength": g, "relative": True}
        for name, take, g in (("tie", "tie", 0.5), ("view", "seen", 1))
        for at in ([0, -1], [0, 1], [-1, 0], [1, 0])
    ]
    problem = {"synth": 1, "kinds": {"area": area}, "network": {"pattern": {"dimension": 2, "links": ties}}}
    found = obstruction(read(problem))
    assert found is not None and found.theta == (0.0, 0.0) and dict(found.direction) == {"area.angle": 1}
    area["sensors"] = ["angle"]
    assert obstruction(read(problem)) is None


def scalar(dimension: int, links: dict[tuple[int, ...], Fraction], own: Fraction = Fraction(0)) -> Network:
    """x' = u with a sensor that reads own*x + sum g x_at."""
    kind = scalar_kind(0)
    kind = replace(kind, C=kind.C.scaled(own), N=kind.D, D=kind.D.scaled(0))
    written = tuple(Link("l", "tank", "level", at, "tank", "inflow", g) for at, g in links.items())
    return Network("t", (kind,), written, dimension=dimension)


@pytest.mark.parametrize("wave", [w for d in (2, 3) for w in itertools.product((1, -1), repeat=d)])
def test_every_corner_is_exact(wave: tuple[int, ...]) -> None:
    """A sensor that is blind at exactly one corner: the product over dimensions of (1 + w_i e^{i theta_i})."""
    dimension = len(wave)
    links = {}
    for at in itertools.product((0, 1), repeat=dimension):
        links[at] = Fraction(math.prod(w if step else 1 for w, step in zip(wave, at, strict=True)))
    # This product is 2^d at its corner and 0 where any dimension differs, so subtract 2^d to be blind there only.
    found = obstruction(scalar(dimension, links, Fraction(-(2**dimension))))
    assert found is not None and found.theta == tuple(0.0 if w == 1 else math.pi for w in wave)
    assert found.s == 0
    if any(w == -1 for w in wave):
        assert "opposite directions along dimension" in found.advice


def test_blind_between_the_grid_points() -> None:
    """cos(t1) + cos(t2) = 2 cos(1)... only at |t1| = |t2| = 1 with t1 = t2: an isolated point that is no grid point."""
    a = Fraction(math.cos(1.0))
    # reads (e^{i t1} + e^{-i t1} - 2 cos 1) + i-free second part through another unit state: use two sensors
    kind = scalar_kind(0)
    kind = replace(
        kind,
        takes=(kind.takes[0], replace(kind.takes[0], name="other")),
        sensors=(kind.sensors[0], replace(kind.sensors[0], name="second")),
        D=kind.D.zeros(1, 2),
        C=kind.C.of([[-2 * a], [-2 * a]]),
        N=kind.N.identity(2),
        F=kind.F.zeros(1, 2),
    )
    links = [Link("l", "tank", "level", at, "tank", "inflow", Fraction(1)) for at in ((-1, 0), (1, 0))]
    links += [Link("l", "tank", "level", at, "tank", "other", Fraction(1)) for at in ((0, -1), (0, 1))]
    found = obstruction(Network("t", (kind,), tuple(links), dimension=2))
    assert found is not None and [abs(t) for t in found.theta] == pytest.approx([1, 1], abs=1e-6)
    assert "a wave that repeats about every 6.28 cells along dimension 1" in found.advice


@pytest.mark.parametrize("dimension", [2, 3])
def test_the_symbol_has_the_modes_of_the_torus(dimension: int) -> None:
    """Law of the symbol against a torus of three cells in every dimension, written out unit by unit."""
    links = around(dimension, "pull", "place", "1 1/s^2")
    links.append(("pull", "pace", [1] * dimension, "0.3 1/s"))
    network = field(dimension, ["x"], links)
    n, cells = 2, 3
    places = list(itertools.product(range(cells), repeat=dimension))
    whole = np.kron(np.eye(len(places)), np.array([[0.0, 1], [0, 0]]))
    for link in network.links:
        state = 0 if link.offer == "place" else 1
        for i, place in enumerate(places):
            j = places.index(tuple((a + b) % cells for a, b in zip(place, link.at, strict=True)))
            whole[n * i + 1, n * j + state] += float(link.strength)
            whole[n * i + 1, n * i + state] -= float(link.own_strength)
    symbol = symbol_of(network)
    blocks = [symbol.floating(tuple(2 * math.pi * k / cells for k in place)) for place in places]
    modes = np.concatenate([np.linalg.eigvals(b[0]) for b in blocks if b is not None])
    literal = np.linalg.eigvals(whole)
    distances = np.abs(modes[:, None] - literal[None, :])
    assert distances.min(axis=0).max() < 1e-6 and distances.min(axis=1).max() < 1e-6
    assert np.sum(modes**2) == pytest.approx(np.trace(whole @ whole))


def test_exact_and_floating_agree_at_the_corners() -> None:
    network = field(2, ["gap", "x"], [*around(2, "pull", "place", "1 1/s^2"), ("gap", "place", [1, -1], 1)])
    symbol = symbol_of(network)
    for wave in itertools.product((1, -1), repeat=2):
        exact = symbol.exact(wave)
        floating = symbol.floating(tuple(0.0 if w == 1 else math.pi for w in wave))
        assert exact is not None and floating is not None
        for one, other in zip(exact, floating, strict=True):
            np.testing.assert_allclose(np.array([[float(v) for v in r] for r in one]), other, atol=1e-12)
    least = worst_at(symbol, (0.3, -0.2), [0, 1])
    assert least is not None and least[0] > 1e-3
    assert next(findings(symbol, 2), None) is None


def test_weakening_links_are_tested_at_full_strength_and_tolerances_at_nominal() -> None:
    kind = scalar_kind(0)
    kind = replace(kind, C=kind.C.zeros(1, 1), N=kind.D)
    view = Link("view", "tank", "level", (-1,), "tank", "inflow", Fraction(1), Fraction(1), weakens=True)
    found = obstruction(Network("t", (kind,), (view,)))
    assert found is not None and found.theta == (0.0,)
    own = Link("tolerance of x", "tank", "level", (0,), "tank", "inflow", Fraction(1), sort="tolerance")
    found = obstruction(Network("t", (kind,), (view, own)))
    assert found is not None, "a tolerance is not a sensor"


def test_a_late_difference_is_as_blind_as_a_fresh_one() -> None:
    kind = scalar_kind(0)
    kind = replace(kind, C=kind.C.zeros(1, 1), N=kind.D)
    links = (
        Link("view", "tank", "level", (-1,), "tank", "inflow", Fraction(1), delay=Fraction(1)),
        Link("view", "tank", "level", (0,), "tank", "inflow", Fraction(-1), delay=Fraction(1), own_part=True),
    )
    found = obstruction(Network("t", (kind,), links))
    assert found is not None and found.theta == (0.0,) and found.s == 0


def test_it_is_said_what_was_tested() -> None:
    tested = examine(Network("t", (scalar_kind(0),), ())).tested
    assert "0 and pi exactly" in tested and "grid" in tested


def test_feed_through_from_commands_reaches_across_a_link() -> None:
    """Unit a has no own effect of its actuator, but its command is offered and drives b: reached through the link."""
    a, b = scalar_kind(1, "a"), scalar_kind(0, "b")
    a = replace(a, B=a.B.zeros(1, 1), H=a.H.zeros(1, 1), Fu=a.B)
    deaf = replace(b, B=b.B.zeros(1, 1))
    link = Link("l", "a", "level", (0,), "b", "inflow", Fraction(1))
    told = replace(a, N=a.D)
    back = Link("m", "b", "level", (0,), "a", "inflow", Fraction(1))
    assert obstruction(Network("t", (told, deaf), (link, back))) is None
    found = obstruction(Network("t", (replace(told, Fu=None), deaf), (link, back)))
    assert found is not None and found.cause == "not reached"

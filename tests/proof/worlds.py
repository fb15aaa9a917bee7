"""One small network per description for the tests of proofs (all data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np

from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.layout import Edge, EdgeLink, EdgeUnit, Members, Rule
from synth.network.model import Actuator, Disturbance, Kind, Link, Network, Signal
from tests.build import M, scalar_kind


def basin(name: str = "basin", rate: str = "1") -> Kind:
    """Two states, one limited actuator, bands, one take and one offer of the same name as a tank's."""
    return Kind(
        name,
        (Signal("depth", "m", Fraction(9)), Signal("flow", "m/s")),
        (Actuator("gate", "m/s", Fraction(20)),),
        (Disturbance("leak", "m/s", Fraction("0.1")),),
        (Signal("inflow", "m/s"),),
        (Signal("level", "m"),),
        (Signal("depth", "m"), Signal("flow", "m/s")),
        M([[-Fraction(rate), "0.5"], ["-0.5", "-1.5"]]),
        M([[1], [0]]),
        M([["1"], ["0.3"]]),
        M([[1], [0]]),
        ExactMatrix.identity(2),
        ExactMatrix.zeros(2, 1),
        M([[1, "0.2"]]),
        ExactMatrix.zeros(1, 1),
        ExactMatrix.zeros(1, 1),
    )


def small_gains(network: Network) -> Gains:
    """u = -x1/4 for every kind."""
    return Gains(
        tuple(
            gain_set(k, M([["-0.25", *["0"] * (len(k.sensors) - 1)]] * len(k.inputs)) if k.inputs else M([]))
            for k in network.kinds
        )
    )


def tie(source: str, to: str, at: tuple[int, ...], strength: str, own: str = "0", **more: object) -> Link:
    """A link from one kind's level into another's inflow."""
    return Link("tie", source, "level", at, to, "inflow", Fraction(strength), Fraction(own), **more)  # type: ignore[arg-type]


def field(strength: str = "0.2") -> Network:
    """A plane of tanks and basins whose links may weaken, one of them late."""
    links = (
        tie("tank", "basin", (0, -1), strength, strength, weakens=True, delay=Fraction(1, 5)),
        tie("basin", "tank", (1, 0), strength, "0.1", weakens=True),
        tie("tank", "tank", (0, 1), "0.1"),
    )
    return Network("Invented field", (scalar_kind(1), basin()), links, dimension=2)


def rules(strength: str = "0.3", most: int = 2, relative: bool = True) -> Network:
    """Tanks that hear at most two of tanks and basins; basins that hear at most one tank."""
    g = Fraction(strength)
    own = g if relative else Fraction(0)
    links = (
        replace(tie("tank", "tank", (), strength), name="near", own_strength=own, weakens=relative, choice="near"),
        replace(tie("basin", "tank", (), strength), name="near", choice="near", delay=Fraction(1, 5)),
        replace(tie("tank", "basin", (), "0.2"), name="far", choice="far"),
    )
    allowed = (Rule("near", "tank", "inflow", most), Rule("far", "basin", "inflow", 1))
    return Network("Invented rules", (scalar_kind(1), basin()), links, dimension=0, description="rules", rules=allowed)


def members(units: int = 5, strength: str = "0.3", ring: bool = False) -> Network:
    """A string (or ring) of tanks and basins in turn, with relative links that are late, and one that may weaken."""
    kinds = (scalar_kind(1), basin())
    kind = [i % 2 for i in range(units)]
    names = [k.name for k in kinds]
    links: list[Link] = []
    to, source, form = [], [], []
    for i in range(0 if ring else 1, units):
        j = (i - 1) % units
        links.append(
            tie(names[kind[j]], names[kind[i]], (), strength, strength if i % 3 else "0", delay=Fraction(1, 5))
        )
        if i == units - 1:
            links[-1] = replace(links[-1], weakens=True, own_strength=Fraction(strength))
        to.append(i)
        source.append(j)
        form.append(len(links) - 1)
    arrays = (np.array(a, dtype=np.int32) for a in (kind, to, source, form))
    parts = tuple((i,) for i in range(len(links)))
    listed = Members(tuple(f"u{i}" for i in range(units)), *arrays, parts, tuple((k.name, {}) for k in kinds))
    return Network("Invented members", kinds, tuple(links), dimension=0, description="members", members=listed)


def line(sides: tuple[str, ...] = ("first",), forward: str = "0.4", back: str = "0.1") -> Network:
    """Tanks on a line with a basin at each edge, which also speaks to the tank two places further in."""
    edges = []
    for side in sides:
        step = 1 if side == "first" else -1
        unit = EdgeUnit(f"{side} basin", "basin", 0, "tank")
        radio = replace(tie("basin", "tank", (-2 * step,), "0.1"), name="radio", delay=Fraction(1, 5))
        edges.append(Edge(side, (unit,), (EdgeLink(radio, 2 * step, "tank", "tank"),)))
    late = tie("tank", "tank", (-1,), forward, delay=Fraction(1, 5))
    links = (
        late,
        replace(late, at=(0,), strength=Fraction("-0.05"), own_part=True),
        tie("tank", "tank", (1,), back, back, weakens=True),
    )
    return Network(
        "Invented line", (scalar_kind(1), basin()), links, description="edge pattern", edges=tuple(edges),
        cell=("tank",),
    )  # fmt: skip


WORLDS = {
    "field": field,
    "rules": rules,
    "members": members,
    "half line": line,
    "two edges": lambda: line(("first", "last")),
}

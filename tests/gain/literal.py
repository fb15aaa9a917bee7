"""Small random networks of every description, and the gain operator as its definition reads: loop by loop over units.

A peak gain is here any positive number that depends on nothing but the kind and what is folded into the unit, so the
structure is tested without closing a single loop.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Mapping
from dataclasses import replace
from fractions import Fraction

import numpy as np

from synth.base.exact import ExactMatrix
from synth.gain.plan import Plan
from synth.network.layout import Edge, EdgeLink, EdgeUnit, Members, Rule
from synth.network.model import Kind, Link, Network
from tests.build import scalar_kind

Own = Mapping[tuple[int, int], Fraction]
Peak = Callable[[str, Own, int, int], float]
Sizes = Mapping[tuple[str, str], float]  # (unit, offer) -> size


def kind_of(name: str, takes: int = 1, offers: int = 1) -> Kind:
    """x_m' = -x_m + u + the sum of all takes, offered as they are: only the names matter here."""
    n, base = offers, scalar_kind(1, name)
    ones = ExactMatrix.of([[1] * takes] * n)
    return replace(
        base,
        states=tuple(replace(base.states[0], name=f"x{m}") for m in range(n)),
        takes=tuple(replace(base.takes[0], name=f"in{m}") for m in range(takes)),
        offers=tuple(replace(base.offers[0], name=f"out{m}") for m in range(n)),
        A=ExactMatrix.identity(n).scaled(-1),
        B=ExactMatrix.of([[1]] * n),
        D=ones,
        E=ExactMatrix.of([[1]] * n),
        C=ExactMatrix.of([[1] + [0] * (n - 1)]),
        N=ExactMatrix.zeros(1, takes),
        H=ExactMatrix.identity(n),
        F=ExactMatrix.zeros(n, takes),
        Fw=ExactMatrix.zeros(n, 1),
    )


def peak_number(kind: str, own: Own, offer: int, take: int) -> float:
    """A number between 0 and 1 that depends on everything a peak gain may depend on."""
    folded = tuple(sorted((key, str(value)) for key, value in own.items() if value))
    return random.Random(f"{kind} {folded} {offer} {take}").uniform(0.1, 1)


def peaks_of(plan: Plan) -> np.ndarray:
    """``peak_number`` for every specification of a plan, in the order the plan wants."""
    found = []
    for spec in plan.specs:
        kind, own = plan.kinds[spec.kind], {(take, offer): g for take, offer, g in spec.own}
        for k in range(len(kind.offers)):
            found += [peak_number(kind.name, own, k, take) for take in range(len(kind.takes))]
    return np.array(found)


def some_links(
    chance: random.Random, source: Kind, to: Kind, at: tuple[int, ...], itself: bool = False, name: str = "tie"
) -> tuple[Link, ...]:
    """A link of a random case: absolute, R1, R2, R3, or an interval of strengths (R1 with its width as a self-link)."""
    case = chance.choice(("absolute", "R1", "R2", "R3", "interval"))
    offer, take = chance.choice(source.offers).name, chance.choice(to.takes).name
    g = Fraction(chance.randint(1, 9), 10) * chance.choice((1, -1))
    link = Link(name, source.name, offer, at, to.name, take, g, delay=Fraction(chance.randint(0, 3), 4))
    if case == "absolute" or itself or offer not in [signal.name for signal in to.offers]:
        return (link,)
    mine = replace(link, source_kind=to.name, at=(0,) * len(at), own_part=True)
    if case == "R3":
        return link, replace(mine, strength=-g)
    if case == "interval":
        return replace(link, own_strength=g * Fraction(3, 4)), replace(mine, strength=-g / 4, delay=Fraction(0))
    ratio = Fraction(1) if case == "R1" else Fraction(chance.randint(1, 3), 2)
    return (replace(link, own_strength=g * ratio, weakens=case == "R2"),)


def some_kinds(chance: random.Random, count: int) -> tuple[Kind, ...]:
    return tuple(kind_of(f"k{n}", chance.randint(1, 2), chance.randint(1, 2)) for n in range(count))


def some_pattern(chance: random.Random, dimension: int = 1) -> Network:
    kinds = some_kinds(chance, chance.randint(1, 2))
    links: tuple[Link, ...] = ()
    for _ in range(chance.randint(1, 4)):
        source, to = chance.choice(kinds), chance.choice(kinds)
        at = tuple(chance.randint(-2, 2) for _ in range(dimension))
        links += some_links(chance, source, to, at, source == to and not any(at))
    return Network("Invented pattern", kinds, links, dimension=dimension)


def some_members(chance: random.Random, units: int) -> Network:
    kinds = some_kinds(chance, 2)
    kind = [chance.randrange(2) for _ in range(units)]
    links: tuple[Link, ...] = ()
    parts, to, source = [], [], []
    for _ in range(3 * units):
        i, j = chance.randrange(units), chance.choice([-1, *range(units)])
        group = some_links(chance, kinds[kind[j] if j >= 0 else 0], kinds[kind[i]], (), i == j)
        parts.append(tuple(range(len(links), len(links) + len(group))))
        links += group
        to.append(i)
        source.append(j)
    arrays = [np.array(a, dtype=np.int32) for a in (kind, to, source, range(len(parts)))]
    members = Members(tuple(f"u{i}" for i in range(units)), *arrays, tuple(parts), ((kinds[0].name, {}),) * 2)
    return Network("Invented members", kinds, links, dimension=0, description="members", members=members)


def some_edges(chance: random.Random, sides: tuple[str, ...]) -> Network:
    """A pattern with edges: one special unit and one single link at each of the ``sides``."""
    network = some_pattern(chance)
    special = kind_of("lead", 1, 2)
    edges = []
    for side in sides:
        step = 1 if side == "first" else -1
        slot = chance.choice(network.kinds)
        unit = EdgeUnit(f"{side} lead", "lead", step * chance.randint(0, 1), slot.name)
        target = chance.choice(network.kinds)
        place = step * chance.randint(2, 3)
        at = unit.at - place
        extra = Link("radio", "lead", "out1", (at,), target.name, "in0", Fraction(chance.randint(1, 9), 10))
        edges.append(Edge(side, (unit,), (EdgeLink(extra, place, target.name, slot.name),)))
    cell = tuple(kind.name for kind in network.kinds)
    return replace(network, kinds=(*network.kinds, special), description="edge pattern", edges=tuple(edges), cell=cell)


class Literal:
    """Units and arrivals written out one by one; ``row`` is the definition of one row of the operator.

    ``units``: name -> kind; ``arrivals``: (receiving unit, sending unit or None beyond a cut, parts of one link).
    """

    def __init__(self, network: Network) -> None:
        self.kinds = {kind.name: kind for kind in network.kinds}
        self.units: dict[str, str] = {}
        self.arrivals: list[tuple[str, str | None, tuple[Link, ...]]] = []

    def own(self, unit: str) -> dict[tuple[int, int], Fraction]:
        kind, total = self.kinds[self.units[unit]], {}
        for to, _, parts in self.arrivals:
            for link in parts:
                if to == unit and link.own_strength:
                    key = (kind.index("takes", link.take), kind.index("offers", link.offer))
                    total[key] = total.get(key, Fraction(0)) + link.own_strength
        return total

    def row(self, unit: str, offer: str, s: Sizes, alpha: float = 0.0, peak: Peak = peak_number) -> float:
        kind, own = self.kinds[self.units[unit]], self.own(unit)
        k = kind.index("offers", offer)
        total, choices = 0.0, {}
        for to, source, parts in self.arrivals:
            if to != unit:
                continue
            for n, link in enumerate(parts):
                p = peak(kind.name, own, k, kind.index("takes", link.take))
                sender = unit if n else source
                heard = 0.0 if sender is None else s[sender, link.offer]
                term = p * abs(float(link.strength)) * math.exp(alpha * float(link.delay)) * heard
                if link.weakens:
                    term = max(term, p * abs(float(link.own_strength)) * s[unit, link.offer])
                if link.choice:
                    choices[link.choice] = max(term, choices.get(link.choice, 0.0))
                else:
                    total += term
        return total + sum(choices.values())

    def sizes(self, chance: random.Random) -> dict[tuple[str, str], float]:
        """A random positive number per outlet."""
        return {
            (unit, signal.name): chance.uniform(0.1, 2)
            for unit, kind in self.units.items()
            for signal in self.kinds[kind].offers
        }


def literal_members(network: Network) -> Literal:
    found, members = Literal(network), network.members
    assert members is not None
    found.units = {name: network.kinds[k].name for name, k in zip(members.names, members.kind.tolist(), strict=True)}
    for to, source, form in zip(members.to.tolist(), members.source.tolist(), members.form.tolist(), strict=True):
        parts = tuple(network.links[i] for i in members.parts[form])
        found.arrivals.append((members.names[to], None if source < 0 else members.names[source], parts))
    return found


def literal_rules(network: Network) -> Literal:
    """One unit per kind that hears the worst of its kinds: every link on its own, alternatives by their choice."""
    found = Literal(network)
    found.units = {kind.name: kind.name for kind in network.kinds}
    found.arrivals = [(link.kind, link.source_kind, (link,)) for link in network.links]
    return found


def literal_line(network: Network, cells: int, ring: bool = False) -> Literal:
    """A ring of a pattern, or a finite line with the edges the network has: all of it, nothing cut off."""
    found, kinds = Literal(network), network.cell_kinds
    standing = {(c, kind.name): (f"{kind.name} {c}", kind.name) for c in range(cells) for kind in kinds}
    for edge in network.edges:
        shift = 0 if edge.side == "first" else cells - 1
        for unit in edge.units:
            standing[unit.at + shift, unit.instead_of] = (f"{unit.name}", unit.kind)
    found.units = dict(standing.values())
    groups: list[list[Link]] = []
    for link in network.links:
        if link.own_part:
            groups[-1].append(link)
        else:
            groups.append([link])
    for group in groups:
        for c in range(cells):
            there = c + group[0].at[0]
            there = there % cells if ring else there
            if not 0 <= there < cells:
                continue
            (to, to_kind), (source, source_kind) = standing[c, group[0].kind], standing[there, group[0].source_kind]
            names = [[s.name for s in getattr(found.kinds[k], side)] for k, side in
                     ((to_kind, "takes"), (source_kind, "offers"), (to_kind, "offers"))]  # fmt: skip
            relative = len(group) > 1 or group[0].own_strength
            if (
                group[0].take in names[0]
                and group[0].offer in names[1]
                and (not relative or group[0].offer in names[2])
            ):
                found.arrivals.append((to, source, tuple(group)))
    for edge in network.edges:
        shift = 0 if edge.side == "first" else cells - 1
        for extra in edge.links:
            to, source = extra.to + shift, extra.to + shift + extra.link.at[0]
            ends = standing[to, extra.slot][0], standing[source, extra.source_slot][0]
            found.arrivals.append((*ends, (extra.link,)))
    return found


def some_rules(chance: random.Random, relative: bool) -> Network:
    """Two rules over two kinds; links as the reader makes them: the largest intake folded with the first source."""
    kinds = (kind_of("k0", 2, 1), kind_of("k1", 1, 1))
    links: list[Link] = []
    rules: list[Rule] = []
    for n, (to, take) in enumerate((("k0", "in0"), (chance.choice(("k0", "k1")), "in0"))):
        take = "in1" if n and to == "k0" else take
        most = chance.randint(1, 2)
        g = most * Fraction(chance.randint(1, 9), 10)
        rules.append(Rule(f"r{n}", to, take, most))
        for i, source in enumerate(chance.sample(("k0", "k1"), chance.randint(1, 2))):
            own = g if relative and not i else Fraction(0)
            links.append(
                Link(f"r{n}", source, "out0", (), to, take, g, own, weakens=bool(own), choice=f"r{n}")
            )  # fmt: skip
    return Network("Invented rules", kinds, tuple(links), dimension=0, description="rules", rules=tuple(rules))

"""Which units there are and what may arrive at them: from the model in the file alone, for every description.

Every description ends as stations. A station is a unit, or stands for many units that behave alike: a unit of every
cell of a pattern (theory (9)), every unit of a kind under rules (13), or all units behind the window of an edge (14).
What arrives at it is a list of terms |strength| e^{alpha delay} * (size of an offer of another station); of terms with
one ``group`` only the largest counts (links that may weaken, sources a rule allows). A station that stands for units
with different neighbours has a list of terms for each case, and the largest outcome counts.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from synth.proof.checking.reading import MANY, Rejected, fields, items, need, number, text, whole
from synth.proof.checking.units import Own, Plant, Unit, close, read_plant

EXTRA = {"sort": ("tolerance", "curve"), "weakens": (True,), "own_part": (True,)}  # fields that not every link has


@dataclass
class Link:
    """A link of the model, numbers and names read: what is taken += strength * what the source offers.

    ``own`` is the unit's own fresh value that is subtracted, per unit of its offer; ``raw`` is the link in the file.
    """

    name: str
    source: tuple[str, str]
    kind: str
    take: int
    gain: Fraction
    own: Fraction
    delay: Fraction
    raw: dict[str, Any] = field(repr=False)

    @property
    def itself(self) -> bool:
        """Whether it joins a unit to itself wherever it stands: an own part, a tolerance or a curve."""
        return "own_part" in self.raw or "sort" in self.raw

    @property
    def weakens(self) -> bool:
        """Whether its strength may be anything from zero to what is written (theory 1, R2)."""
        return "weakens" in self.raw


@dataclass
class Term:
    """What one link may add to what is taken: gain e^{alpha delay} times offer ``offer`` of station ``source``."""

    take: int
    source: int
    offer: int
    gain: Fraction
    delay: Fraction
    group: int = -1


@dataclass
class Station:
    """A unit, or what stands for many: its specification, the cases of what arrives, and which block it belongs to.

    The lower bound of the radius is found block by block, in each from its own stations and their first cases alone.
    """

    name: str
    spec: int
    cases: list[list[Term]]
    block: int = 0


@dataclass
class System:
    """Everything the gain operator is made of; ``units`` are the different closed units, by specification."""

    description: str
    plants: dict[str, Plant]
    links: list[Link]
    units: list[Unit] = field(default_factory=list)
    stations: list[Station] = field(default_factory=list)

    def __post_init__(self) -> None:
        """Nothing is folded yet."""
        self.known: dict[tuple[str, Own], int] = {}

    def specification(self, kind: str, own: Iterable[tuple[int, int, Fraction]]) -> int:
        """The number of the closed unit of this kind with these own parts, summed per take and offer."""
        total: dict[tuple[int, int], Fraction] = {}
        for take, offer, strength in own:
            total[take, offer] = total.get((take, offer), Fraction(0)) + strength
        folded = tuple((*key, value) for key, value in sorted(total.items()) if value)
        if (kind, folded) not in self.known:
            self.known[kind, folded] = len(self.units)
            self.units.append(close(self.plants[kind], folded))
        return self.known[kind, folded]

    def unit(self, station: Station) -> Unit:
        """The closed unit of a station."""
        return self.units[station.spec]

    def rows(self) -> list[tuple[int, int]]:
        """Every (station, offer), the rows of the peak route's operator."""
        return [(i, k) for i, station in enumerate(self.stations) for k in range(self.unit(station).offers)]

    @property
    def exact(self) -> bool:
        """Whether the operator is a small matrix, so that linear systems are solved exactly."""
        linear = all(len(s.cases) == 1 and all(t.group < 0 for t in s.cases[0]) for s in self.stations)
        return linear and len(self.stations) <= 60 and len(self.rows()) <= 60

    def used(self) -> None:
        """Rejected unless every kind stands somewhere: what is said about a kind must be about a unit."""
        missing = set(self.plants) - {self.unit(station).name for station in self.stations}
        need(not missing and bool(self.stations), f"no unit is of the kind {min(missing, default='')}")


def read_kinds(document: dict[str, Any], model: dict[str, Any]) -> dict[str, Plant]:
    """Every kind of the model with its gains, by name."""
    keys = "name states inputs disturbances takes offers sensors A B D E C N H F Fw"
    entries = items(model["kinds"], "kinds", MANY)
    kinds = [fields(kind, keys + " Fu" * ("Fu" in kind), "a kind") for kind in entries]
    names = [text(kind["name"], "the name of a kind") for kind in kinds]
    need(bool(names) and len(set(names)) == len(names), "kinds must be present and have different names")
    gains = [fields(g, "kind actuators signals K", "gains") for g in items(document["gains"], "gains", MANY)]
    need([g["kind"] for g in gains] == names, "gains must be given for every kind, in order")
    return {name: read_plant(kind, g) for name, kind, g in zip(names, kinds, gains, strict=True)}


def read_link(raw: Any, plants: dict[str, Plant], dimension: int, more: str = "") -> Link:
    """A link of the model; Rejected unless its kinds and signals are there and its parts fit together."""
    need(isinstance(raw, dict), "a link must be an object")
    extra = [key for key in EXTRA if key in raw]
    raw = fields(raw, " ".join(["name from at to strength own_strength delay", *extra, more]), "a link")
    need(all(raw[key] in EXTRA[key] for key in extra), "a link is of a sort that this version does not prove")
    name = text(raw["name"], "the name of a link")
    source, to = fields(raw["from"], "kind offer", name), fields(raw["to"], "kind take", name)
    need(source["kind"] in plants and to["kind"] in plants, f"link {name} joins a kind that is not there")
    at = items(raw["at"], f"{name}.at")
    need(len(at) == dimension and all(type(v) is int for v in at), f"link {name}: at must be {dimension} integers")
    receiver = plants[to["kind"]]
    take = receiver.place("takes", to["take"])
    known = plants[source["kind"]].place("offers", source["offer"]) is not None
    if take is None or not known:
        raise Rejected(f"link {name} names a signal that is not there")
    strength, own, delay = (number(raw[key], name) for key in ("strength", "own_strength", "delay"))
    need(delay >= 0, f"link {name}: the delay is negative")
    if own or "weakens" in raw:
        need(receiver.place("offers", source["offer"]) is not None, f"{name}: no own value for a relative link")
        need(own != 0, f"{name} weakens, so it must have an own part")
    if "sort" in raw or "own_part" in raw:
        inside = source["kind"] == to["kind"] and not any(at) and own == 0 and "weakens" not in raw
        need(inside and (delay == 0 or "sort" not in raw), f"{name} must stay inside its unit")
    return Link(name, (source["kind"], source["offer"]), to["kind"], take, abs(strength), own, delay, raw)


def own_of(plants: dict[str, Plant], link: Link) -> list[tuple[int, int, Fraction]]:
    """What a link folds into the unit it enters."""
    place = plants[link.kind].place("offers", link.source[1])
    return [(link.take, place, link.own)] if link.own and place is not None else []


def terms_of(plants: dict[str, Plant], link: Link, to: int, source: int | None, group: int) -> list[Term]:
    """What a link from station ``source`` (None: from beyond a cut, where nothing is heard) may add at ``to``."""
    offer = plants[link.source[0]].place("offers", link.source[1])
    found = []
    if source is not None and offer is not None:
        found.append(Term(link.take, source, offer, link.gain, link.delay, group))
    if link.weakens:  # m z_j - m z_i with the largest m folded: what is left is at most the larger of both parts
        found += [Term(link.take, to, k, abs(own), Fraction(0), group) for _, k, own in own_of(plants, link)]
    return found


def one_per_kind(system: System, cell: list[str]) -> None:
    """A station per kind of the cell: patterns, in any dimension (theory (9)), and rules (13)."""
    place = {name: i for i, name in enumerate(cell)}
    for name in cell:
        entering = [link for link in system.links if link.kind == name]
        terms: list[Term] = []
        choices: dict[str, int] = {}
        for n, link in enumerate(entering):
            choice = link.raw.get("choice")
            group = -1 if choice is None else choices.setdefault(choice, len(entering) + len(choices))
            group = n if group < 0 and link.weakens else group
            need(link.source[0] in place, f"link {link.name} comes from a kind that is not in the cell")
            terms += terms_of(system.plants, link, place[name], place[link.source[0]], group)
        own = [part for link in entering for part in own_of(system.plants, link)]
        system.stations.append(Station(name, system.specification(name, own), [terms]))


def read_rules(system: System, model: dict[str, Any]) -> None:
    """Rules: every link is one of the sources that a rule allows, or an own part; at most one part of each is folded.

    With m of at most n links from the sources c, what is left after folding n g_own is at most the largest of n g_c z_c
    and n g_own z_self, because the n parts are shared out among links that are there and links that are not.
    """
    names: dict[str, tuple[str, int]] = {}
    for entry in items(model["rules"], "rules"):
        rule = fields(entry, "name kind take most", "a rule")
        name, kind = text(rule["name"], "a rule"), rule["kind"]
        take = system.plants[kind].place("takes", rule["take"]) if kind in system.plants else None
        need(take is not None and name not in names, f"rule {name} names what is not there, or stands twice")
        whole(rule["most"], f"{name}.most", 1)
        names[name] = (kind, take or 0)
    need(bool(names), "rules must be present")
    folded: dict[str, list[Link]] = {name: [] for name in names}
    for link in system.links:
        if link.itself:
            continue
        rule = link.raw["choice"]
        need(rule in names and names[rule] == (link.kind, link.take), f"link {link.name} obeys no rule")
        folded[rule] += [link] if link.own else []
        need(link.weakens or not link.own, f"link {link.name}: the own part of a rule must be able to weaken")
    need(all(len(links) <= 1 for links in folded.values()), "a rule folds more than one own part")
    one_per_kind(system, list(system.plants))


def read_members(system: System, model: dict[str, Any]) -> None:
    """Explicit units: a station each; links as [sort, receiving unit, sending unit], -1 for beyond a cut."""
    members = fields(model["members"], "units kind_of links", "members")
    names = [text(name, "the name of a unit") for name in items(members["units"], "units", MANY)]
    need(len(set(names)) == len(names), "a unit stands twice")
    kinds = list(system.plants)
    kind_of = [kinds[whole(k, "kind_of", 0, len(kinds) - 1)] for k in items(members["kind_of"], "kind_of", MANY)]
    need(len(kind_of) == len(names), "every unit needs a kind")
    entering: list[list[tuple[Link, int]]] = [[] for _ in names]
    for row in items(members["links"], "the links of members", MANY):
        need(isinstance(row, list) and len(row) == 3, "a link of members must be three whole numbers")
        link = system.links[whole(row[0], "a link", 0, len(system.links) - 1)]
        to, source = whole(row[1], "a unit", 0, len(names) - 1), whole(row[2], "a unit", -1, len(names) - 1)
        right = kind_of[to] == link.kind and (source < 0 or kind_of[source] == link.source[0])
        need(right and (to == source or not link.itself), f"link {link.name} joins units of other kinds")
        entering[to].append((link, source))
    for i, (name, kind) in enumerate(zip(names, kind_of, strict=True)):
        terms: list[Term] = []
        for n, (link, source) in enumerate(entering[i]):
            there = None if source < 0 else source
            terms += terms_of(system.plants, link, i, there, n if link.weakens else -1)
        own = [part for link, _ in entering[i] for part in own_of(system.plants, link)]
        system.stations.append(Station(name, system.specification(kind, own), [terms]))

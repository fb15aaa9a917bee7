"""Patterns with edges: stations for a window at every edge, for all units behind it, and for short lines (theory (14)).

Places are counted from the edge inward. Behind a window of W cells every unit has the bulk's size; a unit there hears
the bulk, or, in the first cells behind the window, the window: these are the cases of the bulk's stations. So one point
of this finite operator is a point of the whole line: every row inside the window, every row that differs from the
pattern's and every row that hears the window is among its rows. Both windows fit into every line of W1 + W2 + 2r cells
or more, r the longest link, with r cells between them that hear at most one; every shorter line is written out whole.
Steps along the edge are forgotten, as in (9).
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from synth.proof.checking.reading import Rejected, fields, items, need, text, whole
from synth.proof.checking.units import Plant
from synth.proof.checking.wiring import Link, Station, System, Term, own_of, read_link, terms_of

MOST_STATIONS = 200_000
Spot = tuple[int, str]  # place across the edge, and the kind that the pattern has there


@dataclass
class Extra:
    """A link near an edge: at which spot it enters, from which it comes."""

    to: Spot
    source: Spot
    link: Link


@dataclass
class Edge:
    """One end of the pattern: the kinds of its own units by the spot they stand at, and its own links."""

    side: str
    units: dict[Spot, str]
    links: list[Extra]

    @property
    def cells(self) -> int:
        """How many cells, counted from the edge, hold all of the edge's own units and links."""
        spots = [*self.units, *(x.to for x in self.links), *(x.source for x in self.links)]
        return 1 + max((abs(place) for place, _ in spots), default=0)


@dataclass
class Ends:
    """A line: where it begins and ends (None: never), which other kinds stand where, and its own links by spot."""

    first: int | None
    last: int | None
    units: dict[Spot, str]
    links: dict[Spot, list[Extra]]

    def kind(self, spot: Spot) -> str | None:
        """The kind that stands at a spot; None beyond an end."""
        inside = (self.first is None or spot[0] >= self.first) and (self.last is None or spot[0] <= self.last)
        return self.units.get(spot, spot[1]) if inside else None


def read_edge(raw: Any, plants: dict[str, Plant], cell: list[str], dimension: int, axis: int) -> Edge:
    """One edge of the model; Rejected unless all of it lies inside the line."""
    keys = "side units links" + " axis" * ("axis" in raw)
    raw = fields(raw, keys, "an edge")
    need(raw["side"] in ("first", "last") and ("axis" not in raw or raw["axis"] == axis), "an edge has no known side")
    step = 1 if raw["side"] == "first" else -1
    edge = Edge(raw["side"], {}, [])
    for entry in items(raw["units"], "the units of an edge"):
        unit = fields(entry, "name kind at instead_of", "a unit of an edge")
        need(unit["kind"] in plants and unit["instead_of"] in cell, "a unit of an edge is of no known kind")
        spot = (step * whole(unit["at"] * step, "the place of a unit", 0, 10**4), unit["instead_of"])
        need(spot not in edge.units, "two units of an edge stand at one place")
        text(unit["name"], "the name of a unit")
        edge.units[spot] = unit["kind"]
    for entry in items(raw["links"], "the links of an edge"):
        link = read_link(entry, plants, dimension, "to_place slot source_slot")
        place = step * whole(link.raw["to_place"] * step, "the place of a link", 0, 10**4)
        to = (place, link.raw["slot"])
        source = to if link.itself else (place + link.raw["at"][axis], link.raw["source_slot"])
        need(to[1] in cell and source[1] in cell and "sort" not in link.raw, f"link {link.name} has no place")
        need(source[0] * step >= 0, f"link {link.name} comes from beyond the edge")
        right = edge.units.get(to, to[1]) == link.kind and edge.units.get(source, source[1]) == link.source[0]
        need(right, f"link {link.name} joins other kinds than stand there")
        edge.links.append(Extra(to, source, link))
    return edge


class Fringe:
    """A pattern with edges: its cell, its links across the edges, and the stations that stand for it."""

    def __init__(self, system: System, model: dict[str, Any]) -> None:
        """Read the edges; all are across one axis."""
        self.system, self.cell = system, cell_of(system, model)
        raw = items(model["edges"], "edges", 2)
        need(all(isinstance(edge, dict) for edge in raw), "an edge must be an object")
        self.dimension = model["dimension"]
        self.axis = whole(raw[0].get("axis", 0), "axis", 0, self.dimension - 1) if raw else 0
        need(all(edge.get("axis", 0) == self.axis for edge in raw), "edges across two axes leave corners: not proven")
        self.edges = [read_edge(edge, system.plants, self.cell, self.dimension, self.axis) for edge in raw]
        self.edges.sort(key=lambda edge: edge.side)
        sides = [edge.side for edge in self.edges]
        need(bool(sides) and len(set(sides)) == len(sides), "there must be one edge per side")
        self.groups = written(system.links)
        inside = [link for link in system.links if link.kind in self.cell or not link.itself]
        need(all({link.kind, link.source[0]} <= set(self.cell) for link in inside), "a link leaves the cell")
        self.reach = max((abs(link.raw["at"][self.axis]) for link in system.links), default=0) or 1

    def arriving(self, ends: Ends, spot: Spot) -> list[tuple[Link, Spot | None]]:
        """Every link into the unit at a spot with the spot it comes from, between the kinds that stand there."""
        kind = ends.kind(spot)
        found: list[tuple[Link, Spot | None]] = []
        for group in self.groups:
            link = group[0]
            source = (spot[0] + link.raw["at"][self.axis], link.source[0])
            sender = ends.kind(source)
            if link.kind == spot[1] and kind is not None and sender is not None:
                parts = adapted(self.system.plants, group, kind, sender)
                found += [(part, spot if n else source) for n, part in enumerate(parts)]
        found += [(link, spot) for link in self.system.links if "sort" in link.raw and link.kind == kind]
        return found + [(extra.link, extra.source) for extra in ends.links.get(spot, [])]

    def cells(self, ends: Ends, places: list[int], names: str, outside: int | None, block: int) -> None:
        """A station per unit in these cells; what they hear from elsewhere is the bulk, station ``outside`` + slot."""
        base = len(self.system.stations)
        spots = [(place, slot) for place in places for slot in self.cell]
        need(base + len(spots) <= MOST_STATIONS, "windows and lines have too many cells")
        index = {spot: base + i for i, spot in enumerate(spots)}
        for spot in spots:
            kind = ends.kind(spot)
            arriving = self.arriving(ends, spot)
            if kind is None:
                raise Rejected("a cell lies beyond its line")
            terms = self.terms(arriving, index[spot], index, outside)
            spec = self.system.specification(
                kind, [x for link, _ in arriving for x in own_of(self.system.plants, link)]
            )
            self.system.stations.append(Station(f"{names} {spot[1]} {abs(spot[0])}", spec, [terms], block))

    def terms(
        self, arriving: list[tuple[Link, Spot | None]], to: int, index: dict[Spot, int], outside: int | None
    ) -> list[Term]:
        """The terms of these links; a source that is not among the indexed spots is the bulk's."""
        terms: list[Term] = []
        for n, (link, source) in enumerate(arriving):
            need(source is not None and (source in index or outside is not None), "a link comes from nowhere")
            place = index.get(source) if source is not None else None
            if place is None and source is not None and outside is not None:
                place = outside + self.cell.index(source[1])
            terms += terms_of(self.system.plants, link, to, place, n if link.weakens else -1)
        return terms

    def ends_of(self, edge: Edge) -> Ends:
        """The half line at one edge."""
        links: dict[Spot, list[Extra]] = {}
        for extra in edge.links:
            links.setdefault(extra.to, []).append(extra)
        return Ends(0 if edge.side == "first" else None, 0 if edge.side == "last" else None, edge.units, links)

    def string(self, count: int) -> Ends:
        """A line of ``count`` cells with both edges, places counted from the first."""
        whole_line = Ends(0, count - 1, {}, {})
        for edge in self.edges:
            shift = 0 if edge.side == "first" else count - 1
            for (place, slot), kind in edge.units.items():
                whole_line.units[place + shift, slot] = kind
            for x in edge.links:
                to, source = (x.to[0] + shift, x.to[1]), (x.source[0] + shift, x.source[1])
                whole_line.links.setdefault(to, []).append(Extra(to, source, x.link))
        return whole_line

    def build(self, windows: Any) -> None:
        """All stations: the bulk, a window per edge, and every line that is too short for both windows."""
        names = [edge.side for edge in self.edges] + ["least"] * (len(self.edges) == 2)
        windows = fields(windows, " ".join(names), "windows")
        nowhere = Ends(None, None, {}, {})
        for slot in self.cell:
            arriving = self.arriving(nowhere, (0, slot))
            own = [x for link, _ in arriving for x in own_of(self.system.plants, link)]
            spec = self.system.specification(slot, own)
            terms = self.terms(arriving, self.cell.index(slot), {}, 0)
            self.system.stations.append(Station(slot, spec, [terms]))
        for number, edge in enumerate(self.edges):
            self.window(edge, whole(windows[edge.side], "a window", edge.cells + self.reach, 10**5), number + 1)
        if len(self.edges) == 2:
            shortest = sum(edge.cells for edge in self.edges)
            long = windows["first"] + windows["last"] + 2 * self.reach
            least = whole(windows["least"], "least", shortest, long)
            for count in range(least, long):
                name = f"line of {count}:"
                self.cells(self.string(count), list(range(count)), name, None, len(self.edges) + 1 + count)

    def window(self, edge: Edge, size: int, block: int) -> None:
        """The stations of one window, and the cases of the bulk's units that hear it."""
        step = 1 if edge.side == "first" else -1
        ends, base = self.ends_of(edge), len(self.system.stations)
        places = [step * depth for depth in range(size)]
        self.cells(ends, places, f"{edge.side} edge:", 0, block)
        spots = [(place, slot) for place in places for slot in self.cell]
        index = {spot: base + i for i, spot in enumerate(spots)}
        for depth in range(size, size + self.reach):
            for n, slot in enumerate(self.cell):
                arriving = self.arriving(ends, (step * depth, slot))
                own = [x for link, _ in arriving for x in own_of(self.system.plants, link)]
                need(self.system.specification(slot, own) == self.system.stations[n].spec, "a window is too short")
                if any(source in index for _, source in arriving):
                    self.system.stations[n].cases.append(self.terms(arriving, n, index, 0))


def cell_of(system: System, model: dict[str, Any]) -> list[str]:
    """The kinds of which every cell has one unit."""
    if "cell" not in model:
        return list(system.plants)
    cell = [text(name, "cell") for name in items(model["cell"], "cell")]
    need(bool(cell) and len(set(cell)) == len(cell) and set(cell) <= set(system.plants), "cell names no known kinds")
    return [name for name in system.plants if name in cell]


def written(links: list[Link]) -> list[list[Link]]:
    """The parts that belong to one written link: an own part follows its neighbour's part and goes with it."""
    groups: list[list[Link]] = []
    for link in links:
        if "own_part" in link.raw:
            before = groups[-1][0] if groups else None
            right = before is not None and (before.kind, before.take, before.name) == (link.kind, link.take, link.name)
            need(right and before is not None and before.source[1] == link.source[1], "an own part stands alone")
            groups[-1].append(link)
        elif "sort" not in link.raw:
            groups.append([link])
    return groups


def adapted(plants: dict[str, Plant], group: list[Link], receiver: str, sender: str) -> list[Link]:
    """A link of the pattern between the kinds that stand at its ends; empty where one cannot take or offer it."""
    link = group[0]
    take_name, offer_name = link.raw["to"]["take"], link.source[1]
    relative = bool(link.own) or len(group) > 1
    ends = [(receiver, link.kind, "takes", take_name), (sender, link.source[0], "offers", offer_name)]
    if relative:
        ends.append((receiver, link.kind, "offers", offer_name))
    if any(plants[kind].place(side, name) is None for kind, _, side, name in ends):
        return []
    for kind, usual, side, name in ends:
        place, other = plants[kind].place(side, name), plants[usual].place(side, name)
        if place is not None and other is not None:
            same = plants[kind].group[side][place][1] == plants[usual].group[side][other][1]
            need(same, f"{kind} counts {name} in another unit than {usual}; declare the same unit for both")
    take = plants[receiver].place("takes", take_name) or 0
    first = Link(link.name, (sender, offer_name), receiver, take, link.gain, link.own, link.delay, link.raw)
    rest = [
        Link(x.name, (receiver, offer_name), receiver, take, x.gain, Fraction(0), x.delay, x.raw) for x in group[1:]
    ]
    return [first, *rest]

"""The outermost cells at an edge, written out: as members to look at, and as a pattern along the edge to test.

Law: in both, every unit that is farther from the cut than the longest link has exactly the links it has behind the
edge; a unit near the cut keeps its own parts, so this is a cut of the operator and not a smaller network.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.units import parse_unit
from synth.network.layout import Edge, Members
from synth.network.model import Kind, Link, Network

Spot = tuple[int, str]  # place counted from the edge, and the kind that the pattern has there


def least_cells(edge: Edge) -> int:
    """How many cells, counted from the edge, hold all of the edge's own units and links."""
    places = [u.at for u in edge.units]
    places += [place for e in edge.links for place in (e.to, e.to + e.link.at[edge.axis])]
    return 1 + max(map(abs, places), default=0)


@dataclass(frozen=True)
class _Row:
    """The outermost cells: which kind stands at each spot (under which name, if it is an edge unit's)."""

    standing: Mapping[Spot, tuple[str, str | None]]

    @staticmethod
    def of(network: Network, edge: Edge, cells: int) -> _Row:
        if cells < least_cells(edge):
            raise InputError(
                f"a section of this edge needs at least {least_cells(edge)} cells, so that its own units are in it."
            )
        step = 1 if edge.side == "first" else -1
        special = {(u.at, u.instead_of): u for u in edge.units}
        standing: dict[Spot, tuple[str, str | None]] = {}
        for n in range(cells):
            for kind in network.cell_kinds:
                unit = special.get((n * step, kind.name))
                standing[n * step, kind.name] = (kind.name, None) if unit is None else (unit.kind, unit.name)
        return _Row(standing)


@dataclass(frozen=True)
class _Arrival:
    """One written link into a spot: from which spot (None: beyond the cut), how far along the edge, and its parts."""

    to: Spot
    source: Spot | None
    along: tuple[int, ...]
    parts: tuple[Link, ...]


def _arrivals(network: Network, edge: Edge, row: _Row) -> Iterator[_Arrival]:
    """Every link into the outermost cells; its parts are between the kinds that stand there, with ``at`` empty."""
    for group in written(network.links):
        link = group[0]
        if link.sort != "link":
            continue
        across, along = link.at[edge.axis], _without(link.at, edge.axis)
        for place, slot in row.standing:
            there = (place + across, link.source_kind)
            if slot != link.kind or not edge.inside(there[0]):
                continue
            beyond = (link.source_kind, None)  # farther in than any edge unit
            sender = row.standing.get(there, beyond)[0]
            parts = adapted(group, network.kind(row.standing[place, slot][0]), network.kind(sender), network)
            if parts:
                yield _Arrival((place, slot), there if there in row.standing else None, along, parts)
    for link in network.links:
        if link.sort != "link":  # what stands for tolerances and curves goes with the kind, wherever it stands
            for spot, (kind, _) in row.standing.items():
                if kind == link.kind:
                    yield _Arrival(spot, spot, (0,) * (len(link.at) - 1), (replace(link, at=()),))
    for group in written(tuple(e.link for e in edge.links)):
        extra = next(e for e in edge.links if e.link is group[0])
        source = (extra.to + extra.link.at[edge.axis], extra.source_slot)
        along = _without(extra.link.at, edge.axis)
        yield _Arrival((extra.to, extra.slot), source, along, tuple(replace(link, at=()) for link in group))


def _without(at: tuple[int, ...], axis: int) -> tuple[int, ...]:
    return (*at[:axis], *at[axis + 1 :])


def section_of(network: Network, edge: Edge, cells: int, width: int = 1) -> Network:
    """The outermost ``cells`` cells as members, ``width`` of them along the edge in every direction.

    On a line units of the pattern are called 'kind place' and edge units by their names; in a field the place follows
    all names, as in ``at``. Raises InputError where ``cells`` is less than what the edge's own units and links reach.
    """
    import numpy as np

    from synth.network.members import Wiring

    row = _Row.of(network, edge, cells)
    position = {kind.name: i for i, kind in enumerate(network.kinds)}
    spots = list(itertools.product(range(width), repeat=network.dimension - 1))
    index: dict[tuple[Spot, tuple[int, ...]], int] = {}
    names: list[str] = []
    kinds: list[int] = []
    for spot, (kind, unit) in row.standing.items():
        for k in spots:
            index[spot, k] = len(names)
            place = " ".join(map(str, (*k[: edge.axis], spot[0], *k[edge.axis :])))
            names.append(unit if unit and not k else f"{unit or spot[1]} {place}")
            kinds.append(position[kind])
    wiring = Wiring()
    for arrival in _arrivals(network, edge, row):
        form = wiring.form(arrival.parts)
        for k in spots:
            there = tuple(a + b for a, b in zip(k, arrival.along, strict=True))
            source = -1 if arrival.source is None else index.get((arrival.source, there), -1)
            wiring.append(index[arrival.to, k], source, form)
    links, to_array, source_array, forms, parts = wiring.arrays()
    origins: tuple[tuple[str, Mapping[str, str]], ...] = tuple((kind.name, {}) for kind in network.kinds)
    members = Members(tuple(names), np.array(kinds, dtype=np.int32), to_array, source_array, forms, parts, origins)
    return replace(
        network, links=links, description="members", dimension=0, edges=(), cell=None, members=members,
        title=f"{network.title} ({edge.side} {cells} cells)",
    )  # fmt: skip


def strip_of(network: Network, edge: Edge, cells: int) -> Network:
    """The outermost ``cells`` cells as the cell of a pattern along the edge, one dimension less (at least one is left).

    Its kinds are called like the units of ``section_of`` without the places along the edge: 'tile 2', or 'wall'. A link
    from beyond the cut keeps its own part only. Raises InputError as ``section_of`` does.
    """
    row = _Row.of(network, edge, cells)
    names = {spot: unit or f"{spot[1]} {spot[0]}" for spot, (_, unit) in row.standing.items()}
    kinds = tuple(
        replace(network.kind(kind), name=names[spot], group=network.kind(kind).group)
        for spot, (kind, _) in row.standing.items()
    )
    links: list[Link] = []
    still = (0,) * (network.dimension - 1)
    for arrival in _arrivals(network, edge, row):
        to = names[arrival.to]
        first, *rest = arrival.parts
        if arrival.source is not None:
            links.append(replace(first, at=arrival.along, kind=to, source_kind=names[arrival.source]))
        elif first.relative:
            links.append(replace(first, at=still, kind=to, source_kind=to, strength=Fraction(0)))
        links += [replace(part, at=still, kind=to, source_kind=to) for part in rest]
    base = {names[spot]: kind for spot, (kind, _) in row.standing.items()}
    uses = {name: network.goal.uses[kind] for name, kind in base.items() if kind in network.goal.uses}
    return replace(
        network, kinds=kinds, links=tuple(links), dimension=network.dimension - 1, description="pattern", edges=(),
        cell=None, goal=replace(network.goal, uses=uses, gain_bounds={}),
        title=f"{network.title} ({edge.side} {cells} cells)",
    )  # fmt: skip


def written(links: tuple[Link, ...]) -> list[tuple[Link, ...]]:
    """The parts that belong to one written link together: an own part follows its neighbour's part."""
    groups: list[tuple[Link, ...]] = []
    for link in links:
        if link.own_part and groups:
            groups[-1] = (*groups[-1], link)
        else:
            groups.append((link,))
    return groups


def adapted(group: tuple[Link, ...], receiver: Kind, sender: Kind, network: Network) -> tuple[Link, ...]:
    """A pattern link between the kinds that stand at its ends; empty if one of them cannot take or offer it."""
    link = group[0]
    takes = {s.name: s.unit for s in receiver.takes}
    offers = {s.name: s.unit for s in sender.offers}
    own = {s.name: s.unit for s in receiver.offers}
    relative = link.relative or len(group) > 1
    if link.take not in takes or link.offer not in offers or (relative and link.offer not in own):
        return ()

    def factor(unit: str, kind: Kind, side: str, name: str) -> Fraction:
        return parse_unit(unit).factor / parse_unit(getattr(kind, side)[kind.index(side, name)].unit).factor

    usual = network.kind(link.kind)
    taken = factor(takes[link.take], usual, "takes", link.take)
    offered = factor(offers[link.offer], network.kind(link.source_kind), "offers", link.offer) / taken
    itself = factor(own[link.offer], usual, "offers", link.offer) / taken if relative else Fraction(1)
    first = replace(
        link, at=(), kind=receiver.name, source_kind=sender.name, strength=link.strength * offered,
        own_strength=link.own_strength * itself,
    )  # fmt: skip
    rest = (
        replace(part, at=(), kind=receiver.name, source_kind=receiver.name, strength=part.strength * itself)
        for part in group[1:]
    )
    return (first, *rest)

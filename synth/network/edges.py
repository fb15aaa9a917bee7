"""Edges of a line: the units that stand there instead of the pattern's, and single links near them.

    edge:
      side: first                                  # or last; a line with both ends has a list of two edges
      units: {leader: {at: 0, kind: lead_truck}}   # stands where the pattern would have a unit
      links: [{name: radio, from: leader.place, to: hauler@2.ahead, strength: 0.1 1/s^2}]

Places count 0, 1, 2, ... at the first edge and ..., -2, -1, 0 at the last. ``section_of`` writes the outermost cells
out as members, from which the edge part of theory (14) is computed.

Law: in ``section_of`` every unit that is farther from the cut than the longest link has exactly the links it has in the
half line; a unit near the cut keeps its own parts, so the section is a cut of the operator and not a shorter line.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.units import parse_unit
from synth.network.layout import Edge, EdgeLink, EdgeUnit, Members
from synth.network.links import FARTHEST, End, Known, Positions, class_name, end_of, links_of, read_form
from synth.network.model import Kind, Link, Network
from synth.network.sections import Section, items_of, named_entries, section, text_of, whole
from synth.network.yaml_map import Listing, Node, Problems

EXAMPLE = "{side: first, units: {leader: {at: 0, kind: lead_truck}}}"
LINK_EXAMPLE = "{name: radio, from: leader.place, to: hauler@2.ahead, strength: 0.1 1/s^2}"


def read_edges(
    node: Node, pattern_links: tuple[Link, ...], dimension: int, known: Known, positions: Positions, problems: Problems
) -> tuple[tuple[Edge, ...], tuple[str, ...]]:
    """The edges, and the kinds that make up the cell: those that are not there for an edge only."""
    if dimension != 1:
        problems.add(
            f"network.edge: edges are honoured for patterns along a line; this one has dimension {dimension}. Take the "
            "edge out, and bear in mind that the results are then about the inside of the field.",
            node,
        )
        return (), known.declared
    items = items_of(node, problems, f"[{EXAMPLE}]") if isinstance(node, Listing) else (node,)
    parts = [part for item in items if (part := section(item, "edge", problems, EXAMPLE)) is not None]
    in_links = {name for link in pattern_links for name in (link.kind, link.source_kind)}
    named = {text for part in parts for text in _kinds_named(part)}
    cell = tuple(name for name in known.declared if name not in named or name in in_links)
    edges = [edge for part in parts if (edge := _edge(part, cell, pattern_links, known, positions, problems))]
    sides = [edge.side for edge in edges]
    for side in ("first", "last"):
        if sides.count(side) > 1:
            problems.add(f"network.edge: a line has one {side} edge; put all its units into one.", node)
    if not cell:
        problems.add("network.edge: every kind stands at an edge; the pattern itself needs a kind of its own.", node)
    return tuple(edges), cell


def _kinds_named(part: Section) -> list[str]:
    found = []
    for entry in named_entries(part.get("units"), Problems(), ""):
        table = getattr(entry.value, "entries", {})
        if "kind" in table:
            found.append(str(getattr(table["kind"].value, "text", "")))
    return found


def _edge(
    part: Section, cell: tuple[str, ...], pattern: tuple[Link, ...], known: Known, positions: Positions,
    problems: Problems,
) -> Edge | None:  # fmt: skip
    before = problems.count
    side = text_of(part.need("side", "side: first"), problems, "'first' or 'last'")
    if side is not None and side not in ("first", "last"):
        problems.add(
            f"{part.table.path}.side: {side[:40]!r} is not accepted; accepted are first, last.", part.get("side")
        )
    bounds = (-FARTHEST, 0) if side == "last" else (0, FARTHEST)
    units: list[EdgeUnit] = []
    for entry in named_entries(part.get("units"), problems, "{leader: {at: 0, kind: lead_truck}}"):
        inner = section(entry.value, "edge_unit", problems, "{at: 0, kind: lead_truck}")
        if inner is None:
            continue
        at = whole(inner.need("at", "at: 0"), problems, *bounds)
        kind = _kind_name(inner.need("kind", "kind: lead_truck"), known.declared, problems)
        instead = _kind_name(inner.get("instead_of"), cell, problems)
        if instead is None and inner.get("instead_of") is None and len(cell) > 1:
            inner.need("instead_of", f"instead_of: {cell[0]}")
        instead = instead or (cell[0] if len(cell) == 1 else None)
        if entry.key in known.declared and entry.key != kind:
            problems.add(f"{entry.value.path}: {entry.key!r} is the name of another kind; choose another name.", entry)
        if at is None or kind is None or instead is None:
            continue
        if any((u.at, u.instead_of) == (at, instead) for u in units):
            problems.add(f"{entry.value.path}: another unit stands at this place already; choose another place.", entry)
        unit = EdgeUnit(entry.key, kind, at, instead)
        _fits(unit, inner, pattern, known.kinds, problems)
        units.append(unit)
    edge = Edge(side or "first", tuple(units))
    links = _edge_links(part, edge, cell, known, positions, problems)
    return None if problems.count > before else replace(edge, links=links)


def _kind_name(node: Node | None, declared: tuple[str, ...], problems: Problems) -> str | None:
    name = text_of(node, problems, "the name of a kind")
    if name is not None and node is not None and name not in declared:
        problems.add(f"{node.path}: unknown kind {name[:40]!r}; accepted are {', '.join(declared) or 'none'}.", node)
        return None
    return name


def _fits(
    unit: EdgeUnit, part: Section, pattern: tuple[Link, ...], kinds: Mapping[str, Kind], problems: Problems
) -> None:
    """Signals of the same name as the pattern's must be the same quantity."""
    if unit.kind not in kinds or unit.instead_of not in kinds:
        return
    mine, usual = kinds[unit.kind], kinds[unit.instead_of]
    for side in ("offers", "takes"):
        used = {link.offer for link in pattern if link.source_kind == usual.name} if side == "offers" else {
            link.take for link in pattern if link.kind == usual.name
        }  # fmt: skip
        wanted = {s.name: s.unit for s in getattr(usual, side)}
        for signal in getattr(mine, side):
            other = wanted.get(signal.name)
            if signal.name in used and other and parse_unit(other).dimension != parse_unit(signal.unit).dimension:
                problems.add(
                    f"{part.table.path}: {unit.kind}.{signal.name} is counted in {signal.unit}, but the pattern's "
                    f"links "
                    f"carry {usual.name}.{signal.name} in {other}; use another name, or the same quantity.",
                    part.table,
                )


def _edge_links(
    part: Section, edge: Edge, cell: tuple[str, ...], known: Known, positions: Positions, problems: Problems
) -> tuple[EdgeLink, ...]:
    found: list[EdgeLink] = []
    for item in items_of(part.get("links"), problems, f"[{LINK_EXAMPLE}]"):
        inner = section(item, "edge_link", problems, LINK_EXAMPLE)
        if inner is None:
            continue
        name = class_name(inner, item, positions, problems)
        source = _edge_end(inner.need("from", "from: leader.place"), "offers", edge, cell, known, problems)
        target = _edge_end(inner.need("to", "to: hauler@2.ahead"), "takes", edge, cell, known, problems)
        source_end, target_end = (source[0] if source else None), (target[0] if target else None)
        itself = bool(source and target and source[1] == target[1] and source[2] == target[2])
        form = read_form(inner, source_end, target_end, known, problems, itself)
        if form is None or source is None or target is None:
            continue
        positions.strengths.append((name, form, inner.get("strength") or item))
        for link in links_of(form, name, source[0], target[0], (source[1] - target[1],)):
            slot_from = target[2] if link.own_part else source[2]
            found.append(EdgeLink(link, target[1], target[2], slot_from))
    return tuple(found)


def _edge_end(
    node: Node | None, side: str, edge: Edge, cell: tuple[str, ...], known: Known, problems: Problems
) -> tuple[End, int, str] | None:
    """The end named ``unit.signal`` or ``kind@place.signal``, with its place and the slot of the cell."""
    text = text_of(node, problems, "a signal written unit.signal or kind@place.signal")
    if text is None or node is None:
        return None
    unit_text, _, signal = text.partition(".")
    found = re.fullmatch(r"(\w+)@([-+]?\d{1,4})", unit_text, re.ASCII)
    units = {unit.name: unit for unit in edge.units}
    if found is None:
        if unit_text not in units or not signal:
            problems.add(
                f"{node.path}: {text[:40]!r} names no unit of this edge; accepted are "
                f"{', '.join(f'{n}.signal' for n in units) or 'no names'} and kind@place.signal, such as "
                f"{cell[0] if cell else 'hauler'}@{2 if edge.side == 'first' else -2}.ahead.",
                node,
            )
            return None
        unit = units[unit_text]
        kind, place, slot = unit.kind, unit.at, unit.instead_of
    else:
        kind = slot = found[1]
        place = int(found[2])
        if slot not in cell or not edge.inside(place):
            problems.add(
                f"{node.path}: no unit of the pattern stands at {unit_text}; kinds of the cell are "
                f"{', '.join(cell) or 'none'}, places are {'0, 1, 2, ...' if edge.side == 'first' else '..., -1, 0'}.",
                node,
            )
            return None
        taken = next((u for u in edge.units if (u.at, u.instead_of) == (place, slot)), None)
        if taken is not None:
            problems.add(f"{node.path}: the unit {taken.name!r} stands there; write {taken.name}.{signal}.", node)
            return None
    end = end_of(known.kinds.get(kind), side, signal, node, problems)
    return None if end is None else (end, place, slot)


def least_cells(edge: Edge) -> int:
    """How many cells hold all of the edge's own units and links."""
    places = [u.at for u in edge.units]
    places += [place for e in edge.links for place in (e.to, e.to + e.link.at[0])]
    return 1 + max(map(abs, places), default=0)


def section_of(network: Network, edge: Edge, cells: int) -> Network:
    """The outermost ``cells`` cells of a half line as members; names of units of the pattern are 'kind place'.

    Raises InputError where ``cells`` is less than what the edge's own units and links reach.
    """
    import numpy as np

    from synth.network.members import Wiring

    if cells < least_cells(edge):
        raise InputError(
            f"a section of this edge needs at least {least_cells(edge)} cells, so that its own units are in it."
        )
    step = 1 if edge.side == "first" else -1
    special = {(u.at, u.instead_of): u for u in edge.units}
    cell = [kind.name for kind in network.cell_kinds]
    names: list[str] = []
    kinds: list[int] = []
    index: dict[tuple[int, str], int] = {}
    position = {kind.name: i for i, kind in enumerate(network.kinds)}
    for n in range(cells):
        for slot in cell:
            unit = special.get((n * step, slot))
            index[n * step, slot] = len(names)
            names.append(f"{slot} {n * step}" if unit is None else unit.name)
            kinds.append(position[slot if unit is None else unit.kind])
    wiring = Wiring()
    for group in written(network.links):
        link = group[0]
        for n in range(cells):
            place = n * step
            there = place + link.at[0]
            if link.sort != "link" or not edge.inside(there) or (place, link.kind) not in index:
                continue
            to = index[place, link.kind]
            far = special.get((there, link.source_kind))
            ends = network.kinds[kinds[to]], network.kind(far.kind if far else link.source_kind)
            adapted = _adapted(group, *ends, network)
            if adapted:
                wiring.append(to, index.get((there, link.source_kind), -1), wiring.form(adapted))
    for link in network.links:
        if link.sort != "link":  # what stands for tolerances and curves goes with the kind, wherever it stands
            form = wiring.form((replace(link, at=()),))
            for i, kind_index in enumerate(kinds):
                if network.kinds[kind_index].name == link.kind:
                    wiring.append(i, i, form)
    for group in written(tuple(e.link for e in edge.links)):
        extra = next(e for e in edge.links if e.link is group[0])
        source = index[extra.to + extra.link.at[0], extra.source_slot]
        form = wiring.form(tuple(replace(link, at=()) for link in group))
        wiring.append(index[extra.to, extra.slot], source, form)
    links, to_array, source_array, forms, parts = wiring.arrays()
    origins: tuple[tuple[str, Mapping[str, str]], ...] = tuple((kind.name, {}) for kind in network.kinds)
    members = Members(tuple(names), np.array(kinds, dtype=np.int32), to_array, source_array, forms, parts, origins)
    return replace(
        network, links=links, description="members", dimension=0, edges=(), cell=None, members=members,
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


def _adapted(group: tuple[Link, ...], receiver: Kind, sender: Kind, network: Network) -> tuple[Link, ...]:
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

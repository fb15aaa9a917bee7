"""Edges of a pattern: the units that stand there instead of the pattern's, and single links near them.

    edge:
      side: first                                  # or last; a line with both ends has a list of two edges
      axis: 1                                      # which number of ``at`` counts from the edge (default the first)
      units: {leader: {at: 0, kind: lead_truck}}   # stands where the pattern would have a unit
      links: [{name: radio, from: leader.place, to: hauler@2.ahead, strength: 0.1 1/s^2}]

Places count 0, 1, 2, ... at the first edge and ..., -2, -1, 0 at the last. In two and three dimensions the pattern
fills a half plane or a half space, an edge unit is a whole row or layer of units, and everything repeats along the
edge; a link there may come from ``along`` places farther along it. ``synth.network.cuts`` writes the outermost cells
out.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, replace

from synth.base.errors import nearest
from synth.base.units import parse_unit
from synth.network.layout import Edge, EdgeLink, EdgeUnit
from synth.network.links import FARTHEST, End, Known, Positions, class_name, end_of, links_of, read_form
from synth.network.model import Kind, Link
from synth.network.sections import Section, items_of, named_entries, section, text_of, whole
from synth.network.yaml_map import Listing, Node, Problems, Scalar

EXAMPLE = "{side: first, units: {leader: {at: 0, kind: lead_truck}}}"
LINK_EXAMPLE = "{name: radio, from: leader.place, to: hauler@2.ahead, strength: 0.1 1/s^2}"


def read_edges(
    node: Node, pattern_links: tuple[Link, ...], dimension: int, places: tuple[str, ...] | None, known: Known,
    positions: Positions, problems: Problems,
) -> tuple[tuple[Edge, ...], tuple[str, ...]]:  # fmt: skip
    """The edges, and the kinds that make up the cell: its ``places``, or the kinds that are not there for an edge."""
    items = items_of(node, problems, f"[{EXAMPLE}]") if isinstance(node, Listing) else (node,)
    parts = [part for item in items if (part := section(item, "edge", problems, EXAMPLE)) is not None]
    in_links = {name for link in pattern_links for name in (link.kind, link.source_kind)} | known.named
    named = {text for part in parts for text in _kinds_named(part)}
    cell = places or tuple(name for name in known.declared if name not in named or name in in_links)
    around = _Around(cell, pattern_links, dimension, known)
    edges = [edge for part in parts if (edge := _edge(part, around, positions, problems))]
    axes = {edge.axis for edge in edges}
    if len(axes) > 1:
        problems.add(
            "network.edge: edges in different directions meet in a corner, which this version does not read; keep "
            f"the edge of one axis ({' or '.join(str(axis + 1) for axis in sorted(axes))}), and bear in mind that the "
            "results are then not about the corner.",
            node,
        )
    for side in ("first", "last"):
        if [edge.side for edge in edges].count(side) > len(axes):
            what = "a line" if dimension == 1 else "a pattern"
            problems.add(f"network.edge: {what} has one {side} edge; put all its units into one.", node)
    if not cell:
        problems.add("network.edge: every kind stands at an edge; the pattern itself needs a kind of its own.", node)
    return tuple(edges), cell


@dataclass(frozen=True)
class _Around:
    """The pattern that an edge belongs to: the kinds of its cell, its links, its dimension, and what may be named."""

    cell: tuple[str, ...]
    links: tuple[Link, ...]
    dimension: int
    known: Known
    lost: tuple[str, ...] = ()


def _side(part: Section, problems: Problems) -> str | None:
    node = part.need("side", "side: first")
    side = text_of(node, problems, "'first' or 'last'")
    if side is not None and side not in ("first", "last"):
        problems.add(
            f"{part.table.path}.side: {side[:40]!r} is not accepted; accepted are 'first' (places 0, 1, 2, ...) and "
            "'last' (places ..., -1, 0).",
            node,
        )
        return None
    return side


def _kinds_named(part: Section) -> list[str]:
    found = []
    for entry in named_entries(part.get("units"), Problems(), ""):
        table = getattr(entry.value, "entries", {})
        if "kind" in table:
            found.append(str(getattr(table["kind"].value, "text", "")))
    return found


def _edge(part: Section, around: _Around, positions: Positions, problems: Problems) -> Edge | None:
    before = problems.count
    known, cell = around.known, around.cell
    side = _side(part, problems)
    axis = whole(part.get("axis"), problems, 1, around.dimension) or 1
    bounds = {"first": (0, FARTHEST), "last": (-FARTHEST, 0)}.get(side or "", (-FARTHEST, FARTHEST))
    units: list[EdgeUnit] = []
    lost: list[str] = []  # units with a problem of their own: a link that names one gets no second complaint
    for entry in named_entries(part.get("units"), problems, "{leader: {at: 0, kind: lead_truck}}"):
        inner = section(entry.value, "edge_unit", problems, "{at: 0, kind: lead_truck}")
        if inner is None:
            continue
        at = whole(inner.need("at", "at: 0"), problems, *bounds)
        kind = _kind_name(inner.need("kind", "kind: lead_truck"), known.declared, problems)
        instead = _place_name(inner.get("instead_of"), cell, problems)
        if instead is None and inner.get("instead_of") is None and len(cell) > 1 and kind is not None:
            inner.need("instead_of", f"instead_of: {cell[0]}")
        instead = instead or (cell[0] if len(cell) == 1 else None)
        if entry.key in known.declared and entry.key != kind:
            problems.add(f"{entry.value.path}: {entry.key!r} is the name of another kind; choose another name.", entry)
        if at is None or kind is None or instead is None:
            lost.append(entry.key)
            continue
        if any((u.at, u.instead_of) == (at, instead) for u in units):
            problems.add(f"{entry.value.path}: another unit stands at this place already; choose another place.", entry)
        unit = EdgeUnit(entry.key, kind, at, instead)
        _fits(unit, inner, around.links, known.kinds, problems)
        units.append(unit)
    if side is None:
        return None  # which places there are at this edge is not known
    edge = Edge(side, tuple(units), axis=axis - 1)
    links = _edge_links(part, edge, replace(around, lost=tuple(lost)), positions, problems)
    return None if problems.count > before else replace(edge, links=links)


def _kind_name(node: Node | None, declared: tuple[str, ...], problems: Problems) -> str | None:
    name = text_of(node, problems, "the name of a kind")
    if name is not None and node is not None and name not in declared:
        problems.add(
            f"{node.path}: unknown kind {name[:40]!r}{nearest(name, declared)}; accepted are "
            f"{', '.join(declared) or 'none'}.",
            node,
        )
        return None
    return name


def _place_name(node: Node | None, cell: tuple[str, ...], problems: Problems) -> str | None:
    name = text_of(node, problems, "the name of a place of the cell")
    if name is not None and node is not None and name not in cell:
        problems.add(
            f"{node.path}: {name[:40]!r} is no place of the cell{nearest(name, cell)}; say whose place the unit takes: "
            f"{' or '.join(cell) or 'none'}.",
            node,
        )
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
    part: Section, edge: Edge, around: _Around, positions: Positions, problems: Problems
) -> tuple[EdgeLink, ...]:
    found: list[EdgeLink] = []
    for item in items_of(part.get("links"), problems, f"[{LINK_EXAMPLE}]"):
        inner = section(item, "edge_link", problems, LINK_EXAMPLE)
        if inner is None:
            continue
        name = class_name(inner, item, positions, problems)
        source = _edge_end(inner.need("from", "from: leader.place"), "offers", edge, around, problems)
        target = _edge_end(inner.need("to", "to: hauler@2.ahead"), "takes", edge, around, problems)
        source_end, target_end = (source[0] if source else None), (target[0] if target else None)
        along = _along(inner, around.dimension - 1, problems)
        itself = bool(source and target and source[1] == target[1] and source[2] == target[2] and not any(along or ()))
        form = read_form(inner, source_end, target_end, around.known, problems, itself)
        if form is None or source is None or target is None or along is None:
            continue
        positions.strengths.append((name, form, inner.get("strength") or item))
        at = (*along[: edge.axis], source[1] - target[1], *along[edge.axis :])
        for link in links_of(form, name, source[0], target[0], at):
            slot_from = target[2] if link.own_part else source[2]
            found.append(EdgeLink(link, target[1], target[2], slot_from))
    return tuple(found)


def _along(part: Section, numbers: int, problems: Problems) -> tuple[int, ...] | None:
    """How many places along the edge the sending unit stands away, in the order of the other axes; default zero."""
    node = part.get("along")
    if node is None:
        return (0,) * numbers
    items = (node,) if isinstance(node, Scalar) else items_of(node, problems, "[0, 1]")
    if not numbers:
        problems.add(f"{node.path}: the end of a line is one place, so there is nothing along it; take it out.", node)
        return None
    if len(items) != numbers:
        asked = "one whole number is" if numbers == 1 else "two whole numbers are"
        problems.add(f"{node.path}: {asked} expected here, such as {1 if numbers == 1 else [0, 1]}.", node)
        return None
    found = [whole(item, problems, -FARTHEST, FARTHEST) for item in items]
    return None if None in found else tuple(n for n in found if n is not None)


def _edge_end(
    node: Node | None, side: str, edge: Edge, around: _Around, problems: Problems
) -> tuple[End, int, str] | None:
    """The end named ``unit.signal`` or ``kind@place.signal``, with its place and the slot of the cell."""
    cell, known = around.cell, around.known
    text = text_of(node, problems, "a signal written unit.signal or kind@place.signal")
    if text is None or node is None:
        return None
    unit_text, _, signal = text.partition(".")
    found = re.fullmatch(r"(\w+)@([-+]?\d{1,4})", unit_text, re.ASCII)
    units = {unit.name: unit for unit in edge.units}
    if found is None:
        if unit_text in around.lost:
            return None
        if unit_text not in units or not signal:
            problems.add(
                f"{node.path}: {text[:40]!r} names no unit of this edge{nearest(unit_text, units)}; accepted are "
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

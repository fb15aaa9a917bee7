"""Draws what stands at one end of a line, or across one edge of a field, with every link that enters it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping, Sequence

from synth.network.cuts import adapted, written
from synth.network.layout import Edge
from synth.network.model import Kind, Link, Network
from synth.report.graph_picture import SIDE, SMALL, WIDTH
from synth.report.pen import Point, Stroke, arrow, fitting, loop, unit
from synth.report.placing import Room
from synth.report.svg import INK, QUIET, Board

_LEFT = SIDE + 90
_ASIDE = 46.0  # between a mark and the small marks of the units further along the edge
_DROPS = (29.0, 43.0, 57.0, 71.0, 85.0)
Along = tuple[int, ...]
Place = tuple[int, str, Along]  # place across the edge, slot of the cell, steps along the edge
Standing = Mapping[tuple[int, str], tuple[Point, str]]  # place and slot: the point, and the kind that stands there


def draw_edge(
    board: Board, network: Network, edge: Edge, classes: Mapping[str, Stroke], kinds: Mapping[str, int], top: float
) -> float:
    """The units at one end of the line, edge units by name, with every link that enters them; returns the lower edge.

    Of a field it is the section across the edge: a mark stands for a row, and small marks above and below it for units
    further along the edge, from which links come along it or aslant.
    """
    cell, field = network.cell_kinds, network.dimension > 1
    alongs = _alongs(network, edge)
    up, down = (max([sign * level for level in alongs.values()] + [0]) for sign in (1, -1))
    deepest = max([abs(u.at) for u in edge.units] + [abs(e.to) for e in edge.links] + [2])
    count = min(deepest + 2, 7)
    bulges = [_bulge(link.at[edge.axis], field) for link in _drawn(network, edge)]
    lift = max([12.0, *bulges, 34.0 if field else 0.0, _ASIDE * up + 8 if up else 0.0])
    below = max([12.0, *bulges, _ASIDE * down + 8 if down else 0.0])
    first, gap = top + 36 + lift, 62 + lift + below
    board.text(SIDE, top, _title(network, edge, bool(up or down)), bold=True, size=12)
    room = Room()
    where = dict(_standing(cell, edge, count, first, gap))
    _margins(board, cell, edge, count, first, gap, alongs)
    for (_, slot), (point, kind) in where.items():
        unit(board, *point, kinds[kind], faint=kind == slot)
        room.disc(*point, 13)
    links = list(dict.fromkeys(_links_at(network, edge, where)))
    for place, slot, along in dict.fromkeys(source for _, _, source, _ in links if any(source[2])):
        (x, y), kind = where[place, slot]
        unit(board, x, y - _ASIDE * alongs[along], kinds[kind], 7, faint=True)
        room.disc(x, y - _ASIDE * alongs[along], 7)
    _arrows(board, links, where, alongs, classes, room)
    _names(board, network, edge, where, room)
    return room.lowest() + 10


def _title(network: Network, edge: Edge, aslant: bool) -> str:
    if network.dimension == 1:
        return f"The {edge.side} end of the line"
    unnamed = "row" if network.dimension == 2 else "layer"
    small = "; small marks: units of it further along" if aslant else ""
    return f"The {edge.side} edge across axis {edge.axis + 1}: a mark is a {unnamed} along it{small}"


def _drawn(network: Network, edge: Edge) -> list[Link]:
    """The links of the pattern and of the edge that get arrows."""
    links = [*network.links, *(single.link for single in edge.links)]
    return [link for link in links if link.sort == "link" and not link.own_part]


def _bulge(steps: int, field: bool) -> float:
    """How far an arrow leaves the straight line."""
    return (8.0 + 8 if field else 14.0 + 12) + (8 if field else 12) * (min(abs(steps), 4) - 1) if steps else 8.0


def _along(link: Link, edge: Edge) -> Along:
    """The steps of a link along the edge."""
    return (*link.at[: edge.axis], *link.at[edge.axis + 1 :])


def _alongs(network: Network, edge: Edge) -> dict[Along, int]:
    """The level of every shift along the edge: 0 for none, 1, 2, ... above the marks, -1, -2, ... below them."""
    found = {_along(link, edge) for link in _drawn(network, edge)}
    ahead = sorted((a for a in found if a > (0,) * len(a)), key=lambda a: (sum(map(abs, a)), a))
    back = sorted((a for a in found if a < (0,) * len(a)), key=lambda a: (sum(map(abs, a)), a))
    levels = {(0,) * (network.dimension - 1): 0}
    levels |= {along: k + 1 for k, along in enumerate(ahead)}
    return levels | {along: -k - 1 for k, along in enumerate(back)}


def _standing(
    cell: Sequence[Kind], edge: Edge, count: int, first: float, gap: float
) -> Iterator[tuple[tuple[int, str], tuple[Point, str]]]:
    """Every place shown: where it is drawn and who stands there."""
    units = {(u.at, u.instead_of): u for u in edge.units}
    step = (WIDTH - SIDE - _LEFT) / (count + 0.5)
    for k in range(count):
        place = k if edge.side == "first" else k - count + 1
        x = _LEFT + step * (k + (0.5 if edge.side == "first" else 1))
        for row, kind in enumerate(cell):
            here = units.get((place, kind.name))
            yield (place, kind.name), ((x, first + gap * row), here.kind if here else kind.name)


def _margins(
    board: Board, cell: Sequence[Kind], edge: Edge, count: int, first: float, gap: float, alongs: Mapping[Along, int]
) -> None:
    """Names of the rows, what the small marks stand for, and dots where the pattern goes on."""
    step = (WIDTH - SIDE - _LEFT) / (count + 0.5)
    for row, kind in enumerate(cell):
        y = first + gap * row
        board.text(SIDE, y + 4, fitting(kind.name, 88, 12), size=12, bold=True)
        for along, level in alongs.items():
            if level:
                steps = ", ".join(f"{a:+d}" if a else "0" for a in along)
                shown = f"({steps})" if len(along) > 1 else steps
                board.text(SIDE, y + 4 - _ASIDE * level, f"{shown} along", size=SMALL, fill=QUIET)
        x = WIDTH - SIDE - step / 4 if edge.side == "first" else _LEFT + step / 4
        for k in range(3):
            board.dot(x + 6 * k - 6, y, QUIET, size=1.3)


def _arrows(
    board: Board,
    links: Sequence[tuple[str, int, Place, Place]],
    where: Standing,
    alongs: Mapping[Along, int],
    classes: Mapping[str, Stroke],
    room: Room,
) -> None:
    seen: Counter[tuple[Place, Place]] = Counter()
    for name, steps, source, target in links:
        stroke, beside = classes.get(name, Stroke(INK, "")), 11 * seen[source, target]
        end = where[target[0], target[1]][0]
        if any(source[2]):
            x, y = where[source[0], source[1]][0]
            start = (x, y - _ASIDE * alongs[source[2]])
            arrow(board, start, end, 4 + beside, stroke, 14, room=room)
        elif source != target:
            field = len(source[2]) > 0
            arrow(board, where[source[0], source[1]][0], end, _bulge(steps, field) + beside, stroke, room=room)
        seen[source, target] += 1
        if source == target:
            loop(board, end, 22 + beside, stroke)


def _names(board: Board, network: Network, edge: Edge, where: Standing, room: Room) -> None:
    """Names of edge units and numbers of places, each row in one line, clear of the links where there is room."""
    units = {(u.at, u.instead_of): u for u in edge.units}
    unnamed = {1: "place", 2: "row"}.get(network.dimension, "layer")
    for kind in network.cell_kinds:
        texts = {}
        for (place, slot), (point, _) in where.items():
            if slot == kind.name:
                here = units.get((place, slot))
                texts[place] = (here.name if here else f"{unnamed} {place}", point, here is not None)
        drop = room.shared_drop([(text, point) for text, point, _ in texts.values()], _DROPS, SMALL)
        for text, (x, y), named in texts.values():
            ink = INK if named else QUIET
            board.text(x, y + drop, text, anchor="middle", size=SMALL, fill=ink, bold=named)


def _links_at(network: Network, edge: Edge, where: Standing) -> Iterator[tuple[str, int, Place, Place]]:
    """The links between the units that are shown at an edge: class, steps across, from where, to where."""
    here = (0,) * (network.dimension - 1)
    for group in written(network.links):
        link = group[0]
        for (place, slot), (_, kind) in where.items():
            source = (place + link.at[edge.axis], link.source_kind)
            if link.sort != "link" or slot != link.kind or source not in where:
                continue
            if adapted(group, network.kind(kind), network.kind(where[source][1]), network):
                yield link.name, link.at[edge.axis], (*source, _along(link, edge)), (place, slot, here)
    for single in edge.links:
        steps = single.link.at[edge.axis]
        source, target = (single.to + steps, single.source_slot), (single.to, single.slot)
        if not single.link.own_part and source in where and target in where:
            yield single.link.name, steps, (*source, _along(single.link, edge)), (*target, here)

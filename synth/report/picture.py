"""Draws a network as one SVG picture: the cell of a pattern with its neighbours, the units of a list, or a summary.

A pattern shows the links that enter one cell in full and those of the cells beside it faintly: the picture goes on
without end in the same way. Members are laid out as a graph; more than ``MOST_UNITS`` of them, and networks given by
rules, are summed up by kind. The same network gives the same bytes.
"""

from __future__ import annotations

import itertools
import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence

from synth.network.model import Kind, Link, Network
from synth.network.words import counted, link_nature, per_words, place_words, said, strength_words
from synth.report.edge_picture import draw_edge
from synth.report.graph_picture import SIDE, SMALL, WIDTH, draw_members, draw_summary, origin_of
from synth.report.pen import FAINT, Point, Stroke, arrow, fitting, loop, stroke_of, unit, wrapped
from synth.report.placing import Room, around
from synth.report.svg import INK, QUIET, Board, text_width

MOST_UNITS = 400
MOST_LINES = 16


def network_picture(network: Network) -> str:
    """The network as the text of an SVG file of its own, ``WIDTH`` units wide, legible in print and without colour."""
    at_edges = [single.link.name for edge in network.edges for single in edge.links]
    classes = {name: stroke_of(k) for k, name in enumerate(dict.fromkeys([*network.classes(), *at_edges]))}
    kinds = _declared_kinds(network)
    board = Board("network", network.title, _description(network, classes), WIDTH, 0)
    board.text(SIDE, 34, fitting(network.title, WIDTH - 2 * SIDE, 16), size=16, bold=True)
    board.text(SIDE, 53, fitting(_subtitle(network), WIDTH - 2 * SIDE, 12), fill=QUIET, size=12)
    if network.members is not None and len(network.members.names) <= MOST_UNITS:
        bottom = draw_members(board, network, classes, kinds, 70)
    elif network.members is not None or network.description == "rules":
        bottom = draw_summary(board, network, classes, kinds, 70)
    else:
        bottom = _draw_pattern(board, network, classes, kinds, 70)
    board.height = _legend(board, network, classes, kinds, bottom + 30)
    paper = f'<rect width="{WIDTH:g}" height="{board.height:g}" fill="#ffffff"/>'
    board.parts.insert(0, paper)
    return board.svg()


def _subtitle(network: Network) -> str:
    if network.members is not None:
        return f"{counted(len(network.members.names), 'unit')}, {counted(len(network.members.to), 'link')}"
    if network.description == "rules":
        return "Any number of units, wired in any way that obeys the rules"
    if network.dimension == 1:
        return "One cell repeated along a line without end. Full ink: links into one cell. Faint: the same elsewhere."
    beside = " and those near the edge" if network.edges else ""
    return (
        f"One cell repeated in {network.dimension} dimensions without end. Shown are the links into one cell{beside}."
    )


def _description(network: Network, classes: Iterable[str]) -> str:
    """The picture in words, for a reader who does not see it: how the units stand, and every class of links."""
    said_lines = [f"Units and links of the network {network.title}. {_subtitle(network)}"]
    said_lines[0] += "" if said_lines[0].endswith(".") else "."
    for name in classes:
        lines = _class_lines(network, name)
        said_lines += [f"Links {name}: {ends}; {nature}." for ends, nature in lines[:MOST_LINES]]
        if len(lines) > MOST_LINES:
            said_lines.append(f"Links {name}: {len(lines) - MOST_LINES} more strengths.")
    return " ".join(said_lines)


def _declared_kinds(network: Network) -> dict[str, int]:
    """The number of the mark for every kind; kinds that differ only in parameter values share one."""
    declared = [kind.name for kind in network.kinds]
    if network.members is not None and network.members.origins:
        declared = [origin for origin, _ in network.members.origins]
    numbers = {name: k for k, name in enumerate(dict.fromkeys(declared))}
    return {kind.name: numbers[name] for kind, name in zip(network.kinds, declared, strict=True)}


# --- patterns -------------------------------------------------------------------------------------------------------


def _draw_pattern(
    board: Board, network: Network, classes: Mapping[str, Stroke], kinds: Mapping[str, int], top: float
) -> float:
    links = [link for link in network.links if link.sort == "link" and not link.own_part]
    cell = network.cell_kinds
    names = [kind.name for kind in cell]
    inside = [link for link in links if link.kind in names and link.source_kind in names]
    if network.dimension == 1:
        bottom = _draw_line(board, inside, cell, classes, kinds, top)
        for edge in network.edges:
            bottom = draw_edge(board, network, edge, classes, kinds, bottom + 46)
        return bottom
    bottom = _draw_grid(board, inside, cell, network.dimension, classes, kinds, top)
    for edge in network.edges:
        bottom = draw_edge(board, network, edge, classes, kinds, bottom + 46)
    return bottom


def _reach(links: Iterable[Link], most: int) -> int:
    return min(max((abs(step) for link in links for step in link.at), default=1) or 1, most)


def _draw_line(
    board: Board, links: Sequence[Link], cell: Sequence[Kind], classes: Mapping[str, Stroke], kinds: Mapping[str, int],
    top: float,
) -> float:  # fmt: skip
    """A row per kind, a column per cell; arcs from units before go above the row, from units behind below it."""
    reach = _reach(links, 4)
    step = (WIDTH - 2 * SIDE - 90) / (2 * reach + 1)
    rows = {kind.name: k for k, kind in enumerate(cell)}
    lift = _lifts(links, step)
    above = max([lift[i] for i, link in enumerate(links) if _same_row(link) and link.at[0] <= 0] or [0.0])
    below = max([lift[i] for i, link in enumerate(links) if _same_row(link) and link.at[0] > 0] or [0.0])
    gap = 62 + above + below if len(cell) > 1 else 0.0
    first = top + 42 + above
    bottom = first + gap * (len(cell) - 1) + below + 44

    def at(column: int, name: str) -> Point:
        return (SIDE + 90 + step * (column + reach + 0.5), first + gap * rows[name])

    for column in range(-reach, reach + 1):
        x = at(column, cell[0].name)[0]
        if column == 0:
            board.box(x - step / 2 + 5, top + 8, step - 10, bottom - top - 8, "#f4f7fa", "#c8d3dc")
        label = "cell i" if column == 0 else f"i {'-' if column < 0 else '+'} {abs(column)}"
        board.text(x, bottom - 8, label, anchor="middle", fill=INK if column == 0 else QUIET, size=SMALL)
    for name, row in rows.items():
        y = first + gap * row
        board.text(SIDE, y + 4, fitting(name, 88, 12), size=12, bold=True)
        for side in (-1, 1):
            x = at(side * reach, name)[0] + side * (step / 2 + 4)
            for k in range(3):
                board.dot(x + side * (k * 6 - 6), y, QUIET, size=1.3)
    for faint in (True, False):
        for i, link in enumerate(links):
            for column in range(-reach, reach + 1) if faint else (0,):
                source = column + link.at[0]
                if (faint and column == 0) or (faint and abs(source) > reach) or (faint and not _moves(link)):
                    continue
                _arc(board, link, at, column, max(min(source, reach + 1), -reach - 1), lift[i], classes, faint)
    for name in rows:
        for column in range(-reach, reach + 1):
            unit(board, *at(column, name), kinds[name], faint=column != 0)
    return bottom


def _moves(link: Link) -> bool:
    return any(link.at) or link.source_kind != link.kind


def _same_row(link: Link) -> bool:
    return link.source_kind == link.kind


def _lifts(links: Sequence[Link], step: float) -> list[float]:
    """How high each arc rises: more for longer ones, and apart for links between the same two units."""
    seen: Counter[tuple[str, str, tuple[int, ...]]] = Counter()
    lifts = []
    for link in links:
        key = (link.source_kind, link.kind, link.at)
        lifts.append(26.0 + 20 * min(abs(link.at[0]), 5) + 22 * seen[key] if _moves(link) else 30.0 + 20 * seen[key])
        seen[key] += 1
    return lifts


def _arc(
    board: Board, link: Link, at: object, column: int, source: int, lift: float, classes: Mapping[str, Stroke],
    faint: bool,
) -> None:  # fmt: skip
    assert callable(at)
    stroke = classes[link.name]
    target = at(column, link.kind)
    if not _moves(link):
        x, y = loop(board, target, lift, stroke)
        board.text(x, y - 4, link.name, anchor="middle", fill=stroke.colour, size=SMALL)
        return
    start = at(source, link.source_kind)
    rightward = link.at[0] < 0 or (link.at[0] == 0 and start[1] > target[1])
    bulge = lift if _same_row(link) else 14 + lift / 4
    x, y = arrow(board, start, target, bulge if rightward or _same_row(link) else -bulge, stroke, faint=faint)
    if not faint:
        outside = abs(column + link.at[0]) > abs(source)
        label = f"{link.name} (from {place_words(link.at)})" if outside else link.name
        up = y < min(start[1], target[1]) or not _same_row(link)
        board.text(x, y - 5 if up else y + 14, label, anchor="middle", fill=stroke.colour, size=SMALL)


def _draw_grid(
    board: Board, links: Sequence[Link], cell: Sequence[Kind], dimension: int, classes: Mapping[str, Stroke],
    kinds: Mapping[str, int], top: float,
) -> float:  # fmt: skip
    """The cells around one cell; the third dimension goes slantwise into the page."""
    reach = _reach(links, 2)
    steps = range(-reach, reach + 1)
    across = (WIDTH - 2 * SIDE) / (2 * reach + 1 + (1.1 * reach if dimension == 3 else 0))
    size = min(across, 170.0 if reach == 1 else 120.0)
    slant = (0.55 * size, -0.42 * size)
    spread = 0.2 * size if len(cell) > 1 else 0.0
    height = size * (2 * reach + 1)  # a step into the page rises less than one step up
    centre = (WIDTH / 2, top + height / 2 + 10)
    turn = {kind.name: 2 * math.pi * k / len(cell) - 2.1 for k, kind in enumerate(cell)}

    def at(offset: Sequence[int], name: str) -> Point:
        depth = offset[2] if dimension == 3 else 0
        x = centre[0] + size * offset[0] + slant[0] * depth + spread * math.cos(turn[name])
        return (x, centre[1] - size * offset[1] + slant[1] * depth + spread * math.sin(turn[name]))

    used = {link.at for link in links} | {(0,) * dimension}
    shown = [
        offset for offset in itertools.product(steps, repeat=dimension)
        if dimension == 2 or offset in used or sum(map(abs, offset)) <= 1
    ]  # fmt: skip
    if dimension == 2:
        x, y = centre
        board.box(x - size / 2 + 4, y - size / 2 + 4, size - 8, size - 8, "#f4f7fa", "#c8d3dc")
    nothing = (0,) * dimension
    seen: Counter[tuple[str, str, tuple[int, ...]]] = Counter()
    gap, room, mark = (15, Room(), 11.0) if spread else (17, Room(), 13.0)
    for offset in sorted(shown, key=lambda o: -o[-1] if dimension == 3 else 0):
        for kind in cell:
            unit(board, *at(offset, kind.name), kinds[kind.name], mark, faint=offset != nothing)
            room.disc(*at(offset, kind.name), mark)
    for link in links:
        key = (link.source_kind, link.kind, link.at)
        if not _moves(link):
            x, y = loop(board, at(nothing, link.kind), 26 + 16 * seen[key], classes[link.name])
            board.text(x, y - 4, link.name, anchor="middle", fill=classes[link.name].colour, size=SMALL)
        else:
            inside = tuple(max(min(step, reach), -reach) for step in link.at)
            start = at(inside, link.source_kind)
            arrow(board, start, at(nothing, link.kind), 8 + 14 * seen[key], classes[link.name], gap, room=room)
            if inside != link.at:
                words = f"from {place_words(link.at)}"
                spot = room.best(words, around(*start, mark, mark)[::-1], SMALL)
                board.text(spot.x, spot.y, words, anchor=spot.anchor, size=SMALL)
        seen[key] += 1
    for offset in shown:
        label = f"({', '.join(map(str, offset))})"
        xs, ys = zip(*(at(offset, kind.name) for kind in cell), strict=True)
        half = (max(xs) - min(xs)) / 2 + mark, (max(ys) - min(ys)) / 2 + mark
        middle = (max(xs) + min(xs)) / 2, (max(ys) + min(ys)) / 2
        spot = room.best(label, around(*middle, *half), 10)
        board.text(spot.x, spot.y, label, anchor=spot.anchor, fill=QUIET, size=10)
    return centre[1] + height / 2 + 10


# --- what the marks mean --------------------------------------------------------------------------------------------


def _legend(
    board: Board, network: Network, classes: Mapping[str, Stroke], kinds: Mapping[str, int], top: float
) -> float:
    """Kinds and classes in words; returns the height of the whole picture."""
    board.line(SIDE, top - 22, WIDTH - SIDE, top - 22, FAINT, 0.8)
    y = top
    shown: set[int] = set()
    for kind in network.kinds:
        mark = kinds[kind.name]
        if mark in shown:
            continue
        shown.add(mark)
        unit(board, SIDE + 12, y - 4, mark, 7)
        parts = [counted(len(kind.states), "state"), counted(len(kind.inputs), "actuator"),
                 counted(len(kind.sensors), "sensor")]  # fmt: skip
        name = kind.name if network.members is None else origin_of(network, mark, kinds)
        y = _line(board, y, name, ", ".join(parts)) + 5
    y += 6
    for name, stroke in classes.items():
        board.line(SIDE, y - 4, SIDE + 24, y - 4, stroke.colour, stroke.width, stroke.dash)
        lines = _class_lines(network, name)
        for k, (ends, nature) in enumerate(lines[:MOST_LINES]):
            y = _line(board, y, "" if k else name, ends)
            y = _line(board, y, "", nature) + 4
        if len(lines) > MOST_LINES:
            y = _line(board, y, "", f"and {len(lines) - MOST_LINES} more of this class") + 3
        y += 4
    for kind in network.kinds[:MOST_LINES]:
        inner = [link.take for link in kind.inner]
        if inner:
            y = _line(board, y, "", f"inside {kind.name}, not drawn: {', '.join(inner)}") + 3
    return y + 8


def _class_lines(network: Network, name: str) -> list[tuple[str, str]]:
    """Both ends, and strength and nature, of the links of a class; links that differ in their place share a line."""
    most = {rule.name: rule.most for rule in network.rules}
    places: dict[tuple[str, str], list[str]] = {}
    for link in [*network.links, *(single.link for edge in network.edges for single in edge.links)]:
        if link.name != name or link.sort != "link" or link.own_part:
            continue
        count = most.get(link.choice, 1)
        amount = said(link.strength / count) if link.choice else strength_words(link, network)
        each = f"{amount} {per_words(link, network)}"
        limit = f" each, at most {counted(count, 'link')} into a unit" if link.choice else ""
        ends = f"{link.source_kind}.{link.offer} to {link.kind}.{link.take}"
        places.setdefault((ends, f"strength {each}{limit}, {link_nature(link, network)}"), []).append(
            place_words(link.at)
        )
    return [
        (", ".join([ends, *(place for place in found if place)]), nature) for (ends, nature), found in places.items()
    ]


def _line(board: Board, y: float, name: str, words: str) -> float:
    """A name in bold and words beside it, in as many lines as they need; returns the baseline of the next line."""
    left = SIDE + 34
    room = 130.0
    shown = fitting(name, room / 1.16, 12)  # bold print is wider
    board.text(left, y, shown, bold=True, size=12)
    start = left + max(text_width(shown, 12, bold=True) + 10, 80)
    for k, line in enumerate(wrapped(words, WIDTH - SIDE - start, SMALL)):
        board.text(start, y + 15 * k, line, size=SMALL, fill=INK)
    return y + 15 * max(len(wrapped(words, WIDTH - SIDE - start, SMALL)), 1)

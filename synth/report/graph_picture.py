"""Draws explicit units as a graph, and networks too large or too free for that as a summary by kind."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence

from synth.network.model import Network
from synth.network.words import counted
from synth.report.pen import Point, Stroke, arrow, fitting, loop, unit
from synth.report.svg import QUIET, Board

MOST_NAMED = 60
WIDTH = 760.0
SIDE = 30.0
SMALL = 11.0


def draw_members(
    board: Board, network: Network, classes: Mapping[str, Stroke], kinds: Mapping[str, int], top: float
) -> float:
    """Every unit and every link; up to ``MOST_NAMED`` units with their names. Returns the lower edge."""
    members = network.members
    assert members is not None  # the caller has looked
    count, height = len(members.names), 520.0
    pairs = list(zip(members.to.tolist(), members.source.tolist(), members.form.tolist(), strict=True))
    spots = _layout(count, [(a, b) for a, b, _ in pairs if b >= 0 and a != b])
    points = [(SIDE + 40 + x * (WIDTH - 2 * SIDE - 80), top + 30 + y * (height - 60)) for x, y in spots]
    size = 11.0 if count <= MOST_NAMED else max(3.0, 8 - count / 100)
    number: Counter[tuple[int, int]] = Counter()
    for to, source, form in pairs:
        link = network.links[members.parts[form][0]]
        if source < 0 or link.sort != "link":
            continue
        stroke = classes[link.name]
        thin = stroke if count <= MOST_NAMED else Stroke(stroke.colour, stroke.dash, 0.8)
        if source == to:
            loop(board, points[to], 20, thin, size + 3)
        else:
            number[source, to] += 1
            arrow(
                board,
                points[source],
                points[to],
                (7.0 if count <= MOST_NAMED else 2.5) * number[source, to],
                thin,
                size + 3,
            )
    for k, point in enumerate(points):
        unit(board, *point, kinds[network.kinds[int(members.kind[k])].name], size)
    if count <= MOST_NAMED:
        for name, (x, y) in zip(members.names, points, strict=True):
            board.text(x, y + size + 13, fitting(name, 110, SMALL), anchor="middle", size=SMALL)
    return top + height


def _layout(count: int, pairs: Sequence[tuple[int, int]]) -> list[Point]:
    """Places in the unit square for a graph: springs from a fixed start; the same graph gives the same places."""
    import networkx as nx

    graph = nx.Graph()
    graph.add_nodes_from(range(count))
    graph.add_edges_from(pairs)
    if count <= 80 and count > 1 and nx.is_connected(graph):
        found = nx.kamada_kawai_layout(graph)
    else:
        found = nx.spring_layout(graph, seed=1, iterations=60, k=1.6 / math.sqrt(max(count, 1)))
    xs, ys = zip(*(found[k] for k in range(count)), strict=True)
    if max(ys) - min(ys) > max(xs) - min(xs):  # the page is wider than high
        xs, ys = ys, xs
    width = max(max(xs) - min(xs), 1e-9)
    tall = max(max(ys) - min(ys), 0.35 * width)
    middle = (max(ys) + min(ys)) / 2
    return [(float((x - min(xs)) / width), float(0.5 + (y - middle) / tall)) for x, y in zip(xs, ys, strict=True)]


def draw_summary(
    board: Board, network: Network, classes: Mapping[str, Stroke], kinds: Mapping[str, int], top: float
) -> float:
    """One mark per declared kind with the number of its units, one arrow per class and pair of kinds."""
    number = {mark: name for name, mark in reversed(list(kinds.items()))}
    units: Counter[int] = Counter()
    arrows: Counter[tuple[int, int, str]] = Counter()
    members = network.members
    if members is None:
        most = {rule.name: rule.most for rule in network.rules}
        for link in network.links:
            if link.sort == "link" and not link.own_part:
                arrows[kinds[link.source_kind], kinds[link.kind], link.name] = most.get(link.choice, 1)
    else:
        units.update(kinds[network.kinds[k].name] for k in members.kind.tolist())
        for form, count in Counter(members.form.tolist()).items():
            link = network.links[members.parts[form][0]]
            arrows[kinds[link.source_kind], kinds[link.kind], link.name] += count
    marks = sorted(number)
    ring = 0.0 if len(marks) == 1 else 130.0
    loops = Counter(kind for kind, to, _ in arrows if kind == to)
    room = 46.0 + (40 + 26 * max(loops.values()) if loops else 0)
    centre = (WIDTH / 2, top + room + (ring if len(marks) > 2 else 0))
    points = {
        mark: (centre[0] + 1.7 * ring * math.cos(a), centre[1] + ring * math.sin(a))
        for mark, a in ((m, 2 * math.pi * k / len(marks) + math.pi) for k, m in enumerate(marks))
    }
    seen: Counter[tuple[int, int]] = Counter()
    for (source, to, name), count in arrows.items():
        words = f"{name}: {counted(count, 'link')}" if members is not None else f"{name}: at most {count} into a unit"
        if source == to:
            x, y = loop(board, points[to], 40 + 26 * seen[source, to], classes[name], 24)
        else:
            x, y = arrow(board, points[source], points[to], 24 + 26 * seen[source, to], classes[name], 30)
        hangs = source != to and y > max(points[source][1], points[to][1])  # such an arrow carries its words below it
        board.text(x, y + 15 if hangs else y - 6, words, anchor="middle", fill=classes[name].colour, size=SMALL)
        seen[source, to] += 1
    for mark, (x, y) in points.items():
        unit(board, x, y, mark, 22)
        label = counted(units[mark], "unit") if members is not None else "any number of units"
        name = number[mark] if members is None else origin_of(network, mark, kinds)
        board.text(x, y + 46, name, anchor="middle", bold=True, size=12)
        board.text(x, y + 62, label, anchor="middle", fill=QUIET, size=SMALL)
    return centre[1] + (ring if len(marks) > 2 else 0) + 80


def origin_of(network: Network, mark: int, kinds: Mapping[str, int]) -> str:
    """The declared kind whose mark has this number."""
    members = network.members
    for kind, (origin, _) in zip(network.kinds, members.origins if members is not None else (), strict=False):
        if kinds[kind.name] == mark:
            return origin
    return next(name for name, number in kinds.items() if number == mark)

"""Shapes for kinds of units, and arrows for classes of links, on a drawing board.

A kind has a shape and a colour, a class a dash pattern, a colour and a written name, so that no picture needs colour.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from synth.report.placing import Room
from synth.report.svg import INK, STROKES, Board, number, text_width

# Pale fills of the colours of STROKES, so that black print on them stays legible.
FILLS = ("#cfe5f3", "#f8d9c4", "#c5eadd", "#ecd3ec", "#d9d9d9", "#efe3b8")
SHAPES = ("circle", "square", "diamond", "triangle", "hexagon", "pentagon")
# Number of corners, direction of the first one in degrees, and the size that makes all marks look equally large.
_CORNERS = {
    "square": (4, 45.0, 1.15),
    "diamond": (4, 0.0, 1.25),
    "triangle": (3, -90.0, 1.3),
    "hexagon": (6, 0.0, 1.08),
    "pentagon": (5, -90.0, 1.12),
}
FAINT = "#b4b4b4"
Point = tuple[float, float]


@dataclass(frozen=True)
class Stroke:
    """How the links of a class are drawn."""

    colour: str
    dash: str
    width: float = 1.7


def stroke_of(k: int) -> Stroke:
    """The stroke of class number ``k``: the first 36 differ in colour or dash."""
    return Stroke(STROKES[k % 6][0], STROKES[(k + k // 6) % 6][1])


def fitting(text: str, width: float, size: float) -> str:
    """The text, cut with dots where it would be wider than ``width``."""
    needed = 0.93 * text_width(text, size)  # the board's estimate is on the wide side
    if needed <= width:
        return text
    keep = max(int(len(text) * width / needed) - 3, 1)
    return f"{text[:keep].rstrip()}..."


def wrapped(text: str, width: float, size: float) -> list[str]:
    """The text in lines no wider than ``width``, broken at spaces; a single word that is wider is cut with dots.

    Law: without such a word no word is lost, and the order is kept.
    """
    lines: list[str] = []
    for word in text.split():
        longer = f"{lines[-1]} {word}" if lines else word
        if lines and 0.93 * text_width(longer, size) <= width:
            lines[-1] = longer
        else:
            lines.append(fitting(word, width, size))
    return lines


def unit(board: Board, x: float, y: float, kind: int, size: float = 13, faint: bool = False) -> None:
    """The mark of a unit of kind number ``kind``."""
    fill, ink = ("#f6f6f6", FAINT) if faint else (FILLS[kind % 6], INK)
    shape = SHAPES[(kind + kind // 6) % 6]
    outline = f'fill="{fill}" stroke="{ink}" stroke-width="{1 if faint else 1.4}"'
    if shape == "circle":
        board.parts.append(f'<circle cx="{number(x)}" cy="{number(y)}" r="{number(size)}" {outline}/>')
        return
    count, first, factor = _CORNERS[shape]
    corners = (
        (x + factor * size * math.cos(angle), y + factor * size * math.sin(angle))
        for angle in (math.radians(first + 360 * k / count) for k in range(count))
    )
    board.parts.append(f'<polygon points="{" ".join(f"{number(a)},{number(b)}" for a, b in corners)}" {outline}/>')


def arrow(
    board: Board, start: Point, end: Point, bulge: float, stroke: Stroke, gap: float = 17, faint: bool = False,
    room: Room | None = None,
) -> Point:  # fmt: skip
    """A curved arrow from ``start`` to ``end``; ``bulge`` is how far it leaves the straight line to its left.

    Both ends keep ``gap`` away from the marks; ``room`` takes note of the curve. Returns the point of the curve that
    is farthest out, for a label.
    """
    (x0, y0), (x1, y1) = start, end
    length = math.hypot(x1 - x0, y1 - y0) or 1.0
    nx, ny = (y1 - y0) / length, -(x1 - x0) / length
    middle = ((x0 + x1) / 2 + 2 * bulge * nx, (y0 + y1) / 2 + 2 * bulge * ny)
    head = 6.0 if stroke.width > 1 else 3.4
    a, b = _toward(start, middle, gap), _toward(end, middle, gap + head - 1)
    _curve(board, a, middle, b, stroke, faint)
    if room is not None:
        room.curve(a, middle, end)
    if not faint:
        _head(board, b, middle, stroke.colour, head)
    return ((a[0] + b[0]) / 4 + middle[0] / 2, (a[1] + b[1]) / 4 + middle[1] / 2)


def loop(board: Board, at: Point, height: float, stroke: Stroke, gap: float = 15) -> Point:
    """An arrow from a unit to itself, above it; returns its highest point."""
    x, y = at
    a, b = (x - 0.6 * gap, y - gap), (x + 0.6 * gap, y - gap - 4)
    side = 14 + 0.28 * height
    control = (
        f"{number(x - side)} {number(y - gap - height * 1.33)} {number(x + side)} {number(y - gap - height * 1.33)}"
    )
    board.parts.append(
        f'<path d="M{number(a[0])} {number(a[1])}C{control} {number(b[0])} {number(b[1])}" fill="none" '
        f'stroke="{stroke.colour}" stroke-width="{number(stroke.width)}"{_dash(stroke.dash)}/>'
    )
    _head(board, b, (x + 16, y - gap - height), stroke.colour)
    return (x, y - gap - height)


def _curve(board: Board, a: Point, middle: Point, b: Point, stroke: Stroke, faint: bool) -> None:
    colour, width = (FAINT, 0.8) if faint else (stroke.colour, stroke.width)
    board.parts.append(
        f'<path d="M{number(a[0])} {number(a[1])}Q{number(middle[0])} {number(middle[1])} '
        f'{number(b[0])} {number(b[1])}" fill="none" stroke="{colour}" '
        f'stroke-width="{number(width)}"{_dash(stroke.dash)}/>'
    )


def _head(board: Board, tip: Point, origin: Point, colour: str, size: float = 6) -> None:
    """An arrow head whose point lies a little beyond ``tip``, seen from ``origin``."""
    angle = math.atan2(tip[1] - origin[1], tip[0] - origin[0])
    corners = [
        (tip[0] + size * math.cos(angle + turn), tip[1] + size * math.sin(angle + turn)) for turn in (0, 2.45, -2.45)
    ]
    points = " ".join(f"{number(x)},{number(y)}" for x, y in corners)
    board.parts.append(f'<polygon points="{points}" fill="{colour}"/>')


def _toward(point: Point, other: Point, distance: float) -> Point:
    length = math.hypot(other[0] - point[0], other[1] - point[1]) or 1.0
    share = distance / length
    return (point[0] + share * (other[0] - point[0]), point[1] + share * (other[1] - point[1]))


def _dash(dash: str) -> str:
    return f' stroke-dasharray="{dash}"' if dash else ""

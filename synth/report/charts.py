"""The three kinds of picture the report uses: a number line with marks, curves over time, values along the string."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from synth.report.svg import GRID, INK, QUIET, STROKES, TEXT, Board, Scale, envelope, spread, text_width, thin

WIDTH = 660.0


@dataclass(frozen=True)
class Mark:
    """A value on a number line with its label; infinity stands at the arrow on the right end."""

    value: float
    label: str
    strong: bool = False


@dataclass(frozen=True)
class Band:
    """A stretch of the number line; ``look`` is 'solid', 'hatched', 'dotted' or 'plain'."""

    low: float
    high: float
    look: str
    label: str


@dataclass(frozen=True)
class Curve:
    """A named line: ``xs`` and ``ys`` of equal length."""

    label: str
    xs: Sequence[float]
    ys: Sequence[float]


@dataclass(frozen=True)
class Level:
    """A horizontal bound drawn across the picture with its label."""

    value: float
    label: str


def number_line(
    name: str,
    title: str,
    description: str,
    axis: str,
    marks: Sequence[Mark],
    bands: Sequence[Band],
    log: bool = False,
) -> str:
    """SVG of a number line from 0 with bands on it and one labelled leader per mark.

    Labels hang below the line, the mark farthest right highest, so no leader crosses a label. ``log`` allows a
    logarithmic line where the marks are further apart than 1 : 50.
    """
    finite = [m.value for m in marks if math.isfinite(m.value) and m.value > 0]
    low, high, log = _domain(finite, log)
    rows = len(marks)
    board = Board(name, title, description, WIDTH, 96 + 19 * rows)
    room = 36 + max((text_width(mark.label, bold=mark.strong) for mark in marks), default=0)
    left, right = 16.0, WIDTH - min(room, 330)
    scale = Scale(low, high, left, right, log)
    y, thick = 34.0, 24.0
    _bands(board, scale, bands, y, thick, right)
    board.text(right + 28, y + thick + 16, axis + (" (log scale)" if log else ""), fill=QUIET)
    board.line(left, y + thick, right + 22, y + thick)
    board.path([(right + 16, y + thick - 4), (right + 22, y + thick), (right + 16, y + thick + 4)], INK, 1.2)
    order = sorted(marks, key=lambda m: -m.value)
    for row, mark in enumerate(order):
        x = scale(mark.value) if math.isfinite(mark.value) else right + 14
        base = y + thick + 40 + 19 * row
        board.line(x, y - 5, x, base - 4, INK, 1.8 if mark.strong else 1.1, "" if mark.strong else "4 3")
        board.line(x, base - 4, x + 7, base - 4, INK, 1.8 if mark.strong else 1.1)
        board.text(x + 11, base, mark.label, bold=mark.strong)
    for value, text in scale.ticks(8):  # last, so that a number on white paper interrupts a leader that crosses it
        room = text_width(text)
        board.box(scale(value) - room / 2 - 2, y + thick + 5, room + 4, TEXT + 3, "#ffffff")
        board.line(scale(value), y + thick, scale(value), y + thick + 4, QUIET)
        board.text(scale(value), y + thick + 16, text, "middle", QUIET)
    return board.svg()


def _domain(finite: Sequence[float], log: bool) -> tuple[float, float, bool]:
    """Low end, high end, and whether the scale is logarithmic; what lies below a millionth is drawn at the low end."""
    high = max([*finite, 1.0])
    least = min([*finite, high])
    if log and high / least > 50:
        return max(least / 2, high * 1e-6), high * 1.3, True
    return 0.0, high * 1.08, False


def _bands(board: Board, scale: Scale, bands: Sequence[Band], y: float, thick: float, right: float) -> None:
    """Draw the bands, and above each the label where it fits."""
    looks = {
        "solid": "#9cc7e3",
        "hatched": board.hatch("a", "#b98a3c", "#fbf3e2", 45),
        "dotted": board.hatch("b", "#c9c9c9", "#ffffff", -45, 5),
        "plain": "#ffffff",
    }
    for band in bands:
        start = scale(band.low)
        end = scale(band.high) if math.isfinite(band.high) else right + 14
        board.box(start, y, end - start, thick, looks[band.look], INK)
        if text_width(band.label) < end - start - 8:
            board.text((start + end) / 2, y - 8, band.label, "middle", QUIET)


def curves(
    name: str,
    title: str,
    description: str,
    axes: tuple[str, str],
    lines: Sequence[Curve],
    levels: Sequence[Level] = (),
    symmetric: bool = False,
    markers: bool = False,
    height: float = 270,
) -> str:
    """SVG of lines with direct labels at their right ends and bounds as horizontal lines labelled on the left.

    ``axes`` are the texts of the horizontal and the vertical axis, units included. ``symmetric`` draws each level at
    minus its value too. ``markers`` draws the points (for values along the string). ValueError without a finite point.
    """
    points = [(x, y) for line in lines for x, y in zip(line.xs, line.ys, strict=True)]
    if not points or not all(math.isfinite(v) for point in points for v in point):
        raise ValueError(f"{name}: there is nothing to draw, or a value is not finite")
    shown = [level for level in levels if math.isfinite(level.value)]
    bounds = [level.value for level in shown] + [-level.value for level in shown if symmetric]
    y_low, y_high = _padded([y for _, y in points] + bounds + [0.0])
    x_low, x_high = _widened(min(x for x, _ in points), max(x for x, _ in points))
    board = Board(name, title, description, WIDTH, height)
    label_room = 22 + max((text_width(line.label, bold=True) for line in lines), default=0)
    frame = (58.0, 26.0, WIDTH - min(max(label_room, 40), 220), height - 42)
    x, y = Scale(x_low, x_high, frame[0], frame[2]), Scale(y_low, y_high, frame[3], frame[1])
    _grid(board, x, y, frame, axes)
    for level in shown:
        for sign in (1, -1) if symmetric else (1,):
            at = y(sign * level.value)
            board.line(frame[0], at, frame[2], at, INK, 1.3, "1.5 2.5")
        board.text(frame[0] + 6, y(level.value) - 5, level.label)
    ends = spread([y(line.ys[-1]) for line in lines], TEXT + 2, frame[1] + 2, frame[3])
    for k, (line, end) in enumerate(zip(lines, ends, strict=True)):
        stroke, dash = STROKES[k % len(STROKES)]
        xs, ys = thin(line.xs, line.ys)
        band = [] if markers else envelope(line.xs, line.ys)
        if band:
            board.area([*((x(a), y(b)) for a, _, b in band), *((x(a), y(b)) for a, b, _ in reversed(band))], stroke)
        board.path([(x(a), y(b)) for a, b in zip(xs, ys, strict=True)], stroke, 0.7 if band else 1.6, dash)
        if markers:
            for a, b in zip(xs, ys, strict=True):
                board.dot(x(a), y(b), stroke, k, 2.6 if len(xs) <= 60 else 1.4)
        last = (x(xs[-1]), y(ys[-1]))
        board.line(last[0] + 2, last[1], frame[2] + 12, end, stroke, 0.9)
        board.text(frame[2] + 15, end + 4, line.label, fill=stroke, bold=True)
    return board.svg()


def _grid(board: Board, x: Scale, y: Scale, frame: tuple[float, float, float, float], axes: tuple[str, str]) -> None:
    """Grid lines, tick texts and axis titles."""
    for value, text in y.ticks(5):
        board.line(frame[0], y(value), frame[2], y(value), QUIET if value == 0 else GRID)
        board.text(frame[0] - 6, y(value) + 4, text, "end", QUIET)
    for value, text in x.ticks(7):
        board.line(x(value), frame[3], x(value), frame[3] + 4, QUIET)
        board.text(x(value), frame[3] + 16, text, "middle", QUIET)
    board.line(frame[0], frame[3], frame[2], frame[3], QUIET)
    board.text((frame[0] + frame[2]) / 2, frame[3] + 33, axes[0], "middle", QUIET)
    board.text(4, 13, axes[1], fill=QUIET)


def _padded(values: Sequence[float]) -> tuple[float, float]:
    """Extent of the values with a little room on both sides; never empty."""
    low, high = _widened(min(values), max(values))
    room = 0.08 * (high - low)
    return (low - room if low < 0 else 0.0), high + 1.5 * room


def _widened(low: float, high: float) -> tuple[float, float]:
    """The same extent, or one of width about 1 where it has none."""
    if high - low > 1e-12 * max(abs(low), abs(high)) and high > low:
        return low, high
    room = max(0.5, 0.5 * abs(low))
    return low - room, high + room


def share_bar(name: str, share: float | None) -> str:
    """SVG of a bar filled to ``share`` of its frame (above 1: full and overrun); empty for None."""
    words = "no bound declared" if share is None else f"{100 * share:.0f} % of the bound"
    board = Board(name, "share of the bound", words, 96, 12)
    board.box(0.5, 1.5, 80, 9, "#ffffff", QUIET)
    if share is not None:
        filled = min(max(share, 0.0), 1.0)
        board.box(
            0.5, 1.5, 80 * filled, 9, "#3f7fae" if share < 1 else board.hatch("a", "#8c2d04", "#fde3d3", 45), QUIET
        )
        if share > 1:
            board.line(84, 6, 94, 6, "#8c2d04", 3)
    return board.svg()

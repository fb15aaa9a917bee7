"""A small drawing board that writes SVG text: scales, ticks, lines with dash patterns, labels that do not collide.

Lengths are in SVG user units (pixels on a screen). Equal calls give equal bytes. Text is escaped here, so a caller may
pass names as they come.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from decimal import Decimal
from html import escape
from itertools import pairwise

# Okabe & Ito, "Color universal design" (2008): colours that people with colour-blindness tell apart. Each is always
# used with its own dash pattern and a written label, so the picture also reads in grey.
STROKES: tuple[tuple[str, str], ...] = (
    ("#0072B2", ""),
    ("#D55E00", "7 3"),
    ("#009E73", "2 2.5"),
    ("#AA4499", "9 3 2 3"),
    ("#000000", "4 2"),
    ("#8A6A00", "12 4"),
)
INK = "#1a1a1a"
QUIET = "#5a5a5a"
GRID = "#dcdcdc"
FONT = "system-ui, -apple-system, 'Segoe UI', 'DejaVu Sans', Arial, sans-serif"
TEXT = 11.5
_CHARACTER = 0.57  # mean width of a character over the font size, on the wide side of common sans-serif fonts


def text_width(text: str, size: float = TEXT, bold: bool = False) -> float:
    """Estimated width of a line of text; no font is measured, so leave room."""
    return _CHARACTER * size * len(text) * (1.16 if bold else 1.0)


@dataclass(frozen=True)
class Scale:
    """Maps numbers in [low, high] to positions in [start, end], linear or by logarithm; start > end turns it round.

    Law: every value of the domain lands between start and end, low on start, high on end; values outside are moved to
    the nearer end, so nothing is ever drawn outside the frame. ValueError unless low < high (and 0 < low if ``log``).
    """

    low: float
    high: float
    start: float
    end: float
    log: bool = False

    def __post_init__(self) -> None:
        """Refuse a domain without extent."""
        if not (math.isfinite(self.low) and math.isfinite(self.high) and self.low < self.high):
            raise ValueError(f"a scale needs finite low < high, not {self.low} and {self.high}")
        if self.log and self.low <= 0:
            raise ValueError("a logarithmic scale needs a positive domain")

    def __call__(self, value: float) -> float:
        """Position of ``value``."""
        inside = min(max(value, self.low), self.high)
        if self.log:
            share = math.log(inside / self.low) / math.log(self.high / self.low)
        else:
            width = self.high - self.low
            if math.isinf(width):  # halves, so that a domain from -1e308 to 1e308 does not overflow
                share = (inside / 2 - self.low / 2) / (self.high / 2 - self.low / 2)
            else:
                share = (inside - self.low) / width
        share = min(max(share, 0.0), 1.0)
        return self.start + share * (self.end - self.start)

    def ticks(self, count: int = 6) -> list[tuple[float, str]]:
        """Round values inside the domain with their texts."""
        if self.log:
            return _log_ticks(self.low, self.high)
        return ticks(self.low, self.high, count)


def ticks(low: float, high: float, count: int = 6) -> list[tuple[float, str]]:
    """About ``count`` multiples of 1, 2 or 5 times a power of ten in [low, high], each with its text."""
    rough = Decimal(repr((high - low) / max(count, 1)))
    if rough <= 0:
        return []
    power = Decimal(1).scaleb(rough.adjusted())
    step = next(power * factor for factor in (1, 2, 5, 10) if power * factor >= rough)
    first = math.ceil(Decimal(repr(low)) / step)
    last = math.floor(Decimal(repr(high)) / step)
    return [(float(k * step), _tick_text(k * step, step)) for k in range(first, last + 1)]


def _tick_text(value: Decimal, step: Decimal) -> str:
    """The tick with the decimals of the step; exponent form where plain digits would be long."""
    if value == 0:
        return "0"
    if abs(value) >= 100000 or step < Decimal("0.0001"):
        return f"{value.normalize():e}".replace("e+", "e")
    places = max(0, -int(step.normalize().as_tuple().exponent))
    return f"{value:.{places}f}".replace("-", "−")


def _log_ticks(low: float, high: float) -> list[tuple[float, str]]:
    """1, 2, 5 times powers of ten (only powers of ten over more than three decades)."""
    factors = (1,) if math.log10(high / low) > 3 else (1, 2, 5)
    found = []
    for power in range(math.floor(math.log10(low)) - 1, math.ceil(math.log10(high)) + 1):
        for factor in factors:
            value = float(Decimal(factor).scaleb(power))
            if low <= value <= high:
                text = f"{value:g}" if -4 <= power < 5 else f"{factor}e{power}"
                found.append((value, text))
    return found


def thin(xs: Sequence[float], ys: Sequence[float], columns: int = 400) -> tuple[list[float], list[float]]:
    """A shorter line that looks the same: first, lowest, highest and last point of each of ``columns`` slices.

    Law: the smallest and the largest y, the first and the last point are kept; the order of the points is kept.
    """
    if len(xs) <= 4 * columns:
        return [float(x) for x in xs], [float(y) for y in ys]
    keep: set[int] = set()
    for k in range(columns):
        a, b = k * len(xs) // columns, (k + 1) * len(xs) // columns
        part = range(a, b)
        keep.update((a, b - 1, min(part, key=lambda i: ys[i]), max(part, key=lambda i: ys[i])))
    order = sorted(keep)
    return [float(xs[i]) for i in order], [float(ys[i]) for i in order]


def envelope(xs: Sequence[float], ys: Sequence[float], columns: int = 110) -> list[tuple[float, float, float]]:
    """(x, lowest, highest) per column where most samples turn round, so that a line would show the sampling instead.

    A signal that changes direction at more than a third of its samples has fewer than about six of them per swing.
    Empty if it is slower or has fewer than three samples a column. Law: every sample lies inside the band.
    """
    if len(xs) < 3 * columns:
        return []
    size = max(map(abs, ys))
    rises = [b - a for a, b in pairwise(ys)]
    turns = sum(a * b < 0 and min(abs(a), abs(b)) > 1e-6 * size for a, b in pairwise(rises))
    if 3 * turns < len(ys):
        return []
    band = []
    for k in range(columns):
        part = range(k * len(xs) // columns, min((k + 1) * len(xs) // columns + 1, len(xs)))
        values = [ys[i] for i in part]
        band += [(xs[part[0]], min(values), max(values)), (xs[part[-1]], min(values), max(values))]
    return band


def spread(positions: Sequence[float], gap: float, low: float, high: float) -> list[float]:
    """Move label positions apart so that neighbours are ``gap`` away from each other, inside [low, high].

    Law: the order is kept; where all fit, no two are closer than ``gap``; else they share the room.
    """
    order = sorted(range(len(positions)), key=lambda i: (positions[i], i))
    if not order:
        return []
    gap = min(gap, (high - low) / max(len(order) - 1, 1))
    placed = [min(max(positions[i], low), high) for i in order]
    for k in range(1, len(placed)):
        placed[k] = max(placed[k], placed[k - 1] + gap)
    limit = high
    for k in reversed(range(len(placed))):
        placed[k] = min(placed[k], limit)
        limit = placed[k] - gap
    result = [0.0] * len(placed)
    for i, value in zip(order, placed, strict=True):
        result[i] = value
    return result


def number(value: float) -> str:
    """A coordinate with two decimals at most: the same bytes everywhere."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


@dataclass
class Board:
    """A picture being drawn; ``title`` and ``description`` are for readers who do not see it."""

    name: str
    title: str
    description: str
    width: float
    height: float
    parts: list[str] = field(default_factory=list)

    def line(
        self, x1: float, y1: float, x2: float, y2: float, stroke: str = INK, width: float = 1, dash: str = ""
    ) -> None:
        """A straight line."""
        self.parts.append(
            f'<line x1="{number(x1)}" y1="{number(y1)}" x2="{number(x2)}" y2="{number(y2)}" '
            f'stroke="{stroke}" stroke-width="{number(width)}"{_dash(dash)}/>'
        )

    def path(self, points: Sequence[tuple[float, float]], stroke: str, width: float = 1.6, dash: str = "") -> None:
        """A line through the points."""
        if not points:
            return
        text = "M" + "L".join(f"{number(x)} {number(y)}" for x, y in points)
        self.parts.append(
            f'<path d="{text}" fill="none" stroke="{stroke}" stroke-width="{number(width)}" '
            f'stroke-linejoin="round"{_dash(dash)}/>'
        )

    def area(self, points: Sequence[tuple[float, float]], fill: str) -> None:
        """A pale area inside the points."""
        text = " ".join(f"{number(x)},{number(y)}" for x, y in points)
        self.parts.append(f'<polygon points="{text}" fill="{fill}" fill-opacity="0.18"/>')

    def box(self, x: float, y: float, width: float, height: float, fill: str, stroke: str = "none") -> None:
        """A rectangle; ``fill`` may be the result of ``hatch``."""
        self.parts.append(
            f'<rect x="{number(x)}" y="{number(y)}" width="{number(max(width, 0))}" height="{number(height)}" '
            f'fill="{fill}" stroke="{stroke}"/>'
        )

    def dot(self, x: float, y: float, fill: str, shape: int = 0, size: float = 3.2) -> None:
        """A marker: circle, square, diamond or triangle by ``shape`` modulo 4."""
        s = size
        if shape % 4 == 0:
            self.parts.append(f'<circle cx="{number(x)}" cy="{number(y)}" r="{number(s)}" fill="{fill}"/>')
            return
        corners = (
            ((-s, -s), (s, -s), (s, s), (-s, s)),
            ((0, -1.4 * s), (1.4 * s, 0), (0, 1.4 * s), (-1.4 * s, 0)),
            ((0, -1.2 * s), (1.2 * s, s), (-1.2 * s, s)),
        )[shape % 4 - 1]
        points = " ".join(f"{number(x + dx)},{number(y + dy)}" for dx, dy in corners)
        self.parts.append(f'<polygon points="{points}" fill="{fill}"/>')

    def text(
        self,
        x: float,
        y: float,
        text: str,
        anchor: str = "start",
        fill: str = INK,
        size: float = TEXT,
        bold: bool = False,
        turned: bool = False,
    ) -> None:
        """A line of text; ``y`` is the baseline; ``turned`` reads upwards. A white halo keeps it legible over lines."""
        turn = f' transform="rotate(-90 {number(x)} {number(y)})"' if turned else ""
        weight = ' font-weight="600"' if bold else ""
        self.parts.append(
            f'<text x="{number(x)}" y="{number(y)}" font-size="{number(size)}" text-anchor="{anchor}" fill="{fill}" '
            f'stroke="#ffffff" stroke-width="3" stroke-linejoin="round" paint-order="stroke"{weight}{turn}>'
            f"{escape(text)}</text>"
        )

    def hatch(self, key: str, ink: str, paper: str, angle: float, gap: float = 6) -> str:
        """Define a pattern of slanted strokes and return the fill that uses it."""
        name = f"{self.name}-{key}"
        self.parts.append(
            f'<defs><pattern id="{name}" width="{number(gap)}" height="{number(gap)}" patternUnits="userSpaceOnUse" '
            f'patternTransform="rotate({number(angle)})"><rect width="{number(gap)}" height="{number(gap)}" '
            f'fill="{paper}"/><line x1="0" y1="0" x2="0" y2="{number(gap)}" stroke="{ink}" stroke-width="2"/>'
            f"</pattern></defs>"
        )
        return f"url(#{name})"

    def svg(self) -> str:
        """The picture as one SVG element that also stands alone as a file."""
        head = (
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {number(self.width)} {number(self.height)}" '
            f'width="{number(self.width)}" height="{number(self.height)}" role="img" '
            f'aria-labelledby="{self.name}-title {self.name}-text" font-family="{escape(FONT)}">'
        )
        words = (
            f'<title id="{self.name}-title">{escape(self.title)}</title>'
            f'<desc id="{self.name}-text">{escape(self.description)}</desc>'
        )
        return "\n".join([head, words, *self.parts, "</svg>"]) + "\n"


def _dash(dash: str) -> str:
    return f' stroke-dasharray="{dash}"' if dash else ""

"""Finds room for labels: beside a mark, where no line, no mark and no other label is."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from synth.report.svg import text_width

Point = tuple[float, float]
_STEPS = 24  # points of a curve that a label may not cover
_TIGHT = 0.93  # the board's estimate of a text's width is on the wide side


@dataclass(frozen=True)
class Spot:
    """Where a text may stand: its anchor point on the baseline, and which part of the text stands there."""

    x: float
    y: float
    anchor: str = "middle"


@dataclass
class Room:
    """What a picture has drawn so far: points of lines and marks, and boxes (left, top, right, bottom) of labels."""

    points: list[Point] = field(default_factory=list)
    boxes: list[tuple[float, float, float, float]] = field(default_factory=list)

    def curve(self, a: Point, middle: Point, b: Point) -> None:
        """Note a quadratic Bezier curve from ``a`` to ``b`` with the control point ``middle``."""
        for k in range(_STEPS + 1):
            t = k / _STEPS
            u = (1 - t) * (1 - t), 2 * t * (1 - t), t * t
            self.points.append(
                (u[0] * a[0] + u[1] * middle[0] + u[2] * b[0], u[0] * a[1] + u[1] * middle[1] + u[2] * b[1])
            )

    def disc(self, x: float, y: float, size: float) -> None:
        """Note a mark."""
        angles = [2 * math.pi * k / 12 for k in range(12)]
        self.points += [(x, y), *((x + size * math.cos(a), y + size * math.sin(a)) for a in angles)]

    def crossings(self, text: str, spot: Spot, size: float) -> int:
        """How many noted points and labels a text would cover there."""
        left, top, right, bottom = box = _box(text, spot, size)
        hit = sum(left <= x <= right and top <= y <= bottom for x, y in self.points)
        return hit + 8 * sum(_overlap(box, other) for other in self.boxes)

    def best(self, text: str, spots: Sequence[Spot], size: float) -> Spot:
        """The first of the spots that covers least; the place counts as taken from now on."""
        found = min(spots, key=lambda spot: self.crossings(text, spot, size))
        self.boxes.append(_box(text, found, size))
        return found

    def shared_drop(self, texts: Iterable[tuple[str, Point]], drops: Sequence[float], size: float) -> float:
        """The first distance below their points at which a row of texts covers least, so that they stay in one line."""
        row = list(texts)

        def covered(drop: float) -> int:
            return sum(self.crossings(text, Spot(x, y + drop), size) for text, (x, y) in row)

        found = min(drops, key=covered)
        self.boxes += [_box(text, Spot(x, y + found), size) for text, (x, y) in row]
        return found

    def lowest(self) -> float:
        """The largest y of anything noted; 0 if nothing was."""
        return max([y for _, y in self.points] + [box[3] for box in self.boxes], default=0.0)


def around(x: float, y: float, half_width: float, half_height: float) -> list[Spot]:
    """Spots for a label of a mark (or a group of marks) of that size: below, then the corners, the sides and above."""
    low, high = y + half_height + 11, y - half_height - 3
    right, left = x + half_width * 0.8 + 3, x - half_width * 0.8 - 3
    return [
        Spot(x, low + 4),
        Spot(right, low, "start"),
        Spot(left, low, "end"),
        Spot(right, high, "start"),
        Spot(left, high, "end"),
        Spot(x, high - 4),
        Spot(x + half_width + 6, y + 4, "start"),
        Spot(x - half_width - 6, y + 4, "end"),
    ]


def _box(text: str, spot: Spot, size: float) -> tuple[float, float, float, float]:
    width = _TIGHT * text_width(text, size)
    left = spot.x - {"start": 0.0, "middle": 0.5, "end": 1.0}[spot.anchor] * width
    return (left - 1, spot.y - 0.8 * size - 1, left + width + 1, spot.y + 0.25 * size + 1)


def _overlap(a: tuple[float, float, float, float], b: tuple[float, float, float, float]) -> bool:
    return a[0] < b[2] and b[0] < a[2] and a[1] < b[3] and b[1] < a[3]

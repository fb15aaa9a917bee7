"""Guaranteed bounds of formulas and of their slopes over boxes of signals and parameters.

Values and slopes are carried together (exact differentiation of the formula, every step in intervals).

Law: ``evaluate`` encloses the value and the slope at every point of its box; ``least_and_most`` and ``sector`` enclose
what they are asked for over the whole box, however coarse the subdivision (which only makes them narrower).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.network.formula import Factor, Formula
from synth.network.intervals import (
    ONE,
    ZERO,
    Interval,
    Undefined,
    apply,
    bend_of,
    greatest,
    least,
    real_power,
    real_power_bend,
    real_power_slope,
    slope,
)

MOST_CELLS = 120  # cells of one subdivision
MOST_SPLITS = 14  # of a cell on which a function is not defined, before this is reported
NARROW = Fraction(1, 500)  # the part of the width that subdivision may leave open


class Located(Exception):
    """A formula is not defined on its box; carries the factor at fault, whose ``span`` is the place."""

    def __init__(self, sentence: str, factor: Factor) -> None:
        """Keep the sentence (without full stop) and the factor."""
        super().__init__(sentence)
        self.sentence = sentence
        self.factor = factor


@dataclass(frozen=True)
class Dual:
    """A value, its slope and its second derivative along one chosen direction (None: not known or not asked for)."""

    value: Interval
    slope: Interval = ZERO
    bend: Interval | None = ZERO

    @property
    def fixed(self) -> bool:
        """Whether it does not depend on the chosen direction."""
        return self.slope == ZERO and self.bend == ZERO


Line = tuple[tuple[str, Fraction], ...]  # numbers times signals, sorted by name, the first number one


def line_of(parts: Mapping[str, Fraction]) -> tuple[Line, Fraction]:
    """The direction of a linear combination and the number that multiplies it."""
    pairs = sorted((name, c) for name, c in parts.items() if c)
    lead = pairs[0][1]
    return tuple((name, c / lead) for name, c in pairs), lead


@dataclass(frozen=True)
class Box:
    """What the names of a formula stand for; ``lines`` gives linear combinations as a whole, so that h1 - h2 is one
    number and not two."""

    names: Mapping[str, Dual]
    lines: Mapping[Line, Dual]


def evaluate(formula: Formula, box: Box) -> Dual:
    """The value and slope of a formula; Located if it is not defined on the box."""
    if formula.straight:
        line, lead = line_of(formula.parts)
        if line in box.lines:
            found = box.lines[line]
            k, constant = Interval.of(lead), Interval.of(formula.constant)
            return Dual(found.value * k + constant, found.slope * k, None if found.bend is None else found.bend * k)
    total = Dual(ZERO)
    for atom, c in formula.terms:
        part = Dual(Interval.of(c))
        for factor, power in atom:
            part = _times(part, _raised(_factor(factor, box), power, factor))
        total = _plus(total, part)
    return total


def _plus(a: Dual, b: Dual) -> Dual:
    bend = None if a.bend is None or b.bend is None else a.bend + b.bend
    return Dual(a.value + b.value, a.slope + b.slope, bend)


def _times(a: Dual, b: Dual) -> Dual:
    if a.fixed and b.fixed:
        return Dual(a.value * b.value)
    bend = None
    if a.bend is not None and b.bend is not None:
        bend = a.bend * b.value + _TWO * a.slope * b.slope + a.value * b.bend
    return Dual(a.value * b.value, a.slope * b.value + a.value * b.slope, bend)


def _composed(inner: Dual, value: Interval, first: Interval, second: Interval | None) -> Dual:
    """f(g) from f, f' and f'' at g (chain rule)."""
    bend = None
    if inner.bend is not None and second is not None:
        bend = second * inner.slope * inner.slope + first * inner.bend
    return Dual(value, first * inner.slope, bend)


_TWO = Interval(Fraction(2), Fraction(2))


def _raised(base: Dual, power: int, factor: Factor) -> Dual:
    if power == 1:
        return base
    try:
        value = base.value**power
        if base.fixed:
            return Dual(value)
        n = Interval.of(Fraction(power))
        second = None
        if base.bend is not None:
            second = n * (n - ONE) * (base.value ** (power - 2) if power != 2 else ONE)
        return _composed(base, value, n * base.value ** (power - 1), second)
    except Undefined as error:
        raise Located(str(error), factor) from None


def _factor(factor: Factor, box: Box) -> Dual:
    if factor.sort in ("signal", "parameter"):
        return box.names[factor.name]
    inside = [evaluate(part, box) for part in factor.inside]
    if factor.sort == "group":
        return inside[0]
    try:
        return _called(factor, inside)
    except Undefined as error:
        raise Located(str(error), factor) from None


def _called(factor: Factor, inside: Sequence[Dual]) -> Dual:
    first = inside[0]
    if factor.sort in ("min", "max"):
        for other in inside[1:]:
            first = _chosen(first, other, factor.sort == "min")
        return first
    if factor.sort in ("sat", "deadzone"):
        limit = inside[1].value
        return _limited(first, limit) if factor.sort == "sat" else _rest(first, limit)
    if factor.sort == "power":
        value = real_power(first.value, factor.power)
        if first.fixed:
            return Dual(value)
        rate = real_power_slope(first.value, factor.power)
        return _composed(first, value, rate, None if first.bend is None else real_power_bend(first.value, factor.power))
    value = apply(factor.sort, first.value)
    if first.fixed:
        return Dual(value)
    return _composed(
        first, value, slope(factor.sort, first.value), None if first.bend is None else bend_of(factor.sort, first.value)
    )


def _chosen(a: Dual, b: Dual, smaller: bool) -> Dual:
    value = least(a.value, b.value) if smaller else greatest(a.value, b.value)
    low, high = (a, b) if smaller else (b, a)
    if low.value.high < high.value.low:
        return Dual(value, a.slope, a.bend)
    if high.value.high < low.value.low:
        return Dual(value, b.slope, b.bend)
    return Dual(value, a.slope.hull(b.slope), ZERO if a.fixed and b.fixed else None)


def _limited(signal: Dual, limit: Interval) -> Dual:
    return _chosen(_chosen(signal, Dual(limit), True), Dual(-limit), False)


def _rest(signal: Dual, limit: Interval) -> Dual:
    """The part beyond the dead zone."""
    value = greatest(signal.value - limit, ZERO) + least(signal.value + limit, ZERO)
    if signal.value.low > limit.high or signal.value.high < -limit.high:
        return Dual(value, signal.slope, signal.bend)
    if signal.value.high < limit.low and signal.value.low > -limit.low:
        return Dual(value)
    return Dual(value, signal.slope.hull(ZERO), ZERO if signal.fixed else None)


Cell = tuple[Interval, ...]
Bounding = Callable[[Cell], Interval]


def subdivided(bounding: Bounding, whole: Cell) -> Interval:
    """An enclosure of everything ``bounding`` encloses, narrowed by cutting the cell that decides an end.

    ``bounding`` may raise Located on a cell; it is then cut, and what is still undefined at the end is raised.
    """
    open_cells: list[tuple[Cell, int, Located]] = []
    done: list[tuple[Interval, Cell]] = []
    inner: list[Interval] = []

    def add(cell: Cell, splits: int) -> None:
        try:
            done.append((bounding(cell), cell))
        except Located as error:
            if splits >= MOST_SPLITS or all(side.low == side.high for side in cell):
                raise
            open_cells.append((cell, splits, error))
            return
        if any(side.low < side.high for side in cell):
            inner.append(bounding(tuple(Interval(side.middle, side.middle) for side in cell)))

    add(whole, 0)
    for _ in range(MOST_CELLS):
        if open_cells:
            cell, splits, _ = open_cells.pop(0)
            for part in _cut(cell, whole):
                add(part, splits + 1)
            continue
        low = min(range(len(done)), key=lambda i: done[i][0].low)
        high = max(range(len(done)), key=lambda i: done[i][0].high)
        if not inner:
            break
        below = min(point.high for point in inner) - done[low][0].low
        above = done[high][0].high - max(point.low for point in inner)
        if below + above <= NARROW * (done[high][0].high - done[low][0].low):
            break
        _, cell = done.pop(low if below >= above else high)
        parts = _cut(cell, whole)
        if len(parts) == 1:
            add(cell, 0)
            break
        for part in parts:
            add(part, 0)
    if open_cells:
        raise open_cells[0][2]
    return Interval(min(bound.low for bound, _ in done), max(bound.high for bound, _ in done))


def _cut(cell: Cell, whole: Cell) -> list[Cell]:
    """The cell cut in two across the side that is longest in parts of the whole."""
    parts = [(side.high - side.low) / (of.high - of.low) if of.high > of.low else Fraction(0)
             for side, of in zip(cell, whole, strict=True)]  # fmt: skip
    at = max(range(len(cell)), key=lambda k: parts[k])
    if not parts[at]:
        return [cell]
    return [(*cell[:at], half, *cell[at + 1 :]) for half in cell[at].halves()]


def least_and_most(formula: Formula, names: Mapping[str, Interval]) -> Interval:
    """All values over a box of names; exact to rounding where the formula is monotone in every name.

    A name whose slope has one sign over the box is decided at its ends; the rest is subdivided. Located if undefined.
    """
    order = sorted(names)

    def at(cell: Cell, chosen: str = "") -> Dual:
        return evaluate(formula, Box({n: Dual(v, ONE if n == chosen else ZERO)
                                      for n, v in zip(order, cell, strict=True)}, {}))  # fmt: skip

    whole = tuple(names[n] for n in order)
    low, high = list(whole), list(whole)
    for k, name in enumerate(order):
        try:
            rate = at(whole, name).slope
        except Located:
            continue
        if rate.low >= 0 or rate.high <= 0:
            first, second = (whole[k].low, whole[k].high) if rate.low >= 0 else (whole[k].high, whole[k].low)
            low[k], high[k] = Interval(first, first), Interval(second, second)
    least_value = subdivided(lambda cell: at(cell).value, tuple(low))
    most_value = subdivided(lambda cell: at(cell).value, tuple(high))
    return Interval(least_value.low, most_value.high)


def sector(value: Callable[[Cell, int], Dual], sides: Cell, along: int) -> Interval:
    """Numbers lo, hi with lo <= (value(.., xi, ..) - value(.., 0, ..))/xi <= hi over the box, xi the side ``along``.

    ``value(cell, order)`` gives values, with their slopes in xi (order 1) and second derivatives (2). On a cell X of xi
    both the slopes over all between zero and X (mean value theorem) and, if zero is not in X, the chord
    (value(X) - value(0))/X are bounds; their common part is used. Where the second derivative has one sign, the chord
    is monotone in xi (its derivative is half a second derivative somewhere between), so the two ends decide; elsewhere
    the chord at the middle and half the range of second derivatives between zero and X bound it as well.
    """

    def at(cell: Cell, xi: Interval) -> Cell:
        return (*cell[:along], xi, *cell[along + 1 :])

    def chord(cell: Cell) -> Interval:
        return (value(cell, 0).value - value(at(cell, ZERO), 0).value) / cell[along]

    def bounding(cell: Cell) -> Interval:
        xi = cell[along]
        try:
            found = value(at(cell, xi.hull(ZERO)), 1).slope
        except Located:
            if 0 in xi:
                raise
            return chord(cell)
        if 0 not in xi:
            found = found.common(chord(cell))
        try:
            bend = value(at(cell, xi.hull(ZERO)), 2).bend
        except Located:
            return found
        return found if bend is None else found.common(curved(cell, bend))

    def curved(cell: Cell, bend: Interval) -> Interval:
        """The chords over a cell from those at its middle or ends: their derivative in xi is half a second derivative
        between zero and xi."""
        xi = cell[along]
        if (bend.low >= 0 or bend.high <= 0) and xi.low < xi.high:
            return start(cell, xi.low).hull(start(cell, xi.high))
        half = Interval(bend.low / 2, bend.high / 2)
        return start(cell, xi.middle) + half * Interval(xi.low - xi.middle, xi.high - xi.middle)

    def start(cell: Cell, xi: Fraction) -> Interval:
        """The chord to one xi; at zero it is the slope there."""
        if xi == 0:
            return value(at(cell, ZERO), 1).slope
        return chord(at(cell, Interval(xi, xi)))

    try:
        bend = value(sides, 2).bend
    except Located:
        bend = None
    xi = sides[along]
    if bend == ZERO:
        return subdivided(lambda cell: value(at(cell, ZERO), 1).slope, at(sides, ZERO))
    if bend is not None and (bend.low >= 0 or bend.high <= 0) and xi.low < 0 < xi.high:
        low, high = (subdivided(chord, at(sides, Interval(end, end))) for end in (xi.low, xi.high))
        return low.hull(high)
    return subdivided(bounding, sides)

"""Parameters and matrix entries with a tolerance: how they are written, and what they do to the matrices.

A coefficient that depends on uncertain parameters is a number times a function q of them. All coefficients with the
same q form one matrix R, so that the plant's matrices are the nominal ones plus (q - middle) R: exactly as many
self-links as R has rank, each of strength half the width of q (theory section 6). The nominal matrices hold the middle
of the range of q, not q of the nominal parameter, because the links are then as weak as they can be.

Law: for all parameters in their tolerance, true matrices = nominal + sum of factor * column * row with |factor| <= the
link's strength.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.units import Unit, UnitError, parse_quantity
from synth.network.bounds import least_and_most
from synth.network.curves import short
from synth.network.formula import Atom, Formula, collected
from synth.network.intervals import Interval
from synth.network.rational import Rows, reduced

SIGNS = ("+-", "±", "..")
_PERCENT = Fraction(1, 100)
_EXAMPLE = "accepted are '0.5 s +- 10%', '0.5 s +- 0.05 s' and '0.45..0.55 s'"


@dataclass(frozen=True)
class Tolerance:
    """A range of values with its nominal value, all in ``unit``; ``written`` says whether a unit was written."""

    low: Fraction
    nominal: Fraction
    high: Fraction
    unit: Unit
    written: bool


def has_tolerance(text: str) -> bool:
    """Whether a text is written as a range."""
    return any(sign in text for sign in SIGNS)


def parse_tolerance(text: str) -> Tolerance:
    """Read ``0.5 s +- 10%``, ``0.5 s +- 0.05 s`` or ``0.45..0.55 s``; UnitError if the text is none of these.

    A unit written only behind the last number counts for both; a percentage is of the nominal value.
    """
    sign = next(s for s in SIGNS if s in text)
    first, _, second = text.partition(sign)
    if has_tolerance(second) or not first.strip() or not second.strip():
        raise UnitError(f"{text!r} is not a range; {_EXAMPLE}")
    value, unit, written = parse_quantity(first)
    other, other_unit, other_written = parse_quantity(second)
    if sign != ".." and second.strip().endswith("%") and other_unit == Unit(_PERCENT):
        if unit == other_unit:
            raise UnitError(f"{text!r} can be read in two ways; write the range as '45..55 %'")
        half = abs(value) * other * _PERCENT
        other_unit = unit
    else:
        if other_written and not written:
            unit, written = other_unit, True
        if written and not other_written:
            raise UnitError(f"the second number of {text!r} has no unit; {_EXAMPLE}")
        if unit.dimension != other_unit.dimension:
            raise UnitError(f"the two numbers of {text!r} have different units; {_EXAMPLE}")
        half = other * other_unit.factor / unit.factor
    if sign == "..":
        if half < value:
            raise UnitError(f"{text!r} ends below its start; write the smaller number first")
        return Tolerance(value, (value + half) / 2, half, unit, written)
    if half < 0:
        raise UnitError(f"the tolerance of {text!r} must be zero or more")
    return Tolerance(value - half, value, value + half, unit, written)


@dataclass(frozen=True)
class Effect:
    """One independent effect of uncertain parameters: ``function`` of them with its range, times ``matrix``."""

    function: Formula
    bounds: Interval
    matrix: Rows

    @property
    def parameters(self) -> tuple[str, ...]:
        """The parameters it comes from."""
        return tuple(sorted(self.function.parameters))

    def factored(self, width: int) -> tuple[list[list[Fraction]], Rows]:
        """Columns and rows whose products add up to the matrix, as few as its rank; every row starts with a one."""
        rows, pivots = reduced(self.matrix, width)
        return [[line[p] for line in self.matrix] for p in pivots], rows


def effects(matrices: Mapping[Atom, Rows], ranges: Mapping[str, Interval]) -> list[Effect]:
    """The effects of functions of parameters, each with its matrix; equal matrices up to a number are put together."""
    groups: dict[tuple[tuple[Fraction, ...], ...], list[tuple[Atom, Fraction]]] = {}
    for atom, matrix in matrices.items():
        lead = next((v for row in matrix for v in row if v), None)
        if lead is not None:
            groups.setdefault(tuple(tuple(v / lead for v in row) for row in matrix), []).append((atom, lead))
    found = []
    for shape, pairs in groups.items():
        lead = pairs[0][1]
        function = collected([(atom, c / lead) for atom, c in pairs], None, {})
        inside = {name: ranges[name] for name in function.parameters}
        bounds = short(least_and_most(function, inside))
        found.append(Effect(function, bounds, [[v * lead for v in row] for row in shape]))
    return found


def outer(columns: Sequence[Sequence[Fraction]], rows: Rows) -> Rows:
    """The sum of the products of columns and rows."""
    height, width = len(columns[0]), len(rows[0])
    return [
        [sum((c[i] * r[j] for c, r in zip(columns, rows, strict=True)), Fraction(0)) for j in range(width)]
        for i in range(height)
    ]

"""Nonlinear terms as sector-bounded curves over the declared bands (theory section 6).

A term phi is a function of one or several arguments, each a linear combination of signals. With xi the arguments'
deviations from the operating point it is written as a sum of steps, one argument after the other (ours):

    phi(xi) - phi(0) = sum_i [ phi(xi_1 .. xi_i, 0 ..) - phi(xi_1 .. xi_{i-1}, 0 ..) ] = sum_i m_i xi_i

with m_i between the ends of the i-th slope interval while every argument stays in its band. A product of two signals
thus costs one curve and not two.

Law: for every xi in the bands (and every parameter in its tolerance) such m_i exist.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from synth.network.bounds import Box, Cell, Dual, Line, evaluate, least_and_most, line_of, sector
from synth.network.formula import Atom, Formula, atom_parameters, atom_signals
from synth.network.intervals import ONE, ZERO, Interval, rounded_down
from synth.network.rational import rank


@dataclass(frozen=True)
class Argument:
    """A linear combination of signals: its value at the operating point, and how far it may be from that (SI)."""

    line: Line
    rest: Interval
    half: Fraction


@dataclass(frozen=True)
class Curve:
    """A nonlinear term with, per argument, the interval of its slopes, all in SI units."""

    atom: Atom
    arguments: tuple[Argument, ...]
    slopes: tuple[Interval, ...]


class NoBand(Exception):
    """A signal of a nonlinear term has no declared band; ``signals`` names those without."""

    def __init__(self, signals: tuple[str, ...]) -> None:
        """Keep the names."""
        super().__init__(", ".join(signals))
        self.signals = signals


@dataclass(frozen=True)
class Surroundings:
    """What bounds curves: per signal its value at the operating point and its band (None: not declared), bands of
    linear combinations that the user offers, and the ranges and nominal values of uncertain parameters; SI units."""

    rest: Mapping[str, Interval]
    bands: Mapping[str, Fraction | None]
    offered: Mapping[Line, Fraction]
    ranges: Mapping[str, Interval]
    nominal: Mapping[str, Fraction]


def bound_curve(atom: Atom, around: Surroundings) -> Curve:
    """The curve of a nonlinear term. NoBand if a band is missing, Located if the term is not defined in the bands."""
    arguments = _arguments(atom, around)
    # Factors of parameters alone multiply every chord, so their range multiplies the sector of the rest.
    factors = Formula(((tuple(pair for pair in atom if not pair[0].signals), Fraction(1)),))
    bent = tuple(pair for pair in atom if pair[0].signals)
    scale = least_and_most(factors, {name: around.ranges[name] for name in factors.parameters})
    uncertain = sorted(atom_parameters(bent))
    formula = Formula(((bent, Fraction(1)),))
    ranges = tuple(around.ranges[name] for name in uncertain)

    def box(xi: Cell, along: int, parameters: Cell, order: int) -> Box:
        names = {name: Dual(value) for name, value in zip(uncertain, parameters, strict=True)}
        lines = {}
        for k, argument in enumerate(arguments):
            moved = argument.rest + xi[k] if k < len(xi) else argument.rest
            seen = k == along and order > 0
            lines[argument.line] = Dual(moved, ONE, ZERO if order > 1 else None) if seen else Dual(moved)
            if len(argument.line) == 1:
                names[argument.line[0][0]] = lines[argument.line]
        return Box(names, lines)

    slopes = []
    for along in range(len(arguments)):
        sides = tuple(Interval(-a.half, a.half) for a in arguments[: along + 1])

        def value(cell: Cell, order: int, along: int = along) -> Dual:
            return evaluate(formula, box(cell[: along + 1], along, cell[along + 1 :], order))

        slopes.append(short(scale * sector(value, (*sides, *ranges), along)))
    return Curve(atom, arguments, tuple(slopes))


def short(bounds: Interval) -> Interval:
    """The interval with ends rounded outward to doubles, unless they are short rationals."""
    return Interval(rounded_down(bounds.low, 80, 53), -rounded_down(-bounds.high, 80, 53))


def _arguments(atom: Atom, around: Surroundings) -> tuple[Argument, ...]:
    lines = list(dict.fromkeys(_lines(Formula(((atom, Fraction(1)),)))))
    signals = sorted(atom_signals(atom))
    table = [[dict(line).get(name, Fraction(0)) for name in signals] for line in lines]
    if rank(table, len(signals)) < len(lines):
        lines = [((name, Fraction(1)),) for name in signals]  # combinations that hang together: signal by signal
    missing: dict[str, None] = {}
    found = []
    for line in lines:
        rest, half = ZERO, Fraction(0)
        unbounded = [name for name, _ in line if around.bands[name] is None]
        for name, c in line:
            rest += around.rest[name] * Interval.of(c)
            half += abs(c) * (around.bands[name] or 0)
        declared = around.offered.get(line)
        if declared is not None:
            half = declared if unbounded else min(half, declared)
        elif unbounded:
            missing |= dict.fromkeys(unbounded)
        found.append(Argument(line, rest, half))
    if missing:
        raise NoBand(tuple(missing))
    return tuple(found)


def _lines(formula: Formula) -> list[Line]:
    """The linear combinations of which a formula is a function."""
    if formula.straight:
        return [line_of(formula.parts)[0]]
    found: list[Line] = []
    for atom, _ in formula.terms:
        for factor, _ in atom:
            if factor.sort == "signal":
                found.append(((factor.name, Fraction(1)),))
            for part in factor.inside:
                found += _lines(part) if part.signals else []
    return found

"""Strengths of links: a quantity, an interval of quantities, or an expression of the parameters at both ends.

    0.5 1/s^2                 one number
    0.3..0.5 1/s^2            an interval: anything in it, changing at any time
    0.5 1/s^2 +- 10%          the same, by its centre; also +- 0.05 1/s^2
    to.k/to.mass              parameters of the receiving (to) and the sending (from) kind, exact
    from.area*0.2 1/s         a quantity may end an expression, or stand in parentheses: (0.2 1/s)*from.area

A parameter with a tolerance makes the strength the interval of all values it can then have, changing at any time. What
is proven is thus about more than was said: the parameter inside the unit and inside its links need not agree, nor stay
the same from one link or moment to the next.

Law: an interval contains its centre, and ``low <= high``; an expression gives the value that the same arithmetic on
exact rationals gives, and its interval holds the value for all parameters in their tolerances.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import NONE, Dimension, UnitError, dimension_text, parse_quantity
from synth.network.bounds import Located, least_and_most
from synth.network.curves import short
from synth.network.equations import Evaluator, Refused, Scope
from synth.network.intervals import Interval
from synth.network.sections import Declared, quantity, sized
from synth.network.tolerances import has_tolerance, parse_tolerance
from synth.network.yaml_map import Node, Problems, Scalar


@dataclass(frozen=True)
class Ranged:
    """A parameter with a tolerance, in SI units."""

    bounds: Interval
    dimension: Dimension


# Parameters of a kind in SI units; None for one that cannot be read (which has a sentence of its own).
Parameter = tuple[Fraction, Dimension] | Ranged | None
Parameters = Mapping[str, Parameter]

_END = re.compile(r"(?<![\w.])(?P<end>from|to)\.(?=[A-Za-z_])", re.ASCII)
_NAMED = re.compile(r"(?<![\w.])(?P<end>from|to)\.(?P<name>[A-Za-z_]\w*)", re.ASCII)
_NUMBER = r"(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?"
_UNIT = r"(?:1\s*/|[A-Za-zµ%°Ω])"
_INSIDE = re.compile(
    rf"\(\s*(?P<quantity>{_NUMBER}(?:\s*/\s*{_NUMBER})?\s+{_UNIT}[^()+]*(?:\([^()]*\))?[^()+]*)\)", re.ASCII
)
_LAST = re.compile(rf"(?<![\w.])(?P<quantity>{_NUMBER}\s+{_UNIT}.*)$", re.ASCII | re.DOTALL)


@dataclass(frozen=True)
class Span:
    """All strengths from ``low`` to ``high``."""

    low: Fraction
    high: Fraction


class StrengthRefused(Exception):
    """A strength is not accepted: one sentence without its full stop, and the character it is about."""

    def __init__(self, sentence: str, offset: int = 0) -> None:
        """Keep the sentence and the character, counted from 0."""
        super().__init__(sentence)
        self.sentence = sentence
        self.offset = offset


def read_strength(
    node: Node, wanted: Declared, taken: str, offered: str, ends: Mapping[str, Parameters], problems: Problems,
    used: set[tuple[str, str]],
) -> Span | None:  # fmt: skip
    """The strength at ``node`` in SI units; None if it is not accepted (which is then recorded).

    ``wanted`` is the SI unit of (taken unit)/(offered unit); ``taken`` and ``offered`` are these units as declared;
    ``ends`` the parameters of both kinds, by 'from' and 'to'. Those that the strength names are added to ``used`` as
    (end, parameter).
    """
    if isinstance(node, Scalar) and isinstance(node.value, str):
        text = node.text
        try:
            span = None
            if _END.search(text):
                used |= {(found["end"], found["name"]) for found in _NAMED.finditer(text)}
                span = _expression(text, ends, wanted)
            elif has_tolerance(text):
                span = _range(text, wanted)
            else:
                _refuse_bare(text, ends)
        except StrengthRefused as error:
            problems.add(f"{node.path}: {error.sentence}.", node.place_at(error.offset) or node)
            return None
        if span is not None:
            if not (sized(span.low) and sized(span.high)):
                problems.add(f"{node.path}: this strength is too large or too small to compute with.", node)
                return None
            return span
    if (
        isinstance(node, Scalar)
        and isinstance(node.value, Fraction)
        and wanted.unit.dimension != NONE
        and node.value != 0
    ):
        problems.add(
            f"{node.path}: the strength {node.text} has no unit, but a unit of {dimension_text(wanted.unit.dimension)} "
            f"is needed ({taken} taken per {offered} offered); write for example '{node.text} {wanted.text}'.",
            node,
        )
        return None
    value = quantity(node, wanted, problems, bare=False)
    return None if value is None else Span(value, value)


def _refuse_bare(text: str, ends: Mapping[str, Parameters]) -> None:
    """Say how a parameter is named, where a text that is no quantity names one without its end."""
    try:
        parse_quantity(text)
    except UnitError:
        for found in re.finditer(r"(?<![\w.])[A-Za-z_]\w*", text, re.ASCII):
            if owners := [f"{end}.{found[0]}" for end, parameters in ends.items() if found[0] in parameters]:
                raise StrengthRefused(
                    f"{found[0]!r} is a parameter, and a link has two ends; write {' or '.join(owners)}", found.start()
                ) from None


def _range(text: str, wanted: Declared) -> Span:
    """An interval or a centre with a tolerance; a unit must be written unless the strength has none."""
    try:
        found = parse_tolerance(text)
    except UnitError as error:
        raise StrengthRefused(f"{error}") from None
    if not found.written and wanted.unit.dimension != NONE:
        raise StrengthRefused(f"{text.strip()!r} has no unit; write for example '0.3..0.5 {wanted.text}'")
    if found.unit.dimension != wanted.unit.dimension:
        raise StrengthRefused(
            f"{text.strip()!r} has the unit {dimension_text(found.unit.dimension)}, but {wanted.text} is needed here"
        )
    return Span(found.low * found.unit.factor, found.high * found.unit.factor)


def _expression(text: str, ends: Mapping[str, Parameters], wanted: Declared) -> Span:
    """Arithmetic over ``from.name`` and ``to.name``; the text keeps its length, so that places in it stay right."""
    names: dict[str, tuple[Fraction, Dimension]] = {}
    plain, quantities = text, 0
    for pattern in (_INSIDE, _LAST):
        while found := pattern.search(plain):
            if pattern is _LAST and plain[: found.start()].rstrip().endswith("/"):
                raise StrengthRefused(
                    f"{found['quantity'].strip()!r} behind a / can be read in two ways; put the quantity in "
                    f"parentheses",
                    found.start(),
                )
            try:
                value, unit, _ = parse_quantity(found["quantity"])
            except UnitError as error:
                raise StrengthRefused(f"{error}", found.start("quantity")) from None
            quantities += 1
            name = f"_{quantities}"
            if found.end() - found.start() < len(name):
                raise StrengthRefused(f"{found['quantity']!r} cannot be read as a quantity", found.start())
            name = name.ljust(found.end() - found.start(), "_")  # as long as what it stands for, so that places stay
            names[name] = (value * unit.factor, unit.dimension)
            plain = plain[: found.start()] + name + plain[found.end() :]
    known: list[str] = []
    ranges: dict[str, Interval] = {}
    for end, parameters in ends.items():
        for name, entry in parameters.items():
            known.append(f"{end}.{name}")
            at = re.search(rf"(?<![\w.]){end}\.{name}(?!\w)", plain)
            if isinstance(entry, Ranged):
                ranges[f"{end}_{name}"] = entry.bounds
                names[f"{end}_{name}"] = (entry.bounds.middle, entry.dimension)
            elif entry is not None:
                names[f"{end}_{name}"] = entry
            elif at:
                raise StrengthRefused(
                    f"the parameter {end}.{name} cannot be read, so this strength is not known; mend the parameter, or "
                    "give the strength as a number or an interval",
                    at.start(),
                )
    for found in _NAMED.finditer(plain):
        if found[0] not in known:
            accepted = ", ".join(known) or "none (matrices carry numbers)"
            raise StrengthRefused(
                f"unknown parameter {found[0]!r}{nearest(found[0], known)}; known here are {accepted}",
                found.start(),
            )
    if clash := re.search(r"(?<![\w.])(?:from|to)_\w+", plain):
        raise StrengthRefused(f"unknown name {clash[0]!r}; known here are {', '.join(known)}", clash.start())
    try:
        walker = Evaluator(_END.sub(lambda m: f"{m['end']}_", plain), Scope(names, {}, uncertain=frozenset(ranges)))
        walker.text = text
        result = walker.total(walker.tree, wanted.unit.dimension, wanted.text, 0)
    except Refused as error:
        raise StrengthRefused(error.sentence, error.offset) from None
    if result.parameters and not result.signals:
        try:
            bounds = short(least_and_most(result, {name: ranges[name] for name in result.parameters}))
        except Located as error:
            raise StrengthRefused(
                f"this strength is not bounded for all parameters within their tolerances: {error.sentence}; narrow "
                "the tolerances, or give the strength as an interval"
            ) from None
        return Span(bounds.low, bounds.high)
    if result.plain is None:
        raise StrengthRefused("this is not one number; a strength is made of numbers and parameters of both ends")
    return Span(result.plain, result.plain)

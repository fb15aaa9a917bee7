"""Reads what a kind offers and what its sensors read: linear expressions, or units to which matrices give the rows."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.units import Dimension, Unit
from synth.network.equations import Refused, Scope, read_formula
from synth.network.formula import Formula, curved
from synth.network.intervals import Interval
from synth.network.sections import Declared, Section, name_is_good, named_entries, quantity, section, text_of, unit_of
from synth.network.yaml_map import Entry, Listing, Node, Problems, Scalar, Table

FORBIDDEN_OUTPUT = "an offered signal is made of states, taken signals and disturbances"
FORBIDDEN_SENSOR = "a sensor is made of states and taken signals"


@dataclass
class Draft:
    """What has been read of a kind so far; a row per output is its coefficients by group."""

    name: str
    problems: Problems
    parameters: dict[str, tuple[Fraction, Dimension]] = field(default_factory=dict)
    states: dict[str, Declared] = field(default_factory=dict)
    inputs: dict[str, Declared] = field(default_factory=dict)
    takes: dict[str, Declared] = field(default_factory=dict)
    disturbances: dict[str, Declared] = field(default_factory=dict)
    bands: dict[str, Fraction | None] = field(default_factory=dict)
    limits: dict[str, Fraction | None] = field(default_factory=dict)
    peaks: dict[str, Fraction] = field(default_factory=dict)
    offers: dict[str, Output] = field(default_factory=dict)
    sensors: dict[str, Output] = field(default_factory=dict)
    take_bands: dict[str, Fraction | None] = field(default_factory=dict)  # for nonlinear terms only
    ranges: dict[str, Interval] = field(default_factory=dict)  # of the parameters with a tolerance, in SI units
    pointed: bool = False  # whether the kind names an operating point
    written: frozenset[str] = frozenset()  # every declared name, also those whose declaration has a problem

    def scope(self, allowed: tuple[str, ...], why_not: str = "") -> Scope:
        """The names that an expression of this kind may use."""
        groups = {"state": self.states, "input": self.inputs, "take": self.takes, "disturbance": self.disturbances}
        signals = {n: d.unit for table in groups.values() for n, d in table.items()}
        names = {n: g for g, table in groups.items() for n in table}
        broken = self.written - set(signals) - set(self.parameters)
        return Scope(self.parameters, signals, names, allowed, why_not, frozenset(self.ranges), broken)


@dataclass(frozen=True)
class Output:
    """An offered signal or a sensor: its unit, its expression (None where matrices give it) and its allowed peak."""

    declared: Declared
    value: Formula | None
    band: Fraction | None = None
    node: Node | None = None  # where the expression stands


def positive(
    node: Node | None, declared: Declared, what: str, problems: Problems, zero: bool = False
) -> Fraction | None:
    """A bound on an absolute value in the declared unit; None if it is absent or not above zero (or not zero or
    more)."""
    value = quantity(node, declared, problems)
    if value is not None and node is not None and (value < 0 or (value == 0 and not zero)):
        problems.add(
            f"{node.path}: {what} must be {'zero or more' if zero else 'above zero'}; it bounds the absolute value.",
            node,
        )
        return None
    return value


def _entries_or_list(node: Node | None, draft: Draft, example: str) -> Iterable[Entry]:
    """The entries of a mapping; the items of a list count as ``name: name``."""
    if isinstance(node, Listing):
        seen: set[str] = set()
        for item in node.items:
            name = text_of(item, draft.problems, "a signal name")
            if name is None or not name_is_good(name, draft.problems, item, node.path):
                continue
            if name in seen:
                draft.problems.add(f"{item.path}: {name!r} stands twice in this list; keep one of them.", item)
                continue
            seen.add(name)
            yield Entry(name, item.place, item)
    else:
        yield from named_entries(node, draft.problems, example)


def _output(entry: Entry, sort: str, draft: Draft, scope: Scope, by_matrix: bool) -> Output | None:
    """One offered signal or sensor, from ``name: expression``, ``name: {is: expression, in: unit}`` or by a matrix."""
    node, part = entry.value, None
    declared: Declared | None = None
    if isinstance(node, Table):
        part = section(node, sort, draft.problems, "{is: slot, in: m}")
        if part is None:
            return None
        inside, declared = part.get("is"), unit_of(part.get("in"), draft.problems)
        if by_matrix and inside is not None:
            draft.problems.add(
                f"{inside.path}: the matrix gives this signal already; take 'is' out, or the matrix.", inside
            )
            return None
        if not by_matrix:
            inside = part.need("is", "is: slot")
            if inside is None or (part.get("in") is not None and declared is None):
                return None
        elif declared is None:
            part.need("in", "in: m")
            return None
    else:
        inside = node
        if by_matrix:
            declared = unit_of(node, draft.problems)
            return None if declared is None else Output(declared, None)
    value: Formula | None = None
    if not by_matrix:
        value = read_expression(inside, scope, declared, draft)
        if value is None:
            return None
        declared = declared or _derived(inside, value, draft)
    if declared is None:
        return None
    band = positive(part.get("band"), declared, "the allowed peak 'band'", draft.problems) if part else None
    return Output(declared, value, band, inside)


def _derived(node: Node | None, value: Formula, draft: Draft) -> Declared:
    """The unit of an expression: that of the signal if it is one alone, otherwise the SI unit of its dimension."""
    name = node.text.strip() if isinstance(node, Scalar) else ""
    for table in (draft.states, draft.takes, draft.disturbances):
        if name in table:
            return table[name]
    unit = Unit(Fraction(1), value.dimension or Unit().dimension)
    return Declared(unit.text, unit)


def read_expression(node: Node | None, scope: Scope, declared: Declared | None, draft: Draft) -> Formula | None:
    """The formula written at ``node``; a reason against it is recorded at its character."""
    problems = draft.problems
    text = text_of(node, problems, "an expression, such as '(demand - drive)/lag',")
    if text is None or not isinstance(node, Scalar):
        return None
    unit = None if declared is None else declared.unit
    try:
        found = read_formula(text, scope, unit, "" if declared is None else declared.text)
        if found.constant and not draft.pointed and not found.parameters and not any(True for _ in curved(found)):
            raise Refused(
                "this expression has a constant part; the model is about differences from the operating point, "
                "so leave it out, or make it a disturbance with a peak",
                len(text) - len(text.lstrip()),
            )
    except Refused as error:
        if error.sentence or not problems.found:
            problems.add(f"{node.path}: {error.sentence}.", node.place_at(error.offset, error.length))
        return None
    return found


def read_offers(part: Section, draft: Draft, by_matrix: bool) -> None:
    """Read the offered signals into the draft; ``by_matrix`` says that H gives their rows."""
    node, example = part.get("offers"), "{place: {is: slot, band: 1.5 m}}"
    if by_matrix and isinstance(node, Listing):
        draft.problems.add(
            f"{node.path}: with the matrix H, offers are a mapping of units, such as '{{place: m}}'.", node
        )
        return
    scope = draft.scope(("state", "take", "disturbance"), FORBIDDEN_OUTPUT)
    for entry in _entries_or_list(node, draft, example):
        output = _output(entry, "offer", draft, scope, by_matrix)
        if output is not None:
            draft.offers[entry.key] = output


def read_sensors(part: Section, draft: Draft, by_matrix: bool) -> None:
    """Read the sensors into the draft; ``by_matrix`` says that C gives their rows."""
    node, example = part.get("sensors"), "[slot, speed]"
    if node is None:
        if draft.inputs:
            part.need("sensors", f"sensors: [{', '.join(list(draft.states)[:3]) or 'level'}]")
        return
    if by_matrix and isinstance(node, Listing):
        draft.problems.add(
            f"{node.path}: with the matrix C, sensors are a mapping of units, such as '{{slot: m}}'.", node
        )
        return
    scope = draft.scope(("state", "take"), FORBIDDEN_SENSOR)
    for entry in _entries_or_list(node, draft, example):
        output = _output(entry, "sensor", draft, scope, by_matrix)
        if output is not None:
            draft.sensors[entry.key] = output

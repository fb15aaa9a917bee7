"""Reads what the design must reach and how the simulation is sized."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, parse_unit
from synth.network.model import Goal, Kind, SimulationPlan
from synth.network.sections import Declared, items_of, named_entries, quantity, section, text_of, whole
from synth.network.yaml_map import Entry, Node, Problems

RATE = Declared("1/s", parse_unit("1/s"))
TIME = Declared("s", parse_unit("s"))
NUMBER = Declared("1", Unit())
LONGEST = Fraction(10**7)


@dataclass(frozen=True)
class Nameable:
    """What the section ``design`` may name: ``kinds`` without problems, ``declared`` the names of all.

    ``places`` lists the places of a declared kind where the cell has named places: what is said about the kind is said
    about each of them, unless it has an entry of its own.
    """

    kinds: Mapping[str, Kind]
    declared: tuple[str, ...]
    places: Mapping[str, tuple[str, ...]] = field(default_factory=dict)


def read_goal(node: Node | None, known: Nameable, problems: Problems) -> Goal:
    """The section ``design``; its defaults stand where it is absent. ``gains`` is read by ``cell.grouped``."""
    part = section(node, "design", problems, "{target: 0.9, slowest: 0.4 1/s, fastest: 8 1/s}")
    if part is None:
        return Goal()
    path = part.table.path
    target = quantity(part.get("target"), NUMBER, problems)
    if target is not None and not 0 < target < 1:
        problems.add(
            f"{path}.target: the target is a radius above 0 and below 1, and {_said(target)} is not; write for "
            "example 0.9.",
            part.get("target"),
        )
    slowest = quantity(part.get("slowest"), RATE, problems)
    if slowest is not None and slowest < 0:
        problems.add(
            f"{path}.slowest: the slowest mode must decay at zero or more per second; write for example 0.4 1/s.",
            part.get("slowest"),
        )
    fastest = quantity(part.get("fastest"), RATE, problems)
    if fastest is not None and fastest <= (slowest or 0):
        problems.add(
            f"{path}.fastest: {_said(fastest)} 1/s is not above the slowest mode ({_said(slowest or Fraction(0))} "
            "1/s); "
            "no mode fits between them, so raise fastest or lower slowest.",
            part.get("fastest"),
        )
    period = quantity(part.get("period"), TIME, problems)
    if period is not None and period <= 0:
        problems.add(
            f"{path}.period: the sample period must be above zero; write for example 0.02 s.", part.get("period")
        )
    return Goal(
        target=Goal().target if target is None else target,
        slowest=slowest,
        fastest=fastest,
        period=period,
        gain_bounds=_gain_bounds(part.get("gain_bounds"), known, problems),
        uses=_uses(part.get("uses"), known, problems),
    )


def _said(value: Fraction) -> str:
    return f"{float(value):g}"


def kinds_named(
    node: Node | None, known: Nameable, problems: Problems, example: str
) -> Iterator[tuple[Kind, Entry, tuple[str, ...]]]:
    """The kinds that a table names, each with its entry and the names of the kinds that the entry is about."""
    entries = list(named_entries(node, problems, example))
    own = {entry.key for entry in entries}
    for entry in entries:
        if entry.key in known.kinds:
            yield known.kinds[entry.key], entry, (entry.key,)
        elif known.places.get(entry.key):
            about = tuple(place for place in known.places[entry.key] if place in known.kinds)
            if about:
                yield known.kinds[about[0]], entry, tuple(place for place in about if place not in own)
        elif entry.key not in known.declared:
            problems.add(
                f"{entry.value.path}: unknown kind {entry.key!r}{nearest(entry.key, known.declared)}; declared are "
                f"{', '.join(known.declared) or 'none'}.",
                entry,
            )


def is_known(
    entry: Entry, name: str, names: Mapping[str, str], what: str, problems: Problems, where: Node | Entry
) -> bool:
    """Whether ``name`` is one of ``names``; if not, say so with the nearest of them."""
    if name in names:
        return True
    problems.add(
        f"{entry.value.path}: unknown {what} {name!r}{nearest(name, names)}; accepted are "
        f"{', '.join(names) or 'none'}.",
        where,
    )
    return False


def _gain_bounds(node: Node | None, known: Nameable, problems: Problems) -> dict[str, dict[str, dict[str, Fraction]]]:
    """Bounds on the absolute value of gains, ``kind: {actuator: {sensor: bound}}``."""
    result: dict[str, dict[str, dict[str, Fraction]]] = {}
    example = "{hauler: {demand: {speed: 6 1/s}}}"
    for kind, entry, about in kinds_named(node, known, problems, example):
        inputs, sensors = {a.name: a.unit for a in kind.inputs}, {s.name: s.unit for s in kind.sensors}
        for actuator in named_entries(entry.value, problems, "{demand: {speed: 6 1/s}}"):
            if not is_known(entry, actuator.key, inputs, f"input of {kind.name}", problems, actuator):
                continue
            for sensor in named_entries(actuator.value, problems, "{speed: 6 1/s}"):
                if not is_known(actuator, sensor.key, sensors, f"sensor of {kind.name}", problems, sensor):
                    continue
                unit = parse_unit(inputs[actuator.key]) / parse_unit(sensors[sensor.key])
                text = unit.text if unit.factor == 1 else f"({inputs[actuator.key]})/({sensors[sensor.key]})"
                bound = quantity(sensor.value, Declared(text, unit), problems)
                if bound is not None and bound < 0:
                    problems.add(
                        f"{sensor.value.path}: a bound on the absolute value must be zero or more.", sensor.value
                    )
                elif bound is not None:
                    for name in about:
                        result.setdefault(name, {}).setdefault(actuator.key, {})[sensor.key] = bound
    return result


def _uses(node: Node | None, known: Nameable, problems: Problems) -> dict[str, dict[str, tuple[str, ...]]]:
    """Which sensors an actuator may use, ``kind: {actuator: [sensors]}``."""
    result: dict[str, dict[str, tuple[str, ...]]] = {}
    for kind, entry, about in kinds_named(node, known, problems, "{hauler: {demand: [slot, speed]}}"):
        inputs, sensors = {a.name: a.unit for a in kind.inputs}, {s.name: s.unit for s in kind.sensors}
        for actuator in named_entries(entry.value, problems, "{demand: [slot, speed]}"):
            if not is_known(entry, actuator.key, inputs, f"input of {kind.name}", problems, actuator):
                continue
            names = []
            for item in items_of(actuator.value, problems, "[slot, speed]"):
                name = text_of(item, problems, "the name of a sensor")
                if name is not None and is_known(actuator, name, sensors, f"sensor of {kind.name}", problems, item):
                    names.append(name)
            for place in about:
                result.setdefault(place, {})[actuator.key] = tuple(dict.fromkeys(names))
    return result


def read_simulation(node: Node | None, problems: Problems) -> SimulationPlan:
    """The section ``simulation``; its defaults stand where it is absent."""
    part = section(node, "simulation", problems, "{units: 50, seconds: 60 s}")
    if part is None:
        return SimulationPlan()
    units = whole(part.get("units"), problems, 2, 100_000)
    seconds = quantity(part.get("seconds"), TIME, problems)
    if seconds is not None and not 0 < seconds <= LONGEST:
        problems.add(
            f"{part.table.path}.seconds: the duration must be above zero and at most 1e7 s; write for example 60 s.",
            part.get("seconds"),
        )
    default = SimulationPlan()
    return SimulationPlan(units or default.units, default.seconds if seconds is None else seconds)

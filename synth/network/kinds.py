"""Reads one kind of unit: its signals, and its model by equations or by matrices."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.exact import ExactMatrix
from synth.base.units import Dimension, Unit, UnitError, parse_quantity
from synth.network.equations import Linear, coefficients_in
from synth.network.matrices import read_matrices
from synth.network.model import Actuator, Disturbance, Kind, Signal
from synth.network.outputs import Draft, Output, positive, read_expression, read_offers, read_sensors
from synth.network.sections import Declared, Section, named_entries, quantity, section, sized, text_of, unit_of
from synth.network.yaml_map import Entry, Problems, Scalar, Table

SECOND = Unit(Fraction(1), tuple(int(i == 2) for i in range(7)))


def read_kind(entry: Entry, problems: Problems) -> Kind | None:
    """Read the kind at ``entry``; None if it has problems (which are then recorded)."""
    before = problems.count
    part = section(entry.value, "kind", problems, "{states: {level: m}, equations: {level': ...}}")
    if part is None:
        return None
    groups = [part.get(g) for g in ("parameters", "states", "inputs", "disturbances", "takes")]
    written = frozenset(name for group in groups if isinstance(group, Table) for name in group.entries)
    draft = Draft(entry.key, problems, written=written)
    _parameters(part, draft)
    _states(part, draft)
    _inputs(part, draft)
    _disturbances(part, draft)
    _takes(part, draft)
    matrices = part.get("matrices")
    given = section(matrices, "matrices", problems, "{A: [[0, 1], [0, -1]], B: [[0], [1]]}")
    read_offers(part, draft, given is not None and given.get("H") is not None)
    read_sensors(part, draft, given is not None and given.get("C") is not None)
    if matrices is not None and part.get("equations") is not None:
        problems.add(f"{entry.value.path}: give either 'equations' or 'matrices', not both.", part.table)
        return None
    if matrices is not None:
        return _from_matrices(given, part, draft, before)
    return _from_equations(part, draft, before)


def _fresh(name: str, draft: Draft, where: Entry) -> bool:
    """Whether the name is not used yet; expressions could not tell two things of one name apart."""
    tables: dict[str, Mapping[str, object]] = {
        "a parameter": draft.parameters, "a state": draft.states, "an input": draft.inputs,
              "a disturbance": draft.disturbances, "a taken signal": draft.takes}  # fmt: skip
    for what, table in tables.items():
        if name in table:
            draft.problems.add(
                f"{where.value.path}: {name!r} is already the name of {what}; choose another name.", where
            )
            return False
    return True


def _parameters(part: Section, draft: Draft) -> None:
    for entry in named_entries(part.get("parameters"), draft.problems, "{lag: 0.5 s}"):
        node = entry.value
        text = text_of(node, draft.problems, "a quantity, such as '0.5 s',")
        if text is None or not _fresh(entry.key, draft, entry):
            continue
        if isinstance(node, Scalar) and isinstance(node.value, Fraction):
            draft.parameters[entry.key] = (node.value, Unit().dimension)
        elif "+-" in text or "±" in text:
            quantity(node, Declared("1", Unit()), draft.problems)  # records that tolerances are not honoured
            draft.parameters[entry.key] = _nominal(text)
        else:
            try:
                value, unit, _ = parse_quantity(text)
                draft.parameters[entry.key] = (value * unit.factor, unit.dimension)
            except UnitError as error:
                draft.problems.add(f"{node.path}: {error}; accepted is for example '0.5 s'.", node)


def _nominal(text: str) -> tuple[Fraction, Dimension]:
    """The value before the tolerance, so that the equations do not report its name as unknown as well."""
    try:
        value, unit, _ = parse_quantity(text.replace("±", "+-").split("+-")[0])
    except UnitError:
        return Fraction(1), Unit().dimension
    return value * unit.factor, unit.dimension


def _declared(entry: Entry, sort: str, draft: Draft) -> tuple[Declared | None, Section | None]:
    """The unit of a signal written ``name: m`` or ``name: {in: m, ...}``, and the section of the second form."""
    if not isinstance(entry.value, Table):
        return unit_of(entry.value, draft.problems), None
    part = section(entry.value, sort, draft.problems, "{in: m}")
    if part is None:
        return None, None
    return unit_of(part.need("in", "in: m"), draft.problems), part


def _states(part: Section, draft: Draft) -> None:
    node = part.need("states", "states: {level: m, flow: m3/s}")
    for entry in named_entries(node, draft.problems, "{level: m, flow: m3/s}"):
        declared, details = _declared(entry, "state", draft)
        if _fresh(entry.key, draft, entry) and declared is not None:
            draft.states[entry.key] = declared
            band = details.get("band") if details else None
            draft.bands[entry.key] = positive(band, declared, "the allowed peak 'band'", draft.problems)
    if isinstance(node, Table) and not node.entries:
        draft.problems.add(f"{node.path}: a kind needs at least one state, such as 'level: m'.", node)


def _inputs(part: Section, draft: Draft) -> None:
    for entry in named_entries(part.get("inputs"), draft.problems, "{demand: {in: m/s^2, limit: 2.5}}"):
        declared, details = _declared(entry, "input", draft)
        if _fresh(entry.key, draft, entry) and declared is not None:
            draft.inputs[entry.key] = declared
            limit = details.get("limit") if details else None
            draft.limits[entry.key] = positive(limit, declared, "the limit", draft.problems)


def _disturbances(part: Section, draft: Draft) -> None:
    for entry in named_entries(part.get("disturbances"), draft.problems, "{slope: {in: m/s^2, peak: 0.3}}"):
        declared, details = _declared(entry, "disturbance", draft)
        if not _fresh(entry.key, draft, entry) or declared is None:
            continue
        draft.disturbances[entry.key] = declared
        if details is None:
            draft.problems.add(
                f"{entry.value.path}: the largest value of this disturbance is missing; "
                f"write for example '{entry.key}: {{in: {declared.text}, peak: 0.3}}'.",
                entry,
            )
            continue
        peak = positive(details.need("peak", "peak: 0.3"), declared, "the peak", draft.problems, zero=True)
        draft.peaks[entry.key] = Fraction(0) if peak is None else peak


def _takes(part: Section, draft: Draft) -> None:
    for entry in named_entries(part.get("takes"), draft.problems, "{ahead: m/s^2}"):
        declared, _ = _declared(entry, "take", draft)
        if _fresh(entry.key, draft, entry) and declared is not None:
            draft.takes[entry.key] = declared


def _from_equations(part: Section, draft: Draft, before: int) -> Kind | None:
    node = part.need("equations", "equations: {level': (inflow - outflow)/area}")
    if node is None:
        return None
    if not isinstance(node, Table):
        draft.problems.add(f"{node.path}: a mapping is expected here, such as '{{level': inflow/area}}'.", node)
        return None
    rows: dict[str, Linear] = {}
    texts: dict[str, str] = {}
    keys = [f"{name}'" for name in draft.states]
    for key, entry in node.entries.items():
        if key not in keys:
            if key.endswith("'") and key[:-1] in draft.written - set(draft.states):
                states = part.get("states")
                if isinstance(states, Table) and key[:-1] in states.entries:
                    continue  # its declaration has a problem already
            draft.problems.add(
                f"{node.path}: {key!r} is not the derivative of a state{nearest(key, keys)}; accepted are "
                f"{', '.join(keys)}.",
                entry,
            )
            continue
        state = draft.states[key[:-1]]
        rate = Declared(f"{state.text} per second", state.unit / SECOND)
        value = read_expression(
            entry.value, draft.scope(("state", "input", "take", "disturbance")), rate, draft.problems
        )
        if value is not None and isinstance(entry.value, Scalar):
            rows[key[:-1]] = value
            texts[key] = entry.value.text
    for key in keys:
        if key not in node.entries:
            draft.problems.add(
                f'{node.path}: the equation of {key} is missing; write "{key}: ...", or 0 if it is constant.', node
            )
    if draft.problems.count > before:
        return None

    def matrix(table: dict[str, Declared]) -> ExactMatrix:
        names = {n: d.unit for n, d in table.items()}
        lines = [coefficients_in(rows[s], names, d.unit / SECOND) for s, d in draft.states.items()]
        for line, state in zip(lines, draft.states, strict=True):
            if not all(map(sized, line)):
                draft.problems.add(
                    f"{node.path}.{state}': a coefficient is too large or too small to compute with.",
                    node.entries[f"{state}'"],
                )
        return ExactMatrix.of(lines, (len(draft.states), len(table)))

    blocks = {
        "A": matrix(draft.states),
        "B": matrix(draft.inputs),
        "D": matrix(draft.takes),
        "E": matrix(draft.disturbances),
    }
    return _kind(draft, blocks, part, before, texts)


def _from_matrices(given: Section | None, part: Section, draft: Draft, before: int) -> Kind | None:
    if part.get("parameters") is not None:
        draft.problems.add(
            f"{part.table.path}.parameters: parameters belong to equations; matrices carry numbers. Take them out.",
            part.get("parameters"),
        )
    if given is None:
        return None
    sizes = {
        "states": len(draft.states), "inputs": len(draft.inputs), "takes": len(draft.takes),
        "disturbances": len(draft.disturbances), "offers": len(draft.offers), "sensors": len(draft.sensors),
    }  # fmt: skip
    declared_whole = draft.problems.count == before
    blocks = read_matrices(given, sizes, declared_whole)
    return None if draft.problems.count > before else _kind(draft, blocks, part, before, {})


def _kind(
    draft: Draft, blocks: dict[str, ExactMatrix], part: Section, before: int, texts: dict[str, str]
) -> Kind | None:
    """Put the parts together; rows that expressions give are converted to declared units here."""

    def rows(outputs: dict[str, Output], table: dict[str, Declared]) -> ExactMatrix:
        names = {n: d.unit for n, d in table.items()}
        lines = [coefficients_in(o.value, names, o.declared.unit) for o in outputs.values() if o.value is not None]
        if not all(sized(v) for line in lines for v in line):
            draft.problems.add(
                f"{part.table.path}: a coefficient of an offer or a sensor is too large or too small to compute with.",
                part.table,
            )
        return ExactMatrix.of(lines, (len(outputs), len(table)))

    if "H" not in blocks:
        blocks |= {"H": rows(draft.offers, draft.states), "F": rows(draft.offers, draft.takes)}
        blocks |= {"Fw": rows(draft.offers, draft.disturbances)}
    if "C" not in blocks:
        blocks |= {"C": rows(draft.sensors, draft.states), "N": rows(draft.sensors, draft.takes)}
    if draft.problems.count > before:
        return None
    return Kind(
        name=draft.name,
        states=tuple(Signal(n, d.text, draft.bands[n]) for n, d in draft.states.items()),
        inputs=tuple(Actuator(n, d.text, draft.limits[n]) for n, d in draft.inputs.items()),
        disturbances=tuple(Disturbance(n, d.text, draft.peaks[n]) for n, d in draft.disturbances.items()),
        takes=tuple(Signal(n, d.text) for n, d in draft.takes.items()),
        offers=tuple(Signal(n, o.declared.text, o.band) for n, o in draft.offers.items()),
        sensors=tuple(Signal(n, o.declared.text) for n, o in draft.sensors.items()),
        equations=texts,
        **blocks,
    )

"""Reads one kind of unit: its signals, and its model by equations or by matrices."""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, UnitError, parse_quantity
from synth.network.assembling import Model, assembled
from synth.network.controller_reading import read_controller
from synth.network.files_of_matrices import plant_matrices, plant_object, read_matrix_file
from synth.network.formula import Formula
from synth.network.intervals import Interval
from synth.network.matrices import UncertainEntry, read_matrices
from synth.network.model import Kind
from synth.network.outputs import Draft, positive, read_expression, read_offers, read_sensors
from synth.network.sections import Declared, Section, named_entries, section, sized, text_of, unit_of
from synth.network.tolerances import has_tolerance, parse_tolerance
from synth.network.yaml_map import Entry, Foreign, Node, Problems, Scalar, Table

SECOND = Unit(Fraction(1), tuple(int(i == 2) for i in range(7)))


def read_kind(entry: Entry, problems: Problems) -> Kind | None:
    """Read the kind at ``entry``; None if it has problems (which are then recorded)."""
    before = problems.count
    part = section(entry.value, "kind", problems, "{states: {level: m}, equations: {level': ...}}")
    if part is None:
        return None
    groups = [part.get(g) for g in ("parameters", "states", "inputs", "disturbances", "takes")]
    written = frozenset(name for group in groups if isinstance(group, Table) for name in group.entries)
    draft = Draft(entry.key, problems, written=written, pointed=part.get("operating_point") is not None)
    _parameters(part, draft)
    _states(part, draft)
    _inputs(part, draft)
    _disturbances(part, draft)
    _takes(part, draft)
    if part.get("states") is None:
        return None  # said already; everything below would be about missing states
    ways = [way for way in ("equations", "matrices", "file", "plant") if part.get(way) is not None]
    matrices = read_matrix_file(file, problems) if (file := part.get("file")) is not None else part.get("matrices")
    given = section(matrices, "matrices", problems, "{A: [[0, 1], [0, -1]], B: [[0], [1]]}")
    plant = plant_object(part.get("plant"), problems)
    read_offers(part, draft, _by_matrix(given, "H", plant, part.get("offers"), bool({"file", "plant"} & set(ways))))
    read_sensors(part, draft, _by_matrix(given, "C", plant, part.get("sensors"), bool({"file", "plant"} & set(ways))))
    if len(ways) > 1:
        problems.add(f"{entry.value.path}: give one of {' and '.join(map(repr, ways))}, not more.", entry)
        return None
    if "plant" in ways:
        given = plant_matrices(plant, part, draft) if plant is not None and problems.count == before else None
    by_matrices = bool(ways) and ways != ["equations"]
    kind = _from_matrices(given, part, draft, before) if by_matrices else _from_equations(part, draft, before)
    return None if kind is None else read_controller(part.get("controller"), kind, problems)


def _by_matrix(given: Section | None, name: str, plant: Foreign | None, outputs: Node | None, unread: bool) -> bool:
    """Whether a matrix gives the rows of the offers or sensors; of a plant, a mapping names its outputs with units.

    ``unread``: the matrices stand elsewhere; if that has a problem, what they would give is not asked for here.
    """
    if plant is not None or (unread and given is None):
        written = outputs.entries.values() if isinstance(outputs, Table) else ()
        return isinstance(outputs, Table) and not any(
            isinstance(entry.value, Table) and "is" in entry.value.entries for entry in written
        )
    return given is not None and given.get(name) is not None


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
        elif has_tolerance(text):
            _with_tolerance(entry, text, draft)
        else:
            try:
                value, unit, _ = parse_quantity(text)
                draft.parameters[entry.key] = (value * unit.factor, unit.dimension)
            except UnitError as error:
                draft.problems.add(f"{node.path}: {error}; accepted is for example '0.5 s'.", node)


def _with_tolerance(entry: Entry, text: str, draft: Draft) -> None:
    """A parameter that lies anywhere in a range; one of width zero is an ordinary one."""
    node = entry.value
    try:
        range_ = parse_tolerance(text)
    except UnitError as error:
        draft.problems.add(f"{node.path}: {error}.", node)
        return
    low, nominal, high = (value * range_.unit.factor for value in (range_.low, range_.nominal, range_.high))
    if not all(map(sized, (low, nominal, high))):
        draft.problems.add(
            f"{node.path}: {text[:40]} is too large or too small to compute with (1e-100 to 1e100).", node
        )
        return
    draft.parameters[entry.key] = (nominal, range_.unit.dimension)
    if low < high:
        draft.ranges[entry.key] = Interval(low, high)


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
        declared, details = _declared(entry, "take", draft)
        if _fresh(entry.key, draft, entry) and declared is not None:
            draft.takes[entry.key] = declared
            band = details.get("band") if details else None
            draft.take_bands[entry.key] = positive(band, declared, "the band", draft.problems)


def _from_equations(part: Section, draft: Draft, before: int) -> Kind | None:
    node = part.need("equations", "equations: {level': (inflow - outflow)/area}")
    if node is None:
        return None
    if not isinstance(node, Table):
        draft.problems.add(f"{node.path}: a mapping is expected here, such as '{{level': inflow/area}}'.", node)
        return None
    rows: dict[str, Formula] = {}
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
        value = read_expression(entry.value, draft.scope(("state", "input", "take", "disturbance")), rate, draft)
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

    return assembled(draft, Model(part.table, rows, node, texts, part.get("operating_point")), before)


def _from_matrices(given: Section | None, part: Section, draft: Draft, before: int) -> Kind | None:
    for key, what in (("parameters", "parameters belong"), ("operating_point", "an operating point belongs")):
        if part.get(key) is not None:
            draft.problems.add(
                f"{part.table.path}.{key}: {what} to equations; matrices carry numbers. Take "
                f"{'them' if key == 'parameters' else 'it'} out.",
                part.get(key),
            )
    if given is None:
        return None
    sizes = {
        "states": len(draft.states), "inputs": len(draft.inputs), "takes": len(draft.takes),
        "disturbances": len(draft.disturbances), "offers": len(draft.offers), "sensors": len(draft.sensors),
    }  # fmt: skip
    declared_whole = draft.problems.count == before
    uncertain: list[UncertainEntry] = []
    blocks = read_matrices(given, sizes, declared_whole, uncertain)
    return assembled(draft, Model(part.table, blocks=blocks, uncertain=tuple(uncertain)), before)

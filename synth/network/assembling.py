"""Puts a kind together from what was read of it: rest, nominal matrices in declared units, internal signals.

Law: a kind without uncertain parameters and nonlinear terms has exactly the coefficients of its equations and no
internal signals.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.base.unit_text import quotient
from synth.base.units import Unit
from synth.network.bounds import Box, Dual, Line, Located, evaluate, line_of
from synth.network.curves import NoBand, Surroundings
from synth.network.dynamics import Dynamics, rounded
from synth.network.formula import Formula, Span, atom_parameters, atom_signals
from synth.network.inner import (
    Column,
    Fault,
    Inner,
    InnerOffer,
    InnerSource,
    Plant,
    Row,
    build,
    extended,
    inner_disturbances,
)
from synth.network.intervals import Interval
from synth.network.matrices import SHAPES, UncertainEntry
from synth.network.model import Actuator, Disturbance, Kind, Signal
from synth.network.operating import LEFT, NoPoint, Unknowns, remainder, rest_of
from synth.network.outputs import Draft
from synth.network.sections import Declared, quantity, sized
from synth.network.yaml_map import Entry, Node, Scalar, Table

SECOND = Unit(Fraction(1), tuple(int(i == 2) for i in range(7)))


@dataclass(frozen=True)
class Model:
    """How a kind is given: by equations (``rates`` by state, their table, texts, operating point) or by blocks."""

    table: Table
    rates: Mapping[str, Formula] | None = None
    equations: Table | None = None
    texts: Mapping[str, str] = field(default_factory=dict)
    point: Node | None = None
    blocks: Mapping[str, ExactMatrix] = field(default_factory=dict)
    uncertain: tuple[UncertainEntry, ...] = ()


def assembled(draft: Draft, model: Model, before: int) -> Kind | None:
    """The kind; None with problems. ``before`` is the number of problems before the kind was read."""
    if draft.problems.count > before:
        return None
    columns = _columns(draft)
    rows = _rows(draft, model)
    rest = _rest(draft, model, rows, columns)
    if rest is None:
        return None
    faults: list[Fault] = []
    nominal = {name: draft.parameters[name][0] for name in draft.ranges}
    around = Surroundings(rest, _bands(draft), _offered(draft), draft.ranges, nominal)
    plant = build(rows, columns, around, faults)
    for fault in faults:
        _report(fault, rows, draft, model)
    _check_sizes(plant, rows, draft, model)
    if draft.problems.count > before:
        return None
    sizes = {group: sum(c.group == group for c in columns) for group in ("states", "inputs", "takes", "disturbances")}
    for entry in model.uncertain:
        _uncertain_entry(entry, rows, columns, plant.inner)
    labels = [(row.group, row.name) for row in rows]
    blocks = extended({**_blocks(plant, rows, sizes), **model.blocks}, plant.inner, labels, sizes)
    if not any(any(row) for row in blocks["Fu"].rows):
        del blocks["Fu"]  # no feed-through from commands is the rule, and the model says nothing about it then
    dynamics = None
    if model.rates is not None and (draft.pointed or plant.curves or any(row.formula.parameters for row in rows)):
        dynamics = _dynamics(draft, rows, columns, rest, nominal)
    return _kind(draft, blocks, plant.inner, model.texts, dynamics)


def _columns(draft: Draft) -> list[Column]:
    groups = (("states", draft.states), ("inputs", draft.inputs), ("takes", draft.takes),
              ("disturbances", draft.disturbances))  # fmt: skip
    return [Column(group, name, d.text, d.unit) for group, table in groups for name, d in table.items()]


def _rows(draft: Draft, model: Model) -> list[Row]:
    """All rows of the model; those that matrices give are empty here."""
    empty = Formula((), None)
    rows = [
        Row("states", n, d.text, d.unit / SECOND, empty if model.rates is None else model.rates[n])
        for n, d in draft.states.items()
    ]
    for group, outputs in (("offers", draft.offers), ("sensors", draft.sensors)):
        rows += [Row(group, n, o.declared.text, o.declared.unit, o.value or empty) for n, o in outputs.items()]
    return rows


def _bands(draft: Draft) -> dict[str, Fraction | None]:
    """How far every signal may be from the operating point, in SI units."""
    found: dict[str, Fraction | None] = {}
    for table, bounds in (
        (draft.states, draft.bands), (draft.inputs, draft.limits), (draft.takes, draft.take_bands),
        (draft.disturbances, draft.peaks),
    ):  # fmt: skip
        for name, declared in table.items():
            bound = bounds.get(name)
            found[name] = None if bound is None else bound * declared.unit.factor
    return found


def _offered(draft: Draft) -> dict[Line, Fraction]:
    """Bands that offers declare for linear combinations, in SI units."""
    found: dict[Line, Fraction] = {}
    for output in draft.offers.values():
        if output.band is not None and output.value is not None and output.value.straight:
            line, lead = line_of(output.value.parts)
            half = output.band * output.declared.unit.factor / abs(lead)
            found[line] = min(half, found.get(line, half))
    return found


def _given(draft: Draft, node: Node | None) -> tuple[dict[str, Fraction], Unknowns] | None:
    """What the operating point names (SI units), and what is to be found; None with problems."""
    tables = {"state": draft.states, "input": draft.inputs, "take": draft.takes, "disturbance": draft.disturbances}
    known = {name: (group, d) for group, table in tables.items() for name, d in table.items()}
    if node is None:
        return dict.fromkeys(known, Fraction(0)), Unknowns({}, {})
    if not isinstance(node, Table):
        draft.problems.add(
            f"{node.path}: a mapping is expected here, such as '{{level: 12 cm}}' ('{{}}' if all is found).", node
        )
        return None
    before, given, about = draft.problems.count, dict[str, Fraction](), dict[str, Fraction | None]()
    for entry in node.entries.values():
        if entry.key not in known:
            draft.problems.add(
                f"{node.path}: {entry.key!r} is no state, input, taken signal or disturbance; accepted are "
                f"{', '.join(known)}.",
                entry,
            )
            continue
        declared = known[entry.key][1]
        text = entry.value.text.strip() if isinstance(entry.value, Scalar) else ""
        if text == "find":
            about[entry.key] = None
        elif text.startswith("about ") and isinstance(entry.value, Scalar):
            value = quantity(replace(entry.value, text=text[6:], value=text[6:]), declared, draft.problems)
            about[entry.key] = None if value is None else value * declared.unit.factor
        else:
            value = quantity(entry.value, declared, draft.problems)
            given[entry.key] = Fraction(0) if value is None else value * declared.unit.factor
    for name, (group, _) in known.items():
        if name not in given and name not in about:
            if group in ("state", "input"):
                about[name] = None
            else:
                given[name] = Fraction(0)
    if draft.problems.count > before:
        return None
    factors = {name: known[name][1].unit.factor for name in known if name in about}
    return given, Unknowns(factors, about)


def _rest(draft: Draft, model: Model, rows: Sequence[Row], columns: Sequence[Column]) -> dict[str, Interval] | None:
    """Every signal at rest in SI units, checked; None with problems."""
    read = _given(draft, model.point)
    if read is None:
        return None
    rates = {row.name: row.formula for row in rows if row.group == "states"}
    nominal = {name: draft.parameters[name][0] for name in draft.ranges}
    try:
        rest = rest_of(rates, read[0], read[1], nominal)
    except NoPoint as error:
        draft.problems.add(
            f"{draft.name}.operating_point: {error}.".replace(draft.name, model.table.path, 1), model.point
        )
        return None
    before = draft.problems.count
    for i, row in enumerate(rows):
        if draft.pointed and row.group != "states":
            continue
        try:
            left = remainder(row.formula, rest, nominal)
        except Located as error:
            _located(i, rows, draft, model, error, "at the operating point" if draft.pointed else "at zero")
            continue
        if left > LEFT:
            _no_rest(i, rows, draft, model, rest)
    return None if draft.problems.count > before else {column.name: rest[column.name] for column in columns}


def _no_rest(i: int, rows: Sequence[Row], draft: Draft, model: Model, rest: Mapping[str, Interval]) -> None:
    """Say that a row is not at rest, and by how much."""
    row, node = rows[i], _node(i, rows, draft, model)
    names = {name: Dual(value) for name, value in rest.items()}
    names |= {name: Dual(Interval.of(draft.parameters[name][0])) for name in draft.ranges}
    value = rounded(evaluate(row.formula, Box(names, {})).value.middle / row.unit.factor)
    unit = quotient(row.text, "s") if row.group == "states" else row.text
    path = model.table.path if node is None else node.path
    if draft.pointed:
        draft.problems.add(
            f"{path}: the operating point is no equilibrium, {row.name}' is {value:.6g} {unit} there; "
            "leave one of its values out of 'operating_point', it is then found.",
            node,
        )
    else:
        draft.problems.add(
            f"{path}: this expression is not zero when all signals are ({value:.6g} {unit}); the model is about "
            "differences from an operating point, so name it, such as 'operating_point: "
            f"{{{next(iter(draft.states))}: ...}}'.",
            node,
        )


def _node(i: int, rows: Sequence[Row], draft: Draft, model: Model) -> Node | None:
    """Where the expression of a row stands."""
    row = rows[i]
    if row.group == "states":
        return None if model.equations is None else model.equations.entries[f"{row.name}'"].value
    return (draft.offers if row.group == "offers" else draft.sensors)[row.name].node


def _cause(span: Span, node: Node | None) -> tuple[str, object]:
    """The words at a span of a node and their place."""
    if not isinstance(node, Scalar):
        return "", None
    words = " ".join(node.text[span[0] : span[0] + span[1]].split())
    return (words if len(words) <= 50 else words[:47] + "..."), node.place_at(*span)


def _located(i: int, rows: Sequence[Row], draft: Draft, model: Model, error: Located, where: str) -> None:
    """Say that a function has no value or slope, at the function's place."""
    node = _node(i, rows, draft, model)
    words, place = _cause(error.factor.span, node)
    path = model.table.path if node is None else node.path
    advice = (
        "name an operating point with 'operating_point'" if where == "at zero"
        else "give another operating point" if where == "at the operating point"
        else f"narrow {where.removeprefix('everywhere in ')}"
    )  # fmt: skip
    draft.problems.add(
        f"{path}: {words!r} has no value or no bounded slope {where}: {error.sentence}; {advice}.",
        place if place is not None else node,  # type: ignore[arg-type]
    )


def _report(fault: Fault, rows: Sequence[Row], draft: Draft, model: Model) -> None:
    """Say why a term cannot be bounded."""
    node = _node(fault.row, rows, draft, model)
    row, path = rows[fault.row], model.table.path if node is None else node.path
    if fault.error is None:
        draft.problems.add(
            f"{path}: a tolerance moves what the sensor {row.name!r} reads at the operating point; take the tolerance "
            "out of the sensor, or the operating point.",
            node,
        )
    elif isinstance(fault.error, Located):
        atom, factor = fault.atom, fault.error.factor
        if atom is not None:
            names = sorted(factor.signals | factor.parameters or atom_signals(atom) | atom_parameters(atom))
        else:
            names = sorted(factor.parameters or row.formula.parameters)
        sort = "the tolerance of" if atom is None else "the bands of"
        _located(fault.row, rows, draft, model, fault.error, f"everywhere in {sort} {', '.join(names)}")
    else:
        words, place = _cause(row.formula.spans.get(fault.atom or (), (0, 0)), node)
        draft.problems.add(
            f"{path}: {_wanted_bands(words, fault.error, draft)}",
            place if place is not None else node,  # type: ignore[arg-type]
        )


def _wanted_bands(words: str, error: NoBand, draft: Draft) -> str:
    """The sentence that says which band a nonlinear term needs."""
    parts = []
    for name in error.signals:
        table: Mapping[str, Declared] = next(t for t in (draft.states, draft.inputs, draft.takes) if name in t)
        key = "limit" if name in draft.inputs else "band"
        text = table[name].text
        parts.append(f"'{name}: {{in: {text}, {key}: 2 {text if text != '1' else ''}".rstrip() + "}'")
    several = len(parts) > 1
    return (
        f"the nonlinear term {words!r} needs to know how far {' and '.join(error.signals)} may go from the operating "
        f"point; declare {'bands' if several else 'a band'}, such as {' and '.join(parts)}."
    )


def _check_sizes(plant: Plant, rows: Sequence[Row], draft: Draft, model: Model) -> None:
    for i, (row, line) in enumerate(zip(rows, plant.matrix, strict=True)):
        extra = [source.column[i] for source in (*plant.inner.takes, *plant.inner.shifts)]
        if not all(map(sized, (*line, *extra))):
            node: Node | Entry = model.table
            if row.group == "states" and model.equations is not None:
                node = model.equations.entries[f"{row.name}'"]
            path = (
                f"{model.equations.path}.{row.name}'"
                if isinstance(node, Entry) and model.equations
                else model.table.path
            )
            what = "a coefficient" if row.group == "states" else "a coefficient of an offer or a sensor"
            draft.problems.add(f"{path}: {what} is too large or too small to compute with.", node)
    if not all(sized(link.strength) for link in plant.inner.links):
        draft.problems.add(
            f"{model.table.path}: the bound of a nonlinear term or a tolerance is too large or too small to compute "
            "with; narrow the bands.",
            model.table,
        )


def _blocks(plant: Plant, rows: Sequence[Row], sizes: Mapping[str, int]) -> dict[str, ExactMatrix]:
    """The user's matrices from the rows."""
    found, start = {}, 0
    for across, count in sizes.items():
        for name, (down, other) in SHAPES.items():
            if other == across:
                lines = [line[start : start + count] for row, line in zip(rows, plant.matrix, strict=True)
                         if row.group == down]  # fmt: skip
                found[name] = ExactMatrix.of(lines, (len(lines), count))
        start += count
    return found


def _uncertain_entry(entry: UncertainEntry, rows: Sequence[Row], columns: Sequence[Column], inner: Inner) -> None:
    """A matrix entry with a tolerance as a self-link of its own."""
    down, across = SHAPES[entry.matrix]
    i = [k for k, row in enumerate(rows) if row.group == down][entry.row]
    j = [k for k, column in enumerate(columns) if column.group == across][entry.column]
    name = f"tolerance of {entry.matrix}[{entry.row + 1},{entry.column + 1}]"
    unit = quotient(rows[i].text, "s") if down == "states" else rows[i].text
    inner.takes.append(InnerSource(name, unit, tuple(Fraction(int(k == i)) for k in range(len(rows)))))
    offer = InnerOffer(Signal(name, columns[j].text), tuple(Fraction(int(k == j)) for k in range(len(columns))))
    inner.connect(offer, name, entry.half, "tolerance")


def _dynamics(
    draft: Draft,
    rows: Sequence[Row],
    columns: Sequence[Column],
    rest: Mapping[str, Interval],
    nominal: Mapping[str, Fraction],
) -> Dynamics:
    def names(group: str) -> tuple[tuple[str, Fraction], ...]:
        return tuple((c.name, c.unit.factor) for c in columns if c.group == group)

    def formulas(group: str) -> tuple[Formula, ...]:
        return tuple(row.formula for row in rows if row.group == group)

    left = max(remainder(row.formula, rest, nominal) for row in rows if row.group == "states")
    return Dynamics(
        names("states"), names("inputs"), names("takes"), names("disturbances"),
        tuple((n, o.declared.unit.factor) for n, o in draft.offers.items()),
        tuple((n, o.declared.unit.factor) for n, o in draft.sensors.items()),
        formulas("states"), formulas("offers"), formulas("sensors"),
        {name: value.middle for name, value in rest.items()},
        {name: (draft.ranges[name].low, value, draft.ranges[name].high) for name, value in nominal.items()},
        float(left),
    )  # fmt: skip


def _kind(
    draft: Draft, blocks: Mapping[str, ExactMatrix], inner: Inner, texts: Mapping[str, str], dynamics: Dynamics | None
) -> Kind:
    return Kind(
        name=draft.name,
        states=tuple(Signal(n, d.text, draft.bands[n]) for n, d in draft.states.items()),
        inputs=tuple(Actuator(n, d.text, draft.limits[n]) for n, d in draft.inputs.items()),
        disturbances=(
            *(Disturbance(n, d.text, draft.peaks[n]) for n, d in draft.disturbances.items()),
            *inner_disturbances(inner),
        ),
        takes=(
            *(Signal(n, d.text) for n, d in draft.takes.items()),
            *(Signal(source.name, source.unit) for source in inner.takes),
        ),
        offers=(
            *(Signal(n, o.declared.text, o.band) for n, o in draft.offers.items()),
            *(offer.signal for offer in inner.offers),
        ),
        sensors=tuple(Signal(n, o.declared.text) for n, o in draft.sensors.items()),
        equations=texts,
        inner=tuple(inner.links),
        dynamics=dynamics,
        A=blocks["A"], B=blocks["B"], D=blocks["D"], E=blocks["E"], C=blocks["C"], N=blocks["N"], H=blocks["H"],
        F=blocks["F"], Fw=blocks["Fw"], Fu=blocks.get("Fu"),
    )  # fmt: skip

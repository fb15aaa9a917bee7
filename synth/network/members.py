"""Members: explicit units and links, from CSV tables, GraphML, node-link JSON or a networkx graph.

    network: {members: {units: units.csv, links: links.csv}}      or      network: {members: {graph: field.graphml}}

A unit has an id, a kind, and values of parameters that differ from the kind's. Units of one kind with the same values
share one ``Kind``, so that everything is solved once. A link has the columns of ``LINK_COLUMNS``; equal links share one
``Link``, so that an exact strength is kept once per distinct text.

Law: the network does not depend on the order of the rows (``Network.hash`` is equal), and writing it and reading it
back gives the same network.
"""

from __future__ import annotations

from array import array
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import TYPE_CHECKING

from synth.base.errors import Place, nearest
from synth.base.units import NONE, Dimension, UnitError, parse_quantity
from synth.network.intervals import Interval
from synth.network.kinds import read_kind
from synth.network.layout import Form, Members
from synth.network.links import End, Known, Positions, end_of, links_of, read_form
from synth.network.model import Goal, Kind, Link
from synth.network.sections import Section, name_is_good
from synth.network.strengths import Parameter, Ranged
from synth.network.templates import Template
from synth.network.tolerances import has_tolerance, parse_tolerance
from synth.network.yaml_map import Entry, Node, Problems, Scalar, Table, plain_value

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

LINK_COLUMNS = ("name", "from", "to", "offer", "take", "strength", "relative", "weakens", "late", "delay")
NEEDED_LINK_COLUMNS = ("name", "from", "to", "strength")
_FORM_COLUMNS = LINK_COLUMNS[5:]
_ZERO = Fraction(0)
MOST_KINDS = 5_000
LONGEST_ID = 200

# Says where a record stands: (sort of record, its number, column) -> (words for a message, place or None).
Where = Callable[[str, int, str], tuple[str, Place | None]]


@dataclass(frozen=True)
class Records:
    """Units and links as texts: (number, id, kind, parameter values) and (number, the ``LINK_COLUMNS``)."""

    parameters: tuple[str, ...]
    units: Iterator[tuple[int, str, str, tuple[str, ...]]]
    links: Iterator[tuple[int, Sequence[str]]]
    where: Where


@dataclass
class Wiring:
    """Collects links; equal groups of parts are kept once."""

    links: list[Link] = field(default_factory=list)
    known: dict[tuple[Link, ...], int] = field(default_factory=dict)
    parts: list[tuple[int, ...]] = field(default_factory=list)
    to: array[int] = field(default_factory=lambda: array("i"))
    source: array[int] = field(default_factory=lambda: array("i"))
    forms: array[int] = field(default_factory=lambda: array("i"))

    def form(self, group: tuple[Link, ...]) -> int:
        """The number of a written link's parts."""
        if group not in self.known:
            self.known[group] = len(self.parts)
            self.parts.append(tuple(range(len(self.links), len(self.links) + len(group))))
            self.links += group
        return self.known[group]

    def append(self, to: int, source: int, form: int) -> None:
        """One link from unit ``source`` (-1: outside) to unit ``to``."""
        self.to.append(to)
        self.source.append(source)
        self.forms.append(form)

    def arrays(
        self,
    ) -> tuple[tuple[Link, ...], NDArray[np.int32], NDArray[np.int32], NDArray[np.int32], tuple[tuple[int, ...], ...]]:
        """Links, and the arrays ``to``, ``source``, ``form`` and ``parts`` of ``Members``."""
        import numpy as np

        to, source, form = (np.array(a, dtype=np.int32) for a in (self.to, self.source, self.forms))
        return tuple(self.links), to, source, form, tuple(self.parts)


@dataclass
class _Reading:
    """What is at hand while members are read."""

    entries: Mapping[str, Entry]  # the kinds as written
    known: Known  # its parameters grow by those of the kinds that only some members have
    where: Where
    problems: Problems
    kinds: list[Kind] = field(default_factory=list)
    origins: list[tuple[str, Mapping[str, str]]] = field(default_factory=list)
    by_values: dict[tuple[object, ...], int | None] = field(default_factory=dict)
    by_key: dict[tuple[object, ...], int | None] = field(default_factory=dict)  # by exact values
    classes: set[str] = field(default_factory=set)
    templates: dict[tuple[object, ...], Template] = field(default_factory=dict)

    def refuse(self, sort: str, number: int, column: str, sentence: str) -> None:
        """Record a problem of one cell."""
        words, place = self.where(sort, number, column)
        self.problems.add(f"{words}: {sentence}.", place)

    def cell(self, sort: str, number: int, column: str, text: str) -> Scalar | None:
        """A cell as a node, so that the readers of the problem file can read it; None if it is empty."""
        if not text:
            return None
        words, place = self.where(sort, number, column)
        try:
            value = plain_value(text)
        except UnitError as error:
            self.problems.add(f"{words}: {error}.", place)
            value = Fraction(1)
        return Scalar(words, place, value, text)


def read_members(
    records: Records, entries: Mapping[str, Entry], known: Known, positions: Positions, problems: Problems
) -> tuple[Members, tuple[Kind, ...], tuple[Link, ...]]:
    """The members, the kinds they are of, and each sort of link once; what is wrong is recorded."""
    import numpy as np

    reading = _Reading(entries, replace(known, parameters=dict(known.parameters)), records.where, problems)
    ids: dict[str, int] = {}
    kind_of = array("i")
    for number, name, kind_name, values in records.units:
        if name in ids:
            reading.refuse("unit", number, "id", f"the unit {name[:40]!r} stands twice; every unit has its own id")
            continue
        if not name or len(name) > LONGEST_ID or not name.isprintable():
            reading.refuse("unit", number, "id", f"an id is 1 to {LONGEST_ID} printable characters")
            continue
        ids[name] = len(ids)
        kind = _kind_index(reading, number, kind_name, records.parameters, values)
        kind_of.append(-1 if kind is None else kind)
    if not ids and not problems.found:
        words, place = records.where("unit", 0, "id")
        problems.add(f"{words}: there is no unit; a network has at least one.", place)
    wiring = _links(reading, records, ids, kind_of, positions)
    links, to, source, form, parts = wiring.arrays()
    order = sorted(
        range(len(reading.kinds)), key=lambda j: (known.declared.index(reading.origins[j][0]), reading.kinds[j].name)
    )
    place_of = np.full(len(order) + 1, -1, dtype=np.int32)  # the last entry answers for a kind that was refused
    place_of[order] = np.arange(len(order), dtype=np.int32)
    kind_places = place_of[np.array(kind_of, dtype=np.int64)] if len(kind_of) else np.zeros(0, dtype=np.int32)
    origins = tuple(reading.origins[j] for j in order)
    return (
        Members(tuple(ids), kind_places, to, source, form, parts, origins),
        tuple(reading.kinds[j] for j in order),
        links,
    )


def _kind_index(
    reading: _Reading, number: int, name: str, parameters: tuple[str, ...], values: tuple[str, ...]
) -> int | None:
    """The kind of a unit with the given values; a kind is read once per distinct set of values."""
    key = (name, *values)
    if key not in reading.by_values:
        reading.by_values[key] = _new_kind(reading, number, name, parameters, values)
    return reading.by_values[key]


def _new_kind(
    reading: _Reading, number: int, name: str, parameters: tuple[str, ...], values: tuple[str, ...]
) -> int | None:
    known, problems = reading.known, reading.problems
    if name not in known.declared:
        reading.refuse(
            "unit", number, "kind",
            f"unknown kind {name[:40]!r}{nearest(name, known.declared)}; declared are {', '.join(known.declared)}",
        )  # fmt: skip
        return None
    if name not in known.kinds:
        return None
    base, before = known.parameters.get(name, {}), problems.count
    changed: dict[str, Scalar] = {}
    exact: dict[str, object] = {}
    for parameter, text in zip(parameters, values, strict=True):
        node = reading.cell("unit", number, parameter, text)
        if node is None:
            continue
        if parameter not in base:
            reading.refuse(
                "unit", number, parameter,
                f"{name} has no parameter {parameter!r}; it has {', '.join(base) or 'none'}, so leave the cell empty",
            )  # fmt: skip
            continue
        value = parameter_value(node)
        usual = base[parameter]
        if value is not None and usual is not None and dimension_of(value) != dimension_of(usual):
            reading.refuse("unit", number, parameter, f"{text[:40]!r} has not the unit that {name}.{parameter} has")
        elif value is None or value != usual:
            changed[parameter], exact[parameter] = node, value if isinstance(value, tuple) else text
    if problems.count > before:
        return None
    key = (name, *sorted(exact.items()))
    if key not in reading.by_key:
        kind = known.kinds[name] if not changed else _changed(reading, number, name, changed, exact)
        if kind is not None and len(reading.kinds) >= MOST_KINDS:
            reading.refuse("unit", number, "kind", f"there are more than {MOST_KINDS} different sets of parameters")
            kind = None
        reading.by_key[key] = None if kind is None else len(reading.kinds)
        if kind is not None:
            reading.kinds.append(kind)
            reading.origins.append((name, {p: node.text for p, node in changed.items()}))
            own = {p: parameter_value(node) for p, node in changed.items()}
            reading.known.parameters[kind.name] = {**base, **own}  # type: ignore[index]
    return reading.by_key[key]


def _changed(
    reading: _Reading, number: int, name: str, changed: Mapping[str, Scalar], exact: Mapping[str, object]
) -> Kind | None:
    """The kind read again with other values of some parameters; its name lists them in SI units."""
    entry = reading.entries[name]
    assert isinstance(entry.value, Table)  # a kind with parameters was read from it
    entries = dict(entry.value.entries)
    old = entries["parameters"].value
    assert isinstance(old, Table)
    values = {p: replace(e, value=changed.get(p, e.value)) for p, e in old.entries.items()}
    entries["parameters"] = replace(entries["parameters"], value=Table(old.path, old.place, values))
    trial = Problems()
    kind = read_kind(replace(entry, value=Table(entry.value.path, entry.value.place, entries)), trial)
    if kind is None or trial.found:
        said = trial.found[0].sentence.rstrip(".") if trial.found else "it cannot be read"
        words = ", ".join(f"{p} = {node.text}" for p, node in changed.items())
        reading.refuse("unit", number, next(iter(changed)), f"with {words} the kind {name} is not accepted: {said}")
        return None
    said = ", ".join(f"{p}={v[0] if isinstance(v, tuple) else v}" for p, v in sorted(exact.items()))
    return replace(kind, name=f"{name} {said}", group=name)


def _links(
    reading: _Reading, records: Records, ids: Mapping[str, int], kind_of: array[int], positions: Positions
) -> Wiring:
    wiring = Wiring()
    forms: dict[tuple[object, ...], int | None] = {}
    offers, takes = LINK_COLUMNS.index("offer"), LINK_COLUMNS.index("take")
    for number, cells in records.links:
        source, offer = _unit_and_signal(cells[1], cells[offers], ids)
        to, take = _unit_and_signal(cells[2], cells[takes], ids)
        if source is None or to is None:
            for column, text, found in (("from", cells[1], source), ("to", cells[2], to)):
                if found is None:
                    reading.refuse(
                        "link", number, column,
                        f"there is no unit {text[:40]!r}{nearest(text, ids)}; write the id of a unit, or id.signal",
                    )  # fmt: skip
            continue
        a, b = kind_of[source], kind_of[to]
        if a < 0 or b < 0:
            continue  # the unit has its own sentence
        key = (cells[0], a, offer, b, take, source == to, *cells[5:])
        if key not in forms:
            ends = (a, offer), (b, take)
            quick = _quick_form(reading, wiring, cells, *ends, source == to)
            forms[key] = (
                _form(reading, wiring, positions, number, cells, *ends, source == to) if quick is None else quick
            )
        form = forms[key]
        if form is not None:
            wiring.append(to, source, form)
    return wiring


def _unit_and_signal(text: str, signal: str, ids: Mapping[str, int]) -> tuple[int | None, str]:
    """The unit and signal of 'id' or 'id.signal'; an id that contains a dot counts as an id first."""
    found = ids.get(text)
    if found is None:
        head, dot, tail = text.rpartition(".")
        if dot:
            return ids.get(head), tail
    return found, signal


def _form(
    reading: _Reading, wiring: Wiring, positions: Positions, number: int, cells: Sequence[str],
    source: tuple[int, str], to: tuple[int, str], itself: bool,
) -> int | None:  # fmt: skip
    """The parts of a link with these ends and texts; None if something is wrong (said once)."""
    words, place = reading.where("link", number, "name")
    row = Table(words, place, {})
    name = cells[0]
    if name not in reading.classes:
        if not name_is_good(name, reading.problems, row, words):
            return None
        reading.classes.add(name)
        positions.names.append(name)
    ends: list[End | None] = []
    for column, side, (kind_index, signal) in (("from", "offers", source), ("to", "takes", to)):
        kind = reading.kinds[kind_index]
        end_words, end_place = reading.where("link", number, column)
        node = Node(end_words, end_place)
        signals = [s.name for s in getattr(kind, side) if " " not in s.name]
        if not signal and len(signals) == 1:
            signal = signals[0]
        ends.append(end_of(kind, side, signal, node, reading.problems))
    entries: dict[str, Entry] = {}
    for column, text in zip(_FORM_COLUMNS, cells[5:], strict=True):
        cell = reading.cell("link", number, column, text)
        if cell is not None:
            entries[column] = Entry(column, cell.place, cell)
    part = Section(Table(words, place, entries), reading.problems, _FORM_COLUMNS)
    form: Form | None = read_form(part, ends[0], ends[1], reading.known, reading.problems, itself)
    if form is None or ends[0] is None or ends[1] is None:
        return None
    at = part.get("strength") or row
    positions.strengths.append((name, form, at))
    if form.low == form.high != 0:
        wanted = ends[1].declared.unit / ends[0].declared.unit
        template = Template(replace(form, low=Fraction(1), high=Fraction(1)), ends[0], ends[1], wanted)
        reading.templates[_template_key(reading, cells, source, to, itself)] = template
        template.signs[form.low > 0] = at
    return wiring.form(links_of(form, name, ends[0], ends[1], ()))


def _template_key(
    reading: _Reading, cells: Sequence[str], source: tuple[int, str], to: tuple[int, str], itself: bool
) -> tuple[object, ...]:
    """Kinds derived from one declared kind have the same signals, so they share templates."""
    ends = (reading.origins[source[0]][0], source[1], reading.origins[to[0]][0], to[1])
    return (cells[0], *ends, itself, *cells[6:])


def _quick_form(
    reading: _Reading, wiring: Wiring, cells: Sequence[str], source: tuple[int, str], to: tuple[int, str], itself: bool
) -> int | None:
    """The parts of a link of which all but a plain strength has been read before; None: read it with care."""
    template = reading.templates.get(_template_key(reading, cells, source, to, itself))
    value = None if template is None else template.value(cells[5])
    if template is None or value is None or (value > 0) not in template.signs:
        return None
    ends = (source[0], to[0])
    if ends not in template.parts:
        source_end = replace(template.source, kind=reading.kinds[source[0]])
        target_end = replace(template.target, kind=reading.kinds[to[0]])
        template.parts[ends] = links_of(template.form, cells[0], source_end, target_end, ())
    # A plain strength scales every part, so the parts of strength one are made once.
    parts = template.parts[ends]

    def grown(link: Link) -> Link:
        own = link.own_strength * value if link.relative else _ZERO
        return replace(link, strength=link.strength * value, own_strength=own)

    return wiring.form(tuple(map(grown, parts)))


def dimension_of(parameter: tuple[Fraction, Dimension] | Ranged) -> Dimension:
    """The dimension of a parameter that could be read."""
    return parameter.dimension if isinstance(parameter, Ranged) else parameter[1]


def parameter_value(node: Node | None) -> Parameter:
    """A parameter in SI units with its dimension; None if it is no quantity and no range of quantities."""
    if not isinstance(node, Scalar):
        return None
    if isinstance(node.value, Fraction):
        return node.value, NONE
    try:
        if has_tolerance(node.text):
            range_ = parse_tolerance(node.text)
            factor = range_.unit.factor
            if range_.low < range_.high:
                return Ranged(Interval(range_.low * factor, range_.high * factor), range_.unit.dimension)
            return range_.low * factor, range_.unit.dimension
        value, unit, _ = parse_quantity(node.text)
    except UnitError:
        return None
    return value * unit.factor, unit.dimension


def spread_goal(goal: Goal, kinds: tuple[Kind, ...], origins: tuple[tuple[str, Mapping[str, str]], ...]) -> Goal:
    """What the design says about a declared kind holds for every kind derived from it."""
    bounds, uses = dict(goal.gain_bounds), dict(goal.uses)
    for kind, (base, _) in zip(kinds, origins, strict=True):
        if base in goal.gain_bounds:
            bounds[kind.name] = goal.gain_bounds[base]
        if base in goal.uses:
            uses[kind.name] = goal.uses[base]
    return replace(goal, gain_bounds=bounds, uses=uses)

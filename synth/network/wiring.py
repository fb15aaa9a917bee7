"""Reads the section ``network``: which of the four descriptions it is, and everything that belongs to it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from synth.base.errors import InputError, Place
from synth.network.cell import kinds_of, read_cell
from synth.network.edges import read_edges
from synth.network.graphs import records_of_graphml, records_of_json, records_of_networkx
from synth.network.layout import Edge, Members, Rule
from synth.network.links import Known, Positions, check_signs, read_pattern_links
from synth.network.members import LINK_COLUMNS, NEEDED_LINK_COLUMNS, Records, parameter_value, read_members
from synth.network.model import Kind, Link
from synth.network.rules import read_rules
from synth.network.sections import Section, section, text_of, whole
from synth.network.strengths import Parameters
from synth.network.tables import open_csv
from synth.network.yaml_map import Entry, Node, Problems, Source, Table

PATTERN = "{pattern: {dimension: 1, links: [...]}}"
WAYS = ("pattern", "rules", "members")


@dataclass(frozen=True)
class Wired:
    """What the section ``network`` says; ``kinds`` replaces the declared kinds where members have others."""

    description: str = "pattern"
    dimension: int = 1
    links: tuple[Link, ...] = ()
    edges: tuple[Edge, ...] = ()
    cell: tuple[str, ...] | None = None
    rules: tuple[Rule, ...] = ()
    members: Members | None = None
    kinds: tuple[Kind, ...] | None = None
    bases: Mapping[str, str] = field(default_factory=dict)  # the declared kind of each of ``kinds``
    used: frozenset[tuple[str, str]] = frozenset()  # (kind, parameter) that strengths name


@dataclass(frozen=True)
class Surroundings:
    """The folder that other files are named from, a reader of texts, and a graph object given in a mapping."""

    folder: Path
    load: Callable[[Path, str, str], str]
    graph: object | None = None


def read_wiring(
    node: Node | None, entries: Mapping[str, Entry], kinds: Mapping[str, Kind], around: Surroundings, problems: Problems
) -> Wired:
    """The section ``network``; ``entries`` are the kinds as written, ``kinds`` those without problems."""
    part = section(node, "network", problems, PATTERN)
    if part is None:
        return Wired()
    known = Known(kinds, tuple(entries), {name: _parameters(entry) for name, entry in entries.items()})
    given = [way for way in WAYS if part.get(way) is not None]
    if not given and not set(part.table.entries) - {"classes", *WAYS}:
        part.need("pattern", "pattern: {dimension: 1, links: [...]}")
    if len(given) > 1:
        problems.add(
            f"network: {' and '.join(given)} are different descriptions of which units there are; keep one of them.",
            part.get(given[1]),
        )
        return Wired()
    edge = part.get("edge")
    if edge is not None and given != ["pattern"]:
        problems.add("network.edge: an edge is the edge of a pattern, and there is none; add 'pattern'.", edge)
    positions = Positions()
    if given == ["rules"]:
        rules, links = read_rules(_there(part, "rules"), known, positions, problems)
        wired = Wired("rules", 0, links, rules=rules)
    elif given == ["members"]:
        wired = _members(part, entries, known, around, positions, problems)
    else:
        wired = _pattern(part, known, entries, edge, positions, problems)
    check_signs(part, positions, problems)
    return replace(wired, used=frozenset(known.used))


def _there(part: Section, key: str) -> Node:
    node = part.get(key)
    assert node is not None  # the caller has looked
    return node


def _parameters(entry: Entry) -> Parameters:
    """The parameters of a kind as written; None for those that are no single exact quantity."""
    table = entry.value.entries.get("parameters") if isinstance(entry.value, Table) else None
    if table is None or not isinstance(table.value, Table):
        return {}
    return {name: parameter_value(inner.value) for name, inner in table.value.entries.items()}


def _pattern(
    part: Section, known: Known, declared: Mapping[str, Entry], edge: Node | None, positions: Positions,
    problems: Problems,
) -> Wired:  # fmt: skip
    pattern = section(part.get("pattern"), "pattern", problems, "{dimension: 1, links: [...]}")
    if pattern is None:
        return Wired()
    before = problems.count
    dimension = whole(pattern.get("dimension"), problems, 1, 3)
    if problems.count > before:
        return Wired()
    dimension = dimension or 1
    written = pattern.get("cell")
    places = None if written is None else read_cell(written, known, problems)
    links = read_pattern_links(pattern, dimension, places.inside if places else known, positions, problems)
    wired = Wired("pattern", dimension, links)
    if edge is not None:
        named = tuple(places.kind_of) if places else None
        known = places.everywhere if places else known
        edges, cell = read_edges(edge, links, dimension, named, known, positions, problems)
        wired = Wired("edge pattern", dimension, links, edges, cell)
    if places is None:
        return wired
    at_edges = [unit.kind for found in wired.edges for unit in found.units]
    kinds = kinds_of(places, at_edges, declared, problems if problems.count == before else Problems())
    bases = {**{kind.name: kind.name for kind in kinds}, **places.kind_of}
    return replace(wired, kinds=kinds, bases=bases)


def _members(
    part: Section, entries: Mapping[str, Entry], known: Known, around: Surroundings, positions: Positions,
    problems: Problems,
) -> Wired:  # fmt: skip
    if around.graph is not None:
        records: Records | None = records_of_networkx(around.graph, problems)
        own = problems
    else:
        inner = section(_there(part, "members"), "members", problems, "{units: units.csv, links: links.csv}")
        if inner is None:
            return Wired()
        own = Problems()  # the places are in other files, whose lines a message may show
        records = _records(inner, around, own, problems)
    if records is None:
        problems.found += own.found if own is not problems else []
        problems.count += own.count if own is not problems else 0
        return Wired()
    members, kinds, links = read_members(records, entries, known, positions, own)
    if own is not problems:
        problems.found += own.in_order()
        problems.count += own.count
    bases = {kind.name: base for kind, (base, _) in zip(kinds, members.origins, strict=True)}
    return Wired("members", 0, links, members=members, kinds=kinds, bases=bases)


def _records(inner: Section, around: Surroundings, own: Problems, problems: Problems) -> Records | None:
    """The records in the files that ``members`` names: two tables, or one graph."""
    graph = text_of(inner.get("graph"), problems, "the name of a GraphML or node-link JSON file")
    if graph is not None:
        if inner.get("units") is not None or inner.get("links") is not None:
            problems.add(
                "network.members: a graph holds units and links already; take 'units' and 'links' out.", inner.table
            )
            return None
        suffix = Path(graph).suffix.lower()
        readers = {".graphml": records_of_graphml, ".json": records_of_json}
        if suffix not in readers:
            problems.add(
                f"network.members.graph: the name {graph[:60]!r} ends neither in .graphml nor in .json; these two "
                f"forms "
                "are read.",
                inner.get("graph"),
            )
            return None
        text, file = _load(graph, "graph", around, inner.get("graph"), problems)
        if text is None:
            return None
        own.source = Source(file, text)
        return readers[suffix](text, file, own)
    units = text_of(inner.need("units", "units: units.csv"), problems, "the name of a CSV file")
    links = text_of(inner.need("links", "links: links.csv"), problems, "the name of a CSV file")
    if units is None or links is None:
        return None
    unit_text, unit_file = _load(units, "table of units", around, inner.get("units"), problems)
    link_text, link_file = _load(links, "table of links", around, inner.get("links"), problems)
    if unit_text is None or link_text is None:
        return None
    own.others = [Source(unit_file, unit_text), Source(link_file, link_text)]
    return _records_of_csv(unit_text, unit_file, link_text, link_file, own)


def _load(name: str, what: str, around: Surroundings, node: Node | None, problems: Problems) -> tuple[str | None, str]:
    path = around.folder / name
    try:
        return around.load(path, what, f"the {what}"), str(path)
    except InputError as error:
        for problem in error.problems:
            problems.add(problem.sentence, problem.place or node)
        return None, str(path)


def _records_of_csv(units: str, unit_file: str, links: str, link_file: str, problems: Problems) -> Records | None:
    header = next((line for line in units.splitlines() if line.strip() and not line.startswith("#")), "")
    parameters = [cell.strip().strip('"') for cell in header.split(",")]
    unit_table = open_csv(units, unit_file, ("id", "kind"), parameters, "id, kind and names of parameters", problems)
    link_table = open_csv(links, link_file, NEEDED_LINK_COLUMNS, LINK_COLUMNS, ", ".join(LINK_COLUMNS), problems)
    if unit_table is None or link_table is None:
        return None
    tables = {"unit": unit_table, "link": link_table}
    own = tuple(name for name in unit_table.header if name not in ("id", "kind"))

    def where(sort: str, number: int, column: str) -> tuple[str, Place | None]:
        return column, tables[sort].place(number, column)

    at_id, at_kind = unit_table.header.index("id"), unit_table.header.index("kind")
    at_own = [unit_table.header.index(name) for name in own]
    columns = [link_table.header.index(c) if c in link_table.header else len(link_table.header) for c in LINK_COLUMNS]
    return Records(
        own,
        ((n, row[at_id], row[at_kind], tuple(row[i] for i in at_own)) for n, row in unit_table.rows(problems)),
        ((n, [row[i] for i in columns]) for n, row in ((n, [*row, ""]) for n, row in link_table.rows(problems))),
        where,
    )

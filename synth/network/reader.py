"""Reads a problem file (or a mapping of the same form) into the frozen ``Network``.

Everything wrong with the file is collected and raised at once. The form of the file is described by ``schema.json``
beside this module; ``sections.KEYS`` lists the keys.
"""

from __future__ import annotations

import os
import stat
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path

from synth.base.errors import InputError, Place, Problem
from synth.network.aim_reading import with_aim
from synth.network.cell import grouped
from synth.network.controller_reading import with_structure
from synth.network.hop_reading import with_hop
from synth.network.inner import with_self_links
from synth.network.kinds import read_kind
from synth.network.links import table_names
from synth.network.members import spread_goal
from synth.network.model import Kind, Network
from synth.network.notes import unused_parameters
from synth.network.rounding_reading import with_code
from synth.network.sections import named_entries, section, text_of
from synth.network.settings import Nameable, read_goal, read_simulation
from synth.network.wiring import Surroundings, Wired, read_wiring
from synth.network.yaml_map import Node, Problems, Scalar, Table, from_python, parse

LARGEST_FILE = 5_000_000
LARGEST_TABLE = 500_000_000
LONGEST_TITLE = 200


def read(source: str | os.PathLike[str] | Mapping[str, object]) -> Network:
    """Read the problem file at a path, or a mapping of the same form, into a Network.

    All numbers end as exact rationals in the units the file declares, time in seconds. A float in a mapping counts as
    the decimal Python prints for it. Raises InputError with every problem found, each with ``file:line:column`` (a
    mapping has no lines; its sentences name the path of keys). In a mapping, ``network.members.graph`` may be a
    networkx graph. Other files that a problem file names are looked for beside it.
    """
    problems = Problems()
    graph: object | None = None
    if isinstance(source, Mapping):
        source, graph = _without_graph(source)
        file, root = None, from_python(source, problems)
    else:
        file = os.fspath(source)
        root = parse(load_text(file, "problem file", "a YAML problem file"), file, problems)
    network = None if root is None else network_from(root, file, graph, problems)
    if problems.found or network is None:
        raise InputError(problems.in_order())
    return network


def _without_graph(source: Mapping[str, object]) -> tuple[Mapping[str, object], object | None]:
    """The mapping without the graph object in it, and the graph."""
    network = source.get("network")
    members = network.get("members") if isinstance(network, Mapping) else None
    graph = members.get("graph") if isinstance(members, Mapping) else members
    if not isinstance(network, Mapping) or not (hasattr(graph, "nodes") and hasattr(graph, "edges")):
        return source, None
    return {**source, "network": {**network, "members": {"graph": "an object"}}}, graph


def load_table(path: Path, what: str, wanted: str) -> str:
    """The text of a table or graph of members, which may be larger than a problem file; raises like ``load_text``."""
    return load_text(path, what, wanted, LARGEST_TABLE)


def load_text(path: str | os.PathLike[str], what: str, wanted: str, largest: int = LARGEST_FILE) -> str:
    """The UTF-8 text of a file; InputError if it is missing, a folder, unreadable, too large or not UTF-8."""
    file = Path(path)
    try:
        if file.is_dir():
            raise InputError(f"{file} is a folder; name {wanted} inside it.")
        if not stat.S_ISREG(file.stat().st_mode):
            raise InputError(f"{file} is not a file; name {wanted}.")
        if file.stat().st_size > largest:
            raise InputError(f"{file} is larger than {largest // 10**6} MB, which no {what} needs; name {wanted}.")
        with file.open("rb") as stream:
            data = stream.read(largest + 1)
    except FileNotFoundError:
        raise InputError(f"{file} does not exist; check the name and the folder.") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"{file} cannot be read ({reason}); name {wanted} that you may read.") from None
    if len(data) > largest:
        raise InputError(f"{file} is larger than {largest // 10**6} MB, which no {what} needs; name {wanted}.")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(_not_utf8(os.fspath(path), data, error.start, what)) from None


def _not_utf8(file: str, data: bytes, at: int, what: str) -> Problem:
    """The place of the first byte that is not UTF-8, with its line as far as it can be read."""
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return Problem(f"the {what} is UTF-16 text; save it as UTF-8.", Place(file, 1, 1))
    before = data[:at]
    start = before.rfind(b"\n") + 1
    column = len(before[start:].decode("utf-8", "replace")) + 1
    line = data[start : start + 2000].split(b"\n")[0].decode("utf-8", "replace").rstrip("\r")
    return Problem(
        f"the {what} is not UTF-8 text from here on; save it as UTF-8.",
        Place(file, before.count(b"\n") + 1, column),
        line,
    )


def network_from(root: Node, file: str | None, graph: object | None, problems: Problems) -> Network | None:
    """The network that a parsed file describes; None, or a network not to be used, where there are problems."""
    part = section(root, "problem", problems, "synth: 1")
    if part is None:
        return None
    version = part.need("synth", "synth: 1")
    if version is not None and not (isinstance(version, Scalar) and version.value == Fraction(1)):
        problems.add("synth: the form of this problem file is not known; this version reads 'synth: 1'.", version)
    title = _title(part.get("title"), problems)
    kinds_node = part.need("kinds", "kinds: {tank: {states: {level: m}, ...}}")
    kinds: dict[str, Kind] = {}
    for entry in named_entries(kinds_node, problems, "{tank: {states: {level: m}, ...}}"):
        kind = read_kind(entry, problems)
        if kind is not None:
            kinds[kind.name] = kind
    if isinstance(kinds_node, Table) and not kinds_node.entries:
        problems.add(
            "kinds: at least one kind of unit is needed, such as '{tank: {states: {level: m}, ...}}'.", kinds_node
        )
    declared = table_names(kinds_node)
    around = Surroundings(Path(file).parent if file is not None else Path(), load_table, graph)
    entries = kinds_node.entries if isinstance(kinds_node, Table) else {}
    wired = read_wiring(
        part.need("network", "network: {pattern: {dimension: 1, links: [...]}}"), entries, kinds, around, problems
    )
    design = part.get("design")
    nameable = _nameable(wired, kinds, declared)
    goal = with_aim(read_goal(design, nameable, problems), design, nameable, problems)
    goal = with_code(goal, design, nameable, problems)
    simulation = read_simulation(part.get("simulation"), problems)
    if wired.members is not None and wired.kinds is not None:
        goal = spread_goal(goal, wired.kinds, wired.members.origins)
    standing = tuple(kinds.values()) if wired.kinds is None else wired.kinds
    asked = design.entries["gains"].value if isinstance(design, Table) and "gains" in design.entries else None
    standing = grouped(asked, standing, wired.bases, goal, design, Problems() if problems.found else problems)
    goal = with_structure(goal, standing, design, problems)
    goal = with_hop(goal, design, standing, wired.links, root, problems)
    network = Network(
        title, standing, wired.links, goal, simulation,
        wired.dimension, wired.description, file, wired.edges, wired.cell, wired.rules, wired.members,
        unused_parameters(entries, wired.used, wired.bases),
    )  # fmt: skip
    return with_self_links(network)


def _nameable(wired: Wired, kinds: Mapping[str, Kind], declared: tuple[str, ...]) -> Nameable:
    """What the design may name: the declared kinds, or the places of a cell that has named ones."""
    if wired.members is not None or wired.kinds is None:
        return Nameable(kinds, declared)
    places: dict[str, tuple[str, ...]] = {}
    for name, base in wired.bases.items():
        places[base] = (*places.get(base, ()), name)
    return Nameable({kind.name: kind for kind in wired.kinds}, (*wired.bases, *declared), places)


def _title(node: Node | None, problems: Problems) -> str:
    text = text_of(node, problems, "one line of text")
    if text is None:
        return "Untitled network"
    line = " ".join(text.split())
    if len(line) > LONGEST_TITLE or not line.isprintable():
        problems.add(f"title: the title is one printable line of at most {LONGEST_TITLE} characters.", node)
    return line

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

from synth.base.errors import InputError, Place
from synth.network.kinds import read_kind
from synth.network.links import read_links, table_names
from synth.network.model import Kind, Network
from synth.network.sections import named_entries, section, text_of
from synth.network.settings import read_goal, read_simulation
from synth.network.yaml_map import Node, Problems, Scalar, Table, from_python, parse

LARGEST_FILE = 5_000_000
LONGEST_TITLE = 200


def read(source: str | os.PathLike[str] | Mapping[str, object]) -> Network:
    """Read the problem file at a path, or a mapping of the same form, into a Network.

    All numbers end as exact rationals in the units the file declares, time in seconds. A float in a mapping counts as
    the decimal Python prints for it. Raises InputError with every problem found, each with ``file:line:column`` (a
    mapping has no lines; its sentences name the path of keys).
    """
    problems = Problems()
    if isinstance(source, Mapping):
        file, root = None, from_python(source, problems)
    else:
        file = os.fspath(source)
        root = parse(load_text(file, "problem file", "a YAML problem file"), file, problems)
    network = None if root is None else _network(root, file, problems)
    if problems.found or network is None:
        raise InputError(problems.in_order())
    return network


def load_text(path: str | os.PathLike[str], what: str, wanted: str) -> str:
    """The UTF-8 text of a file; InputError if it is missing, a folder, unreadable, too large or not UTF-8."""
    file = Path(path)
    try:
        if file.is_dir():
            raise InputError(f"{file} is a folder; name {wanted} inside it.")
        if not stat.S_ISREG(file.stat().st_mode):
            raise InputError(f"{file} is not a file; name {wanted}.")
        if file.stat().st_size > LARGEST_FILE:
            raise InputError(f"{file} is larger than {LARGEST_FILE // 10**6} MB, which no {what} needs; name {wanted}.")
        with file.open("rb") as stream:
            data = stream.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise InputError(f"{file} does not exist; check the name and the folder.") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"{file} cannot be read ({reason}); name {wanted} that you may read.") from None
    if len(data) > LARGEST_FILE:
        raise InputError(f"{file} is larger than {LARGEST_FILE // 10**6} MB, which no {what} needs; name {wanted}.")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = data[: error.start]
        line = before.count(b"\n") + 1
        column = len(before[before.rfind(b"\n") + 1 :].decode("utf-8", "replace")) + 1
        place = Place(os.fspath(path), line, column)
        raise InputError(f"the {what} is not UTF-8 text from here on; save it as UTF-8.", place) from None


def _network(root: Node, file: str | None, problems: Problems) -> Network | None:
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
    links, dimension = read_links(
        part.need("network", "network: {pattern: {dimension: 1, links: [...]}}"), kinds, declared, problems
    )
    goal = read_goal(part.get("design"), kinds, declared, problems)
    simulation = read_simulation(part.get("simulation"), problems)
    return Network(title, tuple(kinds.values()), links, goal, simulation, dimension, "pattern", file)


def _title(node: Node | None, problems: Problems) -> str:
    text = text_of(node, problems, "one line of text")
    if text is None:
        return "Untitled network"
    line = " ".join(text.split())
    if len(line) > LONGEST_TITLE or not line.isprintable():
        problems.add(f"title: the title is one printable line of at most {LONGEST_TITLE} characters.", node)
    return line

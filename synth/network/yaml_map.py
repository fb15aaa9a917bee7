"""YAML 1.2 with a place for every key and value, and numbers kept as the decimals a person wrote.

The C parser of PyYAML delivers events; the meaning of plain scalars is decided here by the YAML 1.2 core schema
(``1e-3`` is a number; ``yes``, ``on`` and ``12:30`` are text). Anchors, tags and a second document are refused, as are
repeated keys, nesting deeper than ``DEEPEST``, non-finite numbers and exponents beyond double precision.

Law: for any text, ``parse`` returns a tree or records at least one problem; it raises nothing else.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from decimal import Decimal
from fractions import Fraction
from functools import cached_property
from typing import Any

import yaml

from synth.base.errors import InputError, Place, Problem
from synth.base.units import LONGEST_NUMBER, UnitError, parse_number
from synth.network.yaml_syntax import syntax_problem

DEEPEST = 40
MOST_PROBLEMS = 100
LONGEST_SENTENCE = 1500
MOST_VALUES = 100_000


@dataclass(frozen=True)
class Source:
    """The text a tree was read from and the name of its file."""

    file: str
    text: str

    def line(self, number: int) -> str | None:
        """Line ``number`` (from 1) without its end, None beyond the last."""
        lines = self.lines
        return lines[number - 1] if 0 < number <= len(lines) else None

    @cached_property
    def lines(self) -> list[str]:
        """The lines as YAML counts them."""
        return _BREAK.split(self.text)


# The line breaks that the parser counts: those of YAML 1.1, which has three more than YAML 1.2.
_BREAK = re.compile("\r\n|[\n\r\x85\u2028\u2029]")


@dataclass(frozen=True, eq=False)
class Node:
    """A value in the tree: ``path`` names it in words (``kinds.hauler.states``), ``place`` is where it stands."""

    path: str
    place: Place | None


@dataclass(frozen=True, eq=False)
class Scalar(Node):
    """A single value; ``text`` is what was written, ``value`` what it means in the core schema."""

    value: Fraction | bool | str | None
    text: str
    source: Source | None = None
    start: int = 0
    style: str | None = None

    def place_at(self, offset: int, length: int | None = None) -> Place | None:
        """The place of character ``offset`` of the text; the start of the value where escapes hide the way.

        ``length`` is how many characters are meant; by default the word or number that starts there.
        """
        if self.source is None or self.place is None:
            return None
        ahead = sum(not c.isspace() for c in self.text[:offset])
        written = self.source.text
        at = self.start
        if self.style in ("|", ">"):
            at = written.find("\n", at) + 1
        elif self.style in ("'", '"'):
            at += 1
        while at < len(written):
            if written[at] == "\\" and self.style == '"':
                return self.place
            if not written[at].isspace():
                if ahead == 0:
                    break
                ahead -= 1
            at += 1
        if length is None:
            word = _WORD.match(written, at)
            length = len(word[0]) if word else 1
        before = list(_BREAK.finditer(written, 0, at))
        return Place(self.source.file, len(before) + 1, at - (before[-1].end() if before else 0) + 1, length)


@dataclass(frozen=True, eq=False)
class Listing(Node):
    """A sequence of values."""

    items: tuple[Node, ...]


@dataclass(frozen=True, eq=False)
class Entry:
    """A key with its place and its value."""

    key: str
    place: Place | None
    value: Node


@dataclass(frozen=True, eq=False)
class Table(Node):
    """Keys and values in the order they were written."""

    entries: Mapping[str, Entry]


@dataclass(frozen=True, eq=False)
class Foreign(Node):
    """An object of another library that only a Python mapping can hold, such as a ``control.StateSpace``."""

    value: object


@dataclass
class Problems:
    """Collects what is wrong, so that a person sees all of it at once."""

    found: list[Problem] = field(default_factory=list)
    count: int = 0  # of everything reported, also what is not kept
    source: Source | None = None  # the text that places are in, so that messages can show its lines
    others: list[Source] = field(default_factory=list)  # the texts of further files

    def add(self, sentence: str, where: Node | Entry | Place | None = None) -> None:
        """Record one sentence at the place of a node, an entry's key, or a place.

        Once ``MOST_PROBLEMS`` are found, InputError is raised at once: nobody reads more, and looking for them takes
        time.
        """
        sentence = "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in sentence)
        if len(sentence) > LONGEST_SENTENCE:
            sentence = f"{sentence[:LONGEST_SENTENCE]}... (shortened)."
        place = where if isinstance(where, Place) or where is None else where.place
        line = None if place is None else self._line(place)
        if place is not None and line is not None and place.length == 1:
            word = _WORD.match(line, place.column - 1)
            place = replace(place, length=len(word[0])) if word else place
        problem = Problem(sentence, place, line)
        self.count += 1
        if problem not in self.found:
            self.found.append(problem)
        if len(self.found) >= MOST_PROBLEMS:
            last = Problem(f"these are the first {MOST_PROBLEMS} problems; there may be more behind them.")
            raise InputError([*self.in_order(), last])

    def _line(self, place: Place) -> str | None:
        known = [self.source] if self.source is not None else []
        source = next((s for s in (*known, *self.others) if s.file == place.file), None)
        return None if source is None else source.line(place.line)

    def in_order(self) -> list[Problem]:
        """All problems, those without a place first, then in file order."""
        return sorted(self.found, key=lambda p: (0, 0) if p.place is None else (p.place.line, p.place.column))


class _Stop(Exception):
    """Reading cannot go on; the reason is already recorded."""


_NULLS = {"", "~", "null", "Null", "NULL"}
_TRUE, _FALSE = {"true", "True", "TRUE"}, {"false", "False", "FALSE"}
_INTEGER = re.compile(r"[-+]?[0-9]+", re.ASCII)
_RADIX = re.compile(r"0o[0-7]+|0x[0-9a-fA-F]+", re.ASCII)
_WORD = re.compile(r"\w+(?:\.\w+)*'?|\*\*")
_FLOAT = re.compile(r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?", re.ASCII)
_NOT_FINITE = re.compile(r"[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)")


def plain_value(text: str) -> Fraction | bool | str | None:
    """What a plain scalar means in the YAML 1.2 core schema; UnitError for a number that is not accepted."""
    if text in _NULLS:
        return None
    if text in _TRUE:
        return True
    if text in _FALSE:
        return False
    if _NOT_FINITE.fullmatch(text):
        raise UnitError(f"{text} is not a finite number; write a number, or leave the key out where there is no bound")
    if _RADIX.fullmatch(text) and len(text) < 40:
        return Fraction(int(text[2:], 8 if text[1] == "o" else 16))
    if _INTEGER.fullmatch(text) or _FLOAT.fullmatch(text):
        return parse_number(text)
    return text


def child(path: str, key: str) -> str:
    """The path of a key below ``path``, for messages: very long keys are shortened."""
    key = key if len(key) <= 70 else f"{key[:60]}..."
    return f"{path}.{key}" if path else key


class _Builder:
    """Turns parser events into nodes."""

    def __init__(self, source: Source, problems: Problems) -> None:
        self.source = source
        self.problems = problems
        self.values = 0
        loader: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)
        self.events: Iterator[Any] = yaml.parse(source.text, Loader=loader)

    def place(self, mark: Any, end: Any = None) -> Place:
        """The place of a mark; ``end`` is the mark behind what is meant (the carets stop at the end of the line)."""
        length = 1 if end is None else max(end.index - mark.index, 1)
        return Place(self.source.file, mark.line + 1, mark.column + 1, length)

    def stop(self, sentence: str, event: Any) -> _Stop:
        self.problems.add(f"{sentence}.", self.place(event.start_mark, event.end_mark))
        return _Stop()

    def document(self) -> Node | None:
        """The only document of the stream, or None if there is none."""
        root: Node | None = None
        for event in self.events:
            if isinstance(event, yaml.DocumentStartEvent):
                if root is not None:
                    raise self.stop("a second document starts here; a problem file is one document", event)
                if event.version is not None and event.version != (1, 2):
                    raise self.stop("the problem file is YAML 1.2; take out the %YAML line", event)
                root = self.node(next(self.events), "", 0)
        return root

    def node(self, event: Any, path: str, depth: int, key: Place | None = None) -> Node:
        """The value that starts with ``event``; ``key`` is the place of the key it belongs to.

        A value in block style has no bracket of its own that a message could point at, so it stands at its key.
        """
        if isinstance(event, yaml.AliasEvent) or getattr(event, "anchor", None) is not None:
            raise self.stop("anchors (&) and aliases (*) are not accepted; write the value out where it is used", event)
        if getattr(event, "tag", None) is not None:
            raise self.stop(f"the tag {event.tag!r} is not accepted; write the plain value", event)
        if depth > DEEPEST:
            raise self.stop(f"the nesting is deeper than {DEEPEST} levels; no problem file needs that", event)
        self.values += 1
        if self.values > MOST_VALUES:
            raise self.stop(f"the file has more than {MOST_VALUES} values; no problem file needs that", event)
        if isinstance(event, yaml.ScalarEvent):
            return self.scalar(event, path)
        if isinstance(event, yaml.SequenceStartEvent):
            start = event
            items: list[Node] = []
            while not isinstance(event := next(self.events), yaml.SequenceEndEvent):
                items.append(self.node(event, f"{path}[{len(items)}]", depth + 1))
            return Listing(path, self.extent(start, event, key), tuple(items))
        return self.table(event, path, depth, key)

    def extent(self, start: Any, end: Any, key: Place | None) -> Place:
        """The place of a list or a mapping from its first event to its last."""
        if start.flow_style:
            return self.place(start.start_mark, end.end_mark)
        if key is not None:
            return key
        word = _WORD.match(self.source.text, start.start_mark.index)
        place = self.place(start.start_mark)
        return replace(place, length=len(word[0])) if word else place

    def scalar(self, event: Any, path: str) -> Scalar:
        value: Fraction | bool | str | None = event.value
        place = self.place(event.start_mark, event.end_mark)
        if event.style is None or event.style == "":
            try:
                value = plain_value(event.value)
            except UnitError as error:
                self.problems.add(f"{path}: {error}.", place)
                value = Fraction(1)  # stands in, so that reading can go on to the next problem
        style = event.style or None
        return Scalar(path, place, value, event.value, self.source, event.start_mark.index, style)

    def table(self, start: Any, path: str, depth: int, above: Place | None) -> Table:
        """The mapping that starts with ``start``; ``above`` is the place of the key it belongs to."""
        entries: dict[str, Entry] = {}
        while not isinstance(event := next(self.events), yaml.MappingEndEvent):
            if not isinstance(event, yaml.ScalarEvent):
                raise self.stop("a key must be a name, not an anchor, a list or a mapping", event)
            if event.anchor is not None or event.tag is not None:
                raise self.stop("anchors, aliases and tags are not accepted at a key; write the plain name", event)
            key, place = event.value, self.place(event.start_mark, event.end_mark)
            value = self.node(next(self.events), child(path, key), depth + 1, place)
            if key in entries:
                first = entries[key].place
                line = f" (first in line {first.line})" if first else ""
                self.problems.add(
                    f"the key {key[:70]!r} stands twice in {path or 'the file'}{line}; keep one of them.", place
                )
                continue
            entries[key] = Entry(key, place, value)
        return Table(path, self.extent(start, event, above), entries)


def parse(text: str, file: str, problems: Problems) -> Node | None:
    """Read a YAML text into a tree; what is wrong is added to ``problems``, and None returned if nothing can be
    used."""
    source = problems.source = Source(file, text)
    try:
        root = _Builder(source, problems).document()
    except _Stop:
        return None
    except yaml.YAMLError as error:
        problems.add(*syntax_problem(error, source.lines, file))
        return None
    if root is None:
        problems.add("the file is empty; a problem file starts with 'synth: 1'.", Place(file, 1, 1))
    return root


def from_python(value: object, problems: Problems, path: str = "", depth: int = 0) -> Node | None:
    """The tree of nested Python mappings and sequences; it has no places.

    A float counts as the decimal that Python prints for it, so a mapping loaded from a file means what the file says.
    """
    if depth > DEEPEST:
        problems.add(f"{path[:80]}: the nesting is deeper than {DEEPEST} levels; no problem needs that.")
        return None
    if isinstance(value, Mapping):
        entries: dict[str, Entry] = {}
        for key, inner in value.items():
            name = str(key)
            node = from_python(inner, problems, child(path, name), depth + 1)
            if node is not None:
                entries[name] = Entry(name, None, node)
        return Table(path, None, entries)
    if type(value).__module__.partition(".")[0] == "control":
        return Foreign(path, None, value)
    plain = getattr(value, "tolist", None)  # numpy arrays and scalars
    value = plain() if callable(plain) else value
    if isinstance(value, Sequence) and not isinstance(value, (str, bytes)):
        nodes = [from_python(inner, problems, f"{path}[{i}]", depth + 1) for i, inner in enumerate(value)]
        return Listing(path, None, tuple(node for node in nodes if node is not None))
    if isinstance(value, (str, bool)) or value is None:
        return Scalar(path, None, value, "" if value is None else str(value), style='"')
    try:
        if isinstance(value, (int, Fraction)):
            number = Fraction(value)
            if max(abs(number.numerator), number.denominator) > 10**LONGEST_NUMBER:
                raise UnitError("the number is too large")
            return Scalar(path, None, number, str(number))
        if isinstance(value, (float, Decimal)):
            return Scalar(path, None, parse_number(repr(value) if isinstance(value, float) else str(value)), str(value))
    except UnitError:
        problems.add(f"{path}: this is not a finite number of a sensible size; write a number.")
        return None
    problems.add(f"{path}: a {type(value).__name__} is not accepted; write text, a number, a list or a mapping.")
    return None

"""Reads a gain table (CSV or JSON) back into ``Gains``; strict, because a wrong sign or unit can destabilise a plant.

One row per gain, u = K y. Lines of a CSV table that start with ``#`` are remarks. Every entry of every K must be there
once; only entries that ``design.uses`` excludes may be left out, and must be zero if they are there. Where several
kinds carry the same gains (``Network.gain_groups``), rows may name the gain set once for all of them.

Law: reading what was written for the same network gives back the same exact gains.
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

from synth.base.errors import InputError, Place, nearest
from synth.base.exact import ExactMatrix
from synth.base.units import UnitError, parse_number, parse_unit
from synth.network.gains import Gains, gain_set
from synth.network.model import Kind, Network
from synth.network.reader import load_text
from synth.network.sections import sized
from synth.network.yaml_map import Listing, Node, Problems, Scalar, Source, Table, from_python, parse

COLUMNS = (
    "kind", "actuator", "signal", "gain", "gain_unit", "actuator_unit", "signal_unit", "sign_convention", "period_s",
    "certificate_sha256",
)  # fmt: skip
MAY_BE_EMPTY = ("period_s", "certificate_sha256")
SIGN_CONVENTION = "u = K y"
TABLE_NAME = "localgain gains"


@dataclass(frozen=True)
class _Cell:
    text: str
    place: Place | None


_Row = dict[str, _Cell]


def read_gains(path: str | os.PathLike[str], network: Network) -> Gains:
    """Read the gain table at ``path`` for ``network``; JSON if the file starts with ``{``, otherwise CSV.

    Gains are in (actuator unit)/(sensor unit) as the problem file declares them. Raises InputError with every problem
    found: unknown or missing or repeated entries, units other than the declared ones, a sign convention other than
    ``u = K y``, gains that are no numbers.
    """
    file, problems = os.fspath(path), Problems()
    text = load_text(file, "gain table", "a gain table (CSV or JSON)")
    problems.source = Source(file, text)
    rows = _json_rows(text, file, problems) if text.lstrip().startswith("{") else _csv_rows(text, file, problems)
    if problems.found:
        raise InputError(problems.in_order())
    found: dict[tuple[str, str, str], Fraction] = {}
    named = {row["kind"].text for row in rows}
    for row in rows:
        _entry(row, network, named, found, problems)
    sets = [_set(kind, network, found, problems, Place(file, 1, 1)) for kind in network.kinds]
    if not problems.found:
        _same_in_groups(network, sets, problems, Place(file, 1, 1))
    if problems.found:
        raise InputError(problems.in_order())
    return Gains(tuple(gain_set(kind, K) for kind, K in zip(network.kinds, sets, strict=True)))


def _same_in_groups(network: Network, sets: list[ExactMatrix], problems: Problems, top: Place) -> None:
    """Kinds that carry the same gains have the same in the table."""
    of = {kind.name: K for kind, K in zip(network.kinds, sets, strict=True)}
    for group, names in network.gain_groups().items():
        other = next((name for name in names if of[name] != of[names[0]]), None)
        if other is not None:
            problems.add(
                f"{names[0]} and {other} carry the same gains (gain set {group}), but this table gives them different "
                "ones; make them equal, or declare 'gains: per_place' in the design.",
                top,
            )


def _set(
    kind: Kind, network: Network, found: Mapping[tuple[str, str, str], Fraction], problems: Problems, top: Place
) -> ExactMatrix:
    lines: list[list[Fraction]] = []
    for actuator in kind.inputs:
        uses = network.goal.uses.get(kind.name, {}).get(actuator.name)
        lines.append([])
        for sensor in kind.sensors:
            value = found.get((kind.name, actuator.name, sensor.name))
            if value is None and (uses is None or sensor.name in uses):
                problems.add(
                    f"the gain of {kind.name} from {sensor.name} to {actuator.name} is missing; add its row, with "
                    "gain 0 if it is not used.",
                    top,
                )
            lines[-1].append(value or Fraction(0))
    return ExactMatrix.of(lines, (len(kind.inputs), len(kind.sensors)))


def _entry(
    row: _Row, network: Network, named: set[str], found: dict[tuple[str, str, str], Fraction], problems: Problems
) -> None:
    """Check one row and store its gain, of every kind it is about; ``named`` are all names in the column of kinds."""

    def refuse(column: str, sentence: str) -> None:
        problems.add(f"{column}: {sentence}.", row[column].place)

    kinds = {kind.name: kind for kind in network.kinds}
    name = row["kind"].text
    groups = network.gain_groups()
    about = [k for k in groups.get(name, (name,)) if k == name or k not in named]
    if name not in kinds and name not in groups:
        return refuse(
            "kind", f"unknown kind {name[:40]!r}{nearest(name, kinds)}; the problem file declares {', '.join(kinds)}"
        )
    if not about:
        return refuse(
            "kind", f"every kind of the gain set {name!r} has rows of its own; keep these, or those of the set"
        )
    kind = kinds[about[0]]
    inputs, sensors = {a.name: a.unit for a in kind.inputs}, {s.name: s.unit for s in kind.sensors}
    actuator, signal = row["actuator"].text, row["signal"].text
    if actuator not in inputs:
        refuse(
            "actuator",
            f"{name} has no actuator {actuator[:40]!r}{nearest(actuator, inputs)}; it has "
            f"{', '.join(inputs) or 'none'}",
        )
    if signal not in sensors:
        refuse(
            "signal",
            f"{name} has no sensor {signal[:40]!r}{nearest(signal, sensors)}; it reads {', '.join(sensors) or 'none'}",
        )
    if row["sign_convention"].text.replace(" ", "") != SIGN_CONVENTION.replace(" ", ""):
        refuse(
            "sign_convention",
            f"{row['sign_convention'].text[:40]!r} is not {SIGN_CONVENTION!r}; if the table means u = -K y, turn "
            f"every sign and write {SIGN_CONVENTION!r}",
        )
    if (period := row["period_s"].text) and (_number(period) is None or (_number(period) or 0) <= 0):
        refuse("period_s", f"{period[:40]!r} is not a period; write seconds above zero, or leave the cell empty")
    if (digest := row["certificate_sha256"].text) and not re.fullmatch(r"[0-9a-f]{64}", digest):
        refuse(
            "certificate_sha256",
            "this is not a SHA-256 (64 characters 0-9 a-f); leave the cell empty if there is no certificate",
        )
    value = _number(row["gain"].text)
    if value is None:
        refuse(
            "gain",
            f"{row['gain'].text[:40]!r} is not a number; write a decimal such as -6.25, or a fraction such as 1/3",
        )
    elif not sized(value):
        refuse("gain", f"{row['gain'].text[:40]} is too large or too small to compute with (1e-100 to 1e100)")
    if actuator not in inputs or signal not in sensors:
        return None
    _units(row, inputs[actuator], sensors[signal], problems)
    keys = [(k, actuator, signal) for k in about]
    if keys[0] in found:
        refuse("signal", f"the gain of {name} from {signal} to {actuator} stands twice; keep one row")
    uses = network.goal.uses.get(about[0], {}).get(actuator)
    if uses is not None and signal not in uses and value:
        refuse(
            "gain", f"design.uses does not let {actuator} use {signal}; the gain must be 0, or the problem file changed"
        )
    for key in keys:
        found.setdefault(key, value or Fraction(0))
    return None


def _units(row: _Row, actuator: str, signal: str, problems: Problems) -> None:
    above, below = parse_unit(actuator), parse_unit(signal)
    wanted = {
        "actuator_unit": (above, actuator),
        "signal_unit": (below, signal),
        "gain_unit": (above / below, f"({actuator})/({signal})"),
    }
    for column, (unit, text) in wanted.items():
        cell = row[column]
        try:
            same = parse_unit(cell.text) == unit
        except UnitError as error:
            problems.add(f"{column}: {error}; the problem file asks for {text!r}.", cell.place)
            continue
        if not same:
            problems.add(
                f"{column}: {cell.text!r} is not the declared unit {text!r}; convert the gain and write the "
                "declared unit.",
                cell.place,
            )


def _number(text: str) -> Fraction | None:
    """A decimal or a fraction of whole numbers, exactly; None if it is neither."""
    above, slash, below = text.partition("/")
    try:
        value = parse_number(above)
        if slash:
            if not re.fullmatch(r"\s*[0-9]+\s*", below, re.ASCII):
                return None
            value /= parse_number(below)
    except (UnitError, ZeroDivisionError):
        return None
    return value


def _csv_rows(text: str, file: str, problems: Problems) -> list[_Row]:
    """The rows of a CSV table by column name."""
    records = [r for r in split_csv(text, file, problems) if not (len(r) == 1 and not r[0].text.strip())]
    if not records:
        if not problems.found:
            problems.add(
                f"the gain table is empty; its first line names the columns {','.join(COLUMNS)}.", Place(file, 1, 1)
            )
        return []
    header = [cell.text.strip() for cell in records[0]]
    for cell, name in zip(records[0], header, strict=True):
        if name not in COLUMNS:
            problems.add(
                f"unknown column {name[:40]!r}{nearest(name, COLUMNS)}; the columns are {','.join(COLUMNS)}.",
                cell.place,
            )
        elif header.count(name) > 1:
            problems.add(f"the column {name!r} stands twice; keep one.", cell.place)
    for name in COLUMNS:
        if name not in header:
            problems.add(f"the column {name!r} is missing; the columns are {','.join(COLUMNS)}.", records[0][0].place)
    if problems.found:
        return []
    rows: list[_Row] = []
    for record in records[1:]:
        if len(record) != len(header):
            problems.add(
                f"this row has {len(record)} cells and the first line {len(header)}; give every column a cell.",
                record[0].place,
            )
            continue
        row = {name: _Cell(cell.text.strip(), cell.place) for name, cell in zip(header, record, strict=True)}
        if _filled(row, problems):
            rows.append(row)
    return rows


def _filled(row: _Row, problems: Problems) -> bool:
    empty = [name for name in COLUMNS if not row[name].text and name not in MAY_BE_EMPTY]
    for name in empty:
        problems.add(f"{name}: this cell is empty; only {' and '.join(MAY_BE_EMPTY)} may be.", row[name].place)
    return not empty


def split_csv(text: str, file: str, problems: Problems) -> list[list[_Cell]]:
    """Records of cells with their places (RFC 4180: commas, double quotes doubled inside quotes)."""
    records: list[list[_Cell]] = []
    at, line, start = 0, 1, 0
    while at < len(text):
        if text[at] == "#":
            end = text.find("\n", at)
            at, line, start = (len(text), line, start) if end < 0 else (end + 1, line + 1, end + 1)
            continue
        record: list[_Cell] = []
        while True:
            place, quoted = Place(file, line, at - start + 1), text.startswith('"', at)
            if quoted:
                found = re.compile(r'"((?:[^"]|"")*)"').match(text, at)
                if found is None:
                    problems.add("a quotation mark opens here and is never closed; close it in the same cell.", place)
                    return records
                cell, at = found[1].replace('""', '"'), found.end()
                line += cell.count("\n")
                start = text.rfind("\n", 0, at) + 1
            else:
                plain = re.compile(r"[^,\r\n]*").match(text, at)
                cell, at = (plain[0], plain.end()) if plain else ("", at)
            record.append(_Cell(cell, replace(place, length=max(len(cell), 1))))
            if not text.startswith(",", at):
                break
            at += 1
        records.append(record)
        ending = re.compile(r"\r\n|\n|\r|$").match(text, at)
        if ending is None:
            problems.add(
                "text follows a closed quotation mark; put the whole cell inside the quotes.",
                Place(file, line, at - start + 1),
            )
            return records
        at, line, start = ending.end(), line + 1, ending.end()
    return records


def _json_rows(text: str, file: str, problems: Problems) -> list[_Row]:
    """The rows of a JSON table by column name; places come from reading the same text as YAML, which contains JSON."""
    try:
        plain = json.loads(text, parse_constant=_not_finite, parse_int=str, parse_float=str)
    except json.JSONDecodeError as error:
        problems.add(
            f"this is not valid JSON: {error.msg}; check the commas and brackets up to here.",
            Place(file, error.lineno, error.colno),
        )
        return []
    except (ValueError, RecursionError) as error:
        problems.add(f"this JSON cannot be read: {error}.", Place(file, 1, 1))
        return []
    trial = Problems(source=problems.source)
    root = parse(text.replace("\t", " "), file, trial)  # a tab stands only between JSON values and may be a space
    twice = [problem for problem in trial.found if "stands twice" in problem.sentence]
    if root is None:
        root = from_python(plain, problems)
    problems.found += twice
    if not isinstance(root, Table):
        problems.add("a gain table is one JSON object with 'table' and 'rows'.", root)
        return []
    name, rows = root.entries.get("table"), root.entries.get("rows")
    if name is None or not isinstance(name.value, Scalar) or name.value.text != TABLE_NAME:
        problems.add(f"'table' must be {TABLE_NAME!r}; is this a gain table?", name or root)
        return []
    if rows is None or not isinstance(rows.value, Listing):
        problems.add("'rows' must be a list with one object per gain.", rows or root)
        return []
    found = [_json_row(item, problems) for item in rows.value.items]
    return [row for row in found if row is not None and _filled(row, problems)]


def _not_finite(name: str) -> None:
    raise ValueError(f"{name} is not a finite number; write a number")


def _json_row(item: Node, problems: Problems) -> _Row | None:
    if not isinstance(item, Table):
        problems.add(f"{item.path}: an object with the keys {', '.join(COLUMNS)} is expected here.", item)
        return None
    for key, entry in item.entries.items():
        if key not in COLUMNS:
            problems.add(
                f"{item.path}: unknown key {key[:40]!r}{nearest(key, COLUMNS)}; the keys are {', '.join(COLUMNS)}.",
                entry,
            )
    row: _Row = {}
    for name in COLUMNS:
        column = item.entries.get(name)
        if column is None and name not in MAY_BE_EMPTY:
            problems.add(f"{item.path}: the key {name!r} is missing; the keys are {', '.join(COLUMNS)}.", item)
            return None
        value = None if column is None else column.value
        if value is not None and (not isinstance(value, Scalar) or isinstance(value.value, bool)):
            problems.add(f"{value.path}: text or a number is expected here.", value)
            return None
        is_null = not isinstance(value, Scalar) or value.value is None
        row[name] = _Cell(
            "" if is_null or not isinstance(value, Scalar) else value.text.strip(), value.place if value else item.place
        )
    return row

"""Reads the matrices of a kind: numbers in declared units, shapes checked row by row."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.base.units import UnitError, parse_quantity
from synth.network.sections import Section, sized
from synth.network.tolerances import has_tolerance, parse_tolerance
from synth.network.yaml_map import Listing, Node, Problems, Scalar

# (rows, columns) of each matrix, by the group of signals that it counts.
SHAPES: dict[str, tuple[str, str]] = {
    "A": ("states", "states"),
    "B": ("states", "inputs"),
    "D": ("states", "takes"),
    "E": ("states", "disturbances"),
    "C": ("sensors", "states"),
    "N": ("sensors", "takes"),
    "H": ("offers", "states"),
    "F": ("offers", "takes"),
    "Fw": ("offers", "disturbances"),
    "Fu": ("offers", "inputs"),
}


@dataclass(frozen=True)
class UncertainEntry:
    """An entry of a matrix that may be ``half`` above or below the value in the matrix."""

    matrix: str
    row: int
    column: int
    half: Fraction


_OPTIONAL = ("C", "N", "H", "F", "Fw", "Fu")
_LEAD = {"N": "C", "F": "H", "Fw": "H", "Fu": "H"}


def read_matrices(
    given: Section, sizes: dict[str, int], shapes_known: bool, uncertain: list[UncertainEntry]
) -> dict[str, ExactMatrix]:
    """The matrices by name, with the middle of every entry that has a tolerance (which is added to ``uncertain``);
    C with N, or H with F, Fw and Fu, are absent where expressions give the outputs instead.

    A matrix with an empty side may be left out. ``shapes_known`` is false if a signal has a problem of its own: the
    shapes are then not compared.
    """
    problems, found = given.problems, {}
    for name, (down, across) in SHAPES.items():
        node, shape = given.get(name), (sizes[down], sizes[across])
        lead = _LEAD.get(name)
        if node is None:
            needed = name not in _OPTIONAL and 0 not in shape
            if needed and shapes_known:
                problems.add(
                    f"{given.table.path}: the matrix {name} ({shape[0]} {down} x {shape[1]} {across}) is missing; "
                    f"write it as a list of rows, zeros included.",
                    given.table,
                )
            elif name not in _OPTIONAL or (lead is not None and given.get(lead) is not None):
                found[name] = ExactMatrix.zeros(*shape)
            continue
        if lead is not None and given.get(lead) is None:
            problems.add(
                f"{node.path}: {name} needs {lead} beside it; give both as matrices, or both by expressions.", node
            )
            continue
        matrix = _matrix(node, name, shape, (down, across), problems, shapes_known, uncertain)
        if matrix is not None:
            found[name] = matrix
    return found


def _matrix(
    node: Node,
    name: str,
    shape: tuple[int, int],
    groups: tuple[str, str],
    problems: Problems,
    shapes_known: bool,
    uncertain: list[UncertainEntry],
) -> ExactMatrix | None:
    if not isinstance(node, Listing):
        problems.add(f"{node.path}: a list of rows is expected here, such as '[[0, 1], [0, -1]]'.", node)
        return None
    before = problems.count
    rows = [_row(item, problems) for item in node.items]
    widths = {len(row) for row in rows if row is not None}
    square = groups[0] == groups[1]
    if len(widths) > 1:
        width = len(rows[0] or [])
        for item, row in zip(node.items, rows, strict=True):
            if row is not None and len(row) != width:
                problems.add(
                    f"{item.path}: this row of {name} has {_entries(len(row))} and the first row {width}; all "
                    "rows need "
                    f"the same number of entries, one per column ({groups[1]}).",
                    item,
                )
                break
    elif square and widths and next(iter(widths)) != len(rows):
        problems.add(
            f"{node.path}: {name} is {len(rows)} x {next(iter(widths))}, but it must be square: "
            f"{shape[0]} x {shape[0]}, one row and one column per state.",
            node,
        )
    elif shapes_known and (len(rows) != shape[0] or (widths and next(iter(widths)) != shape[1])):
        columns = next(iter(widths), 0)
        problems.add(
            f"{node.path}: {name} is {len(rows)} x {columns}, but {shape[0]} x {shape[1]} is needed: rows are the "
            f"{groups[0]}, columns the {groups[1]}.",
            node,
        )
    if problems.count > before:
        return None
    filled = [[value for value, _ in row] for row in rows if row is not None]
    uncertain += [
        UncertainEntry(name, i, j, half) for i, row in enumerate(rows) for j, (_, half) in enumerate(row or []) if half
    ]
    return ExactMatrix.of(filled, shape if shapes_known else (len(filled), next(iter(widths), shape[1])))


def _entries(count: int) -> str:
    return "1 entry" if count == 1 else f"{count} entries"


def _row(node: Node, problems: Problems) -> list[tuple[Fraction, Fraction]] | None:
    if not isinstance(node, Listing):
        problems.add(f"{node.path}: a row of numbers is expected here, such as '[0, 1]'.", node)
        return None
    return [_number(item, problems) for item in node.items]


def _number(node: Node, problems: Problems) -> tuple[Fraction, Fraction]:
    """An entry and how far it may be from that."""
    value: Fraction | None = None
    half, said = Fraction(0), "this is"
    if isinstance(node, Scalar) and isinstance(node.value, Fraction):
        value = node.value
    elif isinstance(node, Scalar) and isinstance(node.value, str):
        said = f"{node.text[:30]!r} is"
        try:
            if has_tolerance(node.text):
                range_ = parse_tolerance(node.text)
                middle, half = (range_.low + range_.high) / 2, (range_.high - range_.low) / 2
                value = None if range_.written else middle
            else:
                number, _, written = parse_quantity(node.text)
                value = None if written else number  # '1/3' is a number, '1/3 s' is not: the signals carry the units
        except UnitError as error:
            if has_tolerance(node.text):
                problems.add(f"{node.path}: {error}.", node)
                return Fraction(0), Fraction(0)
    if value is None:
        problems.add(
            f"{node.path}: {said} not a number; write a decimal or a fraction such as 1/3, in the declared units.", node
        )
        return Fraction(0), Fraction(0)
    if not sized(value) or not sized(half):
        problems.add(f"{node.path}: this number is too large or too small to compute with (1e-100 to 1e100).", node)
    return value, half

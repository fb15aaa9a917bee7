"""CSV tables with a place for every cell, fast enough for a few hundred thousand rows.

RFC 4180 (commas, double quotes doubled inside quotes) with two limits: a cell has no line break, and lines that start
with # are remarks. Places are worked out only for the cells that a message is about.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from synth.base.errors import Place, nearest
from synth.network.yaml_map import Problems

_CELL = re.compile(r'\s*"((?:[^"]|"")*)"\s*(?=,|$)|([^,"]*)(?=,|$)')


@dataclass(frozen=True)
class CsvTable:
    """A table by its lines; ``header`` names the columns, ``first`` is the index of the first line after it."""

    file: str
    lines: Sequence[str]
    header: tuple[str, ...]
    first: int

    def rows(self, problems: Problems) -> Iterator[tuple[int, list[str]]]:
        """Line index and stripped cells of every row that has as many cells as the header; others are problems."""
        width = len(self.header)
        for number in range(self.first, len(self.lines)):
            line = self.lines[number]
            if not line.strip() or line.startswith("#"):
                continue
            if '"' in line:
                cells = _quoted(line)
                if cells is None:
                    problems.add(
                        "a quotation mark is out of place in this row; a cell is quoted as a whole, a quotation mark "
                        "inside it is doubled, and a cell has no line break.",
                        Place(self.file, number + 1, line.index('"') + 1),
                    )
                    continue
            else:
                cells = line.split(",")
            if len(cells) != width:
                problems.add(
                    f"this row has {len(cells)} cells and the first line {width}; give every column a cell.",
                    Place(self.file, number + 1, 1),
                )
                continue
            yield number, [cell.strip() for cell in cells]

    def place(self, number: int, column: str) -> Place:
        """The place of a cell, the start of its row where the column does not exist."""
        if column not in self.header:
            return Place(self.file, number + 1, 1)
        line, at = self.lines[number], 0
        for _ in range(self.header.index(column)):
            found = _CELL.match(line, at)
            at = found.end() + 1 if found else at
        at += len(line[at:]) - len(line[at:].lstrip())
        return Place(self.file, number + 1, at + 1)


def _quoted(line: str) -> list[str] | None:
    cells, at = [], 0
    while True:
        found = _CELL.match(line, at)
        if found is None:
            return None
        cells.append(found[2] if found[1] is None else found[1].replace('""', '"'))
        at = found.end()
        if at >= len(line):
            return cells
        at += 1


def open_csv(
    text: str, file: str, needed: Sequence[str], known: Sequence[str], what: str, problems: Problems
) -> CsvTable | None:
    """The table in ``text``; a missing or repeated column, or one that is not ``known``, is a problem.

    ``what`` ends the sentence about the columns that are accepted.
    """
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    at = next((i for i, line in enumerate(lines) if line.strip() and not line.startswith("#")), None)
    if at is None:
        problems.add(f"the table is empty; its first line names the columns: {what}.", Place(file, 1, 1))
        return None
    cells = _quoted(lines[at]) or lines[at].split(",")
    header = tuple(cell.strip() for cell in cells)
    table = CsvTable(file, lines, header, at + 1)
    before = problems.count
    for name in dict.fromkeys(header):
        place = table.place(at, name)
        if name not in known:
            problems.add(f"unknown column {name[:40]!r}{nearest(name, known)}; accepted are {what}.", place)
        elif header.count(name) > 1:
            problems.add(f"the column {name!r} stands twice; keep one.", place)
    for name in needed:
        if name not in header:
            problems.add(f"the column {name!r} is missing; accepted are {what}.", Place(file, at + 1, 1))
    return table if problems.count == before else None


def csv_cell(text: str) -> str:
    """A text as one cell, quoted where it must be."""
    return (
        f'"{text.replace(chr(34), chr(34) * 2)}"' if any(c in text for c in ',"\n\r') or text.startswith("#") else text
    )

"""Shows the line of a file that a message is about, with the place underlined.

The result is for a terminal or a log: two lines, indented, such as

       12 |     sensers: [slot, speed]
          |     ^^^^^^^

Law: the carets stand under the characters they mean, for tabs, wide and combining characters too (as far as the
terminal keeps to Unicode's East Asian widths), and no line is wider than the width asked for.
"""

from __future__ import annotations

import unicodedata

TAB = 4
WIDEST = 110
CUT = "..."


def underlined(text: str, line: int, column: int, length: int = 1, width: int = WIDEST) -> str:
    """Two indented lines: ``text`` (one line of a file, without its end) and carets below ``length`` characters.

    ``line`` and ``column`` count from 1; the column is a position among the characters of ``text`` and may be one
    beyond its end. Long lines are cut to about ``width`` columns around the place; the cuts are marked by dots.
    """
    cells = [_cell(character) for character in text]
    first = min(max(column - 1, 0), len(cells))
    last = min(max(first + max(length, 1), first + 1), max(len(cells), first + 1))
    start, end = _window(cells, first, last, width)
    lead, tail = CUT if start > 0 else "", CUT if end < len(cells) else ""
    shown = lead + "".join(glyph for glyph, _ in cells[start:end]) + tail
    before = len(lead) + sum(size for _, size in cells[start:first])
    carets = max(sum(size for _, size in cells[first : min(last, end)]), 1)
    gutter = f"{line:>6} | "
    return f"  {gutter}{shown}".rstrip() + f"\n  {'| ':>{len(gutter)}}{' ' * before}{'^' * carets}"


def _cell(character: str) -> tuple[str, int]:
    """What is shown for a character, and how many columns it takes."""
    if character == "\t":
        return " " * TAB, TAB
    if unicodedata.combining(character):
        return character, 0
    if not character.isprintable():  # control characters, lone surrogates: a terminal must not act on them
        return "\N{REPLACEMENT CHARACTER}", 1
    return character, 2 if unicodedata.east_asian_width(character) in "WF" else 1


def _window(cells: list[tuple[str, int]], first: int, last: int, width: int) -> tuple[int, int]:
    """The part of the line that is shown: all of it if it fits, otherwise a stretch around the place."""
    if sum(size for _, size in cells) <= width:
        return 0, len(cells)
    room = width - 2 * len(CUT)
    start = first
    before = 0
    while start > 0 and before + cells[start - 1][1] <= room // 3:
        start -= 1
        before += cells[start][1]
    end, used = start, 0
    while end < len(cells) and used + cells[end][1] <= room:
        used += cells[end][1]
        end += 1
    while end == len(cells) and start > 0 and used + cells[start - 1][1] <= room:  # near the end: show more before
        start -= 1
        used += cells[start][1]
    return start, end

"""The underlined line stands in step with its text."""

from __future__ import annotations

import unicodedata

from hypothesis import given
from hypothesis import strategies as st

from synth.base.errors import InputError, Place, Problem
from synth.base.excerpt import WIDEST, underlined


def columns(text: str) -> int:
    """Terminal columns of a text, counted independently of the code under test."""
    return sum(
        0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in ("W", "F") else 1 for c in text
    )


def test_the_name_is_underlined() -> None:
    assert underlined("  sensers: [slot]", 12, 3, 7) == (
        "      12 |   sensers: [slot]\n"
        "         |   ^^^^^^^"
    )  # fmt: skip


def test_tabs_and_wide_characters_keep_the_caret_in_step() -> None:
    shown, carets = underlined("\t名前: bad", 1, 6, 3).splitlines()
    start = carets.index("^")
    assert columns(shown[: shown.index("bad")]) == start == columns(carets[:start])
    assert carets.count("^") == 3


def test_long_lines_are_cut_around_the_place() -> None:
    text = "a" * 500 + "WRONG" + "b" * 500
    shown, carets = underlined(text, 1, 501, 5).splitlines()
    assert len(shown) < WIDEST + 20 and shown.count("...") == 2
    assert shown[carets.index("^") : carets.rindex("^") + 1] == "WRONG"
    assert "WRONG" in underlined("a" * 500 + "WRONG", 1, 501, 5)


def test_control_characters_never_reach_the_terminal() -> None:
    shown = underlined("a\x1b[31m\x00\u202eb\udc80", 1, 2)
    assert shown.replace("\n", "").isprintable() and "\x1b" not in shown


@given(st.text(max_size=300), st.integers(1, 400), st.integers(0, 400), st.integers(20, 120))
def test_any_text_gives_two_bounded_lines(text: str, column: int, length: int, width: int) -> None:
    line = text.replace("\n", " ").replace("\r", " ")
    parts = underlined(line, 7, column, length, width).split("\n")
    assert len(parts) == 2 and "^" in parts[1] and parts[1].strip(" |^") == ""
    assert all(columns(part) <= width + 24 for part in parts)


def test_a_problem_shows_its_line_only_if_it_has_one() -> None:
    place = Place("f", 2, 3, 4)
    assert Problem("wrong.", place).shown() == "f:2:3: wrong."
    assert str(InputError(Problem("wrong.", place, "a bcde"))) == "f:2:3: wrong.\n" + underlined("a bcde", 2, 3, 4)
    assert Problem("wrong.", place).as_dict() == {
        "sentence": "wrong.",
        "file": "f",
        "line": 2,
        "column": 3,
        "length": 4,
    }
    assert Place("f", 2, 3) == place

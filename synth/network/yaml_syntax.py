"""Says in plain words why a text is not YAML, and points at what the writer can mend.

The parser reports where it gave up; a person looks for what is wrong. An open bracket or quotation mark is therefore
shown where it opens.
"""

from __future__ import annotations

import re
from collections.abc import Sequence

import yaml

from synth.base.errors import Place

_QUOTE = re.compile(r"""(?:^|[:,\[{-])\s*(['"])""")
_MAYBE_QUOTE = ("mapping values are not allowed", "did not find expected key", "could not find expected ':'")
_OPEN = ("expected ',' or", "unexpected end of stream")

# What the parser says (a part of it), and what a person is told.
_SENTENCES: tuple[tuple[str, str], ...] = (
    (
        "cannot start any token",
        "a character stands here that cannot start a value (a tab, or one of % @ `); indent with spaces and put quotes "
        "around such text",
    ),
    (
        "mapping values are not allowed",
        "a ': ' stands inside a value; if a new key was meant, start it in the same column as the keys above it; "
        "put quotes around text that contains ': '",
    ),
    (
        "could not find expected ':'",
        "a key without its ':' stands in the line above; write 'key: value', and put text of several lines in quotes",
    ),
    (
        "did not find expected key",
        "a key is expected here; keys of one mapping start in the same column, and nothing follows a closed quotation "
        "mark or bracket in its line",
    ),
    (
        "expected '-' indicator",
        "an item of the list above is expected here, starting with '- '; a list and a mapping cannot be mixed",
    ),
    ("expected node content", "a value is expected here; write one, or take the bracket or comma out"),
    ("unexpected end of stream", "the quotation mark that opens here is never closed; close it"),
    (
        "escape c",
        "in double quotes a backslash starts an escape, and this is none; write two backslashes, or use single quotes",
    ),
    (
        "comment or line break",
        "nothing but a comment may follow '|' or '>' in its line; start the text in the next line",
    ),
    (
        "directive",
        "a line that starts with % is an instruction to the reader of YAML, and this one is not known; take it out",
    ),
    ("expected <document start>", "the file ended with '...' above, and more text follows; take the '...' out"),
    (
        "alphabetic or numeric",
        "'*' and '&' start names of repeated values, which are not accepted; put quotes around such text",
    ),
    ("control characters", "a control character stands here; take it out"),
    ("special characters", "a control character stands here; take it out"),
)


def syntax_problem(error: yaml.YAMLError, lines: Sequence[str], file: str) -> tuple[str, Place]:
    """One sentence for a person, with what would be accepted, and the place it is about."""
    said, mark = str(getattr(error, "problem", "")), getattr(error, "problem_mark", None)
    if mark is not None and any(part in said for part in _MAYBE_QUOTE):
        place = _open_quote(lines[: mark.line], file)
        if place is not None:
            return (
                "this is not valid YAML: the quotation mark that opens here is not closed in its line, and the text "
                f"below it does not fit either (line {mark.line + 1}); close it, or write it "
                "twice if it is part of the text."
            ), place
    return _sentence(error), _place(error, lines, file)


def _open_quote(lines: Sequence[str], file: str) -> Place | None:
    """The first value that starts with a quotation mark and does not end in its line."""
    for number, line in enumerate(lines, 1):
        for found in _QUOTE.finditer(line):
            if found[1] not in line[found.end() :]:
                return Place(file, number, found.end())
    return None


def _sentence(error: yaml.YAMLError) -> str:
    said = str(getattr(error, "problem", None) or getattr(error, "reason", None) or "it cannot be read")
    where = getattr(error, "problem_mark", None)
    if "\\t" in said:
        said = "cannot start any token"
    if "expected ',' or" in said and where is not None and getattr(error, "context_mark", None) is not None:
        return (
            "this is not valid YAML: the bracket that opens here is not closed, or a comma is missing after one of its "
            f"entries; reading stopped in line {where.line + 1}, column {where.column + 1}."
        )
    for part, sentence in _SENTENCES:
        if part in said:
            return f"this is not valid YAML: {sentence}."
    return f"this is not valid YAML: {said}; check the indentation, the colons and the brackets up to here."


def _place(error: yaml.YAMLError, lines: Sequence[str], file: str) -> Place:
    """The bracket or quotation mark that is still open, otherwise where reading stopped."""
    mark = getattr(error, "problem_mark", None)
    opened = getattr(error, "context_mark", None)
    if mark is None or (opened is not None and any(part in str(getattr(error, "problem", "")) for part in _OPEN)):
        mark = opened or mark
    if mark is not None:
        return Place(file, mark.line + 1, mark.column + 1)
    for number, line in enumerate(lines, 1):
        for column, character in enumerate(line, 1):
            if not character.isprintable() and character not in "\t\ufeff":
                return Place(file, number, column)
    return Place(file, 1, 1)

"""Reading: exactly the expected fields, exact numbers, and the form in which a file is hashed."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Iterator
from fractions import Fraction
from typing import Any

SCHEMA, VERSION = "localgain certificate", 2
LOOSE = Fraction(1, 10**5)  # a stated bound may exceed the derived one by this part (seven digits need less), no more
FIELDS = (
    "schema version network_hash model gains route target evidence radius point constants peaks validity claim covers "
    "excludes cautions provenance hash"
)
NORM = (
    "maximum norm: x, the largest absolute value of a state over all units, each in its declared unit; "
    "w, the largest absolute value of a disturbance over all units and times, likewise"
)
MEANING = (
    "X0: initial size that keeps every limit while disturbances stay within their declared peaks; w: size of "
    "disturbances, from rest, that keeps every limit; factor: the same as a multiple of the declared peaks"
)
CAUTIONS = (
    "Engineering aid, not an approval: the numbers hold for the model in the problem file and only as far as it "
    "describes the plant.",
    "Local codes, the functional-safety procedure of the site and the judgement of the licensed engineer in charge "
    "take precedence.",
    "Commission in steps, with independent protection (brakes, trips, relief) that does not depend on these gains.",
    "Gains are for the sign convention u = K y written beside them; a turned sign or a wrong unit can destabilise the "
    "plant.",
)
MANY = 2_000_000  # more entries than that no list may have
Row = list[Fraction]
Matrix = list[Row]


class Rejected(Exception):
    """The certificate does not prove what it claims; the sentence says why."""


def need(condition: bool, sentence: str) -> None:
    """Raise Rejected with the sentence unless the condition holds."""
    if not condition:
        raise Rejected(sentence)


def fields(value: Any, names: str, where: str) -> dict[str, Any]:
    """The value, if it is an object with exactly these fields."""
    need(isinstance(value, dict) and set(value) == set(names.split()), f"{where} must have exactly the fields {names}")
    return dict(value)


def items(value: Any, where: str, most: int = 400) -> list[Any]:
    """The value, if it is a list of at most ``most`` entries."""
    need(isinstance(value, list) and len(value) <= most, f"{where} must be a list of at most {most} entries")
    return list(value)


def whole(value: Any, where: str, least: int = 0, most: int = MANY) -> int:
    """The value, if it is a whole number in this range."""
    need(type(value) is int and least <= value <= most, f"{where} must be a whole number from {least} to {most}")
    return int(value)


def text(value: Any, where: str) -> str:
    """The value, if it is a non-empty text."""
    need(isinstance(value, str) and value != "", f"{where} must be a text")
    return str(value)


def number(value: Any, where: str) -> Fraction:
    """A number written as text: a decimal or p/q, read exactly."""
    good = isinstance(value, str) and len(value) <= 2000
    good = good and re.fullmatch(r"-?\d+(/[1-9]\d*|(\.\d+)?([eE][+-]?\d{1,3})?)", value, re.ASCII) is not None
    need(good, f"{where} must be a number written as an exact text")
    return Fraction(value)


def positive(value: Any, where: str) -> Fraction:
    """A number above zero."""
    found = number(value, where)
    need(found > 0, f"{where} must be positive")
    return found


def optional(value: Any, where: str) -> Fraction | None:
    """A positive number, or None for no bound."""
    return None if value is None else positive(value, where)


def matrix(value: Any, height: int, width: int, where: str) -> Matrix:
    """A matrix of exact numbers of the given shape."""
    rows = [[number(v, where) for v in items(row, where)] for row in items(value, where)]
    need(len(rows) == height and all(len(row) == width for row in rows), f"{where} must be {height} x {width}")
    return rows


def shown(value: Any) -> str:
    """A number as a person writes it: the decimal where a short one is exact, else p/q."""
    exact = number(value, "a number")
    short = f"{float(exact):.12g}"
    return short if Fraction(short) == exact else str(exact)


def canonical(value: Any) -> str:
    """JSON with sorted keys and no spaces, the form that is hashed."""
    return "".join(pieces(value))


def pieces(value: Any, depth: int = 4) -> Iterator[str]:
    """The canonical form piece by piece, so that a large file is never one text in memory."""
    if depth and isinstance(value, dict) and value and all(isinstance(key, str) for key in value):
        for n, key in enumerate(sorted(value)):
            yield f"{',' if n else '{'}{json.dumps(key, ensure_ascii=False)}:"
            yield from pieces(value[key], depth - 1)
        yield "}"
    elif depth and isinstance(value, list) and value:
        for n, part in enumerate(value):
            yield "," if n else "["
            yield from pieces(part, depth - 1)
        yield "]"
    else:
        yield json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def digest(value: Any) -> str:
    """SHA-256 of the canonical form."""
    found = hashlib.sha256()
    for piece in pieces(value):
        found.update(piece.encode("utf-8"))
    return found.hexdigest()

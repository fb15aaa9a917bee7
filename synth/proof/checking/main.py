"""Comparing what is stated with what is derived, and the program that does it for a file."""

from __future__ import annotations

import csv
import json
import os
from collections.abc import Callable
from fractions import Fraction
from typing import Any

from synth.proof.checking.claims import sentences
from synth.proof.checking.description import read_system
from synth.proof.checking.evidence import Derived
from synth.proof.checking.peak_route import Measure, derive_peak, unit_gains
from synth.proof.checking.reading import (
    CAUTIONS,
    FIELDS,
    LOOSE,
    MANY,
    MEANING,
    NORM,
    SCHEMA,
    VERSION,
    Rejected,
    digest,
    fields,
    items,
    need,
    number,
    optional,
    positive,
    shown,
)
from synth.proof.checking.storage_route import derive_storage


def derive(document: dict[str, Any], measure: Measure = unit_gains) -> Derived:
    """All bounds that follow from model, gains, route, evidence, point and alpha of a document; Rejected if none do.

    ``measure`` lets a builder that has just called unit_gains remember its results; checking never passes one.
    """
    system = read_system(document)
    need(document["route"] in ("peak", "storage"), "the route must be peak or storage")
    if document["route"] == "peak":
        return derive_peak(document, system, measure)
    return derive_storage(document, system)


def above(stated: Any, bound: Fraction, what: str) -> None:
    """A stated upper bound must not be below the derived one, nor needlessly above it."""
    value = number(stated, what)
    need(value >= bound, f"{what} is stated as {stated}, but only {float(bound):.9g} can be derived")
    need(
        value <= bound * (1 + LOOSE) + Fraction(1, 10**9),
        f"{what} is stated as {stated}; this proof gives {float(bound):.9g}",
    )


def below(stated: Any, room: Fraction | None, what: str) -> None:
    """A stated range must stay strictly inside the derived one ('inf' where nothing limits it), by at most 0.001 %."""
    if room is None or stated == "inf":
        need(room is None and stated == "inf", f"{what} does not agree with the limits of the model")
        return
    need(
        room * (1 - LOOSE) <= number(stated, what) < room,
        f"{what} is stated as {stated}, derived: below {float(room):.9g}",
    )


def compare(document: dict[str, Any], found: Derived) -> None:
    """Rejected unless every number and sentence of the document is what its evidence proves."""
    target = positive(document["target"], "target")
    radius = fields(document["radius"], "lower upper", "radius")
    above(radius["upper"], found.radius[1], "radius.upper")
    need(
        number(radius["upper"], "radius") <= target < 1, "the radius is not below the target, or the target not below 1"
    )
    lower = number(radius["lower"], "radius.lower")
    need(
        found.radius[0] * (1 - LOOSE) - Fraction(1, 10**9) <= lower <= found.radius[0] and lower >= 0,
        "radius.lower is not the derived one",
    )
    above(document["constants"]["C"], found.C, "C")
    above(document["constants"]["G"], found.G, "G")
    stated = [fields(p, "kind role signal value in limit", "peaks") for p in items(document["peaks"], "peaks", MANY)]
    need(len(stated) == len(found.lines), "peaks must be stated for every offer, state and actuator")
    for peak, line, base in zip(stated, found.lines, found.base, strict=True):
        what = f"the peak of {line.kind}.{line.signal}"
        names = [peak[key] for key in ("kind", "role", "signal", "in")]
        need(names == [line.kind, line.role, line.signal, line.unit], f"{what} is missing or misnamed")
        above(peak["value"], base, what)
        need(optional(peak["limit"], what) == line.limit, f"{what} names another limit than the model")
        if line.limit is not None:
            need(
                base < line.limit,
                f"the declared disturbances alone may drive {line.kind}.{line.signal} to {float(base):.6g} "
                f"{line.unit}, at or beyond its limit of {float(line.limit):.6g}; what rests on keeping limits does "
                f"not hold",
            )
    valid = fields(document["validity"], "X0 w factor meaning", "validity")
    none = [Fraction(0)] * len(found.lines)
    below(valid["X0"], found.room(found.base, found.start), "validity.X0")
    below(valid["w"], found.room(none, found.unit), "validity.w")
    below(valid["factor"], found.room(none, found.base), "validity.factor")


def wording(document: dict[str, Any]) -> None:
    """Rejected unless every fixed text and every sentence is the one that the numbers make."""
    need(document["constants"]["norm"] == NORM, "the norm is not the documented one")
    need(document["validity"]["meaning"] == MEANING, "the meaning of validity is not the documented one")
    need(document["cautions"] == list(CAUTIONS), "the cautions are missing or changed")
    claim, covers, excludes = sentences(document)
    need(document["claim"] == claim, "the claim is not the sentence that its numbers make")
    need(document["covers"] == covers, "covers does not follow from the model")
    need(document["excludes"] == excludes, "excludes does not follow from the model")


def check_document(document: Any) -> list[str]:
    """Reasons why the document does not prove its claim; empty exactly when every part was re-derived."""
    try:
        edges = isinstance(document, dict) and "windows" in document
        document = fields(document, FIELDS + " windows" * edges, "the certificate")
        need(document["schema"] == SCHEMA and type(document["version"]) is int, "not a certificate of this kind")
        need(document["version"] == VERSION, "another version of certificate")
        rest = {key: value for key, value in document.items() if key != "hash"}
        need(document["hash"] == digest(rest), "the content was changed after the certificate was made (hash)")
        need(document["network_hash"] == digest(document["model"]), "network_hash does not belong to the model")
        origin = fields(document["provenance"], "network_hash settings versions", "provenance")
        need(origin["network_hash"] == document["network_hash"], "the provenance names another network")
        wording(document)
        compare(document, derive(document))
    except Rejected as reason:
        return [str(reason)]
    except (ArithmeticError, LookupError, TypeError, ValueError, AttributeError, RecursionError, MemoryError) as error:
        return [f"the certificate is malformed ({type(error).__name__}: {error})"]
    return []


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    need(len({key for key, _ in pairs}) == len(pairs), "a field occurs twice")
    return dict(pairs)


def check_text(content: str) -> list[str]:
    """Reasons why the text of a certificate file does not prove its claim; empty when it does."""
    try:
        document = json.loads(content, object_pairs_hook=_once)
    except (Rejected, ValueError, RecursionError) as error:
        return [f"not a readable certificate: {error}"]
    return check_document(document)


def beside(path: str, proven: dict[tuple[str, str, str], str]) -> int:
    """Compare the gain table that lies beside the certificate, if one does: 0 the same gains, 1 not."""
    if not os.path.exists(path):  # noqa: PTH110
        return 0
    try:
        with open(path, encoding="utf-8", newline="") as stream:  # noqa: PTH123
            rows = list(csv.DictReader(line for line in stream if not line.startswith("#")))
        table = {(row["kind"], row["actuator"], row["signal"]): Fraction(row["gain"]) for row in rows}
        whole = {key: Fraction(value) for key, value in proven.items()}
        same = len(table) == len(rows) and all(table.get(k, 0) == whole.get(k, 0) for k in table.keys() | whole.keys())
        same = same and all(row["sign_convention"] == "u = K y" for row in rows)
    except (OSError, ValueError, LookupError, TypeError, csv.Error):
        same = False
    print("gains.csv beside it holds the same gains" if same else "NOT THE PROVEN GAINS: gains.csv beside it differs")
    return 0 if same else 1


def main(
    arguments: list[str],
    check: Callable[[str], list[str]] = check_text,
    program: str = "check.py",
    done: str = "verified: every number was derived again in exact arithmetic",
) -> int:
    """Check one file with ``check``; print the result; 0 verified, 1 not verified, 2 no such file."""
    if len(arguments) != 1:
        print(f"usage: python {program} certificate.json")
        return 2
    try:
        with open(arguments[0], encoding="utf-8") as stream:  # noqa: PTH123 - the shortest standard way
            content = stream.read()
        reasons = check(content)
    except (OSError, UnicodeDecodeError) as error:
        print(f"cannot read {arguments[0]}: {error}")
        return 2
    print("\n".join(reasons) if reasons else done)
    if reasons:
        return 1
    document = json.loads(content)
    print(f"network {document['network_hash']}\n{document['claim']}\nThe gains, u = K y:")
    proven = {
        (g["kind"], actuator, signal): value
        for g in document["gains"]
        for actuator, row in zip(g["actuators"], g["K"], strict=True)
        for signal, value in zip(g["signals"], row, strict=True)
    }
    for (kind, actuator, signal), value in proven.items():
        print(f"  {kind}: {actuator} {signal} {shown(value)}")
    return beside(os.path.join(os.path.dirname(arguments[0]), "gains.csv"), proven)  # noqa: PTH118, PTH120

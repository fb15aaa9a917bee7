"""Every leaf of a certificate, changed: refused by its hash; with hashes and sentences made anew, refused or true.

The second attack is the stronger one: the forger recomputes the hashes and lets the checker's own templates write the
sentences. Where such a forgery is accepted it must be a certificate of something that holds by the numerical evaluation
in truth.py (a point scaled as a whole, another name of a sensor's physical unit, ...).
"""

from __future__ import annotations

import contextlib
import copy
import random
import re
from collections.abc import Iterator
from fractions import Fraction
from typing import Any

import pytest

from synth.proof import check, prove
from tests.build import convoy, convoy_gains
from tests.proof.networks import tanks
from tests.proof.truth import is_true

NUMBER = re.compile(r"-?\d+(/\d+)?|-?\d+\.\d+")
SAMPLED = 40  # changes per certificate in the quick run
TEXTS = ("claim", "covers", "excludes")


def leaves(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    inner = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else None
    if inner is None:
        yield path
    else:
        for key, part in inner:
            yield from leaves(part, (*path, key))


def changes(value: Any) -> list[Any]:
    """Other values for a leaf: numbers up, down and of the other sign; everything else a little different."""
    if isinstance(value, str) and NUMBER.fullmatch(value):
        exact = Fraction(value)
        if not exact:
            return ["1/10", "-1/10"]
        return [str(exact * Fraction(part)) for part in ("1.5", "0.6", "1.001", "0.999", "-1")]
    if isinstance(value, str):
        return [value + "x", ""]
    if isinstance(value, int):
        return [value + 1, -value - 1]
    return ["1", "0"] if value is None else [None]


def changed(document: dict[str, Any], path: tuple[Any, ...], value: Any) -> dict[str, Any]:
    copied = copy.deepcopy(document)
    place = copied
    for key in path[:-1]:
        place = place[key]
    place[path[-1]] = value
    return copied


def forged(document: dict[str, Any], path: tuple[Any, ...], value: Any) -> dict[str, Any]:
    """The changed document with fresh hashes and fresh sentences (except where the change itself is one of these)."""
    copied = changed(document, path, value)
    if path[0] not in ("network_hash", "provenance"):
        copied["network_hash"] = copied["provenance"]["network_hash"] = check.digest(copied["model"])
    if path[0] not in TEXTS:
        with contextlib.suppress(check.Rejected, ArithmeticError, LookupError, TypeError, ValueError):
            copied["claim"], copied["covers"], copied["excludes"] = check.sentences(copied)
    if path[0] != "hash":
        del copied["hash"]
        copied["hash"] = check.digest(copied)
    return copied


def attacks(document: dict[str, Any]) -> list[tuple[tuple[Any, ...], Any]]:
    found = []
    for path in leaves(document):
        value = document
        for key in path:
            value = value[key]
        found += [(path, other) for other in changes(value)]
    return found


def attack(document: dict[str, Any], chosen: list[tuple[tuple[Any, ...], Any]]) -> tuple[int, list[tuple[Any, ...]]]:
    """(refused, paths accepted); fails on the first accepted forgery that is not true."""
    refused, accepted = 0, []
    for path, value in chosen:
        forgery = forged(document, path, value)
        if check.check_document(forgery):
            refused += 1
            continue
        assert is_true(forgery), f"accepted, but not true: {path} -> {value!r}"
        accepted.append((*path, value))
    return refused, accepted


def report(name: str, refused: int, accepted: list[tuple[Any, ...]]) -> None:
    print(f"{name}: {refused} refused, {len(accepted)} accepted and true: {accepted}")


def certificate(name: str, route: str) -> dict[str, Any]:
    network, gains = (convoy(), convoy_gains()) if name == "convoy" else tanks()
    found = prove(network, gains, route=route)
    assert found.proven, found.reasons
    assert is_true(found.document)
    return found.document


@pytest.mark.parametrize("route", ["peak", "storage"])
def test_changed_leaves(route):
    document = certificate("tanks", route)
    everything = attacks(document)
    for path, value in everything:
        assert check.check_document(changed(document, path, value)), f"a changed {path} must not pass the hash"
    claims = [a for a in everything if a[0][0] in ("radius", "constants", "peaks", "validity", "target", "point")]
    sample = random.Random(5).sample(everything, SAMPLED) + random.Random(6).sample(claims, SAMPLED // 2)
    refused, accepted = attack(document, sample)
    report(route, refused, accepted)
    assert refused > 0.8 * len(sample)


@pytest.mark.long
@pytest.mark.parametrize("name", ["tanks", "convoy"])
@pytest.mark.parametrize("route", ["peak", "storage"])
def test_every_leaf(name, route):
    document = certificate(name, route)
    everything = attacks(document)
    refused, accepted = attack(document, everything)
    report(f"{name}, {route}", refused, accepted)
    assert refused > 0.85 * len(everything)


def test_missing_and_extra_fields_are_refused():
    document = certificate("tanks", "storage")
    for path in {leaf[:k] for leaf in leaves(document) for k in range(1, len(leaf) + 1)}:
        if path[0] == "provenance" and len(path) > 2:
            continue  # which settings and versions are recorded is no claim
        copied = copy.deepcopy(document)
        place = copied
        for key in path[:-1]:
            place = place[key]
        del place[path[-1]]
        if path != ("hash",):
            copied["hash"] = check.digest({key: value for key, value in copied.items() if key != "hash"})
        assert check.check_document(copied), f"accepted without {path}"
    for path in ((), ("model",), ("radius",), ("constants",), ("peaks", 0), ("model", "links", 0), ("evidence", 0)):
        copied = copy.deepcopy(document)
        place = copied
        for key in path:
            place = place[key]
        place["more"] = "1"
        if "hash" in copied:
            copied["network_hash"] = copied["provenance"]["network_hash"] = check.digest(copied["model"])
            copied["hash"] = check.digest({key: value for key, value in copied.items() if key != "hash"})
        assert check.check_document(copied), f"accepted with an extra field in {path}"

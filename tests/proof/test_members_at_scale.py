"""Certificates of many distinct members: storage route, CPU time and size printed."""

from __future__ import annotations

import json
import random
import time
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from synth.network.gains import Gains, gain_set
from synth.network.layout import Members
from synth.network.model import Kind, Link, Network
from synth.proof import check, prove
from tests.build import M, hauler


def distinct_haulers(units: int) -> tuple[Network, Gains]:
    """A ring of haulers, each with its own lag and sensitivity, and links of different strengths, 0.1 s late."""
    chance = random.Random(1)

    def one(i: int) -> Kind:
        plain = hauler(str(Fraction(chance.randint(40, 60), 100)), None)
        offers = (replace(plain.offers[0], band=None),)
        return replace(
            plain, name=f"hauler {i}", offers=offers, D=M([[0], [0], [Fraction(chance.randint(150, 250), 100)]])
        )

    kinds = tuple(one(i) for i in range(units))
    links = tuple(
        Link("follow", f"hauler {(i - 1) % units}", "place", (), f"hauler {i}", "ahead",
             Fraction(chance.randint(20, 40), 100), Fraction(0), Fraction(1, 10))
        for i in range(units)
    )  # fmt: skip
    places = np.arange(units, dtype=np.int32)
    arrays = (places.copy(), places.copy(), np.roll(places, 1), places.copy())
    parts = tuple((i,) for i in range(units))
    listed = Members(tuple(f"u{i}" for i in range(units)), *arrays, parts, tuple((k.name, {}) for k in kinds))
    network = Network("Invented ring of haulers", kinds, links, dimension=0, description="members", members=listed)
    return network, Gains(tuple(gain_set(k, M([["-6", "-5", "-1.5"]])) for k in kinds))


def measured(units: int, folder: Path) -> int:
    """Prove, save, read back and check; returns the size of the file in bytes."""
    network, gains = distinct_haulers(units)
    began = time.process_time()
    certificate = prove(network, gains, route="storage")
    built = time.process_time() - began
    assert certificate.proven, certificate.reasons
    path = certificate.save(folder / "certificate.json")
    began = time.process_time()
    assert check.check_text(path.read_text(encoding="utf-8")) == []
    checked = time.process_time() - began
    size = path.stat().st_size
    print(f"{units} distinct units: {built:.1f} s CPU built, {checked:.1f} s checked, {size / 1e6:.1f} MB")
    return size


def test_a_few_dozen_distinct_members(tmp_path: Path) -> None:
    assert measured(30, tmp_path) < 30 * 10_000


@pytest.mark.long
def test_ten_thousand_distinct_members(tmp_path: Path) -> None:
    assert measured(10_000, tmp_path) <= 100_000_000


def test_the_hash_is_that_of_the_whole_text() -> None:
    """The canonical form is made piece by piece; it must be what one call of json makes."""
    for value in (
        {"b": [1, {"a": None, "z": ["\u00e9", "x"]}], "a": {}},
        [],
        [[[[[[1, {"k": [2]}]]]]]],
        "t",
        {"": [[]]},
    ):
        whole = json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        assert check.canonical(value) == whole

"""Damaged files: always a Network or an InputError, never another exception."""

from __future__ import annotations

import random
from pathlib import Path

import pytest

from synth.base.errors import InputError
from synth.network import Network, obstruction, read, read_gains
from tests.network.files import CONVOY, GAP_ONLY
from tests.network.test_gain_table import table_text

PIECES = [
    b"{",
    b"}",
    b"[",
    b"]",
    b":",
    b"'",
    b'"',
    b"&a ",
    b"*a",
    b"!!",
    b"1e999",
    b".inf",
    b"-",
    b"\t",
    b"\n",
    b"\xff",
    b"\x00",
    b"**",
    b"/0",
    b"0",
    b"~",
    b"#",
    b"|",
    b">",
    b"?",
    b",",
    b"(",
    b")",
    b"slot",
    b"9" * 50,
    b"\xc3\xa4",
    b"%",
    b" +- ",
]


def damaged(data: bytes, chance: random.Random) -> bytes:
    """One to four changes: a byte, an insertion, a deletion, or a piece moved."""
    for _ in range(chance.randint(1, 4)):
        at = chance.randrange(len(data) + 1)
        kind = chance.randrange(4)
        if kind == 0:
            data = data[:at] + bytes([chance.randrange(256)]) + data[at + 1 :]
        elif kind == 1:
            data = data[:at] + chance.choice(PIECES) + data[at:]
        elif kind == 2:
            data = data[:at] + data[at + chance.randint(1, 12) :]
        else:
            start = chance.randrange(len(data) + 1)
            data = data[:at] + data[start : start + chance.randint(1, 40)] + data[at:]
    return data


def survive(count: int, seed: int, folder: Path) -> tuple[int, int]:
    """How many of ``count`` damaged files were read, and how many refused."""
    chance, file, fine, refused = random.Random(seed), folder / "f.yaml", 0, 0
    originals = [CONVOY.read_bytes(), GAP_ONLY.read_bytes()]
    for k in range(count):
        file.write_bytes(damaged(originals[k % 2], chance))
        try:
            network = read(file)
        except InputError as error:
            refused += 1
            assert all(problem.sentence and problem.place for problem in error.problems)
        else:
            assert isinstance(network, Network)
            obstruction(network)
            fine += 1
    return fine, refused


def test_damaged_problem_files(tmp_path: Path) -> None:
    fine, refused = survive(300, 1, tmp_path)
    assert fine > 20 and refused > 100


@pytest.mark.long
def test_many_damaged_problem_files(tmp_path: Path) -> None:
    assert sum(survive(20_000, 2, tmp_path)) == 20_000


def test_damaged_gain_tables(tmp_path: Path) -> None:
    network, chance = read(CONVOY), random.Random(3)
    for k in range(300):
        file = tmp_path / "t"
        file.write_bytes(damaged(table_text(json_form=k % 2 == 1).encode(), chance))
        try:
            gains = read_gains(file, network)
        except InputError as error:
            assert all(problem.sentence for problem in error.problems)
        else:
            assert gains["hauler"].K.shape == (1, 3)

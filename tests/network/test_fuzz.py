"""Damaged files: a valid network or located sentences, whatever the bytes; no traceback, hang or flood of memory."""

from __future__ import annotations

import os
import random
import shutil
import subprocess
import sys
import time
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.network import Network, describe, read, read_gains
from tests.network.files import CONVOY, ROOT
from tests.network.fuzzing import EXAMPLES, damaged, nasty, original_texts, structured
from tests.network.test_gain_table import table_text

LONGEST = 10.0  # seconds of computing for one file
LARGEST = 2 * 1024**3  # bytes of address space on top of what an idle process with the libraries has

TEXTS = original_texts()


def outcome(file: Path) -> bool:
    """Whether the file was read; a refusal must be located and plain, and both must be quick."""
    start = time.process_time()
    try:
        network = read(file)
    except InputError as error:
        assert error.problems, file
        for problem in error.problems:
            assert problem.sentence.endswith("."), problem
            assert problem.sentence.isprintable() and len(problem.sentence) < 2000, problem
            assert problem.place is not None or problem.sentence.startswith("these are the first"), problem
        assert len(str(error)) < 400_000
        assert time.process_time() - start < LONGEST
        return False
    assert isinstance(network, Network)
    assert describe(network).as_text()
    assert time.process_time() - start < LONGEST
    return True


def folder_with_tables(folder: Path) -> Path:
    for path in EXAMPLES.glob("*.csv"):
        shutil.copy(path, folder)
    return folder


def survive(count: int, seed: int, folder: Path) -> tuple[int, int]:
    """How many of ``count`` damaged files were read, and how many refused; half by bytes, half by structure."""
    chance, file, fine = random.Random(seed), folder_with_tables(folder) / "f.yaml", 0
    for k in range(count):
        text = TEXTS[k // 2 % len(TEXTS)][1]
        data = damaged(text.encode(), chance) if k % 2 else structured(text, chance)
        file.write_bytes(data)
        try:
            fine += outcome(file)
        except Exception as error:
            raise AssertionError(f"file {k} of seed {seed}: {data[:3000]!r}") from error
    return fine, count - fine


def test_the_originals_are_valid(tmp_path: Path) -> None:
    for path, _ in TEXTS:
        assert outcome(path), path


def test_damaged_problem_files(tmp_path: Path) -> None:
    fine, refused = survive(120, 1, tmp_path)
    assert fine > 10 and refused > 60


@settings(max_examples=40, deadline=None, derandomize=True)
@given(chance=st.randoms(use_true_random=False), which=st.integers(0, len(TEXTS) - 1))
def test_rearranged_problems(tmp_path_factory: pytest.TempPathFactory, chance: random.Random, which: int) -> None:
    """Hypothesis chooses the changes, so a failure shrinks to the fewest of them."""
    folder = folder_with_tables(tmp_path_factory.mktemp("r"))
    (folder / "f.yaml").write_bytes(structured(TEXTS[which][1], chance))
    outcome(folder / "f.yaml")


@pytest.mark.long
def test_twenty_thousand_damaged_problem_files(tmp_path: Path) -> None:
    fine, refused = survive(20_000, 2, tmp_path)
    print(f"{fine} read, {refused} refused")
    assert fine > 1000 and refused > 10_000


NASTY = nasty()
QUICK = ("alias bomb", "huge integer", "deep expression")
SLOW = ("many keys", "many values", "long title", "long key", "many equations", "huge decimals")
HARMLESS = ("byte order mark", "two marks", "both returns", "carriage returns", "line separators", "long line")


@pytest.mark.parametrize("name", [n if n not in SLOW else pytest.param(n, marks=pytest.mark.long) for n in NASTY])
def test_files_made_to_hurt(name: str, tmp_path: Path) -> None:
    (tmp_path / "f.yaml").write_bytes(NASTY[name])
    try:
        read(tmp_path / "f.yaml")
        assert name in HARMLESS
    except InputError as error:
        assert all(problem.sentence.isprintable() for problem in error.problems)
        located = [problem for problem in error.problems if problem.place is not None]
        assert located or name in ("too large",)


@pytest.mark.skipif(sys.platform == "win32", reason="limits of a process are set in the way of POSIX")
@pytest.mark.parametrize("name", QUICK)
def test_the_command_survives_them_within_its_limits(name: str, tmp_path: Path) -> None:
    run_within_limits(NASTY[name], tmp_path)


@pytest.mark.long
@pytest.mark.parametrize("name", NASTY)
def test_the_command_survives_all_of_them(name: str, tmp_path: Path) -> None:
    run_within_limits(NASTY[name], tmp_path)


def run_within_limits(data: bytes, folder: Path) -> None:
    """Run ``synth check`` as a process of its own with bounded memory and time; exit 0 to 2 and no traceback."""
    import resource

    (folder / "f.yaml").write_bytes(data)

    def limit() -> None:
        resource.setrlimit(resource.RLIMIT_AS, (LARGEST, LARGEST))

    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(
        [sys.executable, "-m", "synth.cli", "check", "f.yaml"],
        cwd=folder, env=environment, capture_output=True, timeout=4 * LONGEST, preexec_fn=limit, check=False,
    )  # fmt: skip
    assert done.returncode in (0, 1, 2), done.stderr[-2000:]
    assert b"Traceback" not in done.stderr
    if done.returncode == 2:
        assert b"synth: f.yaml" in done.stderr


def test_damaged_tables_of_members(tmp_path: Path) -> None:
    chance, folder = random.Random(5), folder_with_tables(tmp_path)
    shutil.copy(EXAMPLES / "members.yaml", folder / "f.yaml")
    for k in range(60):
        name = ("units.csv", "links.csv")[k % 2]
        original = (EXAMPLES / name).read_bytes()
        (folder / name).write_bytes(damaged(original, chance))
        outcome(folder / "f.yaml")
        (folder / name).write_bytes(original)


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

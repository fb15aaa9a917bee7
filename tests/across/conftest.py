"""One whole run of the convoy, shared by the tests that look at its results."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

CASES = Path(__file__).parents[2] / "case_studies"
CONVOY = CASES / "convoy" / "convoy.yaml"
GAP_ONLY = CASES / "convoy" / "gap_only.yaml"


@dataclass(frozen=True)
class Done:
    code: int
    out: str
    err: str

    @property
    def document(self) -> dict[str, Any]:
        found = json.loads(self.out)
        assert isinstance(found, dict)
        return found


def synth(*words: object, cwd: Path | None = None, timeout: float = 300) -> Done:
    """Run the command as a user would, in a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", "synth.cli", *map(str, words)],
        capture_output=True,
        text=True,
        cwd=cwd,
        timeout=timeout,
        env={**os.environ, "PYTHONPATH": str(CASES.parent), "SYNTH_DEBUG": ""},
    )
    assert "Traceback" not in done.stderr + done.stdout
    return Done(done.returncode, done.stdout, done.stderr)


@pytest.fixture(scope="session")
def convoy_run(tmp_path_factory: pytest.TempPathFactory, worker_id: str) -> tuple[Done, Path]:
    """`synth run convoy.yaml --json --out DIR`, once per session however many workers there are."""
    base = tmp_path_factory.getbasetemp()
    shared = (base.parent if worker_id != "master" else base) / "convoy_run"
    lock = shared.with_suffix(".lock")
    try:
        lock.touch(exist_ok=False)
    except FileExistsError:
        _wait_for(shared / "done.json")
    else:
        shared.mkdir()
        shutil.copy(CONVOY, shared / "convoy.yaml")
        done = synth("run", "convoy.yaml", "--json", "--out", "out", cwd=shared)
        partial = shared / "done.part"
        partial.write_text(json.dumps([done.code, done.out, done.err]))
        partial.rename(shared / "done.json")
    return Done(*json.loads((shared / "done.json").read_text())), shared / "out"


def _wait_for(path: Path, seconds: float = 300) -> None:
    import time

    end = time.monotonic() + seconds
    while not path.exists():
        assert time.monotonic() < end, "the shared run did not finish"
        time.sleep(0.2)

"""Finished pieces of work on disk, so that an interrupted run goes on where it stopped.

One line of JSON per piece, found again by a hash of everything that went into it; floats are written so that they read
back exactly. A line that was cut off by an interruption is not a finished piece and is ignored.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, StorageFailure

_HEAD = "synth finished work 1"


def key_of(*parts: NDArray[np.float64] | str | float | int) -> str:
    """SHA-256 over numbers, texts and arrays with their shapes."""
    digest = hashlib.sha256()
    for part in parts:
        if isinstance(part, np.ndarray):
            digest.update(f"[{part.shape}]".encode())
            digest.update(np.ascontiguousarray(part, dtype=np.float64).tobytes())
        else:
            digest.update(f"<{part!r}>".encode())
    return digest.hexdigest()


class Journal:
    """Results by key, in memory and, where a path is given, in a file that grows line by line."""

    def __init__(self, path: str | os.PathLike[str] | None = None) -> None:
        """Read what an earlier run left at ``path``. InputError where the file is something else."""
        self.path = None if path is None else Path(path)
        self.known: dict[str, list[float]] = {}
        self.found_before = 0
        if self.path is None or not self.path.exists():
            return
        try:
            lines = self.path.read_text(encoding="utf-8", errors="replace").split("\n")
        except OSError as error:
            raise StorageFailure(f"cannot read {self.path}: {error.strerror or error}.") from error
        if lines[0] != _HEAD and "\n".join(lines).strip():
            raise InputError(f"{self.path} does not hold finished work of an earlier design; name another file.")
        for line in lines[1:]:
            try:
                entry = json.loads(line)
                self.known[entry["key"]] = [float(v) for v in entry["point"]]
            except (ValueError, KeyError, TypeError):
                continue
        self.found_before = len(self.known)

    def add(self, results: Iterable[tuple[str, list[float]]]) -> None:
        """Keep finished pieces; on disk when this returns."""
        new = {key: point for key, point in results if key not in self.known}
        self.known.update(new)
        if self.path is None or not new:
            return
        text = "".join(json.dumps({"key": key, "point": point}) + "\n" for key, point in new.items())
        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
            fresh = not self.path.exists() or self.path.stat().st_size == 0
            with self.path.open("a", encoding="utf-8") as file:
                # A newline first closes a line that was cut off.
                file.write((_HEAD + "\n" if fresh else "\n") + text)
                file.flush()
                os.fsync(file.fileno())
        except OSError as error:
            raise StorageFailure(f"cannot write {self.path}: {error.strerror or error}.") from error

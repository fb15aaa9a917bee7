"""The errors that reach a user: one clear sentence each, with its place and its exit code.

An error says what is wrong, where, what would be accepted and what to do next. The command line prints
``str(error)`` and exits with ``error.exit_code``; it never prints a traceback.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Place:
    """A position in a file a person wrote; line and column count from 1."""

    file: str
    line: int
    column: int

    def __str__(self) -> str:
        """``file:line:column``, the form that editors and terminals turn into a link."""
        return f"{self.file}:{self.line}:{self.column}"


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with an input: a sentence and, where there is one, its place."""

    sentence: str
    place: Place | None = None

    def __str__(self) -> str:
        """The sentence, with ``file:line:column: `` in front where the place is known."""
        return self.sentence if self.place is None else f"{self.place}: {self.sentence}"


class SynthError(Exception):
    """Base of every error raised on purpose by this package."""

    exit_code = 3


class InputError(SynthError):
    """The input is wrong (exit code 2); carries every problem found, in file order."""

    exit_code = 2

    def __init__(self, problems: str | Problem | Iterable[Problem], place: Place | None = None) -> None:
        """Take one sentence (with an optional place), one problem, or several problems."""
        if isinstance(problems, str):
            found: tuple[Problem, ...] = (Problem(problems, place),)
        elif isinstance(problems, Problem):
            found = (problems,)
        else:
            found = tuple(problems)
        if not found:
            raise ValueError("an InputError needs at least one problem")
        self.problems = found
        super().__init__("\n".join(str(problem) for problem in found))


class SolverFailure(SynthError):
    """A numerical library gave no usable answer (exit code 3); the sentence names what was tried."""


class StorageFailure(SynthError):
    """The disk refused (exit code 3); earlier results are intact."""


class UnstableLoop(SynthError):
    """A closed unit is not Hurwitz (a mode grows or does not decay), so no peak gain is finite (exit code 1)."""

    exit_code = 1


class WidthNotReached(SynthError):
    """A guaranteed enclosure could not be made as narrow as asked; the sentence says how narrow it got."""


def nearest(name: str, known: Iterable[str]) -> str:
    """Return `` (did you mean 'x'?)`` for the known name closest to ``name``, or an empty string if none is close."""
    close = difflib.get_close_matches(name, list(known), n=1, cutoff=0.6)
    return f" (did you mean {close[0]!r}?)" if close else ""

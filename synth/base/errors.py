"""The errors that reach a user: one clear sentence each, with its place and its exit code.

An error says what is wrong, where, what would be accepted and what to do next. The command line prints
``str(error)`` and exits with ``error.exit_code``; it never prints a traceback. Where the text is at hand, the line of
the file stands below the sentence with the place underlined.
"""

from __future__ import annotations

import difflib
import itertools
from collections.abc import Iterable
from dataclasses import dataclass, field

from synth.base.excerpt import underlined

MOST_NAMES = 2000
LONGEST_NAME = 100


@dataclass(frozen=True)
class Place:
    """A position in a file a person wrote; line and column count from 1.

    ``length`` is how many characters of the line are meant (at least 1); two places are equal wherever they start
    together.
    """

    file: str
    line: int
    column: int
    length: int = field(default=1, compare=False)

    def __str__(self) -> str:
        """``file:line:column``, the form that editors and terminals turn into a link."""
        return f"{self.file}:{self.line}:{self.column}"


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with an input: a sentence and, where there is one, its place.

    ``excerpt`` is the line of the file at that place, without its end (None where the text is not at hand).
    """

    sentence: str
    place: Place | None = None
    excerpt: str | None = field(default=None, compare=False)

    def __str__(self) -> str:
        """The sentence, with ``file:line:column: `` in front where the place is known."""
        return self.sentence if self.place is None else f"{self.place}: {self.sentence}"

    def shown(self) -> str:
        """The sentence and, below it, the line of the file with the place underlined."""
        if self.place is None or self.excerpt is None or not self.excerpt.strip():
            return str(self)
        return f"{self}\n{underlined(self.excerpt, self.place.line, self.place.column, self.place.length)}"

    def as_dict(self) -> dict[str, object]:
        """Plain data for programs: the sentence, and file, line, column and length where they are known."""
        if self.place is None:
            return {"sentence": self.sentence}
        place = self.place
        return {
            "sentence": self.sentence,
            "file": place.file,
            "line": place.line,
            "column": place.column,
            "length": place.length,
        }


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
        super().__init__("\n".join(problem.shown() for problem in found))


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
    """Return `` (did you mean 'x'?)`` for the known name closest to ``name``, or an empty string if none is close.

    Only the first ``MOST_NAMES`` known names are compared and very long names are not, so that a damaged file cannot
    make a message take minutes.
    """
    if len(name) > LONGEST_NAME:
        return ""
    close = difflib.get_close_matches(name, list(itertools.islice(known, MOST_NAMES)), n=1, cutoff=0.6)
    return f" (did you mean {close[0]!r}?)" if close else ""

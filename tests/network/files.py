"""Problem texts for the tests of the reader (all data invented)."""

from __future__ import annotations

from pathlib import Path

from synth.base.errors import InputError
from synth.network import Network, read

ROOT = Path(__file__).resolve().parents[2]
CONVOY = ROOT / "case_studies" / "convoy" / "convoy.yaml"
GAP_ONLY = ROOT / "case_studies" / "convoy" / "gap_only.yaml"
BROKEN = Path(__file__).resolve().parent / "broken"


def read_text(text: str, folder: Path) -> Network:
    """Read a problem from a text."""
    file = folder / "problem.yaml"
    file.write_text(text, encoding="utf-8", newline="")
    return read(file)


def refusal(text: str, folder: Path) -> str:
    """The sentences with which a text is refused, one a line; an assertion fails if it is accepted."""
    try:
        read_text(text, folder)
    except InputError as error:
        said = "\n".join(str(problem) for problem in error.problems)
        return said.replace(str(folder / "problem.yaml"), "problem.yaml")
    raise AssertionError("the text was accepted")


def convoy_text(*changes: tuple[str, str]) -> str:
    """The convoy's file with replacements, each of which must hit."""
    text = CONVOY.read_text(encoding="utf-8")
    for before, after in changes:
        assert before in text, before
        text = text.replace(before, after, 1)
    return text

"""Broken problem files, each with the message a person gets; the messages were read and judged before they were
kept."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from synth.base.errors import InputError
from synth.network import read
from tests.network.files import BROKEN

FILES = sorted(path.name for path in BROKEN.glob("*.yaml"))


def test_there_are_enough_of_them() -> None:
    assert len(FILES) >= 75
    assert {Path(name).with_suffix(".txt").name for name in FILES} == {path.name for path in BROKEN.glob("*.txt")}


@pytest.mark.parametrize("name", FILES)
def test_message_is_the_one_that_was_approved(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(BROKEN)
    with pytest.raises(InputError) as caught:
        read(name)
    assert str(caught.value) + "\n" == (BROKEN / name).with_suffix(".txt").read_text(encoding="utf-8")
    for problem in caught.value.problems:
        assert re.match(rf"({re.escape(name)}|spare/\w+\.csv):\d+:\d+: .*\.$", str(problem)), problem
        assert problem.excerpt is not None or name == "utf16.yaml"

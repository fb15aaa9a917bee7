"""`synth new` writes a problem that is accepted, explains itself to an editor, and overwrites nothing."""

from __future__ import annotations

import json
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import jsonschema
import pytest
import yaml

from synth.base.errors import InputError
from synth.network import describe, read
from synth.network.starter import SCHEMA_NAME, schema_text, starter_text, write_starter


def test_the_starter_is_a_problem_without_obstruction(tmp_path: Path) -> None:
    said = write_starter(tmp_path / "basins")
    assert str(tmp_path / "basins.yaml") in said and "synth run" in said
    described = describe(read(tmp_path / "basins.yaml"))
    assert described.obstruction is None and described.intake == {"basin.inflow": Fraction(1, 10)}


def test_the_schema_stands_beside_it_and_accepts_it(tmp_path: Path) -> None:
    write_starter(tmp_path / "a.yml")
    text = (tmp_path / "a.yml").read_text(encoding="utf-8")
    assert text.splitlines()[0] == f"# yaml-language-server: $schema={SCHEMA_NAME}"
    schema = json.loads((tmp_path / SCHEMA_NAME).read_text(encoding="utf-8"))
    jsonschema.validate(yaml.safe_load(text), schema)
    wrong = yaml.safe_load(text.replace("sensors:", "sensers:"))
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(wrong, schema)


def test_every_line_of_the_starter_fits_a_page() -> None:
    assert max(map(len, starter_text().splitlines())) <= 120


def test_nothing_is_overwritten(tmp_path: Path) -> None:
    (tmp_path / "mine.yaml").write_text("synth: 1\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"mine\.yaml exists already and is left alone"):
        write_starter(tmp_path / "mine")
    assert (tmp_path / "mine.yaml").read_text(encoding="utf-8") == "synth: 1\n"
    assert not (tmp_path / SCHEMA_NAME).exists()
    (tmp_path / SCHEMA_NAME).write_text("{}", encoding="utf-8")
    with pytest.raises(InputError, match="was not written by this tool"):
        write_starter(tmp_path / "other")
    assert not (tmp_path / "other.yaml").exists()


def test_an_older_schema_is_brought_up_to_date(tmp_path: Path) -> None:
    (tmp_path / SCHEMA_NAME).write_text(schema_text()[:400], encoding="utf-8")
    write_starter(tmp_path / "new")
    assert (tmp_path / SCHEMA_NAME).read_text(encoding="utf-8") == schema_text()


def test_the_verb(tmp_path: Path) -> None:
    command = [sys.executable, "-m", "synth.cli", "new", "row"]
    first = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert first.returncode == 0 and "row.yaml is a problem to start from" in first.stdout
    second = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
    assert second.returncode == 2 and second.stderr.startswith("synth: row.yaml exists already")

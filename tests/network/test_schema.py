"""The JSON Schema that editors use is in step with the reader."""

from __future__ import annotations

import json
import subprocess
import sys
from importlib import resources
from typing import Any

import jsonschema
import pytest
import yaml

from synth.base.errors import InputError
from synth.network import read
from synth.network.sections import KEYS, LATER
from tests.network.files import BROKEN, CONVOY, GAP_ONLY
from tests.network.fuzzing import EXAMPLES

SCHEMA: dict[str, Any] = json.loads(
    resources.files("synth.network").joinpath("schema.json").read_text(encoding="utf-8")
)


class CoreLoader(yaml.SafeLoader):
    """PyYAML without its YAML 1.1 readings of yes, no and sexagesimals; enough for the files used here."""


def test_every_key_of_the_reader_is_in_the_schema() -> None:
    assert set(SCHEMA["$defs"]) - {"name", "unit", "quantity", "strength", "expression", "matrix"} == set(KEYS) - {
        "problem"
    }
    for sort, keys in KEYS.items():
        part = SCHEMA if sort == "problem" else SCHEMA["$defs"][sort]
        assert list(part["properties"]) == list(keys), sort
        assert part["additionalProperties"] is False


def test_no_key_is_both_honoured_and_refused() -> None:
    assert set(KEYS) == set(LATER)
    assert not any(set(KEYS[sort]) & set(LATER[sort]) for sort in KEYS)


@pytest.mark.parametrize("path", [CONVOY, GAP_ONLY, *sorted(EXAMPLES.glob("*.yaml"))], ids=lambda path: path.name)
def test_the_examples_are_valid(path: Any) -> None:
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    jsonschema.validate(yaml.load(path.read_text(encoding="utf-8"), CoreLoader), SCHEMA)


@pytest.mark.parametrize("name", ["unknown_key", "wrong_type", "missing_peak", "not_honoured"])
def test_what_the_schema_can_say_it_says(name: str) -> None:
    data = yaml.load((BROKEN / f"{name}.yaml").read_text(encoding="utf-8"), CoreLoader)
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(data, SCHEMA)


@pytest.mark.parametrize("sort", sorted(LATER))
def test_every_later_key_is_refused(sort: str) -> None:
    """Put each later key where it belongs in the convoy; the reader says that it is not honoured."""
    where: dict[str, tuple[Any, ...]] = {
        "problem": (),
        "kind": ("kinds", "hauler"),
        "state": ("kinds", "hauler", "states", "slot"),
        "input": ("kinds", "hauler", "inputs", "demand"),
        "disturbance": ("kinds", "hauler", "disturbances", "slope"),
        "take": ("kinds", "hauler", "takes", "ahead"),
        "offer": ("kinds", "hauler", "offers", "place"),
        "sensor": ("kinds", "hauler", "sensors", "slot"),
        "matrices": ("kinds", "hauler", "matrices"),
        "network": ("network",),
        "pattern": ("network", "pattern"),
        "link": ("network", "pattern", "links", 0),
        "class": ("network", "classes", "follow"),
        "design": ("design",),
        "simulation": ("simulation",),
        "hop": ("design", "hop"),
    }
    for key in LATER[sort]:
        data = yaml.load(CONVOY.read_text(encoding="utf-8"), CoreLoader)
        hauler = data["kinds"]["hauler"]
        hauler["states"]["slot"] = {"in": "m"}
        hauler["takes"]["ahead"] = {"in": "m/s^2"}
        hauler["sensors"] = {"slot": {"is": "slot"}}
        data["network"]["classes"] = {"follow": {}}
        if sort == "hop":
            data["design"] = {"claim": "hop", "hop": {"notion": "peak", "signal": "place"}}
        read(data)
        if sort == "matrices":
            hauler["matrices"] = {}
        target = data
        for step in where[sort]:
            target = target[step]
        target[key] = 1
        with pytest.raises(InputError, match=f"the key '{key}' is not honoured by this version"):
            read(data)


def test_the_package_is_light() -> None:
    """Importing the package pulls in no numerical library."""
    code = "import sys, synth.network; sys.exit(bool({'numpy', 'scipy', 'yaml', 'networkx'} & set(sys.modules)))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0

"""Writes a problem file to start from, and the JSON Schema that lets an editor complete and check it."""

from __future__ import annotations

import os
import shlex
from importlib import resources
from pathlib import Path

from synth.base.errors import InputError
from synth.base.files import write_text

SCHEMA_NAME = "problem.schema.json"
_OURS = '"title": "Problem file of localgain'


def schema_text() -> str:
    """The JSON Schema of the problem file (draft 2020-12)."""
    return resources.files("synth.network").joinpath("schema.json").read_text(encoding="utf-8")


def starter_text() -> str:
    """The problem file to start from."""
    return resources.files("synth.network").joinpath("starter.yaml").read_text(encoding="utf-8")


def write_starter(name: str | os.PathLike[str]) -> str:
    """Write ``name`` (with ``.yaml`` added where no suffix is given) and the schema beside it; return what to do next.

    Nothing is overwritten: InputError if the problem file exists, or if a ``problem.schema.json`` stands there that
    this tool did not write. A schema of an earlier version is brought up to date.
    """
    given = Path(name)
    file = given if given.suffix in (".yaml", ".yml") else given.with_name(f"{given.name}.yaml")
    schema = file.with_name(SCHEMA_NAME)
    try:
        if os.path.lexists(file):
            raise InputError(f"{file} exists already and is left alone; choose another name.")
        if os.path.lexists(schema) and _OURS not in schema.read_text(encoding="utf-8", errors="replace")[:2000]:
            raise InputError(f"{schema} exists already and was not written by this tool; choose another folder.")
    except (OSError, ValueError) as error:
        raise InputError(f"{file} cannot be written here ({getattr(error, 'strerror', None) or error}).") from None
    write_text(schema, schema_text())
    write_text(file, starter_text())
    return (
        f"{file} is a problem to start from; change it to describe your units and links.\n"
        f"{schema} lets editors complete and check it.\n"
        "Next:\n"
        f"  synth check {shlex.quote(str(file))}\n"
        f"  synth run {shlex.quote(str(file))} --out {shlex.quote(f'out/{file.stem}')}\n"
    )

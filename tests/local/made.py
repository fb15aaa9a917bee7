"""Designs that several tests look at, made once per process."""

from __future__ import annotations

from functools import cache

from synth.local import Design, design
from tests.local.cases import cases


@cache
def made(name: str) -> Design:
    """The design of a named case with seed 0."""
    return design(cases()[name])

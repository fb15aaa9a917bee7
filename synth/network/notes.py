"""Remarks about a problem that is accepted, for ``synth check``: what was written and changes nothing."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping

from synth.network.yaml_map import Entry, Listing, Node, Scalar, Table

_WORD = re.compile(r"[A-Za-z_][A-Za-z0-9_]*", re.ASCII)


def unused_parameters(
    entries: Mapping[str, Entry], used: frozenset[tuple[str, str]], kind_of: Mapping[str, str]
) -> tuple[str, ...]:
    """A sentence for every parameter that stands in no expression of its kind and in no strength.

    ``used`` holds the (kind, parameter) that strengths name; ``kind_of`` is the declared kind of a place.
    """
    named = {(kind_of.get(kind, kind.split(" ")[0]), name) for kind, name in used}
    notes: list[str] = []
    for kind, entry in entries.items():
        if not isinstance(entry.value, Table) or "parameters" not in entry.value.entries:
            continue
        parameters = entry.value.entries["parameters"].value
        others = [part.value for key, part in entry.value.entries.items() if key != "parameters"]
        words = {word for other in others for text in _texts(other) for word in _WORD.findall(text)}
        names = parameters.entries if isinstance(parameters, Table) else ()
        notes += [
            f"The parameter {name} of {kind} is declared and used nowhere, so its value changes nothing; is it "
            "missing from an equation?"
            for name in names
            if name not in words and (kind, name) not in named
        ]
    return tuple(notes)


def _texts(node: Node) -> Iterator[str]:
    """All texts below a node; keys are names that are declared there, not uses."""
    pending = [node]
    while pending:
        part = pending.pop()
        if isinstance(part, Scalar):
            yield part.text
        elif isinstance(part, Table):
            pending += [entry.value for entry in part.entries.values()]
        elif isinstance(part, Listing):
            pending += part.items

"""From the model and gains of a certificate to the stations and closed units that its description means."""

from __future__ import annotations

from typing import Any

from synth.proof.checking.edges import Fringe
from synth.proof.checking.reading import MANY, fields, items, need, whole
from synth.proof.checking.units import Unit
from synth.proof.checking.wiring import (
    EXTRA,
    Link,
    System,
    one_per_kind,
    read_kinds,
    read_link,
    read_members,
    read_rules,
)


def read_system(document: dict[str, Any]) -> System:
    """The closed units and what arrives at them; Rejected if the model is not exactly as documented."""
    model = document["model"]
    need(isinstance(model, dict), "the model must be an object")
    description = model.get("description")
    more = {"pattern": "", "rules": "rules", "members": "members", "edge pattern": "edges"}
    need(isinstance(description, str) and description in more, "the description is not one of the four")
    keys = f"description dimension kinds links {more[str(description)]}"
    keys += " cell" * (description == "edge pattern" and "cell" in model)
    model = fields(model, keys, "model")
    dimension = model["dimension"]
    lattice = description in ("pattern", "edge pattern")
    whole(dimension, "the dimension", int(lattice), 9)
    plants = read_kinds(document, model)
    links = []
    for raw in items(model["links"], "links", MANY):
        choice = description == "rules" and isinstance(raw, dict) and not {"own_part", "sort"} & set(raw)
        links.append(read_link(raw, plants, dimension if lattice else len(raw.get("at", ())), "choice" * choice))
        need(lattice or not any(links[-1].raw["at"]), "a link at an offset stands outside a pattern")
    system = System(str(description), plants, links)
    need(description == "edge pattern" or "windows" not in document, "only edges have windows")
    if description == "pattern":
        one_per_kind(system, list(plants))
    elif description == "rules":
        read_rules(system, model)
    elif description == "members":
        read_members(system, model)
    else:
        Fringe(system, model).build(document.get("windows"))
    system.used()
    return system


def read_model(document: dict[str, Any]) -> tuple[list[Unit], list[Link]]:
    """The closed units of a pattern of fixed links, kind by kind, and its links: where the firmware route starts."""
    system = read_system(document)
    fixed = system.description == "pattern" and not any(link.weakens for link in system.links)
    need(fixed, "this route is for patterns of fixed links")
    return [system.unit(station) for station in system.stations], system.links


__all__ = ["EXTRA", "read_model", "read_system"]

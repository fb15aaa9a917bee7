"""Reads what the design makes small: ``aim: {least: effort}`` or ``aim: {least: peak, of: [hauler.place]}``."""

from __future__ import annotations

from dataclasses import replace

from synth.base.errors import nearest
from synth.network.model import Goal, Kind
from synth.network.sections import items_of, section, text_of
from synth.network.settings import Nameable
from synth.network.yaml_map import Node, Problems, Table

AIMS = ("radius", "effort", "peak")
_GROUPS = ("states", "offers", "inputs")


def with_aim(goal: Goal, design: Node | None, known: Nameable, problems: Problems) -> Goal:
    """``goal`` with the aim written in the section ``design``; the smallest radius where none is."""
    entry = design.entries.get("aim") if isinstance(design, Table) else None
    part = section(None if entry is None else entry.value, "aim", problems, "{least: effort}")
    if part is None:
        return goal
    path = part.table.path
    node = part.need("least", "least: effort")
    least = text_of(node, problems, "one of radius, effort and peak")
    if least is None:
        return goal
    if least not in AIMS:
        problems.add(
            f"{path}.least: unknown aim {least[:40]!r}{nearest(least, AIMS)}; accepted are {', '.join(AIMS)}.", node
        )
        return goal
    of = part.get("of")
    if least != "peak":
        if of is not None:
            problems.add(f"{path}.of: only the least peak is about named signals; take 'of' out.", of)
        return replace(goal, aim=least)
    if of is None:
        problems.add(
            f"{path}: the least peak needs the signals it is about; write for example 'of: [hauler.place]'.", part.table
        )
        return goal
    named: list[tuple[str, str]] = []
    for item in items_of(of, problems, "[hauler.place]"):
        named += _signal(item, known, problems)
    return replace(goal, aim=least, aim_of=tuple(dict.fromkeys(named)))


def _signal(item: Node, known: Nameable, problems: Problems) -> list[tuple[str, str]]:
    """A signal written kind.signal, once per place where the kind stands at several."""
    text = text_of(item, problems, "a signal, such as hauler.place,")
    if text is None:
        return []
    kind_name, _, name = text.partition(".")
    about = (
        [kind_name] if kind_name in known.kinds else [k for k in known.places.get(kind_name, ()) if k in known.kinds]
    )
    if not about:
        if kind_name not in known.declared:
            problems.add(
                f"{item.path}: {text[:60]!r} is not a signal of a kind{nearest(kind_name, known.declared)}; write "
                f"it as kind.signal, with one of the kinds {', '.join(known.declared)}.",
                item,
            )
        return []
    names = _names(known.kinds[about[0]])
    if name not in names:
        problems.add(
            f"{item.path}: {about[0]} has no signal {name[:40]!r}{nearest(name, names)}; accepted are its states, "
            f"offers and inputs {', '.join(names)}.",
            item,
        )
        return []
    return [(kind, name) for kind in about]


def _names(kind: Kind) -> list[str]:
    found = [s.name for group in _GROUPS for s in getattr(kind, group) if " " not in s.name]
    return list(dict.fromkeys(found))

"""Cells with several units of one kind: named places, and which of them carry the same gains.

    pattern:
      cell: {front: hauler, rear: hauler}         # two units of the kind hauler in every cell
      links: [{name: follow, from: rear.place, at: -1, to: front.ahead, ...}]
    design: {gains: per_place}                    # or per_kind, or {crew: [front], tail: [rear]}

Every place becomes a kind of its own with the name of the place, so that everything behind the reader works on one unit
of each kind per cell; ``Kind.group`` keeps which of them carry the same gains. Without ``gains``, the places of one
declared kind share one gain set.

Law: a network with places is the same model (``Network.hash``) as one that declares a kind per place by hand.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from synth.base.errors import nearest
from synth.network.links import Known
from synth.network.model import Goal, Kind
from synth.network.sections import items_of, named_entries, text_of
from synth.network.yaml_map import Entry, Node, Problems, Scalar, Table

EXAMPLE = "{front: hauler, rear: hauler}"
MOST_PLACES = 100


@dataclass(frozen=True)
class Places:
    """The places of a cell, each with its declared kind, and what links and edges may name."""

    kind_of: Mapping[str, str]
    inside: Known  # what links of the pattern may name: the places
    everywhere: Known  # what edges may name: the places, and the declared kinds


def read_cell(node: Node, known: Known, problems: Problems) -> Places:
    """The places of the cell written at ``node``; what is wrong is recorded."""
    kind_of: dict[str, str] = {}
    lost: list[str] = []  # places with a problem of their own: a link to them gets no second complaint
    for entry in named_entries(node, problems, EXAMPLE):
        kind = text_of(entry.value, problems, "the name of a kind")
        if kind is None:
            lost.append(entry.key)
            continue
        if kind not in known.declared:
            lost.append(entry.key)
            problems.add(
                f"{entry.value.path}: unknown kind {kind[:40]!r}{nearest(kind, known.declared)}; declared are "
                f"{', '.join(known.declared) or 'none'}.",
                entry.value,
            )
            continue
        kind_of[entry.key] = kind
    entries = node.entries if isinstance(node, Table) else {}
    if isinstance(node, Table) and not entries:
        problems.add(f"{node.path}: a cell has at least one place, such as '{EXAMPLE}'.", node)
    if len(entries) > MOST_PLACES:
        problems.add(f"{node.path}: a cell has at most {MOST_PLACES} places, not {len(entries)}.", node)
    several = {kind: tuple(p for p, k in kind_of.items() if k == kind) for kind in kind_of.values()}
    for place, kind in kind_of.items():
        if place in known.declared and (place != kind or len(several[kind]) > 1):
            problems.add(
                f"{node.path}: {place!r} is the name of a kind; choose another name for this place.", entries[place]
            )
    kinds = {p: replace(known.kinds[k], name=p, group=k) for p, k in kind_of.items() if k in known.kinds}
    parameters = {p: known.parameters.get(k, {}) for p, k in kind_of.items()}
    inside = Known(kinds, (*kind_of, *lost), parameters, several, known.used, known.named)
    others = tuple(k for k in known.declared if k not in kind_of)
    everywhere = Known(
        {**{k: kind for k, kind in known.kinds.items() if k not in kind_of}, **kinds},
        (*kind_of, *lost, *others), {**known.parameters, **parameters}, used=known.used, named=known.named,
    )  # fmt: skip
    return Places(kind_of, inside, everywhere)


def kinds_of(
    places: Places, at_edges: Sequence[str], declared: Mapping[str, Entry], problems: Problems
) -> tuple[Kind, ...]:
    """A kind per place, then those that stand at an edge; a declared kind that stands nowhere is a problem."""
    for name, entry in declared.items():
        if name not in places.kind_of.values() and name not in at_edges:
            problems.add(
                f"network.pattern.cell: the kind {name!r} stands at no place of the cell and at no edge; give it a "
                "place, or take the kind out.",
                entry,
            )
    names = [*places.kind_of, *dict.fromkeys(n for n in at_edges if n not in places.kind_of)]
    return tuple(places.everywhere.kinds[name] for name in names if name in places.everywhere.kinds)


def grouped(
    node: Node | None, kinds: tuple[Kind, ...], bases: Mapping[str, str], goal: Goal, where: Node | None,
    problems: Problems,
) -> tuple[Kind, ...]:  # fmt: skip
    """The kinds with the groups that ``design.gains`` asks for; ``bases`` is the declared kind of each kind.

    ``where`` is what a problem is about if there is no ``gains``. Recorded are groups of kinds that could not
    carry the same gains: other actuators or sensors, or other ``uses`` or ``gain_bounds``.
    """
    names: dict[str, str] = {}
    if isinstance(node, Table):
        names = _named_groups(node, kinds, bases, problems)
    elif isinstance(node, Scalar) and node.value in ("per_kind", "per_place", "per_unit"):
        names = {
            kind.name: bases.get(kind.name, kind.name) if node.value == "per_kind" else kind.name for kind in kinds
        }
    elif node is not None and not (isinstance(node, Scalar) and node.value is None):
        problems.add(
            f"{node.path}: accepted are 'per_kind' (units of one kind carry the same gains), 'per_place' or "
            "'per_unit', and a mapping of gain sets such as '{crew: [front, middle], tail: [rear]}'.",
            node,
        )
    found = tuple(replace(kind, group=names.get(kind.name, kind.group)) for kind in kinds)
    first: dict[str, Kind] = {}
    refused: set[str] = set()
    for kind in found:
        other = first.setdefault(kind.group, kind)
        why = _unlike(other, kind, goal)
        if why and kind.group not in refused:
            refused.add(kind.group)
            problems.add(
                f"design.gains: {other.name} and {kind.name} cannot carry the same gains, because {why}; make them "
                "alike, or give them gain sets of their own (gains: per_place).",
                node or where,
            )
    return found


def _named_groups(node: Table, kinds: tuple[Kind, ...], bases: Mapping[str, str], problems: Problems) -> dict[str, str]:
    """Kind -> gain set, for the kinds that the mapping names (a declared kind stands for all its places)."""
    meant: dict[str, tuple[str, ...]] = {}
    for kind in kinds:
        base = bases.get(kind.name, kind.name)
        meant[base] = (*meant.get(base, ()), kind.name)
    meant |= {kind.name: (kind.name,) for kind in kinds if kind.name not in meant}
    names: dict[str, str] = {}
    for entry in named_entries(node, problems, "{crew: [front, middle], tail: [rear]}"):
        chosen: list[str] = []
        for item in _items(entry, problems):
            name = text_of(item, problems, "the name of a place or kind")
            if name is not None and name not in meant:
                problems.add(
                    f"{entry.value.path}: unknown place or kind {name[:40]!r}{nearest(name, meant)}; accepted are "
                    f"{', '.join(meant)}.",
                    item,
                )
            chosen += meant.get(name or "", ())
        for name in chosen:
            if name in names:
                problems.add(f"{entry.value.path}: {name} is in two gain sets; keep it in one.", entry.value)
            names[name] = entry.key
        if entry.key in meant and not set(meant[entry.key]) <= set(chosen):
            problems.add(
                f"{node.path}: {entry.key!r} is the name of a place or kind that is not in this gain set; choose "
                "another name.",
                entry,
            )
    return names


def _items(entry: Entry, problems: Problems) -> tuple[Node, ...]:
    return (entry.value,) if isinstance(entry.value, Scalar) else items_of(entry.value, problems, "[front, rear]")


def _unlike(one: Kind, other: Kind, goal: Goal) -> str:
    """Why two kinds cannot carry the same gains; empty if they can."""
    for group, words in (("inputs", "actuators"), ("sensors", "sensors")):
        ours, theirs = ([(s.name, s.unit) for s in getattr(kind, group)] for kind in (one, other))
        if ours != theirs:
            return f"their {words} differ"
    for table, words in ((goal.uses, "design.uses"), (goal.gain_bounds, "design.gain_bounds")):
        if table.get(one.name, {}) != table.get(other.name, {}):
            return f"{words} says different things about them"
    return ""

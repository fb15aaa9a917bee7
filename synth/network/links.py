"""Reads the pattern: links repeated along a line without end, and what is declared about their classes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, dimension_text, parse_unit
from synth.network.model import Kind, Link
from synth.network.sections import (
    Declared,
    Section,
    items_of,
    name_is_good,
    named_entries,
    quantity,
    section,
    text_of,
    truth,
    whole,
)
from synth.network.yaml_map import Node, Problems, Scalar, Table

FARTHEST = 1000
MOST_LINKS = 10_000
_EXAMPLE = "{name: follow, from: hauler.place, at: -1, to: hauler.ahead, strength: 0.5 1/s^2}"


@dataclass(frozen=True)
class _End:
    """One end of a link: the kind, the signal, and the unit it is counted in."""

    kind: Kind
    signal: str
    declared: Declared


def read_links(
    node: Node | None, kinds: Mapping[str, Kind], declared: tuple[str, ...], problems: Problems
) -> tuple[tuple[Link, ...], int]:
    """The links of ``network`` and the dimension of the pattern.

    ``kinds`` are those without problems, ``declared`` the names of all: a link to a kind that has a problem of its own
    gets no second complaint.
    """
    part = section(node, "network", problems, "{pattern: {dimension: 1, links: [...]}}")
    if part is None:
        return (), 1
    pattern_node = part.get("pattern")
    if pattern_node is None and not set(part.table.entries) - {"classes", "pattern"}:
        part.need("pattern", "pattern: {dimension: 1, links: [...]}")
    pattern = section(pattern_node, "pattern", problems, "{dimension: 1, links: [...]}")
    if pattern is None:
        return (), 1
    dimension = pattern.get("dimension")
    if isinstance(dimension, Scalar) and dimension.value in (2, 3):
        problems.add(
            f"{dimension.path}: patterns of dimension {dimension.text} are not honoured by this version; accepted "
            "is 1.",
            dimension,
        )
    elif dimension is not None:
        whole(dimension, problems, 1, 1)
    links: list[Link] = []
    positions: list[Node] = []
    items = items_of(pattern.need("links", f"links: [{_EXAMPLE}]"), problems, f"[{_EXAMPLE}]")
    if len(items) > MOST_LINKS:
        problems.add(
            f"{pattern.table.path}.links: {len(items)} links are too many for one cell; at most {MOST_LINKS}.",
            items[MOST_LINKS],
        )
    classes: list[str] = []
    for item in items[:MOST_LINKS]:
        inner = section(item, "link", problems, _EXAMPLE)
        if inner is None:
            continue
        name = text_of(inner.need("name", "name: follow"), problems, "the name of the link's class, such as 'follow',")
        if name is not None and name_is_good(name, problems, inner.get("name") or item, item.path):
            classes.append(name)
        link = _link(inner, name or "", kinds, declared, problems)
        if link is not None:
            links.append(link)
            positions.append(inner.get("strength") or item)
    _classes(part, links, positions, classes, problems)
    return tuple(links), 1


def _end(
    node: Node | None, side: str, kinds: Mapping[str, Kind], declared: tuple[str, ...], problems: Problems
) -> _End | None:
    """The kind and signal named ``kind.signal``; ``side`` is 'offers' or 'takes'."""
    text = text_of(node, problems, f"a signal written kind.{'offer' if side == 'offers' else 'take'}")
    if text is None or node is None:
        return None
    kind_name, dot, signal = text.partition(".")
    if not dot:
        problems.add(
            f"{node.path}: {text!r} is not written 'kind.signal', such as "
            f"'hauler.{'place' if side == 'offers' else 'ahead'}'.",
            node,
        )
        return None
    if kind_name not in declared:
        problems.add(
            f"{node.path}: unknown kind {kind_name!r}{nearest(kind_name, declared)}; declared are "
            f"{', '.join(declared) or 'none'}.",
            node,
        )
        return None
    if kind_name not in kinds:
        return None
    kind = kinds[kind_name]
    group = {s.name: s.unit for s in getattr(kind, side)}
    if signal not in group:
        known = ", ".join(group) or "nothing"
        problems.add(
            f"{node.path}: {kind_name} {side} no signal {signal!r}{nearest(signal, group)}; it {side} {known}.", node
        )
        return None
    return _End(kind, signal, Declared(group[signal], parse_unit(group[signal])))


def _link(
    part: Section, name: str, kinds: Mapping[str, Kind], declared: tuple[str, ...], problems: Problems
) -> Link | None:
    before = problems.count
    path = part.table.path
    source = _end(part.need("from", "from: hauler.place"), "offers", kinds, declared, problems)
    target = _end(part.need("to", "to: hauler.ahead"), "takes", kinds, declared, problems)
    at = _offset(part, problems)
    delay = quantity(part.get("delay"), Declared("s", parse_unit("s")), problems) or Fraction(0)
    if delay < 0:
        problems.add(f"{path}.delay: a delay must be zero or more; a unit cannot read the future.", part.get("delay"))
    relative = truth(part.get("relative"), problems)
    _late(part, relative, delay, problems)
    strength_node = part.need("strength", "strength: 0.5 1/s^2")
    if source is None or target is None or at is None or strength_node is None:
        return None
    wanted = target.declared.unit / source.declared.unit
    # In SI first: the strength as a person writes it has nothing to do with the units of the two ends.
    si = Declared(wanted.text, Unit(Fraction(1), wanted.dimension))
    if (
        isinstance(strength_node, Scalar)
        and isinstance(strength_node.value, Fraction)
        and wanted.dimension != Unit().dimension
        and strength_node.value != 0
    ):
        problems.add(
            f"{strength_node.path}: the strength {strength_node.text} has no unit, but a unit of "
            f"{dimension_text(wanted.dimension)} is needed "
            f"({target.declared.text} taken per {source.declared.text} offered); write for example "
            f"'{strength_node.text} {wanted.text}'.",
            strength_node,
        )
        return None
    strength = quantity(strength_node, si, problems, bare=False)
    own = Fraction(0)
    if relative:
        own_end = _own_end(part, source, target, at, problems)
        if own_end is not None and strength is not None:
            own = strength * own_end.unit.factor / target.declared.unit.factor
    if strength is None or problems.count > before:
        return None
    factor = source.declared.unit.factor / target.declared.unit.factor
    return Link(
        name, source.kind.name, source.signal, (at,), target.kind.name, target.signal, strength * factor, own, delay
    )


def _offset(part: Section, problems: Problems) -> int | None:
    node = part.need("at", "at: -1 (the unit one place before)")
    if node is None:
        return None
    if not isinstance(node, Scalar):
        items = items_of(node, problems, "[-1]")
        if len(items) != 1:
            problems.add(
                f"{node.path}: one whole number is expected here (dimension 1), such as -1 for the unit before.", node
            )
            return None
        node = items[0]
    return whole(node, problems, -FARTHEST, FARTHEST)


def _late(part: Section, relative: bool, delay: Fraction, problems: Problems) -> None:
    """The rules of theory section 1: a delayed relative link must say what is late, and only R1 is honoured here."""
    node, path = part.get("late"), part.table.path
    if node is None:
        if relative and delay > 0:
            problems.add(
                f"{path}: this relative link has a delay, so it must say what arrives late; write 'late: "
                "neighbour' if the unit "
                "subtracts its own fresh value ('late: difference' is not honoured by this version).",
                part.table,
            )
        return
    text = text_of(node, problems, "'neighbour'")
    if text == "difference":
        problems.add(
            f"{path}.late: 'difference' (the difference itself arrives late) is not honoured by this version; "
            "accepted is "
            "'neighbour' (the unit subtracts its own fresh value).",
            node,
        )
    elif text is not None and text != "neighbour":
        problems.add(
            f"{path}.late: {text[:40]!r} is not accepted{nearest(text, ['neighbour'])}; accepted is 'neighbour'.", node
        )
    elif not relative:
        problems.add(
            f"{path}.late: 'late' is about relative links, and this link is absolute; take it out, or add "
            "'relative: true'.",
            node,
        )


def _own_end(part: Section, source: _End, target: _End, at: int, problems: Problems) -> Declared | None:
    """The receiving unit's own signal of the same name, which a relative link subtracts."""
    where, kind = part.get("relative"), target.kind
    path = part.table.path
    own = {s.name: s for s in kind.offers}.get(source.signal)
    if own is None:
        problems.add(
            f"{path}.relative: {kind.name} offers no {source.signal!r} of its own to subtract; "
            f"add '{source.signal}' to its offers, or take 'relative' out.",
            where,
        )
        return None
    unit = parse_unit(own.unit)
    if unit.dimension != source.declared.unit.dimension:
        problems.add(
            f"{path}.relative: the two signals {source.signal!r} have the units {source.declared.text} "
            f"({source.kind.name}) and "
            f"{own.unit} ({kind.name}) and cannot be subtracted; offer the same quantity in both kinds.",
            where,
        )
        return None
    row = kind.index("offers", source.signal)
    if any(kind.F.rows[row]) or any(kind.Fw.rows[row]):
        problems.add(
            f"{path}.relative: {kind.name}.{source.signal} contains a taken signal or a disturbance, so "
            "subtracting it would be "
            "a loop without memory; offer a state, or take 'relative' out.",
            where,
        )
        return None
    if at == 0 and source.kind.name == kind.name:
        problems.add(
            f"{path}.at: a relative link of a unit to itself is always zero; name a neighbour, such as at: -1.",
            part.get("at"),
        )
        return None
    return Declared(own.unit, unit)


def _classes(part: Section, links: list[Link], positions: list[Node], names: list[str], problems: Problems) -> None:
    """Check the declared signs of the classes against the strengths."""
    node = part.get("classes")
    for entry in named_entries(node, problems, "{follow: {sign: positive}}"):
        inner = section(entry.value, "class", problems, "{sign: positive}")
        if entry.key not in names:
            known = ", ".join(dict.fromkeys(names)) or "none"
            problems.add(
                f"{entry.value.path}: no link has the class {entry.key!r}{nearest(entry.key, names)}; the links' "
                f"classes are {known}.",
                entry,
            )
        if inner is None:
            continue
        sign = text_of(inner.get("sign"), problems, "'positive', 'negative' or 'any'")
        signs = ["positive", "negative", "any"]
        if sign is not None and sign not in signs:
            problems.add(
                f"{entry.value.path}.sign: {sign[:40]!r} is not accepted{nearest(sign, signs)}; "
                f"accepted are {', '.join(signs)}.",
                inner.get("sign"),
            )
            continue
        for link, position in zip(links, positions, strict=True):
            wrong = (sign == "positive" and link.strength < 0) or (sign == "negative" and link.strength > 0)
            if link.name == entry.key and wrong:
                problems.add(
                    f"{position.path}: the strength is {'negative' if link.strength < 0 else 'positive'}, but the "
                    "class "
                    f"{link.name!r} is declared {sign}; turn the sign here, or declare 'sign: any'.",
                    position,
                )


def table_names(node: Node | None) -> tuple[str, ...]:
    """The keys of a table, none for anything else."""
    return tuple(node.entries) if isinstance(node, Table) else ()

"""Reads links: both ends, the strength, and what is late; and turns what was written into the parts that proofs use.

The three cases of a relative link g (z_j - z_i), theory section 1:

* R1, own part fresh, strength constant: fold g of the own part into the unit, one link of strength g.
* R2, own part fresh, strength anywhere in [0, g]: fold g too; what is left is g(t) z_j + (g - g(t)) z_i, at most
  g max(|z_j|, |z_i|), so it is one link marked ``weakens``.
* R3, the difference itself is late: nothing may be folded; two links of strength g, from the neighbour and from itself.

R1 with an interval [c - h, c + h], ours: v = c (z_j - z_i) + e(t) (z_j - z_i) with |e| <= h. The own part is folded at
c, the neighbour's part is at most c + h, and e(t) z_i is left as a self-link of strength h. (Row: (c + h) s_j + h s_i.)
The signs of the parts are those of the member with the largest absolute strength.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import Unit, parse_unit
from synth.network.layout import Form
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
from synth.network.strengths import Parameters, Span, read_strength
from synth.network.yaml_map import Node, Problems, Scalar, Table

FARTHEST = 1000
MOST_LINKS = 10_000
EXAMPLE = "{name: follow, from: hauler.place, at: -1, to: hauler.ahead, strength: 0.5 1/s^2}"
SECONDS = Declared("s", parse_unit("s"))


@dataclass(frozen=True)
class End:
    """One end of a link: the kind, the signal, and the unit it is counted in."""

    kind: Kind
    signal: str
    declared: Declared


@dataclass(frozen=True)
class Known:
    """The kinds a link may name: ``kinds`` without problems, ``declared`` the names of all.

    A link to a kind that has a problem of its own gets no second complaint. Where a cell has named places, these are
    the kinds, and ``places`` lists those of each declared kind.
    """

    kinds: Mapping[str, Kind]
    declared: tuple[str, ...]
    parameters: Mapping[str, Parameters]
    places: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    used: set[tuple[str, str]] = field(default_factory=set)  # (kind, parameter) that the strength of a link names
    named: set[str] = field(default_factory=set)  # what the ends of links name, also where a link cannot be read

    def of(self, kind: Kind) -> Parameters:
        """The parameters of a kind, none where matrices give it."""
        return self.parameters.get(kind.name, {})


@dataclass
class Positions:
    """Which class has which strengths, and where they stand: what the declared signs are checked against."""

    names: list[str] = field(default_factory=list)
    strengths: list[tuple[str, Form, Node]] = field(default_factory=list)


def read_pattern_links(
    pattern: Section, dimension: int, known: Known, positions: Positions, problems: Problems
) -> tuple[Link, ...]:
    """The links of a pattern, repeated along all its dimensions."""
    links: list[Link] = []
    items = items_of(pattern.need("links", f"links: [{EXAMPLE}]"), problems, f"[{EXAMPLE}]")
    if len(items) > MOST_LINKS:
        problems.add(
            f"{pattern.table.path}.links: {len(items)} links are too many for one cell; at most {MOST_LINKS}.",
            items[MOST_LINKS],
        )
    for item in items[:MOST_LINKS]:
        part = section(item, "link", problems, EXAMPLE)
        if part is None:
            continue
        name = class_name(part, item, positions, problems)
        source = read_end(part.need("from", "from: hauler.place"), "offers", known, problems)
        target = read_end(part.need("to", "to: hauler.ahead"), "takes", known, problems)
        at = _offset(part, dimension, problems)
        itself = at is not None and not any(at) and source and target and source.kind.name == target.kind.name
        form = read_form(part, source, target, known, problems, bool(itself))
        if form is not None and source is not None and target is not None and at is not None:
            positions.strengths.append((name, form, part.get("strength") or item))
            links += links_of(form, name, source, target, at)
    return tuple(links)


def class_name(part: Section, item: Node, positions: Positions, problems: Problems) -> str:
    """The name of a link's class."""
    name = text_of(part.need("name", "name: follow"), problems, "the name of the link's class, such as 'follow',")
    if name is not None and name_is_good(name, problems, part.get("name") or item, item.path):
        positions.names.append(name)
    return name or ""


def read_end(node: Node | None, side: str, known: Known, problems: Problems) -> End | None:
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
    if kind_name not in known.declared and known.places.get(kind_name):
        problems.add(
            f"{node.path}: {kind_name!r} is a kind, and the cell has named places; say which is meant: "
            f"{' or '.join(f'{place}.{signal}' for place in known.places[kind_name])}.",
            node,
        )
        return None
    if not known.declared and problems.found:
        return None  # that no kind could be read has a sentence of its own
    if kind_name not in known.declared:
        problems.add(
            f"{node.path}: unknown {'place' if known.places else 'kind'} {kind_name!r}"
            f"{nearest(kind_name, known.declared)}; declared are {', '.join(known.declared) or 'none'}.",
            node,
        )
        return None
    known.named.add(kind_name)
    return end_of(known.kinds.get(kind_name), side, signal, node, problems)


def end_of(kind: Kind | None, side: str, signal: str, node: Node, problems: Problems) -> End | None:
    """The end at a signal of a kind; None if the kind is None (it has problems of its own) or has no such signal."""
    if kind is None:
        return None
    group = {s.name: s.unit for s in getattr(kind, side) if " " not in s.name}
    if signal not in group:
        names = ", ".join(group) or "nothing"
        problems.add(
            f"{node.path}: {kind.name} {side} no signal {signal!r}{nearest(signal, group)}; it {side} {names}.", node
        )
        return None
    return End(kind, signal, Declared(group[signal], parse_unit(group[signal])))


def read_form(
    part: Section, source: End | None, target: End | None, known: Known, problems: Problems, itself: bool = False
) -> Form | None:
    """Strength, delay and case of a link between two ends; None if something is wrong.

    ``itself`` says that the link goes from a unit to the same unit. Everything that can be checked without the ends is
    checked also where an end is missing.
    """
    before = problems.count
    path = part.table.path
    delay = quantity(part.get("delay"), SECONDS, problems) or Fraction(0)
    if delay < 0:
        problems.add(f"{path}.delay: a delay must be zero or more; a unit cannot read the future.", part.get("delay"))
    relative, weakens = truth(part.get("relative"), problems), truth(part.get("weakens"), problems)
    if weakens and not relative:
        problems.add(
            f"{path}.weakens: an absolute link may weaken anyway, because only its largest strength counts; take "
            "'weakens' out, or add 'relative: true'.",
            part.get("weakens"),
        )
    difference = _late(part, relative, delay, problems)
    strength_node = part.need("strength", "strength: 0.5 1/s^2")
    if source is None or target is None or strength_node is None:
        return None
    wanted = target.declared.unit / source.declared.unit
    # In SI first: the strength as a person writes it has nothing to do with the units of the two ends.
    si = Declared(wanted.text, Unit(Fraction(1), wanted.dimension))
    ends = {"from": known.of(source.kind), "to": known.of(target.kind)}
    named: set[tuple[str, str]] = set()
    span = read_strength(strength_node, si, target.declared.text, source.declared.text, ends, problems, named)
    known.used.update(((source if end == "from" else target).kind.name, name) for end, name in named)
    own = _own_ratio(part, source, target, itself, problems) if relative else None
    if span is not None and weakens and span.low < 0 < span.high:
        problems.add(
            f"{path}.weakens: a strength of either sign does not weaken towards zero; give an interval on one side of "
            "zero, or take 'weakens' out.",
            part.get("weakens"),
        )
    if span is None or problems.count > before:
        return None
    return _form(span, source, target, own, difference, weakens, delay)


def _form(
    span: Span, source: End, target: End, own: Fraction | None, difference: bool, weakens: bool, delay: Fraction
) -> Form:
    factor = source.declared.unit.factor / target.declared.unit.factor
    low, high = span.low * factor, span.high * factor
    if own is not None and not difference and low != high and 0 in (low, high):
        weakens = True  # an interval from zero is what 'weakens' means
    return Form(low, high, own, difference, weakens and not difference, delay)


def links_of(
    form: Form, name: str, source: End, target: End, at: tuple[int, ...], choice: str = ""
) -> tuple[Link, ...]:
    """The parts of a link as written; see the head of this module."""
    peak = form.peak
    link = Link(
        name, source.kind.name, source.signal, at, target.kind.name, target.signal, peak, Fraction(0), form.delay,
        choice=choice,
    )  # fmt: skip
    if form.own is None:
        return (link,)
    itself = replace(
        link, source_kind=link.kind, at=(0,) * len(at), strength=-peak * form.own, own_part=True, choice=""
    )
    if form.difference:
        return link, itself
    if form.weakens or form.low == form.high:
        return (replace(link, own_strength=peak * form.own, weakens=form.weakens and peak != 0),)
    centre = (form.low + form.high) / 2
    return (
        replace(link, own_strength=centre * form.own),
        replace(itself, strength=(centre - peak) * form.own, delay=Fraction(0)),
    )


def _offset(part: Section, dimension: int, problems: Problems) -> tuple[int, ...] | None:
    node = part.need("at", "at: -1 (the unit one place before)")
    if node is None:
        return None
    items: tuple[Node, ...] = (node,)
    if not isinstance(node, Scalar):
        items = items_of(node, problems, "[-1]" if dimension == 1 else f"[{', '.join(['0'] * (dimension - 1))}, -1]")
        if not items and not hasattr(node, "items"):
            return None
    if len(items) != dimension:
        asked = "one whole number is" if dimension == 1 else f"{dimension} whole numbers are"
        such = "-1 for the unit before" if dimension == 1 else f"[{', '.join(['0'] * (dimension - 1))}, -1]"
        problems.add(f"{node.path}: {asked} expected here (dimension {dimension}), such as {such}.", node)
        return None
    found = [whole(item, problems, -FARTHEST, FARTHEST) for item in items]
    at = tuple(n for n in found if n is not None)
    return at if len(at) == dimension else None


def _late(part: Section, relative: bool, delay: Fraction, problems: Problems) -> bool:
    """Whether the difference is late; theory section 1: a delayed relative link must say what is."""
    node, path = part.get("late"), part.table.path
    if node is None:
        if relative and delay > 0:
            problems.add(
                f"{path}: this relative link has a delay, so it must say what arrives late; write 'late: neighbour' if "
                "the unit subtracts its own fresh value, or 'late: difference' if the difference itself arrives late.",
                part.table,
            )
        return False
    text = text_of(node, problems, "'neighbour' or 'difference'")
    ways = ["neighbour", "difference"]
    if text is not None and text not in ways:
        problems.add(
            f"{path}.late: {text[:40]!r} is not accepted{nearest(text, ways)}; accepted are 'neighbour' (the unit "
            "subtracts its own fresh value) and 'difference' (the difference itself arrives late).",
            node,
        )
    elif text is not None and not relative:
        problems.add(
            f"{path}.late: 'late' is about relative links, and this link is absolute; take it out, or add "
            "'relative: true'.",
            node,
        )
    return text == "difference"


def _own_ratio(part: Section, source: End, target: End, itself: bool, problems: Problems) -> Fraction | None:
    """The unit's own strength per strength: its own signal of the same name, which a relative link subtracts."""
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
    if any(kind.F.rows[row]) or any(kind.Fw.rows[row]) or (kind.Fu is not None and any(kind.Fu.rows[row])):
        problems.add(
            f"{path}.relative: {kind.name}.{source.signal} contains a taken signal, a command or a disturbance, so "
            "subtracting it would be "
            "a loop without memory; offer a state, or take 'relative' out.",
            where,
        )
        return None
    if itself:
        if "at" in part.known:
            key, advice = "at", "name a neighbour, such as at: -1"
        else:
            key, advice = "from", "name another unit, or in a field one farther along the edge, such as along: -1"
        problems.add(
            f"{path}.{key}: a relative link of a unit to itself is always zero; {advice}.", part.get(key) or where
        )
        return None
    return unit.factor / source.declared.unit.factor


def check_signs(part: Section, positions: Positions, problems: Problems) -> None:
    """Check the declared signs of the classes against the strengths."""
    names = positions.names
    for entry in named_entries(part.get("classes"), problems, "{follow: {sign: positive}}"):
        inner = section(entry.value, "class", problems, "{sign: positive}")
        if entry.key not in names and (names or not problems.found):  # links that could not be read name no class
            classes = ", ".join(dict.fromkeys(names)) or "none"
            problems.add(
                f"{entry.value.path}: no link has the class {entry.key!r}{nearest(entry.key, names)}; the links' "
                f"classes are {classes}.",
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
        for name, form, position in positions.strengths:
            wrong = (sign == "positive" and form.low < 0) or (sign == "negative" and form.high > 0)
            if name == entry.key and wrong:
                negative = sign == "positive"
                may_be = "is" if form.low == form.high else "may be"
                problems.add(
                    f"{position.path}: the strength {may_be} {'negative' if negative else 'positive'}, but the "
                    f"class {name!r} is declared {sign}; turn the sign here, or declare 'sign: any'.",
                    position,
                )


def table_names(node: Node | None) -> tuple[str, ...]:
    """The keys of a table, none for anything else."""
    return tuple(node.entries) if isinstance(node, Table) else ()

"""Reads what kind of claim is asked for: ``claim: hop`` and the section ``hop`` of the design."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction

from synth.base.errors import nearest
from synth.base.units import UnitError, parse_quantity, parse_unit
from synth.network.hop_wish import LEAST, NOTIONS, HopWish, Leader
from synth.network.model import Goal, Kind, Link
from synth.network.sections import Declared, Section, items_of, named_entries, quantity, section, text_of, truth
from synth.network.yaml_map import Node, Problems, Scalar, Table

CLAIMS = ("calm", "hop")
_TIME = Declared("s", parse_unit("s"))
_SECOND = parse_unit("s")
_EXAMPLE = "{notion: peak, signal: speed}"


def with_hop(
    goal: Goal, design: Node | None, kinds: Sequence[Kind], links: Sequence[Link], root: Node, problems: Problems
) -> Goal:
    """``goal`` with the hop claim asked for in the section ``design``, if one is; the usual claim otherwise."""
    if not isinstance(design, Table):
        return goal
    claim_node, hop_node = (design.entries[key].value if key in design.entries else None for key in ("claim", "hop"))
    claim = "calm" if claim_node is None else _one_of(claim_node, CLAIMS, "claim", "design", problems)
    if claim != "hop":
        if hop_node is not None and claim == "calm":
            problems.add(
                "design.hop: this section is about a hop claim, which is weaker than a proof of calm and must be asked "
                "for by name; write 'claim: hop' beside it, or take it out.",
                hop_node,
            )
        return goal
    if hop_node is None:
        problems.add(
            f"design: the claim 'hop' needs to know the notion and the signal; write for example 'hop: {_EXAMPLE}'.",
            claim_node,
        )
        return goal
    part = section(hop_node, "hop", problems, _EXAMPLE)
    if part is None:
        return goal
    for key in ("period", "aim", "target"):
        if key in design.entries:
            problems.add(f"design.{key}: {_MISPLACED[key]}", design.entries[key])
    wish = _wish(part, kinds, links, root, problems)
    return goal if wish is None else replace(goal, hop=wish)


_MISPLACED = {
    "period": (
        "hop claims are about controllers in continuous time and say nothing about sampled firmware; take 'period' "
        "out, write sampling and computation as a 'dead_time' of design.hop (an approximation), and check the firmware "
        "by other means."
    ),
    "aim": "with a hop claim, what the design makes small is written as 'least' in design.hop; take 'aim' out.",
    "target": "a string that sees only gaps has no radius below 1, so a hop claim has no target; take 'target' out.",
}


def _one_of(node: Node | None, accepted: tuple[str, ...], what: str, path: str, problems: Problems) -> str | None:
    text = text_of(node, problems, f"one of {', '.join(accepted)}")
    if text is not None and text not in accepted:
        problems.add(
            f"{path}.{what}: unknown {what} {text[:40]!r}{nearest(text, accepted)}; accepted are "
            f"{', '.join(accepted)}.",
            node,
        )
        return None
    return text


def _wish(
    part: Section, kinds: Sequence[Kind], links: Sequence[Link], root: Node, problems: Problems
) -> HopWish | None:
    path = part.table.path
    notion = _one_of(part.need("notion", "notion: peak"), NOTIONS, "notion", path, problems)
    least = part.get("least")
    aim = "time gap" if least is None else _one_of(least, LEAST, "least", path, problems)
    signal = _offer(part.need("signal", "signal: speed"), kinds, problems)
    gap_error = _offer(part.get("gap_error"), kinds, problems)
    dead = _positive(part.get("dead_time"), _TIME, "a dead time", problems, zero=True)
    time_gap = _positive(part.get("time_gap"), _TIME, "a time gap", problems)
    if notion is None or aim is None or signal is None or not kinds:
        return None  # said already
    unit = next(o.unit for kind in kinds for o in kind.offers if o.name == signal)
    rate = Declared(per_second(unit), parse_unit(unit) / _SECOND)
    jerk = _positive(part.get("jerk"), Declared(per_second(rate.text), rate.unit / _SECOND), "a jerk", problems)
    gap = Declared(unit[:-2] if unit.endswith("/s") else f"{unit}*s", parse_unit(unit) * _SECOND)
    standstill = _positive(part.get("standstill"), gap, "the gap at standstill", problems, zero=True)
    leader = _leader(part.get("leader"), rate, Declared(unit, parse_unit(unit)), problems)
    if jerk is not None and leader.acceleration is None:
        problems.add(
            f"{path}.jerk: how hard a unit is jerked depends on what the leader does; write for example "
            "'leader: {acceleration: 2 m/s^2}' beside it.",
            part.get("jerk"),
        )
    if aim == "gap error" and gap_error is None:
        problems.add(
            f"{path}.least: the least gap error needs the offer that is the gap error; write for example "
            "'gap_error: spacing'.",
            least,
        )
    return HopWish(
        notion,
        signal,
        gap_error,
        truth(part.get("any_order"), problems),
        dead or Fraction(0),
        _sensing(part.get("sensing"), kinds, problems),
        jerk,
        time_gap,
        standstill,
        _parameter(part.get("gap_parameter"), root, problems),
        _radio(part.get("radio"), signal, links, problems),
        aim,
        leader,
        root,
    )


def per_second(unit: str) -> str:
    """The unit divided by seconds, as people write it: m/s becomes m/s^2."""
    found = re.fullmatch(r"(.*)/s(?:\^(\d+))?", unit)
    if found:
        return f"{found[1]}/s^{int(found[2] or 1) + 1}"
    return f"{unit}/s" if re.fullmatch(r"\w+", unit) else f"({unit})/s"


def _positive(
    node: Node | None, declared: Declared, what: str, problems: Problems, zero: bool = False
) -> Fraction | None:
    value = quantity(node, declared, problems)
    if node is not None and value is not None and (value < 0 or (value == 0 and not zero)):
        problems.add(f"{node.path}: {what} must be {'zero or more' if zero else 'above zero'}.", node)
        return None
    return value


def _offer(node: Node | None, kinds: Sequence[Kind], problems: Problems) -> str | None:
    """An offer that every kind has."""
    name = text_of(node, problems, "the name of an offer, such as speed,")
    if name is None or node is None:
        return None
    for kind in kinds:
        names = [offer.name for offer in kind.offers if " " not in offer.name]
        if name not in names:
            problems.add(
                f"{node.path}: {kind.name} has no offer {name[:40]!r}{nearest(name, names)}, and every kind of a "
                f"string must have it; its offers are {', '.join(names) or 'none'}.",
                node,
            )
            return None
    return name


def _leader(node: Node | None, rate: Declared, speed: Declared, problems: Problems) -> Leader:
    part = section(node, "leader", problems, "{acceleration: 2 m/s^2}")
    if part is None:
        return Leader()
    return Leader(
        _positive(part.get("acceleration"), rate, "the leader's acceleration", problems),
        _positive(part.get("speed"), speed, "the leader's speed", problems, zero=True),
        text_of(part.get("recorded"), problems, "the name of a CSV file"),
    )


def _sensing(node: Node | None, kinds: Sequence[Kind], problems: Problems) -> dict[str, Fraction]:
    found: dict[str, Fraction] = {}
    for entry in named_entries(node, problems, "{closing: 0.1 s}"):
        for kind in kinds:
            names = [s.name for s in kind.sensors]
            if entry.key not in names:
                problems.add(
                    f"{entry.value.path}: {kind.name} has no sensor {entry.key!r}{nearest(entry.key, names)}; its "
                    f"sensors are {', '.join(names)}.",
                    entry,
                )
                break
        late = _positive(entry.value, _TIME, "how late a sensor is", problems, zero=True)
        if late is not None:
            found[entry.key] = late
    return found


def _radio(node: Node | None, signal: str, links: Sequence[Link], problems: Problems) -> tuple[str, ...]:
    """Classes of links that may be lost; the link that carries the hop signal itself is none."""
    names = tuple(dict.fromkeys(link.name for link in links if link.sort == "link"))
    found: list[str] = []
    for item in items_of(node, problems, "[radio]"):
        name = text_of(item, problems, "the name of a link class")
        if name is None or not names:
            continue
        if name not in names:
            problems.add(
                f"{item.path}: no link class has the name {name[:40]!r}{nearest(name, names)}; known are "
                f"{', '.join(names) or 'none'}.",
                item,
            )
        elif any(link.name == name and link.offer == signal for link in links):
            problems.add(
                f"{item.path}: the links {name!r} carry the hop signal {signal!r}; a string that loses it follows "
                "nobody. Name links that the string can do without.",
                item,
            )
        else:
            found.append(name)
    return tuple(dict.fromkeys(found))


def _parameter(node: Node | None, root: Node, problems: Problems) -> str | None:
    """The parameter that is the time gap of the kinds that have it, in seconds."""
    name = text_of(node, problems, "the name of a parameter")
    if name is None:
        return None
    known: dict[str, Scalar] = {}
    kinds = root.entries["kinds"].value if isinstance(root, Table) and "kinds" in root.entries else None
    for kind in kinds.entries.values() if isinstance(kinds, Table) else ():
        table = kind.value.entries.get("parameters") if isinstance(kind.value, Table) else None
        for entry in table.value.entries.values() if table is not None and isinstance(table.value, Table) else ():
            if isinstance(entry.value, Scalar):
                known[entry.key] = entry.value
    if name not in known:
        problems.add(
            f"design.hop.gap_parameter: no kind has a parameter {name[:40]!r}{nearest(name, known)}; known are "
            f"{', '.join(known) or 'none'}.",
            node,
        )
        return None
    try:
        _, unit, _ = parse_quantity(known[name].text)
    except UnitError:
        return None  # said where it is declared
    if unit != _SECOND:
        problems.add(
            f"design.hop.gap_parameter: the parameter {name!r} is not a time in s; declare it for example as "
            f"'{name}: 1.2 s'.",
            node,
        )
        return None
    return name

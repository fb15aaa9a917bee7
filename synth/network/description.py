"""Explains a network to a person and to a program: what was read, what it means, and what stands in the way."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction

from synth.base.caution import CAUTIONS, cautions_text
from synth.base.provenance import Provenance, canonical
from synth.network.cuts import adapted, written
from synth.network.describing import kind_text, mode_text, variants_text
from synth.network.document import kind_document
from synth.network.intake import intake_of
from synth.network.layout import Edge, EdgeUnit
from synth.network.model import Kind, Link, Network
from synth.network.obstructions import Obstruction, examine
from synth.network.words import counted, link_words, said, strength_unit

MOST_KINDS = 12
MOST_LINKS = 12


@dataclass(frozen=True)
class Description:
    """What ``synth check`` shows: the network, the open-loop modes of its kinds and an obstruction, if there is one.

    ``modes`` holds, per kind, the eigenvalues of A alone in 1/s, slowest decay first; ``intake`` the bound on what may
    enter each ``kind.take``, in (taken unit)/(offered unit): the sum of |strength| over the links of one unit, the
    largest unit where they differ, the largest choice where a rule leaves one; where offers of different quantities
    enter a take, its keys are ``kind.take (unit)``, one for each. ``tested`` says what the search for an
    obstruction looked at.
    """

    network: Network
    modes: Mapping[str, tuple[complex, ...]]
    intake: Mapping[str, Fraction]
    obstruction: Obstruction | None
    tested: str
    provenance: Provenance = field(repr=False)

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys of the public contract of ``check``."""
        network = self.network
        return {
            "title": network.title,
            "kinds": [_kind_json(kind, self.modes[kind.name]) for kind in network.kinds],
            "units": network.units,
            "description": network.description,
            "dimension": network.dimension,
            "links": [_link_json(link, network, count) for link, count in _counted_links(network)],
            "rules": [
                {"name": rule.name, "to": f"{rule.kind}.{rule.take}", "most": rule.most} for rule in network.rules
            ],
            "edges": [
                {
                    "side": edge.side,
                    "axis": edge.axis + 1,
                    "units": [
                        {"name": u.name, "kind": u.kind, "at": u.at, "instead_of": u.instead_of} for u in edge.units
                    ],
                    "links": [{**_link_json(e.link, network, 1), "to_place": e.to} for e in edge.links],
                }
                for edge in network.edges
            ],
            "notes": list(network.notes),
            "gain_groups": {group: list(names) for group, names in network.gain_groups().items()},
            "intake": {name: float(bound) for name, bound in self.intake.items()},
            "obstruction": None if self.obstruction is None else self.obstruction.as_json(),
            "tested": self.tested,
            "cautions": list(CAUTIONS),
            "provenance": self.provenance.as_dict(),
        }

    def as_text(self) -> str:
        """Lines for a person."""
        network = self.network
        lines = [network.title, "=" * len(network.title), "", *layout_text(network)]
        shown = _one_of_each(network)
        for kind, names in shown[:MOST_KINDS]:
            lines += ["", *kind_text(kind, self.modes[kind.name], names), *variants_text(network, kind)]
        if len(shown) > MOST_KINDS:
            lines += ["", f"... and {len(shown) - MOST_KINDS} more kinds (all of them with --json)."]
        lines += ["", "Links", *_links_text(network), *edges_text(network)]
        lines += ["", "Intake (sum of absolute strengths that may enter a taken signal of one unit)"]
        units = intake_of(network).units
        lines += [
            f"  {name.split(' (')[0] if f'({units[name]})' in name else name:<24} {said(bound)} {units[name]}".rstrip()
            for name, bound in list(self.intake.items())[:MOST_KINDS]
        ] or ["  none"]
        if network.notes:
            lines += ["", "Notes", *(f"  {note}" for note in network.notes)]
        lines += [
            "",
            *_uniform_text(network),
            "",
            *_obstruction_text(self.obstruction, self.tested),
            "",
            cautions_text(),
        ]
        return "\n".join(lines) + "\n"


def describe(network: Network) -> Description:
    """Explain a network; nothing is designed or proven here (theory section 1 and statement (26))."""
    import numpy as np

    modes: dict[str, tuple[complex, ...]] = {}
    for kind in network.kinds:
        values = np.linalg.eigvals(kind.A.floats())
        modes[kind.name] = tuple(
            sorted((complex(v) for v in values), key=lambda v: (-round(v.real, 9), abs(v.imag), v.imag))
        )
    found = examine(network)
    return Description(
        network, modes, intake_of(network).bounds, found.obstruction, found.tested, Provenance(network.hash)
    )


def _counted_links(network: Network) -> list[tuple[Link, int]]:
    """The links with the number of times each stands in the network (1 per cell of a pattern)."""
    if network.members is None:
        return [(link, 1) for link in network.links]
    counts = Counter(network.members.expanded()[2].tolist())
    return [(link, counts[k]) for k, link in enumerate(network.links)]


def _one_of_each(network: Network) -> list[tuple[Kind, tuple[str, ...]]]:
    """One kind of those that are alike, with the names of all; members differ in values of parameters at most."""
    first: dict[str, tuple[Kind, tuple[str, ...]]] = {}
    if network.members is not None and network.members.origins:
        for kind, (origin, _) in zip(network.kinds, network.members.origins, strict=True):
            first.setdefault(origin, (kind, (origin,)))
    else:
        for kind in network.kinds:
            same = canonical({**kind_document(kind), "name": "", "equations": dict(kind.equations)})
            found, names = first.get(same, (kind, ()))
            first[same] = (found, (*names, kind.name))
    return list(first.values())


def _kind_json(kind: Kind, modes: tuple[complex, ...]) -> dict[str, object]:
    def bound(value: Fraction | None) -> float | None:
        return None if value is None else float(value)

    return {
        "name": kind.name,
        "states": [{"name": s.name, "in": s.unit, "band": bound(s.band)} for s in kind.states],
        "inputs": [{"name": a.name, "in": a.unit, "limit": bound(a.limit)} for a in kind.inputs],
        "disturbances": [{"name": w.name, "in": w.unit, "peak": float(w.peak)} for w in kind.disturbances],
        "takes": [{"name": s.name, "in": s.unit} for s in kind.takes],
        "offers": [{"name": s.name, "in": s.unit, "band": bound(s.band)} for s in kind.offers],
        "sensors": [{"name": s.name, "in": s.unit} for s in kind.sensors],
        "equations": dict(kind.equations),
        "modes": [[mode.real, mode.imag] for mode in modes],
        "inner": [
            {"name": inner.take, "sort": inner.sort, "offer": inner.offer, "strength": float(inner.strength)}
            for inner in kind.inner
        ],
    }


def _link_json(link: Link, network: Network, count: int) -> dict[str, object]:
    return {
        "name": link.name,
        "from": f"{link.source_kind}.{link.offer}",
        "at": list(link.at),
        "to": f"{link.kind}.{link.take}",
        "strength": float(link.strength),
        "in": strength_unit(link, network),
        "own_strength": float(link.own_strength),
        "relative": link.relative,
        "delay_s": float(link.delay),
        "sort": link.sort,
        "weakens": link.weakens,
        "own_part": link.own_part,
        "count": count,
    }


def _names(kinds: Iterable[Kind]) -> str:
    return ", ".join(kind.name for kind in kinds)


def layout_text(network: Network) -> list[str]:
    """How many units there are, how they are arranged, and what a proof holds for; shared gains below it."""
    members = network.members
    if members is not None:
        counts = Counter(members.kind.tolist())
        origins = dict(enumerate(origin for origin, _ in members.origins))
        by_kind: Counter[str] = Counter()
        for k, count in counts.items():
            by_kind[origins.get(k, network.kinds[k].name)] += count
        parts = ", ".join(f"{count} {name}" for name, count in by_kind.items())
        return [
            f"{counted(len(members.names), 'unit')} ({parts}) and {counted(len(members.to), 'link')} between them, "
            "each by name. What is proven holds for these units and links."
        ]
    if network.description == "rules":
        return [
            f"Units of the kinds {_names(network.kinds)}, any number of them, wired in any way that obeys the rules "
            "below and rewired at any time: what is proven holds for all of these networks."
        ]
    where = "along a line" if network.dimension == 1 else f"in {network.dimension} dimensions"
    cells = f"One cell ({_names(network.cell_kinds)}) repeated {where} without end"
    ends = " and ".join(edge.side for edge in network.edges)
    shared = _shared_text(network)
    if not ends:
        return [f"{cells}, so what is proven holds for any number of units.", *shared]
    if network.dimension == 1:
        return [f"{cells}, with its {ends} end: what is proven holds however long the line is.", *shared]
    across = network.edges[0].axis + 1
    return [
        f"{cells}, with its {ends} edge across axis {across} (the pattern ends there and repeats along it): what is "
        f"proven holds however large the field is.",
        *shared,
    ]


def _shared_text(network: Network) -> list[str]:
    """Which kinds carry the same gains, where any do."""
    return [
        f"  {' and '.join(names)} carry the same gains (gain set {group})"
        for group, names in network.gain_groups().items()
        if len(names) > 1
    ]


def _links_text(network: Network) -> list[str]:
    lines: list[str] = []
    counts = _counted_links(network)
    most = {rule.name: rule.most for rule in network.rules}
    for name in network.classes():
        links = [(link, n) for link, n in counts if link.name == name and link.sort == "link" and not link.own_part]
        lines.append(f"  {name}")
        for link, count in links[:MOST_LINKS]:
            times = f"{count} x " if network.members is not None else ""
            limit = most.get(link.choice) if link.choice else None
            if limit is None:
                lines.append(f"    {times}{link_words(link, network)}")
            else:
                single = replace(link, strength=link.strength / limit)
                lines.append(f"    {link_words(single, network)}, at most {limit} such into one unit")
        if len(links) > MOST_LINKS:
            lines.append(
                f"    ... and {len(links) - MOST_LINKS} more strengths of this class (all of them with --json)"
            )
    return lines or ["  none: the units do not influence each other"]


def edges_text(network: Network) -> list[str]:
    """What stands at the ends of a line or the edges of a field, a line each; empty where there is none."""
    lines: list[str] = []
    line, row = network.dimension == 1, "row" if network.dimension == 2 else "layer"
    for edge in network.edges:
        across = "" if line else f" across axis {edge.axis + 1}, the same all along it"
        lines += ["", f"The {edge.side} {'end of the line' if line else 'edge'}{across}"]
        for unit in edge.units:
            what = f"a {unit.kind} at place {unit.at}" if line else f"a {row} of {unit.kind} units, {_deep(unit.at)},"
            lines.append(f"  {unit.name}: {what} instead of the {unit.instead_of}")
            lines += _pattern_links_text(network, edge, unit)
        for single in edge.links:
            link, where = single.link, f"place {single.to}" if line else f"the units {_deep(single.to)}"
            if link.own_part:
                continue
            lines.append(f"  into {where}, {link.name}: {link_words(link, network)}")
        if not edge.units and not edge.links:
            lines.append("  the pattern just ends: what would come from outside is not there")
    return lines


def _pattern_links_text(network: Network, edge: Edge, unit: EdgeUnit) -> list[str]:
    """Which links of the pattern an edge unit takes part in, because it has signals of the same names."""
    standing = {(u.at, u.instead_of): u.kind for u in edge.units}
    takes: dict[str, None] = {}
    gives: dict[str, None] = {}
    for group in written(tuple(link for link in network.links if link.sort == "link")):
        link = group[0]
        across = link.at[edge.axis]

        def there(to: int, source: int, group: tuple[Link, ...] = group) -> bool:
            receiver = standing.get((to, group[0].kind), group[0].kind)
            sender = standing.get((source, group[0].source_kind), group[0].source_kind)
            inside = edge.inside(to) and edge.inside(source)
            return inside and bool(adapted(group, network.kind(receiver), network.kind(sender), network))

        if link.kind == unit.instead_of and there(unit.at, unit.at + across):
            takes[link.name] = None
        if link.source_kind == unit.instead_of and there(unit.at - across, unit.at):
            gives[link.name] = None
    parts = [f"{words} {', '.join(names)}" for words, names in (("takes from", takes), ("gives to", gives)) if names]
    if not parts:
        return ["    it takes part in no link of the pattern"]
    return [f"    of the pattern's links it {' and '.join(parts)}"]


def _deep(place: int) -> str:
    if place == 0:
        return "at the edge itself"
    return f"{abs(place)} {'place' if abs(place) == 1 else 'places'} in from the edge"


def _uniform_text(network: Network) -> list[str]:
    if network.members is None:
        places = "everywhere" if network.description == "rules" else "in every cell"
        places += " and along the edge" if network.edges and network.dimension > 1 else ""
        kinds = "one kind" if len(network.kinds) == 1 else f"{len(network.kinds)} kinds"
        return [
            f"Uniform: {kinds} and the bounds above, the same {places}. The design is left to find gains with which "
            "all closed units decay at one common rate."
        ]
    distinct = len(set(network.members.kind.tolist()))
    sorts = len(set(network.members.form.tolist()))
    return [
        f"Uniform: {counted(distinct, 'different unit')} and {counted(sorts, 'different link')} make up "
        "the network, every intake is bounded as above; equal ones are computed once. The design is left to find "
        "gains with which all closed units decay at one common rate."
    ]


def _obstruction_text(found: Obstruction | None, tested: str) -> list[str]:
    if found is None:
        return [
            "No obstruction found: every mode that does not decay is seen by a controller and reached by an actuator.",
            f"  looked at: {tested}",
        ]
    weights = sorted(found.direction.items(), key=lambda item: -abs(item[1]))
    direction = ", ".join(f"{name} {mode_text(weight)}" for name, weight in weights[:MOST_LINKS])
    more = ", ..." if len(weights) > MOST_LINKS else ""
    phase = ", ".join(f"{theta:.6g}" for theta in found.theta)
    return [
        f"OBSTRUCTION ({found.cause}): no local feedback can prove this network.",
        f"  {f'phase theta {phase}, ' if phase else ''}mode s = {mode_text(found.s)} 1/s, direction {direction}{more}",
        f"  {found.advice}",
        f"  looked at: {tested}",
    ]

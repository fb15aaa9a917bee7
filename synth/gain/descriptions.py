"""From each of the four descriptions of a network to the plan of its gain operator (theory (9), (13), (14)).

* pattern: the quotient on one cell, a unit per kind; offsets are forgotten, which is exact for any dimension (9).
* rules: a unit per kind stands for all of that kind; what a rule allows are alternatives of one row (13).
* members: every unit that is listed.
* edge pattern: the cell, and beside it the outermost cells of every edge, cut off (14). The plan's radius lies at or
  below the network's and reaches it as the sections grow; ``synth.gain.enclosure`` adds the bound from above.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from synth.base.errors import InputError
from synth.gain.plan import Indices, Plan, Wiring, plan_of_units, starts
from synth.network.cuts import least_cells, section_of
from synth.network.layout import Edge
from synth.network.model import Link, Network


def plan_of(network: Network, cells: int | None = None) -> Plan:
    """The plan of a network of any description.

    ``cells``: how many cells each section of an edge pattern has (None: twice what the edge reaches); other
    descriptions have no sections. Raises InputError where a link names what is not there or ``cells`` is too small.
    """
    if network.description != "edge pattern":
        return plan_of_units(wiring_of(network))
    line = across(network)
    parts = [wiring_of(network)]
    for edge in line.edges:
        size = 2 * settled_cells(line, edge) if cells is None else cells
        section = section_wiring(line, edge, size)
        names = tuple(f"{name} ({edge.side} edge)" for name in section.names)  # both edges have a place 0
        parts.append(replace(section, names=names))
    return plan_of_units(_beside(parts))


def wiring_of(network: Network) -> Wiring:
    """Units and arrivals of a pattern, rules or members; of an edge pattern, those of its bulk."""
    if network.members is None:
        return _one_per_kind(network)
    members = network.members
    to, source, link = (array.astype(np.intp) for array in members.expanded())
    kind = members.kind.astype(np.intp)
    return Wiring("members", network.kinds, network.links, members.names, kind, to, source, link)


def _one_per_kind(network: Network) -> Wiring:
    place = {kind.name: i for i, kind in enumerate(network.kinds)}
    cell = [place[kind.name] for kind in network.cell_kinds]
    unit = {network.kinds[k].name: n for n, k in enumerate(cell)}
    heard = [n for n, link in enumerate(network.links) if link.kind in unit or link.sort == "link"]
    for n in heard:
        link = network.links[n]
        if link.kind not in unit or link.source_kind not in unit:
            raise InputError(
                f"link {link.name!r} runs from {link.source_kind} to {link.kind}; the kinds here are {', '.join(unit)}."
            )
    to = [unit[network.links[n].kind] for n in heard]
    source = [unit[network.links[n].source_kind] for n in heard]
    names = tuple(unit)
    arrays = (np.array(values, dtype=np.intp) for values in (cell, to, source, heard))
    return Wiring(network.description, network.kinds, network.links, names, *arrays)


def across(network: Network) -> Network:
    """The line across the edges: units along an edge behave alike, so the steps along it are forgotten (theory (9)).

    A line is this line itself; a half plane, half space or strip becomes its quotient along the edge. Links that differ
    only in steps along the edge stay separate terms.
    """
    (axis,) = {edge.axis for edge in network.edges}

    def flat(link: Link) -> Link:
        return replace(link, at=(link.at[axis],))

    edges = tuple(
        replace(edge, links=tuple(replace(e, link=flat(e.link)) for e in edge.links), axis=0) for edge in network.edges
    )
    return replace(network, links=tuple(map(flat, network.links)), dimension=1, edges=edges)


def reach_of(line: Network) -> int:
    """How many cells the longest link of the pattern spans; at least 1."""
    return max((abs(link.at[0]) for link in line.links), default=0) or 1


def settled_cells(line: Network, edge: Edge) -> int:
    """How many cells hold every row that differs from the pattern's: the edge's own units and all that hear them."""
    return least_cells(edge) + reach_of(line)


def section_wiring(line: Network, edge: Edge, cells: int) -> Wiring:
    """The outermost ``cells`` cells of a line at one edge, cut off from the rest; units are named 'kind place'."""
    return replace(wiring_of(section_of(line, edge, cells)), description="edge section")


def shortest_string(line: Network) -> int:
    """The least number of cells that hold what belongs to both edges side by side."""
    return sum(map(least_cells, line.edges))


def string_wiring(line: Network, cells: int) -> Wiring:
    """A finite line of ``cells`` cells with a first and a last edge, all of it; places count from the first edge.

    Raises InputError below :func:`shortest_string`.
    """
    if cells < shortest_string(line):
        raise InputError(f"a line with both edges has at least {shortest_string(line)} cells, not {cells}.")
    first, last = sorted(line.edges, key=lambda edge: edge.side)
    shift = cells - 1
    units = (*first.units, *(replace(unit, at=unit.at + shift) for unit in last.units))
    links = (*first.links, *(replace(link, to=link.to + shift) for link in last.links))
    # A section of one edge that has the units and links of both; what would come from beyond its cut is not there.
    whole = section_of(line, Edge("first", units, links), cells)
    members = whole.members
    assert members is not None  # a section is given by its members
    there = members.source >= 0
    arrays = {name: getattr(members, name)[there] for name in ("to", "source", "form")}
    return replace(wiring_of(replace(whole, members=replace(members, **arrays))), description="string")


def _beside(parts: list[Wiring]) -> Wiring:
    """Several networks side by side without any link between them: the radius is the largest of theirs."""
    first_unit = starts(np.array([len(part.names) for part in parts], dtype=np.intp)).tolist()
    first_link = starts(np.array([len(part.links) for part in parts], dtype=np.intp)).tolist()

    def joined(name: str, shift: list[int]) -> Indices:
        arrays = [getattr(part, name) for part in parts]
        return np.concatenate([np.where(a >= 0, a + n, a) for a, n in zip(arrays, shift, strict=False)])

    none = [0] * len(parts)
    return Wiring(
        "edge pattern", parts[0].kinds,
        tuple(link for part in parts for link in part.links), tuple(name for part in parts for name in part.names),
        joined("kind", none), joined("to", first_unit), joined("source", first_unit), joined("link", first_link),
    )  # fmt: skip

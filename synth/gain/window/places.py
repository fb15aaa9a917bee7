"""Where the units of a network stand and what arrives at them: what a window is cut out of.

A place is a pair (kind, cell) of a pattern, or the number of a member. ``Places`` answers the same questions for both,
so that windows are built in one way. Units close to the same matrices as in the peak route: the own part of every
relative link is folded in, also where the neighbour stands outside a window.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product
from typing import Protocol

from synth.base.errors import InputError
from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import plan_of
from synth.gain.plan import Plan
from synth.network.gains import Gains
from synth.network.model import Link, Network

Place = tuple[int, ...]  # (kind, cell...) of a pattern, (member,) otherwise


@dataclass(frozen=True)
class Arrival:
    """What one link brings to a unit: ``number`` is the link's place in ``Network.links``."""

    number: int
    link: Link
    source: Place


class Places(Protocol):
    """A network seen from any of its places; ``plan`` names the rows of the operator that the windows fill."""

    plan: Plan
    centres: tuple[tuple[Place, ...], ...]  # per window, the places in its middle

    def around(self, centre: tuple[Place, ...], reach: int, box: bool) -> list[Place]:
        """All places within ``reach`` steps of a centre, those of the centre first."""
        ...

    def arrivals(self, place: Place) -> Sequence[Arrival]:
        """What arrives at a place, in the order of the network's links."""
        ...

    def unit(self, place: Place) -> ClosedUnit:
        """The closed unit that stands there."""
        ...

    def first_row(self, place: Place) -> int:
        """The operator's row of the unit's first offer."""
        ...

    def wrapped(self, place: Place, reach: int) -> Place | None:
        """The place in the box of that reach onto which a ring of its width maps ``place``; None without rings."""
        ...


def places_of(network: Network, gains: Gains) -> Places:
    """The places of a pattern or of members; InputError for other descriptions, or where gains are missing."""
    network.refuse_beyond("the window route", "pattern", "members")
    if network.members is None:
        return PatternPlaces(network, gains)
    return MemberPlaces(network, gains)


class PatternPlaces:
    """The places of an endless pattern of any dimension; one window, with a whole cell in its middle."""

    def __init__(self, network: Network, gains: Gains) -> None:
        """Close every kind."""
        self.plan = plan_of(network)
        self._dimension = network.dimension
        self._units = close_plan(self.plan, gains)
        self._spec: list[int] = self.plan.unit_spec.tolist()
        number = {kind.name: n for n, kind in enumerate(network.kinds)}
        self._heard: list[list[tuple[int, Link, int]]] = [[] for _ in network.kinds]
        for n, link in enumerate(network.links):
            self._heard[number[link.kind]].append((n, link, number[link.source_kind]))
        origin = (0,) * network.dimension
        self.centres: tuple[tuple[Place, ...], ...] = (tuple((k, *origin) for k in range(len(network.kinds))),)

    def around(self, centre: tuple[Place, ...], reach: int, box: bool) -> list[Place]:
        """Cells whose steps add up to ``reach`` at most, or whose longest step does if ``box``."""
        steps = range(-reach, reach + 1)
        size = max if box else sum
        cells = [c for c in product(steps, repeat=self._dimension) if size(abs(v) for v in c) <= reach]
        cells.sort(key=lambda c: (sum(abs(v) for v in c), c))
        return [(k, *cell) for cell in cells for k in range(len(self._heard))]

    def arrivals(self, place: Place) -> Sequence[Arrival]:
        """One per link of the kind."""
        kind, *cell = place
        return [
            Arrival(n, link, (source, *(c + a for c, a in zip(cell, link.at, strict=True))))
            for n, link, source in self._heard[kind]
        ]

    def unit(self, place: Place) -> ClosedUnit:
        """That of the kind."""
        return self._units[self._spec[place[0]]]

    def first_row(self, place: Place) -> int:
        """That of the kind: the operator is the quotient on one cell (theory (9))."""
        return int(self.plan.first_row[place[0]])

    def wrapped(self, place: Place, reach: int) -> Place | None:
        """Every number of the cell modulo the width of the box."""
        kind, *cell = place
        width = 2 * reach + 1
        return (kind, *((c + reach) % width - reach for c in cell))


class MemberPlaces:
    """The places of explicit members; one window around every member, by the fewest links in between."""

    def __init__(self, network: Network, gains: Gains) -> None:
        """Close every distinct unit and list what arrives where."""
        if network.members is None:
            raise InputError("this network lists no members.")
        self.plan = plan_of(network)
        self._units = close_plan(self.plan, gains)
        self._spec: list[int] = self.plan.unit_spec.tolist()
        count = len(network.members.names)
        self._heard: list[list[Arrival]] = [[] for _ in range(count)]
        self._near: list[set[int]] = [set() for _ in range(count)]
        for to, source, number in zip(*(array.tolist() for array in network.members.expanded()), strict=True):
            if source >= 0:
                self._heard[to].append(Arrival(number, network.links[number], (source,)))
                self._near[to].add(source)
                self._near[source].add(to)
        self.centres: tuple[tuple[Place, ...], ...] = tuple(((i,),) for i in range(count))

    def around(self, centre: tuple[Place, ...], reach: int, box: bool) -> list[Place]:
        """Breadth first, links in either direction; ``box`` makes no difference."""
        found = {place[0]: None for place in centre}
        edge = list(found)
        for _ in range(reach):
            edge = sorted({j for i in edge for j in self._near[i]} - found.keys())
            found.update(dict.fromkeys(edge))
        return [(i,) for i in found]

    def arrivals(self, place: Place) -> Sequence[Arrival]:
        """Those of the member."""
        return self._heard[place[0]]

    def unit(self, place: Place) -> ClosedUnit:
        """That of the member's specification."""
        return self._units[self._spec[place[0]]]

    def first_row(self, place: Place) -> int:
        """The member's own first row."""
        return int(self.plan.first_row[place[0]])

    def wrapped(self, place: Place, reach: int) -> Place | None:
        """Members form no rings."""
        return None

"""Which units there are beside or instead of an endless pattern: edges, rules, and explicit members.

Everything is frozen; the arrays of ``Members`` are read-only, because a network of 100,000 units as Python objects
would not fit where it has to work.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from synth.network.model import Link


@dataclass(frozen=True)
class EdgeUnit:
    """A named unit at place ``at``, counted from the edge, where the pattern would have a unit of ``instead_of``.

    In two and three dimensions it is a whole row (or layer) of such units, the same all along the edge.
    """

    name: str
    kind: str
    at: int
    instead_of: str


@dataclass(frozen=True)
class EdgeLink:
    """A link near an edge: the unit at place ``to`` takes from the unit at ``to + link.at[axis]``.

    ``link.kind`` and ``link.source_kind`` are the kinds that stand there, edge units included; ``slot`` and
    ``source_slot`` the kinds that the pattern has there. The other numbers of ``link.at`` are steps along the edge.
    """

    link: Link
    to: int
    slot: str
    source_slot: str


@dataclass(frozen=True)
class Edge:
    """One end of a pattern in direction ``axis`` (counted from 0): it goes on without end to the other side.

    ``side`` 'first': the places along ``axis`` are 0, 1, 2, ...; 'last': they are ..., -2, -1, 0. In every other
    direction nothing changes along the edge. A pattern link whose source would stand outside is not there at all, own
    part included; so is one that an edge unit cannot take or offer.
    """

    side: str
    units: tuple[EdgeUnit, ...]
    links: tuple[EdgeLink, ...] = ()
    axis: int = 0

    def inside(self, place: int) -> bool:
        """Whether ``place`` along ``axis`` belongs to the pattern."""
        return place >= 0 if self.side == "first" else place <= 0


@dataclass(frozen=True)
class Rule:
    """A unit of ``kind`` may receive at most ``most`` links of this class at ``take``; any wiring that obeys is meant.

    The sources it may come from are the network's links whose ``choice`` is the rule's name; their strength is already
    ``most`` times that of one link, and the row of the operator counts only the largest of them (theory (13)).
    """

    name: str
    kind: str
    take: str
    most: int


@dataclass(frozen=True, eq=False)
class Members:
    """Explicit units and links, by index into ``Network.kinds`` and ``Network.links``.

    ``kind[i]`` is the kind of unit ``names[i]``. Link ``k`` goes from unit ``source[k]`` to unit ``to[k]`` (source -1:
    the neighbour lies outside a cut, only the unit's own part is there) and consists of the network's links
    ``parts[form[k]]``: the neighbour's part and, where one is needed, the self-link of the unit's own part.
    ``origins[j]`` is, for ``Network.kinds[j]``, the declared kind and the parameters that differ from it, as texts.

    Laws: all arrays are read-only; ``expanded`` has one row per part; two members are equal if they list the same
    units and links in the same order.
    """

    names: tuple[str, ...]
    kind: NDArray[np.int32]
    to: NDArray[np.int32]
    source: NDArray[np.int32]
    form: NDArray[np.int32]
    parts: tuple[tuple[int, ...], ...]
    origins: tuple[tuple[str, Mapping[str, str]], ...]

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for array in (self.kind, self.to, self.source, self.form):
            array.setflags(write=False)

    def __eq__(self, other: object) -> bool:
        """Same units and links in the same order."""
        if not isinstance(other, Members):
            return NotImplemented
        arrays = ((getattr(self, n), getattr(other, n)) for n in ("kind", "to", "source", "form"))
        return (
            self.names == other.names
            and self.parts == other.parts
            and self.origins == other.origins
            and all(a.shape == b.shape and bool((a == b).all()) for a, b in arrays)
        )

    __hash__ = None  # type: ignore[assignment]

    def __repr__(self) -> str:
        """A short text; the arrays are too long to print."""
        return f"Members({len(self.names)} units, {len(self.to)} links)"

    def expanded(self) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.int32]]:
        """One row per part of a link: receiving unit, sending unit (-1: none), index into ``Network.links``.

        The sending unit of an own part is the receiving unit itself.
        """
        import numpy as np

        counts = np.array([len(p) for p in self.parts], dtype=np.int32)
        second = np.array([p[1] if len(p) > 1 else -1 for p in self.parts], dtype=np.int32)
        first = np.array([p[0] for p in self.parts], dtype=np.int32)
        if not len(self.to):
            empty = np.zeros(0, dtype=np.int32)
            return empty, empty, empty
        own = np.flatnonzero(counts[self.form] > 1)
        return (
            np.concatenate([self.to, self.to[own]]),
            np.concatenate([self.source, self.to[own]]),
            np.concatenate([first[self.form], second[self.form[own]]]),
        )


@dataclass(frozen=True)
class Form:
    """A link as a person wrote it, in (taken unit)/(offered unit), before it becomes one or two parts.

    ``low`` and ``high`` bound the strength; ``own`` is the unit's own strength per strength (None: absolute link),
    which differs from 1 only where the two ends count in different units. ``difference``: the difference itself is late
    (R3); ``weakens``: the strength may be anything between zero and what is written (R2).
    """

    low: Fraction
    high: Fraction
    own: Fraction | None = None
    difference: bool = False
    weakens: bool = False
    delay: Fraction = Fraction(0)

    @property
    def peak(self) -> Fraction:
        """The end of the interval with the largest absolute value."""
        return self.high if abs(self.high) >= abs(self.low) else self.low

    def times(self, factor: int) -> Form:
        """The form of ``factor`` such links taken together."""
        return Form(self.low * factor, self.high * factor, self.own, self.difference, self.weakens, self.delay)

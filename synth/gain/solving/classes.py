"""Strongly connected classes of a gain operator, and one point for all of them.

A class that only listens to others can be scaled so far up that what it hears does not count; so the radius of the
whole is the largest one of the classes, and a point for the whole joins theirs with one binary exponent per class.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from synth.gain.operator import MAX, SQUARE, SUM, GainOperator
from synth.gain.solving.layout import counting_order
from synth.gain.solving.points import Exponents, Floats

# Up to this many links between classes each lift is as small as it can be; beyond, lifts are equal from class to class.
_EXACT_LIFTS = 20_000


@dataclass(frozen=True, eq=False)
class Classes:
    """``label`` of every outlet, ``count`` classes.

    ``inside``: the links within classes as an operator, ``links`` their numbers; ``between``: the numbers of the links
    with gain > 0 from class to class.
    """

    operator: GainOperator
    label: NDArray[np.intp]
    count: int
    inside: GainOperator
    links: NDArray[np.intp]
    between: NDArray[np.intp]

    @staticmethod
    def of(operator: GainOperator) -> Classes:
        """The classes of the links with gain > 0."""
        live = operator.gain > 0
        to, source, size = operator.to, operator.source, operator.size
        small = np.int32 if max(size, live.size) < 2**31 - 1 else np.int64
        listens: Any
        if live.all():
            into = operator.links_into
            rows: Any = (np.ones(live.size), source[into.order].astype(small), into.start.astype(small))
            listens = csr_array(rows, shape=(size, size))
            # Parallel links must not reach scipy's method: it loses count of them.
            listens.sum_duplicates()
        else:
            ends: Any = to[live].astype(small), source[live].astype(small)
            listens = csr_array((np.ones(ends[0].size), ends), shape=(size, size))
        count, label = connected_components(listens, directed=True, connection="strong")
        same = live & (label[to] == label[source])
        links = np.flatnonzero(same)
        everything = np.arange(size)
        inside = operator if links.size == live.size else operator.part(everything, links, everything)
        return Classes(operator, label.astype(np.intp), int(count), inside, links, np.flatnonzero(live & ~same))

    @cached_property
    def sizes(self) -> NDArray[np.intp]:
        """Outlets per class."""
        return np.bincount(self.label, minlength=self.count)

    @cached_property
    def _members(self) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        return counting_order(self.label, self.count)

    @cached_property
    def _links(self) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        return counting_order(self.label[self.inside.to], self.count)

    def members(self, c: int) -> NDArray[np.intp]:
        """Outlets of a class."""
        order, start = self._members
        return order[start[c] : start[c + 1]]

    def one(self, c: int) -> tuple[GainOperator, NDArray[np.intp], NDArray[np.intp]]:
        """The operator of one class, its outlets, and the numbers of its links in the whole operator."""
        members = self.members(c)
        order, start = self._links
        links = order[start[c] : start[c + 1]]
        if members.size == self.operator.size and links.size == self.inside.gain.size:
            return self.inside, members, self.links
        number = np.full(self.operator.size, -1, dtype=np.intp)
        number[members] = np.arange(members.size)
        return self.inside.part(members, links, number), members, self.links[links]

    def joined(self, mantissa: Floats, exponent: Exponents, spare: Floats) -> tuple[Floats, Exponents]:
        """Exponents raised class by class until what row i hears from other classes is at most ``spare[i]`` times s_i.

        ``spare`` (size,) > 0. All terms of a row are bounded by the largest times their number.
        """
        links = self.between
        if links.size == 0:
            return mantissa, exponent
        op = self.operator
        to, source = op.to[links], op.source[links]
        heard = np.bincount(to, minlength=op.size)
        gain_power = np.frexp(op.gain[links])[1].astype(np.int64)
        room_power = np.frexp(spare * mantissa / np.maximum(heard, 1))[1] + exponent
        # gain s_source 2^lift_source <= room 2^lift_to with mantissas in [1/2, 1]: two bits more are always enough.
        need = gain_power + exponent[source] - room_power[to] + 2
        lift = self._lifts(self.label[source], self.label[to], need)
        return mantissa, exponent + lift[self.label]

    def _lifts(self, source: NDArray[np.intp], to: NDArray[np.intp], need: Exponents) -> Exponents:
        """Whole lifts with lift[to] >= lift[source] + need along every link between classes."""
        lift = np.zeros(self.count, dtype=np.int64)
        rank = self._ranks(source, to)
        if need.size > _EXACT_LIFTS:
            # Equal steps from rank to rank suffice, whatever the depth, because exponents have no end.
            return rank * max(0, int(need.max()))
        order = np.argsort(rank[source], kind="stable")
        for a, b, step in zip(source[order].tolist(), to[order].tolist(), need[order].tolist(), strict=True):
            lift[b] = max(lift[b], lift[a] + step)
        return lift

    def _ranks(self, source: NDArray[np.intp], to: NDArray[np.intp]) -> Exponents:
        """A number per class that is larger for a class than for those it listens to."""
        numbers = np.arange(self.count, dtype=np.int64)
        # Tarjan's method numbers classes in an order of this kind, one way or the other.
        if np.all(source < to):
            return numbers
        if np.all(source > to):
            return self.count - 1 - numbers
        order, start = counting_order(source, self.count)
        targets, waiting = to[order].tolist(), np.bincount(to, minlength=self.count).tolist()
        begin = start.tolist()
        ready = [c for c in range(self.count) if waiting[c] == 0]
        for c in ready:
            for listener in targets[begin[c] : begin[c + 1]]:
                waiting[listener] -= 1
                if waiting[listener] == 0:
                    ready.append(listener)
        rank = np.empty(self.count, dtype=np.int64)
        rank[ready] = numbers
        return rank


def simplified(inner: GainOperator) -> GainOperator:
    """The same operator, with rows of one link taken for whatever type makes all rows alike, if one does."""
    single = np.bincount(inner.to, minlength=inner.size) == 1
    if not single.any():
        return inner
    if single.all():
        return replace(inner, codes=np.zeros(inner.size, dtype=np.int8), choice=np.full(inner.gain.size, -1))
    for code in (SUM, MAX, SQUARE):
        if np.all(single | (inner.codes == code)):
            return replace(inner, codes=np.full(inner.size, code, dtype=np.int8))
    return inner

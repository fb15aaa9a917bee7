"""The open network as matrices of the phases theta from one cell to the next, one per dimension (its symbol).

With v = V z, V the strengths times e^{i theta . at} minus the own parts, and z = H x + F v, the coupled cell obeys

    A^ = A + D (I - V F)^{-1} V H        C^ = C + N (I - V F)^{-1} V H        (theory section 1)

Law: the eigenvalues of A^ at theta = 2 pi k/n, k = 0 .. n-1 in every dimension, are those of a ring (torus) of n cells.
"""

from __future__ import annotations

import cmath
import math
import operator
from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.network.model import Kind, Link, Network
from synth.network.rational import Rows, reduced

Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Symbol:
    """Block matrices over all kinds; the coupling is given by its terms, so that any phase can be put in."""

    names: tuple[str, ...]
    A: Rows
    B: Rows
    C: Rows
    D: Rows
    H: Rows
    N: Rows
    F: Rows
    Fu: Rows  # offers x inputs
    neighbour: tuple[tuple[int, int, tuple[int, ...], Fraction], ...]  # take, offer, offset, strength
    own: tuple[tuple[int, int, Fraction], ...]  # take, offer, own strength
    sensors: tuple[str, ...]
    actuators: tuple[str, ...]
    hears: tuple[frozenset[int], ...]  # per actuator, the rows of C that it may use

    def exact(self, wave: tuple[int, ...]) -> tuple[Rows, Rows, Rows] | None:
        """A^, B^ and C^ with e^{i theta} = ``wave`` (1 or -1 per dimension).

        None if feed-through makes an algebraic loop.
        """
        takes, offers = _width(self.D), len(self.H)
        V = [[Fraction(0)] * offers for _ in range(takes)]
        for take, offer, at, g in self.neighbour:
            V[take][offer] += g * math.prod(w if step % 2 else 1 for w, step in zip(wave, at, strict=True))
        for take, offer, g in self.own:
            V[take][offer] -= g
        if not takes:
            return self.A, self.B, self.C
        n, inputs = len(self.A), _width(self.B)
        VF, VH, VU = _product(V, self.F, takes), _product(V, self.H, n), _product(V, self.Fu, inputs)
        table = [[Fraction(int(i == j)) - VF[i][j] for j in range(takes)] + VH[i] + VU[i] for i in range(takes)]
        solved, pivots = reduced(table, takes + n + inputs)
        if pivots[:takes] != list(range(takes)):
            return None
        heard = [row[takes : takes + n] for row in solved[:takes]]
        driven = [row[takes + n :] for row in solved[:takes]]
        return (
            _sum(self.A, _product(self.D, heard, n)),
            _sum(self.B, _product(self.D, driven, inputs)),
            _sum(self.C, _product(self.N, heard, n)),
        )

    def floating(self, theta: tuple[float, ...]) -> tuple[Complex, Complex, Complex] | None:
        """A^, B^ and C^ as complex arrays; None if feed-through makes an algebraic loop."""
        n, inputs, takes, offers = len(self.A), _width(self.B), _width(self.D), len(self.H)
        A, B, C = array_of(self.A, n), array_of(self.B, inputs), array_of(self.C, n)
        if not takes:
            return A, B, C
        V = np.zeros((takes, offers), dtype=complex)
        for take, offer, at, g in self.neighbour:
            V[take, offer] += float(g) * cmath.exp(1j * sum(map(operator.mul, theta, at)))
        for take, offer, g in self.own:
            V[take, offer] -= float(g)
        loop = np.eye(takes) - V @ array_of(self.F, takes)
        if np.linalg.cond(loop) > 1e12:
            return None
        heard = np.linalg.solve(loop, V @ array_of(self.H, n))
        driven = np.linalg.solve(loop, V @ array_of(self.Fu, inputs))
        D = array_of(self.D, takes)
        return A + D @ heard, B + D @ driven, C + array_of(self.N, takes) @ heard

    def sensor_sizes(self, d: NDArray[np.float64]) -> NDArray[np.float64]:
        """How large each row of C^ may get at any phase (feed-through aside), states counted in units of ``d``."""
        n, takes, offers = len(self.A), _width(self.D), len(self.H)
        V = np.zeros((takes, offers))
        for take, offer, _, g in self.neighbour:
            V[take, offer] += abs(float(g))
        for take, offer, g in self.own:
            V[take, offer] += abs(float(g))
        size = np.abs(array_of(self.C, n)) + np.abs(array_of(self.N, takes)) @ V @ np.abs(array_of(self.H, n))
        return np.asarray(np.linalg.norm(size * d, axis=1), dtype=float)


def _width(rows: Rows) -> int:
    return len(rows[0]) if rows else 0


def array_of(rows: Rows, width: int) -> NDArray[np.complex128]:
    """The nearest complex doubles, of shape (rows, width) also where there are no rows."""
    return np.array([[float(v) for v in row] for row in rows], dtype=complex).reshape(len(rows), width)


def _product(left: Rows, right: Rows, width: int) -> Rows:
    """The product of two matrices that are mostly zero: only what is not zero is looked at."""
    filled = [[(j, b) for j, b in enumerate(row) if b] for row in right]
    rows: Rows = []
    for row in left:
        sums = [Fraction(0)] * width
        for k, a in enumerate(row):
            if a:
                for j, b in filled[k]:
                    sums[j] += a * b
        rows.append(sums)
    return rows


def _sum(left: Rows, right: Rows) -> Rows:
    return [[a + b for a, b in zip(r, q, strict=True)] for r, q in zip(left, right, strict=True)]


def symbol_of(network: Network) -> Symbol:
    """Stack the kinds of one cell of a pattern (edges left aside), or of one unit of each kind under rules."""
    kinds = network.cell_kinds
    names = tuple(kind.name for kind in kinds)
    place = {name: i for i, name in enumerate(names)}
    links = [
        (place[link.kind], place[link.source_kind], link)
        for link in network.links
        if link.kind in place and link.source_kind in place
    ]
    return stacked_symbol(network, kinds, names, links)


def member_symbol(network: Network) -> Symbol:
    """All units of members as one cell."""
    members = network.members
    assert members is not None  # the caller has looked
    kinds = tuple(network.kinds[k] for k in members.kind.tolist())
    to, source, sort = members.expanded()
    links = [
        (i, j, network.links[k]) for i, j, k in zip(to.tolist(), source.tolist(), sort.tolist(), strict=True) if j >= 0
    ]
    cut = [(i, i, replace(network.links[k], strength=Fraction(0)))
           for i, j, k in zip(to.tolist(), source.tolist(), sort.tolist(), strict=True) if j < 0
           and network.links[k].relative]  # fmt: skip
    return stacked_symbol(network, kinds, members.names, links + cut)


def stacked_symbol(
    network: Network, kinds: Sequence[Kind], names: Sequence[str], links: Sequence[tuple[int, int, Link]]
) -> Symbol:
    """Units of the given kinds side by side; every link with the positions of its receiving and its sending unit."""
    groups = ("states", "inputs", "takes", "offers", "sensors")
    starts: list[dict[str, int]] = []
    totals = dict.fromkeys(groups, 0)
    for kind in kinds:
        starts.append(dict(totals))
        for group in groups:
            totals[group] += len(getattr(kind, group))

    def stacked(block: str, down: str, across: str) -> Rows:
        rows = [[Fraction(0)] * totals[across] for _ in range(totals[down])]
        for start, kind in zip(starts, kinds, strict=True):
            matrix = getattr(kind, block)
            for i, row in enumerate(() if matrix is None else matrix.rows):
                for j, v in enumerate(row):
                    rows[start[down] + i][start[across] + j] = v
        return rows

    neighbour, own = [], []
    for to, source, link in links:
        if link.sort != "link":
            continue  # tolerances and curves are departures from the nominal network
        take = starts[to]["takes"] + kinds[to].index("takes", link.take)
        offer = starts[source]["offers"] + kinds[source].index("offers", link.offer) if link.strength else 0
        if link.strength:
            neighbour.append((take, offer, link.at, link.strength))
        if link.relative:
            own.append((take, starts[to]["offers"] + kinds[to].index("offers", link.offer), link.own_strength))
    hears = []
    for start, kind in zip(starts, kinds, strict=True):
        for actuator in kind.inputs:
            allowed = network.goal.uses.get(kind.name, {}).get(actuator.name)
            hears.append(
                frozenset(
                    start["sensors"] + i for i, s in enumerate(kind.sensors) if allowed is None or s.name in allowed
                )
            )

    def labels(group: str) -> tuple[str, ...]:
        return tuple(f"{n}.{s.name}" for n, kind in zip(names, kinds, strict=True) for s in getattr(kind, group))

    return Symbol(
        labels("states"),
        stacked("A", "states", "states"), stacked("B", "states", "inputs"), stacked("C", "sensors", "states"),
        stacked("D", "states", "takes"), stacked("H", "offers", "states"), stacked("N", "sensors", "takes"),
        stacked("F", "offers", "takes"), stacked("Fu", "offers", "inputs"), tuple(neighbour), tuple(own),
        labels("sensors"), labels("inputs"), tuple(hears),
    )  # fmt: skip

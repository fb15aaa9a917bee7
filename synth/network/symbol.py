"""The open network as matrices of the phase theta from one cell to the next (its symbol).

With v = V z, V the strengths times e^{i theta at} minus the own parts, and z = H x + F v, the coupled cell obeys

    A^ = A + D (I - V F)^{-1} V H        C^ = C + N (I - V F)^{-1} V H        (theory section 1)

Law: the eigenvalues of A^ at theta = 2 pi k/n, k = 0 .. n-1, are those of a ring of n cells.
"""

from __future__ import annotations

import cmath
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.network.model import Network
from synth.network.rational import Rows, reduced, transposed


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
    neighbour: tuple[tuple[int, int, int, Fraction], ...]  # take, offer, offset, strength
    own: tuple[tuple[int, int, Fraction], ...]  # take, offer, own strength
    sensors: tuple[str, ...]
    actuators: tuple[str, ...]
    hears: tuple[frozenset[int], ...]  # per actuator, the rows of C that it may use

    def exact(self, wave: int) -> tuple[Rows, Rows] | None:
        """A^ and C^ with e^{i theta} = ``wave`` (1 or -1); None if feed-through makes an algebraic loop."""
        takes, offers = _width(self.D), len(self.H)
        V = [[Fraction(0)] * offers for _ in range(takes)]
        for take, offer, at, g in self.neighbour:
            V[take][offer] += g * (wave if at % 2 else 1)
        for take, offer, g in self.own:
            V[take][offer] -= g
        if not takes:
            return self.A, self.C
        n = len(self.A)
        VF, VH = _product(V, self.F, takes), _product(V, self.H, n)
        table = [[Fraction(int(i == j)) - VF[i][j] for j in range(takes)] + VH[i] for i in range(takes)]
        solved, pivots = reduced(table, takes + n)
        if pivots[:takes] != list(range(takes)):
            return None
        heard = [row[takes:] for row in solved]
        return _sum(self.A, _product(self.D, heard, n)), _sum(self.C, _product(self.N, heard, n))

    def floating(self, theta: float) -> tuple[NDArray[np.complex128], NDArray[np.complex128]] | None:
        """A^(theta) and C^(theta) as complex arrays; None if feed-through makes an algebraic loop."""
        n, takes, offers = len(self.A), _width(self.D), len(self.H)
        A, C = array_of(self.A, n), array_of(self.C, n)
        if not takes:
            return A, C
        V = np.zeros((takes, offers), dtype=complex)
        for take, offer, at, g in self.neighbour:
            V[take, offer] += float(g) * cmath.exp(1j * theta * at)
        for take, offer, g in self.own:
            V[take, offer] -= float(g)
        loop = np.eye(takes) - V @ array_of(self.F, takes)
        if np.linalg.cond(loop) > 1e12:
            return None
        heard = np.linalg.solve(loop, V @ array_of(self.H, n))
        return A + array_of(self.D, takes) @ heard, C + array_of(self.N, takes) @ heard

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
    columns = transposed(right, width)
    return [
        [sum((a * b for a, b in zip(row, c, strict=True) if a and b), Fraction(0)) for c in columns] for row in left
    ]


def _sum(left: Rows, right: Rows) -> Rows:
    return [[a + b for a, b in zip(r, q, strict=True)] for r, q in zip(left, right, strict=True)]


def symbol_of(network: Network) -> Symbol:
    """Stack the kinds of one cell."""
    starts: dict[str, dict[str, int]] = {}
    totals = dict.fromkeys(("states", "inputs", "takes", "offers", "sensors"), 0)
    for kind in network.kinds:
        starts[kind.name] = dict(totals)
        for group in totals:
            totals[group] += len(getattr(kind, group))

    def stacked(block: str, down: str, across: str) -> Rows:
        rows = [[Fraction(0)] * totals[across] for _ in range(totals[down])]
        for kind in network.kinds:
            for i, row in enumerate(getattr(kind, block).rows):
                for j, v in enumerate(row):
                    rows[starts[kind.name][down] + i][starts[kind.name][across] + j] = v
        return rows

    neighbour, own = [], []
    for link in network.links:
        take = starts[link.kind]["takes"] + network.kind(link.kind).index("takes", link.take)
        source = starts[link.source_kind]["offers"] + network.kind(link.source_kind).index("offers", link.offer)
        neighbour.append((take, source, link.at[0], link.strength))
        if link.relative:
            offer = starts[link.kind]["offers"] + network.kind(link.kind).index("offers", link.offer)
            own.append((take, offer, link.own_strength))
    hears = []
    for kind in network.kinds:
        for actuator in kind.inputs:
            allowed = network.goal.uses.get(kind.name, {}).get(actuator.name)
            first = starts[kind.name]["sensors"]
            hears.append(
                frozenset(first + i for i, s in enumerate(kind.sensors) if allowed is None or s.name in allowed)
            )
    return Symbol(
        tuple(f"{k.name}.{s.name}" for k in network.kinds for s in k.states),
        stacked("A", "states", "states"), stacked("B", "states", "inputs"), stacked("C", "sensors", "states"),
        stacked("D", "states", "takes"), stacked("H", "offers", "states"), stacked("N", "sensors", "takes"),
        stacked("F", "offers", "takes"), tuple(neighbour), tuple(own),
        tuple(f"{k.name}.{s.name}" for k in network.kinds for s in k.sensors),
        tuple(f"{k.name}.{a.name}" for k in network.kinds for a in k.inputs), tuple(hears),
    )  # fmt: skip

"""The coupled pattern seen through one spatial angle: a small matrix whose roots are the modes of the whole network.

A mode of the endless pattern with phase step theta from cell to cell and rate s satisfies det M(s) = 0 with

    M(s) = s E - A(kappa) - sum over links of kappa_l J_l exp(i theta at_l - s delay_l)          (theory: section 9)

where A(kappa) holds the closed units (own parts of relative links folded in, growing with kappa where asked), and J_l
is D_l g H_l. Where an offered signal has feed-through, the taken signals are kept as unknowns beside the states and E
is zero on their rows, so that no algebraic loop has to be solved first. States are scaled to be of like size.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.gain.closed import ClosedUnit, close_network
from synth.network.gains import Gains
from synth.network.model import Link, Network

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class Term:
    """One link in the symbol: matrix ``J`` (strength included), cell offset, delay (s), whether kappa multiplies it."""

    J: Array
    at: int
    delay: float
    scaled: bool


@dataclass(frozen=True)
class Loop:
    """The symbol at one strength: ``M(theta, s) = s E - A - sum J exp(i at theta - s delay)``.

    ``radius`` bounds |s| of every root with Re s >= 0 at every theta (infinite where the direct paths through
    feed-through are too strong for that). ``step_s`` and ``step_theta`` bound the change (2-norm) of M per unit of s
    (in Re s >= 0) and of theta. ``states`` counts the state rows, which come first.
    """

    E: Array
    A: Array
    terms: tuple[Term, ...]
    states: int
    radius: float
    step_s: float
    step_theta: float

    def matrix(self, theta: NDArray[np.float64], s: ComplexArray) -> ComplexArray:
        """M at ``k`` points at once: two arrays of shape (k,) give an array of shape (k, size, size)."""
        found: ComplexArray = s[:, None, None] * self.E - self.A
        for term in self.terms:
            found = found - np.exp(1j * term.at * theta - s * term.delay)[:, None, None] * term.J
        return found

    def slope(self, theta: float, s: complex) -> ComplexArray:
        """dM/ds at one point."""
        found = self.E.astype(complex)
        for term in self.terms:
            found = found + term.delay * np.exp(1j * term.at * theta - s * term.delay) * term.J
        return found

    def split(self, theta: float) -> tuple[ComplexArray, list[tuple[ComplexArray, float]]]:
        """A with the undelayed links added at this angle, and (matrix, delay) per distinct positive delay."""
        now = self.A.astype(complex)
        late: dict[float, ComplexArray] = {}
        for term in self.terms:
            J = np.exp(1j * term.at * theta) * term.J
            if term.delay == 0:
                now = now + J
            else:
                late[term.delay] = late.get(term.delay, np.zeros_like(now)) + J
        return now, [(J, delay) for delay, J in sorted(late.items())]


@dataclass(frozen=True)
class LoopFamily:
    """The symbol for every common factor kappa on the chosen links: ``A(kappa) = A0 + kappa A1``.

    Law: ``family.at(1)`` is the symbol of the network as declared.
    """

    E: Array
    A0: Array
    A1: Array
    terms: tuple[Term, ...]
    states: int

    def at(self, kappa: float) -> Loop:
        """The symbol at the factor ``kappa`` >= 0."""
        A = self.A0 + kappa * self.A1
        terms = tuple(Term(t.J * kappa, t.at, t.delay, t.scaled) if t.scaled else t for t in self.terms)
        norms = [float(np.linalg.norm(t.J, 2)) for t in terms]
        step_s = 1.0 + sum(norm * t.delay for norm, t in zip(norms, terms, strict=True))
        step_theta = sum(norm * abs(t.at) for norm, t in zip(norms, terms, strict=True))
        return Loop(self.E, A, terms, self.states, root_bound(A, terms, self.states), step_s, step_theta)

    def matrix(self, kappa: Array, theta: Array, s: ComplexArray) -> ComplexArray:
        """M at ``k`` points at once, the factor included: three arrays of shape (k,) give shape (k, size, size)."""
        found: ComplexArray = s[:, None, None] * self.E - self.A0 - kappa[:, None, None] * self.A1
        for term in self.terms:
            wave = np.exp(1j * term.at * theta - s * term.delay)
            found = found - (wave * kappa if term.scaled else wave)[:, None, None] * term.J
        return found

    @property
    def step_kappa(self) -> float:
        """Bound on the change (2-norm) of M per unit of kappa, in Re s >= 0."""
        return float(np.linalg.norm(self.A1, 2)) + sum(float(np.linalg.norm(t.J, 2)) for t in self.terms if t.scaled)

    def without_delays(self) -> LoopFamily:
        """The same network with every link fresh."""
        return LoopFamily(
            self.E, self.A0, self.A1, tuple(Term(t.J, t.at, 0.0, t.scaled) for t in self.terms), self.states
        )

    @property
    def delayed(self) -> bool:
        """Whether any link carries a delay."""
        return any(t.delay for t in self.terms)


def loop_family(
    network: Network, gains: Gains, classes: tuple[str, ...] | None = None, own_parts: bool = True
) -> LoopFamily:
    """The symbol of ``network`` under ``gains`` when kappa multiplies the links of ``classes`` (None: all).

    ``own_parts`` says whether the own part of a relative link grows with it. Patterns of dimension one.
    """
    none = close_network(network.scaled(Fraction(0), classes, own_parts), gains)
    full = close_network(network, gains)
    feed = any(any(unit.F.rows[unit.kind.index("offers", link.offer)]) for unit, link in _sources(full, network.links))
    A0, first = _blocks([unit.A.floats() for unit in none]), _starts([unit.A.shape[0] for unit in none])
    A1 = _blocks([(a.A - b.A).floats() for a, b in zip(full, none, strict=True)])
    n = A0.shape[0]
    inlet = _starts([unit.D.shape[1] for unit in full])
    taken = sum(unit.D.shape[1] for unit in full) if feed else 0
    E = np.diag([1.0] * n + [0.0] * taken)
    pad = np.zeros((n + taken, n + taken))
    big0, big1 = pad.copy(), pad.copy()
    big0[:n, :n], big1[:n, :n] = A0, A1
    if feed:
        big0[:n, n:] = _blocks([unit.D.floats() for unit in full])
        big0[n:, n:] = -np.eye(taken)
    position = {unit.kind.name: i for i, unit in enumerate(full)}
    terms = []
    for link in network.links:
        i, j = position[link.kind], position[link.source_kind]
        k, q = full[i].kind.index("takes", link.take), full[j].kind.index("offers", link.offer)
        J = pad.copy()
        columns = slice(first[j], first[j] + full[j].A.shape[0])
        if feed:
            J[n + inlet[i] + k, columns] = full[j].H.row(q).scaled(link.strength).floats()[0]
            wide = slice(n + inlet[j], n + inlet[j] + full[j].D.shape[1])
            J[n + inlet[i] + k, wide] = full[j].F.row(q).scaled(link.strength).floats()[0]
        else:
            block = full[i].D.column(k).scaled(link.strength) @ full[j].H.row(q)
            J[first[i] : first[i] + full[i].A.shape[0], columns] = block.floats()
        if np.any(J):
            terms.append(Term(J, link.at[0], float(link.delay), classes is None or link.name in classes))
    return _balanced(LoopFamily(E, big0, big1, tuple(terms), n))


def _sources(units: Sequence[ClosedUnit], links: Sequence[Link]) -> list[tuple[ClosedUnit, Link]]:
    by_name = {unit.kind.name: unit for unit in units}
    return [(by_name[link.source_kind], link) for link in links]


def _starts(sizes: list[int]) -> list[int]:
    return [sum(sizes[:i]) for i in range(len(sizes))]


def _blocks(parts: list[Array]) -> Array:
    """Block-diagonal matrix of the parts (parts may be rectangular or empty)."""
    found = np.zeros((sum(p.shape[0] for p in parts), sum(p.shape[1] for p in parts)))
    row = column = 0
    for part in parts:
        found[row : row + part.shape[0], column : column + part.shape[1]] = part
        row, column = row + part.shape[0], column + part.shape[1]
    return found


def _balanced(family: LoopFamily) -> LoopFamily:
    """Scale rows and columns alike by powers of two (exact), so that 2-norms mean something; roots do not change."""
    from scipy.linalg import matrix_balance

    size = np.abs(family.A0) + np.abs(family.A1) + sum((np.abs(t.J) for t in family.terms), np.zeros_like(family.A0))
    _, (scale, _) = matrix_balance(size, permute=False, separate=True)
    ratio = scale[None, :] / scale[:, None]
    terms = tuple(Term(t.J * ratio, t.at, t.delay, t.scaled) for t in family.terms)
    return LoopFamily(family.E, family.A0 * ratio, family.A1 * ratio, terms, family.states)


def root_bound(A: Array, terms: tuple[Term, ...], n: int) -> float:
    """Bound on |s| of every root in Re s >= 0: |s| |x| <= W |x| entrywise, so |s| is at most the Perron root of W.

    With v the taken signals that are kept as unknowns: |v| <= G_H |x| + G_F |v|, which needs the Perron root of G_F
    below 1 (then no root can come from infinity either).
    """
    G = sum((np.abs(t.J) for t in terms), np.zeros_like(A))
    W = np.abs(A[:n, :n]) + G[:n, :n]
    if A.shape[0] > n:
        GF = G[n:, n:]
        if np.max(np.abs(np.linalg.eigvals(GF))) >= 1 - 1e-9:
            return float("inf")
        W = W + np.abs(A[:n, n:]) @ np.linalg.solve(np.eye(GF.shape[0]) - GF, G[n:, :n])
    return float(np.max(np.abs(np.linalg.eigvals(W)))) * (1 + 1e-6) + 1e-9 if n else 0.0

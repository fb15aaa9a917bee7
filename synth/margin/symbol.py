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

from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import wiring_of
from synth.gain.plan import Wiring, plan_of_units
from synth.network.gains import Gains
from synth.network.model import Kind, Link, Network

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class Term:
    """One link in the symbol: matrix ``J`` (strength included), cell offset, delay (s), whether kappa multiplies it.

    ``at`` is a whole number on a line and for members (0), and one per direction in two and three dimensions.
    """

    J: Array
    at: int | tuple[int, ...]
    delay: float
    scaled: bool


Angle = float | tuple[float, ...]


def _turn(at: int | tuple[int, ...], theta: Angle) -> float:
    return float(phases(at, np.array([theta], dtype=float))[0])


def phases(at: int | tuple[int, ...], theta: Array) -> Array:
    """at . theta (rad) at ``k`` angles: ``theta`` has the shape (k,) on a line, (k, directions) otherwise."""
    return theta * at if isinstance(at, int) else theta @ np.array(at, dtype=float)


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
            found = found - np.exp(1j * phases(term.at, theta) - s * term.delay)[:, None, None] * term.J
        return found

    @property
    def directions(self) -> int:
        """How many angles a mode has: 1 on a line (and for members, whose terms do not turn), else 2 or 3."""
        first = self.terms[0].at if self.terms else 0
        return 1 if isinstance(first, int) else len(first)

    @property
    def steps_theta(self) -> tuple[float, ...]:
        """Bound on the change (2-norm) of M per unit of every angle, in Re s >= 0."""
        if self.directions == 1:
            return (self.step_theta,)
        norms = [float(np.linalg.norm(t.J, 2)) for t in self.terms]
        offsets = np.array([np.abs(t.at) for t in self.terms], dtype=float)
        return tuple(float(v) for v in np.array(norms) @ offsets)

    def slope(self, theta: Angle, s: complex) -> ComplexArray:
        """dM/ds at one point."""
        found = self.E.astype(complex)
        for term in self.terms:
            found = found + term.delay * np.exp(1j * _turn(term.at, theta) - s * term.delay) * term.J
        return found

    def split(self, theta: Angle) -> tuple[ComplexArray, list[tuple[ComplexArray, float]]]:
        """A with the undelayed links added at this angle, and (matrix, delay) per distinct positive delay."""
        now = self.A.astype(complex)
        late: dict[float, ComplexArray] = {}
        for term in self.terms:
            J = np.exp(1j * _turn(term.at, theta)) * term.J
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
        step_theta = sum(norm * float(np.abs(t.at).sum()) for norm, t in zip(norms, terms, strict=True))
        return Loop(self.E, A, terms, self.states, root_bound(A, terms, self.states), step_s, step_theta)

    def matrix(self, kappa: Array, theta: Array, s: ComplexArray) -> ComplexArray:
        """M at ``k`` points at once, the factor included: three arrays of shape (k,) give shape (k, size, size)."""
        found: ComplexArray = s[:, None, None] * self.E - self.A0 - kappa[:, None, None] * self.A1
        for term in self.terms:
            wave = np.exp(1j * phases(term.at, theta) - s * term.delay)
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

    ``own_parts`` says whether the own part of a relative link grows with it. Patterns of any dimension, members (one
    cell that holds every unit), and of an edge pattern the bulk. Links that may weaken stand at their full strength.
    Raises InputError for rules, which describe no single network.
    """
    network.refuse_beyond("the symbol", "pattern", "members", "edge pattern")
    wiring = wiring_of(network)
    full, none = _units(wiring, gains), _units(wiring_of(network.scaled(Fraction(0), classes, own_parts)), gains)
    links, kinds = wiring.links, wiring.kinds
    arrivals = _arrivals(network, wiring)
    feed = any(any(full[j].F.rows[_place(kinds, links[n])[1]]) for _, j, n, _ in arrivals)
    states, inlets = [unit.A.shape[0] for unit in full], [unit.D.shape[1] for unit in full]
    first, inlet = _starts(states), _starts(inlets)
    A0, A1 = _blocks([unit.A.floats() for unit in none]), _blocks(_changes(full, none))
    n, taken = A0.shape[0], sum(inlets) if feed else 0
    E = np.diag([1.0] * n + [0.0] * taken)
    pad = np.zeros((n + taken, n + taken))
    big0, big1 = pad.copy(), pad.copy()
    big0[:n, :n], big1[:n, :n] = A0, A1
    if feed:
        big0[:n, n:] = _blocks([unit.D.floats() for unit in full])
        big0[n:, n:] = -np.eye(taken)
    found: dict[tuple[int | tuple[int, ...], float, bool, int], Array] = {}
    blocks: dict[tuple[int, int, int], Array] = {}
    for i, j, number, at in arrivals:
        link = links[number]
        take, offer = _place(kinds, link)
        scaled = (classes is None or link.name in classes) and (own_parts or not link.own_part)
        # On a lattice every link stays a term of its own; of members all with one delay are one matrix.
        key = (at, float(link.delay), scaled, -1 if network.members is not None else number)
        J = found.setdefault(key, pad.copy())
        columns = slice(first[j], first[j] + states[j])
        if feed:
            J[n + inlet[i] + take, columns] += full[j].H.row(offer).scaled(link.strength).floats()[0]
            wide = slice(n + inlet[j], n + inlet[j] + inlets[j])
            J[n + inlet[i] + take, wide] += full[j].F.row(offer).scaled(link.strength).floats()[0]
        else:
            same = (id(full[i]), id(full[j]), number)
            if same not in blocks:
                blocks[same] = (full[i].D.column(take).scaled(link.strength) @ full[j].H.row(offer)).floats()
            J[first[i] : first[i] + states[i], columns] += blocks[same]
    terms = tuple(Term(J, at, delay, scaled) for (at, delay, scaled, _), J in found.items() if np.any(J))
    return _balanced(LoopFamily(E, big0, big1, terms, n))


def _units(wiring: Wiring, gains: Gains) -> list[ClosedUnit]:
    """Every unit with its loop closed; units of one specification are one object."""
    plan = plan_of_units(wiring)
    closed = close_plan(plan, gains)
    return [closed[k] for k in plan.unit_spec.tolist()]


def _changes(full: Sequence[ClosedUnit], none: Sequence[ClosedUnit]) -> list[Array]:
    known: dict[tuple[int, int], Array] = {}
    for a, b in zip(full, none, strict=True):
        if (id(a), id(b)) not in known:
            known[id(a), id(b)] = (a.A - b.A).floats()
    return [known[id(a), id(b)] for a, b in zip(full, none, strict=True)]


def _arrivals(network: Network, wiring: Wiring) -> list[tuple[int, int, int, int | tuple[int, ...]]]:
    """(receiving unit, sending unit, link, offset) of everything that is sent by a unit that is there."""
    found: list[tuple[int, int, int, int | tuple[int, ...]]] = []
    for i, j, number in zip(wiring.to.tolist(), wiring.source.tolist(), wiring.link.tolist(), strict=True):
        link = wiring.links[number]
        if j >= 0 and link.strength != 0:
            at: int | tuple[int, ...] = link.at if network.dimension > 1 else link.at[0] if link.at else 0
            found.append((i, j, number, at))
    return found


def _place(kinds: Sequence[Kind], link: Link) -> tuple[int, int]:
    """Position of the link's take in the receiving kind and of its offer in the sending one."""
    by_name = {kind.name: kind for kind in kinds if kind.name in (link.kind, link.source_kind)}
    return by_name[link.kind].index("takes", link.take), by_name[link.source_kind].index("offers", link.offer)


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

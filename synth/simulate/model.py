"""The closed loop of a finite section: cells 0 .. N-1 of the pattern, with open ends.

Open ends: a link whose source would lie outside the section delivers nothing. For a relative link the end unit keeps
its own part, g (0 - z_i): it behaves as if the missing neighbour stood still at its reference. Such a section is a
trajectory of the endless pattern only as long as nothing has come in from outside; every bound of the proof holds for
it,
because "delivers nothing" is in the class of the proof (theory (1): |v| <= g sup |z|).

All arrays are laid out [number, cell, run]; the matrices of a *block* system act on the first axis, the matrices of a
*whole*
system (links without delay solved in) act on the first two axes together, number-major.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.gain.closed import ClosedUnit, close_network
from synth.network.gains import Gains
from synth.network.model import Network

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Wire:
    """A link between stacked positions: inlet ``take`` of cell c receives ``strength`` times outlet ``offer`` of cell c
    + ``at``.

    ``delay`` in seconds; ``strength`` in (unit of the taken signal)/(unit of the offered signal), sign included.
    """

    take: int
    offer: int
    at: int
    strength: float
    delay: Fraction


@dataclass(frozen=True)
class Shape:
    """Where each kind's numbers lie in the stacked cell: half-open ranges per kind name."""

    states: dict[str, tuple[int, int]]
    takes: dict[str, tuple[int, int]]
    offers: dict[str, tuple[int, int]]
    inputs: dict[str, tuple[int, int]]
    disturbances: dict[str, tuple[int, int]]


@dataclass(frozen=True)
class System:
    """x' = A x + D v + E w + B d,  z = H x + F v + Fw w,  y = Yx x + Yv v + Yw w  over ``cells`` cells.

    ``d`` is the command correction (actuator limit, sampled controller); ``y`` is the actuator command in the forward
    system. ``sizes`` = numbers per cell of (x, v, w, d, z, y). Matrices are dense arrays of per-cell size if not
    ``whole``,
    scipy sparse matrices of all cells if ``whole``.
    """

    A: Any
    D: Any
    E: Any
    B: Any
    H: Any
    F: Any
    Fw: Any
    Yx: Any
    Yv: Any
    Yw: Any
    cells: int
    sizes: tuple[int, int, int, int, int, int]
    whole: bool = False


@dataclass(frozen=True)
class Section:
    """N cells of a network under given gains: the closed units stacked into one cell, and the wires between cells.

    ``limits`` are the actuator limits (inf: none), ``peaks`` the declared disturbance peaks, both in stacked order and
    in
    declared units. In sections unit by unit (synth.simulate.units) a cell is one unit: ``where`` lists the cells of
    each kind, ``names`` unit and kind of each cell, ``modes`` the eigenvalues of the closed units; wires are threads.
    """

    network: Network
    closed: tuple[ClosedUnit, ...]
    cells: int
    shape: Shape
    block: System
    wires: tuple[Any, ...]
    limits: Array
    peaks: Array
    where: Mapping[str, Any] | None = None
    names: tuple[tuple[str, str], ...] | None = None
    modes: Array | None = None

    def eigenvalues(self) -> Array:
        """Modes of the closed units by themselves, 1/s."""
        return np.linalg.eigvals(self.block.A) if self.modes is None else self.modes

    @property
    def units(self) -> int:
        """Number of units: one of each kind per cell."""
        return self.cells if self.where is not None else self.cells * len(self.closed)

    @property
    def deepest(self) -> int:
        """The cell that most others can act on: the downstream end of a one-way section, else the middle."""
        offsets = [wire.at for wire in self.wires if wire.at]
        if offsets and all(at < 0 for at in offsets):
            return self.cells - 1
        if offsets and all(at > 0 for at in offsets):
            return 0
        return self.cells // 2

    @property
    def first(self) -> int:
        """The cell where a disturbance enters to see how it travels: the upstream end."""
        return self.cells - 1 - self.deepest if self.deepest in (0, self.cells - 1) else 0

    def numbers(self, group: str) -> list[tuple[str, str, str]]:
        """(kind, name, physical unit) of every stacked number of ``group`` ('states', 'offers', 'inputs', ...), in
        order.
        """
        return [(c.kind.name, s.name, s.unit) for c in self.closed for s in getattr(c.kind, group)]


def build_section(network: Network, gains: Gains, cells: int) -> Section:
    """The open-ended section with ``cells`` cells (>= 1) of ``network`` under ``gains``.

    Raises InputError for a pattern that is not one-dimensional, for cells < 1, and for kinds without gains.
    """
    if network.dimension != 1:
        raise InputError(
            f"only patterns along a line can be simulated; this one has dimension {network.dimension}. "
            "The proof does not need the simulation."
        )
    if cells < 1:
        raise InputError(f"{cells} cells cannot be simulated; ask for one or more.")
    missing = [kind.name for kind in network.kinds if kind.name not in gains]
    if missing:
        raise InputError(f"there are no gains for {', '.join(missing)}; give a gain set for every kind.")
    closed = close_network(network, gains)
    shape = _shape(closed)
    wires = tuple(
        Wire(
            shape.takes[link.kind][0] + network.kind(link.kind).index("takes", link.take),
            shape.offers[link.source_kind][0] + network.kind(link.source_kind).index("offers", link.offer),
            link.at[0],
            float(link.strength),
            link.delay,
        )
        for link in network.links
    )
    limits = [np.inf if a.limit is None else float(a.limit) for c in closed for a in c.kind.inputs]
    peaks = [float(w.peak) for c in closed for w in c.kind.disturbances]
    return Section(network, closed, cells, shape, _stack(closed, cells), wires, np.array(limits), np.array(peaks))


def _shape(closed: Sequence[ClosedUnit]) -> Shape:
    """Consecutive ranges, kind after kind."""

    def ranges(group: str) -> dict[str, tuple[int, int]]:
        found, start = {}, 0
        for unit in closed:
            width = len(getattr(unit.kind, group))
            found[unit.kind.name] = (start, start + width)
            start += width
        return found

    return Shape(ranges("states"), ranges("takes"), ranges("offers"), ranges("inputs"), ranges("disturbances"))


def _stack(closed: Sequence[ClosedUnit], cells: int) -> System:
    """The closed units of one cell as one block-diagonal system; y is the actuator command u = U x + UV v."""
    from scipy.linalg import block_diag

    def diagonal(pick: Any) -> Array:
        blocks = [pick(unit).floats() for unit in closed]
        height, width = sum(b.shape[0] for b in blocks), sum(b.shape[1] for b in blocks)
        return np.asarray(block_diag(*blocks), dtype=float).reshape(height, width)

    A, D, E = diagonal(lambda c: c.A), diagonal(lambda c: c.D), diagonal(lambda c: c.E)
    H, F, Fw = diagonal(lambda c: c.H), diagonal(lambda c: c.F), diagonal(lambda c: c.Fw)
    B, Yx, Yv = diagonal(lambda c: c.kind.B), diagonal(lambda c: c.U), diagonal(lambda c: c.UV)
    Yw = np.zeros((Yx.shape[0], E.shape[1]))
    sizes = (A.shape[0], D.shape[1], E.shape[1], B.shape[1], H.shape[0], Yx.shape[0])
    return System(A, D, E, B, H, F, Fw, Yx, Yv, Yw, cells, sizes)


def open_loop(section: Section) -> System:
    """The same cell with its controllers taken out: ``d`` is then the whole command u (a controller that samples and
    holds).

    The unit's own part of a relative link stays where it physically acts (theory section 1, R1): in the plant through
    D, and in
    the sensors through N. Outputs y = U x + UV v stay the command the controller would compute from fresh values.
    """
    block = section.block
    A, D = block.A - block.B @ block.Yx, block.D - block.B @ block.Yv
    return System(
        A, D, block.E, block.B, block.H, block.F, block.Fw, block.Yx, block.Yv, block.Yw, block.cells, block.sizes
    )


def fold_fresh(block: System, wires: Sequence[Wire]) -> tuple[System, tuple[Wire, ...]]:
    """Solve the links without delay into one system over all cells; return it with the wires that are left.

    With G the matrix of the fresh wires: z = (I - F G)^{-1} (H x + F v + Fw w), inlets receive G z + v. Without fresh
    wires the
    block system comes back unchanged. Raises InputError where the feed-through of the offers closes an algebraic loop.
    """
    fresh = [wire for wire in wires if wire.delay == 0]
    late = tuple(wire for wire in wires if wire.delay != 0)
    if not fresh:
        return block, late
    from scipy import sparse

    cells = block.cells
    eye = sparse.identity(cells, format="csr")

    def big(matrix: Array) -> Any:
        return sparse.kron(sparse.csr_matrix(matrix), eye, format="csr")

    A, D, E, B = big(block.A), big(block.D), big(block.E), big(block.B)
    H, F, Fw = big(block.H), big(block.F), big(block.Fw)
    Yx, Yv, Yw = big(block.Yx), big(block.Yv), big(block.Yw)
    G = wire_matrix(block, fresh)
    if F.nnz:
        loop = _algebraic(F @ G)
        H, F, Fw = loop @ H, loop @ F, loop @ Fw
    DG, YG = D @ G, Yv @ G
    whole = System(
        A + DG @ H,
        D + DG @ F,
        E + DG @ Fw,
        B,
        H,
        F,
        Fw,
        Yx + YG @ H,
        Yv + YG @ F,
        Yw + YG @ Fw,
        cells,
        block.sizes,
        True,
    )
    return whole, late


def wire_matrix(block: System, wires: Sequence[Wire]) -> Any:
    """Sparse matrix (takes*cells, offers*cells) of what the wires deliver without delay; missing neighbours deliver
    nothing.
    """
    from scipy import sparse

    cells, takes, offers = block.cells, block.sizes[1], block.sizes[4]
    G = sparse.csr_matrix((takes * cells, offers * cells))
    for wire in wires:
        shift = sparse.eye(cells, cells, k=wire.at, format="csr")
        place = sparse.csr_matrix(([wire.strength], ([wire.take], [wire.offer])), shape=(takes, offers))
        G = G + sparse.kron(place, shift, format="csr")
    return G


def _algebraic(FG: Any) -> Any:
    """(I - F G)^{-1} as a sparse matrix; InputError if it does not exist."""
    from scipy import sparse

    dense = np.eye(FG.shape[0]) - FG.toarray()
    if np.linalg.cond(dense) > 1e12:
        raise InputError(
            "links without delay close an algebraic loop through offers with feed-through; "
            "give one of these links a delay, or offer a signal that has no feed-through."
        )
    return sparse.csr_matrix(np.linalg.inv(dense))


def transposed(section: Section, rows: tuple[Array, Array, Array]) -> tuple[System, tuple[Wire, ...]]:
    """The time-reversed network: its answer to a pulse at a signal is the kernel from every disturbance to that signal.

    ``rows`` = (Rx, Rv, Rw), the signals s = Rx x + Rv v + Rw w to attack, one row each. Kernel from disturbance c of
    cell j to
    signal r of cell i = output c of cell j of the transposed system after a pulse on its input r of cell i (duality of
    linear systems: transposed matrices, links turned round, same delays).
    """
    block, (Rx, Rv, Rw) = section.block, rows
    n, takes, disturbances, _, offers, _ = block.sizes
    nothing = np.zeros((n, 0))
    system = System(
        block.A.T, block.H.T, Rx.T, nothing, block.D.T, block.F.T, Rv.T, block.E.T, block.Fw.T, Rw.T,
        block.cells, (n, offers, Rx.shape[0], 0, takes, disturbances),
    )  # fmt: skip
    return system, tuple(Wire(w.offer, w.take, -w.at, w.strength, w.delay) for w in section.wires)

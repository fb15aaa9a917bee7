"""The network exactly as declared, its links a little off: theory (21).

P[l, l'] = sum over cells o of the integral |h_o(t)| dt, h_o the response of the whole nominal network from the inlet of
link l' to the outlet, o cells away, that feeds link l. Errors of at most delta on every link are tolerated iff
delta radius(P) < 1, exactly for the class "any error with |e| <= delta, of any behaviour".

Here the endless pattern is followed through its symbol on a grid of angles, which is a ring of cells; the ring is
doubled until it is longer than the response. That is an estimate. A guaranteed bound from below comes from windows:
:func:`window_swing`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from synth.base.errors import InputError, UnstableLoop
from synth.gain.closed import close_network
from synth.gain.window.build import loosely_known
from synth.gain.window.route import Knowledge, window_radius
from synth.network.gains import Gains
from synth.network.model import Link, Network

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
_MOST_CELLS = 4096
_STEP = 0.04  # radians of the fastest mode per time step
_BLOCK = 32
_MOST_STEPS = 400_000


@dataclass(frozen=True, eq=False)
class LinkSwing:
    """How far every link may be off the declared network, in its own unit, at any time and in any way.

    ``common``: the largest delta if all links may be off by it together; ``each``: by class, if only that class may.
    Both are estimates (``guaranteed`` False). ``matrix`` P (links, links) in the order of ``links``; ``ring``: cells
    of the ring used; ``change``: relative change of its last doubling.
    """

    common: float
    each: Mapping[str, float]
    matrix: Floats
    links: tuple[Link, ...]
    ring: int
    change: float
    guaranteed: bool = False


def link_swing(network: Network, gains: Gains, accuracy: float = 1e-4) -> LinkSwing:
    """Estimate by how much the strengths of a pattern may be off, all together and class by class (theory (21)).

    ``accuracy``: relative change of P at which the ring is long enough, > 0. Raises InputError for anything but a
    pattern whose links are all exactly known and fresh, UnstableLoop if the declared network itself is not stable.
    """
    matrix, links, ring, change = swing_matrix(network, gains, accuracy)
    each = {}
    for name in dict.fromkeys(link.name for link in links):
        chosen = [i for i, link in enumerate(links) if link.name == name]
        each[name] = _inverse(matrix[np.ix_(chosen, chosen)])
    return LinkSwing(_inverse(matrix), each, matrix, links, ring, change)


def swing_matrix(network: Network, gains: Gains, accuracy: float = 1e-4) -> tuple[Floats, tuple[Link, ...], int, float]:
    """P of theory (21), the links its rows and columns stand for, the cells of the ring, and the last relative change.

    P[l, l'] is in offered unit of l per taken unit of l'. Raises as :func:`link_swing`.
    """
    network.refuse_beyond("the tolerance of a nominal network", "pattern")
    links = tuple(link for link in network.links if link.sort == "link")
    for link in network.links:
        if loosely_known(link) and link.strength:
            raise InputError(
                f"link {link.name!r} is late, weakens or stands for a tolerance; link tolerances around the nominal "
                "network need links that are exactly known and fresh."
            )
    ring = 32 if network.dimension == 1 else 16
    before: Floats | None = None
    change = math.inf
    while True:
        now = _Ring(network, gains, links, ring).matrix()
        if before is not None:
            change = float(np.max(np.abs(now - before), initial=0.0) / max(np.max(now, initial=0.0), 1e-300))
        if change <= accuracy or (2 * ring) ** network.dimension > _MOST_CELLS:
            return now, links, ring, change
        before, ring = now, 2 * ring


def window_swing(
    network: Network, gains: Gains, R: int, width: float = 1e-3, classes: tuple[str, ...] | None = None
) -> float:
    """A delta that is proven to be tolerated on every link of ``classes`` (None: all), by windows of radius ``R``.

    In the links' own units; 0 if the network itself is not proven with that R. ``width``: relative width of the search.
    """
    names = network.classes() if classes is None else classes

    def proven(delta: float) -> bool:
        knowledge = Knowledge(uncertain=dict.fromkeys(names, Fraction(delta)))
        return window_radius(network, gains, R, 0, 1e-6, knowledge).proven

    if not proven(0.0):
        return 0.0
    low, high = 0.0, 2.0**-20
    while proven(high):
        low, high = high, 4 * high
        if high > 1e12:
            return math.inf
    while high - low > width * high and high > 1e-12:
        middle = (low + high) / 2
        if proven(middle):
            low = middle
        else:
            high = middle
    return low


def _inverse(matrix: Floats) -> float:
    radius = float(np.max(np.abs(np.linalg.eigvals(matrix)), initial=0.0)) if matrix.size else 0.0
    return 1 / radius if radius > 0 else math.inf


class _Ring:
    """The pattern on a ring (a torus) of ``cells`` cells per dimension, one symbol per angle."""

    def __init__(self, network: Network, gains: Gains, links: tuple[Link, ...], cells: int) -> None:
        units = close_network(network, gains)
        for unit in units:
            if any(any(row) for row in unit.F.rows):
                raise InputError(
                    f"kind {unit.kind.name!r} passes on what it takes; link tolerances around the nominal network need "
                    "offers without feed-through."
                )
        self.cells, self.dimension, self.links = cells, network.dimension, links
        place = {unit.kind.name: i for i, unit in enumerate(units)}
        first = np.cumsum([0, *(unit.A.shape[0] for unit in units)])
        n = int(first[-1])
        axes = np.meshgrid(*[2 * np.pi * np.arange(cells) / cells] * network.dimension, indexing="ij")
        angles = np.stack([axis.reshape(-1) for axis in axes], axis=1)
        A = np.zeros((n, n))
        for i, unit in enumerate(units):
            A[first[i] : first[i + 1], first[i] : first[i + 1]] = unit.A.floats()
        symbol = np.broadcast_to(A, (len(angles), n, n)).astype(complex)
        self.inlets, self.outlets = np.zeros((n, len(links))), np.zeros((len(links), n))
        for number, link in enumerate(links):
            to, source = place[link.kind], place[link.source_kind]
            column, row = np.zeros(n), np.zeros(n)
            take, offer = units[to].kind.index("takes", link.take), units[source].kind.index("offers", link.offer)
            column[first[to] : first[to + 1]] = units[to].D.column(take).floats()[:, 0]
            row[first[source] : first[source + 1]] = units[source].H.row(offer).floats()[0]
            wave = np.exp(1j * angles @ np.array(link.at, dtype=float))
            symbol = symbol + float(link.strength) * wave[:, None, None] * np.outer(column, row)
            self.inlets[:, number], self.outlets[number] = column, row
        self.symbol = symbol

    def matrix(self) -> Floats:
        """Sum over cells of the integrals of |h|, (links, links); equal outlets and inlets are worked out once."""
        modes = np.linalg.eigvals(self.symbol)
        slowest, fastest = -float(modes.real.max()), float(np.abs(modes).max())
        if slowest <= 0:
            raise UnstableLoop(
                f"the declared network is not stable: a mode of it has the real part {-slowest:.6g} 1/s, so nothing "
                "about its links is tolerated."
            )
        step = _STEP / fastest
        steps = math.ceil(math.log(1e6) / slowest / step / _BLOCK) * _BLOCK
        if steps > _MOST_STEPS:
            raise InputError(
                f"the declared network decays too slowly for its fastest mode ({steps} time steps would be needed); "
                "damp it more."
            )
        rows, row_of = np.unique(self.outlets, axis=0, return_inverse=True)
        columns, column_of = np.unique(self.inlets, axis=1, return_inverse=True)
        one = np.asarray(scipy.linalg.expm(self.symbol * step))
        reading = [np.broadcast_to(rows, (len(one), *rows.shape)).astype(complex)]
        for _ in range(_BLOCK - 1):
            reading.append(reading[-1] @ one)
        read = np.concatenate(reading, axis=1)  # (angles, block * rows, n)
        leap = np.linalg.matrix_power(one, _BLOCK)
        state = np.broadcast_to(columns, (len(one), *columns.shape)).astype(complex)
        total = np.zeros((len(rows), columns.shape[1]))
        last: Floats | None = None
        for _ in range(steps // _BLOCK):
            values = self._cells(read @ state).reshape(-1, _BLOCK, len(rows), columns.shape[1])
            joined = values if last is None else np.concatenate([last, values], axis=1)
            total += _absolute(joined, step)
            last = values[:, -1:]
            state = leap @ state
        return total[np.ix_(row_of.reshape(-1), column_of.reshape(-1))]

    def _cells(self, values: Complexes) -> Floats:
        """From one value per angle to one per cell."""
        grid = values.reshape(*[self.cells] * self.dimension, *values.shape[1:])
        return np.fft.ifftn(grid, axes=tuple(range(self.dimension))).real.reshape(values.shape)


def _absolute(values: Floats, step: float) -> Floats:
    """Sum over cells of the integral of |h| between samples (axis 1), straight lines between them, kinks included."""
    a, b = values[:, :-1], values[:, 1:]
    size = np.abs(a) + np.abs(b)
    mixed = a * b < 0
    across = np.divide(a * a + b * b, size, out=np.zeros_like(size), where=mixed & (size > 0))
    pieces = np.where(mixed, across, size) * (step / 2)
    return np.asarray(pieces.sum(axis=(0, 1)), dtype=float)

"""Points of the gain operator in floats, for any description and both routes: they guide, the checker decides.

The operator's stations and terms are those the checker reads from the model (synth.proof.checking.wiring). Rows are
convex and homogeneous, so at any point they are touched from below by a matrix; a point with t s = G(s) + 1 is found by
solving with that matrix and taking the next one at what comes out (policy iteration), which ends, or shows that t is
not above the radius.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csc_array, csr_array, eye_array
from scipy.sparse.linalg import MatrixRankWarning, splu

from synth.proof import check

Array = NDArray[np.float64]
Indices = NDArray[np.intp]
_STEPS = 60  # of a policy iteration
_LARGE = 2000  # rows: beyond, the radius is found less finely


class Terms:
    """All terms of a system, or of one block of it on its own, as arrays; a case of a station is one variant of it."""

    def __init__(self, system: check.System, block: int | None = None) -> None:
        """``block``: only its stations, their first cases, and what they hear of each other."""
        stations = system.stations
        kept = [i for i, s in enumerate(stations) if block is None or s.block == block]
        self.stations: Indices = np.array(kept, dtype=np.intp)
        self.system = system
        place = {i: n for n, i in enumerate(kept)}
        self.spec: Indices = np.array([stations[i].spec for i in kept], dtype=np.intp)
        offers = [system.unit(stations[i]).offers for i in kept]
        takes = [len(system.unit(stations[i]).takes) for i in kept]
        self.first: Indices = np.concatenate([[0], np.cumsum(offers)]).astype(np.intp)
        owner: list[int] = []
        ports = [0]
        columns: list[tuple[int, int, float, float]] = []
        groups: dict[tuple[int, int, int], int] = {}
        group: list[int] = []
        for n, i in enumerate(kept):
            for case in stations[i].cases[: None if block is None else 1]:
                owner.append(n)
                for term in case:
                    if term.source in place:
                        outlet = int(self.first[place[term.source]]) + term.offer
                        columns.append((ports[-1] + term.take, outlet, float(term.gain), float(term.delay)))
                        key = (len(owner), term.take, term.group)
                        group.append(-1 if term.group < 0 else groups.setdefault(key, len(groups)))
                ports.append(ports[-1] + takes[n])
        table = np.array(columns, dtype=np.float64).reshape(len(columns), 4)
        self.port, self.outlet = table[:, 0].astype(np.intp), table[:, 1].astype(np.intp)
        self.gain, self.delay = table[:, 2], table[:, 3]
        self.group: Indices = np.array(group, dtype=np.intp)
        self.owner: Indices = np.array(owner, dtype=np.intp)
        self.ports: Indices = np.array(ports, dtype=np.intp)

    def weights(self, alpha: float) -> Array | None:
        """gain e^{alpha delay} of every term; None beyond what doubles hold."""
        if self.delay.size and alpha * float(self.delay.max()) > 300:
            return None
        return np.asarray(self.gain * np.exp(alpha * self.delay))

    def matrix(self, weights: Array, sizes: Array) -> csr_array:
        """What arrives at every port per size of every outlet, of alternatives the one that is largest at ``sizes``."""
        kept = self.group < 0
        grouped = np.flatnonzero(~kept)
        if grouped.size:
            value = weights[grouped] * sizes[self.outlet[grouped]]
            order = np.lexsort((-value, self.group[grouped]))
            first = np.unique(self.group[grouped][order], return_index=True)[1]
            kept[grouped[order][first]] = True
        shape = (int(self.ports[-1]), int(self.first[-1]))
        return csr_array((weights[kept], (self.port[kept], self.outlet[kept])), shape=shape)


class PeakRows:
    """The peak route's rows: an unknown per offer; ``gains`` per specification, offers x takes."""

    def __init__(self, terms: Terms, gains: Sequence[Array], alpha: float = 0.0) -> None:
        """With the gains of A + alpha I, weights e^{alpha delay} on the links."""
        self.terms, self.size = terms, int(terms.first[-1])
        self.weights = terms.weights(alpha)
        rows, columns, values, row_of = [], [], [], []
        count = 0
        for n, owner in enumerate(terms.owner.tolist()):
            p = gains[terms.spec[owner]]
            k, take = np.indices(p.shape).reshape(2, -1)
            rows.append(count + k)
            columns.append(terms.ports[n] + take)
            values.append(p.reshape(-1))
            row_of.append(terms.first[owner] + np.arange(p.shape[0]))
            count += p.shape[0]
        empty = [np.zeros(0)]
        entries = (
            np.concatenate(values or empty),
            (
                np.concatenate(rows or empty).astype(np.intp),
                np.concatenate(columns or empty).astype(np.intp),
            ),
        )
        self.gains = csr_array(entries, shape=(count, int(terms.ports[-1])))
        self.row_of: Indices = np.concatenate(row_of or empty).astype(np.intp)

    def touch(self, s: Array) -> csr_array:
        """The matrix M with M s = G(s) and M <= G everywhere."""
        assert self.weights is not None
        every = (self.gains @ self.terms.matrix(self.weights, s)).tocsr()
        return _largest(every, every @ s, self.row_of, self.size)


class StorageRows:
    """The storage route's rows: an unknown per station; tau, a and zeta (of offers) per specification."""

    def __init__(self, terms: Terms, tau: Sequence[Array], a: Sequence[float], zeta: Sequence[Array]) -> None:
        """Root-sum-square rows (6)."""
        self.terms, self.size, self.row_of = terms, len(terms.stations), terms.owner
        zetas = [zeta[spec] for spec in terms.spec.tolist()]
        flat = np.concatenate([np.zeros(0), *zetas])
        station = np.repeat(np.arange(self.size), np.diff(terms.first))
        self.out = csr_array((flat, (np.arange(flat.size), station)), shape=(flat.size, self.size))
        owners = terms.spec[terms.owner].tolist()
        self.tau = np.concatenate([np.zeros(0), *(tau[spec] / (2 * a[spec]) for spec in owners)])
        self.variant = np.repeat(np.arange(len(owners)), np.diff(terms.ports))

    def touch(self, s: Array) -> csr_array:
        """The matrix M with M s = G(s) and M <= G everywhere: the slope of every row at s."""
        terms = self.terms
        port = terms.matrix(terms.gain, self.out @ s)
        v = port @ (self.out @ s)
        row = np.sqrt(np.bincount(self.variant, weights=self.tau * v * v, minlength=len(terms.owner)))
        slope = self.tau * v / np.maximum(row[self.variant], 1e-300)
        fold = csr_array((slope, (self.variant, np.arange(v.size))), shape=(len(terms.owner), v.size))
        every = (fold @ port @ self.out).tocsr()
        return _largest(every, row, self.row_of, self.size)


Rows = PeakRows | StorageRows


def _largest(every: csr_array, value: Array, row_of: Indices, size: int) -> csr_array:
    """Of the variants of every row the one with the largest value."""
    if len(row_of) == size:
        return every
    order = np.lexsort((-value, row_of))
    first = np.unique(row_of[order], return_index=True)[1]
    return every[order[first]]


def point_at(rows: Rows, t: float) -> Array | None:
    """s > 0 with t s = G(s) + 1, which exists exactly if t is above the radius; None if it does not."""
    s = np.ones(rows.size)
    for _ in range(_STEPS):
        found = _solve(rows.touch(s), t, np.ones(rows.size))
        if found is None:
            return None
        done = bool(np.all(np.abs(found - s) <= 1e-11 * found))
        s = found
        if done:
            break
    # Far down a chain that amplifies, the one is lost in the rounding of t s.
    return s if bool(np.all(rows.touch(s) @ s <= t * (1 + 1e-9) * s)) else None


def _solve(matrix: csr_array, t: float, right: Array) -> Array | None:
    """(t I - M)^-1 right where that is positive and finite; None where it is not: then t is not above the radius."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", MatrixRankWarning)
        try:
            # Pivots on the diagonal only: nothing but these is then subtracted, so tiny entries come out right too.
            factors = splu(
                csc_array(t * eye_array(matrix.shape[0]) - matrix), permc_spec="MMD_AT_PLUS_A",
                diag_pivot_thresh=0.0, options={"SymmetricMode": True},
            )  # fmt: skip
            found = factors.solve(right)
        except RuntimeError:
            return None
    good = bool(np.all(np.isfinite(found)) and np.all(found > 0) and float(found.max()) < 1e200)
    return np.asarray(found, dtype=np.float64) if good else None


def radius_and_point(rows: Rows, fine: float | None = None) -> tuple[float, Array]:
    """(upper bound of the radius in floats, a point that has about this quotient everywhere); ``fine``: how closely."""
    if not rows.size or (isinstance(rows, PeakRows) and rows.weights is None):
        return (0.0 if not rows.size else math.inf), np.ones(rows.size)
    s = np.ones(rows.size)
    scale = float((rows.touch(s) @ s).max())
    if not math.isfinite(scale):
        return math.inf, s
    if scale == 0:
        return 0.0, s
    fine = fine or (1e-7 if rows.size < _LARGE else 1e-5)
    low, high = 0.0, scale * (1 + 1e-9)
    while high - low > max(fine * high, 1e-9 * scale):
        middle = (low + high) / 2
        found = point_at(rows, middle)
        if found is None:
            low = middle
        else:
            high = min(middle, float((rows.touch(found) @ found / found).max()))
    level = max(high * (1 + fine), 1e-6 * scale)
    found = point_at(rows, level)
    s = s if found is None else found
    return float((rows.touch(s) @ s / s).max()), s / s.max()


def low_point(rows: Rows) -> tuple[float, Array]:
    """(quotient, low): a point, zero in places, with a large smallest quotient G(low)/low where it is not zero."""
    best = 0.0, np.zeros(rows.size)
    if not rows.size or (isinstance(rows, PeakRows) and rows.weights is None):
        return best
    radius, s = radius_and_point(rows)
    matrix = rows.touch(s)
    vector = np.ones(rows.size)
    for _ in range(12):
        found = _solve(matrix, radius * (1 + 1e-6) + 1e-300, vector)
        if found is None:
            break
        vector = found / found.max()
    for least in (0.0, 1e-12, 1e-9, 1e-6, 1e-3, 0.1):
        low = np.where(vector > least, vector, 0.0)
        image = rows.touch(np.maximum(low, 1e-300)) @ low
        quotient = float((image[low > 0] / low[low > 0]).min()) if low.any() else 0.0
        if quotient > best[0]:
            best = quotient, low
    return best

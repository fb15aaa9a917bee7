"""The rightmost mode of many members: sparse matrices of the whole closed loop, links without delay.

The largest real parts are found by Arnoldi's method (Lehoucq, Sorensen, Yang, ARPACK Users' Guide, 1998). It is a
search: an eigenvalue it did not find is not excluded, so nothing here is called certified. In long chains eigenvalues
alone mislead; the guaranteed gain stands beside them.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any, cast

import numpy as np
from scipy import sparse

from synth.base.errors import InputError
from synth.gain.closed import close_plan
from synth.gain.descriptions import wiring_of
from synth.gain.plan import plan_of_units, starts
from synth.margin.roots import Root
from synth.network.gains import Gains
from synth.network.model import Network

_DENSE = 400


@dataclass(frozen=True, eq=False)
class LargeLoop:
    """x' = A x of all members, A sparse (1/s)."""

    A: Any


@dataclass(frozen=True, eq=False)
class LargeFamily:
    """A(kappa) = A0 + kappa A1 of all members, links fresh. Law: ``at(1)`` is the closed loop as declared."""

    A0: Any
    A1: Any
    delayed: bool = False

    def at(self, kappa: float) -> LargeLoop:
        """The closed loop at a factor >= 0."""
        return LargeLoop((self.A0 + kappa * self.A1).tocsr())


def large_family(
    network: Network, gains: Gains, classes: tuple[str, ...] | None = None, own_parts: bool = True
) -> LargeFamily:
    """The sparse closed loop of members when kappa multiplies the links of ``classes``; delays are taken as zero.

    Raises InputError where an offered signal has feed-through (dense matrices are then needed).
    """
    none = _closed_loop(network.scaled(Fraction(0), classes, own_parts), gains)
    return LargeFamily(none, (_closed_loop(network, gains) - none).tocsr())


def _closed_loop(network: Network, gains: Gains) -> Any:
    wiring = wiring_of(network)
    plan = plan_of_units(wiring)
    closed = close_plan(plan, gains)
    if any(any(value for row in unit.F.rows for value in row) for unit in closed):
        raise InputError("the modes of so many members are computed for offers without feed-through only.")
    A, D, H = ([getattr(unit, name).floats() for unit in closed] for name in ("A", "D", "H"))
    spec = plan.unit_spec
    first = starts(np.array([a.shape[0] for a in A], dtype=np.intp)[spec])
    rows, columns, values = [], [], []

    def put(i: np.ndarray, j: np.ndarray, block: np.ndarray) -> None:
        for r, c in zip(*np.nonzero(block), strict=True):
            rows.append(first[i] + r)
            columns.append(first[j] + c)
            values.append(np.full(i.size, block[r, c]))

    for k, a in enumerate(A):
        units = np.flatnonzero(spec == k)
        put(units, units, a)
    there = (wiring.source >= 0) & np.array([link.strength != 0 for link in wiring.links], dtype=bool)[wiring.link]
    to, source, link = wiring.to[there], wiring.source[there], wiring.link[there]
    keys = np.stack([spec[to], spec[source], link], axis=1)
    kinds = {kind.name: kind for kind in wiring.kinds}
    for key in np.unique(keys, axis=0):
        one = wiring.links[key[2]]
        take = kinds[one.kind].index("takes", one.take)
        offer = kinds[one.source_kind].index("offers", one.offer)
        mine = np.all(keys == key, axis=1)
        put(to[mine], source[mine], float(one.strength) * np.outer(D[key[0]][:, take], H[key[1]][offer]))
    size = int(first[-1])
    parts = [np.concatenate(p) if p else np.zeros(0) for p in (values, rows, columns)]
    return sparse.coo_array((parts[0], (parts[1].astype(int), parts[2].astype(int))), shape=(size, size)).tocsr()


def rightmost_of_large(loop: LargeLoop) -> Root | None:
    """The eigenvalue with the largest real part that was found, with its residual; None if none converged."""
    size = loop.A.shape[0]
    if size <= _DENSE:
        dense = np.linalg.eigvals(loop.A.toarray())
        return Root(complex(dense[np.argmax(dense.real)]), 0.0, 0.0) if size else None
    from scipy.sparse.linalg import ArpackNoConvergence, eigs

    start = np.random.default_rng(1).standard_normal(size)
    try:
        values, vectors = cast(Any, eigs)(loop.A, k=6, which="LR", ncv=min(size - 1, 80), v0=start, maxiter=3000)
    except ArpackNoConvergence as found:
        values, vectors = np.asarray(found.eigenvalues, dtype=complex), np.asarray(found.eigenvectors, dtype=complex)
    if not len(values):
        return None
    k = int(np.argmax(values.real))
    x = vectors[:, k]
    return Root(complex(values[k]), 0.0, float(np.linalg.norm(loop.A @ x - values[k] * x) / np.linalg.norm(x)))

"""What is certain about gains of positive units: exact gains that keep every unit positive, and static gains enclosed.

For A_c Metzler, a vector e > 0 with A_c e < 0 proves that A_c is Hurwitz, and then (-A_c)^{-1} >= 0. So each vector X
with A_c X + |D_l| <= 0 lies above (-A_c)^{-1} |D_l| and each with A_c X + |D_l| >= 0 below it: an approximate solution,
moved up and down by a little of e, encloses the peak gains |H| (-A_c)^{-1} |D| (theory: the positive case of (5)) by
two residuals. These vectors are the certificate. Metzler is decided in rationals, residuals in doubles with an outward
bound on every rounding. In the same way one vector xi with (A_c + D G H) xi + |E| w <= 0 over the *network* bounds
every state for ever, from rest.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.gain.closed import ClosedUnit
from synth.gain.peak import PeakGain, relative_width
from synth.gain.rounding import up
from synth.local.positive.web import Array, Entry, Group, Index, Web, interval
from synth.network.model import Kind

_U = 2.0**-52
_TINY = 1e-290  # covers products that vanish

Kappa = tuple[tuple[Fraction, ...], ...]  # actuators x states


@dataclass(frozen=True)
class Statics:
    """Per kind, over its groups: lower and upper peak gains (groups, offers, takes); ``ok`` where all was proven."""

    lower: Array
    upper: Array
    ok: NDArray[np.bool_]


def exact_kappa(kind: Kind, group: Group, entries: tuple[Entry, ...], kappa: Array) -> Kappa | None:
    """The nearest kappa that keeps the unit Metzler within all bounds, exactly; None if clipping finds none.

    Ends of an interval are kept as exact rationals, values inside are rounded to nine significant digits.
    """
    n, m = len(kind.states), len(kind.inputs)
    found = [[Fraction(0)] * n for _ in range(m)]
    for q in range(n):
        actuators = dict.fromkeys(e.actuator for e in entries if e.state == q)
        for u in actuators:
            found[u][q] = Fraction(float(kappa[u, q]))
        for u in actuators:
            others = [
                group.A[r][q] + sum((kind.B[r, v] * found[v][q] for v in actuators if v != u), Fraction(0))
                for r in range(n)
            ]
            low, high = interval(kind, others, [e for e in entries if e.state == q and e.actuator == u], q)
            found[u][q] = _clipped(float(kappa[u, q]), low, high)
        for r in range(n):
            if r != q and group.A[r][q] + sum((kind.B[r, u] * found[u][q] for u in actuators), Fraction(0)) < 0:
                return None
    return tuple(tuple(row) for row in found)


def _clipped(value: float, low: Fraction | None, high: Fraction | None) -> Fraction:
    near = 1e-9 * abs(value)
    if low is not None and value <= float(low) + near:
        return low
    if high is not None and value >= float(high) - near:
        return high
    return Fraction(f"{value:.9g}")


def closed_floats(kind: Kind, groups: list[Group], kappas: list[Kappa]) -> Array:
    """A + B kappa of every group, worked out exactly and rounded to the nearest doubles: (groups, n, n)."""
    n = len(kind.states)
    terms = [[(u, kind.B[r, u]) for u in range(len(kind.inputs)) if kind.B[r, u]] for r in range(n)]
    table = [
        [
            [float(sum((b * kappa[u][q] for u, b in terms[r]), group.A[r][q])) for q in range(n)]
            for r in range(n)
        ]
        for group, kappa in zip(groups, kappas, strict=True)
    ]  # fmt: skip
    return np.array(table, dtype=float).reshape(len(groups), n, n)


def gain_matrix(kind: Kind, entries: tuple[Entry, ...], kappa: Kappa) -> ExactMatrix:
    """K (inputs x sensors) with sum over sensors of K factor = kappa; shared among sensors of one state by bound."""
    rows = [[Fraction(0)] * len(kind.sensors) for _ in kind.inputs]
    for e in entries:
        same = [o for o in entries if (o.actuator, o.state) == (e.actuator, e.state)]
        if len(same) == 1:
            rows[e.actuator][e.sensor] = kappa[e.actuator][e.state] / e.factor
        elif all(o.bound is not None for o in same):
            reach = sum((o.bound * abs(o.factor) for o in same if o.bound is not None), Fraction(0))
            share = (e.bound or Fraction(0)) / reach
            rows[e.actuator][e.sensor] = kappa[e.actuator][e.state] * (share if e.factor > 0 else -share)
    return ExactMatrix.of(rows, (len(kind.inputs), len(kind.sensors)))


def statics(A: Array, D: Array, H: Array) -> Statics:
    """Peak gains |H| (-A)^{-1} |D| for every Metzler A (groups, n, n), D (groups or 1, n, takes), H (offers, n).

    The entries of A, D and H are the doubles nearest to the numbers meant; the enclosure covers the difference. ``ok``
    is False where A is not shown to be Hurwitz.
    """
    groups, n, _ = A.shape
    size, D, H = np.abs(A), np.broadcast_to(np.abs(D), (groups, n, D.shape[-1])), np.abs(H)
    gamma = (2 * n + 40) * _U
    with np.errstate(all="ignore"):
        try:
            e = np.linalg.solve(A, -np.ones((groups, n, 1)))
            X = np.linalg.solve(A, -D)
        except np.linalg.LinAlgError:
            blank = np.zeros((groups, H.shape[0], D.shape[2]))
            return Statics(blank, np.full_like(blank, np.inf), np.zeros(groups, dtype=bool))
        sink = -(A @ e) - gamma * (size @ np.abs(e)) - _TINY
        ok = np.all(np.isfinite(e) & (e > 0) & (sink > 0), axis=(1, 2))
        slop = gamma * (size @ np.abs(X) + D) + _TINY
        excess = np.max((np.abs(A @ X + D) + 2 * slop) / sink, axis=1, keepdims=True)  # (groups, 1, takes)
        above, below = X + 1.01 * excess * e, X - 1.01 * excess * e
        rounding = gamma * (size @ np.abs(above) + D) + _TINY
        ok &= np.all(A @ above + D + rounding <= 0, axis=(1, 2)) & np.all(A @ below + D - rounding >= 0, axis=(1, 2))
        upper = (H @ above) * (1 + gamma) + _TINY
        lower = np.maximum((H @ np.maximum(below, 0.0)) * (1 - gamma) - _TINY, 0.0)
    # A take that reaches no outlet has the gain zero, not a tiny number.
    silent = H @ np.linalg.matrix_power(((A != 0) | np.eye(n, dtype=bool)).astype(float), max(n, 1)) @ D == 0
    upper = np.where(silent, 0.0, upper)
    return Statics(np.where(silent, 0.0, lower), upper, ok)


def static_gains(unit: ClosedUnit) -> PeakGain | None:
    """Peak gains (offers, takes) of one positive closed unit from its static response; None if it is not positive.

    For a positive unit the peak gain is the gain at rest, H (-A)^{-1} D (Rantzer and Valcher, CDC 2018, give the same
    for all induced norms). Needs A Metzler, exactly, and one sign in every column of D and row of H; feed-through of
    that sign is added. Guaranteed ends.
    """
    n = unit.A.shape[0]
    metzler = all(unit.A[r, q] >= 0 for r in range(n) for q in range(n) if r != q)
    lines = (*unit.D.T.rows, *unit.H.rows)
    if not metzler or any(min(v, default=0) < 0 < max(v, default=0) for v in lines) or any(map(any, unit.F.rows)):
        return None
    found = statics(unit.A.floats()[None], unit.D.floats()[None], unit.H.floats())
    if not found.ok[0]:
        return None
    return PeakGain(found.lower[0], found.upper[0], relative_width(found.lower[0], found.upper[0]))


def network_bound(web: Web, A: list[Array], kappa_units: list[Index]) -> tuple[Array, bool]:
    """xi (all states) with (A_c + |D| G |H|) xi + |E| w <= 0, proven; False where no such vector was found.

    ``A[k]`` holds the closed matrices of the units of kind k, ``kappa_units[k]`` their numbers.
    """
    from scipy.sparse.linalg import splu

    matrix, forced = network_matrix(web, A, kappa_units, 1.0)
    if not matrix.shape[0]:
        return np.zeros(0), True
    size = abs(matrix)
    terms = int(np.diff(size.tocsr().indptr).max(initial=0))
    gamma = (2 * terms + 60) * _U
    try:
        solver = splu(matrix.tocsc())
    except RuntimeError:
        return np.full(matrix.shape[0], np.inf), False
    xi = solver.solve(-forced)
    # What is added counts in the terms of each row, so that it outweighs their rounding; rows at rest get a little.
    scale = size @ np.abs(xi) + forced
    lift = solver.solve(-np.maximum(scale, 1e-12 * max(float(scale.max(initial=0.0)), 1e-12)))
    for slack in (1e-12, 1e-10, 1e-8, 1e-6):
        trial = xi + slack * lift
        left = matrix @ trial + forced + gamma * (size @ np.abs(trial) + forced) + _TINY
        if np.all(np.isfinite(trial)) and np.all(trial > 0) and np.all(left <= 0):
            return trial, True
    return np.full(matrix.shape[0], np.inf), False


def network_matrix(web: Web, A: list[Array], units: list[Index], weaker: float) -> tuple[Any, Array]:
    """Sparse A_c + |D| G |H| / ``weaker`` over all states of all units, and |E| w."""
    from scipy.sparse import coo_array

    starts = web.states_at
    rows, columns, values, forced = [], [], [], np.zeros(int(starts[-1]))
    for kind, block, mine in zip(web.network.kinds, A, units, strict=True):
        n = len(kind.states)
        if not len(mine) or not n:
            continue
        first = starts[mine]
        r, q = np.meshgrid(np.arange(n), np.arange(n), indexing="ij")
        rows.append((first[:, None, None] + r).ravel())
        columns.append((first[:, None, None] + q).ravel())
        values.append(block.ravel())
        push = [
            up(sum((abs(v) * w.peak for v, w in zip(row, kind.disturbances, strict=True)), Fraction(0)))
            for row in kind.E.rows
        ]
        forced[(first[:, None] + np.arange(n)).ravel()] = np.tile(push, len(mine))
    part = coupling(web, weaker)
    rows.append(part[0])
    columns.append(part[1])
    values.append(part[2])
    shape = (len(forced), len(forced))
    table = coo_array((np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=shape)
    return table.tocsr(), forced


def coupling(web: Web, weaker: float) -> tuple[Index, Index, Array]:
    """Row, column and value of every term |D_l| |strength| |H_k| / ``weaker`` between states of units."""
    starts, kinds = web.states_at, web.network.kinds
    to, take, source, offer, link = web.terms.T
    pair = np.stack([web.kind_of[to], take, web.kind_of[source], offer], axis=1)
    sorts, which = np.unique(pair, axis=0, return_inverse=True)
    rows, columns, values = [np.zeros(0, np.intp)], [np.zeros(0, np.intp)], [np.zeros(0)]
    for k, (a, inlet, b, o) in enumerate(sorts.tolist()):
        mine = np.flatnonzero(which.reshape(-1) == k)
        for r, d in enumerate(kinds[a].D.column(inlet).rows):
            for q, h in enumerate(kinds[b].H.rows[o]):
                if d[0] and h:
                    rows.append(starts[to[mine]] + r)
                    columns.append(starts[source[mine]] + q)
                    values.append(float(abs(d[0] * h)) * web.strengths[link[mine]] / weaker)
    return np.concatenate(rows), np.concatenate(columns), np.concatenate(values)

"""The linear program of positive networks (theory (17)): all units, all limits, one sparse problem for HiGHS.

With Y_e = K_e factor_e xi_q the closed network at links 1/weaker times as strong obeys, state by state,

    A xi + B Y 1 + |D| G |H| xi / weaker + |E| w <= -eps        A_rq xi_q + (B Y)_rq >= 0  (r != q)
    |Y_e| <= bound_e xi_q       sum_e |Y_e| <= limit of the actuator       xi <= band, |H| xi <= band

(Ait Rami & Tadeo, IEEE TCAS-II 54(2), 2007; Rantzer, European Journal of Control 24, 2015). It is exact among gains
that keep every unit positive; the row of an actuator's limit is exact where all gains of that actuator have one sign
and otherwise asks for more than is needed. The sizes xi are counted in those of a reference solution and each row in
its largest term, so that the solver meets numbers near one whatever the units.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from synth.local.positive.check import network_matrix
from synth.local.positive.web import Array, Entry, Index, Web
from synth.network.model import Kind, Network

EPS = 1e-7  # strictness of the rows of states, relative to their diagonal terms
TIGHT = 1e-6  # limits are narrowed by this much, so that rounding the answer keeps them


@dataclass
class _Rows:
    """Rows ``left x <= right`` collected as triplets."""

    rows: list[Index] = field(default_factory=list)
    columns: list[Index] = field(default_factory=list)
    values: list[Array] = field(default_factory=list)
    right: list[Array] = field(default_factory=list)
    count: int = 0

    def new(self, right: Array) -> Index:
        """Numbers of new rows with the given right sides."""
        self.right.append(right)
        self.count += len(right)
        return np.arange(self.count - len(right), self.count)

    def put(self, rows: Index, columns: Index, values: Array) -> None:
        """Entries of the left side; equal places add up."""
        keep = values != 0
        self.rows.append(rows[keep])
        self.columns.append(columns[keep])
        self.values.append(values[keep])


@dataclass(frozen=True)
class Solved:
    """kappa per kind (units of the kind, actuators, states) and xi (all states), as the solver left them."""

    kappa: list[Array]
    xi: Array


def solve_program(
    web: Web, A: list[Array], units: list[Index], reference: Array, weaker: float, method: str = "highs-ipm"
) -> Solved | None:
    """The smallest xi (counted in ``reference`` > 0) that keeps all rows; None if HiGHS reports none.

    ``A[k]`` open matrices of the units of kind k (units, n, n), ``units[k]`` their numbers; links count as 1/weaker
    times as strong. HiGHS is deterministic.
    """
    from scipy.optimize import linprog
    from scipy.sparse import coo_array

    matrix, forced = network_matrix(web, A, units, weaker)
    states = len(forced)
    starts = [
        states + 2 * s for s in np.cumsum([0, *(len(m) * len(e) for m, e in zip(units, web.entries, strict=True))])
    ]
    total = int(starts[-1])
    scaled = matrix.tocoo()
    diagonal = np.maximum(abs(matrix).max(axis=1).toarray().ravel(), 1e-300) * reference
    table = _Rows()
    table.new(-(forced / diagonal) - EPS)
    table.put(scaled.row, scaled.col, scaled.data * reference[scaled.col] / diagonal[scaled.row])
    top = np.full(total, np.inf)
    for kind, entries, mine, block, start in zip(web.network.kinds, web.entries, units, A, starts, strict=False):
        if len(mine):
            _unit_rows(table, web, kind, entries, mine, block, int(start), reference, diagonal, top)
    left = coo_array(
        (np.concatenate(table.values), (np.concatenate(table.rows), np.concatenate(table.columns))),
        shape=(table.count, total),
    ).tocsr()
    cost = np.concatenate((np.full(states, 1.0), np.full(total - states, 1e-9)))
    solve: Any = linprog  # the stubs do not know that A_ub may be sparse
    answer = solve(
        cost, A_ub=left, b_ub=np.concatenate(table.right), method=method,
        bounds=np.stack([np.zeros(total), top], axis=1),
    )  # fmt: skip
    if answer.status != 0 or not np.all(answer.x[:states] > 0):
        return None
    x = np.asarray(answer.x)
    kappa = []
    for kind, entries, mine, start in zip(web.network.kinds, web.entries, units, starts, strict=False):
        n, count = len(kind.states), len(entries)
        found = np.zeros((len(mine), len(kind.inputs), n))
        y = x[int(start) : int(start) + 2 * len(mine) * count].reshape(2, len(mine), count)
        for k, e in enumerate(entries):
            size = x[web.states_at[mine] + e.state]
            found[:, e.actuator, e.state] += (y[0, :, k] - y[1, :, k]) * _unit_of(e) / size
        kappa.append(found)
    return Solved(kappa, x[:states] * reference)


def _unit_of(e: Entry) -> float:
    """Y of an entry is counted in its bound times the size of the state."""
    return 1.0 if e.bound is None else float(e.bound * abs(e.factor))


def _unit_rows(
    table: _Rows, web: Web, kind: Kind, entries: tuple[Entry, ...], mine: Index, block: Array, start: int,
    reference: Array, diagonal: Array, top: Array,
) -> None:  # fmt: skip
    """Everything that concerns one kind: Y in the rows of states, Metzler rows, bounds, limits, bands."""
    n, count, groups = len(kind.states), len(entries), len(mine)
    first = web.states_at[mine]
    plus = [start + np.arange(groups) * count + k for k in range(count)]
    minus = [column + groups * count for column in plus]
    for k, e in enumerate(entries):
        size = reference[first + e.state] * _unit_of(e)
        for r in range(n):
            push = float(kind.B[r, e.actuator])
            for columns, sign in ((plus[k], 1.0), (minus[k], -1.0)):
                table.put(first + r, columns, sign * push * size / diagonal[first + r])
        if e.bound is not None:
            rows = table.new(np.zeros(groups))
            for columns in (plus[k], minus[k]):
                table.put(rows, columns, np.ones(groups))
            table.put(rows, first + e.state, np.full(groups, -1.0))
    _metzler_rows(table, kind, entries, block, first, plus, minus)
    for u, actuator in enumerate(kind.inputs):
        used = [k for k, e in enumerate(entries) if e.actuator == u]
        if actuator.limit is None or not used:
            continue
        rows = table.new(np.full(groups, 1.0 - TIGHT))
        for k in used:
            size = reference[first + entries[k].state] * _unit_of(entries[k]) / float(actuator.limit)
            table.put(rows, plus[k], size)
            table.put(rows, minus[k], size)
    for q, state in enumerate(kind.states):
        if state.band is not None:
            top[first + q] = float(state.band) * (1 - TIGHT) / reference[first + q]
    for o, offer in enumerate(kind.offers):
        if offer.band is not None:
            rows = table.new(np.full(groups, 1.0 - TIGHT))
            for q in range(n):
                share = float(abs(kind.H[o, q]) / offer.band) if offer.band else np.inf
                table.put(rows, first + q, share * reference[first + q])


def _metzler_rows(
    table: _Rows, kind: Kind, entries: tuple[Entry, ...], block: Array, first: Index, plus: list[Index],
    minus: list[Index],
) -> None:  # fmt: skip
    """A_rq xi_q + (B Y)_rq >= 0 where a gain can change it, divided by its largest term."""
    n, groups = len(kind.states), len(first)
    for r in range(n):
        for q in range(n):
            mine = [(k, float(kind.B[r, e.actuator]) * _unit_of(e)) for k, e in enumerate(entries) if e.state == q]
            mine = [(k, push) for k, push in mine if push]
            if r == q or not mine:
                continue
            scale = np.maximum(np.abs(block[:, r, q]), max(abs(push) for _, push in mine))
            rows = table.new(np.zeros(groups))
            table.put(rows, first + q, -block[:, r, q] / scale)
            for k, push in mine:
                table.put(rows, plus[k], -push / scale)
                table.put(rows, minus[k], push / scale)


def limited(network: Network) -> bool:
    """Whether any actuator limit or band is declared, so that sizes and not only gains decide."""
    return any(a.limit is not None for kind in network.kinds for a in kind.inputs) or any(
        s.band is not None for kind in network.kinds for s in (*kind.states, *kind.offers)
    )

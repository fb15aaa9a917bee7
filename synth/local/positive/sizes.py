"""The same program as ``positive_lp`` taken apart by the design operator: local programs in closed form, then Newton.

With one offer per unit, F_i(v) is the smallest size |H| xi unit i can have when v arrives. F is monotone and convex in
what the neighbours send (it is the value of a linear program), so the least sizes z = F(z) are the limit of Newton's
steps from zero, which rise and never pass them; a step that turns negative, or a local program without an answer at
sizes below the least ones, proves that there are none. The slope of F_i is the costate p of the local program, so a
step is one sweep over the units and one sparse solve. Ours; the Newton method for monotone convex maps is Ortega and
Rheinboldt, Iterative Solution of Nonlinear Equations in Several Variables, 1970, 13.3.

The local program has one row that joins the columns, the actuator's limit. With the price mu on it, each column is
chosen alone (``positive_policy``): kappa_q minimises (p'b) kappa + mu |kappa|. For fixed columns the priced value is a
line in mu, so mu is found by intersecting the lines of the best policy that asks too much and of the best that does
not; the answer is a mix of the two.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.local.positive.policy import best_columns, ends
from synth.local.positive.program import TIGHT, Solved
from synth.local.positive.web import Array, Entry, Index, Web
from synth.network.model import Kind

_STEPS = 60
_POLICIES = 60


def separable(web: Web) -> bool:
    """Whether the fast way is open: one offer and at most one acting actuator per unit, bands on offers only."""
    return all(
        len(kind.offers) == 1
        and len({e.actuator for e in entries}) <= 1
        and all(state.band is None for state in kind.states)
        for kind, entries in zip(web.network.kinds, web.entries, strict=True)
    )


class _Local:
    """The local programs of all units of one kind."""

    def __init__(self, kind: Kind, entries: tuple[Entry, ...], A: Array) -> None:
        """Find the ends of every column and policies that are Hurwitz."""
        n = len(kind.states)
        self.A = A
        self.u = next((e.actuator for e in entries), None)
        self.b = np.zeros(n) if self.u is None else kind.B.floats()[:, self.u]
        reach = np.zeros(n)
        for e in entries:
            reach[e.state] += float((e.bound or 0) * abs(e.factor))
        self.low, self.high = ends(A, self.b, reach)
        self.rest = np.clip(np.zeros_like(self.low), self.low, self.high)
        h = np.abs(kind.H.floats()).reshape(1, n)
        self.h = h + 1e-9 * max(float(h.max()), 1e-300)
        self.start, self.good = best_columns(A, self.b, self.low, self.high, np.tile(self.h, (len(A), 1)))
        limit = None if self.u is None else kind.inputs[self.u].limit
        self.limit = np.inf if limit is None else float(limit) * (1 - TIGHT)

    def priced(self, rows: Index, kappa: Array, price: Array, cost: Array) -> tuple[Array, Array]:
        """Best columns for ``cost`` h + price |kappa|, from Hurwitz columns; their costate. Policy iteration."""
        p = np.zeros_like(kappa)
        A, low, high, rest = self.A[rows], self.low[rows], self.high[rows], self.rest[rows]
        before = np.full(len(rows), np.inf)
        for _ in range(_POLICIES):
            closed = A + self.b[None, :, None] * kappa[:, None, :]
            right = -(cost + price[:, None] * np.abs(kappa))[:, :, None]
            p = np.asarray(np.linalg.solve(np.swapaxes(closed, 1, 2), right)[:, :, 0], dtype=float)
            score = p @ self.b
            choices = np.stack([kappa, low, rest, high])
            values = score[None, :, None] * choices + price[None, :, None] * np.abs(choices)
            values[0] -= 1e-12 * (np.abs(values[0]) + 1e-300)  # what is chosen stays unless another is better
            best = np.take_along_axis(choices, values.argmin(axis=0)[None], axis=0)[0]
            total = p.sum(axis=1)
            moving = (best != kappa).any(axis=1) & (total < before * (1 - 1e-13))
            if not moving.any():
                break
            kappa = np.where(moving[:, None], best, kappa)
            before = total
        return kappa, p

    def sizes(self, rows: Index, kappa: Array, arriving: Array) -> Array:
        """xi with A_c xi + arriving = 0."""
        closed = self.A[rows] + self.b[None, :, None] * kappa[:, None, :]
        return np.asarray(np.linalg.solve(closed, -arriving[:, :, None])[:, :, 0])

    def solve(self, arriving: Array) -> tuple[Array, Array, Array, Array] | None:
        """(size, costate, kappa, xi) of every unit when ``arriving`` (units, n) pushes its states; None: infeasible."""
        every = np.arange(len(self.A))
        kappa = self.start
        closed = np.swapaxes(self.A + self.b[None, :, None] * kappa[:, None, :], 1, 2)
        right = -np.broadcast_to(self.h, kappa.shape)[:, :, None]
        p = np.asarray(np.linalg.solve(closed, right)[:, :, 0], dtype=float)
        xi = self.sizes(every, kappa, arriving)
        value = (p * arriving).sum(axis=1)
        over = np.flatnonzero((np.abs(kappa) * xi).sum(axis=1) > self.limit)
        if len(over):
            found = self._priced_down(over, arriving[over], xi[over])
            if found is None:
                return None
            kappa, p, xi, value = kappa.copy(), p.copy(), xi.copy(), value.copy()
            value[over], p[over], kappa[over], xi[over] = found
        return value, p, kappa, xi

    def _priced_down(self, rows: Index, arriving: Array, xi: Array) -> tuple[Array, Array, Array, Array] | None:
        """The units whose limit binds: the price at which effort meets the limit, and the mix of two policies there."""
        h = np.broadcast_to(self.h, (len(rows), self.A.shape[1]))
        much = self.start[rows]
        # Least effort: only |kappa| counts (and a trace of h, so that the choice is definite).
        little, _ = self.priced(rows, much, np.ones(len(rows)), 1e-9 * h)
        xi2 = self.sizes(rows, little, arriving)
        g1, g2 = ((np.abs(k) * x).sum(axis=1) - self.limit for k, x in ((much, xi), (little, xi2)))
        if np.any(g2 > 0):
            return None
        h1, h2 = (h * xi).sum(axis=1), (h * xi2).sum(axis=1)
        p, value = np.zeros_like(much), np.zeros(len(rows))
        for _ in range(_POLICIES):
            price = np.maximum(h2 - h1, 0.0) / (g1 - g2)
            meeting = h1 + price * g1
            kappa, p = self.priced(rows, much, price, h)
            value = (p * arriving).sum(axis=1) - price * self.limit
            x = self.sizes(rows, kappa, arriving)
            g, size = (np.abs(kappa) * x).sum(axis=1) - self.limit, (h * x).sum(axis=1)
            open_ = value < meeting - 1e-11 * np.abs(meeting)
            if not open_.any():
                break
            first, second = open_ & (g > 0), open_ & (g <= 0)
            much, xi, g1, h1 = (_put(first, a, b) for a, b in ((much, kappa), (xi, x), (g1, g), (h1, size)))
            little, xi2, g2, h2 = (_put(second, a, b) for a, b in ((little, kappa), (xi2, x), (g2, g), (h2, size)))
        share = (-g2 / (g1 - g2))[:, None]
        mixed = share * xi + (1 - share) * xi2
        return value, p, (share * much * xi + (1 - share) * little * xi2) / mixed, mixed


def _put(where: NDArray[np.bool_], old: Array, new: Array) -> Array:
    return np.where(where if old.ndim == 1 else where[:, None], new, old)


def least_sizes(web: Web, A: list[Array], units: list[Index], forced: Array, weaker: float) -> Solved | None:
    """The least sizes that keep all rows of the linear program, and gains that reach them; None if there are none.

    Arguments as for ``solve_program``; ``forced`` > 0: |E| w over all states, a trace more. Only for
    a ``separable`` network.
    """
    from scipy.sparse import coo_array, eye_array
    from scipy.sparse.linalg import splu

    if not len(web.group):
        return None
    locals_ = [_Local(k, e, a) for k, e, a in zip(web.network.kinds, web.entries, A, strict=True)]
    if not all(one.good.all() for one in locals_):
        return None
    to, take, source, _, link = web.terms.T
    strength = web.strengths[link] / weaker
    count, n_at = len(web.group), web.states_at
    push = np.zeros((len(to), max(len(k.states) for k in web.network.kinds)))
    for k, kind in enumerate(web.network.kinds):
        mine = web.kind_of[to] == k
        push[mine, : len(kind.states)] = np.abs(kind.D.floats()).T[take[mine]] * strength[mine, None]
    z = np.zeros(count)
    for _ in range(_STEPS):
        arriving = np.zeros((count, push.shape[1]))
        for q in range(push.shape[1]):
            arriving[:, q] = np.bincount(to, weights=push[:, q] * z[source], minlength=count)
        value, costate, answers = np.zeros(count), np.zeros_like(arriving), []
        for kind, one, mine in zip(web.network.kinds, locals_, units, strict=True):
            n = len(kind.states)
            found = one.solve(arriving[mine, :n] + forced[n_at[mine][:, None] + np.arange(n)])
            if found is None:
                return None
            value[mine], costate[mine, :n] = found[0], found[1]
            answers.append(found)
        slope = coo_array(((costate[to] * push).sum(axis=1), (to, source)), shape=(count, count)).tocsc()
        after = splu((eye_array(count) - slope).tocsc()).solve(value - slope @ z)
        if not np.all(np.isfinite(after)) or np.any(after < z * (1 - 1e-9)):
            return None
        done = np.all(after - z <= 1e-9 * after)
        z = after
        if done:
            return _answer(web, answers, locals_, units, z)
    return None


def _answer(
    web: Web, answers: list[tuple[Array, Array, Array, Array]], locals_: list[_Local], units: list[Index], z: Array
) -> Solved | None:
    """Gains and sizes in the form of the linear program's answer; None where an offer passes its band."""
    xi, kappa = np.zeros(int(web.states_at[-1])), []
    for kind, found, one, mine in zip(web.network.kinds, answers, locals_, units, strict=True):
        n, m = len(kind.states), len(kind.inputs)
        band = kind.offers[0].band
        if band is not None and np.any(z[mine] > float(band) * (1 - TIGHT)):
            return None
        full = np.zeros((len(mine), m, n))
        if one.u is not None:
            full[:, one.u] = found[2]
        kappa.append(full)
        xi[(web.states_at[mine][:, None] + np.arange(n)).ravel()] = found[3].ravel()
    return Solved(kappa, xi)

"""The best gains of positive units, column by column, for all groups of a kind at once.

A unit with one actuator, x' = (A + b kappa') x + D v, stays positive while kappa_q lies in an interval of its own for
every column q. For h >= 0 the costate p = h'(-A_c)^{-1} solves p'(A_q + b kappa_q) = -h_q column by column, so policy
iteration (Howard 1960) on the columns finds the kappa that makes *every* entry of p smallest at once: then every static
gain p'D is smallest at once, whatever the neighbours send. (That one choice serves all takes is ours; it is the
statement that the value of the linear program of positive systems is both convex and concave in what arrives.)
Units with several actuators are solved as one small linear program each instead.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.local.positive.web import Entry

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_ROUNDS = 200


def closed(A: Array, B: Array, kappa: Array) -> Array:
    """A + B kappa for every group: A (groups, n, n), B (n, m), kappa (groups, m, n)."""
    return np.asarray(A + np.einsum("nm,gmq->gnq", B, kappa))


def ends(A: Array, b: Array, reach: Array) -> tuple[Array, Array]:
    """Float ends of kappa_q for every group and column; ``reach`` (n,) is the largest |kappa_q| that bounds allow."""
    groups, n, _ = A.shape
    low, high = np.tile(-reach, (groups, 1)), np.tile(reach, (groups, 1))
    for r in range(n):
        if b[r] == 0:
            continue
        end = -A[:, r, :] / b[r]
        others = np.arange(n) != r
        if b[r] > 0:
            low[:, others] = np.maximum(low[:, others], end[:, others])
        else:
            high[:, others] = np.minimum(high[:, others], end[:, others])
    return low, np.maximum(low, high)


def best_columns(A: Array, b: Array, low: Array, high: Array, h: Array) -> tuple[Array, Mask]:
    """kappa (groups, n) with the smallest costate p for ``h`` (groups, n), and which groups have a Hurwitz choice.

    ``low`` and ``high`` finite, (groups, n). First the largest eigenvalue is made smallest (left Perron vectors take
    the part of p); from a Hurwitz choice on, p itself falls monotonically.
    """
    kappa = np.clip(np.zeros_like(low), low, high)
    tiny = 1e-12 * np.abs(A).max(axis=(1, 2), initial=0.0)[:, None, None]
    for _ in range(_ROUNDS):
        values, vectors = np.linalg.eig(np.swapaxes(A + b[None, :, None] * kappa[:, None, :] + tiny, 1, 2))
        lead = values.real.argmax(axis=1)
        left = np.abs(np.take_along_axis(vectors, lead[:, None, None], axis=2)[:, :, 0])
        better = _choice(kappa, left, b, low, high)
        if np.array_equal(better, kappa):
            break
        kappa = better
    good = np.linalg.eigvals(A + b[None, :, None] * kappa[:, None, :]).real.max(axis=1) < 0
    if not good.any():
        return kappa, good
    part, A, low, high, h = kappa[good], A[good], low[good], high[good], h[good]
    h = h + 1e-9 * np.maximum(h.max(axis=1, keepdims=True), 1e-300)
    before = np.full(len(part), np.inf)
    for _ in range(_ROUNDS):
        p = np.linalg.solve(np.swapaxes(A + b[None, :, None] * part[:, None, :], 1, 2), -h[:, :, None])[:, :, 0]
        better = _choice(part, p, b, low, high)
        total = p.sum(axis=1)
        moving = (better != part).any(axis=1) & (total < before * (1 - 1e-13))
        if not moving.any():
            break
        part = np.where(moving[:, None], better, part)
        before = total
    kappa[good] = part
    return kappa, good


def _choice(kappa: Array, p: Array, b: Array, low: Array, high: Array) -> Array:
    """The end of every interval at which p'b kappa is smallest; unchanged where p'b is zero to rounding."""
    score = p @ b
    even = np.abs(score) <= 1e-12 * (np.abs(p) @ np.abs(b))
    best = np.where(score > 0, low.T, high.T).T
    return np.where(even[:, None], kappa, best)


def small_program(A: Array, B: Array, entries: tuple[Entry, ...], h: Array) -> Array | None:
    """kappa (m, n) of one unit with any number of actuators, by its linear program; None if there is no Hurwitz choice.

    minimise h'xi over xi, Y subject to (A xi + B Y 1)_r <= -1, the Metzler rows and |Y_e| <= bound_e xi_q, in which
    Y_e = K_e factor xi_q; kappa = Y / xi (Ait Rami & Tadeo, IEEE TCAS-II 54(2), 2007).
    """
    from scipy.optimize import linprog

    n, count = len(A), len(entries)
    rows, right = [], []
    for r in range(n):
        row = np.concatenate((A[r], [B[r, e.actuator] for e in entries]))
        rows.append(row)
        right.append(-1.0)
        for q in range(n):
            if r != q and any(B[r, e.actuator] for e in entries if e.state == q):
                row = np.zeros(n + count)
                row[q] = -A[r, q]
                row[n:] = [-B[r, e.actuator] * (e.state == q) for e in entries]
                rows.append(row)
                right.append(0.0)
    for k, e in enumerate(entries):
        if e.bound is None:
            continue
        for sign in (1.0, -1.0):
            row = np.zeros(n + count)
            row[n + k], row[e.state] = sign, -float(e.bound * abs(e.factor))
            rows.append(row)
            right.append(0.0)
    cost = np.concatenate((h + 1e-9 * max(float(h.max(initial=0.0)), 1e-300), np.zeros(count)))
    limits = [(0.0, None)] * n + [(None, None)] * count
    answer: Any = linprog(cost, A_ub=np.array(rows), b_ub=np.array(right), bounds=limits, method="highs-ds")
    if answer.status != 0 or not np.all(answer.x[:n] > 0):
        return None
    kappa = np.zeros((B.shape[1], n))
    for e, y in zip(entries, answer.x[n:], strict=True):
        kappa[e.actuator, e.state] += y / answer.x[e.state]
    return kappa

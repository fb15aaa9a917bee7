"""The slow literal definition of a sampled peak gain: the adjoint of the hybrid loop, integrated backwards by scipy.

Looking at z(t) = h x(t) + hu u(t) at the time t = phi after a sample, the weight of an input at an earlier time is
found by following the row (lx, lu, lp) over (states, held command, computed command) backwards through time:

    between events   lx' = -lx A,  lu' = -lx B        at kT + d   lp += lu, lu = 0        at kT   lx += lp R, lp = 0

The peak gain at the phase is the integral of |lx D| plus, for sampled inlets, the sum of |lp gu| and of |lx gx|.
"""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp
from scipy.optimize import minimize_scalar


class Adjoint:
    """One loop; ``gains(phases, row, D, gu, gx)`` by brute force."""

    def __init__(self, A, B, R, T, d, Z=None):
        self.A, self.B, self.R = (np.asarray(m, dtype=float) for m in (A, B, R))
        self.n, self.m = self.B.shape
        self.T, self.d = float(T), float(d)
        self.Z = np.zeros((self.n, self.n)) if Z is None else np.asarray(Z, dtype=float)

    def back(self, rows, total, length, D):
        """Follow the rows and the integral of |lx D| backwards over ``length`` seconds without events."""
        if length <= 1e-15:
            return rows, total
        n, m, k = self.n, self.m, len(rows)

        def slope(_, flat):
            lx = flat[: k * n].reshape(k, n)
            return np.concatenate([(lx @ self.A).ravel(), (lx @ self.B).ravel(), np.abs(lx @ D)])

        start = np.concatenate([rows[:, :n].ravel(), rows[:, n : n + m].ravel(), total])
        end = solve_ivp(slope, (0.0, length), start, method="DOP853", rtol=1e-9, atol=1e-12).y[:, -1]
        rows = rows.copy()
        rows[:, :n] = end[: k * n].reshape(k, n)
        rows[:, n : n + m] = end[k * n : k * n + k * m].reshape(k, m)
        return rows, end[-k:]

    def at_update(self, rows, total):
        rows = rows.copy()
        rows[:, self.n + self.m :] += rows[:, self.n : self.n + self.m]
        rows[:, self.n : self.n + self.m] = 0.0
        return rows, total

    def at_sample(self, rows, total, gu, stored):
        """``stored``: the rows over x that the stored step of this period acts on."""
        n, m = self.n, self.m
        rows = rows.copy()
        total = total + np.abs(rows[:, n + m :] @ gu + stored[1])
        rows[:, :n] += rows[:, n + m :] @ self.R + stored[0]
        rows[:, n + m :] = 0.0
        return rows, total

    def gains(self, phases, row, D=None, gu=None, gx=None, rest=1e-9):
        """Peak gain at each phase (0 <= phi <= T; a command is in force from phi = d on)."""
        n, m = self.n, self.m
        D = np.zeros(n) if D is None else np.asarray(D, dtype=float)
        gu = np.zeros(m) if gu is None else np.asarray(gu, dtype=float)
        gx = np.zeros(n) if gx is None else np.asarray(gx, dtype=float)
        found = []
        none = (np.zeros(n), 0.0)
        for phi in phases:
            rows, total = np.zeros((1, n + 2 * m)), np.zeros(1)
            rows[0, : n + m] = row
            if phi >= self.d:
                rows, total = self.back(rows, total, phi - self.d, D)
                rows, total = self.at_update(rows, total)
                rows, total = self.back(rows, total, self.d, D)
            else:
                rows, total = self.back(rows, total, phi, D)
            found.append(self.at_sample(rows, total, gu, none))
        rows, total = (np.concatenate(part) for part in zip(*found, strict=True))
        first = np.abs(rows).max()
        for _ in range(4000):
            if np.abs(rows).max() <= rest * first:
                return total
            stored = rows[:, :n] @ self.Z, rows[:, :n] @ gx
            rows, total = self.back(rows, total, self.T - self.d, D)
            rows, total = self.at_update(rows, total)
            rows, total = self.back(rows, total, self.d, D)
            rows, total = self.at_sample(rows, total, gu, stored)
        raise AssertionError("the loop does not die out")

    def supremum(self, row, grid=11, **inlet):
        """The largest gain over all phases: a grid on both sides of the delay, and a search near its best phase."""
        best = 0.0
        for low, high in ((0.0, self.d - 1e-12), (self.d, self.T)):
            if high <= low:
                continue
            phases = np.linspace(low, high, grid)
            values = self.gains(phases, row, **inlet)
            k = int(values.argmax())
            best = max(best, values[k])
            if 0 < k < grid - 1:
                found = minimize_scalar(
                    lambda phi: -self.gains([phi], row, **inlet)[0],
                    bounds=(phases[k - 1], phases[k + 1]),
                    method="bounded",
                    options={"xatol": 1e-5 * self.T},
                )
                best = max(best, -found.fun)
        return best

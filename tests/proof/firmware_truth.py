"""What a certificate of the firmware route says, evaluated in doubles by other means than builder and checker use.

Kernels are sampled on a fine grid of time and phase (matrix exponentials, the trapezium rule), sums run until nothing
is left, and everything is compared with a small tolerance. True: nothing stated is better than what comes out here.
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import scipy.integrate
import scipy.linalg

GRID = 32  # parts of a period, for time and for phase
SLACK = 3e-3


def number(value: Any) -> float:
    return float("inf") if value == "inf" else float(Fraction(value))


def matrix(rows: Any, width: int) -> np.ndarray:
    return np.array([[number(v) for v in row] for row in rows], dtype=float).reshape(len(rows), width)


class Loop:
    """One kind of the document, weighted with e^{alpha t}."""

    def __init__(self, document, index, alpha=0.0):
        kind, gains = document["model"]["kinds"][index], document["gains"][index]
        part = document["firmware"]["kinds"][index]
        self.kind, self.part = kind, part
        self.T, self.d = (number(document["firmware"][key]) for key in ("period", "delay"))
        groups = ("states", "inputs", "takes", "offers", "sensors", "disturbances")
        self.names = {g: [s["name"] for s in kind[g]] for g in groups}
        n, m, q, z, p, w = (len(self.names[g]) for g in groups)
        self.n, self.m = n, m
        X = {
            key: matrix(kind[key], width)
            for key, width in {"A": n, "B": m, "D": q, "E": w, "C": n, "N": q, "H": n, "F": q, "Fw": w}.items()
        }
        Fu = matrix(kind["Fu"], m) if "Fu" in kind else np.zeros((z, m))
        H = X["H"].copy()
        for link in document["model"]["links"]:
            own = number(link["own_strength"])
            if own and link["to"]["kind"] == kind["name"]:
                j = self.names["takes"].index(link["to"]["take"])
                h = H[self.names["offers"].index(link["from"]["offer"])]
                for key, by in (("A", "D"), ("C", "N"), ("H", "F")):
                    X[key] = X[key] - own * np.outer(X[by][:, j], h)
        K = matrix(gains["K"], p)
        R = K @ X["C"]
        kept = [self.names["states"].index(s["state"]) for s in part["stored"]]
        jump = np.zeros((n, n))
        jump[kept] = self.T * (X["A"] + X["B"] @ R)[kept]
        # Inlets are (continuous column, into the command, into x at the end of the period).
        inlets = [self.inlet(X["D"][:, j].copy(), K @ X["N"][:, j], X, kept) for j in range(q)]
        waves = [(X["E"][:, j], np.zeros(m), np.zeros(n)) for j in range(w)]
        errors = []
        for j, quantum in enumerate(part["sensors"]):
            column, gu, gx = self.inlet(np.zeros(n), K[:, j], X, kept)
            for i in kept:
                if (
                    next(s for s in part["stored"] if s["state"] == self.names["states"][i])["integrates"]
                    == (self.names["sensors"][j])
                ):
                    gx[i] += self.T
            errors.append(((column, gu, gx), number(quantum) / 2))
        commands = [self.inlet(np.zeros(n), row, X, kept) for row in np.eye(m)]
        for i, command in enumerate(commands):
            count = np.count_nonzero(K[i])
            errors.append((command, (number(part["commands"][i]) + count * number(part["products"][i])) / 2))
        for i, s in zip(kept, part["stored"], strict=True):
            errors.append(((np.zeros(n), np.zeros(m), np.eye(n)[i]), number(s["quantum"]) / 2))
        self.takes, self.waves, self.errors, self.commands = inlets, waves, errors, commands
        A, B = X["A"].copy(), X["B"].copy()
        A[kept], B[kept] = 0.0, 0.0
        self.rows = np.vstack([np.hstack([X["H"], Fu]), np.eye(n, n + m), np.hstack([np.zeros((m, n)), np.eye(m)])])
        self.F = np.vstack([X["F"], np.zeros((n + m, q))])
        self.Fw = np.vstack([X["Fw"], np.zeros((n + m, w))])
        self.readings, self.N = X["C"], X["N"]
        relative = {"exact": 0.0, "single": 2.0**-24, "double": 2.0**-53}[part["form"]]
        self.floats = relative * (np.count_nonzero(K, axis=1) + 1)[:, None] * np.abs(K)
        self.flow(A, B, R, jump, alpha)

    def inlet(self, D, gu, X, kept):
        gx = np.zeros(self.n)
        for i in kept:
            gx[i] = self.T * (D[i] + X["B"][i] @ gu)
            D[i] = 0.0
        return D, np.asarray(gu, dtype=float), gx

    def flow(self, A, B, R, jump, alpha):
        n, m, T, d = self.n, self.m, self.T, self.d
        M = np.zeros((n + m, n + m))
        M[:n, :n], M[:n, n:] = A, B
        self.alpha = alpha
        grow = lambda t: scipy.linalg.expm(M * t) * np.exp(alpha * t)  # noqa: E731
        W = grow(d)
        W[n:] = 0.0
        W[n:, :n] = R * np.exp(alpha * d)
        self.grow, self.W = grow, W
        self.Phi = grow(T - d) @ W
        self.Phi[:n, :n] += jump * np.exp(alpha * T)
        self.radius = np.abs(np.linalg.eigvals(self.Phi)).max()
        self.powers = [np.eye(n + m)]
        while len(self.powers) < 100_000 and np.abs(self.powers[-1]).max() > 1e-9 and self.radius < 1:
            self.powers.append(self.Phi @ self.powers[-1])
        self.powers = np.array(self.powers)
        before = [(t, grow(t), False) for t in np.linspace(0, d, GRID + 1)] if d else []
        after = [(t, grow(t - d) @ W, True) for t in np.linspace(d, T, GRID + 1)] if d < T else []
        self.phases = before + after
        self.times = np.linspace(0, T, 2 * GRID + 1)
        self.steps = np.array([grow(t) for t in self.times])

    def gain(self, row, inlet, sample_only=False):
        """Supremum over the phase of what the inlet can bring about on a row over (x, u)."""
        D, gu, gx = inlet
        start = self.steps[:, :, : self.n] @ D  # y(s) on the grid
        fresh = np.concatenate([np.zeros(self.n), gu * np.exp(self.alpha * self.d)])
        first = self.grow(self.T - self.d) @ fresh
        first[: self.n] += gx * np.exp(self.alpha * self.T)
        best = 0.0
        kernel = np.abs(start @ row)
        inside = np.concatenate([[0.0], np.cumsum((kernel[1:] + kernel[:-1]) / 2) * (self.times[1] - self.times[0])])
        for phi, reach, late in [(0.0, np.eye(self.n + self.m), False)] if sample_only else self.phases:
            seen = (row @ reach) @ self.powers
            value = (
                scipy.integrate.trapezoid(np.abs(seen @ start.T), self.times, axis=1).sum() + np.abs(seen @ first).sum()
            )
            if late:
                value += abs(row @ self.grow(phi - self.d) @ fresh)
            best = max(best, value + np.interp(phi, self.times, inside))
        return best

    def free(self, row):
        """Largest value from states and held commands of size one, started at a sampling instant."""
        return max(np.abs((row @ reach) @ self.powers).sum(axis=1).max() for _, reach, _ in self.phases)


def is_true(document: dict[str, Any]) -> bool:
    """Whether every number of the document holds by this evaluation."""
    try:
        return not wrong(document)
    except (KeyError, ValueError, ZeroDivisionError, IndexError):
        return False


def wrong(document: dict[str, Any]) -> list[str]:
    """What does not hold."""
    count = len(document["model"]["kinds"])
    alpha = number(document["constants"]["alpha"])
    plain, fast = ([Loop(document, k, a) for k in range(count)] for a in (0.0, alpha))
    if any(loop.radius >= 1 for loop in plain + fast):
        return ["a loop does not decay as claimed"]
    found = []
    M, rows = operator(document, plain)
    M_fast, _ = operator(document, fast, alpha)
    radius = np.abs(np.linalg.eigvals(M)).max() if len(M) else 0.0
    upper, lower = number(document["radius"]["upper"]), number(document["radius"]["lower"])
    if not (lower * (1 - SLACK) <= radius <= upper * (1 + SLACK) and upper <= number(document["target"]) < 1):
        found.append(f"radius {radius}")
    if len(M) and np.abs(np.linalg.eigvals(M_fast)).max() >= 1:
        found.append("no contraction at the rate")
    declared = [np.array([number(w["peak"]) for w in loop.kind["disturbances"]]) for loop in plain]
    own_waves = [
        np.array([[loop.gain(row, i) for i in loop.waves] for row in loop.rows]) + np.abs(loop.Fw) for loop in plain
    ]
    own_noise = [np.array([sum(loop.gain(r, i) * s for i, s in loop.errors) for r in loop.rows]) for loop in plain]
    waves = spread(document, plain, M, rows, [w @ b for w, b in zip(own_waves, declared, strict=True)])
    ones = spread(document, plain, M, rows, [w.sum(axis=1) for w in own_waves])
    noise = spread(document, plain, M, rows, own_noise)
    states = np.concatenate([np.arange(len(loop.rows)) >= 0 for loop in plain])
    states &= np.concatenate([roles(loop) == "state" for loop in plain])
    starts = spread(document, plain, M, rows, [starting(loop) for loop in plain])
    rates = spread(document, fast, M_fast, rows, [starting(loop) for loop in fast], alpha)
    for name, value in (("G", ones[states].max()), ("R", noise[states].max()), ("C", rates[states].max())):
        if number(document["constants"][name]) < value * (1 - SLACK):
            found.append(f"{name} {value}")
    limits = []
    for k, (p, wave, part) in enumerate(zip(document["peaks"], waves, noise, strict=True)):
        if number(p["value"]) < (wave + part) * (1 - SLACK) or number(p["rounding"]) < part * (1 - SLACK):
            found.append(f"peak {p['signal']} {wave} {part}")
        if p["limit"] is not None:
            limits.append((number(p["limit"]), k))
    room = {
        "X0": min(((b - waves[k] - noise[k]) / starts[k] for b, k in limits if starts[k] > 1e-12), default=np.inf),
        "w": min(((b - noise[k]) / ones[k] for b, k in limits if ones[k] > 1e-12), default=np.inf),
        "factor": min(((b - noise[k]) / waves[k] for b, k in limits if waves[k] > 1e-12), default=np.inf),
    }
    found += [f"validity {k} {v}" for k, v in room.items() if number(document["validity"][k]) > v * (1 + SLACK)]
    return found


def roles(loop):
    return np.array(["offer"] * len(loop.names["offers"]) + ["state"] * loop.n + ["actuator"] * loop.m)


def starting(loop):
    own = np.array([loop.free(row) for row in loop.rows])
    return np.maximum(own, (np.abs(loop.F).sum(axis=1) + np.abs(loop.Fw).sum(axis=1) > 0).astype(float))


def operator(document, loops, alpha=0.0):
    """M over all offers, and their names. Floating-point errors are left out: they are far below the tolerance."""
    names = [(loop.kind["name"], s) for loop in loops for s in loop.names["offers"]]
    M = np.zeros((len(names), len(names)))
    for loop in loops:
        for link in document["model"]["links"]:
            if link["to"]["kind"] != loop.kind["name"]:
                continue
            j = loop.names["takes"].index(link["to"]["take"])
            factor = abs(number(link["strength"])) * np.exp(alpha * number(link["delay"]))
            column = names.index((link["from"]["kind"], link["from"]["offer"]))
            for k, s in enumerate(loop.names["offers"]):
                p = loop.gain(loop.rows[k], loop.takes[j]) + abs(loop.F[k, j])
                M[names.index((loop.kind["name"], s)), column] += p * factor
    return M, names


def spread(document, loops, M, names, own, alpha=0.0):
    """Own parts of all lines plus what comes through the links."""
    offers = np.concatenate([o[: len(loop.names["offers"])] for loop, o in zip(loops, own, strict=True)])
    z = np.linalg.solve(np.eye(len(M)) - M, offers)
    found = []
    for loop, o in zip(loops, own, strict=True):
        inflow = np.zeros(len(loop.takes))
        for link in document["model"]["links"]:
            if link["to"]["kind"] == loop.kind["name"]:
                j = loop.names["takes"].index(link["to"]["take"])
                factor = abs(number(link["strength"])) * np.exp(alpha * number(link["delay"]))
                inflow[j] += factor * z[names.index((link["from"]["kind"], link["from"]["offer"]))]
        p = np.array([[loop.gain(row, i) for i in loop.takes] for row in loop.rows]) + np.abs(loop.F)
        found.append(o + p @ inflow)
    return np.concatenate(found)

"""The constants of theory 3c in plain float arithmetic, for tests: a slow stand-in for a certificate, independent of
synth.proof.

Kernels come from step-by-step matrix exponentials on a fine grid, (I - M)^{-1} from numpy.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.linalg import expm

from synth.gain.closed import close_network
from synth.network.gains import Gains
from synth.network.model import Network


@dataclass(frozen=True)
class StandInPeak:
    kind: str
    role: str
    signal: str
    value: float
    unit: str
    limit: float | None = None


@dataclass(frozen=True)
class Constants:
    C: float
    alpha: float
    G: float
    norm: str = "maximum"


@dataclass(frozen=True)
class Validity:
    X0: float | None
    w: float | None
    factor: float | None


@dataclass(frozen=True)
class StandIn:
    """As much of a certificate as the simulation reads."""

    proven: bool
    constants: Constants
    peaks: tuple[StandInPeak, ...]
    validity: Validity
    radius: float = 0.0
    extras: dict = field(default_factory=dict)


def integral_of_absolute(A, D, rows, seconds=None, cells=40_000):
    """integral |R e^{At} D| dt and sup_t |R e^{At}|_1, midpoint-free: step-held kernels on a fine grid (from below,
    O(h^2)).
    """
    modes = np.linalg.eigvals(A)
    seconds = seconds or 25.0 / -modes.real.max()
    h = seconds / cells
    n, m = D.shape
    big = np.zeros((n + m, n + m))
    big[:n, :n], big[:n, n:] = A * h, D * h
    E = expm(big)
    Phi, Gamma = E[:n, :n], E[:n, n:]
    K, total, free = rows.copy(), np.zeros((rows.shape[0], m)), np.abs(rows).sum(axis=1)
    for _ in range(cells):
        total += np.abs(K @ Gamma)
        K = K @ Phi
        free = np.maximum(free, np.abs(K).sum(axis=1))
    return total, free


def stand_in(
    network: Network, gains: Gains, alpha: float | None = None, cells: int = 40_000, slack: float = 1e-6
) -> StandIn:
    """C, alpha, G, peaks and validity of theory 3c, every constant widened by ``slack`` (relative) like a
    certificate's.
    """
    closed = close_network(network, gains)
    rate = min(-np.linalg.eigvals(c.A.floats()).real.max() for c in closed)
    alpha = alpha if alpha is not None else 0.5 * rate
    names = []
    for u, c in enumerate(closed):
        groups = (("state", c.kind.states), ("offer", c.kind.offers), ("actuator", c.kind.inputs))
        for role, signals in groups:
            for i, s in enumerate(signals):
                names.append((u, role, i, s))
    direct = {
        "state": lambda c: (np.eye(len(c.kind.states)), np.zeros((len(c.kind.states), len(c.kind.takes))), None),
        "offer": lambda c: (c.H.floats(), c.F.floats(), c.Fw.floats()),
        "actuator": lambda c: (c.U.floats(), c.UV.floats(), None),
    }

    def gains_at(a):
        found = {}
        for u, c in enumerate(closed):
            A = c.A.floats() + a * np.eye(len(c.kind.states))
            DE = np.hstack([c.D.floats(), c.E.floats()])
            q, nw = len(c.kind.takes), len(c.kind.disturbances)
            for role in ("state", "offer", "actuator"):
                R, F, Fw = direct[role](c)
                Fw = Fw if Fw is not None else np.zeros((R.shape[0], nw))
                total, free = integral_of_absolute(A, DE, R, cells=cells)
                total = total + np.abs(np.hstack([F, Fw]))
                has = np.abs(np.hstack([F, Fw])).sum(axis=1) > 0
                free = np.where(has & (role == "offer"), np.maximum(free, 1.0), free)
                found[u, role] = (total[:, :q], total[:, q:], free)
        return found

    offers = [(u, i) for u, role, i, _ in names if role == "offer"]
    position = {(closed[u].kind.name, closed[u].kind.offers[i].name): j for j, (u, i) in enumerate(offers)}

    def bounds(found, a, own):
        """Per line own + sum p g e^{ad} y_source, with y = (I - M)^{-1} own over the offers."""
        flow = {}
        M = np.zeros((len(offers), len(offers)))
        for link in network.links:
            g = abs(float(link.strength)) * np.exp(a * float(link.delay))
            u = next(u for u, c in enumerate(closed) if c.kind.name == link.kind)
            t = closed[u].kind.index("takes", link.take)
            j = position[link.source_kind, link.offer]
            flow.setdefault(u, []).append((t, j, g))
            for r, (v, i) in enumerate(offers):
                if v == u:
                    M[r, j] += found[u, "offer"][0][i, t] * g
        radius = max(abs(np.linalg.eigvals(M)), default=0.0)
        y = np.linalg.solve(np.eye(len(M)) - M, np.array([own[u, "offer"][i] for u, i in offers]))
        total = []
        for u, role, i, _ in names:
            total.append(own[u, role][i] + sum(found[u, role][0][i, t] * g * y[j] for t, j, g in flow.get(u, ())))
        return np.array(total), radius

    plain, fast = gains_at(0.0), gains_at(alpha)
    w = [np.array([float(d.peak) for d in c.kind.disturbances]) for c in closed]
    base, radius = bounds(plain, 0.0, {key: plain[key][1] @ w[key[0]] for key in plain})
    unit, _ = bounds(plain, 0.0, {key: plain[key][1].sum(axis=1) for key in plain})
    start, _ = bounds(plain, 0.0, {key: plain[key][2] for key in plain})
    rates, weighted = bounds(fast, alpha, {key: fast[key][2] for key in fast})
    assert radius < 1 and weighted < 1, (radius, weighted)
    states = [k for k, (_, role, _, _) in enumerate(names) if role == "state"]
    limits = [getattr(s, "limit", getattr(s, "band", None)) for _, _, _, s in names]
    peaks = tuple(
        StandInPeak(
            closed[u].kind.name,
            role,
            s.name,
            base[k] * (1 + slack),
            s.unit,
            None if limits[k] is None else float(limits[k]),
        )
        for k, (u, role, i, s) in enumerate(names)
    )

    def room(per, used):
        found = [
            (float(limits[k]) - used[k]) / per[k] for k in range(len(names)) if limits[k] is not None and per[k] > 0
        ]
        return min(found, default=None)

    constants = Constants(rates[states].max() * (1 + slack), alpha, unit[states].max() * (1 + slack))
    validity = Validity(room(start, base), room(unit, 0 * base), room(base, 0 * base))
    return StandIn(True, constants, peaks, validity, radius)

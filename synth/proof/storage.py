"""Evidence for the storage route: for each closed unit a quadratic storage function and multipliers (theory 3b).

For the fixed gains and a decay a, with Q = P^-1, the solver finds the smallest size t such that

    [ AQ + QA' + 2aQ , D , E ; . , -diag(tau) , 0 ; . , . , -diag(tau_w) ] <= 0      H_k Q H_k' <= t c_k^2
    sum tau_l v_l^2 + share * sum tau_w,m w_m^2 <= 2a

with c_k the size other units were promised for offer k, v_l what then arrives at take l, w_m the declared peak; two
rounds adapt the promises. Whatever comes back is relaxed a little, rounded, and verified by the checker alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import cvxpy as cp
import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from synth.base.progress import Listener
from synth.gain.closed import ClosedUnit
from synth.network.model import Network
from synth.proof import check
from synth.proof.numbers import decimal_down, decimal_up, dyadic
from synth.proof.peak import bisect_rate, decay, rounded_norm

Array = NDArray[np.float64]
_GRID = (0.15, 0.3, 0.45, 0.6, 0.75, 0.9)  # decay a of the storage function, as a part of the unit's own
_SHARES = (
    0.3,
    0.03,
    1e-3,
    1e-5,
)  # weight of the declared disturbances against the links; smaller costs G, gains radius
_RELAX = 2e-5  # part by which a solver's answer is relaxed before it is rounded
_ROUNDS = 2


@dataclass(frozen=True)
class Storage:
    """One unit's candidate: P (exact, by its rows), a in 1/s, tau per take, tau_w per disturbance; offer sizes zeta."""

    P: tuple[tuple[Fraction, ...], ...]
    a: Fraction
    tau: tuple[Fraction, ...]
    tau_w: tuple[Fraction, ...]
    zeta: Array


def fill_evidence(
    document: dict[str, Any], network: Network, closed: tuple[ClosedUnit, ...], progress: Listener
) -> str | None:
    """Fill in evidence, point and rate of the storage route; returns a sentence if it cannot reach the target."""
    for unit in closed:
        if any(any(row) for X in (unit.F, unit.Fw) for row in X.rows):
            return (
                f"{unit.kind.name} offers a signal with feed-through, which only the peak route takes; use route peak"
            )
    target = float(Fraction(document["target"]))
    best: tuple[float, list[Storage], Array] | None = None
    for share in _SHARES:
        progress(f"searching storage functions (weight of disturbances {share:g})")
        for part in _GRID:
            units = _candidate(network, closed, part, share)
            if units is None:
                continue
            radius, s = _point(network, closed, units)
            if best is None or radius < best[0]:
                best = (radius, units, s)
        if best is not None and best[0] <= target * (1 - 1e-6):
            break
    if best is None:
        return "the solver found no storage function for these gains"
    _, units, s = best
    document["evidence"] = [
        {
            "kind": unit.kind.name,
            "P": [[str(v) for v in row] for row in found.P],
            "a": str(found.a),
            "tau": [str(v) for v in found.tau],
            "tau_w": [str(v) for v in found.tau_w],
        }
        for unit, found in zip(closed, units, strict=True)
    ]
    ratios = _rows(network, closed, units, s) / s
    document["point"] = [
        {"of": unit.kind.name, "s": str(dyadic(v)), "low": str(dyadic(v) if v > 1e-9 else Fraction(0))}
        for unit, v in zip(closed, s, strict=True)
    ]
    document["radius"] = {
        "lower": decimal_down(Fraction(float(ratios.min()))),
        "upper": decimal_up(Fraction(float(ratios.max()))),
    }
    if ratios.max() > target * (1 - 1e-8):
        return (
            f"the radius of the storage rows is {ratios.max():.6g}, above the target {target:g}; ask for less "
            "coupling, other gains or a larger target"
        )
    document["constants"]["alpha"] = decimal_down(_rate(network, closed, units, ratios), 12)
    return None


def _candidate(network: Network, closed: tuple[ClosedUnit, ...], part: float, share: float) -> list[Storage] | None:
    """Storage functions of all kinds with a = part of each unit's own decay; None if one cannot be found."""
    sizes = {(unit.kind.name, offer.name): 1.0 for unit in closed for offer in unit.kind.offers}
    found: list[Storage] = []
    for _ in range(_ROUNDS if len(closed) > 1 or len(sizes) > 1 else 1):
        found = []
        for unit in closed:
            promised = np.array([sizes[unit.kind.name, offer.name] for offer in unit.kind.offers])
            arriving = np.zeros(len(unit.kind.takes))
            for link in network.links:
                if link.kind == unit.kind.name:
                    size = sizes[link.source_kind, link.offer]
                    arriving[unit.kind.index("takes", link.take)] += abs(float(link.strength)) * size
            one = _solve(unit, part * decay(unit.A), promised, arriving, share)
            if one is None:
                return None
            found.append(one)
        for unit, one in zip(closed, found, strict=True):
            for offer, zeta in zip(unit.kind.offers, one.zeta, strict=True):
                old = sizes[unit.kind.name, offer.name]
                sizes[unit.kind.name, offer.name] = float(np.sqrt(max(old * zeta, 1e-12)))
    return found


def _solve(unit: ClosedUnit, a: float, promised: Array, arriving: Array, share: float) -> Storage | None:
    """One semidefinite program for one kind; None if the solver did not solve it or the relaxed answer fails."""
    n, q, d = unit.A.shape[0], unit.D.shape[1], unit.E.shape[1]
    A, inputs, H = unit.A.floats(), np.hstack([unit.D.floats(), unit.E.floats()]), unit.H.floats() / promised[:, None]
    peaks = np.array([float(w.peak) for w in unit.kind.disturbances])
    cost = np.concatenate([arriving**2, share * peaks**2])
    # A take nobody feeds, or a disturbance of peak zero, still needs a finite multiplier.
    cost = np.maximum(cost, 1e-6 * max(float(cost.max(initial=0.0)), 1e-9))
    omega, scale = _natural_units(A, inputs * np.sqrt(cost))
    A, inputs, a_scaled = A / omega / scale[:, None] * scale, inputs * np.sqrt(cost) / omega / scale[:, None], a / omega
    H = H * scale
    H = H / max(float(np.abs(H).max(initial=0.0)), 1e-300)
    Q, t = cp.Variable((n, n), symmetric=True), cp.Variable()
    tau = cp.Variable(q + d, nonneg=True) if q + d else None
    lyapunov = A @ Q + Q @ A.T + 2 * a_scaled * Q
    constraints: list[Any] = [Q >> 1e-9 * np.eye(n)]
    if tau is None:
        constraints += [lyapunov << -np.eye(n)]
    else:
        block = cp.bmat([[lyapunov, inputs], [inputs.T, -cp.diag(tau)]])
        constraints += [(block + block.T) / 2 << 0, cp.sum(tau) <= 2 * a_scaled]
    goal = [cp.sum(cp.multiply(row[:, None] @ row[None, :], Q)) for row in H]
    constraints += [g <= t for g in goal]
    # A small weight on the size of Q keeps directions that no offer sees from growing without bound.
    problem = cp.Problem(cp.Minimize((t if len(H) else 0) + (1e-4 if len(H) else 1) * cp.trace(Q)), constraints)
    try:
        problem.solve(solver=cp.CLARABEL)
    except (cp.SolverError, ValueError):
        return None
    if problem.status != cp.OPTIMAL:
        return None
    found = np.asarray(tau.value * omega / cost if tau is not None else [], dtype=np.float64)
    return _exact(unit, np.asarray(Q.value, dtype=np.float64), found, a, np.asarray(scale, dtype=np.float64))


def _natural_units(A: Array, inputs: Array) -> tuple[float, Array]:
    """Rate (1/s) and size of every state in which the unit is of order one, whatever units the user declared.

    Sizes are the roots of the diagonal of the reachability Gramian; states that nothing reaches get a little of the
    size that balancing A gives them.
    """
    _, (balance, _) = scipy.linalg.matrix_balance(A, permute=False, separate=True)
    W = np.diag(scipy.linalg.solve_continuous_lyapunov(A, -inputs @ inputs.T)) if inputs.size else np.zeros(len(A))
    relative = np.maximum(W, 0.0) / balance**2
    sizes = np.sqrt(relative + max(1e-6 * float(relative.max()), 1e-300)) * balance
    scaled = A / sizes[:, None] * sizes
    return max(float(np.abs(np.linalg.eigvals(scaled)).max()), 1e-300), np.asarray(sizes if W.any() else balance)


def _exact(unit: ClosedUnit, Q: Array, tau: Array, a: float, scale: Array) -> Storage | None:
    """Relax, round to short exact numbers, and keep the answer only if the exact elimination accepts it."""
    q = unit.D.shape[1]
    values = np.linalg.eigvalsh(Q)
    if not values.min() > 0:
        return None
    P: Array = np.asarray(np.linalg.inv(Q), dtype=np.float64)
    unitless = float(np.abs(P).max())
    for relax in (_RELAX, 20 * _RELAX, 400 * _RELAX):
        norm = rounded_norm((P + P.T) / 2 / unitless, scale)
        rate = Fraction(decimal_down(Fraction(a * (1 - relax)), 8))
        times = [dyadic(float(v) * (1 + relax) / unitless) for v in np.maximum(tau, 1e-12)]
        entry = {
            "kind": unit.kind.name,
            "P": norm.texts(),
            "a": str(rate),
            "tau": [str(v) for v in times[:q]],
            "tau_w": [str(v) for v in times[q:]],
        }
        whole = check.Unit(
            unit.kind.name,
            [list(r) for r in unit.A.rows],
            [list(r) for r in unit.D.rows],
            [list(r) for r in unit.E.rows],
            [],
            [t.name for t in unit.kind.takes],
            [(w.name, w.unit, w.peak) for w in unit.kind.disturbances],
        )
        try:
            check.read_evidence({"route": "storage", "evidence": [entry]}, [whole])
        except check.Rejected:
            continue
        H = unit.H.floats()
        zeta = np.sqrt(np.maximum(np.einsum("ki,ij,kj->k", H, np.linalg.inv(norm.floats()), H), 0.0))
        return Storage(norm.rows, rate, tuple(times[:q]), tuple(times[q:]), zeta.reshape(len(H)))
    return None


def _rows(network: Network, closed: tuple[ClosedUnit, ...], units: list[Storage], s: Array) -> Array:
    """Root-sum-square rows (6) at s, in floats."""
    names = [unit.kind.name for unit in closed]
    arriving = [np.zeros(len(unit.kind.takes)) for unit in closed]
    for link in network.links:
        i, j = names.index(link.kind), names.index(link.source_kind)
        zeta = units[j].zeta[closed[j].kind.index("offers", link.offer)]
        arriving[i][closed[i].kind.index("takes", link.take)] += abs(float(link.strength)) * zeta * s[j]
    squares = [
        float(np.sum(np.array([float(t) for t in one.tau]) * v**2)) / (2 * float(one.a))
        for one, v in zip(units, arriving, strict=True)
    ]
    return np.asarray(np.sqrt(np.array(squares)), dtype=np.float64)


def _point(network: Network, closed: tuple[ClosedUnit, ...], units: list[Storage]) -> tuple[float, Array]:
    """(largest ratio, s): iterating s + G(s), plus a little of one so that no entry vanishes."""
    s = np.ones(len(closed))
    for _ in range(400):
        s = s + _rows(network, closed, units, s)
        s = s / s.max() + 1e-9
    return float((_rows(network, closed, units, s) / s).max()), s


def _rate(network: Network, closed: tuple[ClosedUnit, ...], units: list[Storage], ratios: Array) -> Fraction:
    """The largest rate that every row allows by (8), a little less, cut to three digits."""

    def allowed(alpha: float) -> bool:
        for unit, one, ratio in zip(closed, units, ratios, strict=True):
            oldest = max((float(link.delay) for link in network.links if link.kind == unit.kind.name), default=0.0)
            if alpha > float(one.a) * (1 - ratio**2 * np.exp(2 * alpha * oldest)) * (1 - 1e-6):
                return False
        return True

    return bisect_rate(allowed, min(float(one.a) for one in units))

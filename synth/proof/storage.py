"""Evidence for the storage route: for each closed unit a quadratic storage function and multipliers (theory 3b).

For fixed gains, decay a and multipliers tau, the least Q = P^-1 with  AQ + QA' + 2aQ + D diag(1/tau) D' <= 0  is a sum
of Gramians, one per inlet and divided by its tau (Lyapunov's equation), and it makes every offer's size H Q H' least at
once. What is left is to share out  sum tau_l v_l^2 + share * sum tau_w,m w_m^2 <= 2a : with q_l = H Q_l H' the best is
tau_l in proportion to sqrt(q_l)/v_l, in closed form for one offer and by weights on the offers for several. v_l is what
arrives at take l if the others keep the sizes they promised, w_m the declared peak; two rounds adapt the promises.
Whatever comes out is relaxed a little, rounded, and verified by the checker alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from synth.base.progress import Listener
from synth.proof import check
from synth.proof.numbers import decimal_down, decimal_up, dyadic
from synth.proof.peak import bisect_rate, rounded_norm
from synth.proof.points import StorageRows, Terms, low_point, point_at, radius_and_point

Array = NDArray[np.float64]
_GRID = (0.15, 0.3, 0.45, 0.6, 0.75, 0.9)  # decay a of the storage function, as a part of the unit's own
# Weight of the declared disturbances against the links; smaller costs G, gains radius.
_SHARES = (0.3, 0.03, 1e-3, 1e-5)
_GENTLE = 30.0  # largest over smallest entry of a point that needs no other
_RELAX = 2e-5  # part by which an answer is relaxed before it is rounded
_ROUNDS = 2
_BALANCING = 12  # rounds of weights on several offers
_SPREAD = 1e-6  # a little of every state, so that P exists also where nothing reaches a state
_KRONECKER = 8  # states: up to here Lyapunov's equation is solved for all inlets at once


class Closed:
    """One closed unit in doubles: matrices, natural sizes of its states, and Gramians per decay."""

    def __init__(self, unit: check.Unit) -> None:
        """``unit`` as the checker closes it."""
        n, q = len(unit.A), len(unit.takes)
        self.unit, self.takes = unit, q
        self.A = _floats(unit.A, n)
        self.inputs = np.hstack([_floats(unit.D, q), _floats(unit.E, len(unit.disturbances))])
        lines = [line.x for line in unit.lines if line.role == "offer"]
        self.H = _floats(lines, n)
        self.peaks = np.array([float(peak) for _, _, peak in unit.disturbances])
        self.decay = -float(np.linalg.eigvals(self.A).real.max())
        _, (balance, _) = scipy.linalg.matrix_balance(self.A, permute=False, separate=True)
        self.balance = np.asarray(balance, dtype=np.float64)
        self.known: dict[float, tuple[Array, Array]] = {}

    def gramians(self, part: float) -> tuple[Array, Array]:
        """(Q of every inlet and, last, of all states; the sizes of the states that the last one is for)."""
        if part not in self.known:
            shifted = self.A + part * self.decay * np.eye(len(self.A))
            own = _lyapunov(shifted, self.inputs)
            reached = own.sum(axis=0).diagonal() if len(own) else np.zeros(len(self.A))
            relative = np.maximum(reached, 0.0) / self.balance**2
            top = float(relative.max(initial=0.0))
            sizes = self.balance * (np.sqrt(relative + 1e-6 * top) if top > 0 else 1.0)
            rest = _lyapunov(shifted, np.diag(sizes)).sum(axis=0)
            self.known[part] = np.concatenate([own, rest[None]]), sizes
        return self.known[part]


@dataclass(frozen=True)
class Storage:
    """One unit's candidate in doubles: Q = P^-1, a in 1/s, tau per take and then per disturbance; offer sizes zeta."""

    Q: Array
    a: float
    tau: Array
    zeta: Array
    sizes: Array


def fill_evidence(document: dict[str, Any], system: check.System, progress: Listener) -> str | None:
    """Fill in evidence, point and rate of the storage route; returns a sentence if it cannot reach the target."""
    for unit in system.units:
        if any(any(line.v + line.w) for line in unit.lines if line.role == "offer"):
            return f"{unit.name} offers a signal with feed-through, which only the peak route takes; use route peak"
    target = float(Fraction(document["target"]))
    terms, closed = Terms(system), [Closed(unit) for unit in system.units]
    best: tuple[float, list[Storage]] | None = None
    for share in _SHARES:
        progress(f"searching storage functions (weight of disturbances {share:g})")
        for part in _GRID if len(closed) <= 500 else _GRID[1::2]:
            units = _candidate(terms, closed, part, share)
            radius = _coarse(_rows(terms, closed, units), None if best is None else best[0])
            if radius is not None:
                best = radius, units
        if best is not None and best[0] <= target * (1 - 1e-4):
            break
    if best is None:
        return "no storage function was found for these gains"
    entries = [_entry(unit, one) for unit, one in zip(closed, best[1], strict=True)]
    if any(entry is None for entry in entries):
        return "no storage function was found for these gains that survives rounding"
    document["evidence"] = entries
    found = [_as_rounded(unit, entry) for unit, entry in zip(closed, entries, strict=True) if entry is not None]
    return _points(document, system, terms, closed, found)


def _points(
    document: dict[str, Any], system: check.System, terms: Terms, closed: list[Closed], units: list[Storage]
) -> str | None:
    """Point, radius and rate for the evidence as it stands in the file."""
    target = float(Fraction(document["target"]))
    rows = _rows(terms, closed, units)
    upper, s = radius_and_point(rows)
    low, lower = np.zeros(len(s)), 0.0
    for block in blocks_of(system):
        part = Terms(system, block)
        quotient, values = low_point(_rows(part, closed, units))
        low[part.stations] = values
        lower = max(lower, quotient)
    fast = _gentle(rows, upper, s)
    document["point"] = [
        {"of": station.name, "s": str(dyadic(v)), "low": str(dyadic(w) if w else Fraction(0)), "fast": str(dyadic(t))}
        for station, v, w, t in zip(system.stations, s.tolist(), low.tolist(), fast.tolist(), strict=True)
    ]
    if not np.isfinite(upper):
        return "the rows of the storage route are too large for this search"
    document["radius"] = {"lower": decimal_down(Fraction(min(lower, upper))), "upper": decimal_up(Fraction(upper))}
    if upper > target * (1 - 1e-8):
        return (
            f"the radius of the storage rows is {upper:.6g}, above the target {target:g}; ask for less "
            "coupling, other gains or a larger target"
        )
    document["constants"]["alpha"] = decimal_down(_rate(system, units, rows.touch(fast) @ fast / fast), 12)
    return None


def _gentle(rows: StorageRows, radius: float, s: Array) -> Array:
    """A point whose entries differ little, for C contains their spread; the nearer to the radius, the larger the rate.

    Where some units amplify what others hear, a point with quotients near the radius spreads over many decades.
    """
    best = s
    for part in (0.0, 0.02, 0.1, 0.5):
        found = point_at(rows, radius + part * (1 - radius)) if part and radius < 1 else s
        if found is not None and float(found.max() / found.min()) < 0.5 * float(best.max() / best.min()):
            best = found / found.max()
        if float(best.max() / best.min()) < _GENTLE:
            break
    return best


def blocks_of(system: check.System) -> list[int]:
    """The blocks a lower bound is looked for in: short lines never have a larger radius than what is covered anyway."""
    return sorted({station.block for station in system.stations if not station.name.startswith("line of ")})


def _rows(terms: Terms, closed: list[Closed], units: list[Storage]) -> StorageRows:
    tau = [one.tau[: unit.takes] for one, unit in zip(units, closed, strict=True)]
    return StorageRows(terms, tau, [one.a for one in units], [one.zeta for one in units])


def _coarse(rows: StorageRows, below: float | None) -> float | None:
    """The radius to a thousandth; None if it is not below the best so far."""
    radius, _ = radius_and_point(rows, 1e-3)
    return radius if np.isfinite(radius) and (below is None or radius < below) else None


def _candidate(terms: Terms, closed: list[Closed], part: float, share: float) -> list[Storage]:
    """Storage functions of all units with a = part of each unit's own decay."""
    sizes = np.ones(int(terms.first[-1]))
    found: list[Storage] = []
    for _ in range(_ROUNDS if len(terms.stations) > 1 or len(sizes) > 1 else 1):
        arriving = terms.matrix(terms.gain, sizes) @ sizes
        most = [np.zeros(unit.takes) for unit in closed]
        for n, owner in enumerate(terms.owner.tolist()):
            spec = terms.spec[owner]
            most[spec] = np.maximum(most[spec], arriving[terms.ports[n] : terms.ports[n + 1]])
        promised = [np.full(len(unit.H), np.inf) for unit in closed]
        for n, spec in enumerate(terms.spec.tolist()):
            promised[spec] = np.minimum(promised[spec], sizes[terms.first[n] : terms.first[n + 1]])
        found = [_shared(*x, part, share) for x in zip(closed, promised, most, strict=True)]
        zeta = np.concatenate([np.zeros(0), *(found[spec].zeta for spec in terms.spec.tolist())])
        sizes = np.sqrt(np.maximum(sizes * zeta, 1e-12))
    return found


def _shared(unit: Closed, promised: Array, arriving: Array, part: float, share: float) -> Storage:
    """The multipliers that make the largest offer least against what it promised, and the Q they give."""
    Q, sizes = unit.gramians(part)
    a = part * unit.decay
    cost = np.concatenate([arriving**2, share * unit.peaks**2])
    # A take nobody feeds, or a disturbance of peak zero, still needs a finite multiplier.
    cost = np.maximum(cost, 1e-6 * max(float(cost.max(initial=0.0)), 1e-9))
    seen = np.maximum(np.einsum("ki,jil,kl->kj", unit.H, Q[:-1], unit.H), 0.0) / promised[:, None] ** 2
    spread = np.einsum("jii,i->j", Q[:-1], 1 / sizes**2)
    # A little weight on all states keeps directions that no offer sees from growing without bound.
    top = float(seen.max(initial=0.0))
    hidden = spread * (1e-4 * top / max(float(spread.max(initial=0.0)), 1e-300) if top > 0 else 1.0)
    weight = np.full(len(unit.H), 1 / max(len(unit.H), 1))
    tau = np.zeros(len(cost))
    for _ in range(_BALANCING if len(unit.H) > 1 else 1):
        felt = np.maximum(weight @ seen + hidden, 1e-14 * max(top, 1e-300))
        tau = np.sqrt(felt / cost) * 2 * a / max(float(np.sqrt(felt * cost).sum()), 1e-300)
        value = seen @ (1 / tau) if len(tau) else np.zeros(len(weight))
        if not value.any():
            break
        weight = weight * np.sqrt(value / value.max() + 1e-12)
        weight = weight / weight.sum()
    whole = np.einsum("j,jil->il", 1 / tau, Q[:-1])
    size = float((whole.diagonal() / sizes**2).max(initial=0.0)) or 1.0
    whole = whole + _SPREAD * size / float((Q[-1].diagonal() / sizes**2).max()) * Q[-1]
    return Storage(whole, a, tau, _zeta(unit.H, whole), sizes)


def _zeta(H: Array, Q: Array) -> Array:
    return np.asarray(np.sqrt(np.maximum(np.einsum("ki,ij,kj->k", H, Q, H), 0.0)), dtype=np.float64)


def _floats(rows: check.Matrix, width: int) -> Array:
    return np.array([[float(v) for v in row] for row in rows], dtype=np.float64).reshape(len(rows), width)


def _lyapunov(A: Array, inputs: Array) -> Array:
    """For every column d of ``inputs`` the Q with A Q + Q A' + d d' = 0."""
    n, count = len(A), inputs.shape[1]
    outer = np.einsum("ij,kj->jik", inputs, inputs)
    if n <= _KRONECKER:
        eye = np.eye(n)
        both = np.kron(A, eye) + np.kron(eye, A)
        Q = np.linalg.solve(both, -outer.reshape(count, n * n).T).T.reshape(count, n, n)
    else:
        found = [scipy.linalg.solve_continuous_lyapunov(A, -one) for one in outer]
        Q = np.array(found, dtype=np.float64).reshape(count, n, n)
    return np.asarray((Q + Q.transpose(0, 2, 1)) / 2, dtype=np.float64)


def _entry(unit: Closed, one: Storage) -> dict[str, Any] | None:
    """Relax, round to short exact numbers, and keep the answer only if the exact elimination accepts it."""
    P = np.linalg.inv(one.Q / one.sizes[:, None] / one.sizes)
    P = (P + P.T) / 2 / one.sizes[:, None] / one.sizes
    unitless = float(np.abs(P).max())
    if not np.isfinite(unitless) or not unitless > 0:
        return None
    for relax in (_RELAX, 20 * _RELAX, 400 * _RELAX):
        norm = rounded_norm(np.asarray(P / unitless * one.sizes[:, None] * one.sizes), one.sizes)
        times = [dyadic(float(v) * (1 + relax) / unitless) for v in np.maximum(one.tau, 1e-300)]
        offers = [line.signal for line in unit.unit.lines if line.role == "offer"]
        entry = {
            "kind": unit.unit.name,
            "own": own_document(unit.unit, offers),
            "P": norm.texts(),
            "a": str(Fraction(decimal_down(Fraction(one.a * (1 - relax)), 8))),
            "tau": [str(v) for v in times[: unit.takes]],
            "tau_w": [str(v) for v in times[unit.takes :]],
        }
        try:
            check.verified(entry, unit.unit, storage=True)
        except check.Rejected:
            continue
        return entry
    return None


def own_document(unit: check.Unit, offers: list[str]) -> list[dict[str, str]]:
    """What is folded into a unit, as evidence names it."""
    return [{"take": unit.takes[take], "offer": offers[k], "strength": str(g)} for take, k, g in unit.own]


def _as_rounded(unit: Closed, entry: dict[str, Any]) -> Storage:
    """What an entry of the evidence says, in doubles."""
    P = np.array([[float(Fraction(v)) for v in row] for row in entry["P"]])
    tau = np.array([float(Fraction(v)) for v in [*entry["tau"], *entry["tau_w"]]])
    Q = np.linalg.inv(P)
    return Storage(Q, float(Fraction(entry["a"])), tau, _zeta(unit.H, Q), np.ones(len(P)))


def _rate(system: check.System, units: list[Storage], ratios: Array) -> Fraction:
    """The largest rate that every row allows by (8), a little less, cut to three digits."""
    oldest = np.array([
        max((float(term.delay) for case in station.cases for term in case), default=0.0) for station in system.stations
    ])  # fmt: skip
    a = np.array([units[station.spec].a for station in system.stations])

    def allowed(alpha: float) -> bool:
        if alpha * float(oldest.max()) > 300:
            return False
        return bool(np.all(alpha <= a * (1 - ratios**2 * np.exp(2 * alpha * oldest)) * (1 - 1e-6)))

    return bisect_rate(allowed, float(a.min()))

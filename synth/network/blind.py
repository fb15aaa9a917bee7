"""Obstructions of members, for networks from a handful of units to hundreds of thousands: theory (26), theta left out.

Whole network of at most ``EXACT_STATES`` states: exact, as for a cell of a pattern; up to ``DENSE_STATES``: every mode
that does not decay, numerically. Beyond that, exactly and kind by kind first:

    V* = the largest set of states that stay unseen by the unit's own sensors whatever its neighbours send

(the weakly unobservable subspace, textbook iteration). A unit with V* = 0 has x = 0 in every unseen mode, at any s and
in any network, so only units with V* != 0 ('blind') are left, in groups that hear each other. Every group is tested for

* a common drift, exactly: a direction that is the same in all its units of one kind, at s = 0;
* if it is small, every mode that does not decay, as above;
* if it is large, any direction at s = 0, numerically, where the sparse factors fit into memory.

What is not reached is the same question for the transposed network (inputs for sensors, offers for takes).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import connected_components, reverse_cuthill_mckee
from scipy.sparse.linalg import splu

from synth.network.advice import not_reached, not_seen, several
from synth.network.model import Network
from synth.network.phases import SEEN, Finding, exact_findings, heard_by_any, modes, smallest, unit_rows, worst_at
from synth.network.rational import Rows, null_space, reduced
from synth.network.symbol import Complex, member_symbol
from synth.network.transposing import Side, sides

EXACT_STATES = 30
DENSE_STATES = 120
MOST_GROUPS = 200
MOST_FILL = 30_000_000  # numbers in the factors of a sparse matrix, bounded by its profile
RESIDUAL = 1e-12

Announced = tuple[tuple[float, ...], complex, dict[str, complex], str, str]


def member_finding(network: Network) -> tuple[Announced | None, str]:
    """The obstruction of a network given by members, if one is found, and what was looked at."""
    members = network.members
    assert members is not None  # the caller has looked
    sizes = np.array([len(kind.states) for kind in network.kinds] or [0])
    states = int(sizes[members.kind].sum())
    if states <= DENSE_STATES:
        return _whole(network, states)
    tested: list[str] = []
    for side in sides(network):
        finding, words = _side_finding(network, side)
        tested.append(f"{side.cause}: {words}")
        if finding is not None:
            return finding, "; ".join(tested)
    return None, "; ".join(tested)


def _whole(network: Network, states: int) -> tuple[Announced | None, str]:
    symbol = member_symbol(network)
    finding = next(exact_findings(symbol, (), ()), None) if states <= EXACT_STATES else None
    tested = "this network as a whole, exactly" if states <= EXACT_STATES else (
        "every mode of this network that does not decay, numerically"
    )  # fmt: skip
    if finding is None:
        numeric = worst_at(symbol, (), heard_by_any(symbol))
        finding = numeric[1] if numeric is not None and numeric[0] < SEEN else None
    if finding is None:
        return None, tested
    extra = ""
    if finding.split:
        reach = ", ".join(symbol.actuators[i] for i in finding.split)
        extra = f" The actuators that could move it ({reach}) hear none of the sensors that see it."
    return _announced(symbol.names, finding, extra), tested


def _announced(names: Sequence[str], finding: Finding, extra: str = "") -> Announced:
    """The largest entries of a direction by name, and the advice."""
    direction = finding.direction / finding.direction[int(np.argmax(np.abs(finding.direction)))]
    order = np.argsort(-np.abs(direction), kind="stable")
    kept = sorted(int(k) for k in order[:50] if abs(direction[k]) > 1e-9)
    weights = {
        names[k]: complex(direction[k]) if abs(direction[k].imag) > 1e-9 else complex(direction[k].real) for k in kept
    }
    moving, how = several(tuple(weights)), "the units moving as this direction says"
    return (), finding.s, weights, finding.cause, advice_of(finding.cause, moving, how, finding.s) + extra


def advice_of(cause: str, moving: str, how: str, s: complex) -> str:
    """What to do about a mode of a finite network."""
    if cause == "not reached":
        return not_reached(moving, how, s)
    return not_seen(moving, how, s) + (
        f"Measure {moving} in the units themselves, against something outside the network (a position, a schedule, a "
        "common reference). A reference in one unit alone makes the mode visible but fades with the distance, so it "
        "must "
        "reach units at bounded gaps."
    )


def blind_states(A: Rows, D: Rows, C: Rows, N: Rows) -> Rows:
    """A basis of V*: the states from which some v(t) keeps C x + N v at zero for ever.

    V_0 = everything; V_{k+1} = {x in V_k : some v gives A x + D v in V_k and C x + N v = 0}.
    """
    n = len(A)
    inputs = len(D[0]) if D else 0
    outside: Rows = []  # rows whose kernel is V_k
    while True:
        both = [[*c, *m] for c, m in zip(C, N, strict=True)]
        both += [[*r, *([Fraction(0)] * inputs)] for r in outside]
        for row in outside:
            across = [sum((a * b for a, b in zip(row, col, strict=True)), Fraction(0)) for col in zip(*A, strict=True)]
            across += [sum((a * b for a, b in zip(row, col, strict=True)), Fraction(0)) for col in zip(*D, strict=True)]
            both.append(across)
        # Eliminate v: put its columns first; rows without a pivot among them bind x alone.
        turned = [[*row[n:], *row[:n]] for row in both]
        table, pivots = reduced(turned, inputs + n)
        fresh = [row[inputs:] for row, pivot in zip(table, pivots, strict=True) if pivot >= inputs]
        if len(fresh) == len(outside):
            return null_space(fresh, n)[0]
        outside = fresh


def _side_finding(network: Network, side: Side) -> tuple[Announced | None, str]:
    blind = []
    for k in range(len(network.kinds)):
        takes = sorted(side.entered[k])
        D = [[row[t] for t in takes] for row in side.D[k]]
        N = [[row[t] for t in takes] for row in side.N[k]]
        blind.append(bool(blind_states(side.A[k], D, side.C[k], N)))
    if not any(blind):
        does = "shows" if side.cause == "not seen" else "moves"
        return None, f"exactly and at every s, because every unit {does} all its states whatever its neighbours do"
    units = [i for i, k in enumerate(side.kind) if blind[k]]
    groups = _groups(units, side)
    words = "exactly, the common drift of each group of units"
    skipped = 0
    for group in groups[:MOST_GROUPS]:
        found = _drift(network, side, group)
        if found is not None:
            return found, words
        finding = _group_finding(network, side, group)
        if finding == "skipped":
            skipped += 1
        elif isinstance(finding, tuple):
            return finding, words
    words += f"; up to {DENSE_STATES} states, every mode that does not decay; beyond that every direction at s = 0"
    if skipped:
        words += f" (left out for {skipped} group{'s' if skipped > 1 else ''} too entangled for it)"
    if len(groups) > MOST_GROUPS:
        words += f"; the largest {MOST_GROUPS} of {len(groups)} groups"
    return None, words


def _groups(units: list[int], side: Side) -> list[list[int]]:
    """Blind units that hear each other, directly or by way of others; largest first."""
    place = {unit: n for n, unit in enumerate(units)}
    pairs = [(place[i], place[j]) for i in units for _, j, _, _ in side.couplings.get(i, ()) if j in place and i != j]
    rows, columns = (np.array([p[k] for p in pairs], dtype=np.int64) for k in (0, 1))
    graph = sparse.coo_matrix((np.ones(len(pairs)), (rows, columns)), shape=(len(units), len(units)))
    _, labels = connected_components(graph.tocsr(), directed=False)
    order = np.argsort(labels, kind="stable")
    cuts = np.flatnonzero(np.diff(labels[order])) + 1
    groups = [[units[n] for n in part.tolist()] for part in np.split(order, cuts)]
    return sorted(groups, key=len, reverse=True)


def _listeners(side: Side, group: list[int]) -> list[int]:
    """Units outside a group that hear it: nothing may arrive there, or they would move too."""
    inside = set(group)
    return [
        i for i, entries in side.couplings.items() if i not in inside and any(j in inside for _, j, _, _ in entries)
    ]


def _drift(network: Network, side: Side, group: list[int]) -> Announced | None:
    """A direction at s = 0 that is the same in all units of a kind, exactly.

    Unknown are the states xi and the received signals nu of each kind in the group; every unit gives the equations
    A xi + D nu = 0, C xi + N nu = 0, nu_l = sum g (H xi_j + F nu_j), and equal equations count once.
    """
    kinds = sorted({side.kind[i] for i in group})
    inside = set(group)
    start, width = {}, 0
    for k in kinds:
        start[k] = (width, width + len(side.A[k]))
        width += len(side.A[k]) + (len(side.D[k][0]) if side.D[k] else 0)
    equations: dict[tuple[Fraction, ...], None] = {}

    def add(terms: list[tuple[int, list[Fraction]]]) -> None:
        row = [Fraction(0)] * width
        for at, values in terms:
            for n, value in enumerate(values):
                row[at + n] += value
        if any(row):
            equations[tuple(row)] = None

    for k in kinds:
        x, v = start[k]
        for left, right in ((side.A[k], side.D[k]), (side.C[k], side.N[k])):
            for a, d in zip(left, right, strict=True):
                add([(x, a), (v, d)])
    seen: set[tuple[object, ...]] = set()
    for i in [*group, *_listeners(side, group)]:
        received: dict[int, dict[tuple[int, int], Fraction]] = {}
        for take, j, offer, g in side.couplings.get(i, ()):
            if j in inside:
                table = received.setdefault(take, {})
                at = (side.kind[j], offer)
                table[at] = table.get(at, Fraction(0)) + g
        k = side.kind[i]
        own = i in inside
        takes = range(len(side.D[k][0]) if side.D[k] else 0) if own else received
        signature = (k, own, tuple((t, tuple(sorted(received.get(t, {}).items()))) for t in takes))
        if signature in seen:
            continue
        seen.add(signature)
        for take in takes:
            terms = [(start[k][1] + take, [Fraction(-1)])] if own else []
            for (sender, offer), g in received.get(take, {}).items():
                x, v = start[sender]
                terms.append((x, [g * h for h in side.H[sender][offer]]))
                terms.append((v, [g * f for f in side.F[sender][offer]]))
            add(terms)
    solutions, _ = null_space([list(row) for row in equations], width)
    for solution in solutions:
        weights: dict[str, complex] = {}
        for k in kinds:
            for n, state in enumerate(network.kinds[k].states):
                if solution[start[k][0] + n]:
                    weights[f"{network.kinds[k].name}.{state.name}"] = complex(float(solution[start[k][0] + n]))
        if weights:
            largest = max(weights.values(), key=abs)
            weights = {name: value / largest for name, value in weights.items()}
            assert network.members is not None
            named = several(tuple(network.members.names[i] for i in group), 3)
            how = f"all units of its group ({named}) moving together by the same amount"
            return (), 0j, weights, side.cause, advice_of(side.cause, " and ".join(weights), how, 0j)
    return None


@dataclass(frozen=True)
class _Sparse:
    """[A, D; V H, V F - I; C, N] over the unknown states and received signals of a group."""

    matrix: sparse.csr_matrix
    states: list[tuple[int, int]]  # unit, state of the first columns
    own: list[int]  # the rows of A and D, in the order of the states
    received: list[int]  # the rows of the received signals, in the order of the last columns


def _group_matrix(side: Side, group: list[int]) -> _Sparse:
    inside = set(group)
    states = [(i, n) for i in group for n in range(len(side.A[side.kind[i]]))]
    column = {key: c for c, key in enumerate(states)}
    signals = [(i, t) for i in group for t in range(len(side.D[side.kind[i]][0]) if side.D[side.kind[i]] else 0)]
    signal = {key: len(states) + c for c, key in enumerate(signals)}
    data: list[tuple[int, int, float]] = []
    height, own_rows, received_rows = 0, [], {}
    for i in group:
        k = side.kind[i]
        for part, (left, right) in enumerate(((side.A[k], side.D[k]), (side.C[k], side.N[k]))):
            for a, d in zip(left, right, strict=True):
                if part == 0:
                    own_rows.append(height)
                data += [(height, column[i, n], float(value)) for n, value in enumerate(a) if value]
                data += [(height, signal[i, t], float(value)) for t, value in enumerate(d) if value]
                height += 1
    for i in [*group, *_listeners(side, group)]:
        rows: dict[int, int] = {}
        for take, j, offer, g in side.couplings.get(i, ()):
            if j not in inside:
                continue
            if take not in rows:
                rows[take] = height
                height += 1
            k = side.kind[j]
            data += [(rows[take], column[j, n], float(g * h)) for n, h in enumerate(side.H[k][offer]) if h]
            data += [(rows[take], signal[j, t], float(g * f)) for t, f in enumerate(side.F[k][offer]) if f]
        if i in inside:
            for take in range(len(side.D[side.kind[i]][0]) if side.D[side.kind[i]] else 0):
                if take not in rows:
                    rows[take] = height
                    height += 1
                data.append((rows[take], signal[i, take], -1.0))
                received_rows[signal[i, take]] = rows[take]
    r, c, values = (np.array([d[n] for d in data]) for n in range(3))
    shape = (height, len(states) + len(signals))
    matrix = sparse.coo_matrix((values, (r.astype(int), c.astype(int))), shape=shape).tocsr()
    return _Sparse(matrix, states, own_rows, [received_rows[c] for c in sorted(received_rows)])


def _group_finding(network: Network, side: Side, group: list[int]) -> Announced | str | None:
    """Any direction at s = 0 (large groups), any mode that does not decay (small ones); 'skipped': too entangled."""
    built = _group_matrix(side, group)
    names = network.members.names if network.members is not None else ()

    def named(direction: Complex, s: complex) -> Announced:
        labels = [f"{names[i]}.{network.kinds[side.kind[i]].states[n].name}" for i, n in built.states]
        return _announced(labels, Finding((), s, direction, side.cause))

    if len(built.states) <= DENSE_STATES:
        return _dense_finding(built, named)
    scale = np.maximum(np.asarray(abs(built.matrix).max(axis=1).todense()).ravel(), 1e-300)
    matrix = (sparse.diags(1 / scale) @ built.matrix).tocsr()
    normal = (matrix.T @ matrix).tocsr()
    order = reverse_cuthill_mckee(normal, symmetric_mode=True)
    ordered = normal[order][:, order].tocoo()
    profile = int(np.max(np.abs(ordered.row - ordered.col), initial=0)) + 1
    if profile * ordered.shape[0] > MOST_FILL:
        return "skipped"
    solver = splu((ordered + 1e-13 * sparse.eye(ordered.shape[0])).tocsc(), permc_spec="NATURAL")
    vector = np.random.default_rng(0).standard_normal(ordered.shape[0])
    for _ in range(4):
        vector = solver.solve(vector)
        vector /= np.abs(vector).max()
    direction = np.zeros_like(vector)
    direction[order] = vector
    if np.abs(matrix @ direction).max() > RESIDUAL:
        return None
    return named(direction[: len(built.states)].astype(complex), 0j)


def _dense_finding(built: _Sparse, named: Callable[[Complex, complex], Announced]) -> Announced | None:
    """Every s with Re s >= 0 of a small group, with the received signals eliminated."""
    whole, n = built.matrix.toarray(), len(built.states)
    own, received = whole[built.own], whole[built.received]
    others = whole[np.setdiff1d(np.arange(len(whole)), np.concatenate([built.own, built.received]).astype(int))]
    if len(built.received) and np.linalg.cond(received[:, n:]) > 1e12:
        return None
    heard = -np.linalg.solve(received[:, n:], received[:, :n]) if len(built.received) else np.zeros((0, n))
    A = (own[:, :n] + own[:, n:] @ heard).astype(complex)
    C = (others[:, :n] + others[:, n:] @ heard).astype(complex)
    scale = max(1e-12, float(np.linalg.norm(A, 2)))
    C = unit_rows(C, np.linalg.norm(C, axis=1), scale)
    for s in modes(A, scale):
        size, direction = smallest(np.vstack([A - s * np.eye(n), C]))
        if size < SEEN * scale:
            return named(direction, complex(max(s.real, 0.0), s.imag))
    return None

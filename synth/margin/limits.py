"""How much stronger the links may get while the declared disturbances keep every actuator and band inside its bound.

Theory (3): offered peaks z <= (I - M)^{-1} p_w w from rest, then the peak of every actuator and state from z and w.
The search runs on fast estimates; what is claimed is what a certificate says at the end.
"""

from __future__ import annotations

from math import inf

import numpy as np
from numpy.typing import NDArray

from synth.gain.closed import ClosedUnit, close_network
from synth.gain.guide import peak_gain_guide
from synth.margin.coupling import Scaling, tidy

Array = NDArray[np.float64]


def has_limits(scaling: Scaling) -> bool:
    """Whether any actuator limit or band is declared."""
    return any(
        any(a.limit is not None for a in kind.inputs) or any(s.band is not None for s in (*kind.states, *kind.offers))
        for kind in scaling.network.kinds
    )


def worst_use(scaling: Scaling, factor: float) -> float:
    """Estimate of the largest peak over its bound under the declared disturbances, from rest (inf: no proof).

    Below one every actuator stays below its limit and every state and offered signal inside its band. Theory (3).
    """
    network = scaling.at(tidy(factor))
    closed = close_network(network, scaling.gains)
    tables = []
    for unit in closed:
        table = _tables(unit)
        if table is None:
            return inf
        tables.append(table)
    position = {unit.kind.name: i for i, unit in enumerate(closed)}
    first = [sum(len(u.kind.offers) for u in closed[:i]) for i in range(len(closed))]
    total = sum(len(u.kind.offers) for u in closed)
    intake = [np.zeros((len(u.kind.takes), total)) for u in closed]  # |v| <= intake @ z
    for link in network.links:
        i, j = position[link.kind], position[link.source_kind]
        column = first[j] + closed[j].kind.index("offers", link.offer)
        intake[i][closed[i].kind.index("takes", link.take), column] += abs(float(link.strength))
    M, b = np.zeros((total, total)), np.zeros(total)
    for i, unit in enumerate(closed):
        rows = slice(first[i], first[i] + len(unit.kind.offers))
        from_links, from_outside = _parts(unit, tables[i], slice(0, len(unit.kind.offers)))
        M[rows], b[rows] = from_links @ intake[i], from_outside
    if total and np.max(np.abs(np.linalg.eigvals(M))) >= 1 - 1e-9:
        return inf
    z = np.linalg.solve(np.eye(total) - M, b)
    worst = 0.0
    for i, unit in enumerate(closed):
        from_links, from_outside = _parts(unit, tables[i], slice(0, len(tables[i])))
        peaks = from_links @ (intake[i] @ z) + from_outside
        kind = unit.kind
        bounds = [s.band for s in kind.offers] + [a.limit for a in kind.inputs] + [s.band for s in kind.states]
        pairs = [(float(p), float(bound)) for p, bound in zip(peaks, bounds, strict=True) if bound is not None]
        worst = max([worst, *(_ratio(peak, bound) for peak, bound in pairs)])
    return worst


def largest_within(scaling: Scaling, proven: float, width: float) -> float:
    """Largest factor, found going outward from today's strength, at which :func:`worst_use` stays below one.

    Not above ``proven``; 0 if the bounds fail at every factor tried.
    """
    start = min(1.0, proven)
    if start <= 0:
        return 0.0
    top = min(proven, 1e6)
    if worst_use(scaling, start) < 1:
        low = start
        while low < top:
            high = min(low * 1.1, top)
            if worst_use(scaling, high) >= 1:
                return _bisect(scaling, low, high, width)
            low = high
        return float(tidy(low))
    high = start
    while high > 1e-4:
        low = high / 1.2
        if worst_use(scaling, low) < 1:
            return _bisect(scaling, low, high, width)
        high = low
    return 0.0


def _bisect(scaling: Scaling, low: float, high: float, width: float) -> float:
    while high - low > width / 2 * high:
        middle = (low + high) / 2
        if worst_use(scaling, middle) < 1:
            low = middle
        else:
            high = middle
    return float(tidy(low))


def _tables(unit: ClosedUnit) -> Array | None:
    """Peak gains of one unit: rows offers, actuators, states; columns takes, disturbances; None if it is unstable.

    Estimates with a surcharge of 1e-5: they decide where to look for a certificate, nothing else.
    """
    n = unit.A.shape[0]
    inputs = np.hstack([unit.D.floats(), unit.E.floats()])
    outputs = np.vstack([unit.H.floats(), unit.U.floats(), np.eye(n)])
    direct = np.zeros((len(outputs), inputs.shape[1]))
    offers, takes = unit.H.shape[0], unit.D.shape[1]
    direct[:offers, :takes], direct[:offers, takes:] = unit.F.floats(), unit.Fw.floats()
    direct[offers : offers + unit.U.shape[0], :takes] = unit.UV.floats()
    found = peak_gain_guide(unit.A.floats(), inputs, outputs, direct)
    return None if found is None else found.gains * (1 + 1e-5)


def _parts(unit: ClosedUnit, table: Array, rows: slice) -> tuple[Array, Array]:
    """Rows of the table split into the links' part and the disturbances' part times their declared peaks."""
    takes = len(unit.kind.takes)
    peaks = np.array([float(w.peak) for w in unit.kind.disturbances])
    return table[rows, :takes], table[rows, takes:] @ peaks


def _ratio(peak: float, bound: float) -> float:
    if bound > 0:
        return peak / bound
    return inf if peak > 0 else 0.0

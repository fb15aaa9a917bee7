"""How much stronger the links may get while the declared disturbances keep every actuator and band inside its bound.

Theory (3): offered peaks z <= (I - M)^{-1} p_w w from rest, then the peak of every actuator and state from z and w.
The search runs on fast estimates; what is claimed is what a certificate says at the end.
"""

from __future__ import annotations

from math import inf

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array, csr_array, eye_array
from scipy.sparse.linalg import spsolve

from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import across, section_wiring, settled_cells, wiring_of
from synth.gain.guide import peak_gain_guide
from synth.gain.operator import GainOperator
from synth.gain.plan import Indices, Wiring, plan_of_units, starts
from synth.margin.folded import Scaling, rays_of, tidy
from synth.network.model import Network

Array = NDArray[np.float64]


def has_limits(scaling: Scaling) -> bool:
    """Whether any actuator limit or band is declared."""
    return any(
        any(a.limit is not None for a in kind.inputs) or any(s.band is not None for s in (*kind.states, *kind.offers))
        for kind in scaling.network.kinds
    )


def worst_use(scaling: Scaling, factor: float) -> float:
    """Estimate of the largest peak over its bound under the declared disturbances, from rest (inf: no proof).

    Below one every actuator stays below its limit and every state and offered signal inside its band. Theory (3). Of an
    edge pattern: of the bulk and of sections cut off at the edges, which hear less than the whole line.
    """
    network = scaling.at(tidy(factor))
    return max(_worst_of(wiring, scaling) for wiring in _wirings(network))


def _wirings(network: Network) -> list[Wiring]:
    found = [wiring_of(network)]
    if network.description == "edge pattern":
        line = across(network)
        found += [section_wiring(line, edge, 3 * settled_cells(line, edge)) for edge in line.edges]
    return found


def _worst_of(wiring: Wiring, scaling: Scaling) -> float:
    plan = plan_of_units(wiring)
    closed = close_plan(plan, scaling.gains)
    tables = [_tables(unit) for unit in closed]
    if any(table is None for table in tables):
        return inf
    parts = [
        _parts(unit, table, slice(0, len(table)))
        for unit, table in zip(closed, tables, strict=True)
        if table is not None
    ]
    spec = plan.unit_spec
    takes = np.array([len(unit.kind.takes) for unit in closed], dtype=np.intp)[spec]
    first_take, first_row = starts(takes), plan.first_row
    rows, columns, values, b = [], [], [], np.zeros(plan.size)
    for k, unit in enumerate(closed):
        units, offers = np.flatnonzero(spec == k), len(unit.kind.offers)
        for q in range(offers):
            b[first_row[units] + q] = parts[k][1][q]
            for take in range(len(unit.kind.takes)):
                rows.append(first_row[units] + q)
                columns.append(first_take[units] + take)
                values.append(np.full(units.size, parts[k][0][q, take]))
    ends = [np.concatenate(x) if x else np.zeros(0) for x in (values, rows, columns)]
    heads = coo_array(
        (ends[0], (ends[1].astype(int), ends[2].astype(int))), shape=(plan.size, int(first_take[-1]))
    ).tocsr()
    rays = rays_of(wiring)
    at, source = first_take[rays.to] + rays.take, first_row[rays.source] + rays.offer
    brought = _settled(heads, at, source, rays.strength, rays.group, b)
    if brought is None:
        return inf
    worst = 0.0
    for k, unit in enumerate(closed):
        units, kind = np.flatnonzero(spec == k), unit.kind
        arriving = brought[first_take[units][:, None] + np.arange(len(kind.takes))]
        peaks = (arriving @ parts[k][0].T + parts[k][1]).max(axis=0, initial=0.0)
        bounds = [s.band for s in kind.offers] + [a.limit for a in kind.inputs] + [s.band for s in kind.states]
        pairs = [(float(p), float(bound)) for p, bound in zip(peaks, bounds, strict=True) if bound is not None]
        worst = max([worst, *(_ratio(peak, bound) for peak, bound in pairs)])
    return worst


def _settled(
    heads: csr_array, take: Indices, source: Indices, strength: Array, group: Indices, b: Array
) -> Array | None:
    """What arrives at every take where z = heads (largest rays of z) + b; None if the radius is one or more.

    Policies: the largest ray of every group, solve, choose again (the sizes only grow, so it ends).
    """
    size, width = heads.shape
    z = b + (b == 0) * 1e-300
    chosen = None
    for _ in range(40):
        value = strength * z[source]
        order = np.lexsort((strength, value, group))
        last = np.append(group[order][1:] != group[order][:-1], True) if group.size else np.zeros(0, dtype=bool)
        again = np.sort(order[last])
        if chosen is not None and np.array_equal(again, chosen):
            break
        chosen = again
        web = coo_array((strength[chosen], (take[chosen], source[chosen])), shape=(width, size)).tocsr()
        M = (heads @ web).tocsr()
        if size and _too_large(M):
            return None
        z = np.atleast_1d(spsolve((eye_array(size, format="csc") - M).tocsc(), b)) if size else z
    return np.asarray(web @ z) if size else np.zeros(width)


def _too_large(M: csr_array) -> bool:
    """Whether the Perron root is one or more: a small matrix by its eigenvalues, a large one by its operator."""
    if M.shape[0] <= 60:
        return bool(np.max(np.abs(np.linalg.eigvals(M.toarray()))) >= 1 - 1e-9)
    entries = M.tocoo()
    operator = GainOperator.from_links(M.shape[0], entries.row, entries.col, entries.data)
    return operator.radius(1e-6).upper >= 1 - 1e-9


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

"""What holds the radius of one strongly connected class up: its largest loop, or its strongest links.

Sum rows: d log radius / d log gain of link l is left_to g_l right_source / (radius left'right) with the left and right
Perron vectors (theory (15)). Rows of other types: the same for the matrix of active slopes at the point found.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.gain.operator import MAX, Floats, GainOperator

# Links that carry less than this share of the strongest one are left out of the list, and so are more than these many.
_LEAST_SHARE = 1e-3
_MOST_LINKS = 10_000
_DENSE = 300


@dataclass(frozen=True)
class Bottleneck:
    """What holds the radius up.

    ``loop``: True if ``links`` are, in order, the links of one closed loop (max rows: its geometric mean is the
    radius); False if they are the links that contribute most, strongest first. ``links``: link numbers of the operator;
    ``outlets``: the outlet each of them ends at; ``shares``: d log radius / d log gain of each link at the point found
    (they add up to one over all links; theory (15)). Shares are worked out in doubles: a guide, no claim.
    """

    loop: bool
    links: tuple[int, ...]
    outlets: tuple[int, ...]
    shares: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class Leading:
    """The class with the largest radius: its operator, its points and where it lies in the whole operator.

    ``mantissa`` * 2**``exponent`` (None: zero) is its point; ``loop`` as in ClassPoint; ``upper`` its upper bound.
    """

    members: NDArray[np.intp]
    links: NDArray[np.intp]
    inner: GainOperator
    mantissa: Floats
    exponent: NDArray[np.int64] | None
    upper: float
    loop: tuple[int, ...] | None

    def bottleneck(self) -> Bottleneck:
        """The loop (all rows max) or the strongest links."""
        inner = self.inner
        all_max = bool(np.all(inner.codes == MAX))
        weights = _relative_weights(inner, self.mantissa, self.exponent)
        if all_max:
            local = list(self.loop[::-1]) if self.loop else _loop(inner, weights)
            shares = [1.0 / len(local)] * len(local)
        else:
            share = _left(inner, weights, self.upper)[inner.to] * weights
            total = float(share.sum())
            share = share / total if total > 0 else share
            order = np.argsort(-share, kind="stable")[:_MOST_LINKS]
            local = [int(k) for k in order if share[k] >= _LEAST_SHARE * share[order[0]]]
            shares = [float(share[k]) for k in local]
        links = tuple(int(self.links[k]) for k in local)
        outlets = tuple(int(self.members[inner.to[k]]) for k in local)
        return Bottleneck(all_max, links, outlets, tuple(shares))


def _relative_weights(inner: GainOperator, mantissa: Floats, exponent: NDArray[np.int64] | None) -> Floats:
    """Active slopes in the coordinates of the point: they add up to the quotients row by row."""
    plan = inner.layout
    shift = np.zeros(inner.size, dtype=np.int64) if exponent is None else exponent
    gap = np.clip(shift[plan.source] - shift[plan.row_of_link], -1000, 1000).astype(np.int32)
    with np.errstate(over="ignore", under="ignore"):
        terms = np.ldexp(plan.gain * (mantissa[plan.source] / mantissa[plan.row_of_link]), gap)
        weights = np.where(plan.winners(terms), terms, 0.0)
        if not plan.single_inlets:
            inlets = plan.inlets(plan.pieces(terms))
            row = plan.collect(terms)[plan.row][plan.row_of_inlet]
            share = np.divide(inlets, row, out=np.zeros(inlets.size), where=row > 0)
            weights *= share[plan.inlet_of_piece][plan.piece_of_link]
    result = np.empty(weights.size)
    result[plan.order] = weights
    return result


def _left(inner: GainOperator, weights: Floats, upper: float) -> Floats:
    """The left Perron vector of the matrix of weights."""
    if inner.size <= _DENSE:
        matrix = np.zeros((inner.size, inner.size))
        np.add.at(matrix, (inner.to, inner.source), weights)
        values, vectors = np.linalg.eig(matrix.T)
        left: Floats = np.abs(np.real(vectors[:, int(np.argmax(values.real))]))
        return left
    from scipy.sparse import csr_array

    from synth.gain.solving.krylov import bicgstab, factored, may_factor

    turned = csr_array((weights, (inner.source, inner.to)), shape=(inner.size, inner.size))
    # Just above the radius one solve is the left Perron vector up to the distance over the gap.
    for distance in (1e-9, 1e-7, 1e-5):
        solved = bicgstab(turned, upper * (1 + distance))
        if solved.proves:
            return solved.x
        x = factored(turned, upper * (1 + distance)) if may_factor(turned) else None
        if x is not None and x.min() > 0:
            return x
    x = np.ones(inner.size)
    for _ in range(300):
        x = turned @ x + upper * x
        x /= x.max()
    return x


def _loop(inner: GainOperator, weights: Floats) -> list[int]:
    """The loop of active links with the largest geometric mean, each link followed by the one it feeds."""
    active = {int(inner.to[k]): int(k) for k in np.flatnonzero(weights > 0)}
    best: list[int] = []
    best_mean = -np.inf
    seen: set[int] = set()
    for start in active:
        path: list[int] = []
        place: dict[int, int] = {}
        node = start
        while node not in seen and node not in place:
            place[node] = len(path)
            path.append(active[node])
            node = int(inner.source[active[node]])
        if node in place:
            cycle = path[place[node] :]
            mean = float(np.mean(np.log(inner.gain[cycle])))
            if mean > best_mean:
                best, best_mean = cycle[::-1], mean
        seen.update(place)
    return best

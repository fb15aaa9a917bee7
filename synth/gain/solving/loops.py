"""The radius of max rows: the largest geometric mean of gains round a loop, and a point that shows it is the largest.

Everything is done on binary logarithms of the gains in whole numbers (fixed point), so that sums along paths of any
length are exact and every decision is an exact comparison. With w the logarithms and mu a mean of some loop, values
v_i >= w_l - mu + v_source(l) for all links prove that no loop has a larger mean; then 2^v is a point with every
quotient at or below 2^mu. Two classical methods are joined, as neither is robust alone:

* Howard's policy iteration for the largest cycle mean (Howard 1960; Cochet-Terrasson, Cohen, Gaubert, Mc Gettrick,
  Quadrat 1998): a dozen sweeps usually find the loop;
* longest paths by relaxation with detection of positive cycles (Bellman 1958, Ford 1956; the Kleene star of the scaled
  operator), which starts from Howard's values: the forest of the links that raised a value is followed to its end in
  one go, and a loop that closes in it has a larger mean than mu, which then becomes the new mu.

That joining, and its end: mu only grows and takes values among means of simple loops; between two growths the values
only grow, by a whole number of units each time, and stay below those of the longest simple paths. Ours.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from synth.gain.operator import Floats, GainOperator
from synth.gain.solving.points import ClassPoint

Whole = NDArray[np.int64]
# Improvements below this share of the width asked for do not change the answer, and chasing them costs sweeps.
_SLACK = 0.2
# Corrections of the loop's own values: each one squares the error, which starts near 1e-11.
_POLISH = 2


@dataclass
class _Graph:
    """Links sorted by the outlet they end at: ``start`` of every row, logarithms in fixed point (``unit`` is one)."""

    start: NDArray[np.intp]
    to: NDArray[np.intp]
    source: NDArray[np.intp]
    weight: Whole
    unit: float
    order: NDArray[np.intp]


def solve(inner: GainOperator, width: float) -> ClassPoint | None:
    """The point and the loop of one strongly connected class, only max rows: one link at least into every outlet.

    ``inner``: gains > 0; ``width`` relative, > 0. The point has every quotient at or below the loop's mean times
    (1 + width / 4) up to rounding; the low point lives on the loop and has equal quotients there up to rounding.
    None where a row is not a max row or has no link.
    """
    if any(kind != "max" for kind in inner.rows) or not inner.gain.size or np.min(inner.gain) <= 0:
        return None
    graph = _sorted(inner)
    if np.any(np.diff(np.append(graph.start, graph.to.size)) == 0):
        return None
    slack = max(0, int(_SLACK * width / np.log(2) * graph.unit))
    values, loop, work = _largest_mean(graph, slack)
    links = graph.order[loop]
    # Each link is to be followed by the one that feeds it.
    exponent, fraction = _split(values, graph.unit)
    low, low_exponent = _on_loop(inner, links)
    return ClassPoint(
        point=fraction,
        exponent=exponent,
        low_point=low,
        low_exponent=low_exponent,
        method="largest loop by policy sweeps and longest paths",
        work=work,
        loop=tuple(links.tolist()),
    )


def _sorted(inner: GainOperator) -> _Graph:
    order = np.argsort(inner.to, kind="stable")
    to, source = inner.to[order], inner.source[order]
    logarithm = _log2(inner.gain[order])
    # Common shifts of all logarithms only shift the mean; around their middle the sums stay small.
    middle = float(np.median(logarithm))
    logarithm = logarithm - middle
    # A path is a sum of at most size terms, each reduced by a mean: twice the largest logarithm. One bit to spare.
    largest = max(1.0, float(np.max(np.abs(logarithm))))
    bits = min(48, int(61 - np.ceil(np.log2(2 * largest * (inner.size + 1)))))
    unit = float(2**bits)
    weight = np.rint(logarithm * unit).astype(np.int64)
    start = np.searchsorted(to, np.arange(inner.size))
    return _Graph(start, to, source, weight, unit, order)


def _log2(gain: Floats) -> Floats:
    """Binary logarithms; the exponent apart, so that the rest is good to its own last digits."""
    mantissa, exponent = np.frexp(gain)
    return exponent + np.log2(mantissa)


def _largest_mean(graph: _Graph, slack: int) -> tuple[Whole, NDArray[np.intp], int]:
    """Values, the loop (positions in the sorted links, each followed by the one that feeds it) and sweeps."""
    size = graph.start.size
    # The strongest link into every outlet: a loop always closes among these.
    policy = _strongest(graph, graph.weight, np.maximum.reduceat(graph.weight, graph.start))
    loop = _best_loop(graph, policy, graph.weight)
    assert loop is not None
    mean = _ceiling(graph, loop)
    values = np.zeros(size, dtype=np.int64)
    # The values come from the loop through the links chosen so far; the loop's own first outlet is where they start.
    parent = policy.copy()
    parent[graph.to[loop[0]]] = -1
    parent = _cut_loops(graph, parent)
    values = _follow(graph, parent, values, graph.weight - mean)
    work = 1
    while True:
        work += 1
        reduced = graph.weight - mean
        terms = reduced + values[graph.source]
        most = np.maximum.reduceat(terms, graph.start)
        better = most > values + slack
        if not better.any():
            return values, loop, work
        chosen = _strongest(graph, terms, most)
        parent = np.where(better, chosen, parent)
        values = np.where(better, most, values)
        found = _best_loop(graph, parent, reduced)
        if found is not None:
            larger = _ceiling(graph, found)
            if larger > mean:
                loop, mean = found, larger
            # Cut the loop where it was found, so that the values have somewhere to start.
            parent[graph.to[found[0]]] = -1
            parent = _cut_loops(graph, parent)
        values = _follow(graph, parent, values, graph.weight - mean)


def _strongest(graph: _Graph, terms: Whole, most: Whole) -> NDArray[np.intp]:
    """Position of the first largest term of every row."""
    hit = np.flatnonzero(terms == most[graph.to])
    chosen = np.empty(graph.start.size, dtype=np.intp)
    # Written backwards, so that the first of equals stays.
    chosen[graph.to[hit[::-1]]] = hit[::-1]
    return chosen


def _feeder(graph: _Graph, parent: NDArray[np.intp]) -> NDArray[np.intp]:
    """For every outlet the outlet that its chosen link comes from; itself where none is chosen."""
    own = np.arange(parent.size)
    return np.where(parent >= 0, graph.source[np.maximum(parent, 0)], own)


def _labels(graph: _Graph, parent: NDArray[np.intp]) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    """Numbers of the loops that the chosen links close, and which outlets lie on one."""
    size = parent.size
    feeder = _feeder(graph, parent)
    chosen: Any = csr_array((np.ones(size), feeder, np.arange(size + 1)), shape=(size, size))
    _, label = connected_components(chosen, directed=True, connection="strong")
    count = np.bincount(label)
    on: NDArray[np.bool_] = (count[label] > 1) | ((feeder == np.arange(size)) & (parent >= 0))
    return label.astype(np.intp), on


def _best_loop(graph: _Graph, parent: NDArray[np.intp], weight: Whole) -> NDArray[np.intp] | None:
    """The loop with the largest mean among those the chosen links close; each link is followed by its feeder."""
    label, on = _labels(graph, parent)
    nodes = np.flatnonzero(on)
    if nodes.size == 0:
        return None
    _, which = np.unique(label[nodes], return_inverse=True)
    means = np.bincount(which, weights=weight[parent[nodes]].astype(float)) / np.bincount(which)
    members = nodes[which == int(np.argmax(means))]
    return _walk(graph, parent, members)


def _walk(graph: _Graph, parent: NDArray[np.intp], members: NDArray[np.intp]) -> NDArray[np.intp]:
    feeder = graph.source[parent[members]]
    follow = dict(zip(members.tolist(), feeder.tolist(), strict=True))
    path = [int(members[0])]
    for _ in range(len(members) - 1):
        path.append(follow[path[-1]])
    return parent[np.array(path, dtype=np.intp)]


def _cut_loops(graph: _Graph, parent: NDArray[np.intp]) -> NDArray[np.intp]:
    """Every loop that the chosen links still close, opened at its first outlet."""
    label, on = _labels(graph, parent)
    nodes = np.flatnonzero(on)
    if nodes.size:
        _, first = np.unique(label[nodes], return_index=True)
        parent = parent.copy()
        parent[nodes[first]] = -1
    return parent


def _ceiling(graph: _Graph, loop: NDArray[np.intp]) -> int:
    """The mean of a loop rounded up to a whole unit, in whole numbers of any length."""
    total: int = sum(graph.weight[loop].tolist())
    return -(-total // int(loop.size))


def _follow(graph: _Graph, parent: NDArray[np.intp], values: Whole, reduced: Whole) -> Whole:
    """Values along the chosen links from where they start, by doubling: the paths are followed to their end."""
    far = _feeder(graph, parent)
    along = np.where(parent >= 0, reduced[np.maximum(parent, 0)], 0)
    while True:
        next_far = far[far]
        if np.array_equal(next_far, far):
            return values[far] + along
        along = along + along[far]
        far = next_far


def _split(values: Whole, unit: float) -> tuple[NDArray[np.int64], Floats]:
    """Fixed point logarithms as whole exponents and mantissas in [1, 2)."""
    bits = int(unit).bit_length() - 1
    exponent = values >> bits
    return exponent, np.exp2((values - (exponent << bits)) / unit)


def _on_loop(inner: GainOperator, links: NDArray[np.intp]) -> tuple[Floats, NDArray[np.int64]]:
    """Values on the outlets of the loop with equal quotients: each times the mean is the gain times the one before."""
    gain = inner.gain[links][::-1]
    nodes = inner.to[links][::-1]
    logarithm = _log2(gain)
    steps = logarithm - np.mean(logarithm)
    whole, part = _sum_up(steps)
    for _ in range(_POLISH):
        # How far each quotient is off, from the numbers themselves, and the correction summed up along the loop.
        value = np.exp2(part)
        scaled, power = np.frexp(gain)
        before, before_whole = np.roll(value, 1), np.roll(whole, 1)
        mean = float(np.mean(logarithm))
        off = np.log2(scaled * before / value) + (power + before_whole - whole - mean)
        off -= np.mean(off)
        part = part + np.cumsum(off)
    low = np.zeros(inner.size)
    exponent = np.zeros(inner.size, dtype=np.int64)
    low[nodes] = np.exp2(part)
    exponent[nodes] = whole
    return low, exponent


def _sum_up(steps: Floats) -> tuple[NDArray[np.int64], Floats]:
    """Running sums as whole part and fraction, exact in fixed point, so that long loops lose nothing."""
    largest = max(1.0, float(np.max(np.abs(steps))))
    bits = min(50, int(61 - np.ceil(np.log2(largest * (steps.size + 1)))))
    total = np.cumsum(np.rint(steps * 2.0**bits).astype(np.int64))
    whole = total >> bits
    return whole, (total - (whole << bits)) / 2.0**bits

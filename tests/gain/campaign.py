"""Random operators of every shape, and their radius worked out another way: slow, and without any code of the package.

The value comes from theory (11) and the convexity of the rows: G is the largest of the matrices that one obtains by
choosing one link of every maximum and, for a root of squares, any weights on the unit sphere. So

* choices are few for small operators: all of them are tried, and where no root occurs the radius is the largest
  eigenvalue of the matrices found (balanced first; numpy's dense solver);
* where roots occur, or choices are many, the definition itself is iterated row by row in logarithms from a vector of
  ones, halfway between s and G(s) so that it cannot go in circles, inside every strongly connected class; its smallest
  and largest quotients on the way are the two numbers.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from fractions import Fraction

import networkx as nx
import numpy as np

from synth.gain import GainOperator

ROWS = ("sum", "max", "root_sum_square")


@dataclass(frozen=True)
class Case:
    """Plain lists, from which both the operator and the slow value are made."""

    size: int
    to: list[int]
    source: list[int]
    gain: list[float]
    rows: list[str]
    inlet: list[int]
    choice: list[int]

    def operator(self) -> GainOperator:
        return GainOperator.from_links(
            self.size, self.to, self.source, self.gain, self.rows, self.inlet, self.choice if self.size else None
        )


def random_case(rng: np.random.Generator) -> Case:
    """Sizes 1 to 8; shapes: anything, one loop (periodic), one-way blocks (reducible); gains over up to 12 decades."""
    size = int(rng.integers(1, 9))
    shape = rng.choice(["any", "loop", "blocks", "ring"])
    count = int(rng.integers(0, 3 * size + 1))
    to, source = rng.integers(0, size, count), rng.integers(0, size, count)
    if shape == "loop":
        to, source = np.arange(size), (np.arange(size) - 1) % size
        if rng.random() < 0.5:
            to, source = np.append(to, to), np.append(source, source)
    elif shape == "blocks":
        keep = to // 2 >= source // 2
        to, source = to[keep], source[keep]
    elif shape == "ring":
        i = np.arange(size)
        to, source = np.concatenate([i, i]), np.concatenate([(i + 1) % size, (i - 1) % size])
    count = to.size
    decades = rng.choice([0.0, 1.0, 6.0, 12.0])
    gain = 10.0 ** rng.uniform(-decades / 2, decades / 2, count)
    if rng.random() < 0.2:
        gain = np.ones(count)
    if count and rng.random() < 0.1:
        gain[rng.integers(0, count)] = 0.0
    if rng.random() < 0.6:
        rows = [str(rng.choice(ROWS)) for _ in range(size)]
    else:
        rows = [str(rng.choice(ROWS))] * size
    inlet = rng.integers(0, 3, count)
    choice = np.where(rng.random(count) < 0.4, rng.integers(0, 2, count), -1)
    # Alternatives of a row that is a root of squares enter one inlet.
    inlet = np.where(choice >= 0, 5 + choice, inlet)
    return Case(size, to.tolist(), source.tolist(), gain.tolist(), rows, inlet.tolist(), choice.tolist())


def classes(case: Case) -> list[list[int]]:
    graph = nx.DiGraph()
    graph.add_nodes_from(range(case.size))
    graph.add_edges_from((s, t) for s, t, g in zip(case.source, case.to, case.gain, strict=True) if g > 0)
    return [sorted(c) for c in nx.strongly_connected_components(graph)]


def literally(case: Case, members: list[int]) -> list[list[list[list[tuple[float, int]]]]]:
    """For every member its inlets, each a list of pieces, each a list of (gain, place of the source) alternatives."""
    place = {i: k for k, i in enumerate(members)}
    found = []
    for i in members:
        inlets: dict[object, dict[object, list[tuple[float, int]]]] = {}
        for k, (t, s, g) in enumerate(zip(case.to, case.source, case.gain, strict=True)):
            if t != i or s not in place or g == 0:
                continue
            kind = case.rows[i]
            gate = case.inlet[k] if kind == "root_sum_square" else 0
            turn = "all" if kind == "max" else (("c", case.choice[k]) if case.choice[k] >= 0 else ("k", k))
            inlets.setdefault(gate, {}).setdefault(turn, []).append((g, place[s]))
        found.append([list(pieces.values()) for pieces in inlets.values()])
    return found


def slow_radius(case: Case) -> tuple[float, float]:
    """Two numbers around the radius, 10^-10 apart relatively unless a class needs more than all steps."""
    low = high = 0.0
    for members in classes(case):
        rows = literally(case, members)
        if all(not inlets for inlets in rows):
            continue
        a, b = by_choices(rows) or by_definition(rows)
        low, high = max(low, a), max(high, b)
    return low, high


def by_choices(rows: list[list[list[list[tuple[float, int]]]]]) -> tuple[float, float] | None:
    """The largest eigenvalue over all choices, where no row has several inlets and choices are few."""
    if any(len(inlets) > 1 for inlets in rows):
        return None
    pieces = [(i, piece) for i, inlets in enumerate(rows) for inlet in inlets for piece in inlet]
    if math.prod(len(piece) for _, piece in pieces) > 24:
        return None
    best = 0.0
    for choice in itertools.product(*[piece for _, piece in pieces]):
        matrix = np.zeros((len(rows), len(rows)))
        for (i, _), (gain, j) in zip(pieces, choice, strict=True):
            matrix[i, j] += gain
        best = max(best, perron(matrix))
    return best * (1 - 1e-11), best * (1 + 1e-11)


def perron(matrix: np.ndarray) -> float:
    """Largest eigenvalue of a non-negative matrix: block by block, each balanced to have a simple, sharp root."""
    graph = nx.from_numpy_array(matrix.T > 0, create_using=nx.DiGraph)
    best = 0.0
    for members in nx.strongly_connected_components(graph):
        block = matrix[np.ix_(sorted(members), sorted(members))]
        if len(block) == 1:
            best = max(best, float(block[0, 0]))
            continue
        # Osborne's balancing: rows and columns with the same largest entry, so that eigenvalues come out sharp.
        for _ in range(8):
            for i in range(len(block)):
                off = np.delete(np.arange(len(block)), i)
                factor = math.sqrt(block[off, i].max() / block[i, off].max())
                block[i, :] *= factor
                block[:, i] /= factor
        best = max(best, float(max(abs(np.linalg.eigvals(block)))))
    return best


def by_definition(rows: list[list[list[list[tuple[float, int]]]]], steps: int = 1_500) -> tuple[float, float]:
    """Quotients of s -> sqrt(s G(s)) from ones in logarithms (base e), the definition row by row in plain Python."""
    logs = [[[[(math.log(g), j) for g, j in piece] for piece in inlet] for inlet in row] for row in rows]
    v = [0.0] * len(rows)
    low, high = -math.inf, math.inf
    for _ in range(steps):
        image = [_root_of_squares([_sum([_most(piece, v) for piece in inlet]) for inlet in row]) for row in logs]
        quotient = [a - b for a, b in zip(image, v, strict=True)]
        low, high = max(low, min(quotient)), min(high, max(quotient))
        if high - low < 1e-11:
            break
        v = [x + 0.5 * q for x, q in zip(v, quotient, strict=True)]
        top = max(v)
        v = [x - top for x in v]
    return math.exp(low) * (1 - 1e-11), math.exp(high) * (1 + 1e-11)


def _most(piece: list[tuple[float, int]], v: list[float]) -> float:
    return max(g + v[j] for g, j in piece)


def _sum(terms: list[float]) -> float:
    if len(terms) == 1:
        return terms[0]
    top = max(terms)
    return top + math.log(math.fsum(math.exp(t - top) for t in terms))


def _root_of_squares(terms: list[float]) -> float:
    return 0.5 * _sum([2 * t for t in terms])


def exact_bounds(case: Case, s: list[Fraction]) -> Fraction:
    """max of G(s)_i^2 / s_i^2 in exact rationals, from the lists alone."""
    worst = Fraction(0)
    for i, row in enumerate(literally(case, list(range(case.size)))):
        total = Fraction(0)
        for inlet in row:
            value = sum((max(Fraction(g) * s[j] for g, j in piece) for piece in inlet), Fraction(0))
            total += value * value
        worst = max(worst, total / (s[i] * s[i]))
    return worst

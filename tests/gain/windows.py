"""Networks and slow literal truths for the window route (all data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from synth.base.exact import Number
from synth.network.layout import Members
from synth.network.model import Kind, Network
from tests.build import scalar_kind
from tests.margin.networks import kind_of, link, network_of, oscillator

Floats = NDArray[np.float64]


def skew(k: Number) -> Network:
    """x' = -x + k (left - right)."""
    kind = scalar_kind()
    return network_of(kind, [link(kind, -1, k), link(kind, 1, -Fraction(k))])


def ladder(k: Number) -> Network:
    """V' = -.2 V - I + k I_left, I' = -.2 I + V - k V_right."""
    kind = kind_of([["-0.2", -1], [1, "-0.2"]], [[1, 0], [0, 1]], [[1, 0], [0, 1]], "section")
    return network_of(kind, [link(kind, -1, k, offer=1, take=0), link(kind, 1, -Fraction(k), offer=0, take=1)])


def lattice(k: Number, own: Number = 0) -> Network:
    """x'' + .1 x' + x = k (sum of four neighbours) - own parts, in the plane."""
    kind = oscillator()
    links = [replace(link(kind, 0, k, own), at=at) for at in ((1, 0), (-1, 0), (0, 1), (0, -1))]
    return replace(network_of(kind, links), dimension=2)


def edge_mode() -> Network:
    """Cells of a and b, calm as a whole (det = |u + v e^{i theta}|^2 - .4 > 0), but a cut leaves an a that grows.

    a' = .2 a + .5 b + 2 b_left, b' = -2 b - .5 a - 2 a_right.
    """
    a, b = kind_of([["0.2"]], [[1]], [[1]], "a"), kind_of([[-2]], [[1]], [[1]], "b")
    links = [
        link(a, 0, "0.5", source=b, name="inner"),
        link(a, -1, 2, source=b, name="outer"),
        link(b, 0, "-0.5", source=a, name="inner"),
        link(b, 1, -2, source=a, name="outer"),
    ]
    return network_of((a, b), links)


def members(kind: Kind, edges: list[tuple[int, int]], strengths: list[Number], own: Number = 0) -> Network:
    """Units of one kind with a link to <- source per edge (to, source)."""
    units = 1 + max(max(pair) for pair in edges)
    distinct = list(dict.fromkeys(strengths))
    links = tuple(replace(link(kind, 0, g, own, name=f"g{i}"), at=()) for i, g in enumerate(distinct))
    to, source = zip(*edges, strict=True)
    form = [distinct.index(g) for g in strengths]
    arrays = ([0] * units, to, source, form)
    parts = tuple((i,) for i in range(len(distinct)))
    listed = Members(
        tuple(f"u{i}" for i in range(units)),
        *(np.array(values, dtype=np.int32) for values in arrays),
        parts,
        ((kind.name, {}),),
    )
    return Network("invented", (kind,), links, dimension=0, description="members", members=listed)


def graph(kind: Kind, adjacency: Floats, k: Number, own: Number = 0) -> Network:
    """Every unit hears all its neighbours with the same strength."""
    edges = [(int(i), int(j)) for i, j in zip(*np.nonzero(adjacency), strict=True)]
    return members(kind, edges, [k] * len(edges), own)


def literal_window(network: Network, R: int) -> tuple[Floats, Floats, list[tuple[Floats, float, int]]]:
    """A of a line's cut window, the outlet rows of its middle cell, and (column, |strength|, source row) per entry.

    Written down cell by cell from the kinds and links, own parts folded; no controller, offers without feed-through.
    """
    kinds = network.kinds
    sizes = [kind.A.shape[0] for kind in kinds]
    starts = np.cumsum([0, *sizes])
    cell = int(starts[-1])
    name = {kind.name: i for i, kind in enumerate(kinds)}
    rows = np.cumsum([0, *(len(kind.offers) for kind in kinds)])
    A = np.zeros(((2 * R + 1) * cell, (2 * R + 1) * cell))
    entries = []
    for c in range(-R, R + 1):
        base = (c + R) * cell
        for i, kind in enumerate(kinds):
            at = slice(base + starts[i], base + starts[i + 1])
            A[at, at] += kind.A.floats()
        for one in network.links:
            i, j = name[one.kind], name[one.source_kind]
            column = np.zeros(len(A))
            offer = kinds[j].index("offers", one.offer)
            column[base + starts[i] : base + starts[i + 1]] = kinds[i].D.floats()[:, kinds[i].index("takes", one.take)]
            if one.own_strength:
                own = np.zeros(len(A))
                own[base + starts[i] : base + starts[i + 1]] = kinds[i].H.floats()[kinds[i].index("offers", one.offer)]
                A -= float(one.own_strength) * np.outer(column, own)
            if abs(c + one.at[0]) <= R:
                row = np.zeros(len(A))
                there = (c + one.at[0] + R) * cell
                row[there + starts[j] : there + starts[j + 1]] = kinds[j].H.floats()[offer]
                A += float(one.strength) * np.outer(column, row)
            else:
                entries.append((column, abs(float(one.strength)), int(rows[j]) + offer))
    outlets = []
    for i, kind in enumerate(kinds):
        for k in range(len(kind.offers)):
            row = np.zeros(len(A))
            row[R * cell + starts[i] : R * cell + starts[i + 1]] = kind.H.floats()[k]
            outlets.append(row)
    return A, np.array(outlets), entries


def slow_integrals(A: Floats, rows: Floats, columns: Floats, steps: int = 40) -> Floats:
    """Integral of |rows e^{At} columns| by the dense exponential and Simpson's rule, (rows, columns)."""
    modes = np.linalg.eigvals(A)
    slowest, fastest = -modes.real.max(), np.abs(modes).max()
    h = 1 / (steps * fastest)
    E = scipy.linalg.expm(A * h)
    count = 2 * int(np.ceil(np.log(1e9) / slowest / h / 2))
    x, total = columns.copy(), np.zeros((len(rows), columns.shape[1]))
    for n in range(count + 1):
        total += np.abs(rows @ x) * (1 if n in (0, count) else 4 if n % 2 else 2)
        x = E @ x
    return total * h / 3


def slow_radius(network: Network, R: int, steps: int = 40) -> float:
    """The window route's radius of a line by :func:`slow_integrals`."""
    A, rows, entries = literal_window(network, R)
    p = slow_integrals(A, rows, np.array([column for column, _, _ in entries]).T, steps)
    M = np.zeros((len(rows), len(rows)))
    for e, (_, strength, source) in enumerate(entries):
        M[:, source] += p[:, e] * strength
    return float(np.max(np.abs(np.linalg.eigvals(M))))


def random_line(rng: np.random.Generator) -> Network:
    """One or two kinds of one to three states, two to five links of reach one or two, some with own parts."""
    kinds = []
    for n in range(int(rng.integers(1, 3))):
        size = int(rng.integers(1, 4))
        A = np.round(rng.normal(size=(size, size)), 2)
        A -= np.round(float(np.linalg.eigvals(A).real.max()) + rng.uniform(0.3, 1.5), 2) * np.eye(size)
        D, H = np.round(rng.normal(size=(size, 1)), 2), np.round(rng.normal(size=(1, size)), 2)
        text = lambda M: [[f"{v:.2f}" for v in row] for row in M]  # noqa: E731
        kinds.append(kind_of(text(A), text(D), text(H), f"kind{n}"))
    links = []
    for n in range(int(rng.integers(2, 6))):
        to, source = (kinds[int(rng.integers(len(kinds)))] for _ in range(2))
        at = int(rng.choice([-2, -1, 1, 2]))
        g = f"{rng.normal() * 0.5:.2f}"
        own = g if to is source and rng.random() < 0.3 else 0
        links.append(link(to, at, g, own, name=f"c{n % 2}", source=source))
    return network_of(tuple(kinds), links)

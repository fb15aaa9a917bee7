"""Classes of the shapes that real networks and hard cases have, every one strongly connected, by name and size."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.gain import GainOperator
from synth.gain.solving.certify import certified_lower, certified_upper
from synth.gain.solving.points import ClassPoint


def families(size: int, seed: int = 1) -> Iterator[tuple[str, np.ndarray, np.ndarray, np.ndarray]]:
    """(name, to, source, gain) with about ``size`` outlets, numbered without gaps."""
    rng = np.random.default_rng(seed)
    i = np.arange(size)
    after, before = (i + 1) % size, (i - 1) % size
    both = np.concatenate([i, i]), np.concatenate([after, before])
    yield "ring", *both, rng.uniform(0.1, 1, 2 * size)
    yield "same ring", *both, np.full(2 * size, 0.5)
    yield "one long loop", i, before, np.exp(rng.normal(0, 3, size))
    side = int(size**0.5)
    x, y = np.arange(side * side) % side, np.arange(side * side) // side
    ends = []
    for dx, dy in ((1, 0), (-1, 0), (0, 1), (0, -1)):
        inside = (x + dx >= 0) & (x + dx < side) & (y + dy >= 0) & (y + dy < side)
        ends.append(np.stack([(y * side + x)[inside], ((y + dy) * side + x + dx)[inside]]))
    to, source = np.concatenate(ends, axis=1)
    yield "grid", to, source, rng.uniform(0.1, 1, to.size)
    yield "smooth grid", to, source, 1 + 0.5 * np.sin(np.pi * x[to] / side) * np.sin(np.pi * y[to] / side)
    yield "grid over 12 decades", to, source, 10 ** rng.uniform(-6, 6, to.size)
    back = np.sort(rng.integers(0, size, (10, 2)), axis=1)
    to, source = np.concatenate([i[1:], back[:, 0], [0]]), np.concatenate([i[:-1], back[:, 1], [size - 1]])
    yield "string with few feedbacks", to, source, rng.uniform(0.5, 1.5, to.size)
    # A newcomer links to three earlier ones, the older the likelier.
    old = (rng.random(3 * size) ** 2 * np.repeat(np.maximum(i, 1), 3)).astype(int)
    new = np.repeat(i, 3)
    old, new = old[old != new], new[old != new]
    yield "scale free", np.concatenate([new, old]), np.concatenate([old, new]), rng.uniform(0.1, 1, 2 * old.size)
    chain = np.concatenate([i[1:], i[:-1]]), np.concatenate([i[:-1], i[1:]])
    yield "chain that amplifies", *chain, np.repeat([10.0, 0.01], size - 1)


def built(to: np.ndarray, source: np.ndarray, gain: np.ndarray, rows: str) -> GainOperator:
    """``rows`` one type, or "mixed": all three in a fixed random order, and every fifth link pair alternatives."""
    size = int(max(to.max(), source.max())) + 1
    if rows != "mixed":
        return GainOperator.from_links(size, to, source, gain, rows)
    rng = np.random.default_rng(3)
    kinds = np.array(["sum", "max", "root_sum_square"])[rng.integers(0, 3, size)]
    choice = np.where(rng.random(to.size) < 0.2, 0, -1)
    return GainOperator.from_links(size, to, source, gain, kinds.tolist(), None, choice)


def width(op: GainOperator, found: ClassPoint) -> float:
    """Relative distance of the guaranteed bounds that a solver's points give."""
    upper = certified_upper(op, found.point, found.exponent)
    lower = certified_lower(op, found.low_point, found.low_exponent)
    assert lower <= upper
    return (upper - lower) / upper

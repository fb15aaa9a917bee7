"""Families of networks for the speed tables: (to, source, gain) with about ``size`` outlets, invented, fixed seeds."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

Links = tuple[int, NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]


def _gains(rng: np.random.Generator, count: int) -> NDArray[np.float64]:
    return rng.uniform(0.1, 1.0, count)


def ring(size: int, rng: np.random.Generator) -> Links:
    """Both neighbours on a ring, random gains."""
    i = np.arange(size)
    to, source = np.concatenate([i, i]), np.concatenate([(i + 1) % size, (i - 1) % size])
    return size, to, source, _gains(rng, 2 * size)


def homogeneous_ring(size: int, rng: np.random.Generator) -> Links:
    """Both neighbours on a ring, the same two gains everywhere."""
    size, to, source, _ = ring(size, rng)
    return size, to, source, np.repeat([0.3, 0.2], size)


def _grid(size: int) -> tuple[int, NDArray[np.intp], NDArray[np.intp]]:
    n = int(np.sqrt(size))
    cell = np.arange(n * n).reshape(n, n)
    a = np.concatenate([cell[:, :-1].ravel(), cell[:-1].ravel()])
    b = np.concatenate([cell[:, 1:].ravel(), cell[1:].ravel()])
    return n, np.concatenate([a, b]), np.concatenate([b, a])


def grid(size: int, rng: np.random.Generator) -> Links:
    """Four neighbours on a square grid, random gains."""
    n, to, source = _grid(size)
    return n * n, to, source, _gains(rng, to.size)


def smooth_grid(size: int, rng: np.random.Generator) -> Links:
    """Four neighbours on a square grid, gains that vary slowly from place to place."""
    n, to, source = _grid(size)
    row, column = np.divmod(to, n)
    wave = 1 + 0.5 * np.sin(2 * np.pi * row / n + 1) * np.cos(2 * np.pi * column / n)
    return n * n, to, source, 0.25 * wave


def geometric(size: int, rng: np.random.Generator) -> Links:
    """Points in the unit square that hear all others within a radius (six on average), random gains."""
    points = rng.uniform(size=(size, 2))
    pairs = cKDTree(points).query_pairs(np.sqrt(6 / (np.pi * size)), output_type="ndarray")
    to, source = np.concatenate([pairs[:, 0], pairs[:, 1]]), np.concatenate([pairs[:, 1], pairs[:, 0]])
    return size, to.astype(np.intp), source.astype(np.intp), _gains(rng, to.size)


def scale_free(size: int, rng: np.random.Generator) -> Links:
    """Every new outlet joins three ends of earlier links drawn at random, both ways, random gains."""
    a = np.repeat(np.arange(3, size), 3)
    # An end drawn at random is either an old outlet itself or what an earlier link was joined to.
    pick, old = rng.integers(0, 2, a.size), (rng.uniform(size=a.size) * a).astype(np.intp)
    earlier = (rng.uniform(size=a.size) * np.maximum(3 * (a - 3), 1)).astype(np.intp)
    b = old.copy()
    for _ in range(30):
        b = np.where((pick == 1) & (a > 3), b[np.minimum(earlier, a.size - 1)], old)
    return size, np.concatenate([a, b]), np.concatenate([b, a]), _gains(rng, 2 * a.size)


def random(size: int, rng: np.random.Generator) -> Links:
    """Every outlet hears two others drawn at random, random gains: an expander, which no elimination likes."""
    to, source = np.repeat(np.arange(size), 2), rng.integers(0, size, 2 * size)
    return size, to, source, _gains(rng, to.size)


def string(size: int, rng: np.random.Generator) -> Links:
    """A one-way string with one feedback link per thousand outlets, each over a few dozen outlets."""
    i = np.arange(1, size)
    back = rng.integers(0, max(size - 60, 1), max(size // 1000, 1))
    ahead = np.minimum(back + rng.integers(5, 60, back.size), size - 1)
    back, ahead = np.append(back, 0), np.append(ahead, size - 1)
    to, source = np.concatenate([i, back]), np.concatenate([i - 1, ahead])
    return size, to, source, _gains(rng, to.size)


def cycle(size: int, rng: np.random.Generator) -> Links:
    """One long cycle, random gains."""
    i = np.arange(size)
    return size, i, (i - 1) % size, _gains(rng, size)


FAMILIES: dict[str, Callable[[int, np.random.Generator], Links]] = {
    "ring": ring,
    "homogeneous ring": homogeneous_ring,
    "grid": grid,
    "smooth grid": smooth_grid,
    "geometric": geometric,
    "scale-free": scale_free,
    "random": random,
    "string": string,
    "cycle": cycle,
}

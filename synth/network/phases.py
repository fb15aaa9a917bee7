"""Modes of a symbol that no controller sees or no actuator reaches: exactly at the corners, numerically in between.

At phases 0 and pi everything is rational: the unseen subspace by elimination and the sign of its modes by Routh's
array, so that a triple integrator is not a matter of rounding. Between them the smallest singular value is taken on a
grid, and followed down from its low points.
"""

from __future__ import annotations

import itertools
import math
import warnings
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import matrix_balance
from scipy.optimize import minimize

from synth.network.rational import Rows, characteristic, hurwitz, null_space, rank, transposed, unseen
from synth.network.symbol import Complex, Symbol

GRID = {1: 60, 2: 12, 3: 6}  # steps from 0 to pi
SEEN = 1e-9
ON_THE_AXIS = 1e-9
NEAR = 0.01
MOST_ACTUATORS = 8
MOST_DESCENTS = 12
WIDEST_BALANCE = 1e200

Theta = tuple[float, ...]


@dataclass(frozen=True)
class Finding:
    """A mode that stays where it is: its phase, value, direction over the states, and why.

    ``split``: the actuators that reach the mode but hear nothing of it.
    """

    theta: Theta
    s: complex
    direction: Complex
    cause: str
    split: tuple[int, ...] = ()


def corners(dimension: int) -> list[tuple[tuple[int, ...], Theta]]:
    """Every e^{i theta} with entries 1 and -1, all ones first, and its phase."""
    return [
        (wave, tuple(0.0 if w == 1 else math.pi for w in wave)) for wave in itertools.product((1, -1), repeat=dimension)
    ]


def heard_by_any(symbol: Symbol) -> list[int]:
    """The sensors that some actuator may use."""
    return sorted(frozenset().union(*symbol.hears)) if symbol.hears else []


def findings(symbol: Symbol, dimension: int) -> Iterator[Finding]:
    """The fixed modes that the test finds, exact ones first."""
    for wave, theta in corners(dimension):
        yield from exact_findings(symbol, wave, theta)
    yield from _between(symbol, heard_by_any(symbol), dimension)


def exact_findings(symbol: Symbol, wave: tuple[int, ...], theta: Theta) -> Iterator[Finding]:
    """Fixed modes at a phase where all is rational."""
    blocks = symbol.exact(wave)
    if blocks is None:
        return
    A, B, C = blocks
    yield from exact_mode(A, [C[i] for i in heard_by_any(symbol)], theta, "not seen")
    yield from exact_mode(transposed(A, len(A)), transposed(B, len(symbol.actuators)), theta, "not reached")
    yield from _exact_split(symbol, A, B, C, theta)


def exact_mode(A: Rows, C: Rows, theta: Theta, cause: str) -> Iterator[Finding]:
    """The unseen modes of A through C, if any of them does not decay."""
    basis, inner = unseen(A, C)
    if not basis or hurwitz(characteristic(inner)):
        return
    span = np.array([[float(v) for v in vector] for vector in basis]).T
    still, _ = null_space(inner, len(inner))
    if still:
        yield Finding(theta, 0j, (span @ np.array([float(v) for v in still[0]])).astype(complex), cause)
        return
    values, vectors = np.linalg.eig(np.array([[float(v) for v in row] for row in inner]))
    worst = int(np.argmax(values.real))
    s = complex(max(values[worst].real, 0.0), abs(values[worst].imag))
    vector = vectors[:, worst] if values[worst].imag >= 0 else vectors[:, worst].conj()
    yield Finding(theta, s, span @ vector, cause)


def _splits(symbol: Symbol) -> Iterator[tuple[tuple[int, ...], list[int]]]:
    """Every proper choice of actuators, with the sensors that the others hear."""
    count = len(symbol.actuators)
    if 2 <= count <= MOST_ACTUATORS:
        for size in range(1, count):
            for chosen in itertools.combinations(range(count), size):
                others = [symbol.hears[i] for i in range(count) if i not in chosen]
                yield chosen, sorted(frozenset().union(*others))


def _exact_split(symbol: Symbol, A: Rows, B: Rows, C: Rows, theta: Theta) -> Iterator[Finding]:
    """Fixed modes at s = 0: rank [A, B_I; C_J, 0] < n, J what the actuators outside I hear."""
    n = len(A)
    if rank(A, n) == n or not 2 <= len(symbol.actuators) <= MOST_ACTUATORS:
        return
    # Rows and columns only raise a rank, so what one actuator hears or reaches alone decides for all splits with it.
    deaf, weak = set(), set()
    for q, hears in enumerate(symbol.hears):
        if rank([*A, *(C[j] for j in sorted(hears))], n) < n:
            deaf.add(q)
        if rank([[*A[i], B[i][q]] for i in range(n)], n + 1) < n:
            weak.add(q)
        elif q not in deaf:
            return
    for chosen, heard in _splits(symbol):
        if not (weak.issuperset(chosen) and deaf.issuperset(set(range(len(symbol.actuators))) - set(chosen))):
            continue
        rows = [[*A[i], *(B[i][q] for q in chosen)] for i in range(n)]
        rows += [[*C[j], *(Fraction(0) for _ in chosen)] for j in heard]
        if rank(rows, n + len(chosen)) < n:
            basis, _ = null_space([*A, *(C[j] for j in heard)], n)
            yield Finding(theta, 0j, np.array([float(v) for v in basis[0]], dtype=complex), "not seen", chosen)


def modes(A: Complex, scale: float) -> list[complex]:
    """Modes that do not decay: eigenvalues, and the means of close groups (a defective group's mean is accurate)."""
    values = np.linalg.eigvals(A)
    found: list[complex] = []
    for value in values:
        near = values[np.abs(values - value) < 1e-3 * scale]
        for s in (complex(value), complex(near.mean())):
            if s.real >= -ON_THE_AXIS * scale and all(abs(s - other) > 1e-12 * scale for other in found):
                found.append(s)
    return found


def smallest(matrix: Complex) -> tuple[float, Complex]:
    """The n-th singular value (n columns; zero where rows are missing) and its right direction."""
    _, values, right = np.linalg.svd(matrix, full_matrices=False)
    n = matrix.shape[1]
    return (float(values[n - 1]) if len(values) >= n else 0.0), right[n - 1].conj()


def unit_rows(rows: Complex, size: NDArray[np.float64], scale: float) -> Complex:
    """Rows divided by ``size`` and brought to the size of the matrix, so that units do not matter; zero rows
    stay zero."""
    return rows / np.where(size > 0, size, 1.0)[:, None] * scale


def balance(size: NDArray[np.float64]) -> NDArray[np.float64]:
    """Powers of two d that make rows and columns of diag(1/d) ``size`` diag(d) alike.

    Ones where the powers found are too far apart for doubles: the balance is for accuracy, no finding rests on it.
    """
    with warnings.catch_warnings():
        # scipy makes whole numbers of d as well, for a permutation that is not asked for; these overflow from 2^63 on
        warnings.simplefilter("ignore", RuntimeWarning)
        _, (scaling, _) = matrix_balance(size, permute=False, separate=True)
    d = np.asarray(scaling, dtype=float)
    if not (np.all(np.isfinite(d)) and np.all(d > 0) and float(d.max()) < WIDEST_BALANCE * float(d.min())):
        return np.ones(len(size))
    return d


def worst_at(symbol: Symbol, theta: Theta, used: list[int]) -> tuple[float, Finding] | None:
    """The mode at this phase that is seen, reached or split least, with its relative singular value."""
    blocks = symbol.floating(theta)
    if blocks is None:
        return None
    d = balance(np.abs(blocks[0]))  # states counted in units of d: diag(1/d) A^ diag(d)
    A = blocks[0] * d / d[:, None]
    n = len(A)
    scale = max(1e-12, float(np.linalg.norm(A, 2)))
    seen = blocks[2] * d
    C = unit_rows(seen, np.maximum(symbol.sensor_sizes(d), np.linalg.norm(seen, axis=1)), scale)
    B = blocks[1] / d[:, None]
    BT = unit_rows(B.T, np.linalg.norm(B, axis=0), scale)
    best: tuple[float, Finding] | None = None
    for s in modes(A, scale):
        shifted = A - s * np.eye(n)
        mode = complex(max(s.real, 0.0), s.imag)
        size, direction = smallest(np.vstack([shifted, C[used]]))
        tests = [(size, Finding(theta, mode, direction * d, "not seen"))]
        size, direction = smallest(np.vstack([shifted.T, BT]))
        tests.append((size, Finding(theta, mode, direction / d, "not reached")))
        for chosen, heard in _near_splits(symbol, shifted, C, BT, scale):
            zero = np.zeros((len(heard), len(chosen)))
            wide = np.vstack([np.hstack([shifted, BT.T[:, list(chosen)]]), np.hstack([C[heard], zero])])
            values = np.linalg.svd(wide, compute_uv=False)
            _, direction = smallest(np.vstack([shifted, C[heard]]))
            size = float(values[n - 1]) if len(values) >= n else 0.0
            tests.append((size, Finding(theta, mode, direction * d, "not seen", chosen)))
        least = min(tests, key=lambda test: test[0])
        if best is None or least[0] / scale < best[0]:
            best = (least[0] / scale, least[1])
    return best


def _near_splits(
    symbol: Symbol, shifted: Complex, C: Complex, BT: Complex, scale: float
) -> Iterator[tuple[tuple[int, ...], list[int]]]:
    """The splits that can fail at this mode: every chosen actuator reaches it badly, every other one hears it badly.

    Rows only raise a singular value, so what one actuator hears or reaches alone decides for all splits with it.
    """
    count = len(symbol.actuators)
    if not 2 <= count <= MOST_ACTUATORS:
        return
    deaf, weak = set(), set()
    for q in range(count):
        if smallest(np.vstack([shifted, C[sorted(symbol.hears[q])]]))[0] < NEAR * scale:
            deaf.add(q)
        if smallest(np.vstack([shifted.T, BT[[q]]]))[0] < NEAR * scale:
            weak.add(q)
        elif q not in deaf:
            return  # this actuator reaches and hears the mode well, so it can be in neither part
    for chosen, heard in _splits(symbol):
        if weak.issuperset(chosen) and deaf.issuperset(set(range(count)) - set(chosen)):
            yield chosen, heard


def _between(symbol: Symbol, used: list[int], dimension: int) -> Iterator[Finding]:
    """Phases other than the corners: a grid, then a search around each low point of the singular value.

    A phase and its negative are the same, so the first of them runs from 0 to pi only.
    """
    if not any(any(at) for _, _, at, _ in symbol.neighbour):  # nothing depends on the phase, so one is enough
        found = worst_at(symbol, (0.0,) * dimension, used)
        if found is not None and found[0] < SEEN:
            yield found[1]
        return
    steps = GRID[dimension] if len(symbol.A) <= 40 else GRID[dimension] // (5 if dimension == 1 else 2)
    first = range(1, steps) if dimension == 1 else range(steps + 1)
    ranges = [first, *[range(1 - steps, steps + 1)] * (dimension - 1)]
    points = [k for k in itertools.product(*ranges) if any(n % steps for n in k)]
    sizes: dict[tuple[int, ...], float] = {}
    for k in points:
        found = worst_at(symbol, tuple(math.pi * n / steps for n in k), used)
        if found is not None and found[0] < SEEN:
            yield found[1]
        sizes[k] = math.inf if found is None else found[0]
    if dimension == 1:
        for n in range(2, steps - 1):
            if sizes[n,] < 0.2 and sizes[n,] <= min(sizes[n - 1,], sizes[n + 1,]):
                low = _refined(symbol, used, math.pi * (n - 1) / steps, math.pi * (n + 1) / steps)
                if low is not None and low[0] < SEEN:
                    yield low[1]
        return
    for k in _low_points(sizes, dimension)[:MOST_DESCENTS]:
        low = _descent(symbol, used, tuple(math.pi * n / steps for n in k), math.pi / steps)
        if low is not None and low[0] < SEEN:
            yield low[1]


def _low_points(sizes: dict[tuple[int, ...], float], dimension: int) -> list[tuple[int, ...]]:
    """Grid points that are not above any of their neighbours, lowest first."""

    def low(k: tuple[int, ...]) -> bool:
        around = (tuple(n + (i == j) * step for j, n in enumerate(k)) for i in range(dimension) for step in (-1, 1))
        return sizes[k] < 0.2 and all(sizes[k] <= sizes.get(other, math.inf) for other in around)

    return sorted(filter(low, sizes), key=sizes.__getitem__)


def _watched(symbol: Symbol, used: list[int]) -> tuple[Callable[[Sequence[float]], float], list[tuple[float, Finding]]]:
    """The singular value as a function of the phase, and a list that keeps the best it has seen."""
    best: list[tuple[float, Finding]] = []

    def size(theta: Sequence[float]) -> float:
        found = worst_at(symbol, tuple(float(v) for v in theta), used)
        if found is not None and (not best or found[0] < best[0][0]):
            best[:] = [found]
        return math.inf if found is None else found[0]

    return size, best


def _descent(symbol: Symbol, used: list[int], start: Theta, step: float) -> tuple[float, Finding] | None:
    """Search for the least singular value around a point in two or three dimensions (simplex search)."""
    size, best = _watched(symbol, used)
    simplex = [start, *(tuple(v + (i == j) * step / 2 for j, v in enumerate(start)) for i in range(len(start)))]

    def least(theta: NDArray[np.float64]) -> float:
        return min(size(theta.tolist()), 1e6)

    minimize(
        least,
        np.array(start),
        method="Nelder-Mead",
        options={"initial_simplex": np.array(simplex), "xatol": 1e-11, "fatol": 1e-12, "maxfev": 150 * len(start)},
    )
    return best[0] if best else None


def _refined(symbol: Symbol, used: list[int], left: float, right: float) -> tuple[float, Finding] | None:
    """Golden-section search for the least singular value between two phases; it stops where none can be near zero."""
    ratio = (math.sqrt(5) - 1) / 2
    steepest = 10 * max((abs(at[0]) for _, _, at, _ in symbol.neighbour), default=1)
    size, best = _watched(symbol, used)
    a, b = right - ratio * (right - left), left + ratio * (right - left)
    at_a, at_b = size((a,)), size((b,))
    while right - left > 1e-12 and min(at_a, at_b) < steepest * (right - left) + SEEN:
        if at_a < at_b:
            right, b, at_b = b, a, at_a
            a = right - ratio * (right - left)
            at_a = size((a,))
        else:
            left, a, at_a = a, b, at_b
            b = left + ratio * (right - left)
            at_b = size((b,))
    return best[0] if best else None

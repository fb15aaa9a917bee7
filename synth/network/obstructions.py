"""What no local feedback can prove, found before any search: theory (26).

The network written in waves e^{i theta k} has the matrix A^(theta), the sensors C^(theta) and the actuators B. If for
some theta and some s with Re s >= 0 a direction x has A^ x = s x and C^ x = 0 ('not seen'), or a left direction x has
x A^ = s x and x B = 0 ('not reached'), then that mode stays where it is whatever the gains, and the radius is at least
one. With several actuators, a mode is also fixed if the actuators that reach it hear none of the sensors that see it.

A delay bounds the age of what a link carries, so the delay zero belongs to the class; the test is made for that member,
and at s = 0 every constant delay gives the same matrices anyway.

At theta = 0 and pi everything is exact: the unseen subspace by rational elimination and the sign of its modes by
Routh's array, so that a triple integrator is not a matter of rounding. Between them the smallest singular value is
taken on a grid with refinement.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import matrix_balance

from synth.network.advice import advise
from synth.network.model import Network
from synth.network.rational import Rows, characteristic, hurwitz, null_space, rank, transposed, unseen
from synth.network.symbol import Symbol, array_of, symbol_of

GRID = 60
SEEN = 1e-9
ON_THE_AXIS = 1e-9
NEAR = 0.01
MOST_ACTUATORS = 8


@dataclass(frozen=True)
class Obstruction:
    """A mode of the network that no local feedback can move.

    ``theta`` is the phase from one cell to the next (radians, one per dimension), ``s`` the mode in 1/s, ``direction``
    the weight of each ``kind.state`` in declared units (largest absolute value 1), ``cause`` 'not seen' or
    'not reached', ``advice`` what would remove it, in plain words.
    """

    theta: tuple[float, ...]
    s: complex
    direction: Mapping[str, complex]
    cause: str
    advice: str

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys of the public contract; complex numbers are [re, im]."""
        return {
            "theta": list(self.theta),
            "s": [self.s.real, self.s.imag],
            "direction": {name: [v.real, v.imag] for name, v in self.direction.items()},
            "cause": self.cause,
            "advice": self.advice,
        }


@dataclass(frozen=True)
class _Finding:
    theta: float
    s: complex
    direction: NDArray[np.complex128]
    cause: str
    split: tuple[int, ...] = ()  # actuators that reach the mode but hear nothing of it


def obstruction(network: Network) -> Obstruction | None:
    """Find a mode that no local feedback can move, or None if the test finds none: theory (26).

    A None is no promise that a target can be met. At theta = 0 and pi the answer is exact; in between it is taken on a
    grid of ``GRID`` steps with refinement.
    """
    symbol = symbol_of(network)
    finding = next(_findings(symbol), None)
    if finding is None:
        return None
    direction = finding.direction / finding.direction[int(np.argmax(np.abs(finding.direction)))]
    weights = {
        name: complex(v) if abs(v.imag) > 1e-9 else complex(v.real)
        for name, v in zip(symbol.names, direction, strict=True)
        if abs(v) > 1e-9
    }
    advice = advise(
        finding.theta, finding.s, weights, finding.cause, _helpful(symbol, finding, weights), symbol.sensors
    )
    if finding.split:
        reach = ", ".join(symbol.actuators[i] for i in finding.split)
        advice += (
            f" The actuators that could move it ({reach}) hear none of the sensors that see it: "
            "let them use those sensors."
        )
    return Obstruction((finding.theta,), finding.s, weights, finding.cause, advice)


def _findings(symbol: Symbol) -> Iterator[_Finding]:
    used = sorted(frozenset().union(*symbol.hears)) if symbol.hears else []
    for wave, theta in ((1, 0.0), (-1, math.pi)):
        pair = symbol.exact(wave)
        if pair is not None:
            A, C = pair
            yield from _exact_mode(A, [C[i] for i in used], theta, "not seen")
            yield from _exact_mode(
                transposed(A, len(A)), transposed(symbol.B, len(symbol.actuators)), theta, "not reached"
            )
            yield from _exact_split(symbol, A, C, theta)
    yield from _between(symbol, used)


def _exact_mode(A: Rows, C: Rows, theta: float, cause: str) -> Iterator[_Finding]:
    """The unseen modes at a phase where all is rational, if any of them does not decay."""
    basis, inner = unseen(A, C)
    if not basis or hurwitz(characteristic(inner)):
        return
    span = np.array([[float(v) for v in vector] for vector in basis]).T
    still, _ = null_space(inner, len(inner))
    if still:
        yield _Finding(theta, 0j, (span @ np.array([float(v) for v in still[0]])).astype(complex), cause)
        return
    values, vectors = np.linalg.eig(np.array([[float(v) for v in row] for row in inner]))
    worst = int(np.argmax(values.real))
    s = complex(max(values[worst].real, 0.0), abs(values[worst].imag))
    vector = vectors[:, worst] if values[worst].imag >= 0 else vectors[:, worst].conj()
    yield _Finding(theta, s, span @ vector, cause)


def _splits(symbol: Symbol) -> Iterator[tuple[tuple[int, ...], list[int]]]:
    """Every proper choice of actuators, with the sensors that the others hear."""
    count = len(symbol.actuators)
    if 2 <= count <= MOST_ACTUATORS:
        for size in range(1, count):
            for chosen in itertools.combinations(range(count), size):
                others = [symbol.hears[i] for i in range(count) if i not in chosen]
                yield chosen, sorted(frozenset().union(*others))


def _exact_split(symbol: Symbol, A: Rows, C: Rows, theta: float) -> Iterator[_Finding]:
    """Fixed modes at s = 0: rank [A, B_I; C_J, 0] < n, J what the actuators outside I hear."""
    n = len(A)
    if rank(A, n) == n:
        return
    for chosen, heard in _splits(symbol):
        rows = [[*A[i], *(symbol.B[i][q] for q in chosen)] for i in range(n)]
        rows += [[*C[j], *(Fraction(0) for _ in chosen)] for j in heard]
        if rank(rows, n + len(chosen)) < n:
            basis, _ = null_space([*A, *(C[j] for j in heard)], n)
            yield _Finding(theta, 0j, np.array([float(v) for v in basis[0]], dtype=complex), "not seen", chosen)


def _modes(A: NDArray[np.complex128], scale: float) -> list[complex]:
    """Modes that do not decay: eigenvalues, and the means of close groups (a defective group's mean is accurate)."""
    values = np.linalg.eigvals(A)
    found: list[complex] = []
    for value in values:
        near = values[np.abs(values - value) < 1e-3 * scale]
        for s in (complex(value), complex(near.mean())):
            if s.real >= -ON_THE_AXIS * scale and all(abs(s - other) > 1e-12 * scale for other in found):
                found.append(s)
    return found


def _smallest(matrix: NDArray[np.complex128]) -> tuple[float, NDArray[np.complex128]]:
    """The n-th singular value (n columns; zero where rows are missing) and its right direction."""
    _, values, right = np.linalg.svd(matrix, full_matrices=False)
    n = matrix.shape[1]
    return (float(values[n - 1]) if len(values) >= n else 0.0), right[n - 1].conj()


def _unit_rows(rows: NDArray[np.complex128], size: NDArray[np.float64], scale: float) -> NDArray[np.complex128]:
    """Rows divided by ``size`` and brought to the size of the matrix, so that units do not matter; zero rows
    stay zero."""
    return rows / np.where(size > 0, size, 1.0)[:, None] * scale


def _worst_at(symbol: Symbol, theta: float, used: list[int]) -> tuple[float, _Finding] | None:
    """The mode at this phase that is seen, reached or split least, with its relative singular value."""
    pair = symbol.floating(theta)
    if pair is None:
        return None
    _, (scaling, _) = matrix_balance(np.abs(pair[0]), permute=False, separate=True)
    d = np.asarray(scaling, dtype=float)  # states counted in units of d: diag(1/d) A^ diag(d)
    A = pair[0] * d / d[:, None]
    n = len(A)
    scale = max(1e-12, float(np.linalg.norm(A, 2)))
    seen = pair[1] * d
    C = _unit_rows(seen, np.maximum(symbol.sensor_sizes(d), np.linalg.norm(seen, axis=1)), scale)
    B = array_of(symbol.B, len(symbol.actuators)) / d[:, None]
    BT = _unit_rows(B.T, np.linalg.norm(B, axis=0), scale)
    best: tuple[float, _Finding] | None = None
    for s in _modes(A, scale):
        shifted = A - s * np.eye(n)
        mode = complex(max(s.real, 0.0), s.imag)
        size, direction = _smallest(np.vstack([shifted, C[used]]))
        tests = [(size, _Finding(theta, mode, direction * d, "not seen"))]
        size, direction = _smallest(np.vstack([shifted.T, BT]))
        tests.append((size, _Finding(theta, mode, direction / d, "not reached")))
        for chosen, heard in _near_splits(symbol, shifted, C, BT, scale):
            zero = np.zeros((len(heard), len(chosen)))
            wide = np.vstack([np.hstack([shifted, BT.T[:, list(chosen)]]), np.hstack([C[heard], zero])])
            values = np.linalg.svd(wide, compute_uv=False)
            _, direction = _smallest(np.vstack([shifted, C[heard]]))
            size = float(values[n - 1]) if len(values) >= n else 0.0
            tests.append((size, _Finding(theta, mode, direction * d, "not seen", chosen)))
        least = min(tests, key=lambda test: test[0])
        if best is None or least[0] / scale < best[0]:
            best = (least[0] / scale, least[1])
    return best


def _near_splits(
    symbol: Symbol,
    shifted: NDArray[np.complex128],
    C: NDArray[np.complex128],
    BT: NDArray[np.complex128],
    scale: float,
) -> Iterator[tuple[tuple[int, ...], list[int]]]:
    """The splits that can fail at this mode: every chosen actuator reaches it badly, every other one hears it badly.

    Rows only raise a singular value, so what one actuator hears or reaches alone decides for all splits with it.
    """
    count = len(symbol.actuators)
    if not 2 <= count <= MOST_ACTUATORS:
        return
    deaf, weak = set(), set()
    for q in range(count):
        if _smallest(np.vstack([shifted, C[sorted(symbol.hears[q])]]))[0] < NEAR * scale:
            deaf.add(q)
        if _smallest(np.vstack([shifted.T, BT[[q]]]))[0] < NEAR * scale:
            weak.add(q)
        elif q not in deaf:
            return  # this actuator reaches and hears the mode well, so it can be in neither part
    for chosen, heard in _splits(symbol):
        if weak.issuperset(chosen) and deaf.issuperset(set(range(count)) - set(chosen)):
            yield chosen, heard


def _between(symbol: Symbol, used: list[int]) -> Iterator[_Finding]:
    """Phases strictly between 0 and pi: a grid, then a search around each low point of the singular value."""
    steps = GRID if len(symbol.A) <= 40 else 12
    grid = [math.pi * k / steps for k in range(1, steps)]
    seen = [_worst_at(symbol, theta, used) for theta in grid]
    for found in seen:
        if found is not None and found[0] < SEEN:
            yield found[1]
    sizes = [math.inf if found is None else found[0] for found in seen]
    for k in range(1, len(grid) - 1):
        if sizes[k] < 0.2 and sizes[k] <= min(sizes[k - 1], sizes[k + 1]):
            low = _refined(symbol, used, grid[k - 1], grid[k + 1])
            if low is not None and low[0] < SEEN:
                yield low[1]


def _refined(symbol: Symbol, used: list[int], left: float, right: float) -> tuple[float, _Finding] | None:
    """Golden-section search for the least singular value between two phases; it stops where none can be near zero."""
    ratio = (math.sqrt(5) - 1) / 2
    steepest = 10 * max((abs(at) for _, _, at, _ in symbol.neighbour), default=1)
    best: tuple[float, _Finding] | None = None

    def size(theta: float) -> float:
        nonlocal best
        found = _worst_at(symbol, theta, used)
        if found is not None and (best is None or found[0] < best[0]):
            best = found
        return math.inf if found is None else found[0]

    a, b = right - ratio * (right - left), left + ratio * (right - left)
    at_a, at_b = size(a), size(b)
    while right - left > 1e-12 and min(at_a, at_b) < steepest * (right - left) + SEEN:
        if at_a < at_b:
            right, b, at_b = b, a, at_a
            a = right - ratio * (right - left)
            at_a = size(a)
        else:
            left, a, at_a = a, b, at_b
            b = left + ratio * (right - left)
            at_b = size(b)
    return best


def _helpful(symbol: Symbol, finding: _Finding, weights: Mapping[str, complex]) -> tuple[str, ...]:
    """States whose measurement alone would make the unseen mode visible, at a phase where this can be decided
    exactly."""
    wave = {0.0: 1, math.pi: -1}.get(finding.theta)
    if finding.cause != "not seen" or wave is None or (pair := symbol.exact(wave)) is None:
        return tuple(weights) if finding.cause == "not seen" else ()
    A, C = pair
    used = sorted(frozenset().union(*symbol.hears)) if symbol.hears else []
    helpful = []
    for k, name in enumerate(symbol.names):
        if name in weights:
            row = [Fraction(int(j == k)) for j in range(len(A))]
            basis, inner = unseen(A, [*(C[i] for i in used), row])
            if not basis or hurwitz(characteristic(inner)):
                helpful.append(name)
    return tuple(helpful)

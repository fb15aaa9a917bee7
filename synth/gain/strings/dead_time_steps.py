"""The fundamental solution of a loop with dead times by the method of steps, with a proven bound of its error.

Time is cut into equal steps of which every dead time is a whole number. On each step the solution is a polynomial, with
X(0+) = I. Doubles find it; nothing about them is trusted. What is computed afterwards, rounded outward, is the residual

    R = X~' - sum_b A_b X~(t - b) - delta I        (its jumps at the nodes and the cut at the end included)

as a measure, entry by entry. Because X = X~ - X * R, every response through a row H obeys

    |H X|_1 <= |H X~|_1 + |H X|_1 |R|_1,  so  max_i |H X|_1,i <= max_i |H X~|_1,i / (1 - largest column sum of |R|_1)

for a stable loop, and the response to an inlet D misses the truth by at most |H X|_1 |R D|_1. The same holds for
suprema on [0, t] with the residual up to t, without any stability (ours: a posteriori, so errors do not wrap).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain.lyapunov import balance
from synth.gain.strings.dead_time import DelayLoop

Array = NDArray[np.float64]

DEGREE = 15
_REACH = 0.5  # step times the norm of the undelayed matrix: the next Taylor term is then below 1e-18
MOST_NUMBERS = 12_000_000  # doubles kept for one solution
UNIT = 2.0**-52  # twice the unit roundoff: every bound below counts roundings with it


class TooManyStepsError(InputError):
    """The response lasts too long beside the common step of the dead times."""


@dataclass(frozen=True, eq=False)
class Steps:
    """Polynomials X~ on ``count`` steps of ``step`` seconds, as coefficients of (t/step - k)^j.

    ``X``: (count, DEGREE + 1, n, n) in the scaled states x/scale; ``residual``: (n, n), the total variation of R up to
    the end without the cut; ``cut``: what cutting X~ to zero at the end adds. ``shift``: the solution is that of
    x(t) e^{shift t}, whose signs are the same.
    """

    loop: DelayLoop
    step: Fraction
    count: int
    shift: float
    scale: tuple[Fraction, ...]
    X: Array
    residual: Array
    cut: Array

    @property
    def end(self) -> float:
        """The last moment covered, in seconds."""
        return float(self.step * self.count)

    def lag(self, delay: Fraction) -> int:
        """A dead time in steps."""
        return int(delay / self.step)

    def column(self, D: ExactMatrix, delay: Fraction) -> Array:
        """An inlet column in scaled states, times e^{shift delay}."""
        return np.array([float(v / s) for v, s in zip(D.column(0).T.rows[0], self.scale, strict=True)]) * math.exp(
            self.shift * float(delay)
        )

    def row(self, H: ExactMatrix) -> Array:
        """An outlet row in scaled states."""
        return np.array([float(v * s) for v, s in zip(H.rows[0], self.scale, strict=True)])


def step_for(loop: DelayLoop, extra: tuple[Fraction, ...] = ()) -> Fraction:
    """The largest step of which every dead time is a whole number and on which the undelayed part moves little."""
    delays = [d for d in (*loop.delays, *extra) if d > 0]
    scale = balance(_sum(loop.A))
    A = _scaled(loop.now, scale).floats()
    norm = max(float(np.abs(A).sum(axis=1).max(initial=0.0)), 1e-12)
    if not delays:
        return Fraction(2) ** math.floor(math.log2(_REACH / norm))
    common = delays[0]
    for d in delays[1:]:
        common = Fraction(
            math.gcd(common.numerator * d.denominator, d.numerator * common.denominator),
            common.denominator * d.denominator,
        )
    return common / max(1, math.ceil(float(common) * norm / _REACH))


def method_of_steps(loop: DelayLoop, seconds: float, shift: float = 0.0, extra: tuple[Fraction, ...] = ()) -> Steps:
    """Solve up to ``seconds`` (rounded up to whole steps) and bound the residual.

    ``shift`` in 1/s weighs the solution with e^{shift t}. Raises TooManyStepsError where the dead times have no
    common step that is long enough for the work to fit.
    """
    n, step = loop.size, step_for(loop, extra)
    count = max(2, math.ceil(seconds / float(step)))
    if count * (DEGREE + 1) * n * n > MOST_NUMBERS:
        raise TooManyStepsError(
            f"the dead times ({', '.join(f'{float(d):g} s' for d in loop.delays)}) need {count} steps of "
            f"{float(step):.3g} s for a response of {seconds:.4g} s, which is too many; round them to a coarser common "
            "step."
        )
    scale = balance(_sum(loop.A))
    pieces = {
        int(b / step): _scaled(matrix, scale).floats() * (float(step) * math.exp(shift * float(b)))
        for b, matrix in loop.A.items()
    }
    pieces[0] = pieces.get(0, np.zeros((n, n))) + shift * float(step) * np.eye(n)
    X = _solve(pieces, n, count)
    residual = _residual(pieces, X)
    late = max(pieces)
    end = np.abs(X[-1]).sum(axis=0)
    cut = end + sum(
        (np.abs(A) @ np.abs(X[-lag:]).sum(axis=(0, 1)) for lag, A in pieces.items() if lag), np.zeros((n, n))
    )
    return Steps(loop, step, count, shift, scale, X, residual, cut * (1 + 64 * (late + DEGREE) * UNIT))


def _sum(parts: Mapping[Fraction, ExactMatrix]) -> ExactMatrix:
    matrices = list(parts.values())
    total = matrices[0]
    for matrix in matrices[1:]:
        total = total + matrix
    return total


def _scaled(A: ExactMatrix, scale: tuple[Fraction, ...]) -> ExactMatrix:
    n = len(scale)
    return ExactMatrix(tuple(tuple(A[i, j] * scale[j] / scale[i] for j in range(n)) for i in range(n)), A.shape)


def _solve(pieces: dict[int, Array], n: int, count: int) -> Array:
    """Coefficients of every step by the Taylor recurrence, as linear maps of the start and of the delayed steps."""
    J = DEGREE + 1
    now = pieces[0]
    start = np.zeros((J, n, n))
    start[0] = np.eye(n)
    for j in range(DEGREE):
        start[j + 1] = now @ start[j] / (j + 1)
    late = {lag: A for lag, A in pieces.items() if lag}
    X = np.zeros((count, J, n, n))
    here = np.eye(n)
    if not late:
        flow = start.sum(axis=0)
        nodes = np.empty((count, n, n))
        nodes[0], done, power = here, 1, flow
        while done < count:
            take = min(done, count - done)
            nodes[done : done + take] = power @ nodes[:take]
            done, power = done + take, power @ power
        return np.asarray(np.einsum("jab,kbc->kjac", start, nodes))
    first = start.reshape(J * n, n)
    maps = {lag: _forced(now, A) for lag, A in late.items()}
    for k in range(count):
        flat = first @ here
        for lag, L in maps.items():
            if k >= lag:
                flat += L @ X[k - lag].reshape(J * n, n)
        X[k] = flat.reshape(J, n, n)
        here = X[k].sum(axis=0)
    return X


def _forced(now: Array, A: Array) -> Array:
    """Matrix from the coefficients of a delayed step to their part in the coefficients of this step."""
    n, J = len(now), DEGREE + 1
    L = np.zeros((J, n, J, n))
    for j in range(DEGREE):
        L[j + 1] = np.einsum("ab,bkc->akc", now, L[j]) / (j + 1)
        L[j + 1, :, j, :] += A / (j + 1)
    return L.reshape(J * n, J * n)


def _residual(pieces: dict[int, Array], X: Array) -> Array:
    """Total variation of the residual, entry by entry, rounded outward; the matrices count as known to 8 roundings."""
    count, J, n, _ = X.shape
    weight = np.arange(1, J + 1)
    rising = np.zeros_like(X)
    rising[:, :-1] = X[:, 1:] * weight[:-1, None, None]
    gap, size = rising.copy(), np.abs(rising)
    for lag, A in pieces.items():
        seen = X[: count - lag]
        gap[lag:] -= A @ seen
        size[lag:] += np.abs(A) @ np.abs(seen)
    gap = np.abs(gap) + (8 + 2 * n * len(pieces)) * UNIT * size
    inside = (gap / weight[:, None, None]).sum(axis=(0, 1))
    ends = X.sum(axis=1)[:-1]
    jumps = np.abs(X[1:, 0] - ends) + (J + 2) * UNIT * np.abs(X[:-1]).sum(axis=1)
    first = np.abs(X[0, 0] - np.eye(n))
    total = inside + jumps.sum(axis=0) + first
    return np.asarray(total * (1 + 4 * count * J * UNIT) + 1e-280)


def amplification(residual: Array) -> float:
    """1/(1 - largest column sum of the residual); WidthNotReached unless that sum is below one half."""
    largest = float(residual.sum(axis=0).max(initial=0.0)) * (1 + 16 * UNIT)
    if not largest < 0.5:
        raise WidthNotReached("the response of the loop with dead times lasts too long to be enclosed in doubles.")
    return 1 / (1 - largest) * (1 + 4 * UNIT)

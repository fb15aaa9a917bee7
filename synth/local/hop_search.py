"""The search behind the hop design: fast estimates of a hop in doubles, and ways downhill. Nothing here is trusted.

No convex start is used: the gains multiply the sensors of one unit directly (static output feedback), for which a
bounded-real condition |T(jw)| <= 1 is a bilinear matrix inequality, and with T(0) = 1 it has no interior. Evolution
from a low-discrepancy start finds the valley, simplices follow it, and the exact decision that follows is the judge.

Search: differential evolution (Storn and Price 1997), then a simplex (Nelder and Mead 1965); the penalties are ours.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.gain.strings.hop import PEAK
from synth.local.hop_task import HopTask
from synth.network.model import Kind

Array = NDArray[np.float64]

SAMPLES = 500
WEIGHT = 200.0  # of a broken limit, in the unit of what is made small
LIGHT = 4.0  # of the same while the search is global


class Estimate:
    """What is to be small, plus penalties, in doubles, for gains of one kind; smaller is better."""

    def __init__(self, task: HopTask, chosen: dict[str, list[Fraction]], kind: Kind) -> None:
        """Read the loop as an affine function of the gains, from the exact loops at zero and at each unit gain."""
        self.task, self.margin, self.weight = task, 0.0, WEIGHT
        zero = task.start(kind)
        self.base = task.loop({**chosen, kind.name: zero}, kind).loop
        self.units = []
        for i in range(len(zero)):
            unit = list(zero)
            unit[i] = Fraction(1)
            self.units.append(task.loop({**chosen, kind.name: unit}, kind).loop)
        goal = task.network.goal
        self.fastest = None if goal.fastest is None else float(goal.fastest)
        self.slowest = float(goal.slowest) if goal.slowest is not None else 0.02
        self.row = self.base.H["hop"].floats()[0]
        error = None if self.base.F.get("gap_error") else self.base.H.get("gap_error")
        self.error_row = None if error is None else error.floats()[0]
        self.parts = {b: self._affine(b, "A") for b in {d for u in (self.base, *self.units) for d in u.A}}
        self.inlets = {b: self._affine(b, "D") for b in {d for u in (self.base, *self.units) for d in u.D}}

    def _affine(self, delay: Fraction, part: str) -> tuple[Array, Array]:
        n = self.base.size
        empty = ExactMatrix.zeros(n, n if part == "A" else 1)
        first = getattr(self.base, part).get(delay, empty).floats()
        slopes = [getattr(unit, part).get(delay, empty).floats() - first for unit in self.units]
        return first, np.array(slopes)

    def __call__(self, gains: Array) -> float:
        """The number to make small."""
        A = {b: first + np.tensordot(gains, slopes, 1) for b, (first, slopes) in self.parts.items()}
        D = {b: (first + np.tensordot(gains, slopes, 1))[:, 0] for b, (first, slopes) in self.inlets.items()}
        D.setdefault(Fraction(0), np.zeros(self.base.size))
        whole = np.sum(list(A.values()), axis=0)
        modes = np.linalg.eigvals(whole)
        slow = float(-modes.real.max())
        lag = self.slowest * (1 + self.margin) - slow
        if slow <= 1e-6 or lag > 0.5 * self.slowest:
            return 1e3 * (1 + max(0.0, lag))
        over = max(0.0, lag / self.slowest)
        if self.fastest is not None:
            over += max(0.0, float(np.abs(modes).max()) / (self.fastest * (1 - self.margin)) - 1)
        far = float(np.abs(modes).max())
        late = max((float(b) for b in (*A, *D)), default=0.0)
        shape = (
            self._late(A, D, 30 / slow + 4 * late, far) if late else self._undelayed(whole, D[Fraction(0)], slow, far)
        )
        if shape is None:
            return 1e3
        if self.task.notion == PEAK and not late:
            # A kernel whose slowest mode swings changes its sign some day, however late.
            over += 0.1 * float(abs(modes[int(np.argmax(modes.real))].imag)) / slow
        if self.task.notion == PEAK:
            over += max(0.0, shape.excess - 1e-7) + shape.thin(slow, self.margin)
        else:
            over += max(0.0, shape.louder + 1e-6 + 0.1 * self.margin)
        if self.task.most_jerk is not None:
            over += max(0.0, shape.jerk / (float(self.task.most_jerk) * (1 - self.margin)) - 1)
        if self.task.most_gap is not None:
            over += max(0.0, shape.gap / (float(self.task.most_gap) * (1 - 0.1 * self.margin)) - 1)
        small = {"time gap": shape.gap, "gap error": shape.error, "effort": shape.jerk}[self.task.least]
        return small + self.weight * over

    def _undelayed(self, A: Array, D: Array, slow: float, far: float) -> _Shape | None:
        """From modes and residues, on a grid of times and one of frequencies that suit them."""
        modes, V = np.linalg.eig(A)
        try:
            residues = (self.row @ V) * np.linalg.solve(V, D.astype(complex))
        except np.linalg.LinAlgError:
            return None
        steady = -(residues / modes).sum().real
        if steady <= 0:
            return None
        times = np.sinh(np.linspace(0, np.arcsinh(30 * far / slow), SAMPLES)) / far
        waves = np.exp(modes[:, None] * times)
        kernel = (residues @ waves).real / steady
        w = np.geomspace(slow / 100, 30 * far, 400)
        T = np.abs((residues[:, None] / (1j * w - modes[:, None])).sum(axis=0)) / steady
        slope = np.abs(((residues * modes) @ waves).real)
        return _Shape(
            times,
            kernel,
            2 * float(np.trapezoid(np.maximum(-kernel, 0), times)),
            float(((T - 1) * (1 + (far / w) ** 2)).max()),
            float(np.trapezoid(slope, times) + abs(self.row @ D)),
            float((residues / modes**2).sum().real) / steady,
            self._error(modes, V, D, waves, times),
        )

    def _error(self, modes: Array, V: Array, D: Array, waves: Array, times: Array) -> float:
        """|T_e/s|_1, from the step response of the gap error."""
        if self.error_row is None or self.task.least != "gap error":
            return 0.0
        parts = (self.error_row @ V) * np.linalg.solve(V, D.astype(complex)) / modes
        left = abs(parts.sum())  # of a step that never vanishes
        return float(np.trapezoid(np.abs((parts @ waves).real), times) + left * times[-1])

    def _late(self, A: dict[Fraction, Array], D: dict[Fraction, Array], end: float, far: float) -> _Shape | None:
        """From values of T on the imaginary axis by one inverse transform."""
        count = 1 << min(13, max(9, math.ceil(math.log2(end * far * 5))))
        s = 2j * np.pi * np.fft.rfftfreq(count, end / count)
        n = len(self.row)
        left = s[:, None, None] * np.eye(n) - np.sum(
            [np.exp(-s * float(b))[:, None, None] * part for b, part in A.items()], axis=0
        )
        right = np.sum([np.exp(-s * float(d))[:, None] * column for d, column in D.items()], axis=0)
        states = np.linalg.solve(left, right[:, :, None])[:, :, 0]
        T = states @ self.row
        times, step = np.asarray(np.arange(count) * (end / count), dtype=np.float64), end / count
        kernel = np.fft.irfft(T, count) / step
        tail = float(np.abs(kernel[-count // 16 :]).max())
        # A hint only: the response of an unstable loop does not vanish before it starts.
        if not (np.all(np.isfinite(kernel)) and tail < 0.05 * float(np.abs(kernel).max())):
            return None
        w = s.imag[1:]
        return _Shape(
            times,
            kernel,
            float(np.abs(kernel).sum() * step) - 1 - 1e-6,
            float(((np.abs(T[1:]) - 1) * (1 + (far / w) ** 2)).max()),
            float(np.abs(np.fft.irfft(s * T, count)).sum()),
            float((times * kernel).sum() * step),
            self._late_error(states, s, count),
        )

    def _late_error(self, states: NDArray[Any], s: NDArray[Any], count: int) -> float:
        if self.error_row is None or self.task.least != "gap error":
            return 0.0
        values = states @ self.error_row
        values[1:] /= s[1:]
        values[0] = values[1].real
        return float(np.abs(np.fft.irfft(values, count)).sum())


@dataclass(frozen=True, eq=False)
class _Shape:
    """Estimates of one hop: kernel over time, |T|_1 - 1, how far |T| is above 1, jerk, time gap, |T_e/s|_1."""

    times: Array
    kernel: Array
    excess: float
    louder: float
    jerk: float
    gap: float
    error: float

    def thin(self, slow: float, margin: float) -> float:
        """How far the kernel, with its slowest decay taken out, comes too near to zero after its largest value."""
        if not margin:
            return 0.0
        seen = slow * self.times < 12
        weighted = (self.kernel * np.exp(np.minimum(slow * self.times, 12.0)))[seen]
        top = int(np.argmax(weighted))
        return max(0.0, margin - float(weighted[top:].min() / max(float(weighted[top]), 1e-300)))


def _signed(point: Array, box: Array) -> Array:
    """From [-1, 1] to gains: cubes, so that small and large gains are searched alike."""
    return np.asarray(point**3 * box)


def search(estimate: Estimate, box: list[float], seed: int, light: float) -> Array:
    """A global search with light penalties, along whose valleys it can move, then simplices with heavier ones."""
    estimate.weight = light
    point = _global(estimate, box, seed)
    for weight in (light, WEIGHT):
        estimate.weight = weight
        point = polished(estimate, point, box)
    return point


def _global(estimate: Estimate, box: list[float], seed: int) -> Array:
    from scipy.optimize import differential_evolution

    size = np.array(box)

    def call(x: Array) -> float:
        return estimate(_signed(x, size))

    found: Any = differential_evolution(
        call,
        [(-1.0, 1.0)] * len(box),  # type: ignore[arg-type]
        seed=seed,
        popsize=10,
        maxiter=60,
        tol=1e-6,
        polish=False,
        init="sobol",
    )
    return _signed(np.asarray(found.x), size)


def polished(estimate: Estimate, point: Array, box: list[float]) -> Array:
    """Simplices from ``point`` until they gain nothing more."""
    size = np.array(box)
    for _ in range(3):
        scale = np.maximum(np.abs(point), 1e-3 * size)
        after = _simplex(lambda x, scale=scale: estimate(np.clip(x * scale, -size, size)), point / scale)  # type: ignore[misc]
        after = np.clip(after * scale, -size, size)
        if math.isclose(estimate(after), estimate(point), rel_tol=1e-5):
            return np.asarray(after)
        point = after
    return np.asarray(point)


def _simplex(call: Callable[[Array], float], start: Array) -> Array:
    from scipy.optimize import minimize

    options = {"maxfev": 500, "xatol": 1e-7, "fatol": 1e-7}
    return np.asarray(minimize(call, start, method="Nelder-Mead", options=options).x, dtype=np.float64)  # type: ignore[call-overload]

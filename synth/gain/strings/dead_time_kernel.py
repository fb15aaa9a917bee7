"""Impulse responses of loops with dead times: the integral of the modulus, enclosed, and one sign, proven or refuted.

Both read the piecewise polynomials of ``dead_time_steps`` in Bernstein form, whose coefficients enclose a polynomial on
its step, and add the proven error. One sign is proven in three parts: just after the first response by the exact
series of the kernel there; in the middle where the polynomials exceed the error; in the tail by the slowest mode, which
must be one real root, alone to the right of a line Re s = -r1 (counted), while all the rest is at most K e^{-r1 t} with
K a bound of (1/pi) integral |T(-r1 + jw)| dw (the inversion integral moved to that line; ours).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from math import comb

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain.peak import Peaks, check_width
from synth.gain.strings.dead_time import DelayLoop, QuasiPolynomial
from synth.gain.strings.dead_time_roots import rate_of_decay, require_stable
from synth.gain.strings.dead_time_steps import DEGREE, UNIT, Steps, TooManyStepsError, amplification, method_of_steps
from synth.gain.strings.dead_time_tail import NoDominantModeError, dominant_mode, first_response, split_atoms

Array = NDArray[np.float64]

_DEPTH = 24  # halvings of a step whose sign is not settled
_BERNSTEIN = np.array(
    [[comb(i, j) / comb(DEGREE, j) if j <= i else 0.0 for j in range(DEGREE + 1)] for i in range(DEGREE + 1)]
)


@dataclass(frozen=True)
class Enclosure:
    """lower <= true value <= upper."""

    lower: float
    upper: float

    @property
    def width(self) -> float:
        """Relative width."""
        return (self.upper - self.lower) / self.upper if self.upper > 0 else 0.0


@dataclass(frozen=True)
class KernelSign:
    """Whether an impulse response has one sign: 1 (never negative), -1 (never positive), 0 (proven to change), None.

    ``time``: for 0, a moment at which the sign differs from the first one; else the moment from which the slowest mode
    decides. ``why`` says what was not decided.
    """

    sign: int | None
    time: float
    why: str = ""


@dataclass(frozen=True, eq=False)
class Response:
    """A piecewise polynomial y~ (count, DEGREE + 1), coefficients by step, and what rounding may hide per step."""

    steps: Steps
    coefficients: Array
    rounding: Array
    weight: Array  # |inlet| in scaled states, what the residual is multiplied by

    @property
    def bernstein(self) -> tuple[Array, Array]:
        """Bernstein coefficients by step and a bound of their error."""
        b = self.coefficients @ _BERNSTEIN.T
        return b, self.rounding + 512 * UNIT * np.abs(self.coefficients).sum(axis=1)


def response(steps: Steps, H: ExactMatrix, D: Mapping[Fraction, ExactMatrix]) -> Response:
    """The response of row ``H`` to an impulse at the inlet ``D`` (delay -> column), from the fundamental solution."""
    read = np.einsum("i,kjim->kjm", steps.row(H), steps.X)
    size = np.einsum("i,kjim->kjm", np.abs(steps.row(H)), np.abs(steps.X))
    out, rounding = np.zeros(read.shape[:2]), np.zeros(steps.count)
    weight = np.zeros(steps.loop.size)
    for delay, column in D.items():
        lag, d = steps.lag(delay), steps.column(column, delay)
        kept = max(steps.count - lag, 0)
        out[lag:] += read[:kept] @ d
        rounding[lag:] += (size[:kept] @ np.abs(d)).sum(axis=1) * (2 * steps.loop.size + 12) * UNIT
        weight += np.abs(d)
    return Response(steps, out, rounding, weight)


def ramp_response(steps: Steps, H: ExactMatrix, rest: ExactMatrix) -> Response:
    """Response of row ``H`` of x - rest * v to an impulse of v', for a loop whose rest at v = 1 is ``rest`` (n x 1).

    It obeys z' = A(z) - rest v' - sum_d D_d (v - v(t - d)) - sum_b A_b rest (v - v(t - b)), and v - v(t - d) is the
    integral of v' over the last d seconds.
    """
    loop = steps.loop
    out = response(steps, H, {Fraction(0): rest.scaled(-1)})
    total, rounding, weight = out.coefficients.copy(), out.rounding.copy(), out.weight.copy()
    boxes = [(d, column) for d, column in loop.D.items() if d] + [(b, A @ rest) for b, A in loop.A.items() if b]
    for width, column in boxes:
        direct = response(steps, H, {Fraction(0): column.scaled(-1)})
        sums, error = _integrated(direct)
        lag = steps.lag(width)
        kept = max(steps.count - lag, 0)
        total += sums
        total[lag:] -= sums[:kept]
        rounding += error + np.concatenate([np.zeros(min(lag, steps.count)), error[:kept]])
        weight += direct.weight * float(width)
    return Response(steps, total, rounding, weight * (1 + 32 * UNIT))


def _integrated(y: Response) -> tuple[Array, Array]:
    """Coefficients of the integral from 0 (the highest power is kept in the rounding bound) and its error by step."""
    step = float(y.steps.step)
    weights = np.arange(1, DEGREE + 2)
    parts = y.coefficients / weights * step
    sums = np.zeros_like(parts)
    sums[:, 1:] = parts[:, :-1]
    whole = parts.sum(axis=1)
    sums[1:, 0] = np.cumsum(whole)[:-1]
    size = np.abs(parts).sum(axis=1)
    # Every partial sum adds one rounding of what has been collected, and the errors made in y add up too.
    drift = np.cumsum(y.rounding * step + np.abs(parts[:, -1]))
    collected = np.cumsum(size)
    rounding = drift + collected * (len(size) + 40) * UNIT
    return sums, rounding


def sup_bound(steps: Steps, H: ExactMatrix) -> float:
    """A bound of sup |H X| over the moments covered, entry by entry of the scaled states, the largest."""
    read = np.abs(np.einsum("i,kjim->kjm", np.abs(steps.row(H)), np.abs(steps.X))).sum(axis=1)
    return float(read.max(initial=0.0)) * amplification(steps.residual) * (1 + 64 * UNIT)


def absolute_integral(b: Array, error: Array, step: float) -> Enclosure:
    """Integral of |y~| over all steps from Bernstein coefficients ``b`` with errors ``error`` (per step)."""
    sure, loose, length = 0.0, 0.0, step
    mass = 0.0
    for _ in range(_DEPTH):
        settled = (b.min(axis=1) >= error) | (b.max(axis=1) <= -error)
        sure += float(np.abs(b[settled].mean(axis=1)).sum()) * length
        loose += float(error[settled].sum()) * length
        mass += float(np.abs(b[settled]).max(axis=1).sum()) * length
        b, error = b[~settled], error[~settled]
        small = (np.abs(b).max(axis=1) + error) * length <= 1e-14 * step * (1e-300 + mass)
        loose += float((np.abs(b[small]).max(axis=1) + error[small]).sum()) * length
        b, error = _halved(b[~small], error[~small])
        length /= 2
        if not len(b):
            break
    loose += float((np.abs(b).max(axis=1, initial=0.0) + error).sum()) * length
    slack = mass * 4096 * UNIT
    return Enclosure(max(0.0, sure - loose - slack), sure + loose + slack)


def _halved(b: Array, error: Array) -> tuple[Array, Array]:
    """Both halves of every step (de Casteljau); the slack for these roundings is in the caller's bound of 512."""
    left, right, here = np.empty_like(b), np.empty_like(b), b.copy()
    for i in range(b.shape[1]):
        left[:, i], right[:, b.shape[1] - 1 - i] = here[:, 0], here[:, -1]
        here = (here[:, :-1] + here[:, 1:]) / 2
    return np.concatenate([left, right]), np.concatenate([error, error])


def peak_of_response(loop: DelayLoop, outlet: str, width: float = 1e-6, ramp: ExactMatrix | None = None) -> Enclosure:
    """Enclose |F| + integral |h| for one outlet; with ``ramp`` (the rest at v = 1) for the inlet v' instead of v.

    Without dead time this is ``peak_to_peak_gain``; with it the method of steps and its residual. Raises UnstableLoop,
    InputError for widths and for dead times without a usable common step, WidthNotReached.
    """
    check_width(width)
    require_stable(loop.characteristic, "the loop")
    H = loop.H[outlet]
    through = Fraction(0) if ramp is not None else sum((abs(f) for f in loop.F.get(outlet, {}).values()), Fraction(0))
    if loop.delays == (Fraction(0),):
        D = loop.D[Fraction(0)] if ramp is None else ramp.scaled(-1)
        found = Peaks(loop.now, H, width).gains(D, ExactMatrix.of([[through]]))
        return Enclosure(float(found.lower[0, 0]), float(found.upper[0, 0]))
    rate = float(rate_of_decay(loop.characteristic, 0.05))
    best = Enclosure(0.0, math.inf)
    for spans in (24.0, 34.0, 48.0):
        steps = method_of_steps(loop, spans / rate)
        y = response(steps, H, loop.D) if ramp is None else ramp_response(steps, H, ramp)
        inside = absolute_integral(*y.bernstein, float(steps.step))
        error = _total_error(steps, H, y)
        best = Enclosure(
            max(best.lower, inside.lower - error + float(through) * (1 - UNIT)),
            min(best.upper, (inside.upper + error + float(through)) * (1 + 4 * UNIT)),
        )
        if best.upper - best.lower <= width * best.upper:
            return best
    raise WidthNotReached(
        f"the peak gain to {outlet} could not be enclosed to a relative width of {width:g}; it lies in "
        f"[{best.lower:g}, {best.upper:g}]."
    )


def _total_error(steps: Steps, H: ExactMatrix, y: Response) -> float:
    """Bound of the integral of |y - y~| over all time, the part after the last step included."""
    residual = steps.residual + steps.cut
    read = np.einsum("i,kjim->kjm", np.abs(steps.row(H)), np.abs(steps.X)).sum(axis=(0, 1))
    whole = float(read.max(initial=0.0)) * float(steps.step) * amplification(residual)
    return whole * float((residual @ y.weight).sum()) * (1 + 2.0**-30) + float(y.rounding.sum()) * float(steps.step)


def kernel_sign(loop: DelayLoop, outlet: str) -> KernelSign:
    """Decide whether the impulse response from the inlet to ``outlet`` has one sign (atoms of feed-through included).

    Raises UnstableLoop if the loop is not stable. ``sign`` None means that neither was shown.
    """
    require_stable(loop.characteristic, "the loop")
    num, den = loop.transfer(outlet)
    if not num.terms:
        return KernelSign(1, 0.0)
    atoms, num = split_atoms(num, den)
    signs = {1 if value > 0 else -1 for value in atoms.values()}
    if not num.terms:
        return KernelSign(signs.pop() if len(signs) == 1 else 0, 0.0)
    start = first_response(num, den)
    signs.add(start.sign)
    if len(signs) > 1:
        return KernelSign(0, float(start.time))
    try:
        mode = dominant_mode(num, den)
    except NoDominantModeError as reason:
        return _seek_change(loop, outlet, start.sign, num, den, str(reason))
    if mode.sign != start.sign:
        return KernelSign(0, mode.time)
    return _middle(loop, outlet, start.sign, float(start.time), start.seconds, mode.time, mode.shift)


def _middle(
    loop: DelayLoop, outlet: str, sign: int, begin: float, seconds: float, end: float, shift: float, proof: bool = True
) -> KernelSign:
    """Sign of the kernel from ``begin`` + ``seconds`` to ``end``; times before that are settled."""
    H = loop.H[outlet]
    try:
        steps = method_of_steps(loop, end, shift)
    except TooManyStepsError:
        return KernelSign(None, end, f"its tail is settled only after {end:.3g} s, which takes too many steps")
    y = response(steps, H, loop.D)
    slack = sup_bound(steps, H) * float((steps.residual @ y.weight).sum()) * (1 + 2.0**-30)
    b, error = y.bernstein
    b, error = sign * b, error + slack
    step = float(steps.step)
    first = round(begin / step)
    at, length = np.arange(steps.count) * step, step
    b, error, at = b[first:], error[first:], at[first:]
    for _ in range(_DEPTH):
        below = b.max(axis=1) < -error
        if below.any():
            return KernelSign(0, float(at[below][0]))
        settled = (b.min(axis=1) >= error) | (at + length <= begin + seconds)
        b, error, at = b[~settled], error[~settled], at[~settled]
        if not len(b):
            return KernelSign(sign, end) if proof else KernelSign(None, end, "the tail is not decided")
        if len(b) > 4096 or (np.abs(b).max(axis=1) <= error).any():
            break
        b, error = _halved(b, error)
        length /= 2
        at = np.concatenate([at, at + length])
    return KernelSign(None, float(at.min()), f"near t = {float(at.min()):.4g} s the response is too close to zero")


def _seek_change(
    loop: DelayLoop, outlet: str, sign: int, num: QuasiPolynomial, den: QuasiPolynomial, why: str
) -> KernelSign:
    """Look for a moment of the other sign where no real mode decides the tail."""
    rate = float(rate_of_decay(den, 0.01))
    start = first_response(num, den)
    for spans in (12.0, 60.0, 300.0):
        found = _middle(
            loop, outlet, sign, float(start.time), start.seconds, float(start.time) + spans / rate, 0.98 * rate, False
        )
        if found.sign == 0:
            return found
    return KernelSign(None, found.time, why)

"""Peak gains of one closed unit as guaranteed enclosures: |F| + integral_0^inf |H e^{At} D| dt per outlet and inlet.

This is the induced gain from the largest absolute value of an inlet to that of an outlet (theory: 3a), and the only
number of a unit that the peak route needs. Everything is worked out in ball arithmetic from the exact rationals that
were given, so the enclosure holds for those numbers and not for a rounding of them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Union

import numpy as np
from flint import arb, ctx, fmpq, fmpq_mat
from numpy.typing import NDArray

from synth.base.errors import InputError, WidthNotReached
from synth.base.exact import ExactMatrix, Number
from synth.gain.flow import Flow, Track, exact_terms, outward, starting_bits, vanishes
from synth.gain.lyapunov import balance, find_decay, rationals, rescaled
from synth.gain.walk import Budget, NotClosedError, Walk

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

Matrix = Union["ArrayLike", ExactMatrix, Sequence[Sequence[Number]]]

# Tries with doubled precision and ever smaller allowances before the width is reported as not reached.
_ATTEMPTS = 5
# The narrowest relative width that doubles can carry.
_NARROWEST = 1e-15


@dataclass(frozen=True, eq=False)
class PeakGain:
    """A guaranteed enclosure, entry by entry: lower <= true value <= upper, rounded outward to doubles.

    ``lower`` and ``upper``: arrays (outlets, inlets), or (outlets,) for a free response, in outlet unit per inlet unit;
    ``width``: the largest relative width (upper - lower)/upper found in them.
    Law: scaling D, H or F by c scales both ends by |c|; (c A, c D, H) has the same peak gains as (A, D, H), c > 0.
    """

    lower: NDArray[np.float64]
    upper: NDArray[np.float64]
    width: float

    def __post_init__(self) -> None:
        """Nobody downstream may change a guaranteed number."""
        self.lower.setflags(write=False)
        self.upper.setflags(write=False)


def peak_to_peak_gain(A: Matrix, D: Matrix, H: Matrix, F: Matrix | Number = 0, width: float = 1e-6) -> PeakGain:
    """Enclose |F_kl| + integral_0^inf |H_k e^{At} D_l| dt for every outlet k and inlet l.

    ``A`` (n, n) in 1/s; ``D`` (n, inlets) state unit per s and inlet unit; ``H`` (outlets, n) outlet unit per state
    unit; ``F`` (outlets, inlets), 0 for none; ``width`` relative: upper - lower <= width * upper, 1e-15 < width < 1. A
    kernel that vanishes identically gives exactly |F| (up to its rounding). Sign convention: none, moduli are taken.
    Floats count as the dyadic numbers they are; texts such as "0.1" and Fractions count exactly.

    Raises UnstableLoop if A is not Hurwitz, InputError on shapes, widths and non-finite entries, WidthNotReached if the
    enclosure does not close. Formula: theory 3a and section 10; the walk (Bernstein cells in a Lyapunov norm) is ours.
    """
    check_width(width)
    a, d, h = as_matrix(A, "A"), as_matrix(D, "D"), as_matrix(H, "H")
    f = _feedthrough(F, (h.shape[0], d.shape[1]))
    _check_shapes(a, d, h, f)
    return Peaks(a, h, width).gains(d, f)


class Peaks:
    """One unit with its outlets; peak gains from any inlets, sharing every step of the work.

    ``A`` (n, n), ``H`` (outlets, n) exact; ``width`` relative. Raises UnstableLoop if A is not Hurwitz.
    """

    def __init__(self, A: ExactMatrix, H: ExactMatrix, width: float) -> None:
        """Balance the states and verify the decay."""
        self.scale = balance(A)
        scaled_A, _, scaled_H = rescaled(A, ExactMatrix.zeros(A.shape[0], 0), H, self.scale)
        self.decay = find_decay(scaled_A)
        self.A, self.H = rationals(scaled_A), rationals(scaled_H)
        self.width = width
        self.outlets, self.size = H.shape
        self._flows: dict[int, Flow] = {}

    def flow(self, attempt: int) -> Flow:
        """The shared trajectory data at the precision of the given attempt."""
        if attempt not in self._flows:
            bits = starting_bits(self.decay, self.width) << attempt
            with ctx.workprec(bits):
                self._flows[attempt] = Flow(self.A, self.H, self.decay, bits)
        return self._flows[attempt]

    def gains(self, D: ExactMatrix, F: ExactMatrix | None = None) -> PeakGain:
        """Peak gains from the inlets ``D`` (n, inlets) with feed-through ``F`` (outlets, inlets) or none."""
        inlets = D.shape[1]
        lower, upper = np.zeros((self.outlets, inlets)), np.zeros((self.outlets, inlets))
        scaled = ExactMatrix(
            tuple(tuple(v / t for v in row) for row, t in zip(D.rows, self.scale, strict=True)), D.shape
        )
        for q in range(inlets):
            column = rationals(scaled.column(q)) if self.size else fmpq_mat(0, 1, [])
            direct = [abs(F[k, q]) if F is not None else Fraction(0) for k in range(self.outlets)]
            for k, (low, high) in enumerate(self._column(column, direct)):
                lower[k, q], upper[k, q] = low, high
        return PeakGain(lower, upper, relative_width(lower, upper))

    def _column(self, column: fmpq_mat, direct: list[Fraction]) -> list[tuple[float, float]]:
        terms = exact_terms(self.A, column) if self.size else []
        tracks: dict[int, Track] = {}
        scale = self._guess(column) if self.size else np.zeros(self.outlets)
        found = []
        for k in range(self.outlets):
            through = fmpq(direct[k].numerator, direct[k].denominator)
            if not self.size or vanishes(self.H, k, terms, self.size):
                with ctx.workprec(128):
                    found.append(outward(arb(through), arb(through)))
            else:
                found.append(self._pair(k, column, terms, tracks, through, float(scale[k])))
        return found

    def _pair(
        self, k: int, column: fmpq_mat, terms: list[fmpq_mat], tracks: dict[int, Track], through: fmpq, scale: float
    ) -> tuple[float, float]:
        why = ""
        low, high = 0.0, math.inf
        for attempt in range(_ATTEMPTS):
            flow = self.flow(attempt)
            with ctx.workprec(flow.bits):
                if attempt not in tracks:
                    tracks[attempt] = Track(flow, column, terms)
                # The guess of the size only shares out the allowances; whether the width is met is decided below.
                allowance = self.width * (scale + float(arb(through))) * 16.0**-attempt
                try:
                    first, last = Walk(tracks[attempt], k, self.H).integral(
                        Budget(allowance / 4, allowance * 2.0**-14, allowance * 2.0**-8)
                    )
                except NotClosedError as reason:
                    why = f" ({reason.why})"
                    if reason.final:
                        break
                    continue
                lower, upper = outward(first + arb(through), last + arb(through))
            low, high = max(low, lower), min(high, upper)
            if high - low <= self.width * high:
                return low, high
        raise WidthNotReached(
            f"the peak gain of outlet {k} could not be enclosed to a relative width of {self.width:g}; it lies in "
            f"[{low:g}, {high:g}]{why}. Ask for a larger width or damp the loop more."
        )

    def _guess(self, column: fmpq_mat) -> NDArray[np.float64]:
        """Rough size of every outlet's integral by doubles: steps that double in length, trapezium on each."""
        import scipy.linalg

        A, H, x = _doubles(self.A), _doubles(self.H), _doubles(column)[:, 0]
        sizes = np.abs(self.decay.modes)
        step, end = (
            0.125 / max(float(sizes.max()), 1e-300),
            8.0 / max(float(np.abs(self.decay.modes.real).min()), 1e-300),
        )
        total, time = np.zeros(len(H)), 0.0
        here = np.abs(H @ x)
        with np.errstate(all="ignore"):
            while time < end and step < math.inf:
                E = scipy.linalg.expm(A * step)
                for _ in range(24):
                    x = E @ x
                    there = np.abs(H @ x)
                    total += step * (here + there) / 2
                    here = there
                time += 24 * step
                step *= 2
        return np.where(np.isfinite(total), total, 0.0)


def _doubles(matrix: fmpq_mat) -> NDArray[np.float64]:
    values = [[float(Fraction(int(v.p), int(v.q))) for v in row] for row in matrix.table()]
    return np.array(values, dtype=float).reshape(matrix.nrows(), matrix.ncols())


def relative_width(lower: NDArray[np.float64], upper: NDArray[np.float64]) -> float:
    """Largest (upper - lower)/upper over the entries, 0 where upper is 0."""
    if lower.size == 0:
        return 0.0
    return float(np.max(np.divide(upper - lower, upper, out=np.zeros_like(upper), where=upper > 0)))


def check_width(width: float) -> None:
    """InputError unless ``width`` is a relative width that doubles can carry."""
    if not (isinstance(width, (int, float)) and _NARROWEST < width < 1):
        raise InputError(f"width must lie between {_NARROWEST:g} and 1 (relative), not {width!r}.")


def as_matrix(value: Matrix, name: str) -> ExactMatrix:
    """The argument as an exact matrix, or an InputError that says what is wrong with it."""
    if isinstance(value, ExactMatrix):
        return value
    if isinstance(value, np.ndarray):
        if value.ndim != 2:
            raise InputError(f"{name} must be a matrix (two dimensions), not an array of shape {value.shape}.")
        value = value.tolist() if value.size else ExactMatrix.zeros(*value.shape)
        if isinstance(value, ExactMatrix):
            return value
    try:
        return ExactMatrix.of(value)  # type: ignore[arg-type]
    except TypeError as error:
        raise InputError(f"{name} must be a matrix: a list of rows of numbers.") from error
    except (ValueError, OverflowError, ZeroDivisionError) as error:
        raise InputError(f"{name} must hold finite numbers in rows of equal length ({error}).") from error


def _feedthrough(F: Matrix | Number, shape: tuple[int, int]) -> ExactMatrix:
    if isinstance(F, (int, float, str, Fraction)):
        row = as_matrix([[F]], "F").rows[0] * shape[1]
        return ExactMatrix((row,) * shape[0], shape)
    return as_matrix(F, "F")


def _check_shapes(A: ExactMatrix, D: ExactMatrix, H: ExactMatrix, F: ExactMatrix) -> None:
    n = A.shape[0]

    def expected(name: str, shape: tuple[int, int], want: str) -> InputError:
        return InputError(f"{name} has shape {shape}; with A of shape {A.shape} it must be {want}.")

    if A.shape[1] != n:
        raise InputError(f"A must be square, not of shape {A.shape}.")
    if D.shape[0] != n:
        raise expected("D", D.shape, f"({n}, inlets)")
    if H.shape[1] != n:
        raise expected("H", H.shape, f"(outlets, {n})")
    if F.shape != (H.shape[0], D.shape[1]):
        raise expected("F", F.shape, f"({H.shape[0]}, {D.shape[1]}), outlets by inlets")

"""Peak gains of one window: from every inlet to every outlet of its centre, |through| + integral of |H e^{At} d| dt.

Two engines. Small windows go to the exact one of the peak route (ball arithmetic on rationals). Large ones follow the
adjoint row of each outlet in doubles, one trajectory for all inlets, with every rounding bounded (trajectory.py). Where
neither gives a proof, what is left is an estimate, and it stands in a field of its own.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.base.errors import InputError, UnstableLoop, WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain.guide import peak_gain_guide
from synth.gain.peak import Peaks, check_width
from synth.gain.rounding import down, up
from synth.gain.window.build import Sparse, Window
from synth.gain.window.doubles import Doubles, Floats, U, doubles_of
from synth.gain.window.integrals import absolute_integrals
from synth.gain.window.norm import Norm, guessed_norm, rightmost_real, verified_norm
from synth.gain.window.trajectory import DEGREE, Cell, cells, step_of

METHODS = ("auto", "exact", "sparse", "estimate")
# Up to this many states the exact engine is quick; up to the second number it is tried where the other gives no proof.
_SMALL, _WORTH_TRYING = 6, 12
# Up to this many states and inlets the design's fast estimates are quicker than a trajectory.
_GUIDED, _FEW = 80, 16
# More cells than this: the window decays too slowly for its fastest mode.
MOST_CELLS = 60_000
_MOST_GUESSED = 20_000
_BATCH = 32


@dataclass(frozen=True, eq=False)
class WindowPeaks:
    """Peak gains (outlets of the centre, inlets), in outlet unit per inlet unit, of A + alpha I.

    ``lower`` <= true <= ``upper`` holds for certain where ``guaranteed``; otherwise they are 0 and inf, and only
    ``estimate`` says something, without a guarantee. ``stable``: False if the window's rightmost mode (``rightmost``,
    1/s, as doubles) does not decay; then nothing is finite. ``rate``: verified rate of decay in 1/s (0 if none);
    ``cells`` how many steps were taken; ``note`` says in words what is missing.
    """

    lower: Floats
    upper: Floats
    estimate: Floats
    guaranteed: bool
    stable: bool
    method: str
    rightmost: float
    rate: float = 0.0
    cells: int = 0
    note: str = ""

    def __post_init__(self) -> None:
        """Nobody downstream may change a guaranteed number."""
        for array in (self.lower, self.upper, self.estimate):
            array.setflags(write=False)


def window_peaks(
    window: Window, alpha: Fraction = Fraction(0), width: float = 1e-6, method: str = "auto",
    weights: Sequence[float] | None = None,
) -> WindowPeaks:  # fmt: skip
    """Enclose the peak gains of a window.

    ``alpha`` in 1/s; ``width`` relative, of the sum over inlets (each times its ``weights``) of every outlet rather
    than of each entry; ``method``: 'exact', 'sparse', 'estimate', or 'auto', which takes the first that gives a proof.
    A window whose modes do not all decay is no error: the result says so. Raises InputError for other methods or
    widths. Source: theory (20) and section 10; the adjoint with summed-up residuals is ours.
    """
    check_width(width)
    if method not in METHODS:
        raise InputError(f"method must be one of {', '.join(METHODS)}, not {method!r}.")
    if method == "exact" or (method == "auto" and window.size <= _SMALL):
        return _exact(window, alpha, width)
    system = doubles_of(window, alpha)
    if system is None:
        return _exact(window, alpha, width)
    rightmost = rightmost_real(system)
    if rightmost >= 0:
        return _nothing(window, "sparse", rightmost, stable=False)
    if method == "estimate" and window.size <= _GUIDED and len(window.inlets) <= _FEW:
        return _guided(window, system, rightmost)
    norm = None if method == "estimate" else verified_norm(system, rightmost)
    if norm is None and method == "auto" and window.size <= _WORTH_TRYING:
        return _exact(window, alpha, width)
    return _followed(window, system, norm or guessed_norm(system, rightmost), rightmost, width, weights)


def _nothing(window: Window, method: str, rightmost: float, stable: bool, note: str = "") -> WindowPeaks:
    shape = (len(window.outlets), len(window.inlets))
    note = note or f"the window's rightmost mode has the real part {rightmost:.6g} 1/s, so no peak gain is finite"
    return WindowPeaks(
        np.zeros(shape), np.full(shape, math.inf), np.full(shape, math.inf if not stable else math.nan), False,
        stable, method, rightmost, note=note,
    )  # fmt: skip


def _exact(window: Window, alpha: Fraction, width: float) -> WindowPeaks:
    """By ball arithmetic on the exact numbers."""
    n = window.size
    A = _dense(window.A, n) + ExactMatrix.identity(n).scaled(alpha)
    try:
        peaks = Peaks(A, _dense(window.rows, n), width)
        found = peaks.gains(_dense(window.columns, n).T, _dense(window.through, len(window.inlets)))
    except UnstableLoop as error:
        system = doubles_of(window, alpha)
        rightmost = math.nan if system is None else rightmost_real(system)
        return _nothing(window, "exact", rightmost, False, f"the window is not stable: {error}")
    except WidthNotReached as error:
        return _nothing(window, "exact", math.nan, True, str(error))
    modes = peaks.decay.modes
    rightmost = float(modes.real.max()) if modes.size else -math.inf
    middle = (found.lower + found.upper) / 2
    rate = Fraction(int(peaks.decay.a.p), int(peaks.decay.a.q))
    return WindowPeaks(found.lower, found.upper, middle, True, True, "exact", rightmost, float(rate))


def _guided(window: Window, system: Doubles, rightmost: float) -> WindowPeaks:
    """The fast estimates that the design uses: states for all inlets at once, so for small windows only."""
    direct = _dense(window.through, len(window.inlets)).floats()
    found = peak_gain_guide(system.A.toarray(), system.D.toarray(), system.H, direct)
    if found is None or not np.all(np.isfinite(found.gains)):
        return _nothing(window, "guide", rightmost, True, "it decays too slowly for an estimate")
    note = "an estimate, which proves nothing"
    shape = found.gains.shape
    return WindowPeaks(
        np.zeros(shape), np.full(shape, math.inf), found.gains, False, True, "guide", rightmost, note=note
    )


def _dense(rows: tuple[Sparse, ...], width: int) -> ExactMatrix:
    zero = Fraction(0)
    return ExactMatrix(tuple(tuple(row.get(j, zero) for j in range(width)) for row in rows), (len(rows), width))


def _followed(
    window: Window, system: Doubles, norm: Norm, rightmost: float, width: float, weights: Sequence[float] | None
) -> WindowPeaks:
    """Along the adjoint trajectory; a proof where the norm is verified and the enclosure closes."""
    share = np.ones(len(window.inlets)) if weights is None else np.asarray(weights, dtype=float)
    walk = _Walk(system, norm, width, share)
    h = step_of(system)
    most, digits = (MOST_CELLS, 4e9) if norm.guaranteed else (_MOST_GUESSED, 1e2)
    if math.log(digits / width) > norm.rate * h * most:
        note = f"it decays too slowly for its fastest mode: more than {most} cells are needed"
        return _nothing(window, "sparse", rightmost, True, note)
    lower, upper, count = walk.run()
    low, high = lower.copy(), upper.copy()
    for k, row in enumerate(window.through):
        for inlet, value in row.items():
            low[k, inlet] = down(Fraction(float(low[k, inlet])) + abs(value))
            high[k, inlet] = up(Fraction(float(high[k, inlet])) + abs(value))
    middle = (low + high) / 2
    if not norm.guaranteed:
        note = "no verified norm was found, so this is an estimate and proves nothing"
        return WindowPeaks(
            np.zeros_like(low), np.full_like(low, math.inf), middle, False, True, "sparse", rightmost, 0.0, count, note
        )
    return WindowPeaks(low, high, middle, True, True, "sparse", rightmost, norm.rate, count)


class _Walk:
    """All inlets and outlets of one window along one trajectory."""

    def __init__(self, system: Doubles, norm: Norm, width: float, share: Floats) -> None:
        self.system, self.norm, self.width, self.share = system, norm, width, share
        self.columns = system.D.T.tocsr()
        self.inlets, self.outlets = self.columns.shape[0], system.H.shape[0]
        self.h = step_of(system)
        # |d - doubles of d| and the products of the coefficients, in the maximum norm.
        counts = np.diff(self.columns.indptr).max(initial=0)
        one_norm = np.asarray(abs(self.columns).sum(axis=1)).reshape(-1)
        self.products = (int(counts) + 6) * 2 * U * one_norm
        self.depth = max(3, math.ceil(math.log(8 / width, 4)) + 1)
        self.lower = np.zeros((self.inlets, self.outlets))
        self.upper = np.zeros((self.inlets, self.outlets))

    def run(self) -> tuple[Floats, Floats, int]:
        """Lower and upper integrals (outlets, inlets) and the number of cells."""
        batch: list[Cell] = []
        first = 0.0
        count = 0
        for cell in cells(self.system, self.norm):
            count += 1
            batch.append(cell)
            if len(batch) < _BATCH:
                continue
            self._add(batch)
            tail = self._tail(batch[-1])
            first = first or float((self.share @ tail).max(initial=0.0))
            batch = []
            if self._done(tail, first) or count > MOST_CELLS:
                break
        grown = (count + 4) * 2 * U
        return (self.lower * (1 - grown)).T, ((self.upper + tail) * (1 + grown)).T, count

    def _tail(self, cell: Cell) -> Floats:
        """What is left of every integral after a cell, (inlets, outlets)."""
        if not self.norm.rate:
            return np.full((self.inlets, self.outlets), math.inf)
        return self.norm.columns[:, None] * cell.left[None, :] / self.norm.rate * (1 + 8 * U)

    def _done(self, tail: Floats, first: float) -> bool:
        left, found = self.share @ tail, self.share @ self.lower
        enough = np.maximum(found, 1e-9 * max(first, 1e-300))
        return bool(np.all(left <= self.width / 4 * enough))

    def _add(self, batch: list[Cell]) -> None:
        cells_, n = len(batch), self.system.size
        C = np.stack([cell.coefficients for cell in batch], axis=2)  # (degree + 1, n, cells, outlets)
        flat = np.ascontiguousarray(C.transpose(1, 0, 2, 3)).reshape(n, -1)
        values = (self.columns @ flat).reshape(self.inlets, DEGREE + 1, cells_, self.outlets)
        kernels = np.ascontiguousarray(values.transpose(0, 2, 3, 1)).reshape(-1, DEGREE + 1)
        off = np.stack([cell.off for cell in batch])  # (cells, outlets)
        size = np.stack([cell.size for cell in batch])
        spread = self.norm.columns[:, None, None] * off + self.products[:, None, None] * size
        # Pieces that cannot matter: their share of the width, spread over the time in which the window decays.
        fair = self.width / 16 * self.lower * min(1.0, self.norm.rate * self.h)
        small = np.broadcast_to(fair[:, None, :], spread.shape).reshape(-1)
        low, high = absolute_integrals(kernels, self.h, spread.reshape(-1), self.depth, small)
        self.lower += low.reshape(spread.shape).sum(axis=1)
        self.upper += high.reshape(spread.shape).sum(axis=1)

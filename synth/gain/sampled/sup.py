"""The peak gain of a sampled loop as a supremum over the phase: branch and bound with proven cells and tail.

An outlet h (a row over states and held commands) at phase phi of a period is rho(phi) W_piece (x_k, u_{k-1}) plus what
came in since the sample, rho(phi) = h e^{M(phi - start)}. What an inlet can bring about there is

    p(phi) = N(rho(phi)) + I(phi),    N(rho) = sum_m integral_0^T |rho W Phi^m y(s)| ds + |rho g|,
                                      I(phi) = integral_0^phi |h e^{Ms} D| ds,    y(s) = [e^{As} D; 0]

and N is a norm of the row rho. On a cell [a, a + eta] the row differs from the straight line between its end values by
at most eta^2/8 sup|rho''| in every entry, and I grows at most at kappa = sup |h e^{Ms} D|, hence

    p(phi) <= max( N(rho_a) + I_a,  N(rho_b) + I_a + eta kappa ) + eta^2/8 sum_i sup|rho''_i| N(e_i).

Cells whose bound exceeds the best value found are halved. Sums are in doubles with a bound of every rounding error.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import comb, factorial

import numpy as np
from flint import arb, arb_mat
from numpy.typing import NDArray

from synth.base.errors import WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain.lyapunov import rationals
from synth.gain.sampled.loop import Floats, Transition, ball, trajectories

_MOST_CELLS = 4096
_HALVINGS = 26  # of a stretch of time on which a kernel changes its sign
_UNIT = 2.0**-53
_CHUNK = 2_000_000  # numbers worked on at once
# A gain below this part of what its parts could add up to is taken as found when its upper end is.
_NOTHING = 1e-12


@dataclass(frozen=True)
class Inlet:
    """What enters: ``D`` (n) at all times, and at every sample ``gu`` (m) into the command and ``gx`` (n) into x.

    ``gx`` is added at the end of the period in which the sample was taken.
    """

    D: tuple[Fraction, ...]
    gu: tuple[Fraction, ...]
    gx: tuple[Fraction, ...]


@dataclass(frozen=True)
class Outlet:
    """A row over the states and the held commands, looked at over all phases, or at the sampling instant alone."""

    row: tuple[Fraction, ...]
    sampled: bool = False


@dataclass
class _Piece:
    """A part of the period with one command in force: its first phase, its length, W, and fresh samples' columns."""

    start: Fraction
    length: Fraction
    W: arb_mat
    fresh: arb_mat  # size x inlets: what a sample of this period adds


class Supremum:
    """All peak gains of one loop from ``inlets``; ``free`` weighs the initial states and held commands, or is empty.

    The caller works inside ``ctx.workprec``.
    """

    def __init__(self, of: Transition, inlets: Sequence[Inlet], free: Sequence[float]) -> None:
        """Follow everything that enters until it has died out."""
        self.of, self.inlets = of, inlets
        self.n, self.size, self.count = of.n, of.size, len(inlets)
        self.T, self.d = of.loop.period, of.loop.delay
        self.terms, self.left = self._degree()
        self.free = np.asarray(free, dtype=np.float64)
        self.responses = self._responses()
        start, columns = self._start()
        self.stack = trajectories(of, arb_mat(self.size, columns, start))
        self.bernstein = bernstein_matrix(self.terms)
        self._grown: dict[Fraction, arb_mat] = {}
        self.pieces = self._pieces()
        units = arb_mat(self.size, self.size, [arb(int(i == j)) for i in range(self.size) for j in range(self.size)])
        self.units = [self.norms(units, piece)[1] for piece in self.pieces]

    def _degree(self) -> tuple[int, float]:
        """Taylor terms of e^{Ms} D on one period, and a bound of what they leave out, relative to max|D|."""
        rows = [sum((abs(v) for v in row), Fraction(0)) + abs(self.of.alpha) for row in self.of.loop.A.rows]
        size = float(max(rows, default=Fraction(0)) * self.T)
        for terms in range(6, 160):
            left = 2 * size**terms / factorial(terms)
            if terms > 2 * size and left < 2.0**-60:
                return terms, max(left, 2.0**-80)
        raise WidthNotReached("the unit is too fast for its sample period; choose a shorter period.")

    def _responses(self) -> list[list[arb_mat]]:
        """Per inlet the Taylor coefficients of e^{(A + alpha) s} D on [0, T], in fractions of T, as columns."""
        n = self.n
        A = rationals(self.of.loop.A + ExactMatrix.identity(n).scaled(self.of.alpha)) if n else None
        found = []
        for inlet in self.inlets:
            column = rationals(ExactMatrix(tuple((v,) for v in inlet.D), (n, 1)))
            terms = []
            scale = arb(1)
            for j in range(self.terms):
                terms.append(arb_mat(column) * scale)
                column = A * column if n else column
                scale = scale * ball(self.T) / (j + 1)
            found.append(terms)
        return found

    def _start(self) -> tuple[list[arb], int]:
        """Columns at the sample after an input: kernels' coefficients, samples, and unit vectors for free motion."""
        zero = [arb(0)] * (self.size - self.n)
        columns = [[*term.entries(), *zero] for terms in self.responses for term in terms]
        rest = self.of.E(self.T - self.d)
        for inlet in self.inlets:
            fresh = arb_mat(self.size, 1, [arb(0)] * self.n + [ball(v) * self.of.late for v in inlet.gu])
            moved = (rest * fresh).entries()
            direct = [ball(v) * self.of.whole for v in inlet.gx] + zero
            columns.append([a + b for a, b in zip(moved, direct, strict=True)])
        if self.free.size:
            columns += [[arb(int(i == j)) for i in range(self.size)] for j in range(self.size)]
        return [column[i] for i in range(self.size) for column in columns], len(columns)

    def _pieces(self) -> list[_Piece]:
        eye = arb_mat(self.size, self.size, [arb(int(i == j)) for i in range(self.size) for j in range(self.size)])
        none = arb_mat(self.size, self.count, [arb(0)] * (self.size * self.count))
        fresh = [[arb(0)] * self.count for _ in range(self.n)]
        fresh += [[ball(x.gu[i]) * self.of.late for x in self.inlets] for i in range(self.size - self.n)]
        found = [_Piece(Fraction(0), self.d, eye, none)] if self.d else []
        if self.d < self.T:
            late = arb_mat(self.size, self.count, [v for row in fresh for v in row])
            found.append(_Piece(self.d, self.T - self.d, self.of.W, late))
        return found

    def norms(self, rows: arb_mat, piece: _Piece) -> tuple[Floats, Floats]:
        """N(rho) per row and inlet (and, last, the free response), lower and upper ends."""
        height = rows.nrows()
        seen = rows * piece.W
        zeta = self._zeta(seen)
        R, error = _floats(seen)
        low, high = (np.zeros((height, self.count + 1)) for _ in range(2))
        step = max(1, _CHUNK // max(1, self.stack.values.shape[0] * self.stack.values.shape[2]))
        for first in range(0, height, step):
            part = slice(first, first + step)
            self._sums(R[part], error[part], low[part], high[part])
        rest = 1.0 / float((1 - self.of.gamma).lower())
        T, J = _up(self.T), self.terms
        tail = self.stack.tail
        for q in range(self.count):
            after = T * tail[q * J : (q + 1) * J].sum() + tail[self.count * J + q]
            high[:, q] += zeta * (after * rest * (1 + 1e-12))
        if self.free.size:
            high[:, -1] = np.maximum(high[:, -1], zeta * ((tail[-self.size :] * self.free).sum() * (1 + 1e-12)))
        direct, loose = _floats(rows * piece.fresh)
        low[:, : self.count] += np.maximum(np.abs(direct) - loose, 0.0) * (1 - 1e-15)
        high[:, : self.count] += (np.abs(direct) + loose) * (1 + 1e-15)
        return low, high

    def _zeta(self, rows: arb_mat) -> Floats:
        """|row xi| <= zeta |xi|_P: the sum of entries times their reach (simple, and used for rests only)."""
        reach = self.of.reach
        found = [
            _up_ball(sum((abs(rows[i, j]) * reach[j] for j in range(self.size)), arb(0))) for i in range(rows.nrows())
        ]
        return np.array(found, dtype=np.float64)

    def _sums(self, R: Floats, error: Floats, low: Floats, high: Floats) -> None:
        """Add the sums over all periods that are followed to ``low`` and ``high``."""
        Y, J, count = self.stack.values, self.terms, self.count
        c = (R @ Y).swapaxes(0, 1)
        size = np.abs(R).sum(axis=1)[:, None, None]
        # Rounding of rows, trajectories and their product; then the radii of the balls they came from.
        bound = (np.abs(R) @ np.abs(Y)).swapaxes(0, 1) * (self.size + 6) * _UNIT * 1.01
        bound += error.sum(axis=1)[:, None, None] * np.abs(Y).max(axis=1)[None] + size * (self.stack.loose * 1.01)
        more = 1 + (Y.shape[0] + 8) * 4 * _UNIT
        T_low, T_high = float(self.T) * (1 - 4 * _UNIT), float(self.T) * (1 + 4 * _UNIT)
        for q in range(count):
            kernel, loose = c[:, :, q * J : (q + 1) * J], bound[:, :, q * J : (q + 1) * J].sum(axis=2)
            less, most, _ = absolute_integral(kernel, loose * (1 + 1e-12), self.bernstein)
            lost = size[:, 0, 0] * self._lost(q)
            low[:, q] += np.maximum(less.sum(axis=1) / more * T_low - lost, 0.0)
            high[:, q] += most.sum(axis=1) * more * T_high + lost
            sampled, loose = np.abs(c[:, :, count * J + q]), bound[:, :, count * J + q]
            low[:, q] += np.maximum(sampled - loose, 0.0).sum(axis=1) / more
            high[:, q] += (sampled + loose).sum(axis=1) * more
        if self.free.size:
            values, loose = np.abs(c[:, :, -self.size :]), bound[:, :, -self.size :]
            weigh = self.free[None, None]
            low[:, -1] = (np.maximum(values - loose, 0.0) * weigh).sum(axis=2).max(axis=1, initial=0.0) / (1 + 1e-13)
            high[:, -1] = ((values + loose) * weigh).sum(axis=2).max(axis=1, initial=0.0) * (1 + 1e-13)

    def _lost(self, q: int) -> float:
        """What the Taylor terms leave out of the kernel of inlet q, over all periods, per |row|_1.

        The remainder is a start of at most left * |D| in every state; in the norm P no start grows.
        """
        largest = max((abs(float(v)) for v in self.inlets[q].D), default=0.0)
        spread = sum((v for v in self.of.axis), arb(0)) * max(self.of.reach, default=arb(0))
        return self.left * largest * _up(self.T) * _up_ball(spread / (1 - self.of.gamma)) * 1.01

    # ------------------------------------------------------------------ one outlet over all phases

    def outlet(self, outlet: Outlet, width: float, unseen: NDArray[np.bool_]) -> tuple[Floats, Floats]:
        """Enclosures of sup over the phase, per inlet (and, last, of the free response); zero where ``unseen``.

        Raises WidthNotReached if the cells do not close.
        """
        h = arb_mat(1, self.size, [ball(v) for v in outlet.row])
        if outlet.sampled:
            low, high = self._at_sample(h)
            low[unseen] = high[unseen] = 0.0
            return low, high
        cells = [(k, Fraction(0), piece.length) for k, piece in enumerate(self.pieces)]
        known: dict[tuple[int, Fraction], tuple[Floats, Floats]] = {}
        worked: dict[tuple[int, Fraction, Fraction], tuple[Floats, Floats, Floats, Floats]] = {}
        while True:
            self._evaluate(h, cells, known)
            lower, bounds = self._bounds(h, cells, known, worked)
            lower[unseen], bounds[:, unseen] = 0.0, 0.0
            upper = bounds.max(axis=0)
            open_inlets = upper - lower > width * upper * (1 - 1e-9)
            open_inlets &= upper > _NOTHING * self._largest(h)
            if not open_inlets.any():
                return lower, upper
            limit = lower * (1 + width * 0.5)
            split = ((bounds > limit) & open_inlets).any(axis=1)
            if len(cells) + int(split.sum()) > _MOST_CELLS or not split.any():
                raise WidthNotReached(
                    f"a peak gain of the sampled loop could not be enclosed to a relative width of {width:g}: it lies "
                    f"in [{lower.max():g}, {upper.max():g}]; ask for a larger width."
                )
            cells = [new for cell, cut in zip(cells, split, strict=True) for new in (_halved(cell) if cut else [cell])]

    def _at_sample(self, h: arb_mat) -> tuple[Floats, Floats]:
        """At the sampling instant itself nothing has come in since, and no fresh command is in force."""
        eye = arb_mat(self.size, self.size, [arb(int(i == j)) for i in range(self.size) for j in range(self.size)])
        none = arb_mat(self.size, self.count, [arb(0)] * (self.size * self.count))
        low, high = self.norms(h, _Piece(Fraction(0), Fraction(0), eye, none))
        return low[0], high[0]

    def _largest(self, h: arb_mat) -> Floats:
        sizes = np.array([_up_ball(abs(v)) for v in h.entries()])
        return np.asarray(np.max([sizes @ units for units in self.units], axis=0), dtype=np.float64)

    def _evaluate(
        self,
        h: arb_mat,
        cells: Sequence[tuple[int, Fraction, Fraction]],
        known: dict[tuple[int, Fraction], tuple[Floats, Floats]],
    ) -> None:
        """N at every end of a cell that was not looked at yet."""
        for k, piece in enumerate(self.pieces):
            ends = {t for j, start, eta in cells if j == k for t in (start, start + eta)}
            new = sorted(t for t in ends if (k, t) not in known)
            if not new:
                continue
            entries = [v for t in new for v in (h * self.of.E(t)).entries()]
            low, high = self.norms(arb_mat(len(new), self.size, entries), piece)
            for i, t in enumerate(new):
                known[k, t] = low[i], high[i]

    def _bounds(
        self,
        h: arb_mat,
        cells: Sequence[tuple[int, Fraction, Fraction]],
        known: dict[tuple[int, Fraction], tuple[Floats, Floats]],
        worked: dict[tuple[int, Fraction, Fraction], tuple[Floats, Floats, Floats, Floats]],
    ) -> tuple[Floats, Floats]:
        """The best value seen, per inlet, and the bound of every cell (cells x inlets)."""
        M = self.of.M
        second = h * M * M
        third = second * M
        inside_low, inside_high = np.zeros(self.count + 1), np.zeros(self.count + 1)
        lower, bounds = np.zeros(self.count + 1), []
        for k, start, eta in cells:
            piece = self.pieces[k]
            if (k, start, eta) not in worked:
                bend = self._bend(second, third, start, eta) @ self.units[k]
                worked[k, start, eta] = (*self._inside(h, piece.start + start, eta), bend)
            less, most, kappa, bend = worked[k, start, eta]
            (low_a, high_a), (low_b, high_b) = known[k, start], known[k, start + eta]
            first = high_a + inside_high
            last = high_b + inside_high + _up(eta) * kappa
            bounds.append((np.maximum(first, last) + bend) * (1 + 1e-14))
            lower = np.maximum(lower, (low_a + inside_low) * (1 - 1e-14))
            inside_low, inside_high = (inside_low + less) * (1 - 1e-15), (inside_high + most) * (1 + 1e-15)
            lower = np.maximum(lower, (low_b + inside_low) * (1 - 1e-14))
        return lower, np.array(bounds)

    def _bend(self, second: arb_mat, third: arb_mat, start: Fraction, eta: Fraction) -> Floats:
        """Bound of eta^2/8 sup|rho''_i| on a cell: the value at its start and what the next derivative can add."""
        here = second * self.of.E(start)
        if eta not in self._grown:
            size = arb_mat(self.size, self.size, [abs(v) for v in self.of.M.entries()])
            self._grown[eta] = (size * ball(eta)).exp()
        grown = arb_mat(1, self.size, [abs(v) for v in third.entries()]) * self._grown[eta]
        grown = grown * arb_mat(self.size, self.size, [abs(v) for v in self.of.E(start).entries()])
        factor = ball(eta * eta / 8)
        return np.array(
            [_up_ball((abs(a) + ball(eta) * b) * factor) for a, b in zip(here.entries(), grown.entries(), strict=True)]
        )

    def _inside(self, h: arb_mat, phase: Fraction, eta: Fraction) -> tuple[Floats, Floats, Floats]:
        """Lower and upper bound of integral |h e^{Ms} D| over [phase, phase + eta], and sup of the kernel there."""
        row = h * self.of.E(phase)
        own = arb_mat(1, self.n, [row[0, j] for j in range(self.n)])
        ratio = ball(eta / self.T)
        less, most, kappa = (np.zeros(self.count + 1) for _ in range(3))
        if not self.n:
            return less, most, kappa
        size = _up_ball(sum((abs(v) for v in own.entries()), arb(0)))
        for q, terms in enumerate(self.responses):
            if not any(self.inlets[q].D):
                continue
            values = [(own * term)[0, 0] * ratio**j for j, term in enumerate(terms)]
            kernel = np.array([[float(v.mid()) for v in values]])
            loose = float(sum((v.rad() for v in values), arb(0)).upper()) + np.abs(kernel).sum() * 4 * _UNIT
            largest = max((abs(float(v)) for v in self.inlets[q].D), default=0.0)
            loose = np.array([loose + size * self.left * largest * 1.01])
            a, b, sup = absolute_integral(kernel, loose, self.bernstein)
            less[q], most[q] = a[0] * _down(eta), b[0] * _up(eta)
            kappa[q] = sup[0]
        return less, most, kappa


def _halved(cell: tuple[int, Fraction, Fraction]) -> list[tuple[int, Fraction, Fraction]]:
    k, start, eta = cell
    return [(k, start, eta / 2), (k, start + eta / 2, eta / 2)]


def bernstein_matrix(terms: int) -> Floats:
    """Power coefficients to Bernstein coefficients on [0, 1] (terms x terms)."""
    top = terms - 1
    return np.array(
        [[comb(i, j) / comb(top, j) if j <= i else 0.0 for i in range(terms)] for j in range(terms)], dtype=np.float64
    )


def absolute_integral(c: Floats, loose: Floats, bernstein: Floats) -> tuple[Floats, Floats, Floats]:
    """Bounds of the integral over 0..1 of |f|, and of sup |f|, where |f - sum c_j s^j| <= ``loose``.

    ``c`` (..., terms), ``loose`` (...). Where the Bernstein coefficients have one sign their mean is the integral;
    elsewhere the interval is halved. All rounding is bounded by a multiple of sum |c_j|.
    """
    shape = loose.shape
    terms = c.shape[-1]
    b = (c @ bernstein).reshape(-1, terms)
    error = loose.reshape(-1) + np.abs(c).sum(axis=-1).reshape(-1) * ((_HALVINGS + 4) * (terms + 4) * _UNIT)
    sup = np.abs(b).max(axis=1) + error
    low, high = np.zeros(len(b)), np.zeros(len(b))
    which = np.arange(len(b))
    part = 1.0
    for _ in range(_HALVINGS):
        certain = (b.min(axis=1) >= 0) | (b.max(axis=1) <= 0)
        area = np.abs(b[certain].mean(axis=1)) * part
        np.add.at(low, which[certain], area)
        np.add.at(high, which[certain], area)
        b, which = b[~certain], which[~certain]
        if not len(b):
            break
        left, right = _de_casteljau(b)
        b, which, part = np.concatenate([left, right]), np.concatenate([which, which]), part / 2
    else:
        np.add.at(high, which, np.abs(b).max(axis=1) * part)
    low = np.maximum(low * (1 - 1e-14) - error, 0.0)
    return low.reshape(shape), (high * (1 + 1e-14) + error).reshape(shape), sup.reshape(shape)


def _de_casteljau(b: Floats) -> tuple[Floats, Floats]:
    """Bernstein coefficients on the left and the right half."""
    left, right = np.empty_like(b), np.empty_like(b)
    now = b
    for j in range(b.shape[1]):
        left[:, j], right[:, b.shape[1] - 1 - j] = now[:, 0], now[:, -1]
        now = (now[:, :-1] + now[:, 1:]) / 2
    return left, right


def _floats(matrix: arb_mat) -> tuple[Floats, Floats]:
    """Midpoints as doubles, and the radii of the balls (rounding to doubles is accounted for where they are used)."""
    entries = matrix.entries()
    shape = (matrix.nrows(), matrix.ncols())
    mids = np.array([float(v.mid()) for v in entries], dtype=np.float64).reshape(shape)
    radii = np.array([float(v.rad()) * 1.01 for v in entries], dtype=np.float64).reshape(shape)
    return mids, radii + np.abs(mids) * 2 * _UNIT


def _up(value: Fraction) -> float:
    return float(value) * (1 + 4 * _UNIT)


def _down(value: Fraction) -> float:
    return float(value) * (1 - 4 * _UNIT)


def _up_ball(value: arb) -> float:
    return float(value.upper()) * (1 + 4 * _UNIT)

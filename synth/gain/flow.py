"""The trajectory e^{At} x of one closed unit in ball arithmetic, cell by cell, and the kernel H e^{At} x on each cell.

Time is counted in ticks (dyadic fractions of one base step) and a cell of level l spans 2^l ticks from a multiple of
its own length. On a cell the kernel is written in Bernstein form, whose coefficients enclose it:

    h(t0 + r u) = sum_i b_i B_{i,J}(u) +- rho B_{J,J}(u),   rho = zeta r^J/J! |A^J x(t0)|_P     (0 <= u <= 1)

because |h^(J)(t)| <= zeta |A^J x(t0)|_P on the cell (theory: section 10). The remainder touches the last coefficient
only, so a kernel that starts at an exact zero still has a certain sign. The error of a state is carried as one number
in the Lyapunov norm, which never grows along the trajectory, so that boxes do not wrap around it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from math import comb

import numpy as np
from flint import arb, arb_mat, fmpq, fmpq_mat

from synth.gain.lyapunov import Decay

# Degree of the Taylor polynomials: high enough for a cell to span a third of an oscillation, low enough to be cheap.
DEGREE = 14
# Ticks per base step, as a power of two: the finest cell is 2^-TICK_BITS base steps long.
TICK_BITS = 48


def _above(value: arb) -> arb:
    """An exact ball at or above every number in ``value``."""
    return value.upper()


@dataclass
class State:
    """An enclosure of x(t): |x(t) - mid|_P <= error, with the norms the cells need worked out once."""

    mid: arb_mat
    error: arb
    norm: arb
    curve: arb  # bound of |A^J mid / J!|_P


class Flow:
    """Everything about one unit that does not depend on the column followed: steps, norms, Bernstein matrices.

    ``A`` n x n, ``H`` outlets x n (flint rationals), ``decay`` the verified norm. All members are valid at the working
    precision ``bits``; the caller runs inside ``ctx.workprec(flow.bits)``.
    """

    def __init__(self, A: fmpq_mat, H: fmpq_mat, decay: Decay, bits: int) -> None:
        """Work out everything at ``bits`` bits."""
        self.bits = bits
        self.decay = decay
        self.size = A.nrows()
        self.outlets = H.nrows()
        rho = max((abs(m) for m in decay.modes.tolist()), default=1.0) or 1.0
        self.exponent = math.floor(
            math.log2(2.0 / rho)
        )  # base step 2^exponent s, about two radians of the fastest mode
        slowest = min((abs(m.real) for m in decay.modes.tolist()), default=1.0) or rho
        self.top = TICK_BITS + max(2, math.ceil(math.log2(8.0 * rho / slowest)))
        self.A = arb_mat(A)
        self.P = arb_mat(decay.P)
        self.a = arb(decay.a)
        self._axis = [_above(self.P[i, i].sqrt()) for i in range(self.size)]
        inverse = decay.P.inv()
        HA, HinvA = H * A, H * A.inv()
        self.zeta = self._readings(H, inverse)
        self.zeta_slope = self._readings(HA, inverse)
        self.zeta_integral = self._readings(HinvA, inverse)
        self.antiderivative = [
            arb_mat(1, self.size, [HinvA[k, j] for j in range(self.size)]) for k in range(self.outlets)
        ]
        self._taylor: list[arb_mat] = []
        self._curve = self._series(A, H)
        self._bernstein: dict[tuple[int, int], arb_mat] = {}
        self._to_bernstein: dict[int, arb_mat] = {}
        self._steps: dict[int, arb_mat] = {}

    def _readings(self, rows: fmpq_mat, inverse: fmpq_mat) -> list[arb]:
        squares = rows * inverse * rows.transpose()
        return [_above(arb(squares[k, k]).sqrt()) for k in range(rows.nrows())]

    def _series(self, A: fmpq_mat, H: fmpq_mat) -> arb_mat:
        """Fill the Taylor rows H_k A^j / j! and return A^J / J!."""
        power = arb_mat(
            fmpq_mat(self.size, self.size, [int(i == j) for i in range(self.size) for j in range(self.size)])
        )
        rows: list[list[arb]] = [[] for _ in range(self.outlets)]
        ball_H = arb_mat(H)
        for j in range(DEGREE):
            read = ball_H * power
            for k in range(self.outlets):
                rows[k].extend(read[k, i] for i in range(self.size))
            power = self.A * power * (arb(1) / (j + 1))
        self._taylor = [arb_mat(DEGREE, self.size, entries) for entries in rows]
        return power

    def length(self, level: int) -> arb:
        """Length in seconds of a cell of ``level`` (exact)."""
        return arb(2) ** (self.exponent + level - TICK_BITS)

    def seconds(self, tick: int) -> float:
        """Time of a tick in seconds, for messages and guides."""
        return math.ldexp(tick, self.exponent - TICK_BITS)

    def cells_left(self, now: arb, goal: float, level: int) -> float:
        """Roughly how many cells of ``level`` it takes for a bound to fall from ``now`` to ``goal`` (a guide only)."""
        slowest = min(abs(m.real) for m in self.decay.modes.tolist()) or 1e-300
        ratio = float(now.upper()) / max(goal, 1e-300)
        return math.log(max(ratio, 1.0)) / slowest / float(self.length(level))

    def step(self, level: int) -> arb_mat:
        """e^{A r} for the cell length r of ``level``."""
        if level not in self._steps:
            self._steps[level] = (self.A * self.length(level)).exp()
        return self._steps[level]

    def to_bernstein(self, level: int) -> arb_mat:
        """(J+1) x J matrix from Taylor coefficients in seconds to Bernstein coefficients on a cell of ``level``."""
        if level not in self._to_bernstein:
            r = self.length(level)
            powers = [r**j for j in range(DEGREE)]
            entries = [
                powers[j] * fmpq(comb(i, j), comb(DEGREE, j)) if j <= i else arb(0)
                for i in range(DEGREE + 1)
                for j in range(DEGREE)
            ]
            self._to_bernstein[level] = arb_mat(DEGREE + 1, DEGREE, entries)
        return self._to_bernstein[level]

    def coefficients(self, outlet: int, level: int) -> arb_mat:
        """(J+1) x n matrix that takes x(t0) to the Bernstein coefficients of an outlet on a cell of ``level``."""
        key = (outlet, level)
        if key not in self._bernstein:
            self._bernstein[key] = self.to_bernstein(level) * self._taylor[outlet]
        return self._bernstein[key]

    def taylor(self, outlet: int, mid: arb_mat) -> arb_mat:
        """J x 1 Taylor coefficients (in seconds) of outlet ``outlet`` at a state."""
        return self._taylor[outlet] * mid

    def norm(self, x: arb_mat) -> arb:
        """A bound of |x|_P for a column of balls."""
        square = (x.transpose() * (self.P * x))[0, 0]
        return _above(_above(square).sqrt()) if square.upper() > 0 else arb(0)

    def state(self, x: arb_mat, error: arb, keep: bool = False) -> State:
        """A state from a column of balls; unless ``keep``, its radii move into the error so that ``mid`` is exact."""
        mid = x
        if not keep:
            mid = x.mid()
            for value, axis in zip(x.entries(), self._axis, strict=True):
                radius = value.rad()
                if radius != 0:
                    error = _above(error + radius * axis)
        return State(mid, error, self.norm(mid), self.norm(self._curve * mid))

    def remainder(self, outlet: int, state: State, level: int) -> arb:
        """rho of the cell that starts at ``state``: what the Bernstein coefficients leave out."""
        return _above(self.zeta[outlet] * state.curve * self.length(level) ** DEGREE)


@dataclass
class Track:
    """The trajectory from one column of D; states are kept, so that every outlet walks over the same ones.

    ``exact`` holds A^j D / j! for j < max(J, n) as rationals: the cells that start at t = 0 use them, because only they
    know exact zeros.
    """

    flow: Flow
    column: fmpq_mat
    exact: list[fmpq_mat] = field(default_factory=list)
    states: dict[int, State] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Put the exact start in place."""
        self.states[0] = self.flow.state(arb_mat(self.column), arb(0), keep=True)

    def advance(self, tick: int, level: int) -> State:
        """The state one cell of ``level`` after ``tick``, which must have been visited."""
        target = tick + (1 << level)
        if target not in self.states:
            before = self.states[tick]
            self.states[target] = self.flow.state(self.flow.step(level) * before.mid, before.error)
        return self.states[target]

    def taylor(self, outlet: int, tick: int, H: fmpq_mat) -> arb_mat:
        """J x 1 Taylor coefficients of an outlet at a tick; at t = 0 from exact numbers."""
        if tick:
            return self.flow.taylor(outlet, self.states[tick].mid)
        return arb_mat(DEGREE, 1, [_read(H, outlet, term) for term in self.exact[:DEGREE]])

    def bernstein(self, outlet: int, tick: int, level: int, H: fmpq_mat) -> list[arb]:
        """The J+1 Bernstein coefficients of an outlet on the cell of ``level`` that starts at ``tick``."""
        if tick:
            product = self.flow.coefficients(outlet, level) * self.states[tick].mid
        else:
            product = self.flow.to_bernstein(level) * self.taylor(outlet, 0, H)
        return list(product.entries())


def _read(H: fmpq_mat, outlet: int, column: fmpq_mat) -> arb:
    total = fmpq(0)
    for j in range(column.nrows()):
        total += H[outlet, j] * column[j, 0]
    return arb(total)


def exact_terms(A: fmpq_mat, column: fmpq_mat) -> list[fmpq_mat]:
    """A^j D / j! for j < max(J, n), exactly."""
    terms = [column]
    for j in range(1, max(DEGREE, A.nrows())):
        terms.append(A * terms[-1] * fmpq(1, j))
    return terms


def vanishes(H: fmpq_mat, outlet: int, terms: list[fmpq_mat], size: int) -> bool:
    """Whether H e^{At} D is identically zero: H A^j D = 0 for every j < n, exactly (Cayley and Hamilton)."""
    return all(sum((H[outlet, i] * term[i, 0] for i in range(size)), fmpq(0)) == 0 for term in terms[:size])


def starting_bits(decay: Decay, width: float) -> int:
    """Working precision: the width, and room for the fast modes raised to the degree beside the slow ones."""
    sizes = np.abs(decay.modes)
    slow = np.abs(decay.modes.real)
    ratio = float(sizes.max() / max(slow.min(), 1e-300)) if len(sizes) else 1.0
    return 64 + math.ceil(2 * max(0.0, -math.log2(width))) + DEGREE * max(0, math.ceil(math.log2(8 * ratio)) - 3)


def outward(lower: arb, upper: arb) -> tuple[float, float]:
    """Doubles at or below the lower and at or above the upper end of two non-negative balls."""
    low, high = lower.lower(), upper.upper()
    below, above = max(0.0, float(low)), float(high)
    while below > 0 and not arb(below) <= low:
        below = max(0.0, math.nextafter(below, 0.0))
    while not arb(above) >= high:
        above = math.nextafter(above, math.inf)
    return below, above

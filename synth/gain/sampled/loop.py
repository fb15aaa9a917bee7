"""One unit under a sampled controller: exact matrices, the transition over one period, and its trajectories in balls.

At every k T the controller samples and computes u_k; the actuators hold it from k T + d to (k+1) T + d. Between these
instants the state (x, u) obeys (x, u)' = M (x, u) with M = [A, B; 0, 0], so with E(t) = e^{Mt} (theory: section 6)

    from k T to k T + d          (x, u) = E(phi) (x_k, u_{k-1})
    from k T + d to (k+1) T      (x, u) = E(phi - d) W (x_k, u_{k-1}),   W = [E(d) rows of x; R 0],   u_k = R x_k
    at (k+1) T                   Phi = E(T - d) W + [Z, 0; 0, 0]

Z moves states that the firmware itself stores, once per period. With a rate alpha, M + alpha I weighs every signal by
e^{alpha t}. Trajectories are carried as midpoints with one error in a norm that Phi contracts, so boxes do not wrap.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np
import scipy.linalg
from flint import arb, arb_mat, fmpq
from numpy.typing import NDArray

from synth.base.errors import InputError, UnstableLoop, WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain.lyapunov import positive_definite, rationals

Floats = NDArray[np.float64]

BITS = 256
MOST_PERIODS = 200_000
# Trajectories are followed until their norm has fallen by this part (times 1 - gamma): the tail is below it.
_REST = 1e-14


@dataclass(frozen=True)
class SampledLoop:
    """A unit with its sampled local loop; all matrices exact, in declared units, time in seconds.

    ``A`` n x n, ``B`` n x m, ``R`` m x n (u_k = R x(kT)), ``period`` T > 0, ``delay`` the computation delay d with
    0 <= d <= T, ``Z`` n x n or None: added to the states at the end of each period, x += Z x(kT), for states that are
    stored in the firmware (their rows of A and B are zero).
    """

    A: ExactMatrix
    B: ExactMatrix
    R: ExactMatrix
    period: Fraction
    delay: Fraction = Fraction(0)
    Z: ExactMatrix | None = None

    def __post_init__(self) -> None:
        """Refuse shapes and times that do not fit."""
        n, m = self.A.shape[0], self.B.shape[1]
        if self.A.shape != (n, n) or self.B.shape[0] != n or self.R.shape != (m, n):
            raise InputError(
                f"A, B and R must be n x n, n x m and m x n, not {self.A.shape}, {self.B.shape} and {self.R.shape}."
            )
        if self.Z is not None and self.Z.shape != (n, n):
            raise InputError(f"Z must be {n} x {n}, not {self.Z.shape}.")
        if not self.period > 0:
            raise InputError(f"the sample period must be above zero, not {float(self.period):g} s.")
        if not 0 <= self.delay <= self.period:
            raise InputError(
                f"the computation delay must lie between 0 and the period of {float(self.period):g} s, not "
                f"{float(self.delay):g} s; a longer one belongs into the sensors or actuators of the model."
            )

    @property
    def states(self) -> int:
        """Number of states of the unit."""
        return self.A.shape[0]

    @property
    def size(self) -> int:
        """Number of states and held commands together."""
        return self.A.shape[0] + self.B.shape[1]

    @cached_property
    def generator(self) -> ExactMatrix:
        """M = [A, B; 0, 0]."""
        n, m = self.B.shape
        rows = [tuple(a) + tuple(b) for a, b in zip(self.A.rows, self.B.rows, strict=True)]
        return ExactMatrix((*rows, *((Fraction(0),) * (n + m),) * m), (n + m, n + m))

    def transition(self) -> Floats:
        """Phi in doubles: (x_k, u_{k-1}) to (x_{k+1}, u_k). A guide, never a claim."""
        n, M = self.states, self.generator.floats()
        T, d = float(self.period), float(self.delay)
        W = scipy.linalg.expm(M * d)
        W[n:] = 0.0
        W[n:, :n] = self.R.floats()
        found = scipy.linalg.expm(M * (T - d)) @ W
        if self.Z is not None:
            found[:n, :n] += self.Z.floats()
        return np.asarray(found, dtype=np.float64)


def ball(value: Fraction) -> arb:
    """A ball that holds the rational."""
    return arb(fmpq(value.numerator, value.denominator))


class Transition:
    """E, W and Phi of a loop, weighted with the rate ``alpha``, in balls of BITS bits, and a norm that Phi contracts.

    ``rest`` is a verified bound 1 - gamma > 0 with |Phi xi|_P <= gamma |xi|_P. Raises UnstableLoop if Phi has a mode
    on or outside the unit circle. The caller works inside ``ctx.workprec(BITS)``.
    """

    def __init__(self, loop: SampledLoop, alpha: Fraction = Fraction(0)) -> None:
        """Work out everything that does not depend on what enters or is looked at."""
        self.loop, self.alpha = loop, alpha
        self.n, self.size = loop.states, loop.size
        shifted = loop.generator + ExactMatrix.identity(self.size).scaled(alpha)
        self.exact = rationals(shifted)
        self.M = arb_mat(self.exact)
        self._E: dict[Fraction, arb_mat] = {}
        self.late, self.whole = (ball(alpha * t).exp() for t in (loop.delay, loop.period))
        held = self.E(loop.delay)
        rows = [[held[i, j] for j in range(self.size)] for i in range(self.n)]
        rows += [[ball(v) * self.late for v in row] + [arb(0)] * (self.size - self.n) for row in loop.R.rows]
        self.W = arb_mat(self.size, self.size, [v for row in rows for v in row])
        self.Phi = self.E(loop.period - loop.delay) * self.W
        if loop.Z is not None:
            for i in range(self.n):
                for j in range(self.n):
                    if loop.Z[i, j]:
                        self.Phi[i, j] = self.Phi[i, j] + ball(loop.Z[i, j]) * self.whole
        self.P, self.gamma = self._contraction()
        inverse = self.P.inv()
        self.axis = [self.P[i, i].sqrt().upper() for i in range(self.size)]
        self.reach = [inverse[i, i].sqrt().upper() for i in range(self.size)]  # |xi_i| <= reach_i |xi|_P

    def E(self, t: Fraction) -> arb_mat:
        """e^{(M + alpha I) t}."""
        if t not in self._E:
            self._E[t] = (self.M * ball(t)).exp()
        return self._E[t]

    def _contraction(self) -> tuple[arb_mat, arb]:
        floats = self.loop.transition() * math.exp(float(self.alpha * self.loop.period))
        if not np.all(np.isfinite(floats)):
            raise InputError(
                "the unit grows beyond the range of doubles within one period; choose a shorter period or other units."
            )
        modes = np.linalg.eigvals(floats)
        radius = float(np.abs(modes).max(initial=0.0))
        if radius >= 1:
            worst = modes[int(np.argmax(np.abs(modes)))]
            rate = f" with the rate {float(self.alpha):g} 1/s added" if self.alpha else ""
            raise UnstableLoop(
                f"the sampled loop{rate} is not stable: over one period of {float(self.loop.period):g} s a mode is "
                f"multiplied by {worst:.6g} (absolute value {radius:.6g}); choose a shorter period, a shorter "
                "computation delay or lower gains."
            )
        _, (scale, _) = scipy.linalg.matrix_balance(floats, permute=False, separate=True)
        balanced = floats / scale[:, None] * scale
        for share in (0.1, 0.3, 0.6, 0.9, 0.99):
            gamma = max(radius + share * (1 - radius), 0.01)
            try:
                P = scipy.linalg.solve_discrete_lyapunov(balanced.T / gamma, np.eye(self.size))
            except (np.linalg.LinAlgError, ValueError):
                continue
            P = (P + P.T) / 2 / scale[:, None] / scale
            if not np.all(np.isfinite(P)):
                continue
            exact = arb_mat(self.size, self.size, [arb(float(v)) for v in P.ravel()])
            falling = exact * (arb(gamma) * arb(gamma)) - self.Phi.transpose() * exact * self.Phi
            if positive_definite(exact) and positive_definite(falling):
                return exact, arb(gamma)
        raise UnstableLoop("the sampled loop is stable by too narrow a margin for its decay to be verified.")

    def norm(self, column: arb_mat) -> arb:
        """An upper bound of |xi|_P of one column."""
        square = (column.transpose() * (self.P * column))[0, 0]
        return square.upper().sqrt().upper() if square.upper() > 0 else arb(0)


@dataclass(frozen=True)
class Stack:
    """Phi^m Y for m = 0 .. periods - 1 as doubles, and what comes after.

    ``values`` (periods, size, columns): every entry off by at most 2^-52 of itself plus ``loose``;
    ``tail`` per column a bound of |Phi^periods y|_P.
    """

    values: Floats
    loose: float
    tail: Floats


def trajectories(of: Transition, start: arb_mat) -> Stack:
    """Follow the columns of ``start`` (size x columns) period by period.

    Raises WidthNotReached if they do not die out within MOST_PERIODS periods.
    """
    size, columns = start.nrows(), start.ncols()
    spread = sum((v for v in of.axis), arb(0))
    now, error = start.mid(), _roundness(start) * spread
    worst = error
    first = max((of.norm(_column(now, j)) for j in range(columns)), default=arb(0))
    rest = float((1 - of.gamma).lower()) * _REST
    kept: list[Floats] = []
    for _ in range(MOST_PERIODS):
        largest = max((of.norm(_column(now, j)) for j in range(columns)), default=arb(0))
        if largest <= first * rest:
            break
        kept.append(_doubles(now))
        following = of.Phi * now
        now, error = following.mid(), (error * of.gamma + _roundness(following) * spread).upper()
        worst = max(worst, error)
    else:
        raise WidthNotReached(
            f"the sampled loop decays too slowly: after {MOST_PERIODS} periods it has not died out; choose a longer "
            "period or gains with more damping."
        )
    values = np.array(kept, dtype=np.float64).reshape(len(kept), size, columns)
    most = (worst * max(of.reach, default=arb(0))).upper()
    tail = np.array([_above((of.norm(_column(now, j)) + error).upper()) for j in range(columns)], dtype=np.float64)
    return Stack(values, _above(most), tail)


def _column(matrix: arb_mat, j: int) -> arb_mat:
    return arb_mat(matrix.nrows(), 1, [matrix[i, j] for i in range(matrix.nrows())])


def _roundness(matrix: arb_mat) -> arb:
    """The largest radius in a matrix of balls."""
    return max((v.rad() for v in matrix.entries()), default=arb(0)).upper()


def _doubles(matrix: arb_mat) -> Floats:
    return np.array([float(v) for v in matrix.entries()], dtype=np.float64).reshape(matrix.nrows(), matrix.ncols())


def _above(value: arb) -> float:
    return math.nextafter(float(value), math.inf)

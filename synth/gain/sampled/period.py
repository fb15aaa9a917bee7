"""How long a sample period may be: the loop's own limit, and loops whose periods vary in a cycle.

Both look at the modes of the transition over one period (or one cycle of periods) in doubles: they are measures beside
a proof, never a claim. A certificate of the firmware route verifies its own period exactly.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise

import numpy as np

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import Number, exact
from synth.gain.peak import Matrix, as_matrix
from synth.gain.sampled.loop import Floats, SampledLoop


@dataclass(frozen=True)
class LongestPeriod:
    """The first period, going up from ``shortest``, at which the sampled loop loses its stability, in s.

    Stable at ``lower`` and at every period looked at below it, not stable at ``upper``; ``upper`` is infinite (and
    ``lower`` the longest looked at) if it was never lost. Longer periods may be stable again; they are not searched.
    """

    lower: float
    upper: float


def longest_period(
    A: Matrix,
    B: Matrix,
    R: Matrix,
    delay_share: float = 0.0,
    longest: float | None = None,
    steps: int = 2000,
) -> LongestPeriod:
    """The sampling limit of x' = A x + B u with u = R x sampled and held; ``delay_share`` is computation delay/period.

    ``A`` (n, n) in 1/s, ``B`` (n, m), ``R`` (m, n); ``longest`` the longest period looked at in s (default: 20 over the
    slowest rate of A + B R); the range is scanned in ``steps`` parts and the crossing found by halving, to a relative
    1e-13. Raises UnstableLoop if the loop is not stable at the shortest period looked at, InputError on wrong values.
    """
    a, b, r = as_matrix(A, "A"), as_matrix(B, "B"), as_matrix(R, "R")
    if not 0 <= delay_share <= 1 or steps < 2:
        raise InputError("delay_share must lie between 0 and 1 and steps must be at least 2.")
    if longest is None:
        rates = np.linalg.eigvals(a.floats() + b.floats() @ r.floats()).real
        longest = 20.0 / max(float(np.abs(rates).min(initial=np.inf)), 1e-12) if len(rates) else 1.0
    if not (np.isfinite(longest) and longest > 0):
        raise InputError(f"longest must be a period above zero in s, not {longest!r}.")

    def stable(period: float) -> bool:
        T = Fraction(period)
        return _radius(SampledLoop(a, b, r, T, T * Fraction(delay_share)).transition()) < 1

    grid = np.linspace(0.0, longest, steps + 1)[1:]
    if not stable(float(grid[0])):
        raise UnstableLoop(f"the loop is not stable at a period of {grid[0]:g} s already; look at shorter ones.")
    for low, high in pairwise(grid):
        if not stable(float(high)):
            return LongestPeriod(*_crossing(stable, float(low), float(high)))
    return LongestPeriod(longest, float("inf"))


def _crossing(stable: Callable[[float], bool], low: float, high: float) -> tuple[float, float]:
    while high - low > 1e-13 * high:
        middle = (low + high) / 2
        low, high = (middle, high) if stable(middle) else (low, middle)
    return low, high


def _radius(transition: Floats) -> float:
    if not np.all(np.isfinite(transition)):
        return float("inf")
    return float(np.abs(np.linalg.eigvals(transition)).max(initial=0.0))


def cycle_radius(A: Matrix, B: Matrix, R: Matrix, periods: Sequence[Number]) -> float:
    """Largest absolute mode of one cycle of the sampled loop whose periods repeat ``periods`` (s), without delay.

    Below one for a cycle that is stable. Every single period may be stable and the cycle not: that is why a varying
    period is never covered by a proof about a fixed one. InputError on shapes and periods.
    """
    a, b, r = as_matrix(A, "A"), as_matrix(B, "B"), as_matrix(R, "R")
    if not periods:
        raise InputError("at least one period is needed.")
    n = a.shape[0]
    product = np.eye(n)
    for period in periods:
        product = SampledLoop(a, b, r, exact(period)).transition()[:n, :n] @ product
    return _radius(product)

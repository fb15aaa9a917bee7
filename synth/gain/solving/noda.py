"""Small classes of any row type: Noda's iteration on the matrix of active slopes, dense, then shifted power steps.

That Noda's iteration (Noda, Numer. Math. 17, 1971) carries over to rows that are not sums, with the slopes at the point
as matrix (for max rows a policy), is ours; it need not end, and where it stalls shifted power steps take over.
"""

from __future__ import annotations

import numpy as np

from synth.gain.operator import Floats, GainOperator
from synth.gain.solving.active import slope_weights

_NODA_STEPS = 60


def improve(inner: GainOperator, width: float, start: Floats | None = None) -> tuple[Floats, float, int]:
    """A positive point whose quotients are close together, how far they are apart relatively, and the work."""
    goal = max(width / 4, 4e-16)
    best = np.ones(inner.size) if start is None else start
    spread, s, work = np.inf, best, 0
    for _ in range(_NODA_STEPS):
        image, most, here = _quotients(inner, s)
        work += 1
        if here < spread:
            best, spread = s, here
        if spread <= goal:
            break
        new = _step(inner, s, image, most)
        work += 1
        if new is None:
            break
        s = new
    return best, spread, work


def power_steps(inner: GainOperator, width: float, s: Floats, steps: int = 2000) -> tuple[Floats, float, int]:
    """Shifted power steps from ``s`` > 0 until the quotients are close together; best point, spread and work."""
    goal = max(width / 4, 4e-16)
    best, spread, work = s, np.inf, 0
    for _ in range(steps):
        image, most, here = _quotients(inner, s)
        work += 1
        if here < spread:
            best, spread = s, here
        if spread <= goal or not np.isfinite(most):
            break
        # The geometric mean of s and G(s) is a contraction in Hilbert's metric also where G alone would go in circles.
        s = np.sqrt(s * (image + most * 1e-3 * s))
        s = s / s.max()
        if s.min() < 1e-280:
            break
    return best, spread, work


def _quotients(inner: GainOperator, s: Floats) -> tuple[Floats, float, float]:
    """G(s), the largest quotient G(s)/s, and by how much it exceeds the smallest, relatively (theory (10))."""
    image = inner.apply(s)
    ratios = image / s
    most, least = float(ratios.max()), float(ratios.min())
    return image, most, most / least - 1 if least > 0 else np.inf


def _step(inner: GainOperator, s: Floats, image: Floats, top: float) -> Floats | None:
    """One step s -> (top I - M)^{-1} s with M the active slopes at s, in coordinates scaled by s; None if it fails."""
    matrix = np.zeros((inner.size, inner.size))
    # In the scaled coordinates M s = G(s) reads: row sums are the quotients.
    np.add.at(matrix, (inner.to, inner.source), slope_weights(inner, s, image) / s[inner.to])
    system = (top * (1 + 1e-15)) * np.eye(inner.size) - matrix
    if not np.all(np.isfinite(system)):
        return None
    try:
        factor = np.linalg.solve(system, np.ones(inner.size))
    except np.linalg.LinAlgError:
        return None
    if not np.all(np.isfinite(factor)):
        return None
    factor = np.abs(factor)
    if factor.min() <= 0:
        return None
    # Too long a step would leave the range of doubles; a cut step is still a step in the right direction.
    new = s * np.maximum(factor / factor.max(), 1e-12)
    new = new / new.max()
    return new if new.min() > 1e-280 else None

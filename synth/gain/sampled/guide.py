"""Fast estimates of sampled peak gains in doubles: they guide a search and are never used for a claim.

The same sums as the enclosure (theory: section 6), on a fixed grid of phases, all outlets and inlets at once; powers of
the transition by doubling. Between grid phases the supremum is read from the parabola through the largest value and its
neighbours.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.linalg

from synth.gain.sampled.loop import Floats, SampledLoop
from synth.gain.sampled.sup import Inlet, Outlet, absolute_integral, bernstein_matrix

_REST = 1e-11
_MOST_PERIODS = 1 << 17
_MOST_PARTS = 4096  # of a period; a loop so much faster than its controller is judged coarsely here, exactly elsewhere
_TERMS = 14


@dataclass(frozen=True)
class SampledGuide:
    """Estimates: ``gains`` (outlets, inlets); ``values`` (grid, outlets, inlets) at the ``phases`` (grid,) in s.

    ``radius`` is the largest absolute mode of the transition over one period (with the rate, weighted).
    """

    gains: Floats
    phases: Floats
    values: Floats
    radius: float


def sampled_peak_guide(
    loop: SampledLoop,
    inlets: Sequence[Inlet],
    outlets: Sequence[Outlet],
    alpha: float = 0.0,
    grid: int = 9,
    rest: float = _REST,
) -> SampledGuide | None:
    """Estimate the peak gains of a sampled loop, signals weighted with e^{alpha t}; None if it is not stable then.

    ``grid`` phases per command in force, at least 3; ``rest``: sums are cut where the slowest mode has fallen to it.
    Law: agrees with the enclosure to about 1e-3 of its value at the default grid. What passes at once (feed-through) is
    not part of it.
    """
    n, size = loop.states, loop.size
    T, d = float(loop.period), float(loop.delay)
    M = loop.generator.floats() + alpha * np.eye(size)
    W = _exp(M * d)
    W[n:] = 0.0
    W[n:, :n] = loop.R.floats() * np.exp(alpha * d)
    Phi = _exp(M * (T - d)) @ W
    if loop.Z is not None:
        Phi[:n, :n] += loop.Z.floats() * np.exp(alpha * T)
    radius = float(np.abs(np.linalg.eigvals(Phi)).max(initial=0.0)) if np.all(np.isfinite(Phi)) else float("inf")
    if not radius < 1:
        return None
    D, gu, gx = (
        np.array([[float(v) for v in getattr(i, name)] for i in inlets]).reshape(len(inlets), -1).T
        for name in ("D", "gu", "gx")
    )
    fresh = np.vstack([np.zeros((n, len(inlets))), gu * np.exp(alpha * d)])
    sampled = _exp(M * (T - d)) @ fresh
    sampled[:n] += gx * np.exp(alpha * T)
    kernels, step = _kernels(M[:n, :n], D, T, size)
    periods = min(_MOST_PERIODS, int(np.ceil(np.log(rest) / np.log(max(radius, 1e-3)))) + size)
    Y = _powers(Phi, np.hstack([kernels.reshape(size, -1), sampled]), periods)
    rows = np.array([[float(v) for v in o.row] for o in outlets]).reshape(len(outlets), size)
    bernstein = bernstein_matrix(_TERMS)
    phases, values = [], []
    for start, length, piece, late in ((0.0, d, np.eye(size), False), (d, T - d, W, True)):
        for tau in np.linspace(0.0, length, grid) if length > 0 else ():
            here = rows @ _exp(M * tau)
            seen = (here @ piece) @ Y
            kernel = seen[:, :, : -len(inlets)].reshape(len(Y), len(outlets), -1, len(inlets), _TERMS)
            _, high, _ = absolute_integral(kernel, np.zeros(kernel.shape[:-1]), bernstein)
            total = high.sum(axis=(0, 2)) * step + np.abs(seen[:, :, -len(inlets) :]).sum(axis=0)
            phases.append(start + tau)
            values.append(total + (np.abs(here @ fresh) if late else 0.0))
    found = np.array(values) + _inside(M[:n, :n], D, rows[:, :n], np.array(phases))
    best = _crest(found, grid)
    first = np.array([o.sampled for o in outlets], dtype=bool)
    if first.any() and d > 0:  # without delay, what a fresh sample adds must not count at the sampling instant itself
        best[first] = found[0][first]
    return SampledGuide(best, np.array(phases), found, radius)


def _exp(matrix: Floats) -> Floats:
    return np.asarray(scipy.linalg.expm(matrix), dtype=np.float64)


def _kernels(A: Floats, D: Floats, period: float, size: int) -> tuple[Floats, float]:
    """Taylor coefficients of e^{As} D on equal parts of the period (size, parts, inlets, terms); a part's length.

    The states are counted in units that balance A: in those of the file a part could be a billionth of the period.
    """
    n = len(A)
    scale: Floats = np.ones(n)
    if n:
        balanced, (factors, _) = scipy.linalg.matrix_balance(A, permute=False, separate=True)
        A, scale = np.asarray(balanced, dtype=np.float64), np.asarray(factors, dtype=np.float64)
        D = np.asarray(D / scale[:, None], dtype=np.float64)
    parts = min(_MOST_PARTS, max(1, int(np.ceil(float(np.abs(A).sum(axis=1).max(initial=0.0)) * period))))
    step = period / parts
    found = np.zeros((size, parts, D.shape[1], _TERMS))
    first, forward = D, _exp(A * step)
    for k in range(parts):
        term = first
        for j in range(_TERMS):
            found[:n, k, :, j] = scale[:, None] * term
            term = A @ term * (step / (j + 1))
        first = forward @ first
    return found, step


def _powers(Phi: Floats, start: Floats, periods: int) -> Floats:
    """Phi^m start for m < periods, (periods, size, columns), by doubling."""
    found, power = start[None], Phi
    while len(found) < periods:
        found = np.concatenate([found, power @ found])
        power = power @ power
    return np.asarray(found[:periods], dtype=np.float64)


def _inside(A: Floats, D: Floats, H: Floats, phases: Floats) -> Floats:
    """integral_0^phi |H e^{As} D| ds on the grid, by Simpson's rule on 16 parts between neighbouring phases."""
    found = np.zeros((len(phases), H.shape[0], D.shape[1]))
    for i in range(1, len(phases)):
        length = phases[i] - phases[i - 1]
        found[i] = found[i - 1]
        if length <= 0:
            continue
        step = _exp(A * (length / 16))
        x = _exp(A * phases[i - 1]) @ D
        for k in range(17):
            weight = 1 if k in (0, 16) else 4 if k % 2 else 2
            found[i] += np.abs(H @ x) * (weight * length / 48)
            x = step @ x
    return found


def _crest(values: Floats, grid: int) -> Floats:
    """The largest value per outlet and inlet, raised to the top of the parabola through it and its neighbours."""
    best = values.max(axis=0)
    for first in range(0, len(values), grid):
        part = values[first : first + grid]
        left, middle, right = part[:-2], part[1:-1], part[2:]
        bend = left - 2 * middle + right
        with np.errstate(divide="ignore", invalid="ignore"):
            top = middle - (right - left) ** 2 / (8 * bend)
        inner = (middle >= left) & (middle >= right) & (bend < 0)
        best = np.maximum(best, np.where(inner, top, 0.0).max(axis=0, initial=0.0))
    return np.asarray(best, dtype=np.float64)

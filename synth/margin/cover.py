"""A proof that a matrix stays invertible over a whole box, from finitely many points.

If the smallest singular value of M at the centre of a box exceeds the largest change of M inside it, M is invertible
everywhere in the box (Weyl). Boxes where that fails are halved along their worst side until all are settled or the
budget is spent. Doubles are used; every comparison keeps a margin above the rounding error of the singular values.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.margin.symbol import ComplexArray, Loop, LoopFamily, root_bound

_ROUNDING = 1e-12  # relative to the largest singular value; thousands of times the error of an SVD of such matrices


@dataclass(frozen=True)
class Covering:
    """``complete``: every box was settled; ``boxes``: how many were looked at; ``gap``: a point left open, or None."""

    complete: bool
    boxes: int
    gap: tuple[float, ...] | None = None


def cover(
    low: NDArray[np.float64],
    high: NDArray[np.float64],
    matrices: Callable[[NDArray[np.float64]], ComplexArray],
    steps: NDArray[np.float64],
    budget: int = 400_000,
) -> Covering:
    """Show that ``matrices`` is invertible on the box ``low <= p <= high`` (shape (dim,)).

    ``matrices`` maps points (k, dim) to (k, n, n); ``steps`` (dim,) bounds the 2-norm of its change per unit of each
    coordinate. Law: a complete covering never contains a point where the matrix is singular. Source: ours.
    """
    centres, halves = ((low + high) / 2)[None, :], ((high - low) / 2)[None, :]
    seen = 0
    while len(centres):
        seen += len(centres)
        open_: list[NDArray[np.bool_]] = []
        for chunk in range(0, len(centres), 20_000):
            part = slice(chunk, chunk + 20_000)
            sigma = np.linalg.svd(matrices(centres[part]), compute_uv=False)
            reach = halves[part] @ steps
            open_.append(sigma[:, -1] - _ROUNDING * sigma[:, 0] <= reach * (1 + 1e-9))
        left = np.concatenate(open_)
        centres, halves = centres[left], halves[left]
        if len(centres) and seen + 2 * len(centres) > budget:
            return Covering(False, seen, tuple(float(v) for v in centres[0]))
        worst = np.argmax(halves * steps, axis=1)
        rows = np.arange(len(centres))
        halves = halves.copy()
        halves[rows, worst] /= 2
        shift = np.zeros_like(centres)
        shift[rows, worst] = halves[rows, worst]
        centres, halves = np.concatenate([centres - shift, centres + shift]), np.concatenate([halves, halves])
    return Covering(True, seen)


def stable_at_every_angle(loop: Loop, budget: int = 400_000) -> Covering:
    """Show that every root of ``loop`` lies in Re s < 0 at every angle theta, for exactly the declared delays.

    First no root of theta = 0 lies in Re s >= 0 (a box of that half plane, outside of which there is none); then no
    root lies on the imaginary axis for any theta in [0, pi] (in more directions: times [-pi, pi] for the others).
    Roots move continuously with theta and cannot come from
    infinity, so none ever reaches the right half plane; theta < 0 follows by conjugation.
    """
    if not np.isfinite(loop.radius):
        return Covering(False, 0)
    R, d = loop.radius, loop.directions

    def angles(points: NDArray[np.float64]) -> NDArray[np.float64]:
        return points[:, 0] if d == 1 else points

    def right_half(points: NDArray[np.float64]) -> ComplexArray:
        return loop.matrix(angles(np.zeros((len(points), d))), points[:, 0] + 1j * points[:, 1])

    def axis(points: NDArray[np.float64]) -> ComplexArray:
        return loop.matrix(angles(points[:, :d]), 1j * points[:, d])

    still = cover(np.array([0.0, 0.0]), np.array([R, R]), right_half, np.array([loop.step_s, loop.step_s]), budget)
    if not still.complete:
        return Covering(False, still.boxes, (0.0, *(still.gap or ())))
    steps = np.array([*loop.steps_theta, loop.step_s])
    turn = cover(_lowest(d, -R), np.array([*[np.pi] * d, R]), axis, steps, budget)
    return Covering(turn.complete, still.boxes + turn.boxes, turn.gap)


def _lowest(directions: int, last: float) -> NDArray[np.float64]:
    """The lower corner of half of all angles (the other half follows by conjugation), and one more number."""
    return np.array([0.0, *[-np.pi] * (directions - 1), last])


def no_crossing_between(family: LoopFamily, low: float, high: float, budget: int = 400_000) -> Covering:
    """Show that no root crosses the imaginary axis, at any angle, while the factor goes from ``low`` to ``high``.

    With the network stable at one of the ends it is then stable at every factor in between. The range is worked
    through in pieces of a tenth, each with the root bound and the steps of its own.
    """
    seen, start = 0, low
    while start < high:
        end = min(start * 1.1, high)
        ends = (family.at(start), family.at(end))
        R = _joint_bound(family, start, end)
        if not np.isfinite(R):
            return Covering(False, seen)
        d = ends[0].directions
        turns = np.max([e.steps_theta for e in ends], axis=0)
        steps = np.array([family.step_kappa, *turns, max(e.step_s for e in ends)])

        def axis(points: NDArray[np.float64]) -> ComplexArray:
            theta = points[:, 1] if points.shape[1] == 3 else points[:, 1:-1]
            return family.matrix(points[:, 0], theta, 1j * points[:, -1])

        lowest = np.concatenate([[start], _lowest(d, -R)])
        done = cover(lowest, np.array([end, *[np.pi] * d, R]), axis, steps, budget - seen)
        seen += done.boxes
        if not done.complete:
            return Covering(False, seen, done.gap)
        start = end
    return Covering(True, seen)


def _joint_bound(family: LoopFamily, low: float, high: float) -> float:
    """A bound on |s| of right half-plane roots for every factor between the two.

    |A(kappa)| is entrywise at most the larger of its ends, and a Perron root grows with its matrix.
    """
    largest = np.maximum(*(np.abs(family.A0 + k * family.A1) for k in (low, high)))
    return root_bound(largest, family.at(high).terms, family.states)

"""Mean-square gain (H-infinity norm) of one loop, enclosed with a proven bound between the frequencies looked at.

The mean-square gain is the largest ratio of the root mean squares of an outlet and an inlet, sup over w of the largest
singular value of G(jw). It says nothing about peaks: a loop with mean-square gain 1 may enlarge them (theory (27)).

Without dead time the decision "is the gain below c" is exact: for A Hurwitz and c above every singular value of F it
holds iff the Hamiltonian matrix of (A, D, H, F, c) has no eigenvalue on the imaginary axis (Boyd, Balakrishnan and
Kabamba, Math. Control Signals Systems 2, 1989), and a Sturm sequence of its characteristic polynomial in w^2 counts
them in exact arithmetic. With dead time |den|^2 c^2 - |num|^2 is bounded below on cells of frequencies by interval
arithmetic, and beyond the last cell by the leading powers (ours).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from flint import acb, acb_mat, arb, arb_mat, ctx, fmpq, fmpq_mat, fmpq_poly

from synth.base.errors import UnstableLoop, WidthNotReached
from synth.base.exact import ExactMatrix, Number
from synth.gain.lyapunov import is_hurwitz, positive_definite, rationals
from synth.gain.peak import Matrix, _check_shapes, _feedthrough, as_matrix, check_width
from synth.gain.strings.dead_time import rational
from synth.gain.strings.dead_time_roots import BITS


@dataclass(frozen=True)
class MeanSquareGain:
    """A guaranteed enclosure lower <= sup_w |G(jw)| <= upper, outlet unit per inlet unit.

    ``frequency``: where the lower end is attained, rad/s (0 for constant signals, inf where G tends to its supremum).
    ``exact``: decided in exact arithmetic (True) or by interval arithmetic over frequencies (False).
    """

    lower: float
    upper: float
    frequency: float
    exact: bool


def mean_square_gain(A: Matrix, D: Matrix, H: Matrix, F: Matrix | Number = 0, width: float = 1e-6) -> MeanSquareGain:
    """Enclose the mean-square gain of z = H x + F v, x' = A x + D v (no dead time), to a relative ``width``.

    Shapes and units as in ``peak_to_peak_gain``; several outlets and inlets count together in Euclidean norm (largest
    singular value), in declared units. Raises UnstableLoop if A is not Hurwitz, InputError on shapes and widths.
    Law: lower is attained at ``frequency``; the gain is strictly below ``upper`` in exact arithmetic (or both are 0).
    """
    check_width(width)
    a, d, h = as_matrix(A, "A"), as_matrix(D, "D"), as_matrix(H, "H")
    f = _feedthrough(F, (h.shape[0], d.shape[1]))
    _check_shapes(a, d, h, f)
    if a.shape[0] and not is_hurwitz(rationals(a)):
        raise UnstableLoop("the closed unit is not Hurwitz, so no mean-square gain is finite.")
    if not any(any(row) for row in h.rows) and not any(any(row) for row in f.rows):
        return MeanSquareGain(0.0, 0.0, 0.0, True)
    frequency = _best_frequency(a, d, h, f)
    empty = ExactMatrix.zeros
    last = _attained(empty(0, 0), empty(0, d.shape[1]), empty(h.shape[0], 0), f, 0.0)
    for _ in range(40):
        lower = _attained(a, d, h, f, frequency)
        if last > lower:
            lower, frequency = last, math.inf
        upper = max(lower, 1e-300) * (1 + width * 0.75)
        if _below(a, d, h, f, Fraction(upper)):
            return MeanSquareGain(lower, upper, frequency, True)
        frequency = _between(a, d, h, f, Fraction(upper), frequency)
    raise WidthNotReached(f"the mean-square gain could not be enclosed to a relative width of {width:g}.")


def _response(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix, w: float) -> float:
    A, D, H, F = a.floats(), d.floats(), h.floats(), f.floats()
    value = F + (H @ np.linalg.solve(1j * w * np.eye(len(A)) - A, D) if len(A) else 0)
    return float(np.linalg.norm(value, 2))


def _best_frequency(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix) -> float:
    """A good frequency by doubles: a grid around the modes, then golden sections."""
    modes = np.abs(np.linalg.eigvals(a.floats())) if a.shape[0] else np.ones(1)
    grid = np.concatenate([[0.0], np.geomspace(max(modes.min(), 1e-300) / 100, modes.max() * 100, 400), modes])
    grid = np.unique(grid)
    values = [_response(a, d, h, f, float(w)) for w in grid]
    at = int(np.argmax(values))
    return refined(
        lambda w: _response(a, d, h, f, w), float(grid[max(at - 1, 0)]), float(grid[min(at + 1, len(grid) - 1)])
    )


def refined(call: Callable[[float], float], low: float, high: float) -> float:
    """Golden sections on [low, high] for the place of the largest value; the ends count too."""
    ratio = (math.sqrt(5) - 1) / 2
    ends = [low, high]
    for _ in range(80):
        one, two = high - ratio * (high - low), low + ratio * (high - low)
        if call(one) >= call(two):
            high = two
        else:
            low = one
    return max([*ends, (low + high) / 2], key=call)


def _attained(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix, w: float) -> float:
    """A double certainly not above the largest singular value of G(jw): the gain along one fixed direction."""
    A, D, H, F = a.floats(), d.floats(), h.floats(), f.floats()
    n = len(A)
    value = F + (H @ np.linalg.solve(1j * w * np.eye(n) - A, D) if n else 0)
    direction = np.linalg.svd(value.astype(complex))[2][0].conj()
    with ctx.workprec(BITS):
        v = acb_mat(len(direction), 1, [acb(float(x.real), float(x.imag)) for x in direction])
        out = acb_mat(rationals(f)) * v
        if n:
            shifted = acb_mat(n, n, [acb(0, w if i == j else 0) for i in range(n) for j in range(n)])
            state = (shifted - acb_mat(rationals(a))).solve(acb_mat(rationals(d)) * v)
            out += acb_mat(rationals(h)) * state
        squares = sum((abs(x) ** 2 for x in out.entries()), arb(0))
        norm = sum((abs(x) ** 2 for x in v.entries()), arb(0))
        return max(0.0, float((squares / norm).sqrt().lower()) * (1 - 2.0**-52))


def _below(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix, c: Fraction) -> bool:
    """Whether the gain is strictly below c, exactly (A is Hurwitz)."""
    gap = _gap(f, c)
    with ctx.workprec(512):
        if not positive_definite(arb_mat(gap)):
            return False
    return roots_above_zero(_hamiltonian_in_squares(a, d, h, f, gap), closed=True) == 0


def _gap(f: ExactMatrix, c: Fraction) -> fmpq_mat:
    inlets = f.shape[1]
    square = rational(c * c)
    F = rationals(f)
    return fmpq_mat(inlets, inlets, [square * int(i == j) for i in range(inlets) for j in range(inlets)]) - (
        F.transpose() * F
    )


def _hamiltonian_in_squares(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix, gap: fmpq_mat) -> fmpq_poly:
    """Characteristic polynomial of the Hamiltonian at s = jw, as a polynomial in w^2."""
    n = a.shape[0]
    if n == 0:
        return fmpq_poly([1])
    A, D, H, F = (rationals(m) for m in (a, d, h, f))
    inverse = gap.inv()
    top = A + D * inverse * F.transpose() * H
    right = D * inverse * D.transpose()
    p = h.shape[0]
    unit = fmpq_mat(p, p, [int(i == j) for i in range(p) for j in range(p)])
    left = H.transpose() * (unit + F * inverse * F.transpose()) * H
    entries = []
    for i in range(2 * n):
        for j in range(2 * n):
            if i < n:
                entries.append(top[i, j] if j < n else right[i, j - n])
            else:
                entries.append(-left[i - n, j] if j < n else -top[j - n, i - n])
    polynomial = fmpq_mat(2 * n, 2 * n, entries).charpoly().coeffs()
    # Even powers only: s^2k becomes (-1)^k (w^2)^k.
    return fmpq_poly([c * (-1) ** k for k, c in enumerate(polynomial[0::2])])


def roots_above_zero(p: fmpq_poly, closed: bool = False) -> int:
    """Number of different real roots of p in (0, inf), or [0, inf) if ``closed``, by a Sturm sequence (exact)."""
    at_zero = 0
    while p.degree() > 0 and p[0] == 0:
        p = p // fmpq_poly([0, 1])
        at_zero = 1
    if p.degree() < 1:
        return at_zero if closed else 0
    sequence = [p, p.derivative()]
    while sequence[-1].degree() > 0:
        following = -(sequence[-2] % sequence[-1])
        if following.degree() < 0 or following == 0:
            break
        # Only signs count, so the content is taken out to keep the numbers short.
        sequence.append(following * (1 / abs(following.leading_coefficient())))
    changes = _changes([q[0] for q in sequence]) - _changes([q.leading_coefficient() for q in sequence])
    return changes + (at_zero if closed else 0)


def _changes(values: list[fmpq]) -> int:
    signs = [1 if v > 0 else -1 for v in values if v != 0]
    return sum(a != b for a, b in itertools.pairwise(signs))


def _between(a: ExactMatrix, d: ExactMatrix, h: ExactMatrix, f: ExactMatrix, c: Fraction, frequency: float) -> float:
    """A frequency between two crossings of the level c, where the gain is higher (Bruinsma and Steinbuch 1990)."""
    gap = _gap(f, c)
    with ctx.workprec(512):
        if not positive_definite(arb_mat(gap)):
            raise WidthNotReached("the mean-square gain is that of the feed-through; ask for a larger width.")
    squares = _hamiltonian_in_squares(a, d, h, f, gap)
    crossings = sorted(
        math.sqrt(max(0.0, float(r.real.mid())))
        for r, _ in squares.numer().complex_roots()
        if r.imag.contains(0) and float(r.real.mid()) >= 0
    )
    points = [0.0, *crossings]
    middles = [(one + two) / 2 for one, two in itertools.pairwise(points)] or [frequency]
    best = max(middles, key=lambda w: _response(a, d, h, f, w))
    return refined(lambda w: _response(a, d, h, f, w), best * 0.999, best * 1.001)

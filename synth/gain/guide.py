"""Fast estimates of peak gains with their gradients: they guide a search and are never used for a claim.

For a closed unit x' = A x + D v, z = H x + F v the peak gain from inlet l to outlet k is |F_kl| plus the integral
of |h_kl(t)|, h = H e^{At} D (theory (1)). Time is cut into cells whose length follows the fastest mode still alive. The
integral over a cell without a change of sign comes from the matrix exponential and is exact up to rounding; a cell
with a change of sign is split where the cubic through both end values and slopes vanishes. With the split held
fixed the estimate is linear in the response, so its gradient is the same sum over the sensitivities of the response:
dp = integral sign(h) dh, theory (16).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_HORIZON = 22.0  # a mode e^{-a t} is followed to a t = 22, where 3e-10 of it is left
_STEP = 0.4  # cell length times the magnitude of the fastest mode still alive
_MOST_CELLS = 8192  # per stretch of equal cells; a unit damped so lightly that this cuts it off is far from any optimum
_TAYLOR = 11  # terms of the exponential; below norm 1/2 the remainder is under 1e-12


@dataclass(frozen=True)
class Guide:
    """Estimate of the peak gains of one unit.

    ``gains`` (outlets, inlets); ``slopes`` (parameters, outlets, inlets) are the derivatives of ``gains``.
    """

    gains: Array
    slopes: Array


def peak_gain_guide(
    A: Array,
    D: Array,
    H: Array,
    F: Array,
    dA: Array | None = None,
    dD: Array | None = None,
    dH: Array | None = None,
    dF: Array | None = None,
) -> Guide | None:
    """Estimate peak gains and, for each of g parameters, their derivative; None if A is not Hurwitz.

    Shapes: ``A`` (n, n) in 1/s, ``D`` (n, inlets), ``H`` (outlets, n), ``F`` (outlets, inlets); ``dA`` (g, n, n) and so
    on are the derivatives of these matrices with respect to the parameters, all absent for g = 0.
    Law: agrees with the guaranteed enclosure to about 1e-5 of its value, and with finite differences of itself.
    Method: ours, on theory (16); the sensitivities come from the augmented state [x; dx/dp_1; ...].
    """
    n, inlets = D.shape
    count = 0 if dA is None else dA.shape[0]
    modes = np.linalg.eigvals(A).astype(np.complex128) if n else np.zeros(0, np.complex128)
    if n and not modes.real.max() < 0:
        return None
    gains = np.abs(F)
    slopes = np.zeros((count, *F.shape))
    if dF is not None:
        slopes += np.sign(F) * dF
    if n == 0 or inlets == 0 or H.shape[0] == 0:
        return Guide(gains, slopes)
    big, start = _augmented(A, D, dA, dD)
    total = np.zeros((big.shape[0], H.shape[0], inlets))
    for length, cells in _stretches(modes):
        part, start = _stretch(big, start, H, A, length, cells)
        total += part
    parts = total.reshape(count + 1, n, H.shape[0], inlets)
    gains = gains + np.einsum("on,nom->om", H, parts[0])
    if count:
        slopes = slopes + np.einsum("on,gnom->gom", H, parts[1:])
        if dH is not None:
            slopes = slopes + np.einsum("gon,nom->gom", dH, parts[0])
    return Guide(gains, slopes)


def _augmented(A: Array, D: Array, dA: Array | None, dD: Array | None) -> tuple[Array, Array]:
    """Matrix and initial values of [x; dx/dp_1; ...; dx/dp_g] for an impulse at each inlet."""
    n = A.shape[0]
    if dA is None:
        return A, D
    count = dA.shape[0]
    big = np.zeros((count + 1, n, count + 1, n))
    for i in range(count + 1):
        big[i, :, i, :] = A
    big[1:, :, 0, :] = dA
    start = np.zeros((count + 1, n, D.shape[1]))
    start[0] = D
    if dD is not None:
        start[1:] = dD
    return big.reshape((count + 1) * n, (count + 1) * n), start.reshape((count + 1) * n, D.shape[1])


def _stretches(modes: NDArray[np.complex128]) -> list[tuple[float, int]]:
    """Cell length and number of cells of each stretch of time; cells grow as the fast modes die out."""
    ends = _HORIZON / -modes.real
    order = np.argsort(ends)
    alive = np.maximum.accumulate(np.abs(modes[order])[::-1])[::-1]
    found: list[tuple[float, int]] = []
    now = 0.0
    for position, i in enumerate(order):
        # A stretch pays only if the cells of the next one are clearly longer.
        if position + 1 < len(order) and alive[position + 1] > 0.6 * alive[position]:
            continue
        if ends[i] <= now:
            continue
        needed = (ends[i] - now) * alive[position] / _STEP
        cells = 1 << max(3, int(np.ceil(np.log2(min(max(needed, 1.0), _MOST_CELLS)))))
        length = min((ends[i] - now) / cells, _STEP / alive[position])
        found.append((float(length), cells))
        now += length * cells
    return found


def _exponential(big: Array, length: float) -> tuple[Array, Array]:
    """e^{A h} and its integral from 0 to h, by Taylor terms on a halved step and repeated doubling."""
    size = big.shape[0]
    norm = float(np.abs(big).sum(axis=1).max()) * length
    halvings = max(0, int(np.ceil(np.log2(max(norm, 1e-300)))) + 1)
    step = length / 2.0**halvings
    scaled = big * step
    unit = np.eye(size)
    series = unit
    for k in range(_TAYLOR, 1, -1):
        series = unit + scaled @ series / k  # ends as the sum of (A h)^j/(j+1)!
    gamma = series * step
    phi = unit + big @ gamma
    for _ in range(halvings):
        gamma = gamma + phi @ gamma
        phi = phi @ phi
    return phi, gamma


def _stretch(big: Array, start: Array, H: Array, A: Array, length: float, cells: int) -> tuple[Array, Array]:
    """Weighted sums V with p = H V over one stretch, (states, outlets, inlets), and the state at its end."""
    phi, gamma = _exponential(big, length)
    states = _nodes(phi, start, cells)
    n = A.shape[0]
    outlets, inlets = H.shape[0], start.shape[1]
    rows = np.concatenate((H, H @ A, H @ gamma[:n, :n]))
    seen = (rows @ states[:n].reshape(n, -1)).reshape(3, outlets, cells + 1, inlets)
    value, slope, integral = seen[0], seen[1], seen[2][:, :-1]
    on_cells = np.sign(integral)
    on_values = np.zeros_like(value)
    on_slopes = np.zeros_like(value)
    where = np.nonzero(value[:, :-1] * value[:, 1:] < 0)
    if where[0].size:
        after = (where[0], where[1] + 1, where[2])
        side = np.sign(value[where])
        weights = _split(value[where], slope[where] * length, value[after], slope[after] * length)
        on_cells[where] = side * (2.0 * weights[4] - 1.0)
        factor = 2.0 * side * length
        on_values[where] += factor * weights[0]
        on_slopes[where] += factor * length * weights[1]
        # A node may close one cell and open the next: add, never overwrite (np.add.at for repeated places).
        np.add.at(on_values, after, factor * weights[2])
        np.add.at(on_slopes, after, factor * length * weights[3])
    size = big.shape[0]
    by_inlet = np.ascontiguousarray(states.transpose(2, 0, 1))
    all_weights = np.zeros((3 * outlets, cells + 1, inlets))
    all_weights[:outlets, :-1] = on_cells
    all_weights[outlets : 2 * outlets] = on_values
    all_weights[2 * outlets :] = on_slopes
    sums = (by_inlet @ all_weights.transpose(2, 1, 0)).reshape(inlets, size, 3, outlets)
    total = gamma @ sums[:, :, 0] + sums[:, :, 1] + big @ sums[:, :, 2]
    return total.transpose(1, 2, 0), states[:, -1]


def _nodes(phi: Array, start: Array, cells: int) -> Array:
    """States at the ``cells`` + 1 ends of cells, (states, cells + 1, inlets), built by doubling; cells a power of 2."""
    size, inlets = start.shape
    table = np.empty((size, (cells + 1) * inlets))
    table[:, :inlets] = start
    done, power = 1, phi
    while done < cells + 1:
        take = min(done, cells + 1 - done)
        table[:, done * inlets : (done + take) * inlets] = power @ table[:, : take * inlets]
        done += take
        if done < cells + 1:
            power = power @ power
    return table.reshape(size, cells + 1, inlets)


def _split(left: Array, left_slope: Array, right: Array, right_slope: Array) -> tuple[Array, ...]:
    """Weights of value and slope at both ends and of the whole integral in the integral up to the zero.

    On a cell of length 1: the zero is that of the cubic through the four end data; the integral up to it is read from
    the quintic with the known end values, slopes and curvatures of the antiderivative.
    """
    at = left / (left - right)
    # Coefficients of the cubic; three Newton steps from the chord reach rounding on cells as short as ours.
    second = 3 * (right - left) - 2 * left_slope - right_slope
    third = 2 * (left - right) + left_slope + right_slope
    with np.errstate(divide="ignore", invalid="ignore"):
        for _ in range(3):
            here = left + at * (left_slope + at * (second + at * third))
            steep = left_slope + at * (2 * second + 3 * at * third)
            at = np.minimum(np.maximum(at - here / steep, 0.0), 1.0)
        at[np.isnan(at)] = 0.5
    t2 = at * at
    t3 = t2 * at
    t4, t5 = t2 * t2, t2 * t3
    return (
        at - 6 * t3 + 8 * t4 - 3 * t5,
        0.5 * t2 - 1.5 * t3 + 1.5 * t4 - 0.5 * t5,
        -4 * t3 + 7 * t4 - 3 * t5,
        0.5 * t3 - t4 + 0.5 * t5,
        10 * t3 - 15 * t4 + 6 * t5,
    )


def connected_blocks(pattern: NDArray[np.bool_]) -> tuple[NDArray[np.intp], ...]:
    """Strongly connected blocks of a square pattern that contain a loop, each as sorted indices."""
    size = pattern.shape[0]
    reach = pattern | np.eye(size, dtype=bool)
    for _ in range(max(1, int(np.ceil(np.log2(max(size, 2)))))):
        reach = (reach.astype(np.float64) @ reach.astype(np.float64)) > 0
    both = reach & reach.T
    found: list[NDArray[np.intp]] = []
    seen = np.zeros(size, dtype=bool)
    for i in range(size):
        if seen[i]:
            continue
        block = np.nonzero(both[i])[0]
        seen[block] = True
        if block.size > 1 or pattern[i, i]:
            found.append(block)
    return tuple(found)

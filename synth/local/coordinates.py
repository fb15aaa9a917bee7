"""Coordinates of the search: the gains themselves, or the modes that an actuator places.

A real polynomial has all roots in the disc |s| <= w and left of -a exactly if it is a product of factors
s^2 + b s + c with (b, c) in the quadrilateral p(-w) >= 0, p(-a) >= 0, b >= 2a, c <= w^2 (and s + r, a <= r <= w, when
the degree is odd). In these coordinates the bounds on the modes, sharp cusps in the gains, are the sides of boxes, and
the substitution sin^2 removes the boxes. Ours; the row of gains follows from Ackermann's formula (1972).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.local.plant import Plant, Region

Array = NDArray[np.float64]
_EDGE = 2e-3  # starts keep this distance from the sides, where the substitution has no slope


@dataclass(frozen=True)
class Coordinates:
    """Map between a search vector and the scaled K of one plant.

    ``placed`` is the actuator whose gains on ``sensors`` place the modes (None: no actuator can; every allowed gain
    is a coordinate). ``free`` are the allowed entries outside the placed ones. ``slowest`` and ``fastest`` bound the
    modes, already narrowed.
    """

    plant: Plant
    placed: int | None
    sensors: tuple[int, ...]
    free: tuple[tuple[int, int], ...]
    slowest: float
    fastest: float

    @property
    def size(self) -> int:
        """Length of the search vector."""
        return len(self.free) + len(self.sensors)

    def gains(self, point: Array) -> tuple[Array, Array]:
        """K (inputs, sensors) at ``point`` and its derivative (coordinates, inputs, sensors)."""
        small = 1e-30  # complex step: exact derivatives without cancellation
        batch = np.tile(point.astype(complex), (self.size + 1, 1))
        batch[np.arange(1, self.size + 1), np.arange(self.size)] += 1j * small
        found = self._many(batch)
        return found[0].real, found[1:].imag / small

    def gains_only(self, point: Array) -> Array:
        """K alone."""
        found: Array = self._many(point.astype(complex)[None])[0].real
        return found

    def _many(self, points: NDArray[np.complex128]) -> NDArray[np.complex128]:
        """K for a batch of complex points."""
        plant, order = self.plant, len(self.sensors)
        K = np.zeros((len(points), *plant.allowed.shape), dtype=complex)
        for position, (i, j) in enumerate(self.free):
            value = points[:, order + position]
            bound = plant.bound[i, j]
            K[:, i, j] = bound * np.sin(value) if np.isfinite(bound) else value
        if self.placed is None:
            return K
        base: NDArray[np.complex128] = (plant.A + plant.B @ K @ plant.C).astype(np.complex128)
        rows = _place(base, plant.B[:, self.placed], self._polynomial(points[:, :order]))
        K[:, self.placed, list(self.sensors)] = rows @ np.linalg.inv(plant.C[list(self.sensors)])
        return K

    def _polynomial(self, angles: NDArray[np.complex128]) -> NDArray[np.complex128]:
        """Coefficients, highest power first, of the closed characteristic polynomial for a batch."""
        a, w = self.slowest, self.fastest
        share = np.sin(angles) ** 2
        found = np.ones((len(angles), 1), dtype=complex)
        for k in range(angles.shape[1] // 2):
            p, q = share[:, 2 * k], share[:, 2 * k + 1]
            linear = 2 * a + p * (w - a) * (1 + q)
            constant = q * w * w + (1 - q) * (a * a + p * a * (w - a))
            found = _times(found, np.stack((np.ones_like(p), linear, constant), axis=1))
        if angles.shape[1] % 2:
            root = a + (w - a) * share[:, -1]
            found = _times(found, np.stack((np.ones_like(root), root), axis=1))
        return found

    def point(self, K: Array) -> Array:
        """A search vector whose gains are ``K``, or close to it where ``K`` breaks bounds on modes or gains."""
        plant = self.plant
        tail = []
        for i, j in self.free:
            bound = plant.bound[i, j]
            inside = float(np.clip(K[i, j] / bound, -0.999, 0.999)) if np.isfinite(bound) else 0.0
            tail.append(float(np.arcsin(inside)) if np.isfinite(bound) else float(K[i, j]))
        if self.placed is None:
            return np.array(tail)
        modes = np.linalg.eigvals(plant.A + plant.B @ np.where(plant.allowed, K, 0.0) @ plant.C)
        return np.concatenate((self.angles(modes.astype(np.complex128)), np.array(tail)))

    def angles(self, modes: NDArray[np.complex128]) -> Array:
        """The first part of a search vector for the given modes (a set closed under conjugation), clipped inside."""
        a, w = self.slowest, self.fastest
        inside = modes / np.maximum(1.0, np.abs(modes) / w)
        inside = np.minimum(inside.real, -a) + 1j * inside.imag
        inside = inside / np.maximum(1.0, np.abs(inside) / w)
        upper = inside[inside.imag > 1e-9 * w]
        real = sorted((v.real for v in inside if abs(v.imag) <= 1e-9 * w), reverse=True)
        pairs = [(-2 * v.real, abs(v) ** 2) for v in upper]
        while len(real) > 1:
            first, second = real.pop(0), real.pop()
            pairs.append((-first - second, first * second))
        shares: list[float] = []
        for linear, constant in pairs[: len(self.sensors) // 2]:
            shares.extend(self._shares(linear, constant))
        if len(self.sensors) % 2:
            root = -real[0] if real else 0.5 * (a + w)
            shares.append((root - a) / (w - a))
        return np.asarray(np.arcsin(np.sqrt(np.clip(shares, _EDGE, 1 - _EDGE))))

    def _shares(self, linear: float, constant: float) -> tuple[float, float]:
        """Invert the map from the unit square to (b, c) by bisection on the first coordinate."""
        a, w = self.slowest, self.fastest
        low, high = 0.0, 1.0
        q = 0.0
        for _ in range(50):
            p = 0.5 * (low + high)
            least = a * a + p * a * (w - a)
            q = float(np.clip((constant - least) / (w * w - least), 0.0, 1.0))
            if 2 * a + p * (w - a) * (1 + q) < linear:
                low = p
            else:
                high = p
        return 0.5 * (low + high), q


def coordinates(field: Region, index: int, tight: float = 0.0) -> Coordinates:
    """Mode coordinates where some actuator can place every mode through its allowed sensors, else plain gains."""
    plant = field.plants[index]
    slowest = max(field.slowest * (1 + tight), 1e-3 * field.fastest if field.slowest == 0 else 0.0)
    fastest = field.fastest * (1 - tight)
    everything = tuple((int(i), int(j)) for i, j in zip(*np.nonzero(plant.allowed), strict=True))
    n = len(plant.A)
    order = sorted(range(plant.B.shape[1]), key=lambda r: int(np.isfinite(plant.bound[r]).sum()))
    if 0 < n <= 12 and slowest < fastest:
        for row in order:
            sensors = _independent(plant, row)
            if sensors is None:
                continue
            free = tuple(e for e in everything if not (e[0] == row and e[1] in sensors))
            if _places(plant, row, free):
                return Coordinates(plant, row, sensors, free, slowest, fastest)
    return Coordinates(plant, None, (), everything, slowest, fastest)


def _independent(plant: Plant, row: int) -> tuple[int, ...] | None:
    """Sensors that the actuator may use and that together determine the state; None if there are too few."""
    from scipy.linalg import qr

    usable = np.nonzero(plant.allowed[row])[0]
    n = len(plant.A)
    if len(usable) < n:
        return None
    _, triangle, order = qr(plant.C[usable].T, pivoting=True)
    diagonal = np.abs(np.diag(triangle))
    if len(diagonal) < n or diagonal[n - 1] < 1e-9 * diagonal[0]:
        return None
    return tuple(sorted(int(usable[k]) for k in order[:n]))


def _places(plant: Plant, row: int, free: tuple[tuple[int, int], ...]) -> bool:
    """Whether the actuator reaches every mode, with the other gains at fixed arbitrary values."""
    K = np.zeros(plant.allowed.shape)
    for position, (i, j) in enumerate(free):
        K[i, j] = 0.1 * np.cos(1.0 + position)
    base = plant.A + plant.B @ K @ plant.C
    columns = [plant.B[:, row]]
    for _ in range(len(base) - 1):
        columns.append(base @ columns[-1])
    sizes = np.linalg.svd(np.stack(columns, axis=1), compute_uv=False)
    return bool(sizes[-1] > 1e-10 * sizes[0])


def _place(base: NDArray[np.complex128], column: Array, polynomial: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Row k (batch, n) such that base + column k has the given characteristic polynomial (Ackermann, u = +k x)."""
    n = base.shape[1]
    reach = np.empty((len(base), n, n), dtype=complex)
    reach[:, :, 0] = column
    for j in range(1, n):
        reach[:, :, j] = (base @ reach[:, :, j - 1, None])[:, :, 0]
    last = np.zeros((n, 1), dtype=complex)
    last[-1] = 1.0
    # Row q with q [b, A b, ...] = [0 ... 0 1].
    power = np.linalg.solve(reach.transpose(0, 2, 1), np.broadcast_to(last, (len(base), n, 1)))[:, :, 0]
    row = np.zeros_like(power)
    for j in range(n + 1):
        row = row - polynomial[:, n - j, None] * power
        if j < n:
            power = (power[:, None, :] @ base)[:, 0, :]
    return row


def _times(left: NDArray[np.complex128], right: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Products of polynomials, row by row."""
    found = np.zeros((len(left), left.shape[1] + right.shape[1] - 1), dtype=complex)
    for j in range(right.shape[1]):
        found[:, j : j + left.shape[1]] += left * right[:, j, None]
    return found

"""Where searches begin: answers of the cell problem, and placed modes, random and clustered.

For several kinds the cell problems are solved in turn with the sizes the neighbours promised last (Gauss-Seidel on the
design operator, theory section 5). Everything here is a suggestion; a solver that fails only leaves fewer of them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.local.coordinates import Coordinates
from synth.local.plant import Field, Plant

Array = NDArray[np.float64]


def lmi_starts(field: Field, rounds: int = 3) -> list[tuple[Array, ...]]:
    """Scaled gains from the cell problems: with the declared disturbances from rest, and nearly without."""
    from synth.local.cell import CellData, best_cell

    found: list[tuple[Array, ...]] = []
    offers = field.strengths.shape[1]
    for factor, start in ((1.0, 0.0), (1e-3, 1.0)):
        z = np.full(offers, start)
        for _ in range(rounds):
            gains: list[Array] = []
            for i, plant in enumerate(field.plants):
                data = CellData(
                    A=plant.A, B=plant.B, D=plant.D, E=factor * plant.E, H=plant.H[: plant.offers],
                    intake=field.strengths[field.takes(i)] @ z, limit=plant.limit, size=np.ones(plant.offers),
                    slowest=max(field.slowest, 1e-6), fastest=field.fastest,
                )  # fmt: skip
                try:
                    answer = best_cell(data)
                except (InputError, np.linalg.LinAlgError):
                    answer = None
                if answer is None:
                    break
                own = field.rows(i)
                z[own] = 0.5 * (z[own] + answer.sizes) if z[own].any() else answer.sizes
                gains.append(project(plant, answer.K))
            if len(gains) < len(field.plants):
                break
            found.append(tuple(gains))
            if factor < 1.0:
                z = z / max(float(z.max()), 1e-12)
    return found


def project(plant: Plant, by_state: Array) -> Array:
    """The allowed K whose K C is closest to the given state feedback (inputs, states), row by row."""
    K = np.zeros(plant.allowed.shape)
    for row in range(len(K)):
        usable = np.nonzero(plant.allowed[row])[0]
        if usable.size:
            K[row, usable] = np.linalg.lstsq(plant.C[usable].T, by_state[row], rcond=None)[0]
    return np.clip(K, -plant.bound, plant.bound)


def random_start(where: Coordinates, rng: np.random.Generator, clustered: bool) -> Array:
    """A search vector with placed modes: spread at random, or gathered around one point of the region."""
    n = len(where.plant.A)
    modes = _modes(where, rng, n, clustered)
    tail = rng.normal(0.0, 0.3, len(where.free))
    if where.placed is not None:
        if clustered:
            return np.concatenate((where.angles(modes), 0.1 * tail))
        return np.concatenate((rng.uniform(0.1, 1.47, len(where.sensors)), tail))
    by_state = _placed(where.plant, modes)
    if by_state is None:
        return tail
    return where.point(project(where.plant, by_state))


def _modes(where: Coordinates, rng: np.random.Generator, n: int, clustered: bool) -> NDArray[np.complex128]:
    """n modes inside the region, closed under conjugation."""
    a, w = where.slowest, where.fastest
    if clustered:
        centre = -(a + (w - a) * rng.uniform(0.1, 0.98))
        return (centre * (1 - 0.02 * np.arange(n))).astype(np.complex128)
    found: list[complex] = []
    while len(found) < n:
        real = -(a + (w - a) * rng.uniform())
        if n - len(found) >= 2 and rng.uniform() < 0.6:
            most = np.sqrt(max(w * w - real * real, 0.0))
            value = complex(real, most * rng.uniform())
            found.extend((value, value.conjugate()))
        else:
            found.append(complex(real))
    return np.array(found)


def _placed(plant: Plant, modes: NDArray[np.complex128]) -> Array | None:
    """State feedback (inputs, states) that places the modes; None where scipy's method does not apply."""
    from scipy.signal import place_poles

    with np.errstate(all="ignore"):
        try:
            import warnings

            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                spread = modes * (1 + 1e-3 * np.arange(len(modes)) * (modes.imag == 0))
                found: Array = -np.asarray(place_poles(plant.A, plant.B, spread).gain_matrix)
        except (ValueError, np.linalg.LinAlgError):
            return None
    return found if np.all(np.isfinite(found)) else None

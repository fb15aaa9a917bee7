"""Where searches begin: answers of the cell problem, and placed modes, random and clustered.

For several kinds the cell problems are solved in turn with the sizes the neighbours promised last (Gauss-Seidel on the
design operator, theory section 5). Everything here is a suggestion; a solver that fails only leaves fewer of them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.local.coordinates import Coordinates
from synth.local.core import core_of, regulator, with_core_feedback
from synth.local.plant import Field, Plant

Array = NDArray[np.float64]


_SHARED = 6  # so many plants of a gain group enter one linear matrix inequality
_PRICES = (0.03, 0.3, 3.0)  # how dear effort is in the Riccati starts, and how little sensors are trusted


def lmi_starts(field: Field, rounds: int = 3) -> list[tuple[Array, ...]]:
    """Scaled gains from the cell problems: with the declared disturbances from rest, and nearly without.

    Kinds of one gain group share one Q (theory (18)) where they have equally many states. A unit whose controller has
    an estimator or memory is solved as it is without them, and its state feedback acts on what an estimator knows.
    """
    found: list[tuple[Array, ...]] = []
    for factor, start in ((1.0, 0.0), (1e-3, 1.0)):
        z = np.full(field.intake.size, start)
        for _ in range(rounds):
            fed: dict[int, Array] = {}
            for group in field.groups:
                solved = _group_cell(field, group, factor, z)
                if solved is None:
                    break
                by_state, sizes = solved
                for i, own in zip(group, sizes, strict=True):
                    rows = field.intake.rows[i]
                    z[rows] = 0.5 * (z[rows] + own) if z[rows].any() else own
                    fed[i] = by_state
            if len(fed) < len(field.plants):
                break
            found.extend(spread(field, [fed[i] for i in range(len(field.plants))]))
            if factor < 1.0:
                z = z / max(float(z.max()), 1e-12)
    return found


def _group_cell(
    field: Field, group: tuple[int, ...], factor: float, z: Array
) -> tuple[Array, tuple[Array, ...]] | None:
    """State feedback of the cores of one gain group, and the sizes of what each of its plants offers.

    A plant that many units share hears what arrives at most. Of a group of more than ``_SHARED`` plants a few stand for
    all; the others then promise the largest of their sizes.
    """
    from synth.local.cell import CellData, best_cell
    from synth.local.shared_cell import best_shared

    units = []
    standing = group if len(group) <= _SHARED else tuple(group[k] for k in _spaced(len(group), _SHARED))
    for i in standing:
        plant, core = field.plants[i], core_of(field.plants[i])
        units.append(
            CellData(
                A=plant.A[np.ix_(core.fed, core.fed)],
                B=plant.B[np.ix_(core.fed, core.inputs)],
                D=plant.D[core.fed],
                E=factor * plant.E[core.fed],
                H=plant.H[: plant.offers, core.fed],
                intake=field.arriving(i, z),
                limit=plant.limit[core.inputs],
                size=np.ones(plant.offers),
                slowest=max(field.slowest, 1e-6),
                fastest=field.fastest,
            )
        )
    try:
        if len(units) > 1 and len({unit.B.shape for unit in units}) == 1:
            shared = best_shared(units)
            return None if shared is None else (shared.K, _all_sizes(field, group, standing, shared.sizes))
        answers = [best_cell(unit) for unit in units]
    except (InputError, np.linalg.LinAlgError):
        return None
    if any(answer is None for answer in answers):
        return None
    sizes = tuple(answer.sizes for answer in answers if answer is not None)
    by_state = answers[0].K if answers[0] is not None else np.zeros((0, 0))
    return by_state, _all_sizes(field, group, standing, sizes)


def _spaced(count: int, wanted: int) -> list[int]:
    return [int(k) for k in np.unique(np.linspace(0, count - 1, wanted).round())]


def _all_sizes(
    field: Field, group: tuple[int, ...], standing: tuple[int, ...], sizes: tuple[Array, ...]
) -> tuple[Array, ...]:
    """Sizes of every plant of the group, from those of the plants that were solved."""
    known = dict(zip(standing, sizes, strict=True))
    most: dict[int, Array] = {}
    for size in sizes:
        most[len(size)] = np.maximum(size, most.get(len(size), np.zeros(len(size))))
    return tuple(known[i] if i in known else most.get(field.plants[i].offers, np.ones(1)) for i in group)


def riccati_starts(field: Field) -> list[tuple[Array, ...]]:
    """Scaled gains from regulators of the cores, cheap to dear, each with estimators where the controller has them."""
    found: list[tuple[Array, ...]] = []
    for price in (0.03, 0.1, 0.3, 1.0, 3.0, 10.0):
        fed: list[Array] = []
        for plant in field.plants:
            core = core_of(plant)
            heads = np.concatenate((plant.H[: plant.offers, core.fed], 0.1 * np.eye(len(core.fed))))
            A, B = plant.A[np.ix_(core.fed, core.fed)], plant.B[np.ix_(core.fed, core.inputs)]
            by_state = regulator(A, B, heads, price)
            if by_state is None:
                break
            fed.append(by_state)
        if len(fed) == len(field.plants):
            found.extend(spread(field, fed))
    return found


def spread(field: Field, fed: list[Array]) -> list[tuple[Array, ...]]:
    """Gains that carry out a state feedback of every core: projected on the sensors, or by way of estimators."""
    cores = [core_of(plant) for plant in field.plants]
    wide = any(len(core.estimates) or len(core.memory) for core in cores)
    found = []
    for price in _PRICES if wide else _PRICES[:1]:
        gains: list[Array] = []
        for plant, core, by_state in zip(field.plants, cores, fed, strict=True):
            if len(core.estimates) or len(core.memory):
                whole = with_core_feedback(plant, core, by_state, price, field.omega)
                if whole is None:
                    break
                gains.append(np.clip(whole, -plant.bound, plant.bound))
            else:
                everything = np.zeros((plant.B.shape[1], len(plant.A)))
                everything[np.ix_(core.inputs, core.fed)] = by_state
                gains.append(project(plant, everything))
        if len(gains) == len(field.plants):
            found.append(tuple(gains))
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

"""The plant inside a widened one, and how a state feedback of it becomes gains of the whole controller.

A controller with states of its own is started as textbooks build it: a state feedback K x^ on the estimate of an
estimator x^' = (A + B K - L C) x^ + L y, with L from a Riccati equation (Kalman and Bucy 1961); a compensator of lower
order from its balanced truncation (Moore 1981). Everything is a start for the search and claims nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synth.local.plant import Plant

Array = NDArray[np.float64]
Places = NDArray[np.intp]


@dataclass(frozen=True)
class Core:
    """Places in the plant: ``states`` the unit's own, ``integrals`` beside them, ``inputs`` that actuators carry out.

    ``estimates`` and ``memory`` are the other states of the controller.
    """

    states: Places
    integrals: Places
    estimates: Places
    memory: Places
    inputs: Places

    @property
    def fed(self) -> Places:
        """The states that a state feedback of the core uses: the unit's own, then the integrals."""
        return np.concatenate((self.states, self.integrals))


def core_of(plant: Plant) -> Core:
    """Which states and inputs of the plant are the unit's own and which its controller's."""
    kind = plant.kind
    record = kind.controller
    sorts: tuple[tuple[str, ...], ...] = ((), (), ())
    inside: tuple[str, ...] = ()
    if record is not None:
        sorts, inside = (tuple(record.integrals), tuple(record.estimates), record.memory), record.inputs
    made = {name for sort in sorts for name in sort}
    own = [i for i, s in enumerate(kind.states) if s.name not in made]
    parts = [[kind.index("states", name) for name in sort] for sort in sorts]
    inputs = [i for i, a in enumerate(kind.inputs) if a.name not in inside]
    return Core(*(np.array(part, dtype=np.intp) for part in (own, *parts, inputs)))


def regulator(A: Array, B: Array, weight: Array, price: float) -> Array | None:
    """State feedback u = K x that minimises the integral of |weight x|^2 + price^2 |u|^2; None where there is none."""
    from scipy.linalg import solve_continuous_are

    try:
        P = solve_continuous_are(A, B, weight.T @ weight + 1e-8 * np.eye(len(A)), price**2 * np.eye(B.shape[1]))
    except (ValueError, np.linalg.LinAlgError):
        return None
    K: Array = -(B.T @ P) / price**2
    return K if np.all(np.isfinite(K)) else None


def estimator_gain(A: Array, C: Array, noise: Array, price: float) -> Array | None:
    """L of x^' = A x^ + L (y - C x^), the dual of ``regulator``; None where there is none."""
    dual = regulator(A.T, C.T, noise.T, price)
    return None if dual is None else -dual.T


def with_core_feedback(plant: Plant, core: Core, by_state: Array, price: float, omega: float) -> Array | None:
    """Scaled gains that carry out the feedback ``by_state`` (inputs of the core, fed states) of scaled states.

    ``price`` tells how little the sensors are trusted; None where no estimator exists or its order does not fit.
    """
    record = plant.kind.controller
    if record is None or not (len(core.estimates) or len(core.memory)):
        return None
    n = len(core.states)
    kind = plant.kind
    names = record.corrected or tuple(s.name for s in kind.sensors if s.name not in record.sensors)
    reads = np.array([kind.index("sensors", name) for name in names], dtype=np.intp)
    A, C = plant.A[np.ix_(core.states, core.states)], plant.C[np.ix_(reads, core.states)]
    noise = np.concatenate(
        (plant.B[np.ix_(core.states, core.inputs)], plant.D[core.states], plant.E[core.states]), axis=1
    )
    L = estimator_gain(A, C, noise, price)
    if L is None:
        return None
    K = np.zeros(plant.allowed.shape)  # in the user's units
    u, x, y = plant.input_unit, plant.state_unit[core.states], plant.sensor_unit
    for position, place in enumerate(core.integrals):
        column = kind.index("sensors", kind.states[place].name)
        K[core.inputs, column] = u[core.inputs] * by_state[:, n + position] / plant.state_unit[place]
    if len(core.estimates):
        for k, place in enumerate(core.estimates):
            name = kind.states[place].name
            K[core.inputs, kind.index("sensors", name)] = u[core.inputs] * by_state[:, k] / x[k]
            row = kind.index("inputs", f"{record.estimates[name]}_correction")
            for j, sensor in enumerate(names):
                K[row, kind.index("sensors", f"{sensor}_innovation")] = x[k] * omega * L[k, j] / y[reads[j]]
        return plant.to_scaled(K)
    order = len(core.memory)
    B = plant.B[np.ix_(core.states, core.inputs)]
    loop = A + B @ by_state[:, :n] - L @ C
    balanced = _of_order(loop, np.concatenate((L, B @ by_state[:, n:]), axis=1), by_state[:, :n], order)
    if balanced is None:
        return None
    inner, into, out = balanced
    columns = np.array([kind.index("sensors", name) for name in record.memory], dtype=np.intp)
    rows = np.array([kind.index("inputs", f"{name}_rate") for name in record.memory], dtype=np.intp)
    K[np.ix_(core.inputs, columns)] = u[core.inputs, None] * out
    K[np.ix_(rows, columns)] = omega * inner
    K[np.ix_(rows, reads)] = omega * into[:, : len(reads)] / y[reads]
    for position, place in enumerate(core.integrals):
        column = kind.index("sensors", kind.states[place].name)
        K[rows, column] = omega * into[:, len(reads) + position] / plant.state_unit[place]
    return plant.to_scaled(K)


def _of_order(A: Array, B: Array, C: Array, order: int) -> tuple[Array, Array, Array] | None:
    """A compensator of the given order: padded with decaying states, or its balanced truncation (if it is stable)."""
    from scipy.linalg import cholesky, solve_continuous_lyapunov, svd

    n = len(A)
    if order >= n:
        wide = np.zeros((order, order))
        wide[:n, :n] = A
        wide[range(n, order), range(n, order)] = -0.3
        into, out = np.zeros((order, B.shape[1])), np.zeros((C.shape[0], order))
        into[:n], out[:, :n] = B, C
        # a state that nothing reaches and nothing reads has no slope: let it take a little part
        into[n:] = 0.01
        return wide, into, out
    if np.linalg.eigvals(A).real.max() >= -1e-9:
        return None
    try:
        reach = cholesky(solve_continuous_lyapunov(A, -B @ B.T) + 1e-12 * np.eye(n), lower=True)
        seen = cholesky(solve_continuous_lyapunov(A.T, -C.T @ C) + 1e-12 * np.eye(n), lower=True)
    except np.linalg.LinAlgError:
        return None
    left, values, right = svd(seen.T @ reach)
    half = 1 / np.sqrt(values[:order])
    T = reach @ right[:order].T * half
    back = (half[:, None] * left[:, :order].T) @ seen.T
    return back @ A @ T, back @ B, C @ T

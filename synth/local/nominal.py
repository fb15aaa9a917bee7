"""Peaks with the links as written: fresh values, written strengths, the worst disturbance of every unit at once.

The network of a pattern is a function of the phase theta from cell to cell; on a torus of enough cells the response of
one cell to a short push at another is the inverse Fourier transform of the cell's matrices. The peak of a signal is the
integral of the absolute response, summed over all disturbances of all cells (the induced norm of theory (1) for the
network as it stands). These are estimates for comparison with the guaranteed peaks; nothing is claimed from them.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from synth.gain import ClosedUnit
from synth.network.model import Network

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]
Key = tuple[str, str, str]  # kind, group, signal

_CELLS = {1: 64, 2: 24, 3: 10}  # around the torus, per dimension
_STEPS = 4000
_LEFT = 1e-6  # the run ends when this part of the largest response is left


def nominal_peaks(network: Network, units: Sequence[ClosedUnit], keys: Sequence[Key]) -> list[float]:
    """Estimated peak of each signal under the declared disturbances from rest; infinite where the network grows.

    ``units`` are the closed kinds in network order. Steps are short against the fastest mode; the torus has 64 cells
    on a line (24 and 10 a side in two and three dimensions), so slow waves that go farther are cut off.
    """
    count = _CELLS[network.dimension]
    axes = [2 * np.pi * np.arange(count) / count] * network.dimension
    phases = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, network.dimension)
    A, E, rows, direct = _matrices(network, units, keys, phases)
    values = np.linalg.eigvals(A) if A.shape[1] else np.zeros((1, 1))
    if A.shape[1] == 0 or E.shape[2] == 0:
        return [float(v) for v in np.abs(_over_cells(direct, count, network.dimension)).sum(axis=(0, 2))]
    slow, fast = -float(values.real.max()), float(np.abs(values).max())
    if slow <= 0:
        return [float("inf")] * len(keys)
    step = max(0.05 / fast, min(-np.log(_LEFT) / slow, 1e4 / fast) / _STEPS)
    step = min(step, 0.3 / fast)
    jump, held = _exponentials(A, E, step)
    total = np.abs(_over_cells(direct, count, network.dimension)).sum(axis=(0, 2))
    state, most = held, 0.0
    for _ in range(8 * _STEPS):
        seen = np.abs(_over_cells(rows @ state, count, network.dimension)).sum(axis=(0, 2))
        total = total + seen
        most = max(most, float(seen.max(initial=0.0)))
        if float(np.abs(state).max()) <= _LEFT * float(np.abs(held).max()):
            break
        state = jump @ state
    return [float(v) for v in total]


def _over_cells(values: Complex, count: int, dimension: int) -> Array:
    """From phases (phase, signal, disturbance) to cells (cell, signal, disturbance)."""
    shape = (*([count] * dimension), *values.shape[1:])
    cells = np.fft.ifftn(values.reshape(shape), axes=tuple(range(dimension)))
    return np.asarray(cells.real.reshape(-1, *values.shape[1:]), dtype=float)


def _exponentials(A: Complex, E: Complex, step: float) -> tuple[Complex, Complex]:
    """e^{A h} and its integral times E, for every phase, by Taylor terms (the step is short)."""
    size = A.shape[1]
    unit = np.broadcast_to(np.eye(size, dtype=complex), A.shape)
    series = unit.copy()
    for k in range(14, 1, -1):
        series = unit + (A * step) @ series / k
    gamma = series * step
    return unit + A @ gamma, gamma @ E


def _matrices(
    network: Network, units: Sequence[ClosedUnit], keys: Sequence[Key], phases: Array
) -> tuple[Complex, Complex, Complex, Complex]:
    """x' = A x + E w, s = rows x + direct w for every phase; disturbances in parts of their declared peaks."""
    n = np.cumsum([0, *(len(u.kind.states) for u in units)])
    takes = np.cumsum([0, *(len(u.kind.takes) for u in units)])
    offers = np.cumsum([0, *(len(u.kind.offers) for u in units)])
    w = np.cumsum([0, *(len(u.kind.disturbances) for u in units)])
    place = {u.kind.name: i for i, u in enumerate(units)}

    def blocks(name: str, down: NDArray[np.intp], across: NDArray[np.intp]) -> Array:
        found = np.zeros((int(down[-1]), int(across[-1])))
        for i, unit in enumerate(units):
            found[down[i] : down[i + 1], across[i] : across[i + 1]] = getattr(unit, name).floats()
        return found

    A, D, H, F = blocks("A", n, n), blocks("D", n, takes), blocks("H", offers, n), blocks("F", offers, takes)
    peaks = np.array([float(d.peak) for u in units for d in u.kind.disturbances])
    E, Fw = blocks("E", n, w) * peaks, blocks("Fw", offers, w) * peaks
    S = np.zeros((len(phases), int(takes[-1]), int(offers[-1])), dtype=complex)
    for link in network.links:
        if link.sort != "link":
            continue  # tolerances and nonlinear terms at their middle
        i, j = place[link.kind], place[link.source_kind]
        row = int(takes[i]) + units[i].kind.index("takes", link.take)
        column = int(offers[j]) + units[j].kind.index("offers", link.offer)
        turn = np.exp(1j * phases @ np.array(link.at, dtype=float)) if link.at else np.ones(len(phases))
        S[:, row, column] += float(link.strength) * turn
    V = np.linalg.solve(np.eye(int(takes[-1])) - S @ F, S) if int(takes[-1]) else S
    rows, direct = np.zeros((len(keys), int(n[-1]))), np.zeros((len(keys), int(w[-1])))
    through = np.zeros((len(keys), int(takes[-1])))
    for k, (kind, group, name) in enumerate(keys):
        i = place[kind]
        at = units[i].kind.index(group, name)
        mine = slice(int(n[i]), int(n[i + 1]))
        if group == "states":
            rows[k, mine.start + at] = 1.0
        elif group == "offers":
            rows[k], direct[k], through[k] = H[int(offers[i]) + at], Fw[int(offers[i]) + at], F[int(offers[i]) + at]
        else:
            rows[k, mine] = units[i].U.floats()[at]
            through[k, int(takes[i]) : int(takes[i + 1])] = units[i].UV.floats()[at]
    from_x, from_w = V @ H, V @ Fw
    return (
        np.asarray(A + D @ from_x, complex), np.asarray(E + D @ from_w, complex),
        np.asarray(rows + through @ from_x, complex), np.asarray(direct + through @ from_w, complex),
    )  # fmt: skip


__all__ = ["nominal_peaks"]

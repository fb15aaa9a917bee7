"""Kernels of the running units on the grid: what an input held for one step adds to a signal some steps later.

Theory (1): the peak gain is the integral of |R e^{At} D|. For inputs held over steps of length h it is sum_j |R Phi^j
Gamma|, which
is attained exactly by the sign of the time-reversed kernel and tends to the integral from below as h -> 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.simulate.model import Array, Section, System


@dataclass(frozen=True)
class Line:
    """A signal of one kind as rows over the stacked cell: s = x-row x + v-row v + w-row w; role 'state', 'offer' or
    'actuator'.
    """

    kind: str
    role: str
    name: str
    unit: str
    x: Array
    v: Array
    w: Array

    @property
    def label(self) -> str:
        """``kind.signal`` with the role where it is needed to tell two apart."""
        return f"{self.kind}.{self.name}" if self.role == "state" else f"{self.kind}.{self.name} ({self.role})"


ROLES = {"states": "state", "offers": "offer", "inputs": "actuator"}


def lines_of(section: Section, group: str) -> list[Line]:
    """All signals of ``group`` ('states', 'offers', 'inputs') of one cell, in stacked order."""
    block = section.block
    n, nv, nw, *_ = block.sizes
    rows = {
        "states": (np.eye(n), np.zeros((n, nv)), np.zeros((n, nw))),
        "offers": (block.H, block.F, block.Fw),
        "inputs": (block.Yx, block.Yv, block.Yw),
    }[group]
    names = section.numbers(group)
    return [Line(k, ROLES[group], s, u, rows[0][i], rows[1][i], rows[2][i]) for i, (k, s, u) in enumerate(names)]


def targets(section: Section, groups: tuple[str, ...]) -> list[tuple[str, list[Line]]]:
    """What to attack, one signal per kind at once (kinds do not disturb each other inside a cell): label and one line
    per kind.

    The j-th target takes the j-th signal of every kind, counted round where a kind has fewer.
    """
    by_kind: dict[str, list[Line]] = {c.kind.name: [] for c in section.closed}
    for group in groups:
        for line in lines_of(section, group):
            by_kind[line.kind].append(line)
    most = max((len(lines) for lines in by_kind.values()), default=0)
    found = []
    for j in range(most):
        chosen = [lines[j % len(lines)] for lines in by_kind.values() if lines]
        found.append((" and ".join(line.label for line in chosen), chosen))
    return found


def stack_rows(lines: list[Line]) -> tuple[Array, Array, Array]:
    """(Rx, Rv, Rw) with one row per line."""
    return np.array([s.x for s in lines]), np.array([s.v for s in lines]), np.array([s.w for s in lines])


def held_maps(block: System, h: float) -> tuple[Array, Array, Array]:
    """(Phi, Gamma_v, Gamma_w): x(t+h) = Phi x + Gamma_v v + Gamma_w w for inputs held over one step of one cell."""
    from scipy.linalg import expm

    n, nv, nw, *_ = block.sizes
    whole = np.zeros((n + nv + nw, n + nv + nw))
    whole[:n] = np.hstack([block.A, block.D, block.E]) * h
    top = expm(whole)[:n]
    return top[:, :n], top[:, n : n + nv], top[:, n + nv :]


def held_kernels(block: System, rows: tuple[Array, Array, Array], h: float, steps: int) -> tuple[Array, Array, Array]:
    """Kx[j, row, state] = R Phi^j (j <= steps); Kv, Kw[j, row, input]: from the step that ends j steps before (j <
    steps).

    The feed-through of the signal counts in the last step, j = 0: the signal is read just before that step ends.
    Kernels of a
    growing unit are cut where they pass 1e100.
    """
    Rx, Rv, Rw = rows
    Phi, Gv, Gw = held_maps(block, h)
    Kx = np.zeros((steps + 1, *Rx.shape))
    Kx[0] = Rx
    for j in range(steps):
        Kx[j + 1] = Kx[j] @ Phi
        if j % 64 == 0 and np.abs(Kx[j + 1]).max(initial=0.0) > 1e100:
            break
    Kv, Kw = Kx[:-1] @ Gv, Kx[:-1] @ Gw
    if steps:
        Kv[0] += Rv
        Kw[0] += Rw
    return Kx, Kv, Kw


def horizon(section: Section, tail: float = 3e3) -> float:
    """Seconds until the slowest mode of the closed units has fallen (or, in a growing unit, risen) by ``tail``."""
    modes = section.eigenvalues()
    if not modes.size:
        return 1.0
    fastest = float(np.abs(modes).max())
    rate = max(abs(float(modes.real.max())), 1e-3 * fastest, 1e-9)
    return float(np.log(tail) / rate)

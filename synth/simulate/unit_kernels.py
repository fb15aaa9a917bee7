"""Kernels of all specifications of a section at once, and numbers per specification spread over its units.

Theory (1): the worst input against a signal is the sign of its time-reversed kernel; units of one specification share
it. Arrays carry the specification as an axis and are padded with zeros where units have fewer numbers.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from synth.simulate.model import Array
from synth.simulate.units import Units

GROUPS = ("states", "offers", "inputs")
ROLES = {"states": "", "offers": " (offer)", "inputs": " (actuator)"}
MOST_NUMBERS = 30_000_000  # of one table of kernels; specifications beyond that are not attacked by themselves


@dataclass(frozen=True, eq=False)
class Places:
    """Where the numbers of one group lie: stacked row, unit, and position within the unit, one entry per number."""

    row: Any
    unit: Any
    local: Any
    shape: tuple[int, int]

    @staticmethod
    def of(units: Units, group: str) -> Places:
        """For 'states', 'takes', 'disturbances'."""
        section = units.section
        assert section.where is not None
        ranges = getattr(section.shape, group)
        rows, cells, local = [np.zeros(0, dtype=int)], [np.zeros(0, dtype=int)], [np.zeros(0, dtype=int)]
        for kind, (low, high) in ranges.items():
            where = section.where[kind]
            for k in range(high - low):
                rows.append(np.full(where.size, low + k))
                cells.append(where)
                local.append(np.full(where.size, k))
        height = max((high for _, high in ranges.values()), default=0)
        return Places(np.concatenate(rows), np.concatenate(cells), np.concatenate(local), (height, section.cells))

    def spread(self, table: Array, spec_of: Any) -> Array:
        """[number, unit, ...] from a table [specification, number within the unit, ...]."""
        found = np.zeros((*self.shape, *table.shape[2:]))
        found[self.row, self.unit] = table[spec_of[self.unit], self.local]
        return found


@dataclass(frozen=True, eq=False)
class Target:
    """One signal per form, attacked at once: its label, and rows (states, takes, disturbances) per specification."""

    label: str
    x: Array
    v: Array
    w: Array


def unit_targets(units: Units, groups: tuple[str, ...] = GROUPS) -> list[Target]:
    """The j-th target takes the j-th signal of every form, counted round where a form has fewer."""
    specs = units.specs
    n = max(unit.A.shape[0] for unit in specs)
    takes = max(1, *(unit.D.shape[1] for unit in specs))
    outside = max(1, *(unit.E.shape[1] for unit in specs))
    signals = []
    for unit in specs:
        rows = {
            "states": (
                np.eye(unit.A.shape[0]),
                np.zeros((unit.A.shape[0], takes)),
                np.zeros((unit.A.shape[0], outside)),
            ),
            "offers": (unit.H.floats(), unit.F.floats(), unit.Fw.floats()),
            "inputs": (unit.U.floats(), unit.UV.floats(), np.zeros((unit.U.shape[0], outside))),
        }
        mine = []
        for group in groups:
            for i, signal in enumerate(getattr(unit.kind, group)):
                mine.append((f"{signal.name}{ROLES[group]}", *(table[i] for table in rows[group])))
        signals.append(mine)
    found = []
    form = units.form_of[np.unique(units.spec_of, return_index=True)[1]]
    for j in range(max((len(mine) for mine in signals), default=0)):
        x, v, w = np.zeros((len(specs), n)), np.zeros((len(specs), takes)), np.zeros((len(specs), outside))
        labels: dict[int, str] = {}
        for s, mine in enumerate(signals):
            if not mine:
                continue
            name, rx, rv, rw = mine[j % len(mine)]
            x[s, : rx.size], v[s, : rv.size], w[s, : rw.size] = rx, rv, rw
            labels.setdefault(int(form[s]), f"{units.section.closed[int(form[s])].kind.name}.{name}")
        found.append(Target(" and ".join(labels.values()), x, v, w))
    return found


@dataclass(frozen=True, eq=False)
class Kernels:
    """One-step maps of all specifications for inputs held over a step of ``h`` seconds."""

    Phi: Array
    Gv: Array
    Gw: Array
    h: float

    @staticmethod
    def of(units: Units, h: float) -> Kernels:
        """From the folded units; padded to the largest."""
        from scipy.linalg import expm

        specs = units.specs
        n = max(unit.A.shape[0] for unit in specs)
        takes = max(1, *(unit.D.shape[1] for unit in specs))
        outside = max(1, *(unit.E.shape[1] for unit in specs))
        whole = np.zeros((len(specs), n + takes + outside, n + takes + outside))
        for s, unit in enumerate(specs):
            m = unit.A.shape[0]
            whole[s, :m, :m] = unit.A.floats()
            whole[s, :m, n : n + unit.D.shape[1]] = unit.D.floats()
            whole[s, :m, n + takes : n + takes + unit.E.shape[1]] = unit.E.floats()
        top = expm(whole * h)[:, :n]
        return Kernels(top[:, :, :n], top[:, :, n : n + takes], top[:, :, n + takes :], h)

    def against(self, target: Target, steps: int) -> tuple[Array, Array, Array]:
        """Kx[j, spec, state] for j <= steps, Kv and Kw[j, spec, input] from the step that ends j steps before."""
        Kx = np.zeros((steps + 1, *target.x.shape))
        Kx[0] = target.x
        for j in range(steps):
            Kx[j + 1] = np.matmul(Kx[j][:, None, :], self.Phi)[:, 0]
            if j % 64 == 0 and np.abs(Kx[j + 1]).max(initial=0.0) > 1e100:
                break
        Kv = np.einsum("jsn,snt->jst", Kx[:-1], self.Gv)
        Kw = np.einsum("jsn,snt->jst", Kx[:-1], self.Gw)
        if steps:
            Kv[0] += target.v
            Kw[0] += target.w
        return Kx, Kv, Kw

    def affordable(self, steps: int) -> bool:
        """Whether a table of so many steps is within reason."""
        return bool(steps * self.Phi.shape[0] * (self.Phi.shape[1] + 2) <= MOST_NUMBERS)

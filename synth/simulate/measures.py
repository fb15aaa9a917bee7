"""What is measured in a run, and the comparison of every sample with what the certificate guarantees.

Checked at every sample of every unit (maximum norm over the unit's states, theory section 2 and 3c):

    |x_i(t)| <= C e^{-alpha t} X0 + G sup_{s<=t} |w(s)|          and, from rest, each state, offer and command against
    its peak.

With an initial size up to the certificate's validity.X0 no signal may reach a limit it declares. The command is the one
computed,
before the actuator cuts it. A sample counts as a violation beyond a relative 1e-9 (rounding of the simulation), once
per unit.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from synth.simulate.kernels import ROLES, Line, lines_of
from synth.simulate.model import Array, Section
from synth.simulate.stepper import Block

SLACK = 1e-9
RUNAWAY = 1e6  # a run stops once a signal is this many times its bound
ABSOLUTE = 1e12  # the same where there is no bound, in declared units


def number(value: Any) -> float:
    """A float from what a certificate may carry: numbers, exact texts, 'inf', None (no bound)."""
    if value is None:
        return math.inf
    if isinstance(value, str) and "/" in value:
        upper, lower = value.split("/")
        return float(upper) / float(lower)
    return float(value)


@dataclass(frozen=True)
class Claim:
    """What a proven certificate guarantees, as arrays in the stacked order of one cell ([number], or [number, unit]).

    ``peaks`` and ``limits``: role -> bound per signal (inf: none), declared units; peaks from rest under the declared
    disturbances.
    ``X0``: initial size that keeps every limit together with them; ``w``: size of disturbances, from rest, that keeps
    every limit;
    ``factor``: the same as a multiple of the declared peaks. ``alpha`` in 1/s.
    """

    C: float
    alpha: float
    G: float
    peaks: dict[str, Array]
    limits: dict[str, Array]
    X0: float
    w: float
    factor: float


def read_claim(certificate: Any, section: Section) -> Claim | None:
    """The claim of a proven certificate, or None: an unproven one guarantees nothing that could be violated."""
    if certificate is None or not certificate.proven:
        return None
    stated = {(p.kind, p.role, p.signal): p for p in certificate.peaks}
    peaks, limits = {}, {}
    for group, role in ROLES.items():
        if section.names is not None:
            peaks[role], limits[role] = _by_unit(section, stated, group, role)
            continue
        found = [stated.get((kind, role, name)) for kind, name, _ in section.numbers(group)]
        peaks[role] = np.array([math.inf if p is None else number(p.value) for p in found])
        limits[role] = np.array([math.inf if p is None else number(getattr(p, "limit", None)) for p in found])
    constants, validity = certificate.constants, certificate.validity
    return Claim(
        number(constants.C), number(constants.alpha), number(constants.G), peaks, limits,
        number(_entry(validity, "X0")), number(_entry(validity, "w")), number(_entry(validity, "factor")),
    )  # fmt: skip


def _by_unit(section: Section, stated: dict[Any, Any], group: str, role: str) -> tuple[Array, Array]:
    """Peaks and limits [number, unit]: what is stated for a unit by its name, else for its kind (inf: nothing)."""
    assert section.names is not None and section.where is not None
    lines = section.numbers(group)
    found = np.full((2, len(lines), section.cells), math.inf)
    for i, (form, signal, _) in enumerate(lines):
        for unit in section.where[form].tolist():
            name, kind = section.names[unit]
            p = stated.get((name, role, signal)) or stated.get((kind, role, signal)) or stated.get((form, role, signal))
            if p is not None:
                found[:, i, unit] = number(p.value), number(getattr(p, "limit", None))
    return found[0], found[1]


def _entry(holder: Any, name: str) -> Any:
    """A field of an object or a mapping; None where it is not given."""
    return holder.get(name) if hasattr(holder, "get") else getattr(holder, name, None)


@dataclass(frozen=True)
class Terms:
    """On what terms a run is checked: initial size, peaks as a multiple of those stated (None: not comparable), limits
    or not.

    ``covered``: the run keeps to validity, so that the claim itself excludes saturation; any other run counts until it
    saturates.
    """

    X0: float = 0.0
    scale: float | None = None
    limits: bool = False
    covered: bool = True


@dataclass
class Watch:
    """Accumulates peaks and comparisons for the runs of one march; feed it every Block, then read ``outcome``."""

    section: Section
    claim: Claim | None
    terms: Sequence[Terms]
    saturation: Array | None = None  # actuator limits in force, None: no actuator saturates
    first_unit: int = 0
    peaks: dict[str, Array] = field(default_factory=dict)  # role -> [number, cell, run]

    def __post_init__(self) -> None:
        """Start with nothing seen."""
        runs = len(self.terms)
        block, cells = self.section.block, self.section.cells
        n, _, _, _, nz, ny = block.sizes
        self.peaks = {"state": np.zeros((n, cells, runs)), "offer": np.zeros((nz, cells, runs))}
        self.peaks["actuator"] = np.zeros((ny, cells, runs))
        self.sup_w, self.G_ratio, self.envelope_ratio = np.zeros(runs), np.zeros(runs), np.zeros(runs)
        self.peak_ratio, self.violations = np.zeros(runs), np.zeros(runs, dtype=np.int64)
        self.saturated_at, self.stopped = np.full(runs, np.inf), np.full(runs, np.inf)  # times in s, inf: never
        self.last_out = np.zeros(runs)  # last time at which a state was above 2 % of its peak so far
        self.bounds = self._bounds() if self.claim is not None else {}

    def _bounds(self) -> dict[str, Array]:
        """role -> bound [number, 1, run]: the peak times the run's scale, or the limit, whichever is smaller."""
        assert self.claim is not None
        found = {}
        for role, stated in self.claim.peaks.items():
            columns = []
            for t in self.terms:
                peak = stated * t.scale if t.scale is not None else np.full_like(stated, np.inf)
                columns.append(np.minimum(peak, self.claim.limits[role]) if t.limits else peak)
            joined = np.stack(columns, axis=-1)  # [number, run], or [number, unit, run]
            found[role] = joined if joined.ndim == 3 else joined[:, None, :]
        return found

    def start(self, x0: Array) -> None:
        """Check the states x0[state, cell, run] at t = 0; offers and commands there come with the first step."""
        _, _, nw, _, nz, ny = self.section.block.sizes
        z, y, w = (np.zeros((size, *x0.shape[1:])) for size in (nz, ny, nw))
        self(Block(-1, np.zeros(1), x0[None], z[None], z[None], y[None], y[None], w[None]))

    def __call__(self, block: Block) -> np.ndarray:
        """Take in a block; return the mask of runs that have run away and must stop."""
        live = ~np.isfinite(self.stopped)
        sup = np.maximum.accumulate(np.abs(block.w).max(axis=(1, 2), initial=0.0), axis=0)  # [step, run]
        sup = np.maximum(sup, self.sup_w)
        self.sup_w = sup[-1]
        sizes = {"state": np.abs(block.x)}
        sizes["offer"] = np.maximum(np.abs(block.z0), np.abs(block.z1))
        sizes["actuator"] = np.maximum(np.abs(block.y0), np.abs(block.y1))
        for role, size in sizes.items():
            self.peaks[role] = np.maximum(self.peaks[role], size.max(axis=0))
        admitted = self._admitted(block.times, sizes["actuator"], live)
        self._settle(block, sizes["state"])
        runaway = (sizes["state"].max(axis=(0, 1, 2), initial=0.0) > ABSOLUTE) & live
        if self.claim is not None:
            runaway |= self._compare(block.times, sup, sizes, admitted) & live
        self.stopped = np.where(runaway, block.times[-1], self.stopped)
        return np.asarray(runaway)

    def _admitted(self, times: Array, command: Array, live: np.ndarray) -> np.ndarray:
        """Which samples [step, run] count: all of a covered run, those before an actuator's limit of any other."""
        admitted = np.repeat(live[None, :], len(times), axis=0)
        if self.saturation is None:
            return admitted
        over = (command > self.saturation[:, None, None]).any(axis=(1, 2)) & live  # [step, run]
        for r in np.flatnonzero(over.any(axis=0) & ~np.isfinite(self.saturated_at)):
            self.saturated_at[r] = times[np.argmax(over[:, r])]
        covered = np.array([t.covered for t in self.terms])
        return np.asarray(admitted & (covered | (times[:, None] < self.saturated_at)))

    def _settle(self, block: Block, size: Array) -> None:
        above = (size > 0.02 * self.peaks["state"].max(axis=1, keepdims=True, initial=0.0)).any(axis=(1, 2))
        for r in np.flatnonzero(above.any(axis=0)):
            self.last_out[r] = block.times[np.flatnonzero(above[:, r])[-1]]

    def _compare(self, times: Array, sup: Array, sizes: dict[str, Array], admitted: np.ndarray) -> np.ndarray:
        """Count the sample-units above a bound and keep the worst ratios; return which runs passed RUNAWAY times a
        bound.
        """
        claim = self.claim
        assert claim is not None
        X0 = np.array([t.X0 for t in self.terms])
        envelope = claim.C * np.exp(-claim.alpha * times)[:, None] * X0 + claim.G * sup  # [step, run]
        runaway = np.zeros(len(self.terms), dtype=bool)
        for unit in self.section.closed:
            broken = np.zeros((len(times), self.section.cells, len(self.terms)), dtype=bool)
            for role, ranges in (("state", self.section.shape.states), ("offer", self.section.shape.offers),
                                 ("actuator", self.section.shape.inputs)):  # fmt: skip
                low, high = ranges[unit.kind.name]
                ratio = _ratio(sizes[role][:, low:high], self.bounds[role][low:high]).max(axis=1, initial=0.0)
                ratio *= admitted[:, None, :]
                broken |= ratio > 1 + SLACK
                worst = ratio.max(axis=(0, 1))
                self.peak_ratio = np.maximum(self.peak_ratio, worst)
                runaway |= worst > RUNAWAY
            low, high = self.section.shape.states[unit.kind.name]
            ratio = _ratio(sizes["state"][:, low:high].max(axis=1, initial=0.0), envelope[:, None, :])
            ratio *= admitted[:, None, :]
            broken |= ratio > 1 + SLACK
            worst = ratio.max(axis=(0, 1))
            runaway |= worst > RUNAWAY
            self.G_ratio = np.maximum(self.G_ratio, np.where(X0 == 0, worst, 0.0))
            self.envelope_ratio = np.maximum(self.envelope_ratio, np.where(X0 > 0, worst, 0.0))
            self.violations += broken.sum(axis=(0, 1))
        return runaway

    def reason(self, run: int) -> str:
        """Why a run counts only in part: it saturated where the claim does not exclude that. Empty if it counts
        throughout.
        """
        at = self.saturated_at[run]
        if np.isfinite(at) and not self.terms[run].covered:
            return "set aside from the moment an actuator reached its limit, outside what the certificate is valid for"
        return ""


def _ratio(size: Array, bound: Array) -> Array:
    """size/bound; 0 where the bound is infinite or the size below 1e-290 (underflow), 1e300 above a bound of zero."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = size / bound
    return np.where(size < 1e-290, 0.0, np.minimum(ratio, 1e300))


def signal_table(
    section: Section, claim: Claim | None, peaks: dict[str, Array], scale: float
) -> list[dict[str, object]]:
    """One row per signal: kind, role, name, unit, largest value seen in ``peaks`` [number, cell, run], guaranteed peak,
    ratio.
    """
    rows: list[dict[str, object]] = []
    for group, role in ROLES.items():
        for i, line in enumerate(lines_of(section, group)):
            seen = float(peaks[role][i].max(initial=0.0))
            bound = _stated(section, claim.peaks[role][i], line.kind) * scale if claim is not None else math.inf
            rows.append(_row(line, seen, bound))
    return rows


def _stated(section: Section, peaks: Array, kind: str) -> float:
    """The peak of a signal; over units that have peaks of their own the largest of the kind's."""
    return float(peaks if section.where is None else np.max(peaks[section.where[kind]], initial=0.0))


def _row(line: Line, seen: float, bound: float) -> dict[str, object]:
    ratio = None if math.isinf(bound) or bound == 0 else seen / bound
    return {
        "kind": line.kind, "role": line.role, "signal": line.name, "in": line.unit, "peak": seen,
        "guaranteed": "inf" if math.isinf(bound) else bound, "ratio": ratio,
    }  # fmt: skip


def amplification(section: Section, peaks: Array) -> list[dict[str, object]]:
    """How the answer to a disturbance of the first unit travels: per offer, the largest ratio of peaks of successive
    units.

    ``peaks`` [offer, cell] of the leader run. ``successive``: largest ratio over neighbours downstream (None: nothing
    arrives);
    ``last_over_first``: peak of the last unit over that of the first.
    """
    order = np.arange(section.cells) if section.first == 0 else np.arange(section.cells)[::-1]
    rows: list[dict[str, object]] = []
    for i, line in enumerate(lines_of(section, "offers")):
        along = peaks[i, order]
        sound = along[:-1] > 1e-12 * max(float(along.max(initial=0.0)), 1e-300)
        ratios = along[1:][sound] / along[:-1][sound]
        rows.append(
            {
                "kind": line.kind,
                "offer": line.name,
                "successive": float(ratios.max()) if ratios.size else None,
                "last_over_first": float(along[-1] / along[0]) if along[0] > 0 else None,
            }
        )
    return rows

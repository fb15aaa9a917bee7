"""What the peak gains of sampled units make of a whole pattern: its radius and the peak of every signal.

Once in doubles, to guide a search, and once guaranteed, from enclosures of the peak gains and exact arithmetic on them.
Rounding counts as one more disturbance of every unit (docs: the code as flashed).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from synth.base.errors import UnstableLoop
from synth.base.exact import exact
from synth.gain.rounding import up
from synth.gain.sampled.guide import sampled_peak_guide
from synth.gain.sampled.peaks import SampledUnit, sampled_gains, sampled_unit
from synth.gain.sampled.sup import Inlet
from synth.network.gains import Gains
from synth.network.model import Network
from synth.network.rounding import Rounding

Key = tuple[str, str, str]  # kind, role ("offer", "state" or "actuator"), signal
_ROLES = {"offers": "offer", "states": "state", "actuators": "actuator"}


@dataclass(frozen=True)
class SampledSizes:
    """``radius`` of the gain operator; ``peaks`` of all signals from rest under the declared disturbances and rounding.

    Peaks are in declared units and infinite from radius one on. ``slowest``: estimated decay in 1/s of the slowest mode
    of the sampled units.
    """

    radius: float
    peaks: Mapping[Key, float]
    slowest: float


def why_not_sampled(network: Network) -> str | None:
    """Why the sampled loops of a network cannot be looked at by this version; None if they can."""
    if network.goal.period is None:
        return "no sample period is declared; write design.period in the problem file, for example 0.02 s"
    if network.description != "pattern":
        return f"the code as flashed is proven for patterns, and this network is described by {network.description}"
    if any(link.weakens or link.choice for link in network.links):
        return "a link whose own part weakens with it is not proven for the code as flashed"
    return None


def sampled_units(network: Network, gains: Gains) -> tuple[SampledUnit, ...]:
    """Every kind with its loop sampled as the goal says; controller states are advanced by the code once per period.

    Raises InputError and ValueError as sampled_unit does.
    """
    goal = network.goal
    assert goal.period is not None
    return tuple(
        sampled_unit(
            kind, network.links, gains[kind.name].K, goal.period, goal.computation_delay,
            () if kind.controller is None else kind.controller.states,
        )
        for kind in network.kinds
    )  # fmt: skip


def sampled_estimate(
    network: Network, units: Sequence[SampledUnit], grid: int = 5, rest: float = 1e-9
) -> SampledSizes | None:
    """The sizes in doubles, a guide and never a claim; None if a sampled unit is not stable or breaks down.

    ``grid`` and ``rest`` as for sampled_peak_guide.
    """
    lines: list[_Line] = []
    slowest = float("inf")
    for unit in units:
        errors = _errors(unit, network.goal.rounding)
        inlets = (*unit.takes, *unit.waves, *(inlet for inlet, _ in errors))
        guide = sampled_peak_guide(
            unit.loop, inlets, (*unit.offers, *unit.states, *unit.actuators), grid=grid, rest=rest
        )
        if guide is None or not np.all(np.isfinite(guide.gains)):
            return None
        slowest = min(slowest, -math.log(max(guide.radius, 1e-300)) / float(unit.loop.period))
        gains = guide.gains.copy()
        for k, (takes, waves) in enumerate(zip(*(m.floats() for m in unit.through["offers"]), strict=True)):
            gains[k, : len(takes) + len(waves)] += np.abs(np.concatenate([takes, waves]))
        lines += _lines(unit, gains.tolist(), [float(size) for _, size in errors])
    M = np.array(_matrix(network, lines), dtype=np.float64)
    M = M.reshape(len(M), len(M))
    radius = float(np.abs(np.linalg.eigvals(M)).max(initial=0.0))
    if not radius < 1:
        return SampledSizes(radius, {line.key: math.inf for line in lines}, slowest)
    own = np.array([float(line.own) for line in lines if line.key[1] == "offer"])
    z = np.linalg.solve(np.eye(len(M)) - M, own)
    return SampledSizes(radius, _peaks(network, lines, z.tolist()), slowest)


def guaranteed_sizes(network: Network, units: Sequence[SampledUnit], width: float = 1e-4) -> SampledSizes | None:
    """Upper bounds of the sizes: enclosed peak gains, then exact arithmetic; None if a unit is not stable.

    ``width``: of the enclosures, relative. Raises WidthNotReached if one does not close. Floating-point sums (form
    single or double) are not counted; a certificate of the firmware route counts them.
    """
    lines: list[_Line] = []
    slowest = float("inf")
    for unit in units:
        errors = _errors(unit, network.goal.rounding)
        inlets = (*unit.takes, *unit.waves, *(inlet for inlet, _ in errors))
        try:
            found = sampled_gains(unit, inlets, (*unit.offers, *unit.states, *unit.actuators), width)
        except UnstableLoop:
            return None
        modes = np.abs(np.linalg.eigvals(unit.loop.transition())).max(initial=0.0)
        slowest = min(slowest, -math.log(max(float(modes), 1e-300)) / float(unit.loop.period))
        exactly = [[Fraction(v) for v in row] for row in found.upper.tolist()]
        for k, rows in enumerate(zip(*(m.rows for m in unit.through["offers"]), strict=True)):
            for j, value in enumerate((*rows[0], *rows[1])):
                exactly[k][j] += abs(value)
        sizes = [size for _, size in errors]
        lines += _lines(unit, exactly, sizes)
    M = _matrix(network, lines)
    if not M:
        return SampledSizes(0.0, _up(_peaks(network, lines, [])), slowest)
    floats = np.array([[float(v) for v in row] for row in M])
    radius = float(np.abs(np.linalg.eigvals(floats)).max())
    s = [Fraction(v) for v in np.linalg.solve(np.eye(len(M)) - floats / (radius * 1.0001 + 1e-12), np.ones(len(M)))]
    top = max(_times(row, s) / v if v > 0 else Fraction(10**9) for row, v in zip(M, s, strict=True))
    if not top < 1:
        return SampledSizes(up(top), {line.key: math.inf for line in lines}, slowest)
    own = [line.own for line in lines if line.key[1] == "offer"]
    z = [Fraction(v) for v in np.linalg.solve(np.eye(len(M)) - floats, [float(v) for v in own])]
    # A point with M z + own <= z bounds the peaks; what a float solve misses is mended along the contracting point.
    short = max((_times(row, z) + w - v for row, w, v in zip(M, own, z, strict=True)), default=Fraction(0))
    more = max(short, Fraction(0)) / min(((1 - top) * v for v in s), default=Fraction(1))
    z = [v + more * a for v, a in zip(z, s, strict=True)]
    return SampledSizes(up(top), _up(_peaks(network, lines, z)), slowest)


@dataclass(frozen=True)
class _Line:
    """A signal: what it gets at most per unit of each take, and from disturbances and rounding."""

    key: Key
    takes: Mapping[str, Any]
    own: Any


def _lines(unit: SampledUnit, gains: Sequence[Sequence[Any]], errors: Sequence[Any]) -> list[_Line]:
    """Lines of a unit from the gains of (offers, states, actuators) by (takes, disturbances, errors)."""
    kind = unit.kind
    sizes = [w.peak for w in kind.disturbances]
    own = [float(v) for v in sizes] if gains and isinstance(gains[0][0] if gains[0] else 0.0, float) else sizes
    own = [*own, *errors]
    names = [("offer", s.name) for s in kind.offers] + [("state", s.name) for s in kind.states]
    names += [("actuator", s.name) for s in kind.inputs]
    found = []
    for (role, name), row in zip(names, gains, strict=True):
        q = len(kind.takes)
        takes = {take.name: row[j] for j, take in enumerate(kind.takes)}
        found.append(_Line((kind.name, role, name), takes, _times(row[q:], own)))
    return found


def _inflow(network: Network, line: _Line) -> list[tuple[int, Any]]:
    """(row, gain) of every offer that reaches a line through the links of its unit."""
    offers = [(kind.name, s.name) for kind in network.kinds for s in kind.offers]
    found = []
    for link in network.links:
        gain = line.takes.get(link.take, 0) if link.kind == line.key[0] else 0
        if gain:
            size = abs(link.strength) if isinstance(gain, Fraction) else abs(float(link.strength))
            found.append((offers.index((link.source_kind, link.offer)), gain * size))
    return found


def _matrix(network: Network, lines: Sequence[_Line]) -> list[list[Any]]:
    """The gain operator on the offers."""
    offers = [line for line in lines if line.key[1] == "offer"]
    found: list[list[Any]] = [[0] * len(offers) for _ in offers]
    for i, line in enumerate(offers):
        for j, gain in _inflow(network, line):
            found[i][j] += gain
    return found


def _peaks(network: Network, lines: Sequence[_Line], z: Sequence[Any]) -> dict[Key, Any]:
    return {line.key: line.own + sum((g * z[j] for j, g in _inflow(network, line)), 0 * line.own) for line in lines}


def _up(peaks: Mapping[Key, Fraction]) -> dict[Key, float]:
    return {key: up(Fraction(value)) for key, value in peaks.items()}


def _times(row: Sequence[Any], column: Sequence[Any]) -> Any:
    return sum((a * b for a, b in zip(row, column, strict=True) if a and b), Fraction(0))


def _errors(unit: SampledUnit, rounding: Rounding) -> list[tuple[Inlet, Fraction]]:
    """What rounding adds: sensors, commands, stored states in turn, each with its largest size; zeros are left out."""
    kind = unit.kind
    K = unit.gains.rows

    def size(group: str, name: str) -> Fraction:
        given: Mapping[str, Any] = getattr(rounding, group)
        return exact(given.get(f"{kind.name}.{name}", 0)) / 2

    corrected = () if kind.controller is None else kind.controller.corrected
    found = [size("sensors", s.name) for s in kind.sensors]
    for name in corrected:  # an innovation is computed from the rounded sample
        j = kind.index("sensors", f"{name}_innovation")
        found[j] = max(found[j], size("sensors", name))
    for i, a in enumerate(kind.inputs):
        products = sum(1 for v in K[i] if v)
        found.append(size("commands", a.name) + products * size("products", a.name))
    found += [size("stored", name) for name in (() if kind.controller is None else kind.controller.states)]
    every = (*unit.sensors, *unit.commands, *unit.stored)
    return [(inlet, value) for inlet, value in zip(every, found, strict=True) if value]

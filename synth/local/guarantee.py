"""What is guaranteed about given exact gains: the radius, every limit, and which of them are broken.

Peaks follow theory (3) from rest: z <= (I - M)^{-1} M_w w with the upper ends of all peak gains. The solution of that
system is checked in exact arithmetic (M z + M_w w <= z with M of radius below one bounds every signal).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.base.errors import UnstableLoop, WidthNotReached
from synth.gain import PeakGain, UnitPeaks, assemble, close_network, state_peaks
from synth.local.region import decays_faster, inside_disc
from synth.network.gains import Gains
from synth.network.model import Actuator, Kind, Network, Signal
from synth.network.rational import characteristic


@dataclass(frozen=True)
class SignalPeak:
    """Guaranteed peak of one signal under the declared disturbances, from rest; ``limit`` None where none is set."""

    kind: str
    role: str  # "state", "offer" or "actuator"
    signal: str
    unit: str
    value: float
    limit: Fraction | None

    @property
    def broken(self) -> bool:
        """An actuator must stay strictly below its limit; a band may be touched."""
        if self.limit is None:
            return False
        if not np.isfinite(self.value):
            return True
        value = Fraction(self.value)
        return value >= self.limit if self.role == "actuator" else value > self.limit


@dataclass(frozen=True)
class Broken:
    """One limit that does not hold: its cause ("actuator limit", "band", "fastest", ...), kind, name and a sentence."""

    cause: str
    kind: str
    name: str
    sentence: str


@dataclass(frozen=True)
class Guarantee:
    """Guaranteed enclosure of the radius, peaks of all signals, and the limits that are broken (empty: all hold)."""

    lower: float
    upper: float
    peaks: tuple[SignalPeak, ...]
    broken: tuple[Broken, ...]


def guarantee(network: Network, gains: Gains, width: float = 1e-6) -> Guarantee:
    """Enclose the radius and every declared limit for ``gains``.

    An unstable unit gives an infinite radius and infinite peaks; WidthNotReached if a peak gain does not close.
    """
    found = list(broken_bounds(network, gains))
    closed = close_network(network, gains)
    try:
        assembly = assemble(closed, network.links, width=width)
        units = [state_peaks(unit, width=width) for unit in closed]
    except UnstableLoop as error:
        peaks = tuple(_peaks(network, [], None))
        unstable = Broken("stability", "", "", f"{error}".rstrip("."))
        return Guarantee(float("inf"), float("inf"), peaks, (unstable, *found, *_broken_peaks(peaks)))
    radius = assembly.radius()
    matrix: dict[tuple[int, int], Fraction] = {}
    for entry in assembly.entries:
        key = (entry.row, entry.column)
        matrix[key] = matrix.get(key, Fraction(0)) + Fraction(entry.upper)
    z = _bounded(network, units, matrix) if radius.upper < 1 else None
    peaks = tuple(_peaks(network, units, z))
    return Guarantee(float(radius.lower), float(radius.upper), peaks, (*found, *_broken_peaks(peaks)))


def broken_bounds(network: Network, gains: Gains) -> tuple[Broken, ...]:
    """Bounds on modes and gains that do not hold, decided exactly."""
    goal = network.goal
    found: list[Broken] = []
    for unit in close_network(network, gains):
        name = unit.kind.name
        polynomial = characteristic(unit.A.rows)
        if goal.slowest is not None and not decays_faster(polynomial, goal.slowest):
            found.append(
                Broken(
                    "slowest", name, "slowest", f"a mode of {name} decays no faster than {float(goal.slowest):g} 1/s"
                )
            )
        if goal.fastest is not None and not inside_disc(polynomial, goal.fastest):
            found.append(
                Broken("fastest", name, "fastest", f"a mode of {name} is not slower than {float(goal.fastest):g} 1/s")
            )
        for actuator, entries in goal.gain_bounds.get(name, {}).items():
            for sensor, bound in entries.items():
                i, j = unit.kind.index("inputs", actuator), unit.kind.index("sensors", sensor)
                if abs(unit.K[i, j]) > bound:
                    found.append(
                        Broken(
                            "gain bound", name, f"{actuator}/{sensor}",
                            f"the gain from {sensor} to {actuator} of {name} exceeds its bound {float(bound):g}",
                        )
                    )  # fmt: skip
        for actuator, sensors in goal.uses.get(name, {}).items():
            i = unit.kind.index("inputs", actuator)
            for j, sensor_signal in enumerate(unit.kind.sensors):
                if sensor_signal.name not in sensors and unit.K[i, j]:
                    found.append(
                        Broken(
                            "structure", name, f"{actuator}/{sensor_signal.name}",
                            f"{actuator} of {name} uses {sensor_signal.name}, which it may not",
                        )
                    )  # fmt: skip
    return tuple(found)


def _bounded(
    network: Network, units: Sequence[UnitPeaks], matrix: dict[tuple[int, int], Fraction]
) -> list[Fraction] | None:
    """z with M z + M_w w <= z, checked exactly; None if the float solution cannot be made to pass."""
    from_w = [
        value for kind, unit in zip(network.kinds, units, strict=True) for value in _forced(kind, unit.offers_dist)
    ]
    size = len(from_w)
    dense = np.zeros((size, size))
    for (i, j), value in matrix.items():
        dense[i, j] = float(value)
    right = np.array([float(v) for v in from_w])
    try:
        guess = np.linalg.solve(np.eye(size) - dense, right)
    except np.linalg.LinAlgError:
        return None
    if np.any(guess < 0):
        return None
    for slack in (1e-12, 1e-9, 1e-6):
        # The added part must itself be a point of decay, or it would not cover rows that nothing forces.
        lift = np.linalg.solve(np.eye(size) - dense, np.full(size, max(float(right.max(initial=0.0)), 1e-300)))
        z = [Fraction(float(v)) for v in guess + slack * lift]
        image = list(from_w)
        for (i, j), value in matrix.items():
            image[i] += value * z[j]
        if all(a <= b for a, b in zip(image, z, strict=True)):
            return z
    return None


def _forced(kind: Kind, gain: PeakGain) -> list[Fraction]:
    """Peak gains from disturbances times the declared peaks, row by row, exactly from the upper ends."""
    peaks = [w.peak for w in kind.disturbances]
    return [
        sum((Fraction(float(value)) * peak for value, peak in zip(row, peaks, strict=True)), Fraction(0))
        for row in np.asarray(gain.upper)
    ]


def _peaks(network: Network, units: Sequence[UnitPeaks], z: list[Fraction] | None) -> list[SignalPeak]:
    """Peaks of every state, offer and actuator; infinite where ``z`` is None."""
    outlets = {(kind.name, offer.name): 0 for kind in network.kinds for offer in kind.offers}
    place = {outlet: i for i, outlet in enumerate(outlets)}
    found: list[SignalPeak] = []
    for index, kind in enumerate(network.kinds):
        brought = [Fraction(0)] * len(kind.takes)
        for link in network.links:
            if link.kind == kind.name and z is not None:
                brought[kind.index("takes", link.take)] += abs(link.strength) * z[place[link.source_kind, link.offer]]
        groups: tuple[tuple[str, tuple[Signal | Actuator, ...]], ...] = (
            ("state", kind.states),
            ("offer", kind.offers),
            ("actuator", kind.inputs),
        )
        for role, signals in groups:
            if z is None:
                values = [float("inf")] * len(signals)
            else:
                unit = units[index]
                takes = {"state": unit.states_takes, "offer": unit.offers_takes, "actuator": unit.actuators_takes}[role]
                dist = {"state": unit.states_dist, "offer": unit.offers_dist, "actuator": unit.actuators_dist}[role]
                values = [
                    _up(forced + sum((Fraction(float(p)) * v for p, v in zip(row, brought, strict=True)), Fraction(0)))
                    for forced, row in zip(_forced(kind, dist), np.asarray(takes.upper), strict=True)
                ]
            for signal, value in zip(signals, values, strict=True):
                limit = getattr(signal, "limit", None) if role == "actuator" else getattr(signal, "band", None)
                found.append(SignalPeak(kind.name, role, signal.name, signal.unit, value, limit))
    return found


def _up(value: Fraction) -> float:
    """The smallest double not below ``value``."""
    from synth.gain.rounding import up

    return up(value)


def _broken_peaks(peaks: Sequence[SignalPeak]) -> list[Broken]:
    found = []
    for peak in peaks:
        if peak.broken:
            cause = "actuator limit" if peak.role == "actuator" else "band"
            bound = float(peak.limit) if peak.limit is not None else float("nan")
            found.append(
                Broken(
                    cause, peak.kind, peak.signal,
                    f"{peak.kind}.{peak.signal} may reach {peak.value:.4g} {peak.unit}, its {cause.split()[-1]} is "
                    f"{bound:.4g}",
                )
            )  # fmt: skip
    return found


__all__ = ["Broken", "Guarantee", "SignalPeak", "WidthNotReached", "broken_bounds", "guarantee"]

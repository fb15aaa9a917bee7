"""What is guaranteed about given exact gains: the radius, every limit, and which of them are broken.

Peaks follow theory (3) from rest: z <= (I - M)^{-1} M_w w with the upper ends of all peak gains, for every description
of a network; ``synth.local.settling`` finds z and checks it in exact arithmetic.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np

from synth.base.errors import UnstableLoop, WidthNotReached
from synth.base.progress import Listener, silent
from synth.gain import PeakGain, UnitPeaks
from synth.gain.assembly import Assembly
from synth.gain.closed import close_plan
from synth.gain.descriptions import plan_of
from synth.gain.enclosure import NetworkRadius, network_radius
from synth.gain.plan import Plan
from synth.gain.rounding import up
from synth.local.plant import with_outlets
from synth.local.region import decays_faster, inside_disc
from synth.local.settling import EdgeSizes, Sizes, least_sizes
from synth.local.unit_table import UnitTable
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
    """Guaranteed enclosure of the radius, peaks of all signals, and the limits that are broken (empty: all hold).

    A peak is the largest over all units of the kind. ``covers`` says in words what the radius is about, ``radius`` is
    the enclosure behind it (None where a unit is unstable).
    """

    lower: float
    upper: float
    peaks: tuple[SignalPeak, ...]
    broken: tuple[Broken, ...]
    covers: str = ""
    radius: NetworkRadius | None = field(default=None, compare=False, repr=False)


def guarantee(
    network: Network, gains: Gains, width: float = 1e-6, workers: int = 1, progress: Listener = silent
) -> Guarantee:
    """Enclose the radius and every declared limit for ``gains``; any description of a network.

    An unstable unit gives an infinite radius and infinite peaks; WidthNotReached if a peak gain does not close.
    ``workers`` processes share the peak gains of a network of many different units.
    """
    whole = with_outlets(network)
    plan = plan_of(whole)
    found = list(broken_bounds(network, gains, plan))
    table = UnitTable(gains, width, workers, progress)
    try:
        radius = _enclosed(whole, plan, table, width)
    except UnstableLoop as error:
        peaks = tuple(_peaks(network, {}))
        unstable = Broken("stability", "", "", f"{error}".rstrip("."))
        return Guarantee(float("inf"), float("inf"), peaks, (unstable, *found, *_broken_peaks(peaks)))
    settled = _settled(whole, radius, table) if radius.upper < 1 else None
    peaks = tuple(_peaks(network, {} if settled is None else _largest(network, settled, table)))
    return Guarantee(
        float(radius.lower), float(radius.upper), peaks, (*found, *_broken_peaks(peaks)), radius.covers, radius
    )


def _enclosed(network: Network, plan: Plan, table: UnitTable, width: float) -> NetworkRadius:
    """The radius, with the peak gains of ``table`` wherever the network is one finite operator."""
    table.units(plan)
    return network_radius(network, table.gains, peak_width=width, table=table)


def _settled(network: Network, radius: NetworkRadius, table: UnitTable) -> list[tuple[Assembly, Sizes]] | None:
    """Every finite operator with sizes that its signals keep; None if none could be shown."""

    def forced(assembly: Assembly) -> Sizes:
        return _forced_rows(assembly.plan, table)

    found: list[tuple[Assembly, Sizes]] = []
    pieces = list(radius.pieces)
    if network.description == "edge pattern":
        edges = EdgeSizes(network, pieces, table).find(forced)
        if edges is None:
            return None
        far, near = edges
        found = [(pieces[0].assembly, far), *near]
        pieces = pieces[1 + len(near) :]
    for piece in pieces:
        sizes = least_sizes(piece.assembly, forced(piece.assembly))
        if sizes is None:
            return None
        found.append((piece.assembly, sizes))
    return found


def _forced_rows(plan: Plan, table: UnitTable) -> Sizes:
    """M_w w of every row."""
    own = [
        _forced(plan.kinds[spec.kind], unit.offers_dist)
        for spec, unit in zip(plan.specs, table.units(plan), strict=True)
    ]
    spec_of = plan.unit_spec[plan.row_unit]
    return [own[i][k] for i, k in zip(spec_of.tolist(), plan.row_offer.tolist(), strict=True)]


def _forced(kind: Kind, gain: PeakGain) -> list[Fraction]:
    """Peak gains from disturbances times the declared peaks, row by row, exactly from the upper ends."""
    peaks = [w.peak for w in kind.disturbances]
    return [
        sum((Fraction(float(value)) * peak for value, peak in zip(row, peaks, strict=True)), Fraction(0))
        for row in np.asarray(gain.upper)
    ]


_Peak = tuple[str, str, str]  # kind, role, signal


def _largest(network: Network, settled: Sequence[tuple[Assembly, Sizes]], table: UnitTable) -> Mapping[_Peak, Fraction]:
    """The largest peak of every signal of a kind over all its units, wherever they stand."""
    found: dict[_Peak, Fraction] = {}
    for assembly, z in settled:
        plan = assembly.plan
        units = table.units(plan)
        arriving = _arriving(plan, z)
        seen: set[tuple[int, tuple[Fraction, ...]]] = set()
        for unit, spec in enumerate(plan.unit_spec.tolist()):
            brought = arriving[unit]
            if (spec, brought) in seen:
                continue
            seen.add((spec, brought))
            kind = network.kinds[plan.specs[spec].kind]
            for role, signals, takes, dist in _tables(kind, units[spec]):
                forced = _forced(kind, dist)
                for k, signal in enumerate(signals):
                    value = forced[k] + sum(
                        (Fraction(float(p)) * v for p, v in zip(takes.upper[k], brought, strict=True) if v), Fraction(0)
                    )
                    key = (kind.name, role, signal.name)
                    found[key] = max(value, found.get(key, Fraction(0)))
    return found


def _tables(kind: Kind, unit: UnitPeaks) -> tuple[tuple[str, tuple[Signal | Actuator, ...], PeakGain, PeakGain], ...]:
    return (
        ("state", kind.states, unit.states_takes, unit.states_dist),
        ("offer", kind.offers, unit.offers_takes, unit.offers_dist),
        ("actuator", kind.inputs, unit.actuators_takes, unit.actuators_dist),
    )


def _arriving(plan: Plan, z: Sizes) -> list[tuple[Fraction, ...]]:
    """What arrives at most at each take of every unit: the largest of each choice, added up."""
    found = [[Fraction(0)] * len(plan.kinds[k].takes) for k in plan.unit_kind.tolist()]
    most: dict[tuple[int, int], Fraction] = {}
    strengths = [pair[0] for pair in plan.moduli]
    columns = (plan.row, plan.source, plan.take, plan.choice, plan.modulus_of)
    for row, source, take, choice, modulus in zip(*(c.tolist() for c in columns), strict=True):
        if plan.row_offer[row]:
            continue  # the unit's other offers hear the same
        unit, value = int(plan.row_unit[row]), strengths[modulus] * z[source]
        if choice >= 0:
            key = (unit, choice)
            value, most[key] = (
                max(value - most.get(key, Fraction(0)), Fraction(0)),
                max(value, most.get(key, Fraction(0))),
            )
        found[unit][take] += value
    return [tuple(values) for values in found]


def _peaks(network: Network, found: Mapping[_Peak, Fraction]) -> list[SignalPeak]:
    """Peaks of every state, offer and actuator; infinite where nothing was found."""
    listed: list[SignalPeak] = []
    for kind in network.kinds:
        groups: tuple[tuple[str, tuple[Signal | Actuator, ...]], ...] = (
            ("state", kind.states),
            ("offer", kind.offers),
            ("actuator", kind.inputs),
        )
        for role, signals in groups:
            for signal in signals:
                exact = found.get((kind.name, role, signal.name))
                value = float("inf") if exact is None else up(exact)
                limit = getattr(signal, "limit", None) if role == "actuator" else getattr(signal, "band", None)
                listed.append(SignalPeak(kind.name, role, signal.name, signal.unit, value, limit))
    return listed


def broken_bounds(network: Network, gains: Gains, plan: Plan | None = None) -> tuple[Broken, ...]:
    """Bounds on modes and gains that do not hold, decided exactly; each once per kind.

    ``plan``: that of the network, if it is at hand.
    """
    goal = network.goal
    found: list[Broken] = []
    plan = plan_of(with_outlets(network)) if plan is None else plan
    for unit in close_plan(plan, gains):
        name = unit.kind.name
        polynomial = characteristic(unit.A.rows) if goal.slowest is not None or goal.fastest is not None else []
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
    return tuple(dict.fromkeys(found))


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

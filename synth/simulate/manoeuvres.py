"""What a leader's manoeuvres do to a string that sees only gaps: collisions counted, peaks against their bounds.

Every manoeuvre runs with the actuators' limits (and the limit of the jerk, if the file has one). Where a limit was met,
the hop claim says nothing, so it runs once more without limits, and that run is held against the bounds: of vehicle n
the product of the n peak hop gains before it, and its own |T_e/s|_1. Vehicles follow in the order of the cell, or,
where any order is claimed, shuffled with the seed. A simulation supports a claim, it never is one.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError
from synth.base.progress import Listener, silent
from synth.gain.strings.hop import Hop, HopGains
from synth.gain.strings.hop_length import leader_signal
from synth.network.gains import Gains
from synth.network.hop_wish import HopWish
from synth.network.model import Network
from synth.proof.hop_statement import HopStatement, wish_of
from synth.simulate.leaders import Manoeuvre, manoeuvres, recorded
from synth.simulate.string import String, StringRun

Array = NDArray[np.float64]
_SLACK = 1e-6  # relative, for the error of the steps
_SPEED, _ACCELERATION = 20.0, 2.0  # of a leader the file says nothing about, in the unit of the signal


@dataclass(frozen=True, eq=False)
class HopRun:
    """One manoeuvre.

    ``collisions``: vehicles whose gap to the one ahead closes (None: speed or standstill gap are not declared);
    ``closest``: the smallest gap seen; ``violations``: vehicles above a bound, summed over signals; ``ratios``: largest
    part of its bound that was reached, by signal (swing, rate, gap error); ``met``: whether a limit was met.
    ``run``: as with limits.
    """

    name: str
    leader_peak: float
    leader_rate: float
    collisions: int | None
    closest: float | None
    violations: int
    ratios: Mapping[str, float]
    met: bool
    run: StringRun

    def as_json(self) -> dict[str, Any]:
        """Plain data."""
        run = self.run
        return {
            "name": self.name,
            "leader_peak": self.leader_peak,
            "leader_rate": self.leader_rate,
            "collisions": self.collisions,
            "closest_gap": self.closest,
            "violations": self.violations,
            "ratios": dict(self.ratios),
            "commands_at_limit": run.saturated,
            "commands_held_back_by_jerk": run.limited,
            "step_s": run.dt,
            "peaks": [
                {
                    "vehicle": i + 1,
                    "kind": run.order[i],
                    "swing": float(run.peak[i]),
                    "rate": float(run.rate[i]),
                    "gap_error": None if np.isnan(run.gap_error[i]) else float(run.gap_error[i]),
                }
                for i in _told(len(run.order))
            ],
        }


def _told(count: int) -> list[int]:
    """Some vehicles to report: the first ones, powers of ten, the last."""
    return sorted({i for i in (0, 1, 2, 4, 9, 19, 49, 99, 199, 499, 999, 1999, 4999, 9999, count - 1) if i < count})


@dataclass(frozen=True, eq=False)
class HopTrajectory:
    """All manoeuvres of a string; ``why`` says why collisions were not counted, where they were not."""

    units: int
    duration: float
    signal: str
    unit: str
    compared: bool
    runs: tuple[HopRun, ...]
    why: str

    @property
    def violations(self) -> int:
        """How often a vehicle passed a proven bound."""
        return sum(run.violations for run in self.runs)

    @property
    def collisions(self) -> int:
        """Vehicles that touched the one ahead, over all manoeuvres with a declared speed."""
        return sum(run.collisions or 0 for run in self.runs)

    def as_json(self) -> dict[str, Any]:
        """The keys of a simulation."""
        worst = max((ratio for run in self.runs for ratio in run.ratios.values()), default=None)
        return {
            "units": self.units,
            "duration": self.duration,
            "violations": self.violations,
            "collisions": self.collisions,
            "compared_with_bounds": self.compared,
            "worst": {"G_ratio": None, "envelope_ratio": None, "bound_ratio": worst},
            "measures": [run.as_json() for run in self.runs],
            "collisions_not_counted": self.why or None,
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """For a terminal."""
        lines = [f"{self.units} vehicles behind a leader, {self.duration:g} s each."]
        for run in self.runs:
            said = f"{run.name}: "
            if run.collisions is not None:
                said += f"{run.collisions or 'no'} collision{'' if run.collisions == 1 else 's'}, "
                said += f"smallest gap {run.closest:.3g}; "
            last = run.run.peak[-1]
            said += f"leader swings {run.leader_peak:.4g} {self.unit}, the last vehicle {last:.4g}"
            if self.compared:
                said += f"; at most {max(run.ratios.values(), default=0):.3f} of a bound, violations: {run.violations}"
            if run.met:
                cut = [f"{run.run.saturated} commands were cut"] if run.run.saturated else []
                cut += [f"{run.run.limited} held back by the jerk"] if run.run.limited else []
                said += f"; {' and '.join(cut)}" + (
                    ", so bounds are about the run without limits" if self.compared else ""
                )
            lines.append(said + ".")
        if not self.compared:
            lines.append("Nothing is proven for peaks, so peaks are not held against bounds.")
        if self.why:
            lines.append(self.why)
        lines.append("A simulation supports a claim, it never is one; it is no test of safety.")
        return "\n".join(lines) + "\n"


def run_manoeuvres(
    network: Network,
    design_or_gains: Any,
    statement: HopStatement,
    units: int | None = None,
    seconds: float | None = None,
    seed: int = 0,
    dt: float | None = None,
    progress: Listener = silent,
) -> HopTrajectory:
    """Run ``units`` vehicles behind a leader that brakes, stops and goes, sweeps, repeats a recording, does its worst.

    ``statement``: what was proven of the same gains; its bounds are those that peaks are held against. ``dt``: step in
    s (default: from modes and delays). InputError where a leader cannot be simulated (see ``String``), or sizes are out
    of reach.
    """
    wish = wish_of(network)
    gains = getattr(design_or_gains, "gains", design_or_gains)
    if not isinstance(gains, Gains):
        raise InputError(f"gains or a design were expected, not {type(design_or_gains).__name__}.")
    if statement.hops is None:
        raise InputError("a unit is unstable by itself under these gains; there is nothing to run.")
    count = network.simulation.units if units is None else units
    length = float(network.simulation.seconds) if seconds is None else float(seconds)
    order = _order(network, wish, count, seed)
    string = String(network, gains, wish, order)
    hops = _in_order(statement.hops, order)
    judge = _Judge(network, statement, hops, wish, order)
    runs = []
    for leader, speed in _leaders(network, wish, length, statement.hops, hops, count):
        progress(f"manoeuvre: {leader.name}")
        runs.append(judge.judged(string, leader, speed, length, dt))
    first = network.cell_kinds[0]
    unit = first.offers[first.index("offers", wish.signal)].unit
    return HopTrajectory(count, length, wish.signal, unit, judge.compared, tuple(runs), judge.why)


def _order(network: Network, wish: HopWish, count: int, seed: int) -> list[str]:
    names = [kind.name for kind in network.cell_kinds]
    ahead = {link.kind: link.source_kind for link in network.links if not link.own_part}
    follower = {source: kind for kind, source in ahead.items()}
    order = [names[0]]
    while len(order) < count:
        order.append(follower[order[-1]])
    if wish.any_order and len(names) > 1:
        rng = np.random.default_rng(seed)
        order = [names[i] for i in rng.integers(0, len(names), count)]
    return order


def _in_order(hops: HopGains, order: list[str]) -> list[Hop]:
    """The hop of every vehicle behind the one ahead; of the first, whose leader is of no kind, the largest of its."""
    table = {(hop.kind, hop.after): hop for hop in hops.hops}
    first = max((hop for hop in hops.hops if hop.kind == order[0]), key=lambda hop: hop.peak.upper)
    found = [first]
    for ahead, kind in pairwise(order):
        found.append(table.get((kind, ahead)) or table[(kind, "any kind")])
    return found


def _leaders(
    network: Network, wish: HopWish, length: float, all_hops: HopGains, hops: list[Hop], count: int
) -> list[tuple[Manoeuvre, float | None]]:
    """Manoeuvres, each with the speed before it (None: not declared)."""
    speed = None if wish.leader.speed is None else float(wish.leader.speed)
    most = _ACCELERATION if wish.leader.acceleration is None else float(wish.leader.acceleration)
    found: list[tuple[Manoeuvre, float | None]] = [(m, speed) for m in manoeuvres(speed or _SPEED, most, length)]
    if wish.leader.recorded is not None:
        folder = Path() if network.file is None else Path(network.file).parent
        found.append(recorded(folder / wish.leader.recorded, wish.signal))
    chain = replace(all_hops, hops=tuple(hops[: min(count, 10)]))
    for vehicle in sorted({1, min(count, 10)}):
        if all(hop.gap_error is not None for hop in chain.hops):
            times, signs, _ = leader_signal(chain, vehicle, "gap_error")
            values = most * np.append(0.0, np.cumsum(signs * np.gradient(times)[0]))
            ends = np.append(times, times[-1] + times[1])
            # What comes too late to be seen within the run is left out: the signal is moved so that it ends with it.
            begin = max(0.0, ends[-1] - length)
            keep = ends >= begin
            name = f"worst for the gap of vehicle {vehicle}"
            found.append((Manoeuvre(name, ends[keep] - ends[keep][0], values[keep] - values[keep][0]), None))
    return found


class _Judge:
    """Bounds of every vehicle, and the gaps at steady driving."""

    def __init__(
        self, network: Network, statement: HopStatement, hops: list[Hop], wish: HopWish, order: list[str]
    ) -> None:
        self.compared = statement.claim == "peak"
        growth = np.cumprod([max(hop.peak.upper, 1.0) for hop in hops]) * (1 + 1e-12 * len(hops))
        self.swing = growth
        before = np.append(1.0, growth[:-1])
        own = np.array([np.nan if hop.gap_error is None else hop.gap_error.upper for hop in hops])
        self.error = before * own
        self.gaps = np.array([float(statement.time_gaps[name]) for name in order])
        self.standstill = None if wish.standstill is None else float(wish.standstill)
        missing = [
            what
            for what, value in (("standstill", wish.standstill), ("leader.speed", wish.leader.speed))
            if value is None
        ]
        self.why = (
            f"Collisions were not counted where design.hop does not give {' and '.join(missing)}." if missing else ""
        )

    def judged(self, string: String, leader: Manoeuvre, speed: float | None, length: float, dt: float | None) -> HopRun:
        """Run with limits; hold the run against the bounds if none was met, else run again without them."""
        run = string.run(leader, length, dt=dt)
        met = bool(run.saturated or run.limited)
        free = string.run(leader, length, limits=False, dt=dt) if met and self.compared else run
        collisions = closest = None
        if speed is not None and self.standstill is not None:
            gaps = self.standstill + self.gaps * speed + run.least_gap
            collisions, closest = int((gaps <= 0).sum()), float(gaps.min())
        violations, ratios = 0, {}
        if self.compared:
            for name, seen, bound in (
                ("swing", free.peak, self.swing * leader.peak),
                ("rate", free.rate, self.swing * leader.rate),
                ("gap error", free.gap_error, self.error * leader.rate),
            ):
                if np.all(np.isfinite(bound)) and np.all(np.isfinite(seen)) and float(bound.max()) > 0:
                    violations += int((seen > bound * (1 + _SLACK)).sum())
                    ratios[name] = float((seen / bound).max())
        return HopRun(leader.name, leader.peak, leader.rate, collisions, closest, violations, ratios, met, run)

"""What the hop design is asked for, and the way from numbers to loops and limits, decided exactly."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.strings.dead_time import DelayLoop
from synth.gain.strings.dead_time_kernel import peak_of_response
from synth.gain.strings.dead_time_roots import UndecidedError, zeros_right_of
from synth.gain.strings.hop_network import HopLoop, hop_loops
from synth.local.region import inside_disc
from synth.network.gains import Gains, gain_set
from synth.network.model import Kind, Network

WIDEST = 50.0  # bound of a gain the user did not bound


@dataclass(frozen=True)
class HopTask:
    """What is asked for (see ``hop_design``), and the way from numbers to loops."""

    network: Network
    notion: str
    least: str = "time gap"
    dead_time: Fraction = Fraction(0)
    sensing: Mapping[str, Fraction] = field(default_factory=dict)
    most_jerk: Fraction | None = None
    most_gap: Fraction | None = None
    gap_error: str | None = None

    def __post_init__(self) -> None:
        """InputError where a kind has several actuators, or kinds of one gain set have different sensors."""
        groups: dict[str, Kind] = {}
        for kind in self.network.cell_kinds:
            if kind.sensors != groups.setdefault(kind.group, kind).sensors:
                raise InputError(f"{kind.name!r} shares its gains with a kind that has other sensors.")
            if len(kind.inputs) != 1:
                raise InputError(f"{kind.name!r} has {len(kind.inputs)} actuators; the hop design takes exactly one.")

    def free(self, kind: Kind) -> list[int]:
        """The sensors whose gains are free."""
        actuator = kind.inputs[0].name
        uses = self.network.goal.uses.get(kind.name, {}).get(actuator)
        bounds = self.network.goal.gain_bounds.get(kind.name, {}).get(actuator, {})
        return [
            q
            for q, sensor in enumerate(kind.sensors)
            if (uses is None or sensor.name in uses) and bounds.get(sensor.name, 1) != 0
        ]

    def box(self, kind: Kind) -> list[float]:
        """The largest modulus of every free gain."""
        bounds = self.network.goal.gain_bounds.get(kind.name, {}).get(kind.inputs[0].name, {})
        return [float(bounds.get(kind.sensors[q].name, Fraction(WIDEST))) for q in self.free(kind)]

    def start(self, kind: Kind) -> list[Fraction]:
        """Zero gains."""
        return [Fraction(0)] * len(self.free(kind))

    def gains(self, chosen: Mapping[str, list[Fraction]]) -> Gains:
        """Gains of all kinds."""
        sets = []
        for kind in self.network.cell_kinds:
            row = [Fraction(0)] * len(kind.sensors)
            for q, value in zip(self.free(kind), chosen[kind.name], strict=True):
                row[q] = value
            sets.append(gain_set(kind, ExactMatrix.of([row])))
        return Gains(tuple(sets))

    def loop(self, chosen: Mapping[str, list[Fraction]], kind: Kind) -> HopLoop:
        """The hop of one kind; InputError if it depends on whom it follows."""
        _, loops = hop_loops(
            self.network, self.gains(chosen), self.gap_error, self.dead_time, dict(self.sensing), any_order=True
        )
        mine = [hop for hop in loops if hop.kind == kind.name]
        if len(mine) > 1:
            raise InputError(
                f"what a {kind.name} does depends on the kind it follows, so its gains cannot be designed by itself; "
                "offer the same derivatives of the hop signal in every kind."
            )
        return mine[0]

    def broken(self, hop: HopLoop) -> list[str]:
        """The limits that are not proven to hold (the claim itself is looked at elsewhere)."""
        goal, loop = self.network.goal, hop.loop
        out = []
        if goal.slowest is not None:
            try:
                quick = zeros_right_of(loop.characteristic, goal.slowest) == 0
            except UndecidedError:
                quick = False
            if not quick:
                out.append(f"a mode of {hop.kind} decays slower than {float(goal.slowest):g} 1/s")
        if goal.fastest is not None and not inside_disc(_undelayed(loop), goal.fastest):
            out.append(f"a mode of {hop.kind} is faster than {float(goal.fastest):g} 1/s")
        if self.most_jerk is not None:
            found = peak_of_response(with_rate(loop), "rate", 1e-4)
            if not found.upper <= self.most_jerk:
                out.append(f"the jerk of {hop.kind} is {found.upper:.4g} per unit of acceleration ahead")
        if self.most_gap is not None and time_gap(loop) > self.most_gap:
            out.append(f"the time gap of {hop.kind} is {float(time_gap(loop)):.4g} s")
        return out


def time_gap(loop: DelayLoop) -> Fraction:
    """-T'(0)/T(0) in seconds, exactly: how much later a follower repeats a slow change of its predecessor."""
    num, den = loop.transfer("hop")
    n, d = num.taylor(1), den.taylor(1)
    return d[1] / d[0] - n[1] / n[0]


def _undelayed(loop: DelayLoop) -> list[Fraction]:
    """Characteristic polynomial with every dead time at zero, highest power first."""
    total = [Fraction(0)] * (loop.size + 1)
    for row in loop.characteristic.terms.values():
        for i, c in enumerate(row):
            total[i] += c
    return total[::-1]


def with_rate(loop: DelayLoop) -> DelayLoop:
    """The loop with the outlet 'rate': the derivative of the hop signal without what enters it directly."""
    row = loop.H["hop"] @ loop.now
    through: dict[Fraction, Fraction] = {}
    for d, column in loop.D.items():
        value = (loop.H["hop"] @ column)[0, 0]
        if value:
            through[d] = value
    return DelayLoop(loop.A, loop.D, {**loop.H, "rate": row}, {**loop.F, "rate": through} if through else loop.F)

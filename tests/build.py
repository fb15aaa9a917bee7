"""Small networks built in code, without a problem file, for tests of the later stages (all data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix, Number
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal

M = ExactMatrix.of


def hauler(lag: Number = "0.5", limit: Number | None = "2.5", peak: Number = "0.3") -> Kind:
    """A hauler that holds a slot: slot' = speed, speed' = drive + slope, drive' = (demand + ahead - drive)/lag."""
    rate = 1 / Fraction(lag)
    return Kind(
        name="hauler",
        states=(Signal("slot", "m"), Signal("speed", "m/s"), Signal("drive", "m/s^2")),
        inputs=(Actuator("demand", "m/s^2", None if limit is None else Fraction(limit)),),
        disturbances=(Disturbance("slope", "m/s^2", Fraction(peak)),),
        takes=(Signal("ahead", "m/s^2"),),
        offers=(Signal("place", "m", Fraction("1.5")),),
        sensors=(Signal("slot", "m"), Signal("speed", "m/s"), Signal("drive", "m/s^2")),
        A=M([[0, 1, 0], [0, 0, 1], [0, 0, -rate]]),
        B=M([[0], [0], [rate]]),
        D=M([[0], [0], [rate]]),
        E=M([[0], [1], [0]]),
        C=ExactMatrix.identity(3),
        N=ExactMatrix.zeros(3, 1),
        H=M([[1, 0, 0]]),
        F=ExactMatrix.zeros(1, 1),
        Fw=ExactMatrix.zeros(1, 1),
    )


def convoy(
    strength: Number = "0.5", delay: Number = "0.1", offsets: tuple[int, ...] = (-1,), **changes: object
) -> Network:
    """Haulers that follow the vehicles at ``offsets`` by relative links of the given strength (1/s^2)."""
    g = Fraction(strength)
    links = tuple(Link("follow", "hauler", "place", (at,), "hauler", "ahead", g, g, Fraction(delay)) for at in offsets)
    network = Network(
        title="Invented ore convoy",
        kinds=(hauler(),),
        links=links,
        goal=Goal(Fraction(9, 10), Fraction("0.4"), Fraction(8), Fraction("0.02")),
    )
    return replace(network, **changes)  # type: ignore[arg-type]


def convoy_gains(K: tuple[Number, Number, Number] = ("-6", "-5", "-1.5")) -> Gains:
    """Hand-picked gains for the convoy: stable, well inside the disc of radius 8."""
    return Gains((gain_set(hauler(), M([list(K)])),))


def scalar_kind(a: Number = 1, name: str = "tank", peak: Number = 1) -> Kind:
    """x' = -a x + u + v + w, z = x, sensor x: the smallest kind there is."""
    one = M([[1]])
    zero = ExactMatrix.zeros(1, 1)
    return Kind(
        name,
        (Signal("x", "m"),),
        (Actuator("push", "m/s"),),
        (Disturbance("rain", "m/s", Fraction(peak)),),
        (Signal("inflow", "m/s"),),
        (Signal("level", "m"),),
        (Signal("x", "m"),),
        M([[-Fraction(a)]]),
        one,
        one,
        one,
        one,
        zero,
        one,
        zero,
        zero,
    )

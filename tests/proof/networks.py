"""Networks for the tests of the proof stage (all data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Kind, Link, Network, Signal
from tests.build import M, scalar_kind


def tanks(forward: str = "0.6", back: str = "0.5", delay: str = "0.2") -> tuple[Network, Gains]:
    """Two kinds in the cell: a tank with a limited pump, and a basin (two states, bands) that answer each other."""
    tank = replace(scalar_kind("1", "tank", "0.2"), inputs=(Actuator("push", "m/s", Fraction(2)),))
    basin = Kind(
        "basin",
        (Signal("depth", "m", Fraction(3)), Signal("flow", "m/s")),
        (Actuator("gate", "m/s"),),
        (Disturbance("leak", "m/s", Fraction("0.1")),),
        (Signal("feed", "m"),),
        (Signal("out", "m/s", Fraction(4)),),
        (Signal("depth", "m"), Signal("flow", "m/s")),
        M([["-1", "0.5"], ["-0.5", "-1.5"]]),
        M([[1], [0]]),
        M([["0.5"], ["1"]]),
        M([[1], [0]]),
        ExactMatrix.identity(2),
        ExactMatrix.zeros(2, 1),
        M([[0, 1]]),
        ExactMatrix.zeros(1, 1),
        ExactMatrix.zeros(1, 1),
    )
    d = Fraction(delay)
    links = (
        Link("down", "tank", "level", (-1,), "basin", "feed", Fraction(forward), Fraction(0), d),
        Link("up", "basin", "out", (0,), "tank", "inflow", Fraction(back), Fraction(0), d),
        Link("side", "tank", "level", (1,), "tank", "inflow", Fraction("-0.3"), Fraction("0.1"), d / 2),
    )
    gains = Gains((gain_set(tank, M([["-0.5"]])), gain_set(basin, M([["-0.25", "0"]]))))
    return Network("Invented tanks", (tank, basin), links), gains


def chain(
    decay: str = "1", strength: str = "0.3", delay: str = "0.1", peak: str = "1", at: tuple[int, ...] = (-1, 1)
) -> tuple[Network, Gains]:
    """Scalar units x' = -decay x + v + w that take ``strength`` times the value of every neighbour at ``at``."""
    kind = scalar_kind(decay, peak=peak)
    links = tuple(
        Link("pull", "tank", "level", (k,), "tank", "inflow", Fraction(strength), Fraction(0), Fraction(delay))
        for k in at
    )
    return Network("Invented chain", (kind,), links), Gains((gain_set(kind, M([[0]])),))


def passing(direct: str = "0.25") -> tuple[Network, Gains]:
    """A scalar unit whose offer passes part of what it takes and of its disturbance straight through."""
    kind = replace(scalar_kind("2"), F=M([[direct]]), Fw=M([["0.1"]]))
    link = Link("pass", "tank", "level", (-1,), "tank", "inflow", Fraction("0.8"), Fraction(0), Fraction("0.1"))
    return Network("Invented pass-through", (kind,), (link,)), Gains((gain_set(kind, M([["-0.5"]])),))

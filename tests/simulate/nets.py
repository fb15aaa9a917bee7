"""Invented networks for the simulation tests: two kinds, feed-through, random chains."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Kind, Link, Network, Signal
from tests.build import M, scalar_kind


def tanks(a=1, strength="0.5", offsets=(-1,), delay=0, peak=1):
    """x' = -a x + sum of strength z(i + offset, t - delay) + w; the smallest coupled network, with gains zero."""
    kind = scalar_kind(a, peak=peak)
    links = tuple(
        Link("pipe", "tank", "level", (at,), "tank", "inflow", Fraction(strength), Fraction(0), Fraction(delay))
        for at in offsets
    )
    return Network("Invented tanks", (kind,), links), Gains((gain_set(kind, M([[0]])),))


def pump(feed="0.3"):
    """Two states, two takes, two offers, feed-through from a take and from the disturbance; invented."""
    f = Fraction(feed)
    return Kind(
        "pump",
        (Signal("flow", "m^3/s"), Signal("head", "m")),
        (Actuator("valve", "1"),),
        (Disturbance("inflow", "m^3/s", Fraction("0.5")), Disturbance("leak", "m^3/s", Fraction("0.2"))),
        (Signal("left", "m"), Signal("right", "m")),
        (Signal("head_out", "m"), Signal("mixed", "m")),
        (Signal("flow", "m^3/s"), Signal("left", "m")),
        A=M([[-1, "0.5"], ["-0.5", -2]]),
        B=M([[1], [0]]),
        D=M([["0.4", 0], [0, "0.3"]]),
        E=M([[1, 0], [0, 1]]),
        C=M([[1, 0], [0, 0]]),
        N=M([[0, 0], [1, 0]]),
        H=M([[0, 1], [1, 1]]),
        F=M([[0, 0], [f, 0]]),
        Fw=M([[0, 0], ["0.1", 0]]),
    )


def two_kinds(delay=0, feed="0.3"):
    """Pumps and tanks, linked within the cell and to both neighbours; its gain set uses a sensor that hears a link."""
    pumps, tank = pump(feed), replace(scalar_kind(2, name="tank"), N=ExactMatrix.zeros(1, 1))
    d = Fraction(delay)
    links = (
        Link("up", "tank", "level", (0,), "pump", "left", Fraction("0.4"), delay=d),
        Link("side", "pump", "mixed", (1,), "tank", "inflow", Fraction("-0.3"), delay=d),
        Link("back", "pump", "head_out", (-1,), "pump", "right", Fraction("0.5"), Fraction("0.5"), d),
        Link("cross", "pump", "mixed", (-1,), "pump", "left", Fraction("0.2"), delay=d),
    )
    network = Network("Invented pumps and tanks", (pumps, tank), links)
    return network, Gains((gain_set(pumps, M([["-0.5", "0.1"]])), gain_set(tank, M([["-1"]]))))

"""Networks on which the design is measured against a global search; all data invented."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

from synth.base.exact import ExactMatrix
from synth.network import read
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal
from tests.build import M, convoy, hauler

CONVOY = Path(__file__).parents[2] / "case_studies" / "convoy" / "convoy.yaml"


def light_unit(limit: str = "1.2") -> Network:
    """Masses on soft springs with little damping, x'' + .1 x' + x = push + pull, pulled by both neighbours."""
    kind = Kind(
        name="mass",
        states=(Signal("place", "m"), Signal("speed", "m/s")),
        inputs=(Actuator("push", "m/s^2", Fraction(limit)),),
        disturbances=(Disturbance("gust", "m/s^2", Fraction("0.5")),),
        takes=(Signal("pull", "m/s^2"),),
        offers=(Signal("offset", "m"),),
        sensors=(Signal("place", "m"), Signal("speed", "m/s")),
        A=M([[0, 1], [-1, "-0.1"]]), B=M([[0], [1]]), D=M([[0], [1]]), E=M([[0], [1]]),
        C=ExactMatrix.identity(2), N=ExactMatrix.zeros(2, 1), H=M([[1, 0]]),
        F=ExactMatrix.zeros(1, 1), Fw=ExactMatrix.zeros(1, 1),
    )  # fmt: skip
    g = Fraction("0.3")
    links = tuple(Link("spring", "mass", "offset", (at,), "mass", "pull", g) for at in (-1, 1))
    return Network("Invented light masses", (kind,), links, Goal(Fraction(9, 10), Fraction("0.2"), Fraction(5)))


def mixed_convoy() -> Network:
    """Two kinds in one cell: light and heavy haulers in turn, each following both neighbours."""
    light = replace(hauler("0.4", "2.5"), name="light")
    heavy = replace(hauler("0.9", "1.6", "0.2"), name="heavy")
    g = Fraction("0.4")
    links = (
        Link("follow", "heavy", "place", (-1,), "light", "ahead", g, g),
        Link("follow", "light", "place", (0,), "heavy", "ahead", g, g),
        Link("behind", "heavy", "place", (0,), "light", "ahead", g / 2),
        Link("behind", "light", "place", (1,), "heavy", "ahead", g / 2),
    )
    return Network("Invented mixed convoy", (light, heavy), links, Goal(Fraction(9, 10), Fraction("0.4"), Fraction(6)))


def without_drive() -> Network:
    """The convoy whose controllers may not use the drive sensor."""
    network = convoy()
    return replace(network, goal=replace(network.goal, uses={"hauler": {"demand": ("slot", "speed")}}))


def tight(limit: str = "0.75") -> Network:
    """The convoy with an actuator limit that decides the design."""
    return replace(convoy(), kinds=(hauler(limit=limit),))


def bounded() -> Network:
    """The convoy with two gains bounded by 20."""
    network = convoy()
    bounds = {"hauler": {"demand": {"slot": Fraction(20), "speed": Fraction(20)}}}
    return replace(network, goal=replace(network.goal, gain_bounds=bounds))


def cases() -> dict[str, Network]:
    """All of them by name, without a sample period: these are about the design of the continuous loop."""
    return {name: replace(network, goal=replace(network.goal, period=None)) for name, network in _declared().items()}


def _declared() -> dict[str, Network]:
    return {
        "case study convoy": read(CONVOY),
        "convoy": convoy(),
        "convoy, both neighbours": convoy(offsets=(-1, 1)),
        "convoy, no actuator limit": replace(convoy(), kinds=(hauler(limit=None),)),
        "convoy, actuator limit 0.75 m/s^2": tight(),
        "convoy, no drive sensor": without_drive(),
        "convoy, two gains bounded by 20": bounded(),
        "lightly damped masses": light_unit(),
        "two kinds in one cell": mixed_convoy(),
    }

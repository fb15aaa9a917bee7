"""Networks whose target is out of reach for one reason each; all data invented.

A unit of two states, x'' = push + pull + gust with a sensor for both, pulled by its neighbours; every limit is generous
except the one that the name says.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal
from tests.build import M


def roomy(strength: str = "1", limit: str = "50") -> Network:
    """The network with room in every limit."""
    kind = Kind(
        name="cart",
        states=(Signal("place", "m"), Signal("speed", "m/s")),
        inputs=(Actuator("push", "m/s^2", Fraction(limit)),),
        disturbances=(Disturbance("gust", "m/s^2", Fraction("0.5")),),
        takes=(Signal("pull", "m/s^2"),),
        offers=(Signal("offset", "m", Fraction(10)),),
        sensors=(Signal("place", "m"), Signal("speed", "m/s")),
        A=M([[0, 1], [-1, "-0.4"]]), B=M([[0], [1]]), D=M([[0], [1]]), E=M([[0], [1]]),
        C=ExactMatrix.identity(2), N=ExactMatrix.zeros(2, 1), H=M([[1, 0]]),
        F=ExactMatrix.zeros(1, 1), Fw=ExactMatrix.zeros(1, 1),
    )  # fmt: skip
    links = tuple(Link("tie", "cart", "offset", (at,), "cart", "pull", Fraction(strength)) for at in (-1, 1))
    goal = Goal(
        Fraction("0.3"), Fraction("0.1"), Fraction(20),
        gain_bounds={"cart": {"push": {"place": Fraction(200), "speed": Fraction(60)}}},
    )  # fmt: skip
    return Network("Invented carts on a line", (kind,), links, goal)


def unreachable() -> dict[str, Network]:
    """By the cause that is the true one."""
    network = roomy()
    kind, goal = network.kinds[0], network.goal
    bounds = {"cart": {"push": {"place": Fraction(2), "speed": Fraction(60)}}}
    blind = replace(kind, sensors=kind.sensors[:1], C=M([[1, 0]]), N=ExactMatrix.zeros(1, 1))
    only_place = {"cart": {"push": {"place": Fraction(200)}}}
    through = replace(kind, F=M([["0.4"]]))
    return {
        "fastest": replace(network, goal=replace(goal, fastest=Fraction(2))),
        "actuator limit": roomy(limit="0.3"),
        "gain bound": replace(network, goal=replace(goal, gain_bounds=bounds)),
        "structure": replace(network, goal=replace(goal, uses={"cart": {"push": ("place",)}})),
        "sensors": replace(network, kinds=(blind,), goal=replace(goal, gain_bounds=only_place)),
        "link strength": replace(network, kinds=(through,)),
    }

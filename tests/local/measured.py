"""Twelve small units that measure less than their state or may not use all of it; at most two gains are free.

So few gains can be tried on a fine grid, which gives the truth that the search is measured against. All data invented.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from synth.base.exact import ExactMatrix, Number
from synth.network.model import Actuator, Disturbance, Goal, Kind, Link, Network, Signal
from tests.build import M

Rows = list[list[Number]]
_UNITS = ("m", "m/s", "m/s^2")


def network_of(
    A: Rows, B: Rows, C: Rows, D: Rows, strength: str, uses: dict[str, tuple[str, ...]] | None = None,
    offsets: tuple[int, ...] = (-1, 1), N: Rows | None = None, fastest: str = "9",
) -> Network:  # fmt: skip
    """One kind with the given matrices; it offers its first state."""
    n, m, p = len(A), len(B[0]), len(C)
    kind = Kind(
        name="unit",
        states=tuple(Signal(f"x{i}", _UNITS[i]) for i in range(n)),
        inputs=tuple(Actuator(f"u{i}", "N") for i in range(m)),
        disturbances=(Disturbance("w", "N", Fraction("0.1")),),
        takes=(Signal("v", "m"),),
        offers=(Signal("z", "m"),),
        sensors=tuple(Signal(f"y{i}", "m") for i in range(p)),
        A=M(A), B=M(B), D=M(D), E=M(D), C=M(C), N=ExactMatrix.zeros(p, 1) if N is None else M(N),
        H=M([[1, *[0] * (n - 1)]]), F=ExactMatrix.zeros(1, 1), Fw=ExactMatrix.zeros(1, 1),
    )  # fmt: skip
    links = tuple(Link("tie", "unit", "z", (at,), "unit", "v", Fraction(strength)) for at in offsets)
    goal = Goal(Fraction(9, 10), Fraction("0.1"), Fraction(fastest), uses={"unit": uses or {}})
    return Network("Invented units that measure little", (kind,), links, goal)


def cases() -> dict[str, Network]:
    """All twelve by name."""
    mass: Rows = [[0, 1], [-1, "-0.3"]]
    fall: Rows = [[0, 1], [1, "-0.8"]]  # falls over by itself
    chain: Rows = [[0, 1, 0], [0, 0, 1], [0, "-1.2", "-2"]]
    lag: Rows = [["-1", "2", 0], [0, "-2", 1], [0, 0, "-3"]]
    last2: Rows = [[0], [1]]
    last3: Rows = [[0], [0], [1]]
    both: Rows = [[1, 0], [0, 1]]
    half = network_of(chain, last3, [[1, 0, 0], [0, 1, 0]], last3, "0.05", fastest="6")
    return {
        "mass, place": network_of(mass, last2, [[1, 0]], last2, "0.2"),
        "mass, speed": network_of(mass, last2, [[0, 1]], last2, "0.2"),
        "mass, place and speed mixed": network_of(mass, last2, [["1", "0.4"]], last2, "0.2"),
        "falls, mixed": network_of(fall, last2, [["1", "0.7"]], last2, "0.1"),
        "falls, two mixed": network_of(fall, last2, [["1", "0.2"], ["1", "0.9"]], last2, "0.1"),
        "chain, place and speed": half,
        "chain, two pushes crossed": network_of(
            chain, [[0, 0], [1, 0], [0, 1]], [[1, 0, 0], [0, 1, 0]], last3, "0.05",
            {"u0": ("y0",), "u1": ("y1",)}, fastest="6",
        ),
        "lag, last": network_of(lag, last3, [[0, 0, 1]], [[1], [0], [0]], "0.2"),
        "lag, first, pushed in the middle": network_of(lag, [[0], [1], [0]], [[1, 0, 0]], last3, "0.3", offsets=(-1,)),
        "two inputs, own sensors": network_of(
            [["-0.5", 1], ["-1", "-0.2"]], both, both, [[1], [1]], "0.4", {"u0": ("y0",), "u1": ("y1",)}
        ),
        "two inputs, crossed": network_of(
            [["-0.5", 1], ["-1", "-0.2"]], both, both, [[1], [1]], "0.4", {"u0": ("y1",), "u1": ("y0",)}
        ),
        "mass that hears its neighbours": network_of(
            mass, last2, [[1, 0], [0, 0]], last2, "0.3", N=[["0"], ["1"]]
        ),
    }  # fmt: skip


def with_limit(network: Network, limit: str) -> Network:
    """The network whose actuators have a limit."""
    (kind,) = network.kinds
    inputs = tuple(replace(a, limit=Fraction(limit)) for a in kind.inputs)
    return replace(network, kinds=(replace(kind, inputs=inputs),))

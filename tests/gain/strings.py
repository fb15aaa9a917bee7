"""Strings that see only gaps, built in code (invented data): gap, speed and drive train of each vehicle."""

from __future__ import annotations

from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Kind, Link, Network, Signal

M = ExactMatrix.of


def vehicle(name: str, tau, h) -> Kind:
    """gap' = ahead - speed, speed' = drive + push, drive' = (demand - drive)/tau; spacing = gap - h speed."""
    tau, h = Fraction(tau), Fraction(h)
    return Kind(
        name=name,
        states=(Signal("gap", "m"), Signal("speed", "m/s"), Signal("drive", "m/s^2")),
        inputs=(Actuator("demand", "m/s^2"),),
        disturbances=(Disturbance("push", "m/s^2", Fraction(1)),),
        takes=(Signal("ahead", "m/s"), Signal("radio", "m/s^2")),
        offers=(Signal("speed", "m/s"), Signal("drive", "m/s^2"), Signal("spacing", "m")),
        sensors=(Signal("spacing", "m"), Signal("closing", "m/s"), Signal("heard", "m/s^2"), Signal("drive", "m/s^2")),
        A=M([[0, -1, 0], [0, 0, 1], [0, 0, -1 / tau]]),
        B=M([[0], [0], [1 / tau]]),
        D=M([[1, 0], [0, 0], [0, 0]]),
        E=M([[0], [1], [0]]),
        C=M([[1, -h, 0], [0, -1, 0], [0, 0, 0], [0, 0, 1]]),
        N=M([[0, 0], [1, 0], [0, 1], [0, 0]]),
        H=M([[0, 1, 0], [0, 0, 1], [1, -h, 0]]),
        F=ExactMatrix.zeros(3, 2),
        Fw=ExactMatrix.zeros(3, 1),
    )


def string(*vehicles: tuple, radio_delay=None) -> tuple[Network, Gains]:
    """Vehicles (tau, h, kp, kv, ka) repeated in this order; ka weighs the predecessor's drive if there is radio."""
    kinds = tuple(vehicle(f"type{i}", v[0], v[1]) for i, v in enumerate(vehicles))
    links = []
    for i, kind in enumerate(kinds):
        before, at = (kinds[i - 1].name, (0,)) if i else (kinds[-1].name, (-1,))
        links.append(Link("speed", before, "speed", at, kind.name, "ahead", Fraction(1)))
        if radio_delay is not None:
            links.append(
                Link("radio", before, "drive", at, kind.name, "radio", Fraction(1), delay=Fraction(radio_delay))
            )
    gains = Gains(
        tuple(
            gain_set(kind, M([[v[2], v[3], v[4] if len(v) > 4 else 0, 0]]))
            for kind, v in zip(kinds, vehicles, strict=True)
        )
    )
    return Network("Invented string", kinds, tuple(links)), gains


def classic(tau, h, lam) -> tuple[Network, Gains]:
    """The law of Swaroop and Rajagopal: u = (closing + lam spacing)/h."""
    tau, h, lam = Fraction(tau), Fraction(h), Fraction(lam)
    return string((tau, h, lam / h, 1 / h))

"""Says in plain words what a mode is that no local feedback can move, and what would change that."""

from __future__ import annotations

import math
from collections.abc import Mapping


def movement(theta: float) -> str:
    """How the units move when the phase from one cell to the next is ``theta``."""
    if theta == 0:
        return "all units moving together by the same amount"
    if theta == math.pi:
        return "neighbouring units moving in opposite directions"
    return f"a wave along the line that repeats about every {2 * math.pi / theta:.3g} cells"


def _growth(s: complex) -> str:
    if abs(s) < 1e-9:
        return "neither grows nor decays"
    if s.real < 1e-9:
        return f"swings without decay at {abs(s.imag):.3g} rad/s"
    return f"grows at {s.real:.3g} per second"


def advise(
    theta: float,
    s: complex,
    direction: Mapping[str, complex],
    cause: str,
    helpful: tuple[str, ...],
    sensors: tuple[str, ...],
) -> str:
    """The advice of an obstruction: what moves, why no gains help, what to measure or drive.

    ``helpful`` are the states that would each make the mode visible; ``sensors`` what the controllers read now.
    """
    moving = " and ".join(direction)
    how = movement(theta)
    if cause == "not reached":
        return (
            f"No actuator reaches {moving} with {how}; this mode {_growth(s)}, so no gains can prove a decay. Give an "
            f"actuator to a unit that moves {moving}, add a link that carries an actuator's effect there, or "
            "correct the "
            "model if the mode really decays."
        )
    reads = f" (they read {', '.join(sensors)})" if sensors else ""
    remedy = " or ".join(helpful or tuple(direction))
    text = (
        f"No controller{reads} sees a change of {moving} with {how}; this mode {_growth(s)}, "
        "so no gains can prove a decay. "
    )
    if theta == 0:
        return text + (
            f"Measure {remedy} in the units themselves, against something outside the line (a position, a "
            "schedule, a common "
            "reference). A leader at the edge does not help, because what it knows fades along the line: the "
            "reference must "
            "reach units at bounded gaps."
        )
    return text + f"Measure {remedy} in the units themselves, or change the offsets of the links that the sensors hear."

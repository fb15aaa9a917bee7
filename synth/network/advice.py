"""Says in plain words what a mode is that no local feedback can move, and what would change that."""

from __future__ import annotations

import math
from collections.abc import Mapping


def movement(theta: tuple[float, ...]) -> str:
    """How the units move when the phases from one cell to the next are ``theta``."""
    if not any(theta):
        return "all units moving together by the same amount"
    along = "" if len(theta) == 1 else f" along dimension {' and '.join(str(i + 1) for i, t in enumerate(theta) if t)}"
    if all(t in (0, math.pi) for t in theta):
        return f"neighbouring units moving in opposite directions{along}"
    if len(theta) == 1:
        return f"a wave along the line that repeats about every {abs(2 * math.pi / theta[0]):.3g} cells"
    lengths = " and ".join(
        f"{abs(2 * math.pi / t):.3g} cells along dimension {i + 1}" for i, t in enumerate(theta) if abs(t) > 1e-6
    )
    return f"a wave that repeats about every {lengths}"


def _growth(s: complex) -> str:
    if abs(s) < 1e-9:
        return "neither grows nor decays"
    if s.real < 1e-9:
        return f"swings without decay at {abs(s.imag):.3g} rad/s"
    return f"grows at {s.real:.3g} per second"


def advise(
    theta: tuple[float, ...],
    s: complex,
    direction: Mapping[str, complex],
    cause: str,
    helpful: tuple[str, ...],
    sensors: tuple[str, ...],
    leaders: tuple[str, ...] = (),
) -> str:
    """The advice of an obstruction of a pattern: what moves, why no gains help, what to measure or drive.

    ``helpful`` are the states that would each make the mode visible; ``sensors`` what the controllers read now;
    ``leaders`` the units that stand at an edge.
    """
    moving = " and ".join(direction)
    how = movement(theta)
    if cause == "not reached":
        return not_reached(moving, how, s)
    reads = f" (they read {', '.join(sensors)})" if sensors else ""
    remedy = " or ".join(helpful or tuple(direction))
    text = not_seen(moving, how, s, reads)
    if not any(theta):
        fades = "along the line" if len(theta) <= 1 else "with the distance"
        units = f" ({', '.join(leaders)})" if leaders else ""
        return text + (
            f"Measure {remedy} in the units themselves, against something outside the "
            f"{'line' if len(theta) <= 1 else 'field'} (a position, a schedule, a common reference). A leader at the "
            f"edge{units} does not help, because what it knows fades {fades}: the reference must reach units at "
            f"bounded "
            "gaps."
        )
    return text + f"Measure {remedy} in the units themselves, or change the offsets of the links that the sensors hear."


def not_reached(moving: str, how: str, s: complex) -> str:
    """The advice where no actuator reaches the mode."""
    return (
        f"No actuator reaches {moving} with {how}; this mode {_growth(s)}, so no gains can prove a decay. Give an "
        f"actuator to a unit that moves {moving}, add a link that carries an actuator's effect there, or "
        "correct the "
        "model if the mode really decays."
    )


def not_seen(moving: str, how: str, s: complex, reads: str = "") -> str:
    """The first sentence where no controller sees the mode."""
    return (
        f"No controller{reads} sees a change of {moving} with {how}; this mode {_growth(s)}, "
        "so no gains can prove a decay. "
    )


def several(names: tuple[str, ...], most: int = 4) -> str:
    """A list of names that stays short."""
    if len(names) <= most:
        return " and ".join(names)
    return f"{', '.join(names[:most])} and {len(names) - most} more"

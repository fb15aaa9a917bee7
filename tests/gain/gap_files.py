"""Problem files of strings that see only gaps, as mappings (invented data), and gains in the law of the time gap."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from synth.base.exact import ExactMatrix
from synth.network import Network, read
from synth.network.gains import Gains, gain_set

TYPES = {"loaded": ("0.5", "2"), "empty": ("0.3", "1.2"), "water": ("0.4", "1.6")}


def kind(lag: str, headway: str, radio: bool) -> dict[str, Any]:
    """A vehicle: drive train with a lag, a spacing policy with a headway, radio if asked for."""
    takes, offers = {"ahead": "m/s"}, {"speed": {"is": "speed"}, "spacing": {"is": "gap - headway*speed"}}
    sensors = {"spacing": {"is": "gap - headway*speed"}, "closing": {"is": "ahead - speed"}}
    if radio:
        takes["radio"], offers["drive"], sensors["heard"] = "m/s^2", {"is": "drive"}, {"is": "radio"}
    return {
        "parameters": {"lag": f"{lag} s", "headway": f"{headway} s"},
        "states": {"gap": "m", "speed": "m/s", "drive": "m/s^2"},
        "inputs": {"demand": {"in": "m/s^2", "limit": "3.5"}},
        "disturbances": {"slope": {"in": "m/s^2", "peak": "0.3"}},
        "takes": takes,
        "offers": offers,
        "sensors": sensors,
        "equations": {"gap'": "ahead - speed", "speed'": "drive + slope", "drive'": "(demand - drive)/lag"},
    }


def document(*names: str, heard: str = "", types: dict[str, tuple[str, str]] = TYPES, **hop: Any) -> dict[str, Any]:
    """The problem file of a string of these types; ``heard``: delay of a radio that brings the drive ahead, or empty.

    ``hop``: keys of the section ``hop`` beside those written here.

    A key whose value is None is left out.
    """
    links = []
    for i, name in enumerate(names):
        before, at = (names[i - 1], 0) if i else (names[-1], -1)
        links.append({"name": "sight", "from": f"{before}.speed", "at": at, "to": f"{name}.ahead", "strength": 1})
        if heard:
            links.append(
                {
                    "name": "radio",
                    "from": f"{before}.drive",
                    "at": at,
                    "to": f"{name}.radio",
                    "strength": 1,
                    "delay": heard,
                }
            )
    asked = {
        "notion": "peak",
        "signal": "speed",
        "gap_error": "spacing",
        "any_order": True,
        "gap_parameter": "headway",
        "standstill": "4 m",
        "leader": {"acceleration": "1.5 m/s^2", "speed": "10 m/s"},
        **hop,
    }
    return {
        "synth": 1,
        "title": "Invented string",
        "kinds": {name: kind(*types[name], radio=bool(heard)) for name in names},
        "network": {"pattern": {"dimension": 1, "links": links}},
        "design": {"claim": "hop", "hop": {k: v for k, v in asked.items() if v is not None}},
        "simulation": {"units": 6, "seconds": "20 s"},
    }


def network(*names: str, heard: str = "", types: dict[str, tuple[str, str]] = TYPES, **hop: Any) -> Network:
    """The same, read."""
    return read(document(*names, heard=heard, types=types, **hop))


def gains(
    string: Network, convergence: str = "0.4", weight: str = "0", types: dict[str, tuple[str, str]] = TYPES
) -> Gains:
    """u = (closing + convergence spacing)/headway + weight radio."""
    sets = []
    for unit in string.kinds:
        h = Fraction(types[unit.name][1])
        row = [Fraction(convergence) / h, 1 / h, Fraction(weight)][: len(unit.sensors)]
        sets.append(gain_set(unit, ExactMatrix.of([row])))
    return Gains(tuple(sets))

"""Small results with the interface of the later stages, for tests of the page (all numbers invented)."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from synth.base.provenance import Provenance
from synth.margin.exact import ExactLimit
from synth.margin.result import LinkTolerance, Margin
from synth.network.gains import Gains
from synth.simulate.trajectory import Run, Trajectory, Worst


def exact_limit(**changes: Any) -> ExactLimit:
    return replace(
        ExactLimit(4.1875, 4.1885, lower_certified=True, upper_certified=True, between_certified=True), **changes
    )


def margin(**changes: Any) -> Margin:
    """Proven to 1.6253 times, class lost at 1.6331, network breaks near 4.19."""
    values: dict[str, Any] = {
        "proven_factor": 1.6253,
        "class_limit": 1.6331,
        "exact": exact_limit(),
        "exact_no_delay": exact_limit(),
        "covered": 1.6253,
        "capped": False,
        "class_capped": False,
        "route": "peak",
        "classes": None,
        "own_parts": True,
        "relative": True,
        "links": (LinkTolerance("follow", "hauler follows i - 1", 1.6253, math.inf),),
        "bottleneck": (("follow", 1.0),),
        "within_limits_factor": 1.2207,
        "within_limits_certified": True,
        "redesigned": None,
        "certificate": None,
        "notes": ("A note about the margin.",),
        "units_word": "haulers",
        "provenance": Provenance("0" * 64),
    }
    return Margin(**{**values, **changes})


def run(name: str, heights: tuple[float, ...], **changes: Any) -> Run:
    """A run in which unit k answers with heights[k] (1 - e^-t) on every signal; only unit 0 is disturbed."""
    time = np.linspace(0.0, 10.0, 101)
    shape = (1 - np.exp(-time))[:, None, None] * np.array(heights)[None, :, None]
    pushed = np.zeros((101, len(heights), 1))
    pushed[:, 0] = 0.3
    values: dict[str, Any] = {
        "name": name,
        "words": f"what happens in {name}",
        "counted": True,
        "reason": "",
        "X0": 0.0,
        "violations": 0,
        "G_ratio": 0.25,
        "envelope_ratio": 0.0,
        "worst_signal": max(heights) / 0.5,
        "saturated": False,
        "stopped": None,
        "time": time,
        "states": {"hauler": np.repeat(shape, 3, axis=2)},
        "offers": {"hauler": shape},
        "actuators": {"hauler": shape},
        "disturbances": {"hauler": pushed},
    }
    return Run(**{**values, **changes})


def trajectory(**changes: Any) -> Trajectory:
    """Six units, three runs, one guaranteed peak of 0.5 m for the offered place."""
    runs = (
        run("leader", (0.3, 0.2, 0.12, 0.07, 0.04, 0.02)),
        run("step", (0.31, 0.32, 0.33, 0.34, 0.34, 0.34)),
        run("adversary against hauler.place", (0.3, 0.38, 0.43, 0.46, 0.48, 0.4875)),
    )
    signals = {
        "hauler": {
            "states": (("slot", "m"), ("speed", "m/s"), ("drive", "m/s^2")),
            "offers": (("place", "m"),),
            "actuators": (("demand", "m/s^2"),),
            "disturbances": (("slope", "m/s^2"),),
        }
    }
    row = {"kind": "hauler", "role": "offer", "signal": "place", "in": "m"}
    measures = {
        "signals": [{**row, "peak": 0.4875, "guaranteed": 0.5, "ratio": 0.975}],
        "amplification": [{"kind": "hauler", "offer": "place", "successive": 0.6667, "last_over_first": 0.0667}],
        "settling": 7.25,
    }
    values: dict[str, Any] = {
        "units": 6,
        "seconds": 10.0,
        "checked": True,
        "violations": 0,
        "worst": Worst(0.8125, 0.3125),
        "measures": measures,
        "runs": runs,
        "signals": signals,
        "notes": ("A note about the simulation.",),
        "provenance": Provenance("0" * 64),
    }
    return Trajectory(**{**values, **changes})


@dataclass(frozen=True)
class FakeDesign:
    gains: Gains
    target: float = 0.9
    reached: bool = True

    def explain(self) -> str:
        return "the limit of hauler.demand blocks; 3.1 m/s^2 would do"

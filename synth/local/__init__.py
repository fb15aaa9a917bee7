"""From a network to local gains: the search.

In comes a network with its goal; out comes a ``Design``: exact gains, a guaranteed enclosure of the radius and, where
the target is out of reach, the limit to blame. It stands on the cell problem of theory section 5 to start and, by (16),
on the exact peak gains of theory (1) and (3) to finish.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.local.admitting import Admission as Admission
    from synth.local.admitting import admit as admit
    from synth.local.aims import AimedPeak as AimedPeak
    from synth.local.blocking import Blocking as Blocking
    from synth.local.blocking import Curve as Curve
    from synth.local.blocking import Tried as Tried
    from synth.local.designing import Design as Design
    from synth.local.designing import redesign as redesign
    from synth.local.hop_designing import HopDesign as HopDesign
    from synth.local.hop_designing import hop_design as hop_design
    from synth.local.obstructed import ObstructionFound as ObstructionFound
    from synth.local.positive.design import PositiveDesign as PositiveDesign
    from synth.local.positive.design import positive_design as positive_design
    from synth.local.positive.web import Positivity as Positivity
    from synth.local.positive.web import positivity as positivity
    from synth.local.sampled_design import design as design
    from synth.local.sampled_outcome import Sampled as Sampled
    from synth.local.schedule import GainSchedule as GainSchedule
    from synth.local.schedule import gain_schedule as gain_schedule
    from synth.local.schedule_grid import Grid as Grid
    from synth.local.schedule_grid import chosen_grid as chosen_grid
    from synth.local.schedule_grid import grid_of as grid_of

_HOMES = {
    "AimedPeak": "aims",
    "Admission": "admitting",
    "GainSchedule": "schedule",
    "Grid": "schedule_grid",
    "PositiveDesign": "positive.design",
    "HopDesign": "hop_designing",
    "Positivity": "positive.web",
    "hop_design": "hop_designing",
    "admit": "admitting",
    "chosen_grid": "schedule_grid",
    "gain_schedule": "schedule",
    "grid_of": "schedule_grid",
    "positive_design": "positive.design",
    "positivity": "positive.web",
    "Blocking": "blocking",
    "Curve": "blocking",
    "Design": "designing",
    "ObstructionFound": "obstructed",
    "Tried": "blocking",
    "Sampled": "sampled_outcome",
    "design": "sampled_design",
    "redesign": "designing",
}

__all__ = [
    "Admission",
    "AimedPeak",
    "Blocking",
    "Curve",
    "Design",
    "GainSchedule",
    "Grid",
    "HopDesign",
    "ObstructionFound",
    "PositiveDesign",
    "Positivity",
    "Sampled",
    "Tried",
    "admit",
    "chosen_grid",
    "design",
    "gain_schedule",
    "grid_of",
    "hop_design",
    "positive_design",
    "positivity",
    "redesign",
]


def __getattr__(name: str) -> object:
    """Import a public name when it is first used, so that importing the package stays light."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])

"""How much stronger the coupling may get: in come a network and its gains, out comes a Margin.

It holds three limits on the strength of the links, each with its own meaning: what is proven for any number of units
(a certificate is attached), where the guarantee for every link behaviour is lost, and where the declared network
breaks. It stands on theory (1), (2), (15) and section 9: small gain for the proof, its exactness for the class, and
the roots of the network's symbol for the exact limit.

The package is callable: ``synth.margin(network, design)`` is ``synth.margin.margin(network, design)``.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth.margin.exact import ExactLimit as ExactLimit
    from synth.margin.find import margin as margin
    from synth.margin.gap import SmallestGap as SmallestGap
    from synth.margin.gap import TimeGapPolicy as TimeGapPolicy
    from synth.margin.gap import gap_table as gap_table
    from synth.margin.gap import smallest_gap as smallest_gap
    from synth.margin.hop_finding import HopMargin as HopMargin
    from synth.margin.hop_finding import hop_margin as hop_margin
    from synth.margin.result import LinkTolerance as LinkTolerance
    from synth.margin.result import Margin as Margin
    from synth.margin.roots import rightmost_roots as rightmost_roots
    from synth.margin.tolerance import FiniteLink as FiniteLink
    from synth.margin.tolerance import finite_link_tolerances as finite_link_tolerances
    from synth.margin.tolerance import pattern_link_tolerances as pattern_link_tolerances

_HOMES = {
    "ExactLimit": "exact",
    "FiniteLink": "tolerance",
    "HopMargin": "hop_finding",
    "LinkTolerance": "result",
    "Margin": "result",
    "SmallestGap": "gap",
    "TimeGapPolicy": "gap",
    "finite_link_tolerances": "tolerance",
    "gap_table": "gap",
    "hop_margin": "hop_finding",
    "margin": "find",
    "pattern_link_tolerances": "tolerance",
    "rightmost_roots": "roots",
    "smallest_gap": "gap",
}

__all__ = [
    "ExactLimit",
    "FiniteLink",
    "HopMargin",
    "LinkTolerance",
    "Margin",
    "SmallestGap",
    "TimeGapPolicy",
    "finite_link_tolerances",
    "gap_table",
    "hop_margin",
    "margin",
    "pattern_link_tolerances",
    "rightmost_roots",
    "smallest_gap",
]


class _CallableStage(ModuleType):
    """A module that can be called: the stage and the call that runs it share one name."""

    def __call__(self, *args: Any, **settings: Any) -> Any:
        """Run :func:`synth.margin.find.margin` with the same arguments."""
        return import_module("synth.margin.find").margin(*args, **settings)


sys.modules[__name__].__class__ = _CallableStage


def __getattr__(name: str) -> Any:
    """Import a public name when it is first used, so that importing the package stays light."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    """The public names."""
    return sorted(__all__)

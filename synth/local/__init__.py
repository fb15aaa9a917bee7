"""From a network to local gains: the search.

In comes a network with its goal; out comes a ``Design``: exact gains, a guaranteed enclosure of the radius and, where
the target is out of reach, the limit to blame. It stands on the cell problem of theory section 5 to start and, by (16),
on the exact peak gains of theory (1) and (3) to finish.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.local.blocking import Blocking as Blocking
    from synth.local.designing import Design as Design
    from synth.local.designing import design as design
    from synth.local.designing import redesign as redesign
    from synth.local.obstructed import ObstructionFound as ObstructionFound

_HOMES = {
    "Blocking": "blocking",
    "Design": "designing",
    "ObstructionFound": "obstructed",
    "design": "designing",
    "redesign": "designing",
}

__all__ = ["Blocking", "Design", "ObstructionFound", "design", "redesign"]


def __getattr__(name: str) -> object:
    """Import a public name when it is first used, so that importing the package stays light."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])

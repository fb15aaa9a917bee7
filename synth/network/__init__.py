"""What comes in is a problem file in the words of the user's trade; what goes out is the frozen ``Network``.

Equations become exact matrices in the declared units, links become strengths and offsets of a pattern without end,
and everything that is wrong is said at once, each with its line and column. It stands on theory section 1 (the model)
and on statement (26), which tells before any search what no local feedback can prove.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.network.description import Description, describe
    from synth.network.export import kind_to_statespace, section_to_statespace
    from synth.network.gain_table import read_gains
    from synth.network.gains import Gains, GainSet
    from synth.network.model import Kind, Link, Network
    from synth.network.obstructions import Obstruction, obstruction
    from synth.network.reader import read

_HOMES = {
    "read": "reader",
    "read_gains": "gain_table",
    "obstruction": "obstructions",
    "Obstruction": "obstructions",
    "kind_to_statespace": "export",
    "section_to_statespace": "export",
    "describe": "description",
    "Description": "description",
    "Network": "model",
    "Kind": "model",
    "Link": "model",
    "Gains": "gains",
    "GainSet": "gains",
}

__all__ = [
    "Description",
    "GainSet",
    "Gains",
    "Kind",
    "Link",
    "Network",
    "Obstruction",
    "describe",
    "kind_to_statespace",
    "obstruction",
    "read",
    "read_gains",
    "section_to_statespace",
]


def __getattr__(name: str) -> object:
    """Import a public name when it is first asked for, so that importing the package stays quick."""
    if name in _HOMES:
        return getattr(importlib.import_module(f"synth.network.{_HOMES[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")

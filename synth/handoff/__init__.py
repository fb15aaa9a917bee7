"""From proven gains to a folder that a firmware team can use and re-verify without this tool.

In come a network, its exact gains and an accepted certificate; out goes a bundle: gain tables with units, the
certificate, its stand-alone checker, scaling hints and a manifest, written whole or not at all. It stands on no theorem
of its own: it carries the claim of the certificate (theory 2 and 10) unchanged and says what that claim does not reach,
above all the code as flashed.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from synth.handoff.bundle import Bundle, UnprovenTable, hand_off

__all__ = ["Bundle", "UnprovenTable", "hand_off"]


def __getattr__(name: str) -> Any:
    """Load a public name when it is first asked for."""
    if name in __all__:
        from synth.handoff import bundle

        return getattr(bundle, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")

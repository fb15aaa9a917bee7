"""From a pattern or members and their closed units to the numbers of the window route (theory (20) and (21)).

In come a network and its gains; out comes an enclosure of the radius that remains when every unit is looked at
together with all units around it, whose links among each other are taken exactly. It stands on the same small-gain
theorem as the peak route: radius below one means stability for any number of units, whatever the links at the windows'
edge do.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.gain.window.build import Closure as Closure
    from synth.gain.window.build import Window as Window
    from synth.gain.window.constants import WindowConstants as WindowConstants
    from synth.gain.window.constants import window_constants as window_constants
    from synth.gain.window.factor import WindowFactor as WindowFactor
    from synth.gain.window.factor import window_factor as window_factor
    from synth.gain.window.growth import grown_radius as grown_radius
    from synth.gain.window.nominal import LinkSwing as LinkSwing
    from synth.gain.window.nominal import link_swing as link_swing
    from synth.gain.window.nominal import swing_matrix as swing_matrix
    from synth.gain.window.peaks import WindowPeaks as WindowPeaks
    from synth.gain.window.peaks import window_peaks as window_peaks
    from synth.gain.window.route import Knowledge as Knowledge
    from synth.gain.window.route import WindowRadius as WindowRadius
    from synth.gain.window.route import window_radius as window_radius

_HOMES = {
    "Closure": "build",
    "Knowledge": "route",
    "LinkSwing": "nominal",
    "Window": "build",
    "WindowConstants": "constants",
    "WindowFactor": "factor",
    "WindowPeaks": "peaks",
    "WindowRadius": "route",
    "grown_radius": "growth",
    "link_swing": "nominal",
    "swing_matrix": "nominal",
    "window_constants": "constants",
    "window_factor": "factor",
    "window_peaks": "peaks",
    "window_radius": "route",
}

__all__ = list(_HOMES)


def __getattr__(name: str) -> object:
    """Import a public name when it is first used, so that importing the package stays light."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])

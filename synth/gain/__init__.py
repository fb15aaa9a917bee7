"""From closed units to non-negative numbers on links, and the operator those numbers form.

In come closed units and the links between them; out come guaranteed peak gains, the gain operator and an enclosure of
its radius. It stands on the small-gain theorem for monotone operators (theory: sections 3a and 4): radius below one
means that no behaviour of the links whatever destabilises the network, however many units it has.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from synth.gain.assembly import Assembly as Assembly
    from synth.gain.assembly import assemble as assemble
    from synth.gain.closed import ClosedUnit as ClosedUnit
    from synth.gain.closed import close_network as close_network
    from synth.gain.closed import close_unit as close_unit
    from synth.gain.decay import DecayPoint as DecayPoint
    from synth.gain.free import largest_free_response as largest_free_response
    from synth.gain.operator import GainOperator as GainOperator
    from synth.gain.pattern import pattern_upper_bound as pattern_upper_bound
    from synth.gain.peak import PeakGain as PeakGain
    from synth.gain.peak import peak_to_peak_gain as peak_to_peak_gain
    from synth.gain.radius import Radius as Radius
    from synth.gain.unit import UnitPeaks as UnitPeaks
    from synth.gain.unit import state_peaks as state_peaks

_HOMES = {
    "Assembly": "assembly",
    "ClosedUnit": "closed",
    "DecayPoint": "decay",
    "GainOperator": "operator",
    "PeakGain": "peak",
    "Radius": "radius",
    "UnitPeaks": "unit",
    "assemble": "assembly",
    "close_network": "closed",
    "close_unit": "closed",
    "largest_free_response": "free",
    "pattern_upper_bound": "pattern",
    "peak_to_peak_gain": "peak",
    "state_peaks": "unit",
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

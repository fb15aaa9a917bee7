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
    from synth.gain.closed import close_plan as close_plan
    from synth.gain.closed import close_unit as close_unit
    from synth.gain.decay import DecayPoint as DecayPoint
    from synth.gain.descriptions import plan_of as plan_of
    from synth.gain.enclosure import NetworkRadius as NetworkRadius
    from synth.gain.enclosure import network_radius as network_radius
    from synth.gain.free import largest_free_response as largest_free_response
    from synth.gain.operator import GainOperator as GainOperator
    from synth.gain.pattern import pattern_upper_bound as pattern_upper_bound
    from synth.gain.peak import PeakGain as PeakGain
    from synth.gain.peak import peak_to_peak_gain as peak_to_peak_gain
    from synth.gain.plan import Plan as Plan
    from synth.gain.radius import Radius as Radius
    from synth.gain.sampled.numbers import FixedPoint as FixedPoint
    from synth.gain.sampled.numbers import gains_as_flashed as gains_as_flashed
    from synth.gain.sampled.peaks import sampled_peak_gain as sampled_peak_gain
    from synth.gain.sampled.period import cycle_radius as cycle_radius
    from synth.gain.sampled.period import longest_period as longest_period
    from synth.gain.sensitivity import LinkNetwork as LinkNetwork
    from synth.gain.sensitivity import slopes as slopes
    from synth.gain.strings.dead_time import DelayLoop as DelayLoop
    from synth.gain.strings.dead_time import QuasiPolynomial as QuasiPolynomial
    from synth.gain.strings.dead_time import loop_of_transfer as loop_of_transfer
    from synth.gain.strings.hop import HopGains as HopGains
    from synth.gain.strings.hop import hop_gains as hop_gains
    from synth.gain.strings.hop_length import HopGrowth as HopGrowth
    from synth.gain.strings.hop_length import hop_growth as hop_growth
    from synth.gain.strings.hop_length import leader_signal as leader_signal
    from synth.gain.strings.mean_square import MeanSquareGain as MeanSquareGain
    from synth.gain.strings.mean_square import mean_square_gain as mean_square_gain
    from synth.gain.unit import UnitPeaks as UnitPeaks
    from synth.gain.unit import state_peaks as state_peaks
    from synth.gain.window.factor import WindowFactor as WindowFactor
    from synth.gain.window.factor import window_factor as window_factor
    from synth.gain.window.route import WindowRadius as WindowRadius
    from synth.gain.window.route import window_radius as window_radius

_HOMES = {
    "Assembly": "assembly",
    "ClosedUnit": "closed",
    "DecayPoint": "decay",
    "DelayLoop": "strings.dead_time",
    "FixedPoint": "sampled.numbers",
    "GainOperator": "operator",
    "HopGains": "strings.hop",
    "HopGrowth": "strings.hop_length",
    "LinkNetwork": "sensitivity",
    "MeanSquareGain": "strings.mean_square",
    "NetworkRadius": "enclosure",
    "PeakGain": "peak",
    "Plan": "plan",
    "QuasiPolynomial": "strings.dead_time",
    "Radius": "radius",
    "UnitPeaks": "unit",
    "WindowFactor": "window.factor",
    "WindowRadius": "window.route",
    "assemble": "assembly",
    "close_network": "closed",
    "close_plan": "closed",
    "close_unit": "closed",
    "cycle_radius": "sampled.period",
    "gains_as_flashed": "sampled.numbers",
    "hop_gains": "strings.hop",
    "hop_growth": "strings.hop_length",
    "largest_free_response": "free",
    "leader_signal": "strings.hop_length",
    "longest_period": "sampled.period",
    "loop_of_transfer": "strings.dead_time",
    "mean_square_gain": "strings.mean_square",
    "network_radius": "enclosure",
    "pattern_upper_bound": "pattern",
    "peak_to_peak_gain": "peak",
    "plan_of": "descriptions",
    "sampled_peak_gain": "sampled.peaks",
    "slopes": "sensitivity",
    "state_peaks": "unit",
    "window_factor": "window.factor",
    "window_radius": "window.route",
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

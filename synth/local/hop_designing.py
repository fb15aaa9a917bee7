"""Local gains for a string that sees only gaps: least time gap, gap error or effort, with the hop claim proven.

The time gap a string keeps is -T'(0): so much later does a follower repeat what its predecessor did. It follows from
the gains, so nothing about it need be declared. The search (``hop_search``) is trusted in nothing: its gains are
rounded, and the hop claim, the limits and the modes of what was rounded are then decided exactly
(synth.gain.strings.hop). Where that fails the search is repeated with every limit a little tighter.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError, SynthError
from synth.base.exact import Number, exact
from synth.base.progress import Listener, silent
from synth.gain.strings.hop import MEAN_SQUARE, MEANING, NOT_ISS, PEAK, HopGains, hop_gains, hop_of
from synth.gain.strings.hop_network import HopLoop
from synth.local.hop_search import LIGHT, WEIGHT, Estimate, polished, search
from synth.local.hop_task import HopTask, time_gap
from synth.network.gains import Gains
from synth.network.hop_wish import LEAST
from synth.network.model import Kind, Network

__all__ = ["HopDesign", "hop_design", "time_gap"]

_MARGINS = (0.003, 0.01, 0.03)


@dataclass(frozen=True)
class HopDesign:
    """Gains of a string and the hop claim proven for them.

    ``time_gaps``: kind -> -T'(0) in seconds, exact; ``hops``: everything proven; ``claim`` as asked for, or weaker;
    ``reached``: whether the claim asked for and every limit was proven; ``notes``: what was not. ``least``: what was
    made small.
    """

    gains: Gains
    notion: str
    time_gaps: Mapping[str, Fraction]
    hops: HopGains
    reached: bool
    notes: tuple[str, ...]
    least: str = "time gap"

    @property
    def claim(self) -> str:
        """What is proven: 'peak', 'mean square' or 'none'."""
        return self.hops.claim

    def as_json(self) -> dict[str, object]:
        """Plain data, with the cautions."""
        return {
            "notion": self.notion,
            "least": self.least,
            "claim": self.claim,
            "reached": self.reached,
            "time_gaps": {name: float(value) for name, value in self.time_gaps.items()},
            "gains": {name: found.as_dict() for name, found in self.gains.items()},
            "hops": self.hops.as_json(),
            "notes": list(self.notes),
            "cautions": list(CAUTIONS),
        }

    def as_text(self) -> str:
        """The answer in words."""
        gaps = ", ".join(f"{name} {float(value):.4g} s" for name, value in self.time_gaps.items())
        first = f"Time gap kept: {gaps}. " + MEANING[self.claim]
        return "\n".join([first, *(f"Note: {note}" for note in self.notes), NOT_ISS]) + "\n"


def hop_design(
    network: Network,
    notion: str = PEAK,
    dead_time: Number = 0,
    sensing: Mapping[str, Number] | None = None,
    most_jerk: Number | None = None,
    seed: int = 0,
    *,
    least: str = "time gap",
    most_gap: Number | None = None,
    gap_error: str | None = None,
    progress: Listener = silent,
) -> HopDesign:
    """Gains that make ``least`` small, with the hop claim of ``notion`` proven for any order of the kinds.

    ``least``: 'time gap' (s), 'gap error' (|T_e/s|_1 of the offer ``gap_error``) or 'effort' (largest rate of the
    unit's own acceleration per unit of the predecessor's, 1/s). Honoured of the goal: ``gain_bounds``, ``uses``,
    ``slowest``, ``fastest`` (the disc, of the loop with every dead time at zero). ``most_jerk`` bounds the effort (the
    acceleration itself never exceeds the leader's under the peak claim), ``most_gap`` the time gap. Gains without a
    bound stay within 50. Raises InputError where the string is none, where kinds have several actuators, or hops depend
    on the pair.
    """
    if notion not in (PEAK, MEAN_SQUARE):
        raise InputError(f"the notion is {notion!r}; accepted are 'peak' and 'mean square'.")
    if least not in LEAST:
        raise InputError(f"what to make small is {least!r}; accepted are {', '.join(map(repr, LEAST))}.")
    late = {name: exact(value) for name, value in (sensing or {}).items()}
    rate, gap = (None if value is None else exact(value) for value in (most_jerk, most_gap))
    task = HopTask(network, notion, least, exact(dead_time), late, rate, gap, gap_error)
    notes: list[str] = []
    chosen = {kind.name: task.start(kind) for kind in network.cell_kinds}
    first: dict[str, Kind] = {}
    for kind in network.cell_kinds:
        twin = first.setdefault(kind.group, kind)
        if twin is kind:
            progress(f"searching gains for a {kind.name}")
            chosen[kind.name], why = _designed(task, chosen, kind, seed)
        else:  # one gain set for several places of the cell: found at the first, checked at every other
            chosen[kind.name] = list(chosen[twin.name])
            why = _unproven(task, task.loop(chosen, kind))
        notes += why
    found = task.gains(chosen)
    progress("deciding the hop claim of what was found")
    hops = hop_gains(network, found, gap_error, dead_time, sensing, any_order=True)
    gaps = {hop.kind: time_gap(hop.loop.loop) for hop in hops.hops}
    order = {"none": 0, MEAN_SQUARE: 1, PEAK: 2}
    reached = order[hops.claim] >= order[notion] and not notes
    return HopDesign(found, notion, gaps, hops, reached, tuple(notes), least)


def _designed(
    task: HopTask, chosen: dict[str, list[Fraction]], kind: Kind, seed: int
) -> tuple[list[Fraction], list[str]]:
    """Gains of one kind, and what could not be proven of them."""
    estimate = Estimate(task, chosen, kind)
    box = task.box(kind)
    # Several short searches, each finished by a simplex, find more than one long one.
    tries = [search(estimate, box, seed + 1000 * i, LIGHT if i else WEIGHT) for i in range(3)]
    best: tuple[list[Fraction], list[str]] | None = None
    for point in sorted(tries, key=estimate):
        for margin in _MARGINS:
            estimate.margin = margin
            for weight in (4 * LIGHT, WEIGHT):
                estimate.weight = weight
                point = polished(estimate, point, box)
            values = [Fraction(f"{value:.6g}") for value in point]
            why = _unproven(task, task.loop({**chosen, kind.name: values}, kind))
            if best is None or len(why) < len(best[1]):
                best = (values, why)
            if not why:
                return values, why
        estimate.margin = 0.0
    assert best is not None
    return best


def _unproven(task: HopTask, hop: HopLoop) -> list[str]:
    try:
        found = hop_of(replace(hop, disturbances={}), 1e-5)
        broken = task.broken(hop)
    except SynthError as reason:
        return [str(reason)]
    good = found.claim == PEAK or (task.notion == MEAN_SQUARE and found.claim == MEAN_SQUARE)
    return broken if good else [f"the hop claim for {hop.kind} is not proven", *broken]

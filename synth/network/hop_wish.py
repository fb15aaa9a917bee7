"""What a problem file asks for with ``design: {claim: hop, hop: {...}}``: the weaker claim of strings that see only
gaps (theory (27)). It is asked for by name, never chosen by a program.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

NOTIONS = ("peak", "mean square")
LEAST = ("time gap", "gap error", "effort")


@dataclass(frozen=True)
class Leader:
    """What the leader is taken to do: never part of the hop claim itself, only of numbers derived from it.

    ``acceleration``: largest rate of change of the hop signal, in its unit per second; ``speed``: the signal's value
    before a manoeuvre (the gaps to collide over follow from it); ``recorded``: a CSV file beside the problem file.
    """

    acceleration: Fraction | None = None
    speed: Fraction | None = None
    recorded: str | None = None


@dataclass(frozen=True)
class HopWish:
    """The section ``hop``; all times in seconds, other quantities in the unit of the hop signal and seconds.

    ``notion``: 'peak' or 'mean square'; ``signal``, ``gap_error``: offers of every kind; ``any_order``: whether any
    kind may follow any; ``dead_time`` of every command, ``sensing`` of single sensors; ``jerk``: largest rate of change
    of a unit's own acceleration when the leader does its worst; ``time_gap``: the largest allowed; ``standstill``: the
    gap of a string at rest; ``gap_parameter``: the parameter of the kinds that is their time gap; ``radio``: classes of
    links that may be lost for good; ``least``: what the design makes small.
    """

    notion: str
    signal: str
    gap_error: str | None = None
    any_order: bool = False
    dead_time: Fraction = Fraction(0)
    sensing: Mapping[str, Fraction] = field(default_factory=dict)
    jerk: Fraction | None = None
    time_gap: Fraction | None = None
    standstill: Fraction | None = None
    gap_parameter: str | None = None
    radio: tuple[str, ...] = ()
    least: str = "time gap"
    leader: Leader = Leader()
    root: object = field(default=None, compare=False, repr=False)  # the file as read, to read it with other parameters

    @property
    def most_jerk(self) -> Fraction | None:
        """Largest rate of the own acceleration per unit of the leader's, 1/s, or None if none is asked for."""
        if self.jerk is None or self.leader.acceleration is None:
            return None
        return self.jerk / self.leader.acceleration

    def document(self) -> dict[str, object]:
        """Exact plain data of what a hop statement is about (nothing that only a simulation or a search uses)."""
        return {
            "notion": self.notion,
            "signal": self.signal,
            "gap_error": self.gap_error,
            "any_order": self.any_order,
            "dead_time": str(self.dead_time),
            "sensing": {name: str(value) for name, value in sorted(self.sensing.items())},
            "leader_acceleration": None if self.leader.acceleration is None else str(self.leader.acceleration),
        }

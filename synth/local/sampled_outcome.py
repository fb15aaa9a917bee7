"""What is guaranteed about a design's gains on the sampled units, in words and plain data."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction


@dataclass(frozen=True)
class Sampled:
    """The sampled side of a design: times in s, ``upper`` a guaranteed bound of the radius of the sampled units.

    ``peaks`` by (kind, role, signal): guaranteed, under the declared disturbances and rounding, from rest.
    ``slowest`` estimated decay in 1/s of the slowest sampled mode. ``searched``: the gains were sought on the sampled
    units; ``reached``: target and limits hold there; ``note`` says which gains these are, or what is amiss.
    """

    period: Fraction
    delay: Fraction
    upper: float
    peaks: Mapping[tuple[str, str, str], float]
    slowest: float
    searched: bool
    reached: bool
    note: str

    def sentence(self) -> str:
        """One or two sentences for a person."""
        times = f"sampled every {float(self.period):g} s with a computation delay of {float(self.delay):g} s"
        if not math.isfinite(self.upper):
            return f"{times.capitalize()}: nothing is guaranteed; {self.note}."
        verdict = "target and limits are kept" if self.reached else "the target or a limit is missed"
        way = "designed in discrete time" if self.searched else "designed in continuous time"
        return f"{times.capitalize()} the radius is at most {self.upper:.6g}, {verdict} ({way}; {self.note})."

    def as_json(self) -> dict[str, object]:
        """Plain data; infinity as the text "inf"."""

        def plain(value: float) -> float | str:
            return value if math.isfinite(value) else "inf" if value > 0 else "-inf"

        return {
            "period": float(self.period),
            "computation_delay": float(self.delay),
            "radius_upper": plain(self.upper),
            "peaks": {".".join(key): plain(value) for key, value in self.peaks.items()},
            "slowest_estimate": plain(self.slowest),
            "in_discrete_time": self.searched,
            "reached": self.reached,
            "note": self.note,
        }

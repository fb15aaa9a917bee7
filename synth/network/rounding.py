"""What the code in the controllers rounds: a problem file may name it, and a proof of the code as flashed takes it.

Distances of neighbouring numbers (quanta) are in the declared unit of their signal; what is not named is not rounded.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from synth.base.exact import Number


@dataclass(frozen=True)
class Rounding:
    """What the firmware rounds; names are "kind.signal", distances of neighbouring numbers in the signal's unit.

    ``sensors``: samples rounded to nearest; ``commands``: commands rounded to nearest; ``products``: every product of a
    row of u = K y rounded to nearest (fixed point); ``stored``: states kept in the firmware (integrators), advanced
    once per period and rounded to nearest (0: kept exactly); ``form``: "exact" (fixed point, apart from the above),
    "single" or "double" precision sums, from gains that are such numbers. ``word`` bits in which each gain is stored,
    ``fraction`` of them behind the point (None: the gains are stored digit for digit).
    """

    sensors: Mapping[str, Number] = field(default_factory=dict)
    commands: Mapping[str, Number] = field(default_factory=dict)
    products: Mapping[str, Number] = field(default_factory=dict)
    stored: Mapping[str, Number] = field(default_factory=dict)
    form: str = "exact"
    word: int | None = None
    fraction: int | None = None

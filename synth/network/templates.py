"""What links of a table share when only their strength differs, so that 200,000 of them are read in seconds.

Law: a template gives the value that the careful reader (strengths.py) gives, or none at all.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from fractions import Fraction

from synth.base.units import Unit, UnitError, parse_unit
from synth.network.layout import Form
from synth.network.links import End
from synth.network.model import Link
from synth.network.yaml_map import Node

# A decimal of sensible length or a fraction, and a unit; everything else is read with more care.
_PLAIN = re.compile(r"(?P<number>-?[0-9]{1,30}(?:\.[0-9]{1,40}|/[1-9][0-9]{0,30})?)(?:\s+(?P<unit>\S.*))?", re.ASCII)


@dataclass(frozen=True)
class Template:
    """What links with the same texts but the strength share; ``signs`` the signs of strengths that were met."""

    form: Form
    source: End
    target: End
    wanted: Unit  # (taken unit)/(offered unit)
    signs: dict[bool, Node] = field(default_factory=dict)
    parts: dict[tuple[int, int], tuple[Link, ...]] = field(default_factory=dict)  # by kinds, of strength one
    values: dict[str, Fraction | None] = field(default_factory=dict)  # by text
    units: dict[str, Fraction | None] = field(default_factory=dict)  # text of a unit -> its factor, None if it is wrong

    def value(self, text: str) -> Fraction | None:
        """A plain quantity in (taken unit)/(offered unit), or None where the careful reader must decide."""
        if text not in self.values:
            self.values[text] = self._value(text)
        return self.values[text]

    def _value(self, text: str) -> Fraction | None:
        found = _PLAIN.fullmatch(text)
        if found is None:
            return None
        unit = found["unit"] or ""
        if unit not in self.units:
            self.units[unit] = self._factor(unit)
        factor = self.units[unit]
        if factor is None:
            return None
        value = Fraction(found["number"])
        value = value if factor == 1 else value * factor
        return value if 1e-99 < abs(float(value)) < 1e99 else None  # the careful reader decides about the rest

    def _factor(self, text: str) -> Fraction | None:
        try:
            unit = parse_unit(text) if text else Unit()
        except UnitError:
            return None
        return unit.factor / self.wanted.factor if unit.dimension == self.wanted.dimension else None

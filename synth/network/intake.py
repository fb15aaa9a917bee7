"""How much may enter each taken signal of one unit: the sum of absolute strengths, in one unit of measurement.

Law: the bound of a taken signal is at least the sum of |strength| over the links into any unit of the network, edges
included; strengths that cannot be added, because the offered signals are different quantities, have bounds of their
own.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from fractions import Fraction

from synth.base.units import Dimension, parse_unit
from synth.network.cuts import least_cells, section_of
from synth.network.model import Link, Network

Part = tuple[str, Dimension | None]  # 'kind.take', and the quantity that is offered (None: no link enters it)


@dataclass(frozen=True)
class Intake:
    """``bounds`` and ``units`` by ``kind.take``, or by ``kind.take (unit)`` where different quantities enter it."""

    bounds: Mapping[str, Fraction]
    units: Mapping[str, str]


def intake_of(network: Network) -> Intake:
    """The largest sum of absolute strengths into each declared taken signal, in (taken unit)/(offered unit).

    Of the units of the network the largest counts, of the sources that a rule leaves open the strongest. Offered
    signals of one quantity in different units (degC and K, m and cm) are counted in the unit that stands first.
    """
    cuts = [section_of(network, edge, least_cells(edge)) for edge in network.edges]
    scale = _Scale(network, [*network.links, *(link for cut in cuts for link in cut.links)])
    sums: dict[Part, Fraction] = {}
    if network.members is not None:
        _of_members(network, scale, sums)
    else:
        _of_cells(network, scale, sums)
    for cut in cuts:
        _of_members(cut, scale, sums)
    bounds: dict[str, Fraction] = {}
    units: dict[str, str] = {}
    for kind in network.kinds:
        for take in kind.takes:
            if " " in take.name:  # made here, not declared by a user
                continue
            name = f"{kind.name}.{take.name}"
            found = scale.units.get(name, {})
            for dimension, (text, _) in found.items():
                key = name if len(found) == 1 else f"{name} ({take.unit} per {text})"
                bounds[key], units[key] = sums.get((name, dimension), Fraction(0)), f"{take.unit} per {text}"
            if not found:
                bounds[name], units[name] = Fraction(0), ""
    return Intake(bounds, units)


class _Scale:
    """In which unit the strengths into each taken signal are added."""

    def __init__(self, network: Network, links: Iterable[Link]) -> None:
        """The first unit of every quantity that enters a taken signal."""
        self._offers = {(kind.name, s.name): s.unit for kind in network.kinds for s in kind.offers}
        self.units: dict[str, dict[Dimension, tuple[str, Fraction]]] = {}
        for link in links:
            if link.sort == "link":
                text = self._offers[link.source_kind, link.offer]
                unit = parse_unit(text)
                into = self.units.setdefault(f"{link.kind}.{link.take}", {})
                into.setdefault(unit.dimension, (text, unit.factor))

    def part(self, link: Link) -> tuple[Part, Fraction]:
        """What a link adds to, and how much."""
        name, unit = f"{link.kind}.{link.take}", parse_unit(self._offers[link.source_kind, link.offer])
        return (name, unit.dimension), abs(link.strength) * self.units[name][unit.dimension][1] / unit.factor


def _of_cells(network: Network, scale: _Scale, sums: dict[Part, Fraction]) -> None:
    choices: dict[tuple[Part, str], Fraction] = {}
    for link in network.links:
        if link.sort != "link":
            continue
        part, size = scale.part(link)
        if link.choice:
            before = choices.get((part, link.choice), Fraction(0))
            choices[part, link.choice] = max(before, size)
            size = max(size - before, Fraction(0))
        sums[part] = sums.get(part, Fraction(0)) + size


def _of_members(network: Network, scale: _Scale, sums: dict[Part, Fraction]) -> None:
    """Exact: units with the same sorts of links, as many of each, are looked at once."""
    members = network.members
    assert members is not None  # the caller has looked
    to, _, sort = (array.tolist() for array in members.expanded())
    parts = [scale.part(link) if link.sort == "link" else None for link in network.links]
    wired: dict[int, Counter[int]] = {}
    for unit, index in zip(to, sort, strict=True):
        wired.setdefault(unit, Counter())[index] += 1
    for pattern in {frozenset(counter.items()) for counter in wired.values()}:
        found: dict[Part, Fraction] = {}
        for index, count in pattern:
            if (entry := parts[index]) is not None:
                part, size = entry
                found[part] = found.get(part, Fraction(0)) + count * size
        for part, total in found.items():
            sums[part] = max(sums.get(part, Fraction(0)), total)

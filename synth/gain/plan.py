"""What the gain operator of a network consists of, before any peak gain is known: structure only, all of it exact.

A unit is known by its *specification*: its kind, and what relative links fold into it (case R1 the strength, R2 the
largest strength, rules the largest intake; theory section 1). Units with one specification close to the same matrices,
so each is worked out once, however many members share it. A row of the operator is an offer of a unit, and its terms
are |strength| e^{alpha delay} p(offer, take) s(source) with p a peak gain of the row's own specification (theory (1),
(4)). A link that may weaken and the sources a rule allows are alternatives: of the terms of one row with equal
``choice`` only the largest counts (theory section 1, case R2, and (13)).

Every description becomes one plan: the cell of a pattern (theory (9)), a kind per row under rules (13), every unit of
explicit members, and for a line with edges the cell beside a section of each edge (14).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.gain.operator import GainOperator
from synth.network.model import Kind, Link

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class UnitSpec:
    """A unit before its loop is closed: kind number ``kind`` and the own parts folded into it.

    ``own``: (take, offer, strength) by position in the kind, sorted, zeros left out: the unit subtracts ``strength``
    times its own offer at that take, the sum over all relative links that enter it there.
    """

    kind: int
    own: tuple[tuple[int, int, Fraction], ...] = ()


@dataclass(frozen=True, eq=False)
class Wiring:
    """Units and what arrives at them, by index: the form in which every description is handed to :func:`plan_of_units`.

    Unit i is called ``names[i]`` and is of ``kinds[kind[i]]``; arrival a brings ``links[link[a]]`` from unit
    ``source[a]`` (-1: from beyond a cut, only the own part is there) to unit ``to[a]``.
    """

    description: str
    kinds: tuple[Kind, ...]
    links: tuple[Link, ...]
    names: tuple[str, ...]
    kind: Indices
    to: Indices
    source: Indices
    link: Indices


@dataclass(frozen=True, eq=False)
class Plan:
    """Rows and terms of the gain operator, and the units whose peak gains they need; all arrays are read-only.

    Units: ``names``, ``unit_kind`` and ``unit_spec`` (numbers into ``kinds`` and ``specs``). Rows: row r is offer
    ``row_offer[r]`` of unit ``row_unit[r]``; a unit's rows lie together. Terms, one per entry: row ``row[t]`` hears row
    ``source[t]`` through take ``take[t]`` by ``links[link[t]]``, with the own strength where ``own[t]`` (the unit's own
    value, always fresh) and the strength and delay elsewhere; ``choice[t]`` >= 0 marks alternatives, -1 a term alone;
    ``peak[t]`` is the place of its peak gain in the row of all peak gains: those of spec 0 (offers x takes, row by
    row), then those of spec 1, and so on.

    Laws: ``operator(p)`` is the gain operator for peak gains p; a term that is never the largest of its alternatives
    is left out, and an alternative that is left alone has choice -1; for a pattern of fixed links the terms stand in
    the order of the links, and within a link in that of the offers.
    """

    description: str
    kinds: tuple[Kind, ...]
    links: tuple[Link, ...]
    names: tuple[str, ...]
    unit_kind: Indices
    unit_spec: Indices
    specs: tuple[UnitSpec, ...]
    row_unit: Indices
    row_offer: Indices
    row: Indices
    source: Indices
    take: Indices
    link: Indices
    own: Flags
    choice: Indices
    peak: Indices

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for array in vars(self).values():
            if isinstance(array, np.ndarray):
                array.setflags(write=False)

    def __repr__(self) -> str:
        """A short text; the arrays are too long to print."""
        return (
            f"Plan({self.description}: {len(self.names)} units of {len(self.specs)} specifications, {self.size} rows, "
            f"{self.row.size} terms)"
        )

    @property
    def size(self) -> int:
        """Number of rows."""
        return int(self.row_unit.size)

    @cached_property
    def outlets(self) -> tuple[tuple[str, str], ...]:
        """The name of every row: (unit, offer); the unit is a kind, a member, or 'kind place' near an edge."""
        offers = [tuple(signal.name for signal in kind.offers) for kind in self.kinds]
        kind = self.unit_kind.tolist()
        pairs = zip(self.row_unit.tolist(), self.row_offer.tolist(), strict=True)
        return tuple((self.names[unit], offers[kind[unit]][k]) for unit, k in pairs)

    @cached_property
    def first_row(self) -> Indices:
        """The first row of every unit."""
        counts = np.array([len(kind.offers) for kind in self.kinds], dtype=np.intp)
        return starts(counts[self.unit_kind])[:-1]

    @cached_property
    def first_peak(self) -> Indices:
        """Where the peak gains of every specification begin; one more entry says how many there are in all."""
        kinds = [self.kinds[spec.kind] for spec in self.specs]
        return starts(np.array([len(kind.offers) * len(kind.takes) for kind in kinds], dtype=np.intp))

    def units_of(self, spec: int) -> tuple[str, ...]:
        """The names of the units with that specification."""
        return tuple(self.names[i] for i in np.flatnonzero(self.unit_spec == spec).tolist())

    def modulus(self, term: int) -> tuple[Fraction, Fraction]:
        """|strength| and delay of a term, exact."""
        link = self.links[self.link[term]]
        return (abs(link.own_strength), Fraction(0)) if self.own[term] else (abs(link.strength), link.delay)

    @cached_property
    def moduli(self) -> tuple[tuple[Fraction, Fraction], ...]:
        """Every pair (|strength|, delay) that occurs, once."""
        return self._moduli[0]

    @property
    def modulus_of(self) -> Indices:
        """For every term the number of its pair in ``moduli``."""
        return self._moduli[1]

    @cached_property
    def _moduli(self) -> tuple[tuple[tuple[Fraction, Fraction], ...], Indices]:
        # Terms of one link and role share a pair, and equal pairs of different links are one.
        key = 2 * self.link + self.own
        found, first, place = np.unique(key, return_index=True, return_inverse=True)
        numbers: dict[tuple[Fraction, Fraction], int] = {}
        number = np.array(
            [numbers.setdefault(self.modulus(term), len(numbers)) for term in first.tolist()], dtype=np.intp
        )
        pairs = tuple(numbers)
        return pairs, (number[place.reshape(-1)] if found.size else np.zeros(0, dtype=np.intp))

    def factors(self, alpha: float = 0.0) -> Floats:
        """|strength| e^{alpha delay} of every term to the nearest double (taken unit per offered unit)."""
        values = np.array([float(g) * float(np.exp(alpha * float(d))) for g, d in self.moduli])
        return values[self.modulus_of] if values.size else np.zeros(0)

    def operator(self, peaks: Floats, alpha: float = 0.0) -> GainOperator:
        """The gain operator for the given peak gains, in doubles to nearest: it guides, and never decides a claim.

        ``peaks``: all peak gains in a row, ``first_peak[-1]`` numbers >= 0 (offer unit per taken unit), those of
        A + alpha I; ``alpha`` in 1/s. Raises InputError if there is no row, or a peak gain is negative or not finite.
        """
        if np.shape(peaks) != (int(self.first_peak[-1]),):
            raise InputError(f"{int(self.first_peak[-1])} peak gains are needed, not an array of {np.shape(peaks)}.")
        return self.with_gains(np.asarray(peaks, dtype=float)[self.peak] * self.factors(alpha))

    def with_gains(self, gains: Floats) -> GainOperator:
        """The operator with one number >= 0 per term; its i-th link is term i. InputError if there is no row."""
        if not self.size:
            raise InputError("no unit offers a signal, so there is nothing to couple; add 'offers' to a kind.")
        choice = self.choice if self.choice.size and self.choice.max() >= 0 else None
        return GainOperator.from_links(self.size, self.row, self.source, gains, "sum", choice=choice)


def starts(counts: Indices) -> Indices:
    """0, then the running totals: where each of ``counts`` things begins, and the total at the end."""
    found = np.zeros(len(counts) + 1, dtype=np.intp)
    np.cumsum(counts, out=found[1:])
    return found


def plan_of_units(wiring: Wiring) -> Plan:
    """The plan of the given units and arrivals; InputError where a link names a kind or signal that is not there."""
    table = _LinkTable.of(wiring.kinds, wiring.links)
    _check_ends(wiring, table)
    specs, unit_spec = _specifications(wiring, table)
    offers = np.array([len(kind.offers) for kind in wiring.kinds], dtype=np.intp)
    takes = np.array([len(kind.takes) for kind in wiring.kinds], dtype=np.intp)
    rows_of = offers[wiring.kind]
    first_row = starts(rows_of)
    rays = _rays(wiring, table, first_row)
    # Every ray gives one term per offer of the unit it arrives at.
    counts = rows_of[rays.to]
    ray = np.repeat(np.arange(counts.size), counts)
    offer = np.arange(ray.size) - np.repeat(starts(counts)[:-1], counts)
    to, link = rays.to[ray], rays.link[ray]
    spec_kinds = np.array([spec.kind for spec in specs], dtype=np.intp)
    first_peak = starts(offers[spec_kinds] * takes[spec_kinds])
    row_unit = np.repeat(np.arange(len(wiring.names)), rows_of)
    return Plan(
        wiring.description, wiring.kinds, wiring.links, wiring.names, wiring.kind.astype(np.intp), unit_spec, specs,
        row_unit=row_unit,
        row_offer=np.arange(row_unit.size) - np.repeat(first_row[:-1], rows_of),
        row=first_row[to] + offer,
        source=rays.column[ray],
        take=table.take[link],
        link=link,
        own=rays.own[ray],
        choice=rays.group[ray],
        peak=first_peak[unit_spec[to]] + offer * takes[wiring.kind[to]] + table.take[link],
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class _LinkTable:
    """Every link by numbers: both kinds, take, offer, the receiving kind's offer of the same name (-1), its choice."""

    kind: Indices
    source_kind: Indices
    take: Indices
    offer: Indices
    own_offer: Indices
    weakens: Flags
    relative: Flags
    choice: Indices
    choices: int

    @staticmethod
    def of(kinds: Sequence[Kind], links: Sequence[Link]) -> _LinkTable:
        number = {kind.name: i for i, kind in enumerate(kinds)}
        takes = [{signal.name: i for i, signal in enumerate(kind.takes)} for kind in kinds]
        offers = [{signal.name: i for i, signal in enumerate(kind.offers)} for kind in kinds]
        choices: dict[str, int] = {}
        found = np.full((6, len(links)), -1, dtype=np.intp)
        for n, link in enumerate(links):
            to, source = number.get(link.kind), number.get(link.source_kind)
            take = None if to is None else takes[to].get(link.take)
            offer = None if source is None else offers[source].get(link.offer)
            if to is None or source is None or take is None or offer is None:
                raise _unknown(link, kinds)
            found[:4, n] = to, source, take, offer
            if link.relative or link.weakens:
                found[4, n] = offers[to].get(link.offer, -1)
                if found[4, n] < 0:
                    raise InputError(
                        f"link {link.name!r}: {link.kind} offers no {link.offer!r} of its own to subtract."
                    )
            if link.choice:
                found[5, n] = choices.setdefault(link.choice, len(choices))
        weakens, relative = (
            np.array([getattr(k, name) for k in links], dtype=bool) for name in ("weakens", "relative")
        )
        to_kind, from_kind, take_of, offer_of, own_offer, choice = found
        return _LinkTable(
            to_kind, from_kind, take_of, offer_of, own_offer, weakens, relative, choice, max(len(choices), 1)
        )


def _unknown(link: Link, kinds: Sequence[Kind]) -> InputError:
    known = [f"{kind.name}.{signal.name}" for kind in kinds for signal in kind.offers]
    receiving = next((kind for kind in kinds if kind.name == link.kind), None)
    if receiving is not None and f"{link.source_kind}.{link.offer}" in known:
        takes = ", ".join(signal.name for signal in receiving.takes) or "nothing"
        return InputError(f"link {link.name!r}: {link.kind} has no {link.take!r} among its takes; it takes {takes}.")
    return InputError(
        f"link {link.name!r} runs from {link.source_kind}.{link.offer} to {link.kind}.{link.take}; known offers are "
        f"{', '.join(known[:20]) or 'none'}{', ...' if len(known) > 20 else ''}, known kinds "
        f"{', '.join(kind.name for kind in kinds[:20]) or 'none'}{', ...' if len(kinds) > 20 else ''}."
    )


def _check_ends(wiring: Wiring, table: _LinkTable) -> None:
    """A link must join units of the kinds it names: everything below reads the kinds off the units."""
    wrong = table.kind[wiring.link] != wiring.kind[wiring.to]
    heard = wiring.source >= 0
    wrong[heard] |= table.source_kind[wiring.link[heard]] != wiring.kind[wiring.source[heard]]
    if wrong.any():
        a = int(np.argmax(wrong))
        link = wiring.links[wiring.link[a]]
        raise InputError(
            f"link {link.name!r} from {link.source_kind} to {link.kind} does not fit the unit "
            f"{wiring.names[wiring.to[a]]!r} it enters or the one it comes from; both must be of the kinds it names."
        )


def _specifications(wiring: Wiring, table: _LinkTable) -> tuple[tuple[UnitSpec, ...], Indices]:
    """The distinct specifications in order of first appearance, and the number of each unit's."""
    pieces: dict[tuple[int, int, Fraction], int] = {}
    piece_of = np.full(len(wiring.links), -1, dtype=np.intp)
    for n in np.flatnonzero(table.relative).tolist():
        key = (int(table.take[n]), int(table.own_offer[n]), wiring.links[n].own_strength)
        piece_of[n] = pieces.setdefault(key, len(pieces))
    piece = piece_of[wiring.link]
    folded = np.flatnonzero(piece >= 0)
    folded = folded[np.lexsort((piece[folded], wiring.to[folded]))]
    piece, count = piece[folded], np.bincount(wiring.to[folded], minlength=len(wiring.names))
    bounds = starts(count).tolist()
    listed = tuple(pieces)
    by_pieces: dict[tuple[int, bytes], int] = {}
    specs: dict[UnitSpec, int] = {}
    unit_spec = np.zeros(len(wiring.names), dtype=np.intp)
    for unit, kind in enumerate(wiring.kind.tolist()):
        mine = piece[bounds[unit] : bounds[unit + 1]]
        signature = (kind, mine.tobytes())
        if signature not in by_pieces:
            spec = UnitSpec(kind, _summed([listed[i] for i in mine.tolist()]))
            by_pieces[signature] = specs.setdefault(spec, len(specs))
        unit_spec[unit] = by_pieces[signature]
    return tuple(specs), unit_spec


def _summed(own: Sequence[tuple[int, int, Fraction]]) -> tuple[tuple[int, int, Fraction], ...]:
    total: dict[tuple[int, int], Fraction] = {}
    for take, offer, strength in own:
        total[take, offer] = total.get((take, offer), Fraction(0)) + strength
    return tuple((*key, value) for key, value in sorted(total.items()) if value)


@dataclass(frozen=True, eq=False)
class _Rays:
    """What reaches a take: the neighbour's outlet, or the unit's own of a link that may weaken (``own``)."""

    to: Indices
    link: Indices
    own: Flags
    column: Indices
    group: Indices


def _rays(wiring: Wiring, table: _LinkTable, first_row: Indices) -> _Rays:
    """Rays in the order of the arrivals, the neighbour's first; alternatives share a group, others have -1."""
    arrival = np.repeat(np.arange(wiring.to.size), 2)
    own = np.tile(np.array([False, True]), wiring.to.size)
    link = wiring.link[arrival]
    kept = np.where(own, table.weakens[link], wiring.source[arrival] >= 0)
    arrival, own, link = arrival[kept], own[kept], link[kept]
    to = wiring.to[arrival]
    column = np.where(own, first_row[to] + table.own_offer[link], first_row[wiring.source[arrival]] + table.offer[link])
    group = np.where(table.weakens[link], arrival, -1)
    chosen = np.flatnonzero(table.choice[link] >= 0)
    if chosen.size:
        key = to[chosen] * table.choices + table.choice[link[chosen]]
        _, number = np.unique(key, return_inverse=True)
        group[chosen] = wiring.to.size + number.reshape(-1)
    keep = ~_never_largest(wiring.links, link, own, column, group)
    to, link, own, column, group = to[keep], link[keep], own[keep], column[keep], group[keep]
    if group.size:
        grouped = np.maximum(group, 0)
        alone = np.bincount(grouped[group >= 0], minlength=int(grouped.max()) + 1) < 2
        group = np.where((group >= 0) & alone[grouped], -1, group)
    return _Rays(to, link, own, column, group)


def _never_largest(links: Sequence[Link], link: Indices, own: Flags, column: Indices, group: Indices) -> Flags:
    """Own rays that an alternative from the same outlet outweighs at every rate (theirs is at least as strong)."""
    out = np.zeros(link.size, dtype=bool)
    if not own.any():
        return out
    grouped = group >= 0
    key = group * (int(column.max()) + 1) + column
    candidates = np.flatnonzero(own & np.isin(key, key[grouped & ~own]))
    if candidates.size:
        others: dict[int, Fraction] = {}
        for i in np.flatnonzero(grouped & ~own & np.isin(key, key[candidates])).tolist():
            strength = abs(links[link[i]].strength)
            others[int(key[i])] = max(strength, others.get(int(key[i]), Fraction(0)))
        for i in candidates.tolist():
            out[i] = others[int(key[i])] >= abs(links[link[i]].own_strength)
    return out

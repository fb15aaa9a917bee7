"""The network as one finite gain operator between guaranteed bounds: a row per offered signal, an entry per link.

Entry of a link from outlet (j, offer') to a take l of unit i: p_kl |strength| e^{alpha delay} in the row of every offer
k of unit i (theory (1) and (4)), p a peak gain of A + alpha I of the unit with its own parts folded in. Which rows and
entries there are is the plan's business (gain.plan); here its units are closed, their peak gains enclosed once per
specification, and the entries rounded outward. Parallel links stay separate terms of their row.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from typing import NamedTuple, cast, overload

import numpy as np
from flint import arb, ctx, fmpq

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import exact
from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import plan_of
from synth.gain.flow import outward
from synth.gain.operator import GainOperator
from synth.gain.peak import PeakGain, check_width
from synth.gain.plan import Floats, Plan, UnitSpec, Wiring, plan_of_units
from synth.gain.radius import Radius
from synth.gain.unit import unit_engine
from synth.network.gains import Gains
from synth.network.model import Link, Network

Rate = Fraction | float | str


class Entry(NamedTuple):
    """One term of the operator, with the guaranteed bounds of its gain; alternatives of a row share a ``choice``."""

    link: Link
    row: int
    column: int
    lower: float
    upper: float
    own: bool = False
    choice: int = -1


@dataclass(frozen=True, eq=False)
class Assembly:
    """The gain operator of a network between guaranteed bounds.

    ``plan`` says what stands where; ``upper`` and ``lower`` are operators whose i-th links are the plan's terms;
    ``unit_peaks`` holds the peak gains (offers x takes) per specification of the plan (for patterns: per kind), of
    A + alpha I. Gains are in unit of the row's offer per unit of the column's offer.
    Law: lower(s) <= true operator(s) <= upper(s) for every s >= 0.
    """

    plan: Plan
    upper: GainOperator
    lower: GainOperator
    unit_peaks: tuple[PeakGain, ...]
    alpha: Fraction

    @property
    def outlets(self) -> tuple[tuple[str, str], ...]:
        """The name of every row: (kind, member or 'kind place', offer)."""
        return self.plan.outlets

    @cached_property
    def entries(self) -> tuple[Entry, ...]:
        """Every term as an object, in the plan's order (made when asked for: large networks have many)."""
        plan = self.plan
        columns = (plan.link, plan.row, plan.source, self.lower.gain, self.upper.gain, plan.own, plan.choice)
        lists = [column.tolist() for column in columns]
        return tuple(Entry(plan.links[link], *rest) for link, *rest in zip(*lists, strict=True))

    def radius(self, width: float = 1e-9) -> Radius:
        """Enclosure of the radius: lower end of the lower operator, upper end and point of the upper one.

        ``width`` relative, for each of the two operators; ``reached`` says whether both reached it (the distance
        between the two operators, which comes from the widths of the peak gains, is not part of it).
        """
        above, below = self.upper.radius(width), self.lower.radius(width)
        return replace(above, lower=below.lower, work=above.work + below.work, reached=above.reached and below.reached)


class PeakTable:
    """Peak gains of the units of one network, each specification enclosed once however many plans ask for it.

    ``alpha`` rate in 1/s, >= 0; ``width`` relative. Raises InputError for a negative alpha or a width out of range.
    """

    def __init__(self, gains: Gains, alpha: Rate = Fraction(0), width: float = 1e-6) -> None:
        """Nothing is worked out until a plan asks."""
        self.gains, self.alpha, self.width = gains, _rate(alpha), width
        check_width(width)
        self._known: dict[tuple[str, UnitSpec], PeakGain] = {}

    def of(self, plan: Plan) -> tuple[PeakGain, ...]:
        """Peak gains (offers x takes) per specification of the plan, whose kinds are those of the same network.

        Raises UnstableLoop if a closed unit (shifted by alpha) is not Hurwitz, WidthNotReached if a gain does not
        close, InputError where a kind has no gains.
        """
        keys = [(plan.kinds[spec.kind].name, spec) for spec in plan.specs]
        new = [n for n, key in enumerate(keys) if key not in self._known]
        units = close_plan(plan, self.gains, new)
        for n, unit in zip(new, units, strict=True):
            try:
                self._known[keys[n]] = _peaks(unit, self.alpha, self.width)
            except UnstableLoop as error:
                raise UnstableLoop(_whose(plan, n, f"{error}")) from error
        return tuple(self._known[key] for key in keys)


@overload
def assemble(
    network: Network, gains: Gains, alpha: Rate = Fraction(0), width: float = 1e-6, /
) -> Assembly: ...  # pragma: no cover


@overload
def assemble(
    network: Sequence[ClosedUnit], gains: Sequence[Link], alpha: Rate = Fraction(0), width: float = 1e-6
) -> Assembly: ...  # pragma: no cover


def assemble(
    network: Network | Sequence[ClosedUnit],
    gains: Gains | Sequence[Link],
    alpha: Rate = Fraction(0),
    width: float = 1e-6,
) -> Assembly:
    """The gain operator of a network with the given gains, or of a pattern given by closed units and links.

    ``network``, ``gains``: any description (of an edge pattern, its bulk beside a section of each edge, whose radius is
    a lower bound: see :func:`synth.gain.network_radius`); or one closed unit per kind, closed with the own parts of
    its relative links folded in, and the links, of which only the neighbour's part enters here. ``alpha`` rate in 1/s,
    >= 0; ``width`` relative width of the peak gains.

    Raises UnstableLoop if a unit (shifted by alpha) is not Hurwitz, InputError for an unknown kind or signal, a
    negative alpha or a width out of range, WidthNotReached if a peak gain does not close. Theory (1), (4), (9), (13).
    """
    if isinstance(network, Network):
        table = PeakTable(cast(Gains, gains), alpha, width)
        return assemble_plan(plan_of(network), table)
    closed, links, rate = network, cast("Sequence[Link]", gains), _rate(alpha)
    check_width(width)
    plan = plan_of_units(_cell(closed, links))
    return _assembly(plan, tuple(_peaks(unit, rate, width) for unit in closed), rate)


def assemble_plan(plan: Plan, table: PeakTable) -> Assembly:
    """The gain operator of a plan, with the peak gains of ``table``; raises what :meth:`PeakTable.of` raises."""
    return _assembly(plan, table.of(plan), table.alpha)


def _rate(alpha: Rate) -> Fraction:
    rate = exact(alpha)
    if rate < 0:
        raise InputError(f"alpha must not be negative, not {float(rate):g} 1/s.")
    return rate


def _peaks(unit: ClosedUnit, alpha: Fraction, width: float) -> PeakGain:
    return unit_engine(unit, unit.H.rows, alpha, width).gains(unit.D, unit.F)


def _cell(closed: Sequence[ClosedUnit], links: Sequence[Link]) -> Wiring:
    """One unit per kind; the specifications are then the units, and what is folded into them is known already."""
    kinds = tuple(unit.kind for unit in closed)
    number = {kind.name: i for i, kind in enumerate(kinds)}
    ends = [[number.get(name, 0) for name in (link.kind, link.source_kind)] for link in links]
    to, source = np.array(ends, dtype=np.intp).reshape(len(ends), 2).T
    return Wiring(
        "pattern", kinds, tuple(links), tuple(number), np.arange(len(kinds)), to, source, np.arange(len(links))
    )


def _assembly(plan: Plan, peaks: tuple[PeakGain, ...], alpha: Fraction) -> Assembly:
    lower, upper = bounded_gains(plan, peaks, alpha)
    return Assembly(plan, plan.with_gains(upper), plan.with_gains(lower), peaks, alpha)


def bounded_gains(plan: Plan, peaks: Sequence[PeakGain], alpha: Fraction) -> tuple[Floats, Floats]:
    """p |strength| e^{alpha delay} of every term between doubles rounded outward; ``peaks`` per specification.

    Equal products are worked out once.
    """
    low, high = (
        np.concatenate([np.zeros(0), *(getattr(peak, end).reshape(-1) for peak in peaks)]) for end in ("lower", "upper")
    )
    pairs = np.stack([low, high], axis=1)
    # Members with different links often have equal peak gains: equal pairs of numbers count as one.
    values, value_of = np.unique(pairs, axis=0, return_inverse=True)
    value = value_of.reshape(-1)[plan.peak]
    count = max(len(plan.moduli), 1)
    keys, place = np.unique(value * count + plan.modulus_of, return_inverse=True)
    with ctx.workprec(128):
        factors = [_factor(strength, alpha * delay) for strength, delay in plan.moduli]
        ends = [outward(*(arb(v) * factors[k % count] for v in values[k // count].tolist())) for k in keys.tolist()]
    found = np.array(ends, dtype=float).reshape(len(ends), 2)[place.reshape(-1)]
    return found[:, 0], found[:, 1]


def _factor(strength: Fraction, exponent: Fraction) -> arb:
    factor = arb(fmpq(strength.numerator, strength.denominator))
    if exponent:
        factor *= arb(fmpq(exponent.numerator, exponent.denominator)).exp()
    return factor


def _whose(plan: Plan, number: int, sentence: str) -> str:
    """The sentence about a unit, with the names of those that have this specification where a kind has several."""
    if plan.description in ("pattern", "rules"):
        return sentence
    units = plan.units_of(number)
    more = f" and {len(units) - 1} more" if len(units) > 1 else ""
    return f"unit {units[0]}{more}, {sentence}"

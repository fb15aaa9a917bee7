"""The network as one finite gain operator: row per offered signal of the receiving unit, entry per link.

Entry of a link from outlet (kind', offer') to a take l of kind: p_kl |strength| e^{alpha delay} in the row of every
offer k of kind (theory (1) and (4)). A pattern's operator is its quotient on one cell (theory (9)), so the same few
rows stand for every number of units. Parallel links stay separate terms of their row.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import NamedTuple

import numpy as np
from flint import arb, ctx, fmpq

from synth.base.errors import InputError
from synth.base.exact import exact
from synth.gain.closed import ClosedUnit
from synth.gain.flow import outward
from synth.gain.operator import GainOperator
from synth.gain.peak import PeakGain, check_width
from synth.gain.radius import Radius
from synth.gain.unit import unit_engine
from synth.network.model import Link


class Entry(NamedTuple):
    """One link's term in one row of the operator, with the guaranteed bounds of its gain."""

    link: Link
    row: int
    column: int
    lower: float
    upper: float


@dataclass(frozen=True)
class Assembly:
    """The gain operator of a network between guaranteed bounds.

    ``outlets`` names the rows (kind, offer); ``upper`` and ``lower`` are operators with sum rows whose i-th links are
    ``entries[i]``; ``unit_peaks`` holds the peak gains (offers x takes) per kind, of A + alpha I. Gains are in unit of
    the row's offer per unit of the column's offer.
    Law: lower(s) <= true operator(s) <= upper(s) for every s >= 0.
    """

    outlets: tuple[tuple[str, str], ...]
    upper: GainOperator
    lower: GainOperator
    unit_peaks: tuple[PeakGain, ...]
    entries: tuple[Entry, ...]
    alpha: Fraction

    def radius(self, width: float = 1e-9) -> Radius:
        """Enclosure of the radius: lower end of the lower operator, upper end and point of the upper one.

        ``width`` relative, for each of the two operators; ``reached`` says whether both reached it (the distance
        between the two operators, which comes from the widths of the peak gains, is not part of it).
        """
        above, below = self.upper.radius(width), self.lower.radius(width)
        return Radius(
            lower=below.lower,
            upper=above.upper,
            point=above.point,
            bottleneck=above.bottleneck,
            method=above.method,
            work=above.work + below.work,
            reached=above.reached and below.reached,
        )


def assemble(
    closed: Sequence[ClosedUnit],
    links: Sequence[Link],
    alpha: Fraction | float | str = Fraction(0),
    width: float = 1e-6,
) -> Assembly:
    """The gain operator of the pattern made of one closed unit per kind and the given links.

    ``closed``: every kind, closed with the own parts of its relative links folded in; ``links``: as in the network,
    only the neighbour's part enters here; ``alpha`` rate in 1/s, >= 0; ``width`` relative width of the peak gains.

    Raises UnstableLoop if a unit (shifted by alpha) is not Hurwitz, InputError for an unknown kind or signal, a
    negative alpha or a width out of range, WidthNotReached if a peak gain does not close. Theory (1), (4), (9).
    """
    check_width(width)
    alpha = exact(alpha)
    if alpha < 0:
        raise InputError(f"alpha must not be negative, not {float(alpha):g} 1/s.")
    kinds = {unit.kind.name: i for i, unit in enumerate(closed)}
    outlets = tuple((unit.kind.name, offer.name) for unit in closed for offer in unit.kind.offers)
    place = {outlet: i for i, outlet in enumerate(outlets)}
    peaks = tuple(unit_engine(unit, unit.H.rows, alpha, width).gains(unit.D, unit.F) for unit in closed)
    entries: list[Entry] = []
    for link in links:
        if link.weakens or link.choice:
            raise InputError(f"link {link.name!r} may weaken or is an alternative; its row is not a sum.")
        column = place.get((link.source_kind, link.offer))
        if link.kind not in kinds or column is None:
            raise InputError(
                f"link {link.name!r} runs from {link.source_kind}.{link.offer} to {link.kind}.{link.take}; "
                f"known offers are {', '.join('.'.join(o) for o in outlets) or 'none'}."
            )
        index = kinds[link.kind]
        kind = closed[index].kind
        try:
            take = kind.index("takes", link.take)
        except KeyError as error:
            raise InputError(f"link {link.name!r}: {error.args[0]}.") from error
        for k, offer in enumerate(kind.offers):
            low, high = _gain(peaks[index].lower[k, take], peaks[index].upper[k, take], link, alpha)
            entries.append(Entry(link, place[(kind.name, offer.name)], column, low, high))
    rows, columns = [e.row for e in entries], [e.column for e in entries]
    upper = GainOperator.from_links(len(outlets), rows, columns, [e.upper for e in entries])
    lower = GainOperator.from_links(len(outlets), rows, columns, [e.lower for e in entries])
    return Assembly(outlets, upper, lower, peaks, tuple(entries), alpha)


def _gain(lower: np.float64, upper: np.float64, link: Link, alpha: Fraction) -> tuple[float, float]:
    """p |strength| e^{alpha delay} between doubles rounded outward."""
    strength, exponent = abs(link.strength), alpha * link.delay
    with ctx.workprec(128):
        factor = arb(fmpq(strength.numerator, strength.denominator))
        if exponent:
            factor *= arb(fmpq(exponent.numerator, exponent.denominator)).exp()
        return outward(arb(float(lower)) * factor, arb(float(upper)) * factor)

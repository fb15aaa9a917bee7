"""The gain operator of a network at one factor on its links, for every description, and how it moves with the factor.

At a factor kappa the plan of the network is built anew: what is folded into the units (own parts of relative links),
which links are alternatives and which of those never count all depend on kappa. Within one plan every term has a role:
fixed, scaled (the neighbour's part, and what moves with it) or drift (a self-link that stands for own parts folded at
another factor). A plan is read at other factors only where that keeps its choices.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cached_property
from math import floor, inf, log10

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError, UnstableLoop, WidthNotReached
from synth.gain import network_radius
from synth.gain.assembly import PeakTable, assemble_plan
from synth.gain.closed import ClosedUnit, close_plan
from synth.gain.descriptions import plan_of, wiring_of
from synth.gain.guide import peak_gain_guide
from synth.gain.operator import GainOperator
from synth.gain.peak import PeakGain
from synth.gain.plan import Floats, Indices, Plan, UnitSpec, Wiring, plan_of_units
from synth.network.gains import Gains
from synth.network.model import Link, Network

FIXED, SCALED, DRIFT = 0, 1, 2
_DENSE = 60
_ENDS = 1e-10


@dataclass(frozen=True, eq=False)
class Folded:
    """The gain operator with own parts folded at the factor ``kappa``; ``stable`` is False if a closed unit is not.

    ``plan`` has the drift terms at its end where own parts move; ``lower`` and ``upper`` bound every term at ``kappa``,
    drift terms per unit of the distance. ``peaks`` per specification of the plan. Of an edge pattern the plan is the
    bulk beside edge sections, and radii come from windows (synth.gain.network_radius).
    """

    kappa: float
    stable: bool
    scaling: Scaling
    plan: Plan | None = None
    role: NDArray[np.int8] = field(default_factory=lambda: np.zeros(0, dtype=np.int8))
    lower: Floats = field(default_factory=lambda: np.zeros(0))
    upper: Floats = field(default_factory=lambda: np.zeros(0))
    peaks: tuple[PeakGain, ...] = ()

    def radius(self, factor: float | None = None) -> tuple[float, float]:
        """Enclosure of the radius with the neighbours' parts at ``factor`` (None: at ``kappa``), own parts as folded.

        (inf, inf) if a closed unit is not stable.
        """
        if not self.stable:
            return inf, inf
        at = self.kappa if factor is None else factor
        scaling = self.scaling
        if scaling.has_edges or (scaling.weakens and not scaling.moves_units and at != self.kappa):
            found = network_radius(scaling.at(Fraction(at)), scaling.gains, table=scaling.table)
            return found.lower, found.upper
        return self._end(at, 0.0, False), self._end(at, 0.0, True)

    def drifted(self, factor: float, distance: float) -> float:
        """Upper end of the radius with neighbours' parts at ``factor`` and own parts off by up to ``distance``.

        Not for edge patterns (infinite there).
        """
        return self._end(factor, distance, True) if self.stable and not self.scaling.has_edges else inf

    def estimate(self, factor: float, distance: float) -> float:
        """As :meth:`drifted`, from doubles: fast, and not guaranteed."""
        assert self.plan is not None
        return leading(self.plan, self.upper * self._weights(factor, distance))

    def _weights(self, factor: float, distance: float) -> Floats:
        return np.array([1.0, factor / self.kappa, distance])[self.role]

    def _end(self, factor: float, distance: float, upper: bool) -> float:
        assert self.plan is not None
        if not self.plan.row.size:
            return 0.0
        weights = self._weights(factor, distance)
        toward = inf if upper else -inf
        gains = (self.upper if upper else self.lower) * np.nextafter(weights, toward)  # kappa and factor are rounded
        gains = np.where(weights * self.upper > 0, np.maximum(np.nextafter(gains, toward), 0.0), 0.0)
        if not np.any(gains):
            return 0.0
        found = self.plan.with_gains(gains).radius(width=_ENDS)
        return float(found.upper if upper else found.lower)

    @cached_property
    def operator(self) -> GainOperator | None:
        """The operator at ``kappa`` between its upper ends, without drift; None if there is nothing."""
        if self.plan is None or not self.plan.row.size:
            return None
        return self.plan.with_gains(self.upper * self._weights(self.kappa, 0.0))


@dataclass(frozen=True)
class Scaling:
    """Which links a factor multiplies, and whether the own parts of relative links grow with it."""

    network: Network
    gains: Gains
    classes: tuple[str, ...] | None = None
    own_parts: bool = True
    width: float = 1e-6
    _known: dict[Fraction, Folded] = field(default_factory=dict, compare=False, repr=False)
    _guides: dict[tuple[str, UnitSpec], Floats | None] = field(default_factory=dict, compare=False, repr=False)

    @cached_property
    def table(self) -> PeakTable:
        """Enclosed peak gains, each specification once."""
        return PeakTable(self.gains, Fraction(0), self.width)

    @property
    def links(self) -> Iterable[Link]:
        """Every link of the network, those of edges included."""
        return (*self.network.links, *(extra.link for edge in self.network.edges for extra in edge.links))

    def chosen(self, link: Link) -> bool:
        """Whether the factor multiplies this link."""
        return link.sort == "link" and (self.classes is None or link.name in self.classes)

    @cached_property
    def moves_units(self) -> bool:
        """Whether the factor changes closed units, through own parts."""
        return self.own_parts and any(link.relative and self.chosen(link) for link in self.links)

    @cached_property
    def weakens(self) -> bool:
        """Whether some link may weaken, so that the unit's own value is an alternative to the neighbour's."""
        return any(link.weakens for link in self.links)

    @property
    def has_edges(self) -> bool:
        """Whether the network is a pattern with edges."""
        return self.network.description == "edge pattern"

    @cached_property
    def unaffected(self) -> bool:
        """Whether the chosen links lie on no closed path of signals and move no unit: then no factor changes anything.

        Between outlets of units; a peak gain of zero does not open a path here.
        """
        if self.moves_units:
            return False
        plan = plan_of(self.network)
        if not plan.row.size:
            return True
        from scipy.sparse import coo_array
        from scipy.sparse.csgraph import connected_components

        links = plan.links
        strong = np.array([links[n].strength != 0 for n in plan.link.tolist()]) | plan.own
        ends = (plan.row[strong], plan.source[strong])
        graph = coo_array((np.ones(int(strong.sum())), ends), shape=(plan.size, plan.size)).tocsr()
        _, label = connected_components(graph, directed=True, connection="strong")
        on_path = label[ends[0]] == label[ends[1]]
        return not any(self.chosen(links[n]) for n in np.unique(plan.link[strong][on_path]).tolist())

    def at(self, factor: Fraction) -> Network:
        """The network at that factor."""
        return self.network.scaled(factor, self.classes, self.own_parts)

    def folded(self, factor: float) -> Folded:
        """Enclose the peak gains of the units folded at ``factor`` and list the operator's numbers (kept)."""
        kappa = tidy(factor)
        if kappa not in self._known:
            self._known[kappa] = self._fold(kappa)
        return self._known[kappa]

    def _fold(self, kappa: Fraction) -> Folded:
        network, count = self.at(kappa), 0
        if self.has_edges:
            plan = plan_of(network)
        else:
            wiring = wiring_of(network)
            count = len(wiring.links)
            plan = plan_of_units(self._with_drift(wiring) if self.moves_units else wiring)
        try:
            found = assemble_plan(plan, self.table)
        except (UnstableLoop, WidthNotReached):
            return Folded(float(kappa), False, self)
        role = np.array([self._role(link) for link in plan.links], dtype=np.int8)[plan.link]
        if not self.own_parts:
            role[plan.own] = FIXED
        if count:
            role[plan.link >= count] = DRIFT
        return Folded(float(kappa), True, self, plan, role, found.lower.gain, found.upper.gain, found.unit_peaks)

    def _role(self, link: Link) -> int:
        moves = self.chosen(link) and (self.own_parts or not link.own_part)
        return SCALED if moves else FIXED

    def _with_drift(self, wiring: Wiring) -> Wiring:
        """The wiring with one more arrival per own part that moves: the unit's own value, by today's strength."""
        today = wiring_of(self.network).links
        own = [n for n, link in enumerate(today) if link.relative and self.chosen(link)]
        place = np.full(len(today), -1, dtype=np.intp)
        place[own] = len(today) + np.arange(len(own))
        drifts = tuple(
            replace(
                link, source_kind=link.kind, at=(0,) * len(link.at), strength=link.own_strength,
                own_strength=Fraction(0), delay=Fraction(0), weakens=False, choice="",
            )
            for link in (today[n] for n in own)
        )  # fmt: skip
        extra = np.flatnonzero(place[wiring.link] >= 0)
        return replace(
            wiring,
            links=(*wiring.links, *drifts),
            to=np.concatenate([wiring.to, wiring.to[extra]]),
            source=np.concatenate([wiring.source, wiring.to[extra]]),
            link=np.concatenate([wiring.link, place[wiring.link[extra]]]),
        )

    def guess(self, factor: float) -> float:
        """Fast estimate of the radius at a factor (inf: a closed unit is not stable); guides, never claims.

        Of an edge pattern it is the radius of the bulk and of sections cut off, which lies below.
        """
        plan = plan_of(self.at(tidy(factor)))
        keys = [(plan.kinds[spec.kind].name, spec) for spec in plan.specs]
        new = [n for n, key in enumerate(keys) if key not in self._guides]
        for n, unit in zip(new, close_plan(plan, self.gains, new), strict=True):
            found = peak_gain_guide(unit.A.floats(), unit.D.floats(), unit.H.floats(), unit.F.floats())
            self._guides[keys[n]] = None if found is None else np.asarray(found.gains, dtype=float).reshape(-1)
        tables = [self._guides[key] for key in keys]
        if any(table is None for table in tables):
            return inf
        peaks = np.concatenate([np.zeros(0), *(table for table in tables if table is not None)])
        return leading(plan, peaks[plan.peak] * plan.factors())

    def effort(self, factor: float) -> float:
        """How long the units' responses ring, in periods of their fastest mode: the cost of enclosing their peaks."""
        units = self.closed(factor)
        modes = [np.linalg.eigvals(unit.A.floats()) for unit in units if unit.A.shape[0]]
        longest = max((float(np.max(np.abs(m)) / max(-float(m.real.max()), 1e-12)) for m in modes), default=0.0)
        return longest * max(1.0, len(units) / 4)

    def closed(self, factor: float) -> tuple[ClosedUnit, ...]:
        """Every specification at that factor with its loop closed."""
        return close_plan(plan_of(self.at(tidy(factor))), self.gains)


def leading(plan: Plan, gains: Floats) -> float:
    """The radius of a plan with one number per term, in doubles: a guide."""
    if not plan.row.size or not np.any(gains):
        return 0.0
    if plan.size <= _DENSE and plan.choice.max(initial=-1) < 0:
        M = np.zeros((plan.size, plan.size))
        np.add.at(M, (plan.row, plan.source), gains)
        return float(np.max(np.abs(np.linalg.eigvals(M))))
    return plan.with_gains(gains).radius(width=1e-6).upper


def tidy(value: float, digits: int = 7) -> Fraction:
    """The factor rounded down to a short decimal, so that the certified strength can be written in a file."""
    if value <= 0:
        return Fraction(0)
    places = digits - 1 - floor(log10(value))
    return Fraction(floor(Fraction(value) * Fraction(10) ** places)) / Fraction(10) ** places


@dataclass(frozen=True, eq=False)
class Rays:
    """What reaches the takes of units: ray r brings |``strength[r]``| times offer ``offer[r]`` of unit ``source[r]`` to
    take ``take[r]`` of unit ``to[r]``. Rays with equal ``group`` are alternatives: only the largest counts.
    """

    to: Indices
    take: Indices
    source: Indices
    offer: Indices
    strength: Floats
    group: Indices


def rays_of(wiring: Wiring) -> Rays:
    """Rays of all arrivals; a link that may weaken brings the unit's own value as an alternative (theory case R2)."""
    kinds = {kind.name: kind for kind in wiring.kinds}
    take, offer, own_offer = (np.full(len(wiring.links), -1, dtype=np.intp) for _ in range(3))
    for n, link in enumerate(wiring.links):
        try:
            take[n] = kinds[link.kind].index("takes", link.take)
            offer[n] = kinds[link.source_kind].index("offers", link.offer)
            if link.weakens:
                own_offer[n] = kinds[link.kind].index("offers", link.offer)
        except KeyError as error:
            raise InputError(f"link {link.name!r} names what is not there: {error.args[0]}.") from error
    strength, own = (np.array([abs(float(getattr(k, f))) for k in wiring.links]) for f in ("strength", "own_strength"))
    choices: dict[str, int] = {}
    choice = np.array([choices.setdefault(k.choice, len(choices)) if k.choice else -1 for k in wiring.links])
    weak = own_offer >= 0
    arrival = np.arange(wiring.to.size)
    near, mine = arrival[wiring.source >= 0], arrival[weak[wiring.link]] if arrival.size else arrival
    both = np.concatenate([near, mine]).astype(np.intp)
    which, to = wiring.link[both], wiring.to[both]
    self_ray = np.arange(both.size) >= near.size
    group = np.where(weak[which] if which.size else False, both, -1)
    alternative = choice[which] >= 0 if which.size else np.zeros(0, dtype=bool)
    group = np.where(alternative, arrival.size + to * (len(choices) + 1) + (choice[which] if which.size else 0), group)
    alone = group < 0
    group[alone] = arrival.size + (len(wiring.names) + 1) * (len(choices) + 2) + np.arange(int(alone.sum()))
    group = np.unique(group, return_inverse=True)[1].reshape(-1) if group.size else group
    brought = np.where(self_ray, own[which], strength[which]) if both.size else np.zeros(0)
    source = np.where(self_ray, to, wiring.source[both])
    offers = np.where(self_ray, own_offer[which], offer[which]) if both.size else both
    return Rays(to, take[which], source, offers, brought, group)

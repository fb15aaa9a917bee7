"""How much stronger the links may get before the peak route stops proving: theory (1), (2), own parts section 6.

At a factor kappa the closed units are formed (own parts of relative links grow with kappa where asked), their peak
gains are enclosed, and the radius of the gain operator is enclosed. Upper end below one: proven. Lower end one or more:
the class "every link independently any causal operator with |v| <= g sup|z|" is lost there, exactly (2).

Between two factors nothing is taken for granted: where own parts grow, the closed unit itself changes, the radius need
not be monotone, and a drift of the own part by delta is counted as a link of a unit to itself of strength
delta * own (section 6). That proves whole intervals of factors, not points.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from fractions import Fraction
from math import floor, inf, log10
from typing import Any, cast

import numpy as np

from synth.base.errors import SolverFailure, UnstableLoop, WidthNotReached
from synth.base.progress import Listener, silent
from synth.gain import GainOperator, assemble
from synth.gain.closed import close_network
from synth.gain.guide import peak_gain_guide
from synth.network.gains import Gains
from synth.network.model import Link, Network

CAP = 1000.0
_RATIO = 1.1
_FLOOR = 1e-4
_COVER_WORK = 1000.0  # in units of response length times fastest mode; about twenty seconds
_COVER_STEP = 10.0


@dataclass(frozen=True)
class Entry:
    """One number of the gain operator: p times today's |strength|, and what multiplies it.

    ``role``: 'fixed', 'scaled' (times the factor) or 'drift' (times the distance of the factor from the folded one).
    """

    link: Link
    role: str
    row: int
    column: int
    lower: float
    upper: float


@dataclass(frozen=True)
class Folded:
    """The gain operator with own parts folded at the factor ``kappa``; ``stable`` is False if a closed unit is not."""

    kappa: float
    stable: bool
    size: int = 0
    entries: tuple[Entry, ...] = ()

    def radius(self, factor: float | None = None) -> tuple[float, float]:
        """Enclosure of the radius with the neighbours' parts at ``factor`` (None: at ``kappa``), own parts as folded.

        (inf, inf) if a closed unit is not stable.
        """
        if not self.stable:
            return inf, inf
        at = self.kappa if factor is None else factor
        return self._end(at, 0.0, False), self._end(at, 0.0, True)

    def drifted(self, factor: float, distance: float) -> float:
        """Upper end of the radius with neighbours' parts at ``factor`` and own parts off by up to ``distance``."""
        return self._end(factor, distance, True) if self.stable else inf

    def estimate(self, factor: float, distance: float) -> float:
        """As :meth:`drifted`, from the eigenvalues of a small dense matrix: fast, and not guaranteed."""
        weight = {"fixed": 1.0, "scaled": factor, "drift": distance}
        M = np.zeros((self.size, self.size))
        for e in self.entries:
            M[e.row, e.column] += weight[e.role] * e.upper
        return float(np.max(np.abs(np.linalg.eigvals(M)))) if M.size else 0.0

    def _end(self, factor: float, distance: float, upper: bool) -> float:
        weight = {"fixed": 1.0, "scaled": factor, "drift": distance}
        used = [e for e in self.entries if weight[e.role] * e.upper > 0]
        if not used:
            return 0.0
        toward = inf if upper else -inf
        gains = [float(np.nextafter(weight[e.role] * (e.upper if upper else e.lower), toward)) for e in used]
        operator = GainOperator.from_links(
            self.size, [e.row for e in used], [e.column for e in used], [max(g, 0.0) for g in gains], rows="sum"
        )
        found = operator.radius(width=1e-10)
        return float(found.upper if upper else found.lower)


@dataclass(frozen=True)
class Scaling:
    """Which links a factor multiplies, and whether the own parts of relative links grow with it."""

    network: Network
    gains: Gains
    classes: tuple[str, ...] | None = None
    own_parts: bool = True
    width: float = 1e-6
    _known: dict[Fraction, Folded] = field(default_factory=dict, compare=False, repr=False)

    def chosen(self, link: Link) -> bool:
        """Whether the factor multiplies this link."""
        return self.classes is None or link.name in self.classes

    @property
    def moves_units(self) -> bool:
        """Whether the factor changes closed units, through own parts."""
        return self.own_parts and any(link.relative and self.chosen(link) for link in self.network.links)

    @property
    def unaffected(self) -> bool:
        """Whether the chosen links lie on no closed path of kinds and move no unit: then no factor changes anything."""
        links = [link for link in self.network.links if link.strength != 0]
        reach = {kind.name: {kind.name} for kind in self.network.kinds}
        for _ in self.network.kinds:
            for link in links:
                reach[link.source_kind] |= reach[link.kind]
        on_path = any(self.chosen(link) and link.source_kind in reach[link.kind] for link in links)
        return not self.moves_units and not on_path

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
        closed = close_network(self.at(kappa), self.gains)
        drifts = [
            replace(link, source_kind=link.kind, at=(0,), strength=link.own_strength, own_strength=Fraction(0))
            for link in self.network.links
            if self.moves_units and link.relative and self.chosen(link)
        ]
        links = (*self.network.links, *drifts)
        count = len(self.network.links)
        try:
            found = assemble(closed, links, Fraction(0), self.width)
        except (UnstableLoop, WidthNotReached):
            return Folded(float(kappa), False)
        roles = ["scaled" if self.chosen(link) else "fixed" for link in self.network.links] + ["drift"] * len(drifts)
        entries = []
        position = {id(link): i for i, link in enumerate(links)}
        for link, row, column, lower, upper, *_ in found.entries:
            i = position[id(link)]
            entries.append(Entry(self.network.links[i] if i < count else link, roles[i], row, column, lower, upper))
        return Folded(float(kappa), True, len(found.outlets), tuple(entries))

    def guess(self, factor: float) -> float:
        """Fast estimate of the radius at a factor (inf: a closed unit is not stable); guides, never claims."""
        closed = close_network(self.at(tidy(factor)), self.gains)
        outlets = [(u.kind.name, o.name) for u in closed for o in u.kind.offers]
        place = {outlet: i for i, outlet in enumerate(outlets)}
        M = np.zeros((len(place), len(place)))
        for unit in closed:
            found = peak_gain_guide(unit.A.floats(), unit.D.floats(), unit.H.floats(), unit.F.floats())
            if found is None:
                return inf
            for link in self.network.links:
                if link.kind == unit.kind.name:
                    take = unit.kind.index("takes", link.take)
                    strength = abs(float(link.strength)) * (factor if self.chosen(link) else 1.0)
                    for k, offer in enumerate(unit.kind.offers):
                        row, column = place[(link.kind, offer.name)], place[(link.source_kind, link.offer)]
                        M[row, column] += found.gains[k, take] * strength
        return float(np.max(np.abs(np.linalg.eigvals(M)))) if M.size else 0.0

    def effort(self, factor: float) -> float:
        """How long the units' responses ring, in periods of their fastest mode: the cost of enclosing their peaks."""
        closed = close_network(self.at(tidy(factor)), self.gains)
        modes = [np.linalg.eigvals(unit.A.floats()) for unit in closed if unit.A.shape[0]]
        return max((float(np.max(np.abs(m)) / max(-float(m.real.max()), 1e-12)) for m in modes), default=0.0)


@dataclass(frozen=True)
class CouplingLimit:
    """``proven``: largest factor found whose radius is below one; ``lost``: first factor at which the class is lost.

    ``covered``: every factor from today's strength to this one is proven (equal to ``proven`` where nothing is left
    open). ``capped``: nothing failed up to the cap; ``lost`` is then the cap too. ``proven`` is 0 if not even units
    without links are stable. ``unlimited``: the factor provably changes nothing; both are infinite.
    ``lost_confirmed``: an enclosure agrees that the class is lost at ``lost``; otherwise that number is an estimate.
    """

    proven: float
    lost: float
    covered: float
    capped: bool = False
    unlimited: bool = False
    nominal_proven: bool = True
    lost_confirmed: bool = True


def tidy(value: float, digits: int = 7) -> Fraction:
    """The factor rounded down to a short decimal, so that the certified strength can be written in a file."""
    if value <= 0:
        return Fraction(0)
    places = digits - 1 - floor(log10(value))
    return Fraction(floor(Fraction(value) * Fraction(10) ** places)) / Fraction(10) ** places


def coupling_limit(
    scaling: Scaling, width: float = 1e-3, cap: float = CAP, progress: Listener = silent
) -> CouplingLimit:
    """Bracket the first factor at which the peak route fails, going up from 1, or down from 1 if it fails there.

    ``width``: relative width of the bracket, > 0. ``cap`` ends the upward scan where own parts grow; otherwise the
    radius is monotone in the factor and no cap is needed. Law: scaling all strengths of a network without relative
    links by c divides the result by c.
    """
    nominal = scaling.folded(1.0)
    proven_now = nominal.radius()[1] < 1
    if scaling.unaffected:
        value = inf if proven_now else 0.0
        return CouplingLimit(value, value, value, unlimited=True, nominal_proven=proven_now)
    if not scaling.moves_units:
        return _monotone(nominal, width, proven_now)
    if proven_now:
        low = 1.0
        while low < cap:
            high = min(low * _RATIO, cap)
            if scaling.guess(high) >= 1:
                proven, lost, sure = _confirmed(scaling, *_guided(scaling, low, high, width), width)
                return CouplingLimit(proven, lost, _cover(scaling, proven, width), lost_confirmed=sure)
            progress(f"radius below 1 at {high:.4g} times today's strength")
            low = high
        proven, _, _ = _confirmed(scaling, cap, inf, width)
        return CouplingLimit(proven, proven, _cover(scaling, proven, width), capped=True)
    high = 1.0
    while high > _FLOOR:
        low = high / _RATIO**2
        if scaling.guess(low) < 1:
            proven, lost, sure = _confirmed(scaling, *_guided(scaling, low, high, width), width)
            return CouplingLimit(proven, lost, proven, nominal_proven=False, lost_confirmed=sure)
        high = low
    return CouplingLimit(0.0, high, 0.0, nominal_proven=False)


def _guided(scaling: Scaling, low: float, high: float, width: float) -> tuple[float, float]:
    """Narrow a bracket by fast estimates; what they say is confirmed afterwards."""
    while high - low > width / 4 * high:
        middle = (low + high) / 2
        if scaling.guess(middle) < 1:
            low = middle
        else:
            high = middle
    return low, high


def _confirmed(scaling: Scaling, low: float, high: float, width: float) -> tuple[float, float, bool]:
    """Guaranteed ends of a bracket found by estimates, each moved outward until its enclosure agrees.

    The last value is False where no enclosure agreed that the class is lost near ``high``: an estimate then.
    """
    steps = [width / 8 * (2**step - 1) for step in range(6)]
    proven = 0.0
    for tried in [*(low * (1 - step) for step in steps), *([1.0] if low > 1 else [])]:
        if scaling.folded(tried).radius()[1] < 1:
            proven = float(tidy(tried))
            break
    if high == inf:
        return proven, proven, True
    for tried in (high * (1 + step) for step in steps):
        if scaling.folded(tried).radius()[0] >= 1:
            return proven, tried, True
    return proven, high, False


def _monotone(nominal: Folded, width: float, proven_now: bool) -> CouplingLimit:
    """Own parts fixed: the radius grows with the factor, so one bracket says everything (theory (2): 1/radius)."""
    if not nominal.stable:
        return CouplingLimit(0.0, 0.0, 0.0, nominal_proven=False)
    if nominal.radius(0.0)[1] >= 1:  # links outside the chosen classes alone are too strong
        return CouplingLimit(0.0, 0.0, 0.0, nominal_proven=False)
    low, high = (1.0, 2.0) if proven_now else (0.5, 1.0)
    while nominal.radius(high)[1] < 1:
        low, high = high, 2 * high
        if high > 1e15:
            return CouplingLimit(low, low, low, capped=True)
    while nominal.radius(low)[1] >= 1:
        low, high = low / 2, low
        if low < 1e-15:
            return CouplingLimit(0.0, high, 0.0, nominal_proven=False)
    proven, lost = _bisect(nominal.radius, low, high, min(width, 1e-6))
    return CouplingLimit(proven, lost, proven, nominal_proven=proven_now)


def _bisect(
    check: Callable[[float], tuple[float, float]], low: float, high: float, width: float
) -> tuple[float, float]:
    """From a proven ``low`` and a failing ``high``: (proven, lost), as close as ``width`` where enclosures allow."""
    lost = high if check(high)[0] >= 1 else inf
    while high - low > width / 2 * high:
        middle = (low + high) / 2
        lower, upper = check(middle)
        if upper < 1:
            low = middle
        else:
            high = middle
            lost = middle if lower >= 1 else lost
    for step in range(60):  # the enclosure straddles one just above ``low``: go on until the class is certainly lost
        if lost <= high * (1 + width):
            break
        tried = high * (1 + width / 4 * 2**step)
        if tried < lost and check(tried)[0] >= 1:
            lost = tried
            break
    return float(tidy(low)), lost


def _cover(scaling: Scaling, proven: float, width: float) -> float:
    """How far every factor from 1 on is proven, by steps that each prove an interval (own drift as a self-link).

    The work is limited by the length of the units' responses, so slowly decaying units are covered less far.
    """
    back = _reach(scaling.folded(proven), proven, 0.0)
    at, left = 1.0, _COVER_WORK
    while left > 0:
        if at >= min(back, proven):
            return proven
        left -= scaling.effort(at) + _COVER_STEP
        step = _reach(scaling.folded(at), at, proven)
        if step <= at * (1 + width * 1e-3):
            return at
        at = step
    return at


def _reach(base: Folded, near: float, far: float) -> float:
    """The factor nearest to ``far`` such that everything between it and ``near`` is proven from this one folding."""

    def ends(edge: float) -> tuple[float, float]:
        return max(edge, near, base.kappa), max(abs(edge - base.kappa), abs(near - base.kappa))

    if not base.stable or base.drifted(*ends(near)) >= 1:
        return near
    good, bad = near, far
    if base.estimate(*ends(far)) < 1:
        good = far
    for _ in range(40):
        middle = (good + bad) / 2
        if base.estimate(*ends(middle)) < 1:
            good = middle
        else:
            bad = middle
    for back in (0.0, 1e-9, 1e-6, 1e-3, 1e-1):  # what doubles suggest is kept only if the guaranteed radius agrees
        edge = good + (near - good) * back
        if base.drifted(*ends(edge)) < 1:
            return edge
    return near


def bottleneck(folded: Folded) -> tuple[tuple[str, float], ...]:
    """Link classes by their share in the radius: d log radius / d log strength, from theory (15); shares sum to one.

    A guide computed in doubles; empty where the radius is zero. Raises SolverFailure if the eigenproblem fails.
    """
    if not folded.stable:
        return ()
    M = np.zeros((folded.size, folded.size))
    for e in folded.entries:
        if e.role != "drift":
            M[e.row, e.column] += e.upper * (folded.kappa if e.role == "scaled" else 1.0)
    if not np.any(M):
        return ()
    from scipy.linalg import eig

    try:
        values, left, right = cast(Any, eig(M, left=True, right=True))
    except np.linalg.LinAlgError as error:
        raise SolverFailure("the eigenvectors of the gain operator could not be computed.") from error
    k = int(np.argmax(values.real))
    u, x = np.abs(left[:, k]), np.abs(right[:, k])
    shares: dict[str, float] = {}
    for e in folded.entries:
        if e.role != "drift":
            part = u[e.row] * e.upper * (folded.kappa if e.role == "scaled" else 1.0) * x[e.column]
            shares[e.link.name] = shares.get(e.link.name, 0.0) + float(part)
    total = sum(shares.values())
    if values[k].real <= 0 or total <= 0:
        return ()
    found = [(name, share / total) for name, share in shares.items() if share > 1e-12 * total]
    return tuple(sorted(found, key=lambda item: -item[1]))

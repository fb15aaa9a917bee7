"""How much stronger the links may get before the window route stops proving, going outward from today's strength.

The radius of M_W need not grow with the factor: a proof may fail at one strength and succeed at a larger one. So the
factors are scanned, the first failure and the later ranges are both reported, and what is called proven is proven at
that one factor. ``covered`` says up to where every factor is proven: between two factors the strengths are taken as
uncertain by their distance, which adds p_W (inlet -> centre) times that distance (theory (20)).
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass, field, replace
from fractions import Fraction
from itertools import pairwise

from synth.base.errors import InputError, nearest
from synth.base.progress import Listener, silent
from synth.gain.window.build import Closure
from synth.gain.window.covering import Drift, covered_up_to
from synth.gain.window.growth import reaches
from synth.gain.window.norm import MOST_STATES
from synth.gain.window.route import AS_DECLARED, Knowledge, WindowRadius, window_radius
from synth.network.gains import Gains
from synth.network.model import Network

_RATIO = 1.1
_LOWEST = 1e-3
# Failing factors in a row (a range of about two) after which nothing more is expected; only those count whose windows
# are not stable, or so far from a proof that a later one is out of sight.
_PATIENCE = 8
_FAR = 10.0


@dataclass(frozen=True)
class WindowFactor:
    """Factors on today's strengths, by windows of radius ``R``.

    ``proven``: the largest factor found at which the network is proven (0: none), ``at`` its window radius.
    ``first_failure``: the first factor, going outward from today's, at which the proof fails; ``later``: ranges beyond
    it in which it succeeds again, as scanned (their ends bracketed by estimates, nothing proven about them).
    ``covered``: every factor from today's to this one is proven (None: not asked for; 0: today's is not). ``capped``:
    nothing failed up to the end of the scan. ``scanned``: every factor tried, with the estimated radius there.
    ``peak_route``: what the peak route proves, with links of any behaviour within their strengths. ``own_parts``:
    whether own parts of relative links grew along. ``grown``: (R, about the factor reached) of every size tried.
    """

    R: int
    proven: float
    at: WindowRadius | None
    first_failure: float
    later: tuple[tuple[float, float], ...]
    capped: bool
    peak_route: float
    own_parts: bool
    classes: tuple[str, ...] | None
    covered: float | None = None
    nominal_proven: bool = True
    scanned: tuple[tuple[float, float], ...] = field(default=(), repr=False)
    grown: tuple[tuple[int, float], ...] = ()

    @property
    def monotone(self) -> bool:
        """Whether the scan saw no factor that is proven again beyond a failure."""
        return not self.later

    @property
    def radius_monotone(self) -> bool:
        """Whether the estimated radius rose with every larger factor scanned."""
        return all(a <= b for (_, a), (_, b) in pairwise(self.scanned))


@dataclass(frozen=True)
class _Search:
    network: Network
    gains: Gains
    classes: tuple[str, ...] | None
    own_parts: bool
    width: float
    most: float
    knowledge: Knowledge
    closure: Closure | None
    seen: dict[tuple[int, Fraction], float] = field(default_factory=dict)
    states: dict[int, int] = field(default_factory=dict)

    def radius(self, R: int, factor: float, method: str) -> WindowRadius:
        scaled = self.network.scaled(_exactly(factor), self.classes, self.own_parts)
        width = min(1e-3, self.width) if method == "estimate" else self.width / 50
        return window_radius(scaled, self.gains, R, 0, width, self.knowledge, self.closure, method)

    def estimate(self, R: int, factor: float) -> float:
        key = (R, _exactly(factor))
        if key not in self.seen:
            found = self.radius(R, factor, "estimate")
            self.seen[key] = found.estimate if found.stable else math.inf
            self.states[R] = max(found.states, self.states.get(R, 0))
        return self.seen[key]


def window_factor(
    network: Network, gains: Gains, R: int | None = None, classes: tuple[str, ...] | None = None,
    own_parts: bool = True, width: float = 1e-3, most: float = 20.0,
    knowledge: Knowledge = AS_DECLARED,
    closure: Closure | None = None, cover: bool = False, seconds: float = 60.0, most_states: int = MOST_STATES,
    progress: Listener = silent,
) -> WindowFactor:  # fmt: skip
    """The largest factor on the links of ``classes`` (None: all) at which windows of radius ``R`` prove the network.

    ``R`` None: windows grow until the factor no longer does (by a hundredth over two steps), ``most`` is reached, or
    ``seconds`` of processor time or ``most_states`` are spent. ``own_parts``: whether the own part of a relative link
    grows with the factor. ``width``: relative width of every bracket. ``most``: end of the scan, > 1. ``cover``: also
    say up to where every factor is proven. Raises InputError for unknown classes and numbers out of range.
    """
    _check(network, classes, width, most)
    search = _Search(network, gains, classes, own_parts, width, most, knowledge, closure)
    if R is not None:
        best = _at_reach(search, R)
    else:
        best = _grown(search, _at_reach(search, 0), seconds, most_states, progress)
    best = replace(best, peak_route=_class_limit(search))
    if not cover:
        return best
    top = min(best.proven, best.first_failure)
    way = closure or (best.at.closure if best.at is not None else Closure())
    drift = Drift(network, gains, classes, own_parts, knowledge, way)
    return replace(best, covered=covered_up_to(drift, best.R, top) if best.nominal_proven and top >= 1 else 0.0)


def _check(network: Network, classes: tuple[str, ...] | None, width: float, most: float) -> None:
    if not 1e-6 <= width <= 0.1:
        raise InputError(f"width is {width}; a relative width between 1e-6 and 0.1 is accepted.")
    if not (math.isfinite(most) and most > 1):
        raise InputError(f"the scan must end at a finite factor above 1, not {most!r}.")
    for name in classes or ():
        if name not in network.classes():
            raise InputError(
                f"no link class is named {name!r}{nearest(name, network.classes())}; "
                f"known: {', '.join(network.classes()) or 'none'}."
            )


def _grown(search: _Search, floor: WindowFactor, seconds: float, most_states: int, progress: Listener) -> WindowFactor:
    """Let the windows grow while the largest factor does, by quick climbs; the last word is a full scan at the best."""
    start = time.process_time()
    best_R, best, still, grown = 0, floor.proven, 0, [(0, floor.proven)]
    dimension = max(search.network.dimension, 1)
    for R in reaches():
        if R == 0:
            continue
        began = time.process_time()
        reached = _climb(search, R, best)
        progress(f"windows of radius {R}: about {reached:.5g} times today's strength")
        grown.append((R, reached))
        still = still + 1 if reached <= best * 1.01 else 0
        if reached > best:
            best_R, best = R, reached
        spent, last = time.process_time() - start, time.process_time() - began
        states = search.states.get(R, 0)
        settled = best > 0 and still >= 4
        if (
            settled
            or best >= search.most
            or spent + 1.5 ** (2.5 * dimension) * last > seconds
            or 1.5**dimension * states > most_states
        ):
            break
    if best_R == 0:
        return replace(floor, grown=tuple(grown))
    found = _at_reach(search, best_R)
    return replace(found if found.proven > floor.proven else floor, grown=tuple(grown))


def _class_limit(search: _Search) -> float:
    """With every link known by its strength only, windows of one cell are the peak route: where it still proves."""
    any_links = replace(
        search, knowledge=Knowledge(search.network.classes()), closure=Closure(), seen={}, states={}, most=1e6
    )
    top = _climb(any_links, 0, 0.0, search.width / 4)
    return _confirmed(any_links, 0, 0.0, top)[0] if top else 0.0


def _climb(search: _Search, R: int, start: float, width: float = 0.01) -> float:
    """About the largest factor from ``start`` (0: from 1, either way) on with an estimate below one; 0 if none."""
    at = start or 1.0
    if start == 0:
        while at > _LOWEST and not search.estimate(R, at) < 1:
            at /= _RATIO**2
        if at <= _LOWEST:
            return 0.0
    good, bad, failures = 0.0, 0.0, 0
    while failures < _PATIENCE // 2:
        if search.estimate(R, at) < 1:
            good, failures = at, 0
        else:
            bad = at if failures == 0 else bad
            failures += 1
        if at >= search.most:
            break
        at = min(at * _RATIO**2, search.most)
    if failures == 0:
        return good
    if good == 0:
        return 0.0
    return _edge(search, R, good, bad, width)


def _at_reach(search: _Search, R: int) -> WindowFactor:
    """Scan, bracket, and confirm by enclosures, at one radius of the windows."""
    grid = [1.0]
    nominal = search.estimate(R, 1.0) < 1
    failures = 0
    while grid[0] > _LOWEST and not search.estimate(R, grid[0]) < 1:
        grid.insert(0, grid[0] / _RATIO)  # today's network is not proven: down to the first range that is
    while grid[-1] < search.most and failures < _PATIENCE:
        grid.append(min(grid[-1] * _RATIO, search.most))
        failures = failures + 1 if search.estimate(R, grid[-1]) >= _FAR else 0
    ranges = _ranges(search, R, grid)
    proven, at = 0.0, None
    for low, high in reversed(ranges):
        proven, at = _confirmed(search, R, low, high)
        if at is not None:
            break
    base = next((r for r in ranges if r[0] <= 1 <= r[1]), ranges[0] if ranges else (0.0, 0.0))
    capped = bool(ranges) and ranges[-1][1] >= search.most and at is not None and len(ranges) == 1
    first = math.inf if capped else _after(search, R, base[1]) if ranges else 1.0
    later = tuple(r for r in ranges if r[0] > base[1])
    scanned = tuple((k, search.estimate(R, k)) for k in grid)
    return WindowFactor(
        R, proven, at, first, later, capped, proven, search.own_parts, search.classes, None, nominal, scanned
    )


def _ranges(search: _Search, R: int, grid: list[float]) -> list[tuple[float, float]]:
    """The ranges of factors with an estimated radius below one, their ends bracketed from inside."""
    found: list[tuple[float, float]] = []
    good = [search.estimate(R, k) < 1 for k in grid]
    i = 0
    while i < len(grid):
        if not good[i]:
            i += 1
            continue
        j = i
        while j + 1 < len(grid) and good[j + 1]:
            j += 1
        low = grid[i] if i == 0 else _edge(search, R, grid[i], grid[i - 1])
        high = grid[j] if j + 1 == len(grid) else _edge(search, R, grid[j], grid[j + 1])
        found.append((low, high))
        i = j + 1
    return found


def _edge(search: _Search, R: int, good: float, bad: float, width: float | None = None) -> float:
    """The end of a range from inside, between a factor that is good and one that is not: interpolated, then halved."""
    width = search.width / 4 if width is None else width
    turn = 0
    while abs(good - bad) > width * max(good, bad):
        low, high = search.estimate(R, good), search.estimate(R, bad)
        share = 0.5
        if turn % 3 < 2 and 0 < low < 1 < high < math.inf:
            # A little to either side of where a straight line in the logarithm meets one, in turn.
            aim = math.log(1 / low) / math.log(high / low)
            step = width / 4 * max(good, bad) / abs(bad - good)
            share = min(max(aim + (step if turn % 3 else -step), 0.02), 0.98)
        middle = good + share * (bad - good)
        if search.estimate(R, middle) < 1:
            good = middle
        else:
            bad = middle
        turn += 1
    return good


def _after(search: _Search, R: int, good: float) -> float:
    """A factor just above ``good`` at which the estimate is one or more."""
    step = search.width / 4
    while search.estimate(R, good * (1 + step)) < 1:
        step *= 2
        if step > _RATIO:
            return math.inf
    return good * (1 + step)


def _confirmed(search: _Search, R: int, low: float, high: float) -> tuple[float, WindowRadius | None]:
    """The largest factor in the range, moved inward if need be, at which an enclosure agrees."""
    for step in range(6):
        factor = _short(high * (1 - search.width / 8 * (2**step - 1)))
        if factor < low:
            break
        found = search.radius(R, factor, "auto")
        if found.proven:
            return factor, found
    return 0.0, None


def _short(factor: float) -> float:
    """Rounded down to eight digits, so that the factor can be written in a file."""
    if factor <= 0:
        return 0.0
    places = 7 - math.floor(math.log10(factor))
    return float(math.floor(factor * 10.0**places) / 10.0**places)


def _exactly(factor: float) -> Fraction:
    """The shortened factor as the decimal number it is written as."""
    return Fraction(repr(_short(factor)))

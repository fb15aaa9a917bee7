"""Points for one strongly connected class of sum rows: the Perron vector, as far as it is needed for the two bounds.

A vector is only needed where it is large: the leading pair of a ball round the place where power steps have gathered
gives both points once the rest is fenced in by one loose solve (see leading). Where links spread, so that balls soon
are everything, the pair is one of the whole. Where that fails, more power steps reach from end to end; then Noda's
iteration (Noda, Numer. Math. 17, 1971) on the whole class takes over, for a limited number of steps. All of it in the
coordinates of a point that keeps the row sums close together: power steps, and where gains or paths span many decades
the values of the largest loop (max-plus scaling). Ours.

Rows that are roots of squares with one link per inlet are sum rows of squares (theory (11)).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from synth.gain.operator import MAX, SQUARE, GainOperator
from synth.gain.solving.frame import Frame
from synth.gain.solving.krylov import bicgstab, factored, has_hubs, may_factor, spreads
from synth.gain.solving.leading import Fenced, fence, is_long, leading_pair
from synth.gain.solving.points import ClassPoint, Exponents, Floats, plain
from synth.gain.solving.single_loop import single_loop

# Power steps gather at hot spots, after some time along loops; where links spread there are none; the last but one try.
_POWER_STEPS, _POWER_STEPS_LONG, _POWER_STEPS_FAST, _POWER_STEPS_FAR = 30, 60, 6, 1500
_FAR_WORK = 300_000_000
_WHOLE = "vector of the whole"
_SPOTS, _SPOT_SIZE = 12, 60
_BALLS = (1_000, 4_000, 16_000, 64_000)
_CENTRES = 4
# Below this size factorisations are the quickest.
_LOCAL_FROM = 300
# Noda steps: fewer for large networks.
_NODA_STEPS, _NODA_LEAST, _NODA_WORK = 40, 4, 400_000
_NEAR = 1e-6
# Krylov vectors to this error; what a vector may leave at the edge of its ball; error for comparing spots.
_GOAL, _FADED, _LOOSE = 1e-11, 1e-6, 1e-4
# Vectors of which more than this leaves the surroundings of their spot are wider than these.
_SEEN = 0.02


@dataclass(frozen=True, eq=False)
class _Low:
    """A lower bound in doubles and its point in original coordinates."""

    value: float
    point: Floats
    exponent: Exponents


class _Search:
    """State of the search in one class: the frame, the best lower point, the best upper point and the work."""

    def __init__(self, frame: Frame, width: float) -> None:
        self.frame = frame
        self.width = width
        self.low = _Low(0.0, frame.mantissa, frame.exponent)
        self.high = np.inf
        self.top = (frame.mantissa, frame.exponent)
        self.work = 0
        self.spreads = frame.size >= _LOCAL_FROM and (has_hubs(frame.B) or spreads(frame.B))
        self.method = "power steps"

    def look(self) -> bool:
        """Take in the quotients of the current point; True when the ends are close enough."""
        frame = self.frame
        quotients = frame.quotients
        self.work += 1
        if quotients.max() < self.high:
            self.high, self.top = float(quotients.max()), (frame.mantissa, frame.exponent)
        self.offer(float(quotients.min()), np.ones(frame.size))
        return self.done

    def offer(self, value: float, x: Floats) -> None:
        """A lower bound for a vector in the current coordinates."""
        if value > self.low.value:
            self.low = _Low(value, *self.frame.place(x))

    @property
    def done(self) -> bool:
        return self.high - self.low.value <= 0.7 * self.width * self.high

    @property
    def level(self) -> float:
        """Where a solve would close the enclosure."""
        return self.low.value * (1 + 0.6 * self.width)


def solve(inner: GainOperator, width: float) -> ClassPoint | None:
    """Both points of a strongly connected class of sum rows, or of roots of squares with one link per inlet.

    ``inner``: gains > 0, at least one link into every outlet; ``width`` relative, > 0. None for other rows.
    """
    squared = squares(inner)
    if not (inner.linear or squared) or inner.gain.size == 0:
        return None
    if inner.gain.size == inner.size:
        return single_loop(inner)
    frame = Frame(inner, squared)
    search = _Search(frame, width)
    _start(search, inner, squared)
    if not search.done:
        if search.frame.size >= _LOCAL_FROM:
            _local(search)
            if not search.done:
                # Where gains drive one way, coordinates have to reach from end to end before anything is accurate.
                _power(search, int(np.clip(_FAR_WORK / frame.B.nnz, 100, _POWER_STEPS_FAR)))
                if not search.done:
                    _local(search)
        if not search.done:
            _noda(search)
    if not search.done and not search.frame.wide:
        search.frame.wide = True
        _balance(search, inner, squared)
        search.look()
        _noda(search)
    return _answer(search, squared)


def squares(inner: GainOperator) -> bool:
    """Whether all rows are roots of squares with one link per inlet."""
    if not np.all(inner.codes == SQUARE):
        return False
    return inner.layout.inlet_start.size == inner.gain.size


def _start(search: _Search, inner: GainOperator, squared: bool) -> None:
    """Coordinates with quotients close together: the values of the largest loop if gains are wide, power steps."""
    frame = search.frame
    if search.look():
        return
    if frame.wide:
        _balance(search, inner, squared)
        if search.look():
            return
    steps = _POWER_STEPS_FAST if search.spreads else _POWER_STEPS_LONG if is_long(frame.B) else _POWER_STEPS
    _power(search, steps)


def _power(search: _Search, steps: int) -> None:
    """Shifted power steps, whose result becomes the coordinates."""
    frame = search.frame
    x = np.ones(frame.size)
    # The shift keeps the steps from going in circles on periodic graphs.
    high = float(frame.quotients.max())
    shift = 0.6 * high
    often = 8 if high < 1e30 else 1
    for step in range(steps):
        image = frame.B @ x
        x *= shift
        image += x
        x = image / image.max() if step % often == 0 or step == steps - 1 else image
    search.work += steps
    if x.min() > 1e-250:
        frame.rescale(x)
        search.look()


def _balance(search: _Search, inner: GainOperator, squared: bool) -> None:
    """Move to the point of the largest loop: then every row has an entry near the loop's mean and none much above."""
    from synth.gain.solving.loops import solve as largest_loop

    codes = np.full(inner.size, MAX, dtype=np.int8)
    found = largest_loop(replace(inner, codes=codes), 1e-3)
    if found is None:
        return
    exponent = found.exponent
    point = found.point
    if squared:
        exponent = None if exponent is None else 2 * exponent
        point = point * point
    search.frame.move(point, exponent)
    search.work += found.work
    search.method = "largest loop as scale"


def _local(search: _Search) -> None:
    """A leading pair, fenced in: of a ball round a hot spot whose edge does not matter, or of the whole."""
    frame = search.frame
    whole = frame.size <= 2 * _BALLS[0] or search.spreads
    centre, least = (np.zeros(1, dtype=np.intp), 0) if whole else _hottest(search)
    for _ in range(_CENTRES):
        fenced = _round(search, centre, frame.size if whole else least)
        if fenced is None:
            return
        if fenced.x is not None and fenced.y is not None:
            image = frame.B @ fenced.y
            kept = fenced.y > 0
            if kept.any():
                search.offer(float((image[kept] / fenced.y[kept]).min()), fenced.y)
            if fenced.x.min() > 0:
                frame.rescale(fenced.x)
                search.look()
            return
        if fenced.spot < 0 or search.method.startswith(_WHOLE):
            return
        # Below the radius the solution turns negative where a hotter spot is.
        centre = np.array([fenced.spot])


def _round(search: _Search, centre: NDArray[np.intp], least: int) -> Fenced | None:
    """The pair of the smallest ball round ``centre`` on whose edge the vector has faded, fenced in.

    Balls of fewer than ``least`` outlets are not tried.
    """
    frame = search.frame
    search.method = "vector of a part, fenced in"
    v = np.ones(frame.size)
    long = is_long(frame.B)
    for most in _BALLS:
        if most > frame.size / 2 or most < least:
            continue
        ball = frame.ball(centre, most)
        pair = leading_pair(frame.block(ball), v[ball] + 1e-3 * v.max(), _GOAL)
        search.work += 1
        if pair is None:
            if long:
                continue
            return None
        v = np.zeros(frame.size)
        v[ball] = pair[1]
        centre = ball[[int(np.argmax(pair[1]))]]
        # Along long loops little of what leaves the ball ever comes back.
        if not long and _leak(frame, v) > _FADED * pair[0]:
            continue
        fenced = _fenced(search, pair[0], v)
        if fenced.closes or fenced.spot >= 0:
            return fenced
    search.method = f"{_WHOLE}, fenced in"
    pair = leading_pair(frame.B, v + 1e-3 * v.max(), _GOAL)
    search.work += 1
    return None if pair is None else _fenced(search, *pair)


def _leak(frame: Frame, v: Floats) -> float:
    """The most that an outlet with v = 0 hears."""
    return float(np.where(v > 0, 0.0, frame.B @ v).max())


def _fenced(search: _Search, theta: float, v: Floats) -> Fenced:
    fenced = fence(search.frame.B, theta, v, search.width)
    search.work += fenced.work
    return fenced


def _hottest(search: _Search) -> tuple[NDArray[np.intp], int]:
    """Where the leading vector of the surroundings of some hot spots is largest, and how small a ball can be enough."""
    frame = search.frame
    spots = _spots(frame)
    most = _SPOT_SIZE * spots.size
    top, least = spots[:1], 0
    for size in (most, 5 * most):
        ball = frame.ball(spots, size)
        pair = leading_pair(frame.block(ball), np.ones(ball.size), _LOOSE)
        search.work += 1
        if pair is None:
            break
        top = ball[[int(np.argmax(pair[1]))]]
        v = np.zeros(frame.size)
        v[ball] = pair[1]
        if _leak(frame, v) <= _SEEN * pair[0]:
            break
        least = size
        if frame.size < 4 * least:
            break
    return top, 3 * least


def _spots(frame: Frame) -> NDArray[np.intp]:
    """Outlets where power steps have gathered: those above all they listen to, largest first."""
    size = np.ldexp(frame.mantissa, np.clip(frame.exponent - frame.exponent.max(), -1000, 0).astype(np.int32))
    near = np.maximum.reduceat(size[frame.source], frame.start[:-1])
    tops = np.flatnonzero(size >= near)
    if tops.size == 0:
        return np.array([int(np.argmax(size))])
    most = min(_SPOTS, tops.size)
    best = tops[np.argpartition(-size[tops], most - 1)[:most]]
    return best[np.argsort(-size[best], kind="stable")]


def _trimmed(B: csr_array, x: Floats, share: float) -> tuple[float, Floats]:
    """The lower bound of x, or of what is left of it once the rows that fall short are dropped, if that is better."""
    quotients = (B @ x) / x
    worst, kept = float(quotients.min()), x
    goal = float(quotients.max()) * (1 - share)
    y = x.copy()
    for _ in range(60):
        short = (y > 0) & ((B @ y) < goal * y)
        if not short.any():
            break
        y[short] = 0.0
    left = y > 0
    if left.any():
        value = float(((B @ y)[left] / y[left]).min())
        if value > worst:
            return value, y
    return worst, kept


def _noda(search: _Search) -> None:
    """Noda's iteration on the whole class, each solve as near to the lower bound as it works."""
    frame = search.frame
    may = may_factor(frame.B)
    search.method = f"{search.method}, Noda iteration"
    stuck = 0
    for _ in range(int(np.clip(_NODA_WORK / frame.size, _NODA_LEAST, _NODA_STEPS))):
        here = frame.quotients
        high = float(here.max())
        value, kept = _trimmed(frame.B, np.ones(frame.size), 0.05 * search.width)
        search.offer(value, kept)
        if search.done or stuck == 3:
            return
        x = _step(search, high, may)
        if x is None:
            return
        before = search.high, search.low.value
        frame.rescale(x)
        search.look()
        stuck = stuck + 1 if (search.high, search.low.value) == before else 0


def _step(search: _Search, high: float, may: bool) -> Floats | None:
    """A positive solution for the lowest of some levels at which there is one."""
    frame = search.frame
    low = search.low.value
    levels = [high * (1 + 1e-15), high * (1 + 1e-9), high * 1.01]
    # Far above the lower bound a solve just above it would most likely be one below the radius: wasted.
    if high - low < _NEAR * high and search.level < high:
        levels.insert(0, search.level)
    for level in levels:
        if may:
            x = factored(frame.B, level)
            search.work += 1
            if x is not None and x.min() > 0:
                return x
        else:
            solved = bicgstab(frame.B, level)
            search.work += solved.work
            if solved.proves:
                return solved.x
    return None


def _answer(search: _Search, squared: bool) -> ClassPoint:
    """The points in original units; roots where squares were summed, plain doubles where they are enough."""
    ends: list[tuple[Floats, Exponents | None]] = []
    for mantissa, exponent in (search.top, (search.low.point, search.low.exponent)):
        if squared:
            odd = exponent & 1
            mantissa, exponent = np.sqrt(mantissa * (1.0 + odd)), (exponent - odd) >> 1
        simple = plain(mantissa, exponent)
        ends.append((mantissa, exponent) if simple is None else (simple, None))
    return ClassPoint(*ends[0], *ends[1], search.method, search.work)

"""Points for one strongly connected class of sum rows: the Perron vector, as far as it is needed for the two bounds.

A lower bound needs the vector only where it is large: the radius of a part is at most that of the whole (theory (10)
with s zero elsewhere), so that a ball round the place where power steps have gathered, grown until it stops to matter,
is enough. An upper bound needs a positive s with G(s) <= lambda s: one loose solve of (lambda I - G) s = 1 just above
the lower bound, by Krylov steps or a sparse factorisation. Where that fails, Noda's iteration (Noda, Numer. Math. 17,
1971) on the whole class takes over. All of it in the coordinates of a point that keeps the row sums close together:
power steps, and where gains or paths span many decades the values of the largest loop (max-plus scaling). Ours.

Rows that are roots of squares with one link per inlet are sum rows of squares (theory (11)).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from synth.gain.frame import Frame
from synth.gain.krylov import Solve, bicgstab, factored, has_hubs, is_thin, may_factor
from synth.gain.operator import MAX, SQUARE, GainOperator
from synth.gain.points import ClassPoint, Exponents, Floats, plain
from synth.gain.single_loop import single_loop

# Power steps gather at hot spots; where there are hubs the spots are plain, on large networks steps are dear.
_POWER_STEPS, _POWER_STEPS_HUB, _POWER_STEPS_LARGE, _LARGE = 60, 20, 30, 200_000
_SPOTS, _SPOT_SIZE = 12, 60
_BALLS = (800, 2700, 8100, 24300)
_LOCAL_FROM = 1500
_NODA_STEPS = 40
_NEAR = 1e-6
# Entries of a local vector below this share of the largest are left out when its tail is lost in rounding.
_CORE = 1e-8


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
        self.hubs = has_hubs(frame.B)
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
    search = _Search(Frame(inner, squared), width)
    _start(search, inner, squared)
    if not search.done:
        if search.frame.size >= _LOCAL_FROM and not search.hubs:
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
    x = np.ones(frame.size)
    for _ in range(_POWER_STEPS_HUB if search.hubs else _POWER_STEPS_LARGE if frame.size > _LARGE else _POWER_STEPS):
        image = frame.B @ x
        # The shift keeps the steps from going in circles on periodic graphs.
        image += 0.6 * search.high * x
        x = image / image.max()
        search.work += 1
    if x.min() > 1e-250:
        frame.rescale(x)
        search.look()


def _balance(search: _Search, inner: GainOperator, squared: bool) -> None:
    """Move to the point of the largest loop: then every row has an entry near the loop's mean and none much above."""
    from synth.gain.loops import solve as largest_loop

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
    """The lower point from balls round hot spots, then one solve just above it; again where that finds a hotter one."""
    frame = search.frame
    spots = _spots(frame)
    for _ in range(4):
        before = search.low.value
        _grow(search, spots)
        if search.low.value <= before * (1 + search.width) or search.done:
            return
        way, solved = _above(search)
        if solved.proves:
            frame.rescale(solved.x)
            search.method = f"local Perron vector, {way}"
            search.look()
            return
        if not np.all(np.isfinite(solved.x)):
            return
        # Below the radius the solution turns negative where the true Perron vector is.
        spots = np.array([int(np.argmin(solved.x))])


def _above(search: _Search) -> tuple[str, Solve]:
    """The solve at the level that closes the enclosure: factored where the graph is thin, else by Krylov steps."""
    frame = search.frame
    solved = None
    if not is_thin(frame.B):
        solved = bicgstab(frame.B, search.level)
        search.work += solved.work
        if solved.proves or not may_factor(frame.B):
            return "Krylov solve", solved
    x = factored(frame.B, search.level)
    search.work += 1
    if x is None:
        return "sparse solve", solved or Solve(np.full(frame.size, np.nan), np.inf, 0)
    residual = 1.0 - (search.level * x - frame.B @ x)
    return "sparse solve", Solve(x, float(np.abs(residual).max()), 1)


def _spots(frame: Frame) -> NDArray[np.intp]:
    """Outlets where power steps have gathered, not next to each other, largest first."""
    size = np.ldexp(frame.mantissa, np.clip(frame.exponent - frame.exponent.max(), -1000, 0).astype(np.int32))
    most = min(2000, frame.size - 1)
    order = np.argpartition(-size, most)[:most]
    order = order[np.argsort(-size[order], kind="stable")]
    near: set[int] = set()
    chosen: list[int] = []
    for i in order.tolist():
        if i not in near:
            chosen.append(i)
            near.update(frame.ball(np.array([i]), 20).tolist())
        if len(chosen) == _SPOTS:
            break
    return np.array(chosen, dtype=np.intp)


def _grow(search: _Search, spots: NDArray[np.intp]) -> None:
    """Perron vectors of growing balls round the hottest spot until growing no longer raises the lower bound."""
    frame = search.frame
    centre = spots
    if spots.size > 1:
        ball = frame.ball(spots, _SPOT_SIZE * spots.size)
        x, _ = _inside(search, ball)
        if x is None:
            return
        centre = ball[[int(np.argmax(x))]]
    before = 0.0
    for most in _BALLS:
        if most > frame.size / 2:
            return
        ball = frame.ball(centre, most)
        x, value = _inside(search, ball, guess=before)
        if x is None or value <= before * (1 + 0.05 * search.width) or x.min() < 1e-10:
            return
        centre, before = ball[[int(np.argmax(x))]], value


def _inside(
    search: _Search, ball: NDArray[np.intp], start: Floats | None = None, guess: float = 0.0
) -> tuple[Floats | None, float]:
    """Perron vector of B between the outlets of the ball, by Noda's iteration; its lower bound is offered.

    ``guess``: the radius of a smaller ball; a little above it most of the way is one solve.
    """
    frame = search.frame
    block = frame.block(ball)
    x = np.ones(ball.size) if start is None else start
    if guess > 0 and may_factor(block):
        first = factored(block, guess * (1 + 1e-6))
        if first is not None and first.min() > 0:
            x = np.maximum(first / first.max(), 1e-200)
    best, spread = x, np.inf
    for _ in range(12):
        quotients = (block @ x) / x
        high, low = float(quotients.max()), float(quotients.min())
        search.work += 1
        if not high - low < spread:
            break
        best, spread = x, high - low
        if spread <= 0.02 * search.width * high:
            break
        # In the coordinates of x the solution is the factor of the next step.
        scaled = _similar(block, x)
        if not may_factor(scaled):
            return None, 0.0
        # A hair above the radius: closer, rounding would turn signs; the error shrinks by this over the gap a step.
        factor = factored(scaled, high * (1 + 1e-12))
        if factor is None or factor.min() <= 0:
            break
        x = x * np.maximum(factor / factor.max(), 1e-100)
        x = np.maximum(x / x.max(), 1e-200)
    x = best
    value, kept = _trimmed(block, x, 0.05 * search.width)
    if value > search.low.value:
        whole = np.zeros(frame.size)
        whole[ball] = kept
        search.offer(value, whole)
    core = x > _CORE
    if start is None and not core.all():
        # Far out the vector drowns in rounding, and its quotients with it; the core without it loses next to nothing.
        _, inner_value = _inside(search, ball[core], x[core])
        value = max(value, inner_value)
    return x, value


def _similar(block: csr_array, x: Floats) -> csr_array:
    """The block in the coordinates of x."""
    data = block.data * x[block.indices] / np.repeat(x, np.diff(block.indptr))
    return csr_array((data, block.indices, block.indptr), shape=block.shape)


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
    for _ in range(_NODA_STEPS):
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

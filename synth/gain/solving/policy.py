"""Points for one strongly connected class of any rows, mixed freely: policy steps for maxima, Newton steps for roots.

G is a largest value over matrices: G(s) = max of A s over the slopes A of its rows (a max row or a set of alternatives
chooses one link; a root of squares is, by Cauchy-Schwarz, the largest sum weighted by its normalised inlets).
So any slope A bounds from below: radius(A) <= radius(G), with the same point. The search repeats

    A        the slopes at the present point s > 0 (at s they give G(s) exactly: a policy, and the Newton matrix)
    below    the Perron vector of the leading strongly connected class of A, which may leave out most outlets
    above    (lambda I - A) t = 1 for lambda just above: t > 0 is the next point, and G(t) <= lambda t ends the search

(Howard 1960 and Hoffman & Karp 1966 for policies; Noda 1971 for the eigenvalue). On large networks the leading pair of
one slope is followed to the next, worked out anew only where it is large and fenced in elsewhere (see leading), which
gives both bounds from every slope. The ones on the right keep t positive and away from zero where A is reducible or
its Perron vector is local, which is where plain policy iteration on eigenvectors breaks down. That putting together is
ours. Where it stalls, or a budget of work is used up, shifted power steps in logarithms go on for a while; a width that
is not reached shows in the bounds, which are worked out elsewhere.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components

from synth.gain.operator import MAX, GainOperator
from synth.gain.solving.certify import certified_lower
from synth.gain.solving.hot_spot import Balls, hottest, pairs, slopes, supported, with_gains
from synth.gain.solving.krylov import bicgstab, factored, has_hubs, may_factor, spreads
from synth.gain.solving.leading import fence, is_long, leading_pair
from synth.gain.solving.points import ClassPoint, Exponents, Floats, from_logarithms, normal, plain

_POWER_STEPS = 30
# Power steps with the same slopes; hot spots looked at; matrices of slopes fenced in round one vector; what that vector
# is taken to be far away at first.
_KEPT, _CENTRES, _FENCES, _REST = 6, 4, 4, 1e-10
# Work times links beyond which no new round begins.
_BUDGET = 2_000_000_000
# Matrices of slopes in a row; entries of the leading vector that are worked out anew for each.
_FOLLOWED, _CORE = 10, 1e-7
_ROUNDS = 14
# Newton steps, and steps by outlet between them.
_NEWTON_STEPS, _VALUE_STEPS = 8, 12
# Classes of the slopes whose Perron vector is tried in one round, most promising first.
_CLASSES, _CLASSES_SMALL = 6, 200
_CLASS_STEPS = 12
# Power steps of the last resort: fewer for large operators (the product is the number of links passed).
_LAST_STEPS, _LAST_LINKS = 4000, 30_000_000
_LARGEST = 1e200
# Up to this size a factorisation is the quickest.
_SMALL = 2000


class _Search:
    """The operator in the coordinates of a positive point (which is 1 there), and the best of both bounds so far."""

    def __init__(self, inner: GainOperator, width: float) -> None:
        self.inner, self.width = inner, width
        self.mantissa: Floats = np.ones(inner.size)
        self.exponent: Exponents = np.zeros(inner.size, dtype=np.int64)
        self.factor, power = np.frexp(inner.gain)
        # Gains times a common power of two, so that the largest is near one whatever the units.
        self.power = power.astype(np.int64) - int(power.max())
        self.wide = bool(self.power.min() < -20)
        self.low, self.low_at = 0.0, (self.mantissa, self.exponent)
        self.high, self.high_at = np.inf, (self.mantissa, self.exponent)
        self.work = 0
        # Where a class with a larger radius showed.
        self.spot = -1
        self.method = "power steps"
        self.move(self.mantissa, self.exponent)

    def move(self, mantissa: Floats, exponent: Exponents | None) -> None:
        """Take another positive point as the coordinates, and its quotients as bounds."""
        self.mantissa, self.exponent = normal(mantissa, exponent)
        to, source = self.inner.to, self.inner.source
        with np.errstate(all="ignore"):
            gain = self.factor * self.mantissa[source] / self.mantissa[to]
            shift = np.clip(self.power + self.exponent[source] - self.exponent[to], -1200, 900)
            gain = np.minimum(np.ldexp(gain, shift.astype(np.int32)), _LARGEST)
        self.op = with_gains(self.inner, gain)
        self.quotients = self.op.apply(np.ones(self.op.size))
        self.work += 1
        most, least = float(self.quotients.max()), float(self.quotients.min())
        if most < self.high:
            self.high, self.high_at = most, (self.mantissa, self.exponent)
        if least > self.low:
            self.low, self.low_at = least, (self.mantissa, self.exponent)

    def rescale(self, x: Floats) -> None:
        """Multiply the point by x > 0."""
        self.move(self.mantissa * np.maximum(x / x.max(), 1e-250), self.exponent)

    @property
    def done(self) -> bool:
        return self.high - self.low <= 0.7 * self.width * self.high

    def offer(self, value: float, x: Floats) -> None:
        """A lower bound in doubles and its vector >= 0 in these coordinates."""
        if value > self.low:
            self.low, self.low_at = value, normal(self.mantissa * x, self.exponent)

    def take(self, x: Floats) -> Floats:
        """The quotients of a positive vector in these coordinates, and the bounds they give."""
        with np.errstate(all="ignore"):
            quotients = self.op.apply(x) / x
        self.work += 1
        most = float(quotients.max())
        if most < self.high:
            self.high, self.high_at = most, normal(self.mantissa * x, self.exponent)
        return quotients

    def slopes(self, x: Floats) -> csr_array:
        """The matrix of active slopes at x > 0: non-negative, and A x = G(x)."""
        return slopes(self.op, x)

    def balance(self) -> None:
        """Move to the values of the largest loop, which follow gains and paths over any number of decades."""
        from synth.gain.solving.loops import solve as largest_loop

        found = largest_loop(replace(self.inner, codes=np.full(self.inner.size, MAX, dtype=np.int8)), 1e-3)
        if found is not None:
            self.work += found.work
            self.move(found.point, found.exponent)


def solve(inner: GainOperator, width: float) -> ClassPoint | None:
    """Both points of one strongly connected class with rows of any types.

    ``inner``: gains > 0, at least one link into every outlet; ``width`` relative, > 0. None where there is no link.
    """
    if not inner.gain.size:
        return None
    search = _Search(inner, width)
    if not search.done:
        if search.wide:
            search.balance()
        _power(search)
        if not search.done and inner.size > _SMALL:
            _hot(search)
        _rounds(search)
    if not search.done and not search.wide:
        search.balance()
        _rounds(search)
    if not search.done:
        _last(search)
    return _answer(search)


def _power(search: _Search) -> None:
    """Shifted power steps in the present coordinates; the shift keeps them from going in circles."""
    x = np.ones(search.op.size)
    shift = 0.6 * float(search.quotients.max())
    for step in range(_POWER_STEPS):
        if step % _KEPT == 0:
            matrix = search.slopes(x)
            search.work += 1
        x = matrix @ x + shift * x
        x /= x.max()
    search.work += _POWER_STEPS
    if np.all(np.isfinite(x)) and x.min() > 1e-250:
        search.rescale(x)


def _hot(search: _Search) -> None:
    """The leading pair of a ball round the hottest spot, fenced in on the whole by slopes that follow the point."""
    balls = Balls(search.op)
    if is_long(balls.pattern) or has_hubs(balls.pattern) or spreads(balls.pattern):
        return  # a ball says little along long loops, and soon is everything where links spread
    point = np.ldexp(search.mantissa, np.clip(search.exponent - search.exponent.max(), -1000, 0).astype(np.int32))
    centre = hottest(balls, point)
    for _ in range(_CENTRES):
        search.spot = -1
        for pair in pairs(balls, centre):
            search.work += pair.work
            _close(search, pair.theta, pair.v, pair.rough)
            if search.done or search.spot >= 0:
                break
        if search.done or search.spot < 0:
            return
        centre = search.spot


def _close(search: _Search, theta: float, v: Floats, rough: bool) -> None:
    """Both bounds from a pair of a part, each time with the slopes at the point before."""
    search.method = "policy steps in a part, fenced in"
    x = v + _REST
    y = supported(search.op, theta * (1 - 0.05 * search.width), v)
    inside = y > 0
    value = float((search.op.apply(y)[inside] / y[inside]).min()) if inside.any() else 0.0
    search.work += 1
    search.offer(value, y)
    if not rough:
        x = _fenced(search, theta, v, x)
    if not search.done and search.spot < 0 and search.low >= theta * (1 - 0.3 * search.width):
        # Slopes far from normal, which Krylov steps do not settle on; or policies that follow only slowly.
        matrix = search.slopes(x)
        if may_factor(matrix):
            _above(search, matrix, True)


def _fenced(search: _Search, theta: float, v: Floats, x: Floats) -> Floats:
    """Points of a pair fenced in, the first with the slopes at ``x``, each other one with those at the one before."""
    for _ in range(_FENCES):
        matrix = search.slopes(x)
        fenced = fence(matrix, theta, v, search.width)
        search.work += fenced.work
        search.spot = fenced.spot
        if fenced.x is None or fenced.y is None or not (np.all(np.isfinite(fenced.x)) and fenced.x.min() > 0):
            return x
        kept = fenced.y > 0
        if kept.any():
            search.offer(float(((matrix @ fenced.y)[kept] / fenced.y[kept]).min()), fenced.y)
        x = fenced.x / fenced.x.max()
        search.take(x)
        if search.done:
            break
    return x


def _rounds(search: _Search) -> None:
    """Policy and Newton steps in the present coordinates, from the present point (1 there)."""
    x = np.ones(search.op.size)
    for _ in range(_ROUNDS):
        if search.done:
            return
        search.method = "policy and Newton steps"
        before = search.low
        matrix = search.slopes(x)
        _below(search, matrix)
        if search.done:
            return
        spot = search.spot
        new = _follow(search, matrix) if x.size > _SMALL else None
        if search.done or search.work * search.op.gain.size > _BUDGET:
            return
        if new is None and (search.spot < 0 or search.spot == spot):
            new = _above(search, matrix)
        if new is None and search.low == before and search.spot in (-1, spot):
            return
        x = x if new is None else new


def _below(search: _Search, matrix: csr_array) -> None:
    """Raise the lower bound by Perron vectors of the leading classes of the slopes."""
    from synth.gain.solving.perron import solve as perron

    matrix = matrix.copy()
    # Parallel links must not reach scipy's method: it loses count of them.
    matrix.sum_duplicates()
    rows = np.repeat(np.arange(matrix.shape[0]), np.diff(matrix.indptr))
    _, label = connected_components(matrix, directed=True, connection="strong")
    inside = label[rows] == label[matrix.indices]
    matrix = csr_array((matrix.data[inside], (rows[inside], matrix.indices[inside])), shape=matrix.shape)
    for c in _leading(search, matrix, label):
        members = np.flatnonzero(label == c)
        block = matrix[members][:, members].tocoo()
        part = GainOperator.from_links(members.size, block.row, block.col, block.data)
        if members.size == 1:
            point: Floats = np.ones(1)
            exponent: Exponents | None = None
        else:
            found = perron(part, search.width / 4)
            if found is None:
                continue
            search.work += found.work
            point, exponent = found.low_point, found.low_exponent
        value = certified_lower(part, point, exponent)
        if value > search.low:
            mantissa = np.zeros(search.op.size)
            mantissa[members] = point * search.mantissa[members]
            total = search.exponent.copy()
            if exponent is not None:
                total[members] += exponent
            search.low, search.low_at = value, (mantissa, total)


def _leading(search: _Search, matrix: csr_array, label: NDArray[np.int32]) -> list[int]:
    """Numbers of the classes that may hold the radius of a matrix without links between classes, best first."""
    count = int(label.max()) + 1
    if count == 1:
        return [0]
    x = np.ones(matrix.shape[0])
    with np.errstate(all="ignore"):
        for _ in range(_CLASS_STEPS):
            image = matrix @ x + 0.5 * search.high * x
            top = np.zeros(count)
            np.maximum.at(top, label, image)
            x = np.maximum(image / top[label], 1e-250)
        quotient = (matrix @ x) / x
    search.work += _CLASS_STEPS
    most = np.zeros(count)
    np.maximum.at(most, label, quotient)
    most = np.where(np.isfinite(most), most, np.inf)
    if search.spot >= 0:
        most[label[search.spot]] = np.inf
    best = np.argsort(-most, kind="stable")[:_CLASSES_SMALL]
    # Once a class was missed: small ones are cheap, as many of them as make up a large one.
    most_outlets = _SMALL if search.spot >= 0 else 0
    before = np.cumsum(np.bincount(label, minlength=count)[best])
    return [int(c) for k, c in enumerate(best) if most[c] > search.low and (k < _CLASSES or before[k] < most_outlets)]


def _above(search: _Search, matrix: csr_array, direct: bool = False) -> Floats | None:
    """Newton steps for lambda t = G(t) + 1 just above the lower bound: the last positive t, None if there was none.

    From the second on, t only grows; it turns negative where lambda lies below the radius.
    """
    level = search.low * (1 + 0.6 * search.width)
    last = None
    for _ in range(_NEWTON_STEPS):
        t = _resolvent(search, matrix, level, direct)
        if t is None:
            break
        last = t
        search.take(t)
        if search.done:
            break
        if direct:
            # t only grows by these too; policies follow from outlet to outlet at less than the price of a solve.
            for _ in range(_VALUE_STEPS):
                t = np.maximum(t, (search.op.apply(t) + 1) / level)
            search.work += _VALUE_STEPS
            search.take(t)
            if search.done:
                break
        matrix = search.slopes(t)
    return last


def _follow(search: _Search, matrix: csr_array) -> Floats | None:
    """The leading pair of the slopes, followed from one matrix of slopes to the next; the last point, None if none.

    The pair is worked out where it is large, the rest is fenced in (see leading): both bounds from every matrix.
    """
    if search.low <= 0:
        return None
    theta, v, last = search.low, _low_vector(search), None
    for _ in range(_FOLLOWED):
        fenced = fence(matrix, theta, v, search.width)
        search.work += fenced.work
        x, y = fenced.x, fenced.y
        search.spot = fenced.spot
        if x is None or y is None or not (np.all(np.isfinite(x)) and x.min() > 0):
            break
        kept = y > 0
        if kept.any():
            value = float(((matrix @ y)[kept] / y[kept]).min())
            if value > search.low:
                search.low, search.low_at = value, normal(search.mantissa * y, search.exponent)
        last = x / x.max()
        search.take(last)
        if search.done:
            break
        matrix = search.slopes(last)
        core = np.flatnonzero(last > _CORE)
        block = matrix if 2 * core.size > last.size else matrix[core][:, core]
        start = last if block is matrix else last[core]
        pair = leading_pair(block, start, 0.02 * search.width)
        search.work += 1
        if pair is None:
            break
        theta, v = pair
        if block is not matrix:
            whole = np.zeros(last.size)
            whole[core] = v
            v = whole
    return last


def _low_vector(search: _Search) -> Floats:
    """The point of the lower bound in the present coordinates, largest entry 1."""
    mantissa, exponent = search.low_at
    live = mantissa > 0
    shift = np.where(live, exponent - search.exponent, -(2**60))
    gap = np.clip(shift - shift.max(), -1200, 0).astype(np.int32)
    v = np.ldexp(mantissa / search.mantissa, gap)
    return np.asarray(v / v.max())


def _resolvent(search: _Search, matrix: csr_array, level: float, first: bool = False) -> Floats | None:
    """A positive solution of (level I - A) t = 1, loosely; None where there is none."""
    if level <= 0 or not np.all(np.isfinite(matrix.data)):
        return None
    ways = (False, True) if may_factor(matrix) else (False,)
    if first or matrix.shape[0] <= _SMALL:
        ways = (True, False)
    for direct in ways:
        if direct:
            t = factored(matrix, level)
            search.work += 1
        else:
            found = bicgstab(matrix, level)
            search.work += found.work
            t = found.x if found.proves else None
        if t is not None and np.all(np.isfinite(t)) and t.min() > 0:
            return t
    return None


def _last(search: _Search) -> None:
    """Shifted power steps from the best point so far, the mean taken in logarithms, as far as the budget goes."""
    search.method += ", power steps in logarithms"
    search.move(*search.high_at)
    for _ in range(max(20, min(_LAST_STEPS, _LAST_LINKS // search.inner.gain.size))):
        q = search.quotients
        # sqrt(s (G(s) + c s)) in logarithms: a contraction in Hilbert's metric also where G alone goes in circles.
        step = 0.5 * np.log2(q / q.max() + 1e-3)
        grown = np.log2(search.mantissa) + step
        mantissa, exponent = from_logarithms(grown)
        search.move(mantissa, exponent + search.exponent)
        if search.done:
            return


def _answer(search: _Search) -> ClassPoint:
    point, exponent = _simplest(*search.high_at)
    low, low_exponent = _simplest(*search.low_at)
    return ClassPoint(point, exponent, low, low_exponent, search.method, search.work)


def _simplest(mantissa: Floats, exponent: Exponents) -> tuple[Floats, Exponents | None]:
    """Plain doubles where they can hold the point."""
    simple = plain(mantissa, exponent)
    return (mantissa, exponent) if simple is None else (simple, None)

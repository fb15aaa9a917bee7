"""The leading pair of mixed rows where it is large: policy steps inside a ball round the hottest spot.

The point that holds the radius up is mostly local, and so are the policy and the Newton matrix that matter. So they are
worked out inside a ball of a few thousand outlets, from whose edge the vector has faded, and only then fenced in on the
whole (see leading). Inside the ball the slopes at the present vector give the next vector, by Krylov steps; where
slowly varying gains make the slopes far from normal, so that these go astray, by Noda's iteration in the coordinates of
the vector (Noda, Numer. Math. 17, 1971), each step with the slopes of the present point. Ours.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import breadth_first_order

from synth.gain.operator import GainOperator
from synth.gain.solving.krylov import factored, may_factor
from synth.gain.solving.layout import Layout
from synth.gain.solving.leading import leading_pair
from synth.gain.solving.points import Floats

_SPOTS, _SPOT_SIZE, _LOOSE = 12, 60, 1e-4
_BALLS = (1_000, 4_000, 16_000)
# What a vector may leave at the edge of its ball, relative to its largest entry, or how much its value may yet grow.
_FADED, _ROUGHLY = 1e-6, 1e-6
# When a value has settled; the error of a vector that is wrong.
_CLEAN, _WRONG = 2e-13, 1e-7
_KRYLOV_STEPS, _NODA_STEPS = 10, 40
_SMALLEST = 1e-200
# Steps that settle a vector and when they have; rounds that drop outlets.
_VALUE_STEPS, _CALM, _TRIMS = 400, 1e-12, 40
_MORE, _EVEN = 4, 1e-12


def slopes(op: GainOperator, x: Floats) -> csr_array:
    """The matrix A of active slopes of ``op`` at x (size,) >= 0: non-negative, and A x = G(x) up to rounding."""
    plan = op.layout
    terms = plan.gain * x[plan.source]
    weights = plan.gain if plan.single_links else np.where(plan.winners(terms), plan.gain, 0.0)
    if not plan.single_inlets:
        inlet = plan.inlets(plan.pieces(terms))
        row = plan.collect(terms)[plan.row][plan.row_of_inlet]
        share = np.divide(inlet, row, out=np.zeros_like(inlet), where=row > 0)
        # A row of one inlet keeps its gains as they are: the share is one up to rounding.
        weights = weights * np.minimum(share, 1.0)[plan.inlet_of_piece[plan.piece_of_link]]
    # Links are sorted by row already.
    kept = np.flatnonzero(weights > 0)
    small = np.int32 if weights.size < 2**31 - 1 else np.int64
    start = np.zeros(op.size + 1, dtype=small)
    np.cumsum(np.bincount(plan.row_of_link[kept], minlength=op.size), out=start[1:])
    return csr_array((weights[kept], plan.source[kept].astype(small), start), shape=(op.size, op.size))


def with_gains(op: GainOperator, gain: Floats) -> GainOperator:
    """The same rows with other gains > 0, without sorting the links again."""
    new = op.replaced(gain)
    plan = op.layout
    sorted_plan = replace(plan, gain=gain[plan.order])
    # What was worked out once about the order of the links stays true.
    known = {name: value for name, value in vars(plan).items() if name not in Layout.__dataclass_fields__}
    vars(sorted_plan).update(known)
    vars(new)["layout"] = sorted_plan
    return new


@dataclass(frozen=True, eq=False)
class Pair:
    """A vector ``v`` (size,) >= 0 of the whole, largest entry 1, zero outside its ball, and its value ``theta``.

    ``rough``: whether Krylov steps on its slopes, or what leaves the ball, are not to be relied on.
    """

    theta: float
    v: Floats
    work: int
    rough: bool


class Balls:
    """Balls of an operator with gains > 0, as operators of their own."""

    def __init__(self, op: GainOperator) -> None:
        """``op``: at least one link into every outlet, in coordinates in which its rows are comparable."""
        self.op = op
        plan = op.layout
        small = np.int32 if plan.order.size < 2**31 - 1 else np.int64
        self.start: NDArray[Any] = np.zeros(op.size + 1, dtype=small)
        np.cumsum(np.bincount(plan.row_of_link, minlength=op.size), out=self.start[1:])
        self.pattern = csr_array(
            (np.ones(plan.order.size), plan.source.astype(small), self.start), shape=(op.size, op.size)
        )

    def around(self, seeds: NDArray[np.intp], most: int) -> NDArray[np.intp]:
        """About ``most`` outlets nearest upstream of the seeds, an equal number for each; sorted."""
        each = max(1, most // seeds.size)
        first = breadth_first_order(self.pattern, int(seeds[0]), return_predecessors=False)[:each]
        parts = [first.astype(np.intp)]
        parts += [self._near(int(s), each) for s in seeds[1:].tolist()]
        return np.unique(np.concatenate(parts))

    def _near(self, seed: int, most: int) -> NDArray[np.intp]:
        found, edge = np.array([seed], dtype=np.intp), np.array([seed], dtype=np.intp)
        while found.size < most and edge.size:
            begin, length = self.start[edge], self.start[edge + 1] - self.start[edge]
            within = np.arange(int(length.sum())) - np.repeat(np.cumsum(length) - length, length)
            near = np.unique(self.pattern.indices[np.repeat(begin, length) + within])
            edge = np.setdiff1d(near, found).astype(np.intp)
            found = np.concatenate([found, edge])
        return found[: 2 * most]

    def block(self, ball: NDArray[np.intp]) -> GainOperator:
        """The operator of the outlets of a ball with the links between them."""
        op, plan = self.op, self.op.layout
        number = np.full(op.size, -1, dtype=np.intp)
        number[ball] = np.arange(ball.size)
        begin, length = self.start[ball].astype(np.intp), np.diff(self.start)[ball]
        places = np.repeat(begin - np.cumsum(length) + length, length) + np.arange(int(length.sum()))
        places = places[number[plan.source[places]] >= 0]
        return op.part(ball, plan.order[places], number)


def spots(balls: Balls, point: Floats) -> NDArray[np.intp]:
    """Outlets where the ``point`` (size,) is largest among those they listen to: some of them, largest first."""
    near = np.maximum.reduceat(point[balls.pattern.indices], balls.start[:-1])
    tops = np.flatnonzero(point >= near)
    if tops.size == 0:
        return np.array([int(np.argmax(point))])
    most = min(_SPOTS, tops.size)
    best = tops[np.argpartition(-point[tops], most - 1)[:most]]
    return best[np.argsort(-point[best], kind="stable")].astype(np.intp)


def hottest(balls: Balls, point: Floats) -> int:
    """Where the leading vector of the surroundings of some spots is largest."""
    seeds = spots(balls, point)
    ball = balls.around(seeds, 5 * _SPOT_SIZE * seeds.size)
    part = balls.block(ball)
    pair = leading_pair(slopes(part, np.ones(ball.size)), np.ones(ball.size), _LOOSE)
    return int(seeds[0]) if pair is None else int(ball[np.argmax(pair[1])])


def pairs(balls: Balls, centre: int) -> Iterator[Pair]:
    """Leading pairs of balls of growing size round ``centre``; those that a larger ball would hardly change."""
    size = balls.op.size
    start, before = np.ones(size), 0.0
    for most in _BALLS:
        if most > size / 2:
            continue
        ball = balls.around(np.array([centre]), most)
        found = _pair(balls.block(ball), start[ball])
        if found is None:
            continue
        theta, inside, work, rough = found
        v = np.zeros(size)
        v[ball] = inside
        centre = int(ball[np.argmax(inside)])
        faded = float(np.where(v > 0, 0.0, balls.op.apply(v)).max()) <= _FADED * theta
        # A vector that fades slowly may belong to a value that the edge does not change any more.
        if faded or theta - before <= _ROUGHLY * theta:
            yield Pair(theta, v, work, rough or not faded)
        start, before = v + 1e-3, theta


def _pair(op: GainOperator, start: Floats) -> tuple[float, Floats, int, bool] | None:
    """(theta, v, work, rough) with G(v) near theta v where v is large; None where nothing settled."""
    x = start / start.max()
    theta, work = 0.0, 0
    for _ in range(_KRYLOV_STEPS):
        pair = leading_pair(slopes(op, x), x + 1e-6, _CLEAN / 4)
        work += 1
        if pair is None or pair[0] < theta * (1 - 1e-9):
            break
        before, (theta, x) = theta, pair
        if theta - before <= _CLEAN * theta:
            x, steps, wrong = _settled(op, theta, x)
            work += steps
            if wrong > _WRONG:
                break
            return theta, x, work, False
    return _noda(op, start, work)


def _settled(op: GainOperator, theta: float, v: Floats) -> tuple[Floats, int, float]:
    """Steps v = G(v) / theta, how many, and what the last one changed.

    As G(v) >= theta v, they only raise v. Where v hangs on the leading part without feeding it, policies follow from
    outlet to outlet, which costs little here.
    """
    steps, wrong = 0, np.inf
    while steps < _VALUE_STEPS and wrong > _CALM:
        for _ in range(_VALUE_STEPS // 20):
            before = v
            v = op.apply(v) / theta
            v /= v.max()
        steps += _VALUE_STEPS // 20
        wrong = float(np.abs(v - before).max())
    return v, steps, wrong


def supported(op: GainOperator, theta: float, v: Floats) -> Floats:
    """v without the outlets that keep its lower bound from ``theta``, as far as few rounds find them."""
    y = v.copy()
    for _ in range(_TRIMS):
        short = (y > 0) & (op.apply(y) < theta * y)
        if not short.any():
            break
        y[short] = 0.0
    return y


def _noda(op: GainOperator, start: Floats, work: int) -> tuple[float, Floats, int, bool] | None:
    """The same by Noda's iteration with the slopes of every point, in its coordinates: good in small entries too."""
    x = np.maximum(start / start.max(), 1e-100)
    settled = 0
    for _ in range(_NODA_STEPS):
        image = op.apply(x)
        quotients = image / x
        theta, high = float(quotients[np.argmax(x)]), float(quotients.max())
        if float(np.abs(image - theta * x).max()) <= _CLEAN * theta:
            # A few steps more settle what is small.
            settled += 1
            if settled > _MORE or float(quotients[quotients > 0].min()) >= theta * (1 - _EVEN):
                return theta, x, work, True
        matrix = slopes(op, x)
        if not may_factor(matrix):
            return None
        row = np.repeat(np.arange(op.size), np.diff(matrix.indptr))
        matrix.data = matrix.data * x[matrix.indices] / x[row]
        factor = factored(matrix, high * (1 + 1e-12))
        work += 1
        if factor is None or factor.min() <= 0:
            return None
        x = x * np.maximum(factor / factor.max(), 1e-100)
        x = np.maximum(x / x.max(), _SMALLEST)
    return None

"""A class that is one closed loop: its radius is the geometric mean of its gains, whatever the type of the rows."""

from __future__ import annotations

import math

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import breadth_first_order

from synth.gain.operator import GainOperator
from synth.gain.solving.points import ClassPoint, from_logarithms, normal, plain

_CORRECTIONS = 3


def single_loop(inner: GainOperator) -> ClassPoint:
    """The point with equal quotients all round; ``inner`` strongly connected with one link into every outlet.

    Sums of logarithms along a long loop lose digits in doubles; the quotients themselves then show by how much, and the
    small corrections are summed instead.
    """
    size = inner.size
    order = inner.links_into.order
    listens = csr_array((np.ones(size, dtype=np.int8), inner.source[order], np.arange(size + 1)), shape=(size, size))
    # From each outlet to the one it listens to; turned round, every outlet comes after its source.
    path = breadth_first_order(listens, 0, return_predecessors=False)[::-1]
    links = order[path]
    factor, power = np.frexp(inner.gain[links])
    logarithm = np.log2(factor) + power
    mean = math.fsum(logarithm.tolist()) / size
    mantissa, exponent = from_logarithms(np.cumsum(logarithm - mean))
    for _ in range(_CORRECTIONS):
        before, before_exponent = np.roll(mantissa, 1), np.roll(exponent, 1)
        off = np.log2(factor * before / mantissa) + (power + before_exponent - exponent - mean)
        off -= np.mean(off)
        mantissa, exponent = normal(mantissa * np.exp2(np.cumsum(off)), exponent)
    point, shift = np.empty(size), np.empty(size, dtype=np.int64)
    point[path], shift[path] = mantissa, exponent
    simple = plain(point, shift)
    found, far = (point, shift) if simple is None else (simple, None)
    return ClassPoint(found, far, found, far, "one closed loop", 1, tuple(links[::-1].tolist()))

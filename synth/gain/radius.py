"""Guaranteed enclosure of the spectral radius of a gain operator, and what holds it up.

radius(G) = lim |G^n(1)|^{1/n} is the largest radius of its strongly connected classes. A few power steps on all classes
at once leave those that can be the largest; each of them is given to a method for its row types, which returns a
positive point and a non-negative one:

    any rows, few outlets      Noda's iteration on the active slopes, dense           (noda)
    one closed loop            geometric mean                                         (single_loop)
    all sums; all roots of squares with one link per inlet: their squares             (perron)
    all maxima                 largest loop                                           (loops)
    anything else              policy and Newton steps                                (policy)

Then both ends come from quotients of these points (theory (10)), rounded outward. So doubles only decide how narrow the
enclosure is, never whether it is right; a width that was not reached is said.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.gain.operator import MAX, Floats, GainOperator
from synth.gain.solving.active import slope_weights
from synth.gain.solving.bottleneck import Bottleneck, Leading
from synth.gain.solving.certify import certified_lower, certified_upper, row_bounds
from synth.gain.solving.points import ClassPoint, Exponents, normal, plain

if TYPE_CHECKING:
    from synth.gain.solving.classes import Classes

_SMALL = 60
_SIEVE_STEPS = 5


@dataclass(frozen=True, eq=False)
class Radius:
    """lower <= radius(G) <= upper, guaranteed for the gains as the doubles they are.

    ``point``: s > 0 (size,), to be multiplied by 2**``exponent`` where that is not None (then doubles cannot hold it);
    with a single strongly connected class G(s) <= upper * s exactly, otherwise G(s) <= t s for a t as near to ``upper``
    as asked (``operator.upper_bound(point, exponent)`` gives it); ``method`` and ``work`` (operator evaluations and
    solves) say how; ``reached``: whether upper - lower <= asked * upper, ``asked`` the width asked for; ``leading``:
    the class that holds the radius up (None if the radius is zero).
    Law: scaling all gains by c scales both ends by c up to rounding; renumbering outlets changes neither.
    """

    lower: float
    upper: float
    point: Floats
    method: str
    work: int
    reached: bool
    exponent: Exponents | None = None
    asked: float = 1e-9
    leading: Leading | None = None

    @cached_property
    def bottleneck(self) -> Bottleneck | None:
        """The loop (max rows) or the strongest links that hold the radius up, None if it is zero."""
        return None if self.leading is None else self.leading.bottleneck()

    @property
    def width(self) -> float:
        """Relative width reached: (upper - lower) / upper, 0 for radius zero."""
        return (self.upper - self.lower) / self.upper if self.upper > 0 else 0.0


@dataclass(frozen=True, eq=False)
class _Solved:
    """A class, its number, its bounds and the point its upper bound comes from."""

    number: int
    lower: float
    upper: float
    point: ClassPoint
    inner: GainOperator
    members: NDArray[np.intp]
    links: NDArray[np.intp]


def enclose(operator: GainOperator, width: float = 1e-9) -> Radius:
    """Enclose the radius of ``operator`` to the relative ``width`` (0 < width < 1) if doubles allow it.

    Raises InputError if the width is out of range or the radius beyond the range of doubles. A width that is not
    reached is reported by ``reached``, not raised.
    """
    if not (isinstance(width, (int, float)) and 0 < width < 1):
        raise InputError(f"width must lie between 0 and 1 (relative), not {width!r}.")
    if operator.size == 1:
        return _single(operator, width)
    from synth.gain.solving.classes import Classes

    classes = Classes.of(operator)
    mantissa, exponent = np.ones(operator.size), np.zeros(operator.size, dtype=np.int64)
    if classes.links.size == 0:
        return _joined(classes, [], mantissa, exponent, 0.0, 0.0, width, 1)
    lower, upper, work = 0.0, 0.0, 0
    waiting, crude_upper = [0], np.array([np.inf])
    if classes.count > 1:
        mantissa, crude_lower, crude_upper = _sieve(classes)
        work += _SIEVE_STEPS
        lower = float(crude_lower.max())
        waiting = np.argsort(-crude_upper, kind="stable").tolist()
    solved: list[_Solved] = []
    for c in waiting:
        if crude_upper[c] <= lower:
            # This class and those after it cannot be the largest; their crude points do for the common point.
            upper = max(upper, float(crude_upper[c]))
            break
        found = _solve(classes, c, width)
        solved.append(found)
        work += found.point.work
        lower, upper = max(lower, found.lower), max(upper, min(found.upper, float(crude_upper[c])))
        if found.upper <= crude_upper[c]:
            mantissa[found.members], exponent[found.members] = normal(found.point.point, found.point.exponent)
    if not np.isfinite(upper):
        raise InputError("the radius of these gains lies beyond the range of doubles; measure outlets in other units.")
    return _joined(classes, solved, mantissa, exponent, lower, upper, width, work)


def _single(operator: GainOperator, width: float) -> Radius:
    """One outlet: its quotient is the radius."""
    one = np.ones(1)
    lower, upper = certified_lower(operator, one), certified_upper(operator, one)
    if not np.isfinite(upper):
        raise InputError("the radius of these gains lies beyond the range of doubles; measure outlets in other units.")
    links = np.arange(operator.gain.size)
    leading = Leading(np.zeros(1, dtype=np.intp), links, operator, one, None, upper, None) if upper > 0 else None
    reached = upper - lower <= width * upper
    return Radius(lower, upper, one, "exact quotients", 1, reached, None, width, leading)


def _sieve(classes: Classes) -> tuple[Floats, Floats, Floats]:
    """A point after a few power steps on all classes at once, and guaranteed bounds of every class from it."""
    inside, label, count = classes.inside, classes.label, classes.count
    s = np.ones(inside.size)
    with np.errstate(all="ignore"):
        for _ in range(_SIEVE_STEPS):
            image = inside.apply(s)
            rate = np.zeros(count)
            np.maximum.at(rate, label, image / s)
            new = image + np.where(rate > 0, 0.5 * rate, 1.0)[label] * s
            top = np.zeros(count)
            np.maximum.at(top, label, new)
            new /= np.where(top > 0, top, 1.0)[label]
            # Steps that leave a comfortable range of doubles are no use as a point.
            if not (np.all(np.isfinite(new)) and new.min() > 1e-100):
                break
            s = new
    low, high = row_bounds(inside, s, None)
    lower, upper = np.full(count, np.inf), np.zeros(count)
    np.minimum.at(lower, label, low)
    np.maximum.at(upper, label, high)
    return s, lower, upper


def _solve(classes: Classes, c: int, width: float) -> _Solved:
    """Bounds of one class by the first method that closes them, else the best of each end."""
    inner, members, links = classes.one(c)
    best: _Solved | None = None
    for method in (_dense, _by_rows, _last):
        found = method(inner, width)
        if found is None:
            continue
        upper = certified_upper(inner, found.point, found.exponent)
        lower = certified_lower(inner, found.low_point, found.low_exponent)
        here = _Solved(c, lower, upper, found, inner, members, links)
        if best is not None:
            point = here.point if here.upper <= best.upper else best.point
            lower, upper = max(lower, best.lower), min(upper, best.upper)
            here = _Solved(c, lower, upper, point, inner, members, links)
        best = here
        if upper - lower <= width * upper:
            break
    assert best is not None
    return best


def _dense(inner: GainOperator, width: float) -> ClassPoint | None:
    """Few outlets, any rows."""
    if inner.size == 1:
        return ClassPoint(np.ones(1), None, np.ones(1), None, "exact quotients", 1)
    if inner.size > _SMALL:
        return None
    from synth.gain.solving.noda import improve

    with np.errstate(all="ignore"):
        s, _, work = improve(inner, width)
    return ClassPoint(s, None, s, None, "Noda iteration", work)


def _by_rows(inner: GainOperator, width: float) -> ClassPoint | None:
    """The method for the types of the rows."""
    from synth.gain.solving.classes import simplified
    from synth.gain.solving.perron import squares

    plain_rows = simplified(inner)
    if plain_rows.linear or squares(plain_rows):
        from synth.gain.solving.perron import solve
    elif np.all(plain_rows.codes == MAX):
        from synth.gain.solving.loops import solve
    else:
        from synth.gain.solving.policy import solve
    with np.errstate(all="ignore"):
        return solve(plain_rows, width)


def _last(inner: GainOperator, width: float) -> ClassPoint | None:
    """Shifted power steps, for what no other method closed."""
    if inner.size == 1:
        return None
    from synth.gain.solving.noda import power_steps

    steps = int(np.clip(2e7 / (inner.gain.size + 1), 50, 2000))
    with np.errstate(all="ignore"):
        s, _, work = power_steps(inner, width, np.ones(inner.size), steps)
    return ClassPoint(s, None, s, None, "shifted power steps", work)


def _joined(
    classes: Classes,
    solved: list[_Solved],
    mantissa: Floats,
    exponent: Exponents,
    lower: float,
    upper: float,
    width: float,
    work: int,
) -> Radius:
    """The result, with one point for all classes."""
    leading = max(solved, key=lambda s: (s.upper, s.lower)) if solved and upper > 0 else None
    method = f"{leading.point.method}, rounded quotients" if leading else "no closed loop of links"
    if classes.count > 1:
        method = f"{classes.count} strongly connected classes: {method}"
        # What a row hears from other classes may add half the width; with radius zero any small number will do.
        spare = 0.5 * width * upper if upper > 0 else 1e-9
        mantissa, exponent = classes.joined(mantissa, exponent, np.full(mantissa.size, max(spare, 1e-300)))
    simple = plain(mantissa, exponent)
    point, shift = (simple, None) if simple is not None and simple.min() > 1e-290 else (mantissa, exponent)
    top = None
    if leading is not None:
        p = leading.point
        top = Leading(leading.members, leading.links, leading.inner, p.point, p.exponent, leading.upper, p.loop)
    return Radius(lower, upper, point, method, work, upper - lower <= width * upper, shift, width, top)


__all__ = ["Bottleneck", "Radius", "enclose", "slope_weights"]

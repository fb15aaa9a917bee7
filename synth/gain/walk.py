"""The integral of |h| along one kernel h(t) = H e^{At} D, enclosed: cells of certain sign, bracketed roots, tail.

Between roots the integral is a difference of the antiderivative W(t) = H A^{-1} e^{At} D, so cells of certain sign cost
no accuracy. Where h is monotone it has at most one root, which is bracketed by two verified signs; the bracket adds at
most its length times the larger end value. What is left after the walk is at most zeta |x|_P / a (theory: section 10).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

from flint import arb, arb_poly, fmpq_mat

from synth.gain.flow import DEGREE, TICK_BITS, Track

# More cells than this for one kernel: the loop is so lightly damped that the enclosure is given up and said so.
MOST_CELLS = 100_000


class NotClosedError(Exception):
    """An enclosure does not close; ``why`` says where, ``final`` that more precision would not help."""

    def __init__(self, why: str, final: bool = False) -> None:
        """Keep the reason for the message."""
        self.why, self.final = why, final
        super().__init__(why)


@dataclass(frozen=True)
class Budget:
    """Absolute allowances of one walk: for the tail, for each bracketed root, for each cell left open."""

    tail: float
    root: float
    cell: float


@dataclass(frozen=True)
class _Bracket:
    """A root on a cell: W at both sides (relative to the cell start) and what may hide in between."""

    before: arb
    after: arb
    inside: arb


class Walk:
    """One outlet along one track."""

    def __init__(self, track: Track, outlet: int, H: fmpq_mat) -> None:
        """Walk along ``track`` with the outlet row ``H[outlet]``."""
        self.track, self.flow, self.outlet, self.H = track, track.flow, outlet, H

    def integral(self, budget: Budget) -> tuple[arb, arb]:
        """Lower and upper bound (exact balls) of the integral of |h| over t >= 0, spent within ``budget``.

        Raises NotClosedError if a cell at the finest level is still undecided or there are too many cells.
        """
        flow, track = self.flow, self.track
        zeta, rate = flow.zeta[self.outlet], flow.a
        total, loose = arb(0), arb(0)
        tick, level = 0, TICK_BITS - 2
        last, sign = self._antiderivative(0), 0
        for count in range(MOST_CELLS):
            state = track.states[tick]
            left = zeta * (state.norm + state.error) / rate
            if left.upper() <= budget.tail:
                total += abs(self._antiderivative(tick) - last)
                return total.lower(), (total + loose + left).upper()
            if count % 1024 == 1023 and flow.cells_left(left, budget.tail, level) > MOST_CELLS:
                break
            found = self._cell(tick, level, budget)
            while found is None:
                level -= 1
                if level < 0:
                    raise NotClosedError(f"the sign of the kernel near t = {flow.seconds(tick):.6g} s stays undecided")
                found = self._cell(tick, level, budget)
            if isinstance(found, _Bracket):
                start = self._antiderivative(tick)
                total += abs(start + found.before - last)
                loose += found.inside
                last, sign = start + found.after, 0
            elif found == -sign:
                # A root exactly where two cells meet.
                start = self._antiderivative(tick)
                total += abs(start - last)
                last, sign = start, found
            else:
                sign = found
            track.advance(tick, level)
            tick += 1 << level
            if level < flow.top and tick % (2 << level) == 0:
                level += 1
        raise NotClosedError(f"it decays too slowly: more than {MOST_CELLS} cells are needed", final=True)

    def _antiderivative(self, tick: int) -> arb:
        state = self.track.states[tick]
        value = (self.flow.antiderivative[self.outlet] * state.mid)[0, 0]
        return value + _spread(self.flow.zeta_integral[self.outlet] * state.error)

    def _cell(self, tick: int, level: int, budget: Budget) -> _Bracket | int | None:
        """1 or -1: certain sign. A bracket: one root, or too little to matter. None: look closer."""
        flow, state = self.flow, self.track.states[tick]
        rho = flow.remainder(self.outlet, state, level)
        slack = flow.zeta[self.outlet] * state.error
        b = self.track.bernstein(self.outlet, tick, level, self.H)
        certain = _one_sign(b, slack, rho)
        if certain:
            return certain
        r = flow.length(level)
        bend = r * flow.zeta_slope[self.outlet] * state.error / DEGREE
        steps = [after - before for before, after in pairwise(b)]
        trend = _one_sign(steps, bend, rho)
        if trend:
            end = b[-1] + _spread(slack + rho)
            start = b[0] + _spread(slack)
            if start >= 0 and end >= 0:
                return 1
            if start <= 0 and end <= 0:
                return -1
            bracket = self._root(tick, level, slack + rho, budget, rising=trend > 0)
            if bracket is not None:
                return bracket
        largest = max(value.abs_upper() for value in b) + slack + rho
        if (largest * r).upper() <= budget.cell:
            return _Bracket(arb(0), self._across(tick, level), (largest * r).upper())
        return None

    def _across(self, tick: int, level: int) -> arb:
        """W at the end of the cell minus W at its start."""
        self.track.advance(tick, level)
        return self._antiderivative(tick + (1 << level)) - self._antiderivative(tick)

    def _root(self, tick: int, level: int, spread: arb, budget: Budget, rising: bool) -> _Bracket | None:
        """Bracket the root of a monotone cell so tightly that it costs no more than ``budget.root``, or None."""
        r = self.flow.length(level)
        taylor = self.track.taylor(self.outlet, tick, self.H).entries()
        scaled = [c * r**j for j, c in enumerate(taylor)]
        guide = [float(c.mid()) for c in scaled]
        u, slope = _float_root(guide)
        seconds = float(r)
        if slope == 0 or not math.isfinite(slope):
            return None
        most = min(0.125, math.sqrt(budget.root / (8 * seconds * abs(slope))))
        poly = arb_poly(scaled)
        for gap in (most / 1024, most / 32, most):
            low, high = max(0.0, u - gap), min(1.0, u + gap)
            at_low, at_high = poly(arb(low)) + _spread(spread), poly(arb(high)) + _spread(spread)
            # A side is settled if its sign is certain, so that the kernel keeps it beyond, or if it is the cell's end.
            settled_low = low == 0.0 or (at_low < 0 if rising else at_low > 0)
            settled_high = high == 1.0 or (at_high > 0 if rising else at_high < 0)
            if settled_low and settled_high:
                break
        else:
            return None
        inside = (max(at_low.abs_upper(), at_high.abs_upper()) * (high - low) * r).upper()
        left_out = _spread(r * spread)
        if not (inside + 2 * r * spread).upper() <= budget.root:
            return None
        primitive = poly.integral()
        return _Bracket(r * primitive(arb(low)) + left_out, r * primitive(arb(high)) + left_out, inside)


def _spread(radius: arb) -> arb:
    """The ball [-radius, radius]."""
    return arb(0, radius.upper())


def _one_sign(coefficients: list[arb], slack: arb, last: arb) -> int:
    """1 if all coefficients, loosened by ``slack`` (the last one by ``last`` too), are >= 0, -1 if <= 0, else 0."""
    ends = coefficients[-1]
    if ends >= slack + last:
        return int(all(value >= slack for value in coefficients))
    if -ends >= slack + last:
        return -int(all(-value >= slack for value in coefficients))
    return 0


def _float_root(coefficients: list[float]) -> tuple[float, float]:
    """Root in [0, 1] of a polynomial that is monotone there, and its slope there; an end if no sign change is seen."""

    def value(u: float) -> float:
        total = 0.0
        for c in reversed(coefficients):
            total = total * u + c
        return total

    def slope(u: float) -> float:
        total = 0.0
        for j in range(len(coefficients) - 1, 0, -1):
            total = total * u + j * coefficients[j]
        return total

    low, high = 0.0, 1.0
    at_low, at_high = value(low), value(high)
    if at_low * at_high >= 0:
        u = low if abs(at_low) <= abs(at_high) else high
        return u, slope(u) or (at_high - at_low)
    u = low - at_low * (high - low) / (at_high - at_low)
    for _ in range(60):
        f = value(u)
        if f == 0:
            break
        if (f > 0) == (at_high > 0):
            high = u
        else:
            low = u
        steep = slope(u)
        step = u - f / steep if steep else (low + high) / 2
        new = step if low < step < high else (low + high) / 2
        if abs(new - u) <= 1e-16:
            break
        u = new
    return u, slope(u)

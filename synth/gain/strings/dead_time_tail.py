"""The first and the last moments of an impulse response with dead times, in exact and ball arithmetic.

First: up to the next dead time the kernel is that of one rational function, whose power series has exact coefficients.
Last: if one real root -r0 lies alone to the right of Re s = -r1, the inversion integral moved to that line gives

    h(t) = residue e^{-r0 t} + rest,    |rest| <= K e^{-r1 t},    K = (1/pi) integral_0^inf |T(-r1 + jw)| dw.

Where T falls only like 1/w, terms c e^{-s d}/(s + p) with p > r1 are taken off first and bounded in the time domain.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

from flint import acb, arb, ctx

from synth.gain.strings.dead_time import QuasiPolynomial, rational
from synth.gain.strings.dead_time_roots import BITS, UndecidedError, rate_of_decay, tail_start, zeros_right_of

_SERIES = 48
MOST_CELLS = 200_000


class NoDominantModeError(Exception):
    """No single real mode decides the tail; the text says why."""


@dataclass(frozen=True)
class FirstResponse:
    """The kernel is zero before ``time`` and has ``sign`` (1 or -1) on (time, time + seconds]."""

    time: Fraction
    sign: int
    seconds: float


@dataclass(frozen=True)
class DominantMode:
    """From ``time`` on the kernel has ``sign``; ``shift`` lies just below the rate of the mode (1/s)."""

    sign: int
    time: float
    shift: float


def split_atoms(num: QuasiPolynomial, den: QuasiPolynomial) -> tuple[dict[Fraction, Fraction], QuasiPolynomial]:
    """The impulses in the kernel by delay, and the numerator of what is left, which falls at high frequency."""
    n = den.degree
    lead = den.leading(n)[Fraction(0)]
    atoms: dict[Fraction, Fraction] = {}
    while num.degree >= n:
        delay, value = min(num.leading(n).items())
        atoms[delay] = value / lead
        num = num - (QuasiPolynomial.of({delay: [1]}) * den).scaled(value / lead)
    return atoms, num


def first_response(num: QuasiPolynomial, den: QuasiPolynomial) -> FirstResponse:
    """When the kernel of num/den (no atoms) starts, with which sign, and for how long that sign is certain."""
    delay = min(num.terms)
    others = [b - delay for b in num.terms if b > delay] + [b for b in den.terms if b > 0]
    row, bottom = num.terms[delay], den.terms[Fraction(0)]
    n = den.degree
    lead = bottom[n]
    series: list[Fraction] = []
    for j in range(_SERIES):
        value = row[n - 1 - j] if 0 <= n - 1 - j < len(row) else Fraction(0)
        value -= sum((bottom[n - j + i] * series[i] for i in range(max(0, j - n), j)), Fraction(0))
        series.append(value / lead)
    first = next(j for j, value in enumerate(series) if value)
    rho = Fraction(1, 2**20)
    while sum((abs(bottom[n - k] / lead) * rho**-k for k in range(1, n + 1)), Fraction(0)) > 1:
        rho *= 2
    # From here on |y_j| <= most rho^j, by induction over the recurrence.
    most = max(abs(series[j]) / rho**j for j in range(_SERIES - n, _SERIES))
    t = min([*others, 2 / rho]) if others else 2 / rho
    factorials = [math.factorial(j) for j in range(_SERIES + 1)]
    for _ in range(400):
        rest = sum((abs(series[j]) * t**j / factorials[j] for j in range(first + 1, _SERIES)), Fraction(0))
        rest += 2 * most * (rho * t) ** _SERIES / factorials[_SERIES]
        if rest < abs(series[first]) * t**first / factorials[first]:
            break
        t = (t / 2).limit_denominator(10**12) or t / 2
    return FirstResponse(delay, 1 if series[first] > 0 else -1, float(t) * (1 - 2.0**-40))


def dominant_mode(num: QuasiPolynomial, den: QuasiPolynomial) -> DominantMode:
    """The real mode that decides the tail and the moment from which it does; NoDominantModeError if none is shown."""
    rate = rate_of_decay(den, 1e-4)
    with ctx.workprec(BITS):
        low, high = arb(rational(rate)), arb(rational(rate * Fraction(10003, 10000)))
        at_low, at_high = _real(den, low), _real(den, high)
        if not (at_low * at_high) < 0:
            raise NoDominantModeError("the slowest mode oscillates, or its root is not simple")
        rising = at_high > 0
        for _ in range(BITS - 20):
            middle = ((low + high) / 2).mid()
            value = _real(den, middle)
            if not (value > 0 or value < 0):
                break
            if (value > 0) == rising:
                high = middle
            else:
                low = middle
        root = low.union(high)
        r1 = _separating(den, root)
        s0 = acb(-root)
        residue = (num.at(s0) / den.derivative.at(s0)).real
        if not (residue > 0 or residue < 0):
            raise NoDominantModeError("the slowest mode hardly shows in the response")
        K = _rest(num, den, r1)
        gap = arb(rational(r1)) - root
        time = (K / abs(residue)).log() / gap
        return DominantMode(
            1 if residue > 0 else -1, max(0.0, float(time.upper())) + 1e-9, float(root.lower()) * 0.9999
        )


def _real(q: QuasiPolynomial, rate: arb) -> arb:
    return q.at(acb(-rate)).real


def _separating(den: QuasiPolynomial, root: arb) -> Fraction:
    """A rate r1 beyond the root with exactly one root of ``den`` to the right of -r1: then it is that root, simple."""
    r0 = Fraction(float(root.mid()))
    best = None
    low, high = Fraction(0), None
    share = Fraction(1)
    for _ in range(60):
        r1 = Fraction(float(r0 * (1 + share)))
        try:
            alone = arb(rational(r1)) > root and zeros_right_of(den, r1) == 1
        except UndecidedError:
            alone = False
        if alone:
            best, low = r1, share
            share = share * 4 if high is None else (share + high) / 2
        else:
            high = share
            share = (low + high) / 2 if low else share / 4
        if (low and high is not None and high < low * Fraction(5, 4)) or share > 10**6 or share < Fraction(1, 10**7):
            break
    if best is None:
        raise NoDominantModeError("the slowest mode is not a single real one, or hardly so")
    # A little off the next root, so that the bound on the line stays moderate.
    return best if low == 0 else Fraction(float(r0 * (1 + low * Fraction(9, 10))))


def _rest(num: QuasiPolynomial, den: QuasiPolynomial, r1: Fraction) -> arb:
    """K: a bound of |h(t) - residue e^{-r0 t}| e^{r1 t} for every t."""
    n, p = den.degree, 2 * r1 + 1
    lead = den.leading(n)[Fraction(0)]
    top, bottom, extra = num, den, arb(0)
    if num.degree == n - 1:
        slow = QuasiPolynomial.of({0: [p, 1]})
        top, bottom = num * slow, den * slow
        for d, c in num.leading(n - 1).items():
            top = top - (QuasiPolynomial.of({d: [1]}) * den).scaled(c / lead)
            # c e^{-p (t - d)} for t >= d, which is at most c e^{p d} e^{-r1 t}.
            extra += abs(arb(rational(c / lead))) * (arb(rational(p)) * arb(rational(d))).exp()
    rate = arb(rational(r1))
    W, rho = tail_start(bottom, rate)
    m = bottom.degree
    size = abs(arb(rational(bottom.leading(m)[Fraction(0)]))) * (1 - rho)
    above = sum((top.size(i, rate) * W ** (i - (m - 2)) for i in range(top.degree + 1)), arb(0))
    total = above / size / W  # |T| <= (above/size)/w^2 beyond W
    total += _line(top, bottom, rate, W)
    return (total / arb.pi() + extra).upper()


def _line(top: QuasiPolynomial, bottom: QuasiPolynomial, rate: arb, W: arb) -> arb:
    """Upper bound of the integral of |top/bottom| over 0 <= w <= W on Re s = -rate."""
    slope = bottom.derivative
    low, step, total = arb(0), W / 256, arb(0)
    for _ in range(MOST_CELLS):
        high = low + step if low + step < W else W
        middle, radius = ((low + high) / 2).mid(), ((high - low) / 2).upper()
        centre, ball = acb(-rate, middle), acb(-rate, arb(middle, radius))
        below = bottom.at(centre) + slope.at(ball) * acb(0, arb(0, radius))
        least = below.abs_lower()
        if not least > 0 or not (abs(bottom.at(centre)) < 3 * least):
            step = step / 2
            if step < W * arb(2) ** -60:
                raise NoDominantModeError("a mode lies too near the line that bounds the rest")
            continue
        total += abs(top.at(ball)).upper() / least * 2 * radius
        if high >= W:
            return total.upper()
        low, step = high.mid(), step * 2
    raise NoDominantModeError("the bound of the rest needs too many cells")

"""How many roots of a characteristic function with dead times lie to the right of a vertical line: a certain count.

For q(s) = s^n + ... of retarded type (the power n carries no delay) the argument of q(-r + jw) turns by
n pi/2 - pi N as w runs from 0 to infinity, N the number of roots with Re s > -r (argument principle; the criterion of
Mikhailov and, with delays, of Satche). The turn is summed over cells on which a ball around the values excludes zero,
and beyond the last cell the leading power holds the argument within a quarter turn.
"""

from __future__ import annotations

from fractions import Fraction

from flint import acb, arb, ctx

from synth.base.errors import InputError, UnstableLoop
from synth.gain.strings.dead_time import QuasiPolynomial, rational

BITS = 128
MOST_CELLS = 200_000


class UndecidedError(Exception):
    """A root lies on the line, or so near that the cells do not tell."""


def tail_start(q: QuasiPolynomial, rate: arb) -> tuple[arb, arb]:
    """(W, rho): on Re s = -rate, |Im s| >= W the value is c s^n (1 + e) with |e| <= rho <= 1/2."""
    n, lead = _leading(q)
    W = (arb(1) + abs(rate)).upper()  # an exact number, so that comparisons with it are decided
    for _ in range(200):
        # |s| >= W on the line beyond W, so every lower power weighs at most W^(i - n) beside the leading one.
        rho = sum((q.size(i, rate) * W ** (i - n) for i in range(n)), arb(0)) / lead
        if rho <= 0.5:
            return W, rho.upper()
        W *= 2
    raise UndecidedError


def _leading(q: QuasiPolynomial) -> tuple[int, arb]:
    n = q.degree
    top = q.leading(n)
    if n < 0 or set(top) != {Fraction(0)}:
        raise InputError("the loop is of neutral type (its highest derivative is itself delayed); that is not offered.")
    return n, abs(arb(rational(top[Fraction(0)])))


def zeros_right_of(q: QuasiPolynomial, rate: Fraction) -> int:
    """Number of roots of q with Re s > -rate, proven; UndecidedError if one is on the line or too near to tell.

    ``rate`` in 1/s. Raises InputError for a loop of neutral type.
    """
    with ctx.workprec(BITS):
        r = arb(rational(rate))
        n, _ = _leading(q)
        if n == 0:
            return 0
        W, _ = tail_start(q, r)
        turn = _turn(q, r, W)
        s = acb(-r, W)
        top = q.leading(n)[Fraction(0)]
        turn += n * (arb.pi() / 2 - s.arg()) - (q.at(s) / (s**n * acb(arb(rational(top))))).arg()
        count = (n * arb.pi() / 2 - turn) / arb.pi()
        nearest = round(float(count.mid()))
        if not abs(count - nearest) < 0.25:
            raise UndecidedError
        return nearest


def _turn(q: QuasiPolynomial, rate: arb, W: arb) -> arb:
    """Change of argument from w = 0 to W along Re s = -rate."""
    total, slopes = arb(0), (q.derivative, q.derivative.derivative)
    low, step = arb(0), W / 64
    here = q.at(acb(-rate, low))
    for _ in range(MOST_CELLS):
        high = low + step if low + step < W else W
        middle, radius = ((low + high) / 2).mid(), ((high - low) / 2).upper()
        ball = acb(-rate, arb(middle, radius))
        offset = acb(0, arb(0, radius))
        centre = acb(-rate, middle)
        cell = q.at(centre) + slopes[0].at(centre) * offset + slopes[1].at(ball) * offset**2 / 2
        if not cell.abs_lower() > 0:
            step = step / 2
            if step < W * arb(2) ** -60:
                raise UndecidedError
            continue
        there = q.at(acb(-rate, high))
        total += (there / here).arg()
        if high >= W:
            return total
        low, here, step = high.mid(), there, step * 2
    raise UndecidedError


def is_stable(q: QuasiPolynomial) -> bool:
    """Whether every root has a negative real part; False also where that could not be shown."""
    try:
        return zeros_right_of(q, Fraction(0)) == 0
    except UndecidedError:
        return False


def require_stable(q: QuasiPolynomial, what: str) -> None:
    """UnstableLoop unless every root of ``q`` has a negative real part."""
    if not is_stable(q):
        raise UnstableLoop(f"{what} is not stable (or too near to instability to tell), so no hop gain is finite.")


def rate_of_decay(q: QuasiPolynomial, width: float = 1e-3) -> Fraction:
    """A rate r > 0 with every root in Re s < -r (proven), within about ``width`` (relative) of the largest.

    Raises UnstableLoop if none could be shown.
    """
    require_stable(q, "the loop")
    low, high = Fraction(0), None
    guess = Fraction(1, 16)
    while high is None or (high - low) > Fraction(width) * high:
        if high is not None:
            guess = (low + high) / 2 if low else high / 16
        guess = Fraction(float(guess)).limit_denominator(10**9) or guess
        try:
            clear = zeros_right_of(q, guess) == 0
        except UndecidedError:
            clear = False
        if clear:
            low, guess = guess, guess * 2
        else:
            high = guess
        if high is not None and high < Fraction(1, 10**9):
            raise UnstableLoop("the loop decays too slowly for a rate to be shown.")
        if low > 10**9:
            break
    return low

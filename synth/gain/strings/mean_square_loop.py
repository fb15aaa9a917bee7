"""Mean-square gain of one loop with one inlet and one outlet, with or without dead time, and the decision on a level.

Without dead time the decision "|num/den| <= level at every frequency" is exact, equality included: only roots of odd
multiplicity of level^2 |den|^2 - |num|^2 in w^2 change its sign, and a Sturm sequence counts them. With dead time that
function is bounded below on cells of frequencies by ball arithmetic (value, slope, bound of the curvature), near zero
by its exact power series with a majorant for what is left out, and beyond the last cell by the leading powers (ours).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from flint import acb, arb, ctx, fmpq, fmpq_poly

from synth.base.errors import WidthNotReached
from synth.gain.peak import check_width
from synth.gain.strings.dead_time import DelayLoop, QuasiPolynomial, rational
from synth.gain.strings.dead_time_roots import BITS, require_stable, tail_start
from synth.gain.strings.mean_square import MeanSquareGain, refined, roots_above_zero

MOST_CELLS = 400_000


def loop_mean_square(loop: DelayLoop, outlet: str, width: float = 1e-6) -> MeanSquareGain:
    """Enclose the mean-square gain from the inlet of a loop with dead times to one outlet.

    Raises UnstableLoop if the loop is not stable, InputError for widths out of range, WidthNotReached.
    """
    check_width(width)
    require_stable(loop.characteristic, "the loop")
    return fraction_mean_square(*loop.transfer(outlet), width=width)


def fraction_mean_square(num: QuasiPolynomial, den: QuasiPolynomial, width: float = 1e-6) -> MeanSquareGain:
    """Enclose sup_w |num/den| for a stable fraction (the caller has shown that ``den`` has no root with Re s >= 0)."""
    if not num.terms:
        return MeanSquareGain(0.0, 0.0, 0.0, True)
    frequency = _best_of_fraction(num, den)
    for _ in range(30):
        with ctx.workprec(BITS):
            s = acb(0, frequency)
            lower = float(abs(num.at(s) / den.at(s)).lower()) * (1 - 2.0**-52)
        upper = max(lower, 1e-300) * (1 + 0.75 * width)
        found = level_holds(num, den, Fraction(upper))
        if found is True:
            return MeanSquareGain(lower, upper, frequency, _rational(num, den))
        if found is None:
            break
        frequency = refined(lambda w: _modulus(num, den, w), found * 0.99, found * 1.01)
    raise WidthNotReached(f"the mean-square gain could not be enclosed to a relative width of {width:g}.")


def _rational(num: QuasiPolynomial, den: QuasiPolynomial) -> bool:
    return set(num.terms) | set(den.terms) <= {Fraction(0)}


def _modulus(num: QuasiPolynomial, den: QuasiPolynomial, w: float) -> float:
    s = 1j * w
    top, bottom = (
        sum(np.exp(-s * float(b)) * np.polyval([float(c) for c in row[::-1]], s) for b, row in q.terms.items())
        for q in (num, den)
    )
    return float(abs(top / bottom))


def _best_of_fraction(num: QuasiPolynomial, den: QuasiPolynomial) -> float:
    with ctx.workprec(BITS):
        reach = float(tail_start(den, arb(0))[0].mid())
    longest = max(float(b) for q in (num, den) for b in q.terms)
    count = int(min(20_000, 2_000 + 4 * reach * longest))
    grid = np.unique(np.concatenate([[0.0], np.geomspace(reach * 1e-8, reach, 800), np.linspace(0, reach, count)]))
    values = np.zeros((2, len(grid)), dtype=complex)
    for row, q in enumerate((num, den)):
        for b, c in q.terms.items():
            values[row] += np.exp(-1j * grid * float(b)) * np.polyval([float(x) for x in c[::-1]], 1j * grid)
    at = int(np.argmax(np.abs(values[0] / values[1])))
    low, high = float(grid[max(at - 1, 0)]), float(grid[min(at + 1, len(grid) - 1)])
    return refined(lambda w: _modulus(num, den, w), low, high)


def level_holds(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction) -> bool | float | None:
    """Whether |num/den| <= level at every frequency: True (proven), a frequency where it is above (proven), or None.

    Without dead time the answer is exact and never None. Equality at w = 0 is no obstacle: near zero the exact power
    series of level^2 |den|^2 - |num|^2 decides.
    """
    if _rational(num, den):
        return _level_exact(num, den, level)
    with ctx.workprec(BITS):
        return _level_by_cells(num, den, level)


def _square(q: QuasiPolynomial) -> fmpq_poly:
    """|q(jw)|^2 as a polynomial in w^2, for a polynomial q."""
    row = q.terms.get(Fraction(0), ())
    even = fmpq_poly([rational(c) * (-1) ** k for k, c in enumerate(row[0::2])])
    odd = fmpq_poly([rational(c) * (-1) ** k for k, c in enumerate(row[1::2])])
    return even * even + fmpq_poly([0, 1]) * odd * odd


def _level_exact(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction) -> bool | float:
    p = _square(den) * rational(level * level) - _square(num)
    if p == 0:
        return True
    # Only roots of odd multiplicity change the sign.
    odd = fmpq_poly([1])
    for factor, power in p.numer().factor_squarefree()[1]:
        if power % 2:
            odd *= fmpq_poly(factor)
    if roots_above_zero(odd) == 0 and p(_beyond(p)) > 0:
        return True
    roots = [float(r.real.mid()) for r, _ in p.numer().complex_roots() if r.imag.contains(0) and r.real.mid() >= 0]
    ends = [0.0, *sorted(roots), 2 * max([1.0, *roots])]
    tries = [(one + two) / 2 for one, two in itertools.pairwise(ends)]
    for x in tries:
        if p(fmpq(*x.as_integer_ratio())) < 0:
            return math.sqrt(x)
    raise WidthNotReached("a mean-square level is exceeded only on a range of frequencies too narrow to name.")


def _beyond(p: fmpq_poly) -> fmpq:
    """A number above every real root of p (Cauchy's bound)."""
    lead = abs(p.leading_coefficient())
    return 1 + max(abs(c) for c in p.coeffs()) / lead


def _level_by_cells(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction) -> bool | float | None:
    c2 = arb(rational(level * level))
    W = _level_tail(num, den, level)
    low = _level_start(num, den, level)
    if W is None or low is None:
        return None
    parts = [(q, q.derivative, q.derivative.derivative) for q in (den, num)]
    step = (W - low) / 64
    for _ in range(MOST_CELLS):
        if low >= W:
            return True
        high = low + step
        middle, radius = ((low + high) / 2).mid(), ((high - low) / 2).upper()
        value, slope, bend = _curve(parts, acb(0, middle), acb(0, arb(middle, radius)), c2)
        if value < 0:
            return float(middle)
        if (value - abs(slope) * radius - bend * radius**2 / 2) >= 0:
            low, step = high.upper(), step * 2
        else:
            step = step / 2
            if step < W * arb(2) ** -70:
                return None
    return None


def _curve(parts: Sequence[tuple[QuasiPolynomial, ...]], centre: acb, ball: acb, c2: arb) -> tuple[arb, arb, arb]:
    """g, g' at the centre and a bound of |g''| on the ball, for g(w) = c^2 |den(jw)|^2 - |num(jw)|^2."""
    value, slope, bend = arb(0), arb(0), arb(0)
    for sign, (q, dq, ddq) in zip((c2, arb(-1)), parts, strict=True):
        here, first = q.at(centre), dq.at(centre) * acb(0, 1)
        value += sign * abs(here) ** 2
        slope += sign * 2 * (here.conjugate() * first).real
        wide, wide_first, wide_second = q.at(ball), dq.at(ball), -ddq.at(ball)
        bend += sign * 2 * ((wide.conjugate() * wide_second).real + abs(wide_first) ** 2)
    return value, slope, abs(bend)


def _level_tail(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction) -> arb | None:
    """W beyond which |num| <= level |den| by the leading powers, or None."""
    W, _ = tail_start(den, arb(0))
    n = den.degree
    lead = abs(arb(rational(den.leading(n)[Fraction(0)]))) * arb(rational(level))
    for _ in range(200):
        rest = sum((den.size(i, arb(0)) * W ** (i - n) for i in range(n)), arb(0)) * arb(rational(level))
        above = sum((num.size(i, arb(0)) * W ** (i - n) for i in range(num.degree + 1)), arb(0))
        if above + rest <= lead:
            return W
        W *= 2
    return None


def _level_start(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction) -> arb | None:
    """w0 > 0 such that g >= 0 on [0, w0] by the exact power series of g at zero, or 0 where g(0) > 0 (or None)."""
    order = 8
    series = [Fraction(0)] * (order + 1)
    for sign, q in ((level * level, den), (Fraction(-1), num)):
        row = q.taylor(order)
        for i, one in enumerate(row):
            for k in range(0, order + 1 - i):
                # |q(jw)|^2 = q(jw) q(-jw); only even powers survive, with (-1)^(k) j^(i+k) real.
                if (i + k) % 2 == 0:
                    series[i + k] += sign * one * row[k] * (-1) ** k * (-1) ** ((i + k) // 2)
    first = next((k for k, c in enumerate(series) if c), None)
    if first == 0:
        return arb(0)
    if first is None or series[first] < 0:
        return None
    w = arb(1)
    for _ in range(60):
        rest = _majorant_rest(num, den, level, w, first)
        if rest < arb(rational(series[first])) * w**first:
            return w
        w = w / 2
    return None


def _majorant_rest(num: QuasiPolynomial, den: QuasiPolynomial, level: Fraction, w: arb, order: int) -> arb:
    """A bound of the power series of g at w, in moduli, without its terms up to w^order.

    Replacing coefficients by moduli and e^{-jwb} by e^{wb} can only enlarge every coefficient of the series.
    """
    total = arb(0)
    for sign, q in ((level * level, den), (Fraction(1), num)):
        large = QuasiPolynomial({-b: tuple(abs(c) for c in row) for b, row in q.terms.items()})
        squared = large * large
        rows = squared.taylor(order)
        known = sum((arb(rational(c)) * w**k for k, c in enumerate(rows)), arb(0))
        total += arb(rational(sign)) * (squared.at(acb(w)).real - known)
    return total.upper()

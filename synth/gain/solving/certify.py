"""Guaranteed bounds from points: Collatz-Wielandt quotients G(s)_i / s_i, rounded outward row by row (theory (10)).

All terms of a row are non-negative, so that adding n of them in doubles, in whatever order, is wrong by less than a
factor (1 - u)^-(n - 1) with u = 2^-53 (Higham, Accuracy and Stability of Numerical Algorithms, 2002, section 4.2); a
product, a quotient or a root adds one factor more. That holds as long as nothing underflows or overflows. So terms are
brought into range first: every row is divided by its own power of two, exactly; a term smaller than its row's largest
by more than 2^-300 counts as that much for an upper bound and as nothing for a lower one. Points may carry one binary
exponent per outlet. Rows that decide a bound and are few are worked out again in exact rationals.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.gain.operator import Floats, GainOperator
from synth.gain.solving.exact_rows import exact_quotient, exact_row
from synth.gain.solving.points import Exponents, normal

_UNIT = 2.0**-53
# Roundings beyond those of the additions: product, quotient by s_i, and for roots scaling, squares, root, scaling back.
_FEW = 12
_SAFE = 2.0**300
_LEAST = -300
# Rows that are worked out exactly where that can sharpen a bound: how many, of how many terms, how far apart.
_EXACT_ROWS = 64
_EXACT_TERMS = 400
_EXACT_SHIFT = 20_000


def certified_upper(operator: GainOperator, s: Floats, exponent: Exponents | None = None) -> float:
    """A double at or above max_i G(s)_i / s_i; inf only where that maximum is beyond doubles (it proves nothing).

    ``s`` (size,) > 0 and finite, times 2**exponent.
    """
    low, high = row_bounds(operator, s, exponent)
    # Rows below the best certain one cannot be the maximum.
    rows = _worth_exact(operator, exponent, np.flatnonzero(high > low.max()))
    if rows.size == 0:
        return float(high.max())
    rest = np.delete(high, rows)
    exact = [exact_quotient(operator, i, s, exponent)[1] for i in rows.tolist()]
    return max([*exact, float(rest.max(initial=0.0))])


def certified_lower(operator: GainOperator, s: Floats, exponent: Exponents | None = None) -> float:
    """A double at or below min of G(s)_i / s_i over s_i > 0; ``s`` (size,) >= 0, not all zero, times 2**exponent."""
    low, high = row_bounds(operator, s, exponent)
    support = s > 0
    rows = _worth_exact(operator, exponent, np.flatnonzero(support & (low < high[support].min())))
    if rows.size == 0:
        return float(low[support].min())
    support[rows] = False
    exact = [exact_quotient(operator, i, s, exponent)[0] for i in rows.tolist()]
    return min([*exact, float(low[support].min(initial=np.inf))])


def lies_below(operator: GainOperator, s: Floats, target: float, exponent: Exponents | None = None) -> bool:
    """Whether G(s)_i <= target * s_i in every row, decided in rationals where doubles cannot; ``s`` > 0."""
    low, high = row_bounds(operator, s, exponent)
    if np.any(low[s > 0] > target):
        return False
    goal = Fraction(target)
    for i in np.flatnonzero(high > target).tolist():
        exact, squared = exact_row(operator, i, s, exponent)
        if exact > (goal * goal if squared else goal):
            return False
    return True


def row_bounds(operator: GainOperator, s: Floats, exponent: Exponents | None) -> tuple[Floats, Floats]:
    """(low, high) with low_i <= G(s)_i / s_i <= high_i in every row with s_i > 0; elsewhere (inf, 0).

    ``s`` (size,) finite and >= 0, times 2**exponent.
    """
    support = s > 0
    with np.errstate(all="ignore"):
        if exponent is None and _comfortable(operator.gain) and _comfortable(s):
            quotient, shift, slack = operator.apply(s) / np.where(support, s, 1.0), None, 0.0
        else:
            quotient, shift, slack = _scaled_quotients(operator, s, exponent)
        # (1 - u)^-n <= 1 + 1.01 n u for n u < 0.01, that is n < 10^13.
        count = _terms_per_row(operator) + _FEW
        error = 1.01 * _UNIT * count
        low = np.maximum(np.nextafter(quotient * (1 - error) - slack * quotient, -np.inf), 0.0)
        high = np.where(quotient > 0, np.nextafter(quotient * (1 + error), np.inf), 0.0)
        if shift is not None:
            low, high = _shifted(low, shift, False), _shifted(high, shift, True)
    return np.where(support, low, np.inf), np.where(support, high, 0.0)


def _terms_per_row(operator: GainOperator) -> NDArray[np.intp]:
    """How many numbers are added up in every row."""
    if operator.linear:
        return np.diff(operator.links_into.start)
    return operator.layout.pieces_per_row


def _comfortable(values: Floats) -> bool:
    """Whether products and squares of ratios of such numbers stay far inside the range of doubles (zeros are exact)."""
    if values.size == 0:
        return True
    top = float(values.max())
    if not top < _SAFE:
        return False
    return bool(values.min() > 1 / _SAFE) or not np.any((values > 0) & (values < 1 / _SAFE))


def _scaled_quotients(operator: GainOperator, s: Floats, exponent: Exponents | None) -> tuple[Floats, Exponents, float]:
    """Quotients divided by 2**shift, one shift per row; and how much of them small terms may have added, relatively."""
    plan = operator.layout
    mantissa, power = normal(s, exponent)
    factor, own = normal(plan.gain, None)
    row = plan.row_of_link
    terms = factor * mantissa[plan.source]
    live = terms > 0
    scale = np.where(live, own + power[plan.source] - power[row], -(2**62))
    shift = np.full(operator.size, -(2**62), dtype=np.int64)
    if row.size:
        first = np.flatnonzero(np.append(True, row[1:] != row[:-1]))
        shift[plan.row] = np.maximum.reduceat(scale, first)
    gap = np.where(live, scale - shift[row], 0)
    terms = np.ldexp(terms, np.maximum(gap, _LEAST))
    quotient = plan.collect(terms) / np.where(mantissa > 0, mantissa, 1.0)
    # A row's largest term is at least 1/4, so terms that were raised to 2^-300 are less than n 2^-298 of it.
    raised = float(2.0**-298 * row.size) if np.any(gap < _LEAST) else 0.0
    return quotient, shift, raised


def _shifted(values: Floats, shift: Exponents, upward: bool) -> Floats:
    """values * 2**shift rounded to one side, also where the result is too small or too large for a double."""
    result = np.ldexp(values, np.clip(shift, -5000, 5000).astype(np.int32))
    small = (values > 0) & (result < 2.0**-1000)
    if upward:
        return np.where(small, np.nextafter(result, np.inf), result)
    below = np.where(small, np.maximum(np.nextafter(result, -np.inf), 0.0), result)
    # A lower bound beyond doubles is cut to the largest of them; an upper one is infinite and says so.
    return np.minimum(below, np.finfo(float).max)


def _worth_exact(operator: GainOperator, exponent: Exponents | None, rows: NDArray[np.intp]) -> NDArray[np.intp]:
    """The rows themselves where working them out exactly is cheap, otherwise none."""
    none = rows[:0]
    if rows.size == 0 or rows.size > _EXACT_ROWS:
        return none
    into = operator.links_into
    if sum(into[i].size for i in rows.tolist()) > _EXACT_TERMS:
        return none
    if exponent is not None:
        for i in rows.tolist():
            links = into[i]
            if links.size and np.abs(exponent[operator.source[links]] - exponent[i]).max() > _EXACT_SHIFT:
                return none
    return rows

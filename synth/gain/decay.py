"""Points of strict decay: s > 0 with G(s) <= target * s, built from the iterates of the operator and verified exactly.

Theory (12): s = sum_{k<=n} lambda^{-k} G^k(1) once G^{n+1}(1) <= lambda^{n+1} 1. Where all rows are maxima the sum may
be replaced by a maximum, and where all rows are roots of squares with one link per inlet by a root of the sum of
squares; anywhere else those closed forms are wrong and are refused.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.base.errors import InputError
from synth.gain.operator import Floats, GainOperator

FORMS = ("auto", "sum", "max", "root_sum_square")
_MOST_TERMS = 100_000


@dataclass(frozen=True, eq=False)
class DecayPoint:
    """A verified point: operator(s) <= target * s in exact arithmetic.

    ``s`` (size,), positive, smallest entry near 1; ``terms`` the number of iterates used; ``form`` how they are joined.
    """

    s: Floats
    terms: int
    target: float
    form: str


def decay_point(operator: GainOperator, target: float, form: str = "auto") -> DecayPoint:
    """A point of strict decay for ``target`` > radius, by theory (12); the result is rechecked exactly.

    ``form``: "auto" takes the tightest form that is valid; "sum", "max" and "root_sum_square" ask for one.
    Raises InputError if the form is not valid for these rows, if the target is not positive and finite, or if the
    target is at or below the radius (the message gives the enclosure) or too close to it for the construction to end.
    """
    if not (isinstance(target, (int, float)) and 0 < target < np.inf):
        raise InputError(f"target must be positive and finite, not {target!r}.")
    if form not in FORMS:
        raise InputError(f"form must be one of {', '.join(FORMS)}, not {form!r}.")
    allowed = valid_form(operator)
    if form not in ("auto", "sum", allowed):
        raise InputError(
            f"the {form} form is valid only where every row is of that type"
            f"{' with one link per inlet' if form == 'root_sum_square' else ''}; use the sum form."
        )
    chosen = allowed if form == "auto" else form
    radius = operator.radius()
    if radius.lower >= target:
        raise InputError(
            f"no point decays by {target:g}: the radius lies in [{radius.lower:.9g}, {radius.upper:.9g}]; "
            "the target must be above it."
        )
    # A hair below the target, so that the rounding of s does not spoil the exact comparison.
    rate = target * (1 - 1e-12)
    term, n = np.ones(operator.size), 0
    s = _power(term, chosen)
    while n < _MOST_TERMS:
        term = operator.apply(term) / rate
        if np.all(term <= 1) or not np.all(np.isfinite(term)):
            break
        n += 1
        s = _join(s, term, chosen)
    point = np.sqrt(s) if chosen == "root_sum_square" else s
    if np.all(np.isfinite(point)) and operator.below(point, target):
        return DecayPoint(point, n + 1, float(target), chosen)
    raise InputError(
        f"the target {target:g} is too close to the radius in [{radius.lower:.9g}, {radius.upper:.9g}] for a point to "
        f"be built from {n + 1} terms; choose a target a little larger."
    )


def valid_form(operator: GainOperator) -> str:
    """The tightest form of theory (12) that holds for these rows."""
    if all(kind == "max" for kind in operator.rows):
        return "max"
    groups = operator.groups
    single = groups.size == 0 or np.unique(groups).size == groups.size
    if all(kind == "root_sum_square" for kind in operator.rows) and single:
        return "root_sum_square"
    return "sum"


def _power(term: Floats, form: str) -> Floats:
    return term * term if form == "root_sum_square" else term


def _join(s: Floats, term: Floats, form: str) -> Floats:
    return np.maximum(s, term) if form == "max" else s + _power(term, form)

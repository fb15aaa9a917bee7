"""Points of strict decay: s > 0 with G(s) <= target * s, built from the iterates of the operator and verified exactly.

Theory (12): s = sum_{k<=n} lambda^{-k} G^k(1) once G^{n+1}(1) <= lambda^{n+1} 1. Where all rows are maxima the sum may
be replaced by a maximum, and where all rows are roots of squares with one link per inlet by a root of the sum of
squares; anywhere else those closed forms are wrong and are refused. So close to the radius that the sum would need too
many terms, the point of the enclosure itself is taken, which stems from a solve: form "solve".
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.base.errors import InputError
from synth.gain.operator import MAX, SQUARE, Floats, GainOperator
from synth.gain.radius import Radius
from synth.gain.solving.certify import lies_below
from synth.gain.solving.points import Exponents

FORMS = ("auto", "sum", "max", "root_sum_square")
_MOST_TERMS = 20_000
# Links times terms beyond which the sum is not tried, and at which it is given up.
_MOST_WORK = 400_000_000


@dataclass(frozen=True, eq=False)
class DecayPoint:
    """A verified point: operator(s) <= target * s in exact arithmetic.

    ``s`` (size,), positive (times 2**``exponent`` where that is not None: then doubles cannot hold the point);
    ``terms`` the number of iterates used; ``form`` how they are joined: "sum", "max", "root_sum_square", or "solve"
    (one term) for a point from a solve instead of iterates.
    """

    s: Floats
    terms: int
    target: float
    form: str
    exponent: Exponents | None = None


def decay_point(operator: GainOperator, target: float, form: str = "auto") -> DecayPoint:
    """A point of strict decay for ``target`` > radius, by theory (12); the result is rechecked exactly.

    ``form``: "auto" takes the tightest form that is valid, or a solve where the target is too close to the radius for
    it; "sum", "max" and "root_sum_square" ask for one.
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
    if form == "auto" and _terms(radius, target) * operator.gain.size > _MOST_WORK:
        found = _solved(operator, radius, target)
        if found is not None:
            return found
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        point, n = _iterated(operator, target, chosen)
    if np.all(np.isfinite(point)) and np.all(point > 0) and operator.below(point, target):
        return DecayPoint(point, n, float(target), chosen)
    found = _solved(operator, radius, target) if form == "auto" else None
    if found is not None:
        return found
    raise InputError(
        f"the target {target:g} is too close to the radius in [{radius.lower:.9g}, {radius.upper:.9g}] for a point to "
        f"be built from {n} terms; choose a target a little larger."
    )


def _iterated(operator: GainOperator, target: float, form: str) -> tuple[Floats, int]:
    """Theory (12): the iterates joined, and how many there are."""
    # A hair below the target, so that the rounding of s does not spoil the exact comparison.
    rate = target * (1 - 1e-12)
    term, n = np.ones(operator.size), 1
    s = _power(term, form)
    most = min(_MOST_TERMS, max(100, _MOST_WORK // (operator.gain.size + 1)))
    while n < most:
        term = operator.apply(term) / rate
        if np.all(term <= 1) or not np.all(np.isfinite(term)):
            break
        n += 1
        s = _join(s, term, form)
    return (np.sqrt(s) if form == "root_sum_square" else s), n


def _terms(radius: Radius, target: float) -> float:
    """Roughly how many terms the sum needs: iterates shrink by radius/target each, from up to e^30."""
    if radius.upper == 0:
        return 0.0
    return float(30 / np.log(target / radius.upper)) if target > radius.upper else np.inf


def _solved(operator: GainOperator, radius: Radius, target: float) -> DecayPoint | None:
    """The point of the enclosure, if it decays by the target."""
    if not lies_below(operator, radius.point, target, radius.exponent):
        return None
    return DecayPoint(radius.point, 1, float(target), "solve", radius.exponent)


def valid_form(operator: GainOperator) -> str:
    """The tightest form of theory (12) that holds for these rows."""
    if np.all(operator.codes == MAX):
        return "max"
    plan = operator.layout
    # Alternatives at one inlet are a maximum of squares, which leaves sums of squares subadditive.
    if np.all(operator.codes == SQUARE) and plan.piece_start.size == plan.inlet_start.size:
        return "root_sum_square"
    return "sum"


def _power(term: Floats, form: str) -> Floats:
    return term * term if form == "root_sum_square" else term


def _join(s: Floats, term: Floats, form: str) -> Floats:
    return np.maximum(s, term) if form == "max" else s + _power(term, form)

"""Why a target is out of reach: every limit is relaxed in turn, and the one that helps most is named.

The value of that limit which would do is found by searching at ever wider limits and bisecting, never by extrapolation;
the curves say what radius other values of the limits would give.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from synth.base.progress import Listener, silent
from synth.local.finish import Found, Gain, search
from synth.local.plant import Field, field_of
from synth.local.relaxing import Relaxation, relaxations

Array = NDArray[np.float64]
_BISECTIONS = 4
_CURVE = (1.5, 4.0)  # factors at which a curve is followed, beside the limit as it is and taken away
_CURVES = 3  # at most so many curves


@dataclass(frozen=True)
class Tried:
    """One limit relaxed as far as it makes sense: the smallest radius then met, and whether the target was reached."""

    cause: str
    kind: str
    name: str
    radius: float
    reaches: bool


@dataclass(frozen=True)
class Curve:
    """The smallest radius met over values of one limit, in ``unit``; ``kept`` says whether every limit was kept there.

    ``points`` are (value, radius, kept) by rising value, each the result of a short search of its own.
    """

    cause: str
    kind: str
    name: str
    unit: str
    points: tuple[tuple[float, float, bool], ...]

    def as_json(self) -> dict[str, object]:
        """Plain data; infinities as the text "inf"."""
        return {
            "cause": self.cause, "kind": self.kind, "name": self.name, "unit": self.unit,
            "points": [{"value": v, "radius": _number(r), "kept": kept} for v, r, kept in self.points],
        }  # fmt: skip


@dataclass(frozen=True)
class Blocking:
    """The limit that keeps the target out of reach.

    ``cause`` is "fastest", "slowest", "actuator limit", "gain bound", "structure", "sensors", "band" or "link
    strength"; ``kind`` and ``name`` say whose. Radii are estimates at the end of a short search. ``needed`` is a value
    of the limit, in ``unit``, that would do (None where no number describes it or relaxing it alone does not reach the
    target). ``tried`` lists every relaxation and what came of it, ``curves`` the radius over values of the bound on
    the fastest mode and of actuator limits.
    """

    cause: str
    kind: str
    name: str
    radius_now: float
    radius_if_relaxed: float
    sentence: str
    needed: float | None = None
    unit: str = ""
    tried: tuple[Tried, ...] = ()
    curves: tuple[Curve, ...] = ()

    def as_json(self) -> dict[str, object]:
        """Plain data; infinities as the text "inf"."""
        return {
            "cause": self.cause,
            "kind": self.kind,
            "name": self.name,
            "radius_now": _number(self.radius_now),
            "radius_if_relaxed": _number(self.radius_if_relaxed),
            "needed": self.needed,
            "unit": self.unit,
            "sentence": self.sentence,
            "tried": [
                {
                    "cause": t.cause, "kind": t.kind, "name": t.name, "radius": _number(t.radius),
                    "reaches": t.reaches,
                }
                for t in self.tried
            ],
            "curves": [curve.as_json() for curve in self.curves],
        }  # fmt: skip


_Outcome = tuple[tuple[bool, float, float], Relaxation, Found]


def find_blocking(field: Field, found: Found, target: float, seed: int = 0, progress: Listener = silent) -> Blocking:
    """Relax each limit, search again briefly, and name the limit whose relaxation helps most.

    A relaxation that reaches the target within all other limits beats one that does not; then the smaller excess of
    the other limits and the smaller radius decide. Weaker links always help, so they are named only if nothing else
    reaches the target.
    """
    outcomes: list[_Outcome] = []
    for relaxation in relaxations(field.network):
        answer = _try(relaxation, relaxation.most, ((field, found.gains),), seed)
        progress(f"relaxed {relaxation.cause} {relaxation.name}: radius {answer.merit.radius:.4g}")
        outcomes.append((_order(answer, target), relaxation, answer))
    limits = [outcome for outcome in outcomes if outcome[1].cause != "link strength"]
    helped = None
    if all(order[0] for order, _, _ in limits):
        helped = min(limits, key=lambda o: o[0], default=None)
        limits = outcomes
    if not limits:
        sentence = "The network has no link and no limit that could be relaxed."
        return Blocking("stability", "", "", found.merit.radius, found.merit.radius, sentence)
    order, relaxation, answer = min(limits, key=lambda o: o[0])
    needed = None
    if not order[0] and relaxation.value is not None:
        needed = _needed(relaxation, field, found, answer, target, seed)
    tried = tuple(Tried(r.cause, r.kind, r.name, a.merit.radius, not o[0]) for o, r, a in outcomes)
    named = _named(relaxation, found, answer, target, not order[0], needed, helped)
    return replace(named, tried=tried, curves=_curves(field, found, outcomes, seed))


def _named(
    relaxation: Relaxation, found: Found, answer: Found, target: float, reaches: bool, needed: float | None,
    helped: _Outcome | None,
) -> Blocking:  # fmt: skip
    """The blocking limit in words an engineer can act on; ``helped`` is the best limit where none reaches alone."""
    where = relaxation.words
    if found.merit.excess > 1e-6:
        start = "No gains keep every limit."
    else:
        start = f"The smallest radius reached is {found.merit.radius:.4g}, the target {target:g}."
    would = f"about {needed:.4g} {relaxation.unit}".rstrip() + " would do" if needed is not None else ""
    if reaches and relaxation.cause == "link strength":
        end = f" No limit alone reaches the target however far it is relaxed; weaker links do: {would}."
        if helped is not None and helped[2].merit.radius < found.merit.radius:
            end += f" Of the limits, {helped[1].words} would help most (radius about {helped[2].merit.radius:.3g})."
    elif reaches:
        verb = "are" if relaxation.plural else "is"
        end = f" {where[0].upper()}{where[1:]} {verb} what blocks: relaxed, the radius falls to about "
        end += f"{answer.merit.radius:.3g}" + (f"; {would}." if would else ".")
    else:
        end = f" No single limit is to blame; relaxing {where} helps most"
        end += f" (radius about {answer.merit.radius:.3g})" if np.isfinite(answer.merit.radius) else ""
        end += ", but not enough alone."
    return Blocking(
        relaxation.cause, relaxation.kind, relaxation.name, found.merit.radius, answer.merit.radius, start + end,
        needed, relaxation.unit,
    )  # fmt: skip


def _curves(field: Field, found: Found, outcomes: list[_Outcome], seed: int) -> tuple[Curve, ...]:
    """The radius over values of the bound on the fastest mode and of the actuator limits.

    Where taking the limit away gains nothing, its two ends say all there is to say.
    """
    curves: list[Curve] = []
    for _, relaxation, wide in outcomes:
        if relaxation.cause not in ("fastest", "actuator limit") or len(curves) == _CURVES or not relaxation.value:
            continue
        answers = {1.0: found, relaxation.most: wide}
        begin = ((field, found.gains), (field_of(relaxation.apply(relaxation.most)), wide.gains))
        flat = wide.merit.radius > 0.99 * found.merit.radius and (wide.merit.excess > 1e-6) == (
            found.merit.excess > 1e-6
        )
        for factor in () if flat else _CURVE:
            answers[factor] = _try(relaxation, factor, begin, seed, starts_made=1)
        points = tuple(
            (relaxation.value * f, answers[f].merit.radius, answers[f].merit.excess <= 1e-6) for f in sorted(answers)
        )
        curves.append(Curve(relaxation.cause, relaxation.kind, relaxation.name, relaxation.unit, points))
    return tuple(curves)


def _order(found: Found, target: float) -> tuple[bool, float, float]:
    """Smaller is better: reaching the target within all limits, then the excess of limits, then the radius."""
    excess = found.merit.excess if found.merit.excess > 1e-6 else 0.0
    reaches = excess == 0.0 and found.merit.radius <= target
    return (not reaches, round(excess, 6), found.merit.radius)


def _try(
    relaxation: Relaxation,
    factor: float,
    starts: tuple[tuple[Field, Gain], ...],
    seed: int,
    enough: float | None = None,
    starts_made: int = 3,
) -> Found:
    """A short search with one limit ``factor`` times wider, started from given gains of similar networks."""
    relaxed = field_of(relaxation.apply(factor))
    warm = tuple(
        tuple(
            _carried(old.to_user(K), new.allowed.shape, new.to_scaled)
            for old, new, K in zip(begin.plants, relaxed.plants, gains, strict=True)
        )
        for begin, gains in starts
    )
    return search(relaxed, seed=seed, starts=starts_made, warm=warm, quick=True, enough=enough)


def _carried(K: Array, shape: tuple[int, ...], to_scaled: Callable[[Array], Array]) -> Array:
    """Gains of the network at hand, with zeros for sensors that the relaxed network adds."""
    wide = np.zeros(shape)
    wide[: K.shape[0], : K.shape[1]] = K
    return to_scaled(wide)


def _needed(relaxation: Relaxation, field: Field, found: Found, wide: Found, target: float, seed: int) -> float:
    """A value of the limit that reaches the target: the factor is squared until it does, then bisected (upper end)."""
    starts = ((field, found.gains), (field_of(relaxation.apply(relaxation.most)), wide.gains))

    def reaches(log: float) -> bool:
        return not _order(_try(relaxation, float(np.exp(log)), starts, seed, enough=target), target)[0]

    low, high, most = 0.0, float(np.log(1.5)), float(np.log(relaxation.most))
    while high < most and not reaches(high):
        low, high = high, 2 * high
    high = min(high, most)
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        if reaches(middle):
            high = middle
        else:
            low = middle
    value = relaxation.value if relaxation.value is not None else 1.0
    factor = float(np.exp(high))
    return value / factor if relaxation.cause in ("slowest", "link strength") else value * factor


def _number(value: float) -> float | str:
    return value if np.isfinite(value) else "inf"


__all__ = ["Blocking", "Curve", "Tried", "find_blocking"]

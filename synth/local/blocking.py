"""Why a target is out of reach: every limit is relaxed in turn, and the one that helps most is named."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.base.exact import ExactMatrix
from synth.base.progress import Listener, silent
from synth.local.finish import Found, Gain, search
from synth.local.plant import Field, field_of
from synth.network.model import Goal, Kind, Network, Signal

Array = NDArray[np.float64]
_BISECTIONS = 4


@dataclass(frozen=True)
class Blocking:
    """The limit that keeps the target out of reach.

    ``cause`` is "fastest", "slowest", "actuator limit", "gain bound", "structure", "sensors", "band" or "link
    strength"; ``kind`` and ``name`` say whose. Radii are estimates at the end of a short search. ``needed`` is a value
    of the limit, in ``unit``, that would do (None where no number describes it or relaxing it alone does not reach the
    target).
    """

    cause: str
    kind: str
    name: str
    radius_now: float
    radius_if_relaxed: float
    sentence: str
    needed: float | None = None
    unit: str = ""

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
        }


@dataclass(frozen=True)
class _Relaxation:
    """One limit made ``factor`` times wider by ``apply(factor)``; ``most`` takes it away for practical purposes."""

    cause: str
    kind: str
    name: str
    apply: Callable[[float], Network]
    most: float
    value: float | None
    unit: str
    words: str


def find_blocking(field: Field, found: Found, target: float, seed: int = 0, progress: Listener = silent) -> Blocking:
    """Relax each limit, search again briefly, and name the limit whose relaxation helps most.

    A relaxation that reaches the target within all other limits beats one that does not; then the smaller excess of
    the other limits and the smaller radius decide. Weaker links always help, so they are named only if nothing else
    reaches the target.
    """
    outcomes: list[tuple[tuple[bool, float, float], _Relaxation, Found]] = []
    for relaxation in _relaxations(field.network):
        answer = _try(relaxation, relaxation.most, ((field, found.gains),), seed)
        progress(f"relaxed {relaxation.cause} {relaxation.name}: radius {answer.merit.radius:.4g}")
        outcomes.append((_order(answer, target), relaxation, answer))
    limits = [outcome for outcome in outcomes if outcome[1].cause != "link strength"]
    if all(order[0] for order, _, _ in limits):
        limits = outcomes
    if not limits:
        sentence = "The network has no link and no limit that could be relaxed."
        return Blocking("stability", "", "", found.merit.radius, found.merit.radius, sentence)
    order, relaxation, answer = min(limits, key=lambda o: o[0])
    needed = None
    if not order[0] and relaxation.value is not None:
        needed = _needed(relaxation, field, found, answer, target, seed)
    return _named(relaxation, found, answer, target, reaches=not order[0], needed=needed)


def _named(
    relaxation: _Relaxation, found: Found, answer: Found, target: float, reaches: bool, needed: float | None
) -> Blocking:
    """The blocking limit in words an engineer can act on."""
    where = f"{relaxation.words}"
    if found.merit.excess > 1e-6:
        start = "No gains keep every limit."
    else:
        start = f"The smallest radius reached is {found.merit.radius:.4g}, the target {target:g}."
    if reaches:
        end = f" {where[0].upper()}{where[1:]} is what blocks: "
        end += f"relaxed, the radius falls to about {answer.merit.radius:.3g}"
        end += f"; about {needed:.4g} {relaxation.unit}".rstrip() + " would do." if needed is not None else "."
    else:
        end = (
            f" No single limit is to blame; relaxing {where} helps most (radius about {answer.merit.radius:.3g}), "
            "but not enough alone."
        )
    return Blocking(
        relaxation.cause, relaxation.kind, relaxation.name, found.merit.radius, answer.merit.radius, start + end,
        needed, relaxation.unit,
    )  # fmt: skip


def _order(found: Found, target: float) -> tuple[bool, float, float]:
    """Smaller is better: reaching the target within all limits, then the excess of limits, then the radius."""
    excess = found.merit.excess if found.merit.excess > 1e-6 else 0.0
    reaches = excess == 0.0 and found.merit.radius <= target
    return (not reaches, round(excess, 6), found.merit.radius)


def _try(
    relaxation: _Relaxation,
    factor: float,
    starts: tuple[tuple[Field, Gain], ...],
    seed: int,
    enough: float | None = None,
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
    return search(relaxed, seed=seed, starts=3, warm=warm, quick=True, enough=enough)


def _carried(K: Array, shape: tuple[int, ...], to_scaled: Callable[[Array], Array]) -> Array:
    """Gains of the network at hand, with zeros for sensors that the relaxed network adds."""
    wide = np.zeros(shape)
    wide[: K.shape[0], : K.shape[1]] = K
    return to_scaled(wide)


def _needed(relaxation: _Relaxation, field: Field, found: Found, wide: Found, target: float, seed: int) -> float:
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


def _relaxations(network: Network) -> Iterator[_Relaxation]:
    """Every limit of the network that can be made wider."""
    goal = network.goal
    if goal.fastest is not None:
        fastest = goal.fastest
        yield _Relaxation(
            "fastest", "", "fastest", lambda f: replace(network, goal=replace(goal, fastest=fastest * Fraction(f))),
            10.0, float(fastest), "1/s", f"the bound on the fastest mode (fastest, {float(fastest):g} 1/s)",
        )  # fmt: skip
    if goal.slowest is not None and goal.slowest > 0:
        slowest = goal.slowest
        yield _Relaxation(
            "slowest", "", "slowest", lambda f: replace(network, goal=replace(goal, slowest=slowest / Fraction(f))),
            50.0, float(slowest), "1/s", f"the bound on the slowest mode (slowest, {float(slowest):g} 1/s)",
        )  # fmt: skip
    for kind in network.kinds:
        yield from _kind_relaxations(network, kind)
    if network.links:
        yield _Relaxation(
            "link strength", "", ", ".join(network.classes()),
            lambda f: network.scaled(1 / Fraction(f), own_parts=False), 10.0, 1.0, "times the present strength",
            "the strength of the links",
        )  # fmt: skip


def _kind_relaxations(network: Network, kind: Kind) -> Iterator[_Relaxation]:
    """Limits that belong to one kind."""
    for q, actuator in enumerate(kind.inputs):
        if actuator.limit is not None:

            def wider(f: float, q: int = q) -> Network:
                inputs = list(kind.inputs)
                limit = inputs[q].limit
                inputs[q] = replace(inputs[q], limit=None if limit is None else limit * Fraction(f))
                return _with_kind(network, replace(kind, inputs=tuple(inputs)))

            yield _Relaxation(
                "actuator limit", kind.name, actuator.name, wider, 1000.0, float(actuator.limit), actuator.unit,
                f"the limit of actuator {kind.name}.{actuator.name} ({float(actuator.limit):g} {actuator.unit})",
            )  # fmt: skip
        bounds = network.goal.gain_bounds.get(kind.name, {}).get(actuator.name)
        if bounds:
            yield _Relaxation(
                "gain bound", kind.name, actuator.name, _wider_gains(network, kind, actuator.name), 1000.0, 1.0,
                "times the present bounds", f"the gain bounds of {kind.name}.{actuator.name}",
            )  # fmt: skip
        if actuator.name in network.goal.uses.get(kind.name, {}):
            yield _Relaxation(
                "structure", kind.name, actuator.name, _all_sensors(network, kind, actuator.name), 2.0, None, "",
                f"the list of sensors that {kind.name}.{actuator.name} may use",
            )  # fmt: skip
    for group, signals in (("states", kind.states), ("offers", kind.offers)):
        for k, signal in enumerate(signals):
            if signal.band is not None:
                yield _Relaxation(
                    "band", kind.name, signal.name, _wider_band(network, kind, group, k), 1000.0, float(signal.band),
                    signal.unit, f"the band of {kind.name}.{signal.name} ({float(signal.band):g} {signal.unit})",
                )  # fmt: skip
    if np.linalg.matrix_rank(kind.C.floats()) < len(kind.states) and not network.goal.uses.get(kind.name):
        yield _Relaxation(
            "sensors", kind.name, "sensors", lambda _: _with_kind(network, _sees_everything(kind)), 2.0, None, "",
            f"the sensors of {kind.name}, which do not show every state,",
        )  # fmt: skip


def _with_kind(network: Network, kind: Kind) -> Network:
    return replace(network, kinds=tuple(kind if k.name == kind.name else k for k in network.kinds))


def _wider_gains(network: Network, kind: Kind, actuator: str) -> Callable[[float], Network]:
    def apply(factor: float) -> Network:
        bounds = {k: dict(v) for k, v in network.goal.gain_bounds.items()}
        bounds[kind.name][actuator] = {s: b * Fraction(factor) for s, b in bounds[kind.name][actuator].items()}
        return replace(network, goal=replace(network.goal, gain_bounds=bounds))

    return apply


def _all_sensors(network: Network, kind: Kind, actuator: str) -> Callable[[float], Network]:
    def apply(_: float) -> Network:
        uses: Mapping[str, Mapping[str, tuple[str, ...]]] = {
            k: {a: s for a, s in v.items() if (k, a) != (kind.name, actuator)} for k, v in network.goal.uses.items()
        }
        goal: Goal = replace(network.goal, uses=uses)
        return replace(network, goal=goal)

    return apply


def _wider_band(network: Network, kind: Kind, group: str, index: int) -> Callable[[float], Network]:
    def apply(factor: float) -> Network:
        signals: list[Signal] = list(getattr(kind, group))
        band = signals[index].band
        signals[index] = replace(signals[index], band=None if band is None else band * Fraction(factor))
        return _with_kind(network, replace(kind, **{group: tuple(signals)}))  # type: ignore[arg-type]

    return apply


def _sees_everything(kind: Kind) -> Kind:
    """The kind with one more sensor per state."""
    extra = tuple(Signal(f"state {s.name}", s.unit) for s in kind.states)
    n = len(kind.states)
    C = ExactMatrix.of([*kind.C.rows, *ExactMatrix.identity(n).rows], (len(kind.sensors) + n, n))
    N = ExactMatrix.of(
        [*kind.N.rows, *ExactMatrix.zeros(n, len(kind.takes)).rows], (len(kind.sensors) + n, len(kind.takes))
    )
    return replace(kind, sensors=kind.sensors + extra, C=C, N=N)


def _number(value: float) -> float | str:
    return value if np.isfinite(value) else "inf"


__all__ = ["Blocking", "Gain", "find_blocking"]

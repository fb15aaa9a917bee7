"""Every limit of a network as something that can be made wider: what ``blocking`` tries one by one."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.network.model import Goal, Kind, Network, Signal
from synth.network.rational import rank


@dataclass(frozen=True)
class Relaxation:
    """One limit made ``factor`` times wider by ``apply(factor)``; ``most`` takes it away for practical purposes.

    ``value`` is the limit as it is, in ``unit`` (None: no number describes it); ``words`` name it in a sentence,
    ``plural`` tells their number.
    """

    cause: str
    kind: str
    name: str
    apply: Callable[[float], Network]
    most: float
    value: float | None
    unit: str
    words: str
    plural: bool = False


def relaxations(network: Network) -> Iterator[Relaxation]:
    """Every limit of the network that can be made wider; what kinds of one gain group share is relaxed for all."""
    goal = network.goal
    if goal.fastest is not None:
        fastest = goal.fastest
        yield Relaxation(
            "fastest", "", "fastest", lambda f: replace(network, goal=replace(goal, fastest=fastest * Fraction(f))),
            10.0, float(fastest), "1/s", f"the bound on the fastest mode (fastest, {float(fastest):g} 1/s)",
        )  # fmt: skip
    if goal.slowest is not None and goal.slowest > 0:
        slowest = goal.slowest
        yield Relaxation(
            "slowest", "", "slowest", lambda f: replace(network, goal=replace(goal, slowest=slowest / Fraction(f))),
            50.0, float(slowest), "1/s", f"the bound on the slowest mode (slowest, {float(slowest):g} 1/s)",
        )  # fmt: skip
    for kind in network.kinds:
        yield from _own_limits(network, kind)
    for names in network.gain_groups().values():
        yield from _gain_limits(network, names)
        yield from _measurements(network, names)
    if network.links:
        yield Relaxation(
            "link strength", "", ", ".join(network.classes()),
            lambda f: network.scaled(1 / Fraction(f), own_parts=False), 1000.0, 1.0, "times the present strength",
            "the strength of the links",
        )  # fmt: skip


def _own_limits(network: Network, kind: Kind) -> Iterator[Relaxation]:
    """Limits of the signals of one kind."""
    for q, actuator in enumerate(kind.inputs):
        if actuator.limit is not None:

            def wider(f: float, q: int = q) -> Network:
                inputs = list(kind.inputs)
                limit = inputs[q].limit
                inputs[q] = replace(inputs[q], limit=None if limit is None else limit * Fraction(f))
                return _with_kinds(network, {kind.name: replace(kind, inputs=tuple(inputs))})

            yield Relaxation(
                "actuator limit", kind.name, actuator.name, wider, 1000.0, float(actuator.limit), actuator.unit,
                f"the limit of actuator {kind.name}.{actuator.name} ({float(actuator.limit):g} {actuator.unit})",
            )  # fmt: skip
    for group, signals in (("states", kind.states), ("offers", kind.offers)):
        for k, signal in enumerate(signals):
            if signal.band is not None:
                yield Relaxation(
                    "band", kind.name, signal.name, _wider_band(network, kind, group, k), 1000.0, float(signal.band),
                    signal.unit, f"the band of {kind.name}.{signal.name} ({float(signal.band):g} {signal.unit})",
                )  # fmt: skip


def _gain_limits(network: Network, names: tuple[str, ...]) -> Iterator[Relaxation]:
    """Bounds and structure of the gains that the kinds ``names`` carry."""
    first = network.kind(names[0])
    for actuator in first.inputs:
        bounds = network.goal.gain_bounds.get(first.name, {}).get(actuator.name)
        if bounds:
            yield Relaxation(
                "gain bound", first.name, actuator.name, _wider_gains(network, names, actuator.name), 1000.0, 1.0,
                "times the present bounds", f"the gain bounds of {first.name}.{actuator.name}", True,
            )  # fmt: skip
        may = network.goal.uses.get(first.name, {}).get(actuator.name)
        could = _could_use(first, actuator.name)
        left_out = [s for s in could if may is not None and s not in may]
        if left_out:
            yield Relaxation(
                "structure", first.name, actuator.name, _all_sensors(network, names, actuator.name), 2.0, None, "",
                f"the list of sensors that {first.name}.{actuator.name} may use (it leaves out {', '.join(left_out)})",
            )  # fmt: skip


def _could_use(kind: Kind, actuator: str) -> tuple[str, ...]:
    """The sensors an input may use before the user narrows them down."""
    everything = tuple(s.name for s in kind.sensors)
    return everything if kind.controller is None else kind.controller.structure.get(actuator, everything)


def _measurements(network: Network, names: tuple[str, ...]) -> Iterator[Relaxation]:
    """A sensor for each state that the sensors do not show; all of them together where several are missing."""
    first = network.kind(names[0])
    made = () if first.controller is None else first.controller.states
    n = len(first.states)
    shown = rank(first.C.rows, n)
    missing = [
        s.name
        for k, s in enumerate(first.states)
        if s.name not in made
        and rank([*first.C.rows, [Fraction(int(j == k)) for j in range(n)]], n) > shown
        and all(s.name in [x.name for x in network.kind(name).states] for name in names)
    ]
    for states in [[state] for state in missing] + ([missing] if len(missing) > 1 else []):
        words = f"the missing measurement{'s' if len(states) > 1 else ''} of {', '.join(states)} ({first.name})"
        yield Relaxation(
            "sensors", first.name, ", ".join(states), _measured(network, names, states), 2.0, None, "", words,
            len(states) > 1,
        )  # fmt: skip


def _with_kinds(network: Network, changed: Mapping[str, Kind]) -> Network:
    return replace(network, kinds=tuple(changed.get(kind.name, kind) for kind in network.kinds))


def _wider_gains(network: Network, names: tuple[str, ...], actuator: str) -> Callable[[float], Network]:
    def apply(factor: float) -> Network:
        bounds = {k: dict(v) for k, v in network.goal.gain_bounds.items()}
        for name in names:
            if actuator in bounds.get(name, {}):
                bounds[name][actuator] = {s: b * Fraction(factor) for s, b in bounds[name][actuator].items()}
        return replace(network, goal=replace(network.goal, gain_bounds=bounds))

    return apply


def _all_sensors(network: Network, names: tuple[str, ...], actuator: str) -> Callable[[float], Network]:
    def apply(_: float) -> Network:
        uses = {k: dict(v) for k, v in network.goal.uses.items()}
        for name in names:
            uses.setdefault(name, {})[actuator] = _could_use(network.kind(name), actuator)
        goal: Goal = replace(network.goal, uses=uses)
        return replace(network, goal=goal)

    return apply


def _wider_band(network: Network, kind: Kind, group: str, index: int) -> Callable[[float], Network]:
    def apply(factor: float) -> Network:
        signals: list[Signal] = list(getattr(kind, group))
        band = signals[index].band
        signals[index] = replace(signals[index], band=None if band is None else band * Fraction(factor))
        return _with_kinds(network, {kind.name: replace(kind, **{group: tuple(signals)})})  # type: ignore[arg-type]

    return apply


def _measured(network: Network, names: tuple[str, ...], states: list[str]) -> Callable[[float], Network]:
    """The network whose kinds ``names`` have a sensor more per state, which every actuator may use."""

    def apply(_: float) -> Network:
        uses = {k: dict(v) for k, v in network.goal.uses.items()}
        changed = {}
        for name in names:
            kind = network.kind(name)
            changed[name] = _sees(kind, states)
            inside = () if kind.controller is None else kind.controller.inputs
            for actuator, sensors in uses.get(name, {}).items():
                if actuator not in inside:
                    uses[name][actuator] = (*sensors, *(f"state {state}" for state in states))
        return _with_kinds(replace(network, goal=replace(network.goal, uses=uses)), changed)

    return apply


def _sees(kind: Kind, states: list[str]) -> Kind:
    """The kind with one more sensor per named state; its name has a space, so it is none of the user's."""
    places = [kind.index("states", state) for state in states]
    n, count = len(kind.states), len(kind.sensors) + len(states)
    extra = tuple(Signal(f"state {kind.states[k].name}", kind.states[k].unit) for k in places)
    C = ExactMatrix.of([*kind.C.rows, *(ExactMatrix.identity(n).rows[k] for k in places)], (count, n))
    N = ExactMatrix.of([*kind.N.rows, *ExactMatrix.zeros(len(states), len(kind.takes)).rows], (count, len(kind.takes)))
    return replace(kind, sensors=kind.sensors + extra, C=C, N=N)

"""What a design makes small besides the radius: the peaks of the actuators, or of signals the user named.

The peak of a signal is the guaranteed one of theory (3): over every delay, loss and sign of the links and every
disturbance within its declared peak. Several signals count in parts of their limits or bands, and the largest part is
made small.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.network.model import Kind, Network

Key = tuple[str, str, str]  # kind, group ("states", "offers" or "inputs"), signal
_ROLES = {"states": "state", "offers": "offer", "inputs": "actuator"}


@dataclass(frozen=True)
class AimedPeak:
    """A signal whose peak was made small: the guaranteed peak and the one with the links as written, in its unit.

    ``guaranteed`` holds for every link of the proven class, ``nominal`` is an estimate with fresh links of the written
    strengths (infinite if the network then grows, None where it is not estimated: only patterns of fixed links are);
    ``limit`` is the limit or band it is counted in (None: none).
    """

    kind: str
    role: str  # "state", "offer" or "actuator"
    signal: str
    unit: str
    guaranteed: float
    nominal: float | None
    limit: Fraction | None


def aims_of(network: Network) -> dict[Key, Fraction]:
    """The signals that ``network.goal.aim`` names, each with the value that counts as one.

    Empty for the aim 'radius'. InputError where nothing could be made small: no actuator, no disturbance, an unknown
    signal, or several signals of which one has neither limit nor band to be counted in.
    """
    goal = network.goal
    if goal.aim == "radius":
        return {}
    if goal.aim == "effort":
        keys = [(kind, "inputs", a.name) for kind in network.kinds for a in kind.inputs if _carried_out(kind, a.name)]
        if not keys:
            raise InputError("aim: no kind has an actuator whose effort could be made least; aim at the radius.")
    elif goal.aim == "peak":
        keys = [(kind, *_place(kind, signal)) for kind, signal in _named(network)]
    else:
        raise InputError(f"aim: {goal.aim!r} is not known; accepted are 'radius', 'effort' and 'peak'.")
    if not any(w.peak for kind in network.kinds for w in kind.disturbances):
        raise InputError(
            "aim: no disturbance has a peak above zero, so every peak is zero whatever the gains; declare the "
            "disturbances that the units must bear, or aim at the radius."
        )
    return _counted(keys)


def _carried_out(kind: Kind, name: str) -> bool:
    """Whether an input is an actuator and not a rate inside the controller."""
    return kind.controller is None or name not in kind.controller.inputs


def _named(network: Network) -> list[tuple[Kind, str]]:
    if not network.goal.aim_of:
        raise InputError("aim: the least peak needs the signals it is about, such as 'of: [hauler.place]'.")
    kinds = {kind.name: kind for kind in network.kinds}
    for kind, signal in network.goal.aim_of:
        if kind not in kinds:
            raise InputError(f"aim: there is no kind {kind!r} whose {signal!r} could be aimed at; name one of "
                             f"{', '.join(kinds)}.")  # fmt: skip
    return [(kinds[kind], signal) for kind, signal in network.goal.aim_of]


def _place(kind: Kind, signal: str) -> tuple[str, str]:
    """The group of a signal; a state offered under its own name counts as the state."""
    for group in ("states", "offers", "inputs"):
        if any(s.name == signal for s in getattr(kind, group)):
            return group, signal
    names = [s.name for group in ("states", "offers", "inputs") for s in getattr(kind, group)]
    raise InputError(f"aim: {kind.name} has no signal {signal!r}; name one of {', '.join(dict.fromkeys(names))}.")


def _counted(keys: Sequence[tuple[Kind, str, str]]) -> dict[Key, Fraction]:
    found: dict[Key, Fraction] = {}
    for kind, group, name in keys:
        signal = getattr(kind, group)[kind.index(group, name)]
        limit: Fraction | None = signal.limit if group == "inputs" else signal.band
        if limit is None and len(keys) > 1:
            word = "limit" if group == "inputs" else "band"
            raise InputError(
                f"aim: {kind.name}.{name} has no {word}, and several signals are counted in parts of theirs; give it a "
                f"{word}, or aim at one signal."
            )
        found[kind.name, group, name] = Fraction(1) if limit is None else limit
    return found


def role_of(group: str) -> str:
    """'state', 'offer' or 'actuator' for 'states', 'offers' or 'inputs'."""
    return _ROLES[group]

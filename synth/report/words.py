"""The network in words and equations, for a reader who has not seen the problem file."""

from __future__ import annotations

from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.handoff.quantity import quotient
from synth.network.model import Kind, Link, Network
from synth.report.html import exactly


def summary(network: Network) -> str:
    """One sentence on how many units of which kinds there are and how they are arranged."""
    kinds = " and ".join(kind.name for kind in network.kinds)
    if network.units is not None:
        return f"{network.units} units of the kinds {kinds}."
    cell = f"a {kinds}" if len(network.kinds) == 1 else f"one unit of each kind ({kinds})"
    line = (
        "in a row without end" if network.dimension == 1 else f"on a {network.dimension}-dimensional grid without end"
    )
    return (
        f"A pattern: each cell holds {cell}, and the cells repeat {line}. Nothing in the proof depends on how many "
        "units there are."
    )


def link_sentence(network: Network, link: Link) -> str:
    """What a link does, with strength, unit, position and delay."""
    receiver, source = network.kind(link.kind), network.kind(link.source_kind)
    take = receiver.takes[receiver.index("takes", link.take)]
    offer = source.offers[source.index("offers", link.offer)]
    strength = exactly(link.strength, quotient(take.unit, offer.unit))
    where = _place(link.at)
    text = f"{link.kind}.{link.take} receives {strength} times {link.source_kind}.{link.offer} of the unit at {where}"
    if link.relative:
        same = link.own_strength == link.strength
        own = "" if same else f"{exactly(link.own_strength, quotient(take.unit, offer.unit))} times "
        text += f", minus {own or 'the same strength times '}its own fresh {link.offer}"
    if link.delay:
        return text + f"; the neighbour's value may be up to {exactly(link.delay, 's')} old"
    return text + "; no delay declared"


def _place(at: tuple[int, ...]) -> str:
    """'i − 1', or (i, j) offsets on a grid."""
    names = "ijklm"
    parts = [
        f"{names[k % 5]}{' − ' if step < 0 else ' + '}{abs(step)}" if step else names[k % 5]
        for k, step in enumerate(at)
    ]
    return parts[0] if len(parts) == 1 else f"({', '.join(parts)})"


def equations(kind: Kind) -> list[str]:
    """The equations as written, or worked out from the matrices; offered signals and sensors follow."""
    lines = []
    inputs = [(kind.A, kind.states), (kind.B, kind.inputs), (kind.D, kind.takes), (kind.E, kind.disturbances)]
    for i, state in enumerate(kind.states):
        written = kind.equations.get(f"{state.name}'", kind.equations.get(state.name))
        lines.append(f"{state.name}' = {written or _sum(i, inputs)}")
    for i, offer in enumerate(kind.offers):
        offered = [(kind.H, kind.states), (kind.F, kind.takes), (kind.Fw, kind.disturbances)]
        lines.append(f"offers {offer.name} = {_sum(i, offered)}")
    for i, sensor in enumerate(kind.sensors):
        text = _sum(i, [(kind.C, kind.states), (kind.N, kind.takes)])
        lines.append(f"reads {sensor.name}" + ("" if text == sensor.name else f" = {text}"))
    return lines


def _sum(row: int, parts: list[tuple[ExactMatrix, tuple[object, ...]]]) -> str:
    """A row of matrices times named signals as text."""
    text = ""
    for matrix, signals in parts:
        for j, signal in enumerate(signals):
            weight = matrix[row, j]
            if weight:
                text += _term(weight, str(getattr(signal, "name", "")), first=not text)
    return text or "0"


def _term(weight: Fraction, name: str, first: bool) -> str:
    size = "" if abs(weight) == 1 else f"{exactly(abs(weight))} "
    sign = ("−" if first else " − ") if weight < 0 else ("" if first else " + ")
    return f"{sign}{size}{name}"

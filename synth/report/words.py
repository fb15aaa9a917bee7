"""The network in words and equations, for a reader who has not seen the problem file."""

from __future__ import annotations

from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.base.unit_text import quotient
from synth.network.describing import internal
from synth.network.description import edges_text, layout_text
from synth.network.model import Kind, Link, Network
from synth.network.words import counted, own_part_of, subtracting
from synth.report.html import exactly

MOST_LINKS = 40


def summary(network: Network) -> list[str]:
    """How many units of which kinds there are, how they are arranged, and what stands at the edges."""
    return [line.strip() for line in (*layout_text(network), *edges_text(network)) if line.strip()]


def links_shown(network: Network) -> list[Link]:
    """The links of the network that a reader is told of: not the own parts (said beside the neighbour's part)."""
    return [link for link in network.links if link.sort == "link" and not link.own_part]


def link_sentence(network: Network, link: Link) -> str:
    """What a link does, with strength, unit, position and delay."""
    receiver, source = network.kind(link.kind), network.kind(link.source_kind)
    take = receiver.takes[receiver.index("takes", link.take)]
    offer = source.offers[source.index("offers", link.offer)]
    most = {rule.name: rule.most for rule in network.rules}.get(link.choice, 1) if link.choice else 1
    strength = exactly(link.strength / most, quotient(take.unit, offer.unit))
    where = _place(link.at) if link.at else "another unit"
    text = f"{link.kind}.{link.take} receives {strength} times {link.source_kind}.{link.offer} of {where}"
    own = own_part_of(link, network)
    if link.relative:
        same = link.own_strength == link.strength
        size = "" if same else f"{exactly(link.own_strength / most, quotient(take.unit, offer.unit))} times "
        text += f", minus {size or 'the same strength times '}its own fresh {link.offer}"
    elif own is not None:
        text += f", minus its own {link.offer}, just as late"
    elif subtracting(link, network) is not link:
        text += f", minus the same strength times its own fresh {link.offer}"
    if link.choice and network.rules:
        text += f", from at most {counted(most, 'unit')} at a time"
    if subtracting(link, network).weakens:
        text += "; the strength may weaken to zero at any time"
    if link.delay:
        return text + f"; the neighbour's value may be up to {exactly(link.delay, 's')} old"
    return text + "; no delay declared"


def _place(at: tuple[int, ...]) -> str:
    """'the unit at i − 1', or (i, j) offsets on a grid; within the cell 'the same cell'."""
    names = "ijklm"
    parts = [
        f"{names[k % 5]}{' − ' if step < 0 else ' + '}{abs(step)}" if step else names[k % 5]
        for k, step in enumerate(at)
    ]
    joined = ", ".join(parts)
    return f"the unit at {joined if len(parts) == 1 else f'({joined})'}"


def equations(kind: Kind) -> list[str]:
    """The equations as written with the linear ones in numbers below, or from the matrices; offers and sensors.

    What the tool made of tolerances and nonlinear terms is left out (see ``describing.inner_text``).
    """
    lines = []
    inputs = [(kind.A, kind.states), (kind.B, kind.inputs), (kind.D, kind.takes), (kind.E, kind.disturbances)]
    for i, state in enumerate(kind.states):
        written = kind.equations.get(f"{state.name}'", kind.equations.get(state.name))
        numbers = _sum(i, inputs)
        lines.append(f"{state.name}' = {written or numbers}")
        if written and "".join(written.split()) != "".join(numbers.replace("−", "-").split()):
            lines.append(f"    in declared units: {numbers}")
    for i, offer in enumerate(kind.offers):
        if not internal(offer.name):
            offered = [(kind.H, kind.states), (kind.F, kind.takes), (kind.Fw, kind.disturbances)]
            offered += [] if kind.Fu is None else [(kind.Fu, kind.inputs)]
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
                name = str(getattr(signal, "name", ""))
                text += _term(weight, f"[{name}]" if internal(name) else name, first=not text)
    return text or "0"


def _term(weight: Fraction, name: str, first: bool) -> str:
    size = "" if abs(weight) == 1 else f"{exactly(abs(weight))} "
    sign = ("−" if first else " − ") if weight < 0 else ("" if first else " + ")
    return f"{sign}{size}{name}"

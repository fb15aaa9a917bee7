"""What no local feedback can prove, found before any search: theory (26).

The network written in waves e^{i theta . k} has the matrix A^(theta), the sensors C^(theta) and the actuators
B^(theta). If for some theta and some s with Re s >= 0 a direction x has A^ x = s x and C^ x = 0 ('not seen'), or a left
direction x has x A^ = s x and x B^ = 0 ('not reached'), then that mode stays where it is whatever the gains, and the
radius is at least one. With several actuators, a mode is also fixed if the actuators that reach it hear none of the
sensors that see it.

A delay bounds the age of what a link carries, so the delay zero belongs to the class; the test is made for that member,
and at s = 0 every constant delay gives the same matrices anyway. The same holds for intervals of strengths and for
links that weaken: the test is made at full strength. Tolerances and curves are tested at their nominal.

What is tested depends on the description, and ``examine`` says it: phases of a pattern; of an edge pattern also the
modes that live on the outermost cells alone; of rules a choice of wirings that obey them; of members that network.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from synth.network.advice import advise, not_reached, not_seen, several
from synth.network.blind import member_finding
from synth.network.cuts import least_cells, section_of, strip_of
from synth.network.layout import Edge
from synth.network.model import Link, Network
from synth.network.phases import Finding, corners, exact_findings, exact_mode, findings, heard_by_any
from synth.network.rational import Rows, characteristic, hurwitz, transposed, unseen
from synth.network.symbol import Symbol, member_symbol, stacked_symbol, symbol_of

EDGE_STATES = 40
MOST_EDGE_STATES = 200  # more take the exact test minutes
MOST_WIRINGS = 400


@dataclass(frozen=True)
class Obstruction:
    """A mode of the network that no local feedback can move.

    ``theta`` is the phase from one cell to the next (radians, one per dimension, at an edge one per direction along it;
    empty for rules, members and the ends of a line), ``s`` the mode in 1/s, ``direction`` the weight of each
    ``kind.state`` (or ``unit.state``) in declared units (largest absolute value 1), ``cause`` 'not seen' or 'not
    reached', ``advice`` what would remove it, in plain words.
    """

    theta: tuple[float, ...]
    s: complex
    direction: Mapping[str, complex]
    cause: str
    advice: str

    def as_json(self) -> dict[str, object]:
        """Plain data with the keys of the public contract; complex numbers are [re, im]."""
        return {
            "theta": list(self.theta),
            "s": [self.s.real, self.s.imag],
            "direction": {name: [v.real, v.imag] for name, v in self.direction.items()},
            "cause": self.cause,
            "advice": self.advice,
        }


@dataclass(frozen=True)
class Examination:
    """The obstruction, if one was found, and one sentence that says what was looked at."""

    obstruction: Obstruction | None
    tested: str


def obstruction(network: Network) -> Obstruction | None:
    """Find a mode that no local feedback can move, or None if the test finds none: theory (26).

    A None is no promise that a target can be met. ``examine`` says what was tested.
    """
    return examine(network).obstruction


def examine(network: Network) -> Examination:
    """Look for an obstruction, and say what was looked at."""
    if network.members is not None:
        announced, tested = member_finding(network)
        return Examination(None if announced is None else Obstruction(*announced), tested)
    if network.rules:
        return _examine_rules(network)
    symbol = symbol_of(network)
    finding = next(findings(symbol, network.dimension), None)
    tested = (
        "every phase 0 and pi exactly, the phases between them on a grid with refinement (a small but nonzero phase "
        "can hide between its points)"
    )
    if finding is not None or not network.edges:
        return Examination(None if finding is None else _announced(network, symbol, finding), tested)
    for edge in network.edges:
        found, cells = _edge_obstruction(network, edge)
        if not cells:
            tested += f"; nothing at the {edge.side} edge, whose units and links reach too deep for the exact test"
        elif network.dimension == 1:
            tested += f"; at the {edge.side} edge, exactly, the modes that live on its outermost {cells} cells alone"
        else:
            tested += (
                f"; at the {edge.side} edge, exactly, the modes that live on its outermost {cells} "
                f"{'rows' if network.dimension == 2 else 'layers'} alone and have the phases 0 and pi along it"
            )
        if found is not None:
            return Examination(found, tested)
    return Examination(None, tested)


def _weights(names: tuple[str, ...], finding: Finding) -> dict[str, complex]:
    direction = finding.direction / finding.direction[int(np.argmax(np.abs(finding.direction)))]
    return {
        name: complex(v) if abs(v.imag) > 1e-9 else complex(v.real)
        for name, v in zip(names, direction, strict=True)
        if abs(v) > 1e-9
    }


def _announced(network: Network, symbol: Symbol, finding: Finding) -> Obstruction:
    """The obstruction of a pattern with its advice."""
    weights = _weights(symbol.names, finding)
    leaders = tuple(unit.name for edge in network.edges for unit in edge.units)
    helpful = _helpful(symbol, finding, weights)
    advice = advise(finding.theta, finding.s, weights, finding.cause, helpful, symbol.sensors, leaders)
    advice += split_advice(symbol, finding) + _weaker(network, finding)
    return Obstruction(finding.theta, finding.s, weights, finding.cause, advice)


def _weaker(network: Network, finding: Finding) -> str:
    """Where a one-way line drifts as a whole: the claim that could be asked for instead."""
    steps = {link.at[0] for link in network.links if link.sort == "link" and not link.own_part}
    one_way = network.dimension == 1 and not network.edges and (steps <= {0, -1} or steps <= {0, 1})
    if any(finding.theta) or abs(finding.s) > 1e-9 or not one_way or network.goal.hop is not None:
        return ""
    return (
        " What can still be shown is weaker, that what a leader does is not amplified from unit to unit; it must be "
        "asked for, with 'claim: hop' in the section design."
    )


def split_advice(symbol: Symbol, finding: Finding) -> str:
    """What to add where some actuators reach the mode and others see it."""
    if not finding.split:
        return ""
    reach = ", ".join(symbol.actuators[i] for i in finding.split)
    return (
        f" The actuators that could move it ({reach}) hear none of the sensors that see it: let them use those sensors."
    )


def _helpful(symbol: Symbol, finding: Finding, weights: Mapping[str, complex]) -> tuple[str, ...]:
    """States whose measurement alone would make the unseen mode visible, at a phase where this can be decided
    exactly."""
    wave = {theta: wave for wave, theta in corners(len(finding.theta))}.get(finding.theta)
    if finding.cause != "not seen" or wave is None or (blocks := symbol.exact(wave)) is None:
        return tuple(weights) if finding.cause == "not seen" else ()
    A, _, C = blocks
    used = heard_by_any(symbol)
    helpful = []
    for k, name in enumerate(symbol.names):
        if name in weights:
            row = [Fraction(int(j == k)) for j in range(len(A))]
            basis, inner = unseen(A, [*(C[i] for i in used), row])
            if not basis or hurwitz(characteristic(inner)):
                helpful.append(name)
    return tuple(helpful)


def _edge_obstruction(network: Network, edge: Edge) -> tuple[Obstruction | None, int]:
    """A mode that lives on the outermost cells at an edge alone, exactly; and on how many cells (0: too many).

    A direction that is zero beyond a cell is a mode of the whole pattern if the cells beyond hear nothing of it, so
    what they hear counts as another sensor (and what they drive, as another actuator). In two and three dimensions the
    directions looked at repeat along the edge, with the same or the opposite sign from one unit to the next.
    """
    axis = edge.axis
    reach = max([abs(link.at[axis]) for link in network.links] + [abs(e.link.at[axis]) for e in edge.links], default=0)
    least = least_cells(edge)
    per_cell = sum(len(kind.states) for kind in network.cell_kinds)
    cells = max(least, min(least + 3, EDGE_STATES // per_cell))
    if cells * per_cell > MOST_EDGE_STATES:
        return None, 0
    if network.dimension == 1:
        whole = section_of(network, edge, cells + reach + 1)
        symbol, count = member_symbol(whole), _states_in(whole, cells * len(network.cell_kinds))
    else:
        whole = strip_of(network, edge, cells + reach + 1)
        symbol = symbol_of(whole)
        count = sum(len(kind.states) for kind in whole.kinds[: cells * len(network.cell_kinds)])
    for wave, theta in corners(network.dimension - 1):
        blocks = symbol.exact(wave)
        found = None if blocks is None else _living_on(symbol, blocks, count, theta)
        if found is not None:
            return _announced_at(edge, tuple(symbol.names[:count]), found), cells
    return None, cells


def _living_on(symbol: Symbol, blocks: tuple[Rows, Rows, Rows], count: int, theta: tuple[float, ...]) -> Finding | None:
    """A fixed mode on the first ``count`` states of which the others hear nothing (or which they do not drive)."""
    A, B, C = blocks
    outside = range(count, len(A))
    near = [row[:count] for row in A[:count]]
    sensed = [C[i][:count] for i in heard_by_any(symbol)] + [A[i][:count] for i in outside]
    driven = [[B[i][q] for i in range(count)] for q in range(len(symbol.actuators))]
    driven += [[A[i][j] for i in range(count)] for j in outside]
    tests = [(near, sensed, "not seen"), (transposed(near, count), driven, "not reached")]
    for matrix, rows, cause in tests:
        finding = next(exact_mode(matrix, rows, theta, cause), None)
        if finding is not None:
            return finding
    return None


def _announced_at(edge: Edge, names: tuple[str, ...], finding: Finding) -> Obstruction:
    """The obstruction at an edge with its advice."""
    weights = _weights(names, finding)
    alone = "moving alone" if not any(finding.theta) else "moving alone, every other one along it the opposite way"
    moving, how = several(tuple(weights)), f"the units at the {edge.side} edge {alone}"
    if finding.cause == "not reached":
        advice = not_reached(moving, how, finding.s)
    else:
        advice = not_seen(moving, how, finding.s) + f"Measure {several(tuple(weights))} in the units themselves."
    return Obstruction(finding.theta, finding.s, weights, finding.cause, advice)


def _states_in(network: Network, units: int) -> int:
    assert network.members is not None
    return sum(len(network.kinds[k].states) for k in network.members.kind[:units].tolist())


def _examine_rules(network: Network) -> Examination:
    """Wirings that obey the rules, each written by the kinds that move together: one with an obstruction is enough.

    Looked at are wirings in which every unit of a kind hears the same: no link of a class, or the most it may, from one
    of its sources, all of whose units move with it, or against it, or half of each.
    """
    kinds = network.kinds
    names = tuple(kind.name for kind in kinds)
    place = {name: i for i, name in enumerate(names)}
    options = [list(_intakes(network.links, rule.name, rule.most)) for rule in network.rules]
    count = 0
    for choice in itertools.islice(itertools.product(*options), MOST_WIRINGS):
        count += 1
        links = [(place[link.kind], place[link.source_kind], link) for intake in choice for link in intake[1]]
        symbol = stacked_symbol(network, kinds, names, links)
        finding = next(exact_findings(symbol, (), ()), None)
        if finding is not None:
            weights = _weights(symbol.names, finding)
            words = "; ".join(said for said, _ in choice)
            how = f"the units of each kind moving together, in a wiring that the rules allow ({words})"
            moving = " and ".join(weights)
            if finding.cause == "not reached":
                advice = not_reached(moving, how, finding.s)
            else:
                helpful = " or ".join(_helpful(symbol, finding, weights) or tuple(weights))
                advice = not_seen(moving, how, finding.s, f" (they read {', '.join(symbol.sensors)})") + (
                    f"Measure {helpful} in the units themselves, or forbid such wirings."
                )
            found = Obstruction((), finding.s, weights, finding.cause, advice + split_advice(symbol, finding))
            return Examination(found, f"{count} wirings that obey the rules, exactly")
    return Examination(None, f"{count} wirings that obey the rules, exactly, and no others")


def _intakes(links: tuple[Link, ...], rule: str, most: int) -> Iterator[tuple[str, list[Link]]]:
    """What a unit may hear by one rule: words, and the links of the quotient over kinds."""
    mine = [link for link in links if link.name == rule]
    own = sum((link.own_strength for link in mine), Fraction(0))
    itself = [link for link in mine if link.own_part]
    yield f"no {rule} link", []
    for link in mine:
        if link.own_part:
            continue
        signal = f"{link.source_kind}.{link.offer}"
        shares = [(Fraction(1), f"{most} x {signal}"), (Fraction(-1), f"{most} x {signal} moving oppositely")]
        if most % 2 == 0:
            shares.append((Fraction(0), f"{most} x {signal}, half of them moving oppositely"))
        for share, words in shares:
            # The own part stays as it is whoever is heard, so it is put back on the one source that is.
            heard = replace(link, strength=link.strength * share, own_strength=own, choice="")
            yield f"{rule}: {words}", [heard, *itself]

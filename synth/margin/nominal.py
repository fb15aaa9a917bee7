"""Where the network as declared breaks, description by description, and what is said where that has no one answer.

* pattern: roots of the symbol over all waves (exact.py).
* members: the rightmost mode of the whole closed loop.
* edge pattern: the bulk's symbol, and modes that live at the edge, found in sections (not proven).
* rules: every wiring cannot be tried. One regular wiring is: layers of units on a ring, each unit fed by as many of
  the layer before as its rules allow. Where that breaks, a wiring within the rules breaks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import islice, product
from math import inf

import numpy as np

from synth.base.errors import InputError
from synth.base.progress import Listener, silent
from synth.margin.coupling import CAP, CouplingLimit, Scaling
from synth.margin.exact import ExactLimit, Family, exact_limit, unjudged
from synth.margin.large import large_family
from synth.margin.roots import candidates, polished
from synth.margin.symbol import LoopFamily, loop_family
from synth.network.cuts import least_cells, section_of, strip_of
from synth.network.gains import Gains
from synth.network.layout import Edge
from synth.network.model import Link, Network

_STATES = 300  # of members, up to which the loop is kept dense
_LATE_STATES = 60  # the same with delays: each state stands for a dozen numbers
_WIRINGS = 16
_EDGE_STATES, _LATE_EDGE_STATES = 160, 60
_LOCAL = 1e-4  # share of a mode outside the half of the section at the edge
_RATIO = 1.1


def nominal_limits(
    scaling: Scaling, limit: CouplingLimit, width: float = 1e-3, progress: Listener = silent
) -> tuple[ExactLimit, ExactLimit]:
    """The exact limit with the declared constant delays and with every link fresh; the proof covers both below it.

    ``limit``: what is proven, so that nothing below has to be looked at again.
    """
    # As wired, parameters are at the middle of their tolerances and curves on their centre lines.
    scaling = replace(scaling, network=scaling.network.without_self_links())
    found = _LIMITS[scaling.network.description](scaling, limit, width, progress)
    if not any(link.weakens for link in scaling.links) or scaling.network.description == "rules":
        return found
    word = "links that may weaken stand at their full strength here; about any weakening only the class limit speaks."
    first, second = (replace(one, note=f"{one.note} {word}".strip()) for one in found)
    return first, second


def _pattern(scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener) -> tuple[ExactLimit, ExactLimit]:
    family = loop_family(scaling.network, scaling.gains, scaling.classes, scaling.own_parts)
    return _both(family, scaling, limit, width, progress)


def _both(
    family: LoopFamily, scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener
) -> tuple[ExactLimit, ExactLimit]:
    exact = _limit(family, scaling, limit, width, progress)
    if not family.delayed:
        return exact, exact
    return exact, _limit(family.without_delays(), scaling, limit, width, progress)


def _limit(family: Family, scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener) -> ExactLimit:
    start = max(1.0, min(limit.covered, 1e9)) if limit.nominal_proven else 1.0
    return exact_limit(family, start, max(CAP, 2 * start), width, scaling.unaffected, progress)


def _members(scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener) -> tuple[ExactLimit, ExactLimit]:
    network, members = scaling.network, scaling.network.members
    assert members is not None
    states = int(np.array([len(kind.states) for kind in network.kinds])[members.kind].sum())
    late = any(link.delay for link in network.links)
    choice = (scaling.gains, scaling.classes, scaling.own_parts)
    if states <= (_LATE_STATES if late else _STATES):
        found = _both(loop_family(network, *choice), scaling, limit, width, progress)
    else:
        try:
            fresh = _limit(large_family(network, *choice), scaling, limit, max(width, 1e-3), progress)
        except InputError as error:
            return unjudged(f"{error}"), unjudged(f"{error}")
        word = (
            f"with constant delays the modes of {states} states are not computed "
            f"(up to {_LATE_STATES} are); the limit with every link fresh is given beside it."
        )
        found = (unjudged(word) if late else fresh), fresh
    # A finite network has no waves.
    first, second = (replace(one, theta=None, wavelength=None) for one in found)
    return first, second


def _rules(scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener) -> tuple[ExactLimit, ExactLimit]:
    best: list[ExactLimit | None] = [None, None]
    for wiring in islice(regular_wirings(scaling.network), _WIRINGS):
        tried = replace(scaling, network=wiring)
        for i, one in enumerate(_pattern(tried, limit, max(width, 1e-3), progress)):
            before = best[i]
            if before is None or one.upper < before.upper:
                best[i] = one
    first, second = (_counterexample(one, limit) for one in best)
    return first, second


def _counterexample(one: ExactLimit | None, limit: CouplingLimit) -> ExactLimit:
    word = (
        "every wiring within the rules cannot be tried; tried was the regular one in which each unit is fed by as many "
        "units of the layer before as its rules allow, from the source that breaks first"
    )
    if one is None or one.upper == inf:
        return unjudged(f"{word}; it showed no failure, which says nothing about the others.")
    proven = limit.covered if limit.nominal_proven else 0.0
    return replace(
        one, lower=min(proven, one.upper), lower_certified=False, between_certified=False,
        about="a wiring within the rules", wavelength=None, theta=None,
        note=f"{word}. Some wiring breaks at {one.upper:.4g}; what breaks first is not known.",
    )  # fmt: skip


def regular_wirings(network: Network) -> list[Network]:
    """Wirings within the rules, as patterns of layers: per rule one of its sources, with the largest intake, one layer
    back. The symbol of the pattern is that of a ring of layers in which every unit hears a whole layer.
    """
    choices: dict[str, list[Link]] = {}
    for link in network.links:
        if link.choice:
            choices.setdefault(link.choice, []).append(link)
    others = [replace(link, at=(0,)) for link in network.links if not link.choice]
    found = []
    for picked in islice(product(*choices.values()), _WIRINGS):
        links = list(others)
        for link in picked:
            own = max((one.own_strength for one in choices[link.choice]), key=abs)
            links.append(replace(link, at=(-1,), choice="", weakens=False, own_strength=own))
        found.append(replace(network, description="pattern", dimension=1, rules=(), links=tuple(links)))
    return found


def _edges(scaling: Scaling, limit: CouplingLimit, width: float, progress: Listener) -> tuple[ExactLimit, ExactLimit]:
    bulk = _pattern(scaling, limit, width, progress)
    late = any(link.delay for link in scaling.links)
    found: list[ExactLimit] = []
    for one, fresh in zip(bulk, (False, True), strict=True):
        if fresh and not late:
            found.append(found[0])
            continue
        for edge in scaling.network.edges:
            progress(f"looking for modes at the {edge.side} edge")
            one = _with_edge(scaling, edge, one, limit, width, fresh)
        word = "modes at the edge were looked for in sections, which is a search and no proof."
        found.append(replace(one, note=f"{one.note} {word}".strip(), lower_certified=False, between_certified=False))
    return found[0], found[1]


@dataclass(frozen=True, eq=False)
class _Section:
    """The symbol of a section at an edge, and which cell every state belongs to (0: at the edge)."""

    family: LoopFamily
    cell: np.ndarray
    cells: int

    def grows(self, factor: float) -> complex | None:
        """The rightmost root whose mode lives at the edge, if it does not decay."""
        loop = self.family.at(factor)
        turns = any(np.any(t.at) for t in loop.terms)
        angles = np.linspace(0, np.pi, 13) if turns and loop.directions == 1 else np.array([0.0])
        worst: complex | None = None
        grid = angles if loop.directions == 1 else np.zeros((1, loop.directions))
        first = candidates(loop, grid, fine=False)[:, 0]
        doubt = 1e-2 if self.family.delayed else 1e-6  # with delays candidates are rough
        for theta in angles[first.real > -doubt * (1 + np.abs(first))]:
            where = float(theta) if loop.directions == 1 else (0.0,) * loop.directions
            for root in polished(loop, where, 6):
                if root.s.real < -1e-9 * (1 + abs(root.s)) or (worst is not None and root.s.real <= worst.real):
                    continue
                M = loop.matrix(np.array([where]), np.array([root.s]))[0]
                x = np.abs(np.linalg.svd(M)[2][-1][: len(self.cell)]) ** 2
                if x[self.cell >= self.cells / 2].sum() <= _LOCAL * x.sum():
                    worst = root.s
        return worst


def _section(scaling: Scaling, edge: Edge, fresh: bool) -> _Section | None:
    network = scaling.network
    most = _EDGE_STATES if fresh or not any(link.delay for link in scaling.links) else _LATE_EDGE_STATES
    per_cell = max(sum(len(kind.states) for kind in network.cell_kinds), 1)
    cells = min(24, most // per_cell)
    if cells < 2 * least_cells(edge) + 4:
        return None
    cut = section_of(network, edge, cells) if network.dimension == 1 else strip_of(network, edge, cells)
    family = loop_family(cut, scaling.gains if network.dimension == 1 else _renamed(scaling, cut), scaling.classes,
                         scaling.own_parts)  # fmt: skip
    kinds = [cut.kinds[k] for k in cut.members.kind.tolist()] if cut.members is not None else list(cut.kinds)
    slots = len(network.cell_kinds)
    cell = np.concatenate([np.full(len(kind.states), n // slots) for n, kind in enumerate(kinds)])
    return _Section(family.without_delays() if fresh else family, cell, cells)


def _renamed(scaling: Scaling, cut: Network) -> Gains:
    """The gains of a strip, whose kinds are the units of the section under names of their own."""
    groups = {kind.group: kind.name for kind in scaling.network.kinds}
    return Gains(tuple(replace(scaling.gains[groups[kind.group]], kind=kind.name) for kind in cut.kinds))


def _with_edge(
    scaling: Scaling, edge: Edge, bulk: ExactLimit, limit: CouplingLimit, width: float, fresh: bool
) -> ExactLimit:
    section = _section(scaling, edge, fresh)
    if section is None:
        word = f"no section of the {edge.side} edge was small enough to look for its modes."
        return replace(bulk, note=f"{bulk.note} {word}".strip())
    top = bulk.upper if bulk.upper < inf else bulk.cap
    low = max(1.0, limit.covered) if limit.nominal_proven else 1.0
    if section.grows(low) is not None:
        return replace(
            bulk, lower=0.0, upper=low, nominal_stable=False, theta=None, wavelength=None, upper_certified=False,
            frequency=abs((section.grows(low) or 0j).imag), about=f"a mode at the {edge.side} edge",
            note=f"a mode at the {edge.side} edge does not decay at {low:.4g} times today's strength.",
        )  # fmt: skip
    high = low
    while high < top:
        low, high = high, min(high * _RATIO, top)
        if section.grows(high) is not None:
            break
    else:
        return bulk
    while high - low > width / 4 * high:
        middle = (low + high) / 2
        low, high = (low, middle) if section.grows(middle) is not None else (middle, high)
    if high >= bulk.lower:
        return bulk
    return replace(
        bulk, lower=low, upper=high, theta=None, wavelength=None, frequency=abs((section.grows(high) or 0j).imag),
        capped=False, upper_certified=False, about=f"a mode at the {edge.side} edge",
        note=f"a mode at the {edge.side} edge, found in a section of {section.cells} cells.",
    )  # fmt: skip


_LIMITS = {"pattern": _pattern, "members": _members, "rules": _rules, "edge pattern": _edges}

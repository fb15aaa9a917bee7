"""From a one-way string of units to the transfer functions of one hop, exactly, dead times included.

A unit hears one other unit only, its predecessor. The *hop signal* is what it hears: one offer of the predecessor, the
same in every kind (speed, say). Other offers that are heard must be derivatives of it, or sums of such, on the
predecessor's side before its command enters (acceleration by radio); the weights of that sum may depend on the
predecessor's kind, and only then does a hop depend on the pair (predecessor, follower) and not on the follower alone.
A derivative that is heard is removed by moving the states, x^ = x - D v^(j-1)(t - delay), which changes no transfer.

With dead times x' = A x + B u(t - dead) + D v + E w and sensor q read ``sensing[q]`` seconds late, the own part of a
relative link fresh. A link's ``delay`` is taken as constant and as long as declared; this is narrower than the peak
route, where it may be anything up to it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.strings.dead_time import DelayLoop
from synth.network.gains import Gains
from synth.network.model import Kind, Link, Network
from synth.network.rational import reduced

_ZERO = Fraction(0)
_FURTHEST = 4  # derivatives of the hop signal that are looked for


@dataclass(frozen=True)
class HopLoop:
    """One follower behind one sort of predecessor.

    ``loop``: inlet = the predecessor's hop signal, outlets ``hop`` (the unit's own hop signal) and ``gap_error`` where
    there is one; ``disturbances``: name -> the same loop with that inlet; ``kind``, ``after``: follower, predecessor.
    """

    kind: str
    after: str
    loop: DelayLoop
    disturbances: Mapping[str, DelayLoop]


def hop_loops(
    network: Network,
    gains: Gains,
    gap_error: str | None = None,
    dead_time: Fraction = _ZERO,
    sensing: Mapping[str, Fraction] | None = None,
    any_order: bool = False,
) -> tuple[str, tuple[HopLoop, ...]]:
    """The hop signal's name, and one loop per pair that occurs (in the order of the cell, or in ``any_order``).

    ``gap_error`` names an offer of every kind that no link reads. Raises InputError where the network is no one-way
    string, where kinds hear different signals, and where something is declared that this route does not honour.
    """
    network.refuse_beyond_fixed_links("the hop route")
    before, signal = _predecessors(network)
    closed = {
        kind.name: _Closed(kind, network.links, gains, dead_time, dict(sensing or {}), signal)
        for kind in network.cell_kinds
    }
    error = gap_error if gap_error is not None else _gap_error_of(network, signal)
    weights = {name: unit.weights(network.links) for name, unit in closed.items()}
    pairs = [(after, name) for name in closed for after in (closed if any_order else (before[name],))]
    found: list[HopLoop] = []
    for after, name in pairs:
        loop = _pair(closed[name], network, weights[after], error)
        twin = next((hop for hop in found if hop.kind == name and hop.loop == loop), None)
        if twin is not None:  # the follower's hop does not depend on whom it follows
            found[found.index(twin)] = HopLoop(name, "any kind", twin.loop, twin.disturbances)
            continue
        dist = {
            w.name: closed[name].loop.fed({_ZERO: closed[name].kind.E.column(i)})
            for i, w in enumerate(closed[name].kind.disturbances)
        }
        found.append(HopLoop(name, after, loop, dist))
    return signal, tuple(found)


def _predecessors(network: Network) -> tuple[dict[str, str], str]:
    """Which kind each kind of the cell hears, and the offer that all of them hear first."""
    if network.dimension != 1:
        raise InputError(f"the hop route is about strings; this pattern has {network.dimension} dimensions.")
    for link in network.links:
        if link.sort != "link":
            raise InputError(
                "the hop route does not honour tolerances and nonlinear terms; write the plain number, and bear in "
                "mind that no result is then about them."
            )
    names = [kind.name for kind in network.cell_kinds]
    before: dict[str, str] = {}
    steps: set[int] = set()
    for name in names:
        heard = {(link.source_kind, link.at[0]) for link in network.links if link.kind == name and not link.own_part}
        if len(heard) != 1:
            what = "nobody" if not heard else f"{len(heard)} other units"
            raise InputError(
                f"a {name} hears {what}; the hop route needs a one-way string, in which every unit hears exactly one "
                "other unit."
            )
        before[name], at = heard.pop()
        steps.add(at)
    if (0 in steps and len(names) == 1) or not (steps <= {0, -1} or steps <= {0, 1}):
        raise InputError("the hop route needs links that reach to the next unit in one direction (at: -1, or at: 1).")
    here, seen = names[0], []
    for _ in names:
        seen.append(here)
        here = before[here]
    if sorted(seen) != sorted(names) or here != names[0]:
        raise InputError("the units of the cell do not follow one another in one line, which the hop route needs.")
    return before, _signal(network)


def _signal(network: Network) -> str:
    """The offer from which every other heard offer is derived: heard by all, and first in the kinds' own order."""
    heard = [{link.offer for link in network.links if link.kind == kind.name} for kind in network.cell_kinds]
    everywhere = set.union(*heard)
    for kind in network.cell_kinds:
        missing = sorted(everywhere - {offer.name for offer in kind.offers})
        if missing:
            raise InputError(
                f"kind {kind.name!r} does not offer {missing[0]!r}, which units of the string hear; for the hop route "
                "every kind must offer the same signals, so that any of them can be followed."
            )
    first = network.cell_kinds[0]
    for offer in sorted(everywhere, key=lambda name: first.index("offers", name)):
        chains = [_chain(kind, offer) for kind in network.cell_kinds]
        if all(
            _weights(chain, kind.H.row(kind.index("offers", other))) is not None
            for kind, chain in zip(network.cell_kinds, chains, strict=True)
            for other in everywhere
        ):
            return offer
    raise InputError(
        f"units of the string hear {', '.join(sorted(everywhere))}, which are not all derivatives of one signal on the "
        "side of the unit that offers them; the hop route needs one signal per hop (a command or a message that is "
        "computed is not one)."
    )


def _chain(kind: Kind, offer: str) -> list[ExactMatrix]:
    """Rows that read the offer and its derivatives as long as neither commands nor taken signals enter them."""
    k = kind.index("offers", offer)
    row = kind.H.row(k)
    if any(kind.F.rows[k]) or any(kind.Fw.rows[k]) or (kind.Fu is not None and any(kind.Fu.rows[k])):
        raise InputError(f"offer {offer!r} of {kind.name!r} has feed-through, which the hop route does not take.")
    rows = [row]
    for _ in range(_FURTHEST):
        if any((row @ kind.B).rows[0]) or any((row @ kind.D).rows[0]):
            break
        row = row @ kind.A
        rows.append(row)
    return rows


def _weights(chain: Sequence[ExactMatrix], row: ExactMatrix) -> tuple[Fraction, ...] | None:
    """Numbers c with row = sum_j c_j chain_j, or None; the shortest such sum."""
    for count in range(1, len(chain) + 1):
        rows = [[*(chain[j][0, i] for j in range(count)), row[0, i]] for i in range(row.shape[1])]
        table, pivots = reduced(rows, count + 1)
        if count in pivots:
            continue
        weights = [_ZERO] * count
        for line, pivot in zip(table, pivots, strict=True):
            weights[pivot] = line[-1]
        return tuple(weights)
    return None


def _gap_error_of(network: Network, signal: str) -> str | None:
    """The offer no link reads, where all kinds have the same single one."""
    read = {link.offer for link in network.links}
    unread = [
        {o.name for k, o in enumerate(kind.offers) if o.name not in read and not any(kind.F.rows[k])}
        for kind in network.cell_kinds
    ]
    shared = set.intersection(*unread) - {signal}
    return shared.pop() if len(shared) == 1 else None


class _Closed:
    """A kind with its loop closed, commands and readings late by constant dead times."""

    def __init__(
        self,
        kind: Kind,
        links: tuple[Link, ...],
        gains: Gains,
        dead_time: Fraction,
        sensing: dict[str, Fraction],
        signal: str,
    ) -> None:
        if kind.name not in gains:
            raise InputError(f"the gains have no entry for kind {kind.name!r}; every kind of the string needs one.")
        for name in sensing:
            if name not in {s.name for s in kind.sensors}:
                raise InputError(f"{kind.name!r} has no sensor {name!r} that could be late.")
        self.kind, self.signal = kind, signal
        n, takes = len(kind.states), len(kind.takes)
        K = gains[kind.name].K
        A: dict[Fraction, ExactMatrix] = {_ZERO: kind.A}
        self.inlets: dict[Fraction, ExactMatrix] = {_ZERO: kind.D}
        for q, sensor in enumerate(kind.sensors):
            late = dead_time + sensing.get(sensor.name, _ZERO)
            drive = kind.B @ K.column(q)
            A[late] = A.get(late, ExactMatrix.zeros(n, n)) + drive @ kind.C.row(q)
            self.inlets[late] = self.inlets.get(late, ExactMatrix.zeros(n, takes)) + drive @ kind.N.row(q)
        for link in links:
            if link.kind == kind.name and link.relative:
                take, offer = kind.index("takes", link.take), kind.index("offers", link.offer)
                own = kind.H.row(offer).scaled(link.own_strength)
                for late, D in self.inlets.items():
                    A[late] = A.get(late, ExactMatrix.zeros(n, n)) - D.column(take) @ own
        self.A = {late: m for late, m in A.items() if late == 0 or any(any(row) for row in m.rows)}
        self.loop = DelayLoop(self.A, {_ZERO: ExactMatrix.zeros(n, 1)}, {"hop": self.row(signal)})

    def row(self, offer: str) -> ExactMatrix:
        """The row that reads an offer."""
        names = [o.name for o in self.kind.offers]
        if offer not in names:
            raise InputError(f"kind {self.kind.name!r} has no offer {offer!r}; known are {', '.join(names)}.")
        k = names.index(offer)
        fed = any(self.kind.F.rows[k]) or (self.kind.Fu is not None and any(self.kind.Fu.rows[k]))
        if fed or any(self.kind.Fw.rows[k]):
            raise InputError(f"offer {offer!r} of {self.kind.name!r} has feed-through, which the hop route cannot use.")
        return self.kind.H.row(k)

    def weights(self, links: tuple[Link, ...]) -> dict[str, tuple[Fraction, ...]]:
        """Every heard offer of this kind as weights on the hop signal and its derivatives."""
        chain = _chain(self.kind, self.signal)
        found = {}
        for offer in {link.offer for link in links}:
            weights = _weights(chain, self.kind.H.row(self.kind.index("offers", offer)))
            if weights is not None:
                found[offer] = weights
        return found


def _pair(unit: _Closed, network: Network, weights: dict[str, tuple[Fraction, ...]], error: str | None) -> DelayLoop:
    """The follower behind a predecessor whose offers are these ``weights`` on its hop signal's derivatives."""
    n = len(unit.kind.states)
    columns: list[dict[Fraction, ExactMatrix]] = []
    for link in network.links:
        if link.kind != unit.kind.name or link.own_part:
            continue
        take = unit.kind.index("takes", link.take)
        for j, weight in enumerate(weights[link.offer]):
            columns += [{} for _ in range(j + 1 - len(columns))]
            for late, D in unit.inlets.items():
                _add(columns[j], late + link.delay, D.column(take).scaled(link.strength * weight))
    outlets = {"hop": unit.row(unit.signal)}
    if error is not None:
        outlets["gap_error"] = unit.row(error)
    through: dict[str, dict[Fraction, Fraction]] = {}
    for j in range(len(columns) - 1, 0, -1):
        for late, column in columns[j].items():
            for name, row in outlets.items():
                value = (row @ column)[0, 0]
                if value and j > 1:
                    raise InputError(f"a derivative of what is heard appears in {name!r}; the hop would not be finite.")
                if value:
                    through.setdefault(name, {})[late] = through.get(name, {}).get(late, _ZERO) + value
            for b, A in unit.A.items():
                _add(columns[j - 1], late + b, A @ column)
    inlet = columns[0] if columns and columns[0] else {_ZERO: ExactMatrix.zeros(n, 1)}
    return DelayLoop(unit.A, inlet, outlets, through)


def _add(table: dict[Fraction, ExactMatrix], late: Fraction, column: ExactMatrix) -> None:
    if any(row[0] for row in column.rows):
        table[late] = table[late] + column if late in table else column

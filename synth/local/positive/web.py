"""A network as arrays for the positive route (theory of positive systems), and whether the route takes it at all.

Units that have the same kind and the same own parts of relative links are one ``group``: everything local is worked
out once per group. ``K`` acts on states through sensors that read one state each, so column q of A + B K C depends on
the entries of K that read state q and on nothing else; the whole route rests on that.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.local.plant import allowed_entries
from synth.network.model import Kind, Link, Network

Array = NDArray[np.float64]
Index = NDArray[np.intp]
Row = tuple[Fraction, ...]


@dataclass(frozen=True)
class Entry:
    """One gain that may be chosen: actuator row, sensor column, the state it reads, the sensor's factor, its bound.

    u = K y with y = factor * x_state; ``bound`` in (actuator unit)/(sensor unit), None where nothing bounds it.
    """

    actuator: int
    sensor: int
    state: int
    factor: Fraction
    bound: Fraction | None


@dataclass(frozen=True)
class Group:
    """Units of one kind with equal own parts; ``A`` is exact with the own parts of relative links folded in."""

    kind: int
    A: tuple[Row, ...]


@dataclass(frozen=True, eq=False)
class Web:
    """The network as arrays: N units in groups, and the terms |strength| from offers of units to takes of units.

    ``terms``: columns to-unit, take, source-unit, offer, link number (rows of integers). A pattern has one unit per
    kind of its cell (the quotient), which stands for every number of units.
    """

    network: Network
    groups: tuple[Group, ...]
    group: Index
    terms: Index
    entries: tuple[tuple[Entry, ...], ...]  # per kind

    @cached_property
    def kind_of(self) -> Index:
        """Kind number of every unit."""
        return np.array([g.kind for g in self.groups], dtype=np.intp)[self.group]

    @cached_property
    def offers_at(self) -> Index:
        """Number of the first outlet of every unit, and the number of outlets at the end."""
        return self._starts([len(k.offers) for k in self.network.kinds])

    @cached_property
    def states_at(self) -> Index:
        """Number of the first state of every unit, and the number of states at the end."""
        return self._starts([len(k.states) for k in self.network.kinds])

    def _starts(self, counts: list[int]) -> Index:
        return np.concatenate(([0], np.cumsum(np.array(counts, dtype=np.intp)[self.kind_of])))

    @cached_property
    def strengths(self) -> Array:
        """|strength| of every link of the network, to the nearest double."""
        return np.array([float(abs(link.strength)) for link in self.network.links], dtype=float)

    def units_of(self, kind: int) -> Index:
        """Numbers of the units of a kind."""
        return np.flatnonzero(self.kind_of == kind)

    def open_floats(self, kind: int) -> Array:
        """Matrices A of the units of a kind, as in ``units_of``: (units, n, n), nearest doubles."""
        n, mine = len(self.network.kinds[kind].states), self.units_of(kind)
        table = [[[float(v) for v in row] for row in self.groups[self.group[i]].A] for i in mine]
        return np.array(table, dtype=float).reshape(len(mine), n, n)


@dataclass(frozen=True)
class Positivity:
    """Whether gains can make every closed unit positive, and if not, one sentence per reason."""

    possible: bool
    reasons: tuple[str, ...]


def positivity(network: Network, kmax: float | Fraction | None = None) -> Positivity:
    """Whether the positive route takes ``network``: gains within their bounds make every closed unit positive.

    A closed unit x' = A_c x + D v, z = H x is positive if A_c is Metzler (no negative entry off the diagonal) and every
    column of D and row of H has one sign (turning the sign of a take or an offer changes no gain). ``kmax`` as for
    ``positive_design``. Exact; whether a Hurwitz choice exists as well is found by the design.
    """
    try:
        web = web_of(network, kmax)
    except InputError as error:
        return Positivity(False, tuple(problem.sentence for problem in error.problems))
    return Positivity(True, ()) if web else Positivity(False, ("the network has no units",))


def web_of(network: Network, kmax: float | Fraction | None = None) -> Web:
    """The arrays of a pattern or of members; InputError with every reason why the positive route does not take it."""
    if not isinstance(network, Network):
        raise InputError(
            f"the positive route needs a network, not {type(network).__name__}; read one: synth.read(path)."
        )
    network.refuse_beyond("the positive route", "pattern", "members")
    most = None if kmax is None else Fraction(kmax)
    if most is not None and most <= 0:
        raise InputError(f"kmax must be above zero, not {float(most):g}.")
    refuse_shared_gains(network, "the positive route")
    entries = tuple(_entries(kind, network, most) for kind in network.kinds)
    reasons = [reason for kind in network.kinds for reason in _kind_reasons(kind)]
    reasons += [
        f"link {link.name!r} may weaken or is an alternative; the positive route takes links of fixed strength"
        for link in network.links
        if link.weakens or link.choice
    ]
    if not reasons:
        groups, group, terms = _pattern(network) if network.members is None else _members(network)
        web = Web(network, groups, group, terms, entries)
        for g in groups:
            reason = _group_reason(network.kinds[g.kind], g, entries[g.kind])
            if reason and reason not in reasons:
                reasons.append(reason)
        if not reasons:
            return web
    listed = "; ".join(reasons[:5]) + (f"; and {len(reasons) - 5} more" if len(reasons) > 5 else "")
    raise InputError(
        f"no gains make every closed unit positive: {listed}. Use the general design instead: synth design."
    )


def refuse_shared_gains(network: Network, stage: str) -> None:
    """Raise InputError where kinds carry one gain set together, or the goal has another aim than the radius."""
    for name, kinds in network.gain_groups().items():
        if len(kinds) > 1:
            raise InputError(
                f"{', '.join(kinds[:4])} carry one gain set together ({name}), and {stage} picks gains for each kind; "
                "give each its own under design.gains."
            )
    if network.goal.aim != "radius":
        raise InputError(f"the aim is {network.goal.aim!r}, and {stage} makes the radius small; use synth design.")


def _entries(kind: Kind, network: Network, most: Fraction | None) -> tuple[Entry, ...]:
    """Gains that may be chosen: allowed ones whose sensor reads one state and no link."""
    allowed = allowed_entries(kind, network.goal)
    bounds = network.goal.gain_bounds.get(kind.name, {})
    found = []
    for i, actuator in enumerate(kind.inputs):
        for j, sensor in enumerate(kind.sensors):
            read = [q for q, value in enumerate(kind.C.rows[j]) if value]
            if not allowed[i, j] or len(read) != 1 or any(kind.N.rows[j]):
                continue
            given = [v for v in (bounds.get(actuator.name, {}).get(sensor.name), most) if v is not None]
            found.append(Entry(i, j, read[0], kind.C.rows[j][read[0]], min(given) if given else None))
    return tuple(found)


def _kind_reasons(kind: Kind) -> list[str]:
    reasons = []
    if any(any(row) for X in (kind.F, kind.Fw, kind.Fu) if X is not None for row in X.rows):
        reasons.append(f"{kind.name} offers a signal with feed-through")
    for take, column in zip(kind.takes, kind.D.T.rows, strict=True):
        if min(column, default=0) < 0 < max(column, default=0):
            reasons.append(f"{kind.name}.{take.name} pushes its states in both directions")
    for offer, row in zip(kind.offers, kind.H.rows, strict=True):
        if min(row, default=0) < 0 < max(row, default=0):
            reasons.append(f"{kind.name}.{offer.name} is a difference of states")
    return reasons


def _group_reason(kind: Kind, group: Group, entries: tuple[Entry, ...]) -> str | None:
    """Why no gains make this unit Metzler (one actuator: exactly; several: by the reach of the bounds)."""
    for q in range(len(kind.states)):
        mine = [e for e in entries if e.state == q]
        for r in range(len(kind.states)):
            value = group.A[r][q]
            if r == q or value >= 0:
                continue
            reach = [(kind.B[r, e.actuator] * e.factor, e.bound) for e in mine if kind.B[r, e.actuator]]
            free = any(bound is None for _, bound in reach)
            if not free and sum((abs(b) * bound for b, bound in reach if bound is not None), Fraction(0)) < -value:
                return (
                    f"in {kind.name}, {kind.states[q].name} pulls {kind.states[r].name} down "
                    f"({float(value):g}) and no gain within its bound makes up for it"
                )
        if len({e.actuator for e in mine}) == 1:
            low, high = interval(kind, [row[q] for row in group.A], mine, q)
            if low is not None and high is not None and low > high:
                return (
                    f"in {kind.name}, no gain from {kind.states[q].name} keeps all other states from being pulled down"
                )
    return None


def interval(kind: Kind, column: list[Fraction], mine: list[Entry], q: int) -> tuple[Fraction | None, Fraction | None]:
    """Exact ends of kappa = sum K factor over the entries that read state q, all of one actuator (None: no end).

    ``column`` is column q of A, with what other actuators do to it.
    """
    u = mine[0].actuator
    bounds = [None if e.bound is None else e.bound * abs(e.factor) for e in mine]
    reach = None if any(b is None for b in bounds) else sum((b for b in bounds if b is not None), Fraction(0))
    low, high = (None, None) if reach is None else (-reach, reach)
    for r in range(len(kind.states)):
        b = kind.B[r, u]
        if r == q or not b:
            continue
        end = -column[r] / b
        if b > 0:
            low = end if low is None else max(low, end)
        else:
            high = end if high is None else min(high, end)
    return low, high


def _folder(kind: Kind) -> dict[tuple[int, int], list[tuple[int, int, Fraction]]]:
    """Non-zero entries of D_l H_k for every take and offer, filled when asked for."""
    found = {}
    for take in range(len(kind.takes)):
        for offer in range(len(kind.offers)):
            found[take, offer] = [
                (r, c, kind.D[r, take] * kind.H[offer, c])
                for r in range(len(kind.states))
                for c in range(len(kind.states))
                if kind.D[r, take] and kind.H[offer, c]
            ]
    return found


def _folded(
    kind: Kind, outer: dict[tuple[int, int], list[tuple[int, int, Fraction]]], own: list[tuple[int, int, Fraction]]
) -> tuple[Row, ...]:
    """A with own parts (take, offer, strength) folded in, exactly (as synth.gain.closed with K = 0)."""
    rows = [list(row) for row in kind.A.rows]
    for take, offer, strength in own:
        for r, c, value in outer[take, offer]:
            rows[r][c] -= value * strength
    return tuple(tuple(row) for row in rows)


def _ends(network: Network) -> list[tuple[int, int, int, int]]:
    """Per link: kind, take, source kind, offer, as numbers."""
    place = {kind.name: i for i, kind in enumerate(network.kinds)}
    return [
        (
            place[link.kind], network.kinds[place[link.kind]].index("takes", link.take),
            place[link.source_kind], network.kinds[place[link.source_kind]].index("offers", link.offer),
        )
        for link in network.links
    ]  # fmt: skip


def _own(link: Link, ends: tuple[int, int, int, int], kind: Kind) -> tuple[int, int, Fraction]:
    """The own part of a relative link: the unit subtracts its own offer of the same name."""
    return ends[1], kind.index("offers", link.offer), link.own_strength


def _pattern(network: Network) -> tuple[tuple[Group, ...], Index, Index]:
    ends = _ends(network)
    groups = []
    for i, kind in enumerate(network.kinds):
        own = [
            _own(link, end, kind)
            for link, end in zip(network.links, ends, strict=True)
            if end[0] == i and link.relative
        ]
        groups.append(Group(i, _folded(kind, _folder(kind), own)))
    rows = [
        (to, take, source, offer, k)
        for k, (to, take, source, offer) in enumerate(ends)
        if network.links[k].strength
    ]  # fmt: skip
    return tuple(groups), np.arange(len(groups)), np.array(rows, dtype=np.intp).reshape(len(rows), 5)


def _members(network: Network) -> tuple[tuple[Group, ...], Index, Index]:
    members = network.members
    assert members is not None
    ends = _ends(network)
    to, source, number = members.expanded()
    owns: list[list[int]] = [[] for _ in members.names]
    relative = np.array([link.relative for link in network.links], dtype=bool)
    if len(number):
        for i, k in zip(*(a[relative[number]].tolist() for a in (to, number)), strict=True):
            owns[i].append(k)
    outer = [_folder(kind) for kind in network.kinds]
    known: dict[tuple[int, ...], int] = {}
    groups: list[Group] = []
    group = np.empty(len(owns), dtype=np.intp)
    for i, (kind, own) in enumerate(zip(members.kind.tolist(), owns, strict=True)):
        own.sort()
        key = (kind, *own)
        if key not in known:
            known[key] = len(groups)
            parts = [_own(network.links[k], ends[k], network.kinds[kind]) for k in own]
            groups.append(Group(kind, _folded(network.kinds[kind], outer[kind], parts)))
        group[i] = known[key]
    live = np.array([link.strength != 0 for link in network.links], dtype=bool)
    keep = (source >= 0) & live[number] if len(number) else np.zeros(0, dtype=bool)
    table = np.array(ends, dtype=np.intp).reshape(len(ends), 4)
    used = number[keep]
    terms = np.stack([to[keep], table[used, 1], source[keep], table[used, 3], used], axis=1).astype(np.intp)
    return tuple(groups), group, terms

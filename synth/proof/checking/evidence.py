"""What the file offers as help, verified before it is used; and what may be derived with it."""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from synth.proof.checking.arithmetic import definite, mul, transpose
from synth.proof.checking.reading import MANY, Matrix, Row, fields, items, matrix, need, number, positive
from synth.proof.checking.units import Line, Unit
from synth.proof.checking.wiring import System


@dataclass
class Derived:
    """Bounds derived from model, gains and evidence: what a certificate may state.

    ``base``, ``unit``, ``start`` hold for every line of every kind the largest peak in any unit of the kind: under the
    declared disturbances, under disturbances of size one, and per unit of initial size; ``radius`` is (lower, upper).
    """

    lines: list[Line] = field(default_factory=list)
    base: Row = field(default_factory=list)
    unit: Row = field(default_factory=list)
    start: Row = field(default_factory=list)
    radius: tuple[Fraction, Fraction] = (Fraction(0), Fraction(0))
    C: Fraction = Fraction(0)
    G: Fraction = Fraction(0)

    def room(self, peaks: Row, per: Row) -> Fraction | None:
        """The number every accepted factor must stay below so that peaks + factor * per < limit (None: no bound)."""
        found = [
            (line.limit - b) / p
            for line, b, p in zip(self.lines, peaks, per, strict=True)
            if line.limit is not None and p
        ]
        return min(found, default=None)


@dataclass
class Evidence:
    """What the file offers for one closed unit: P, decay a, and on the storage route the multipliers tau and tau_w."""

    P: Matrix
    a: Fraction
    tau: Row
    tau_w: Row


def verified(entry: dict[str, Any], unit: Unit, storage: bool) -> Evidence:
    """One entry of the evidence; P > 0 and the decay inequality are verified here, exactly and strictly."""
    n, where = len(unit.A), f"the evidence of {unit.name}"
    P, a = matrix(entry["P"], n, n, where), positive(entry["a"], where)
    tau, tau_w = ([positive(v, where) for v in items(entry[key], where)] for key in ("tau", "tau_w"))
    need(len(tau) == (len(unit.takes) if storage else 0), f"{where}: wrong number of tau")
    need(len(tau_w) == (len(unit.disturbances) if storage else 0), f"{where}: wrong number of tau_w")
    need(transpose(P) == P and definite(P), f"{where}: P is not symmetric and positive definite")
    PA = mul(P, unit.A, n)
    S = [[-(PA[i][j] + PA[j][i] + 2 * a * P[i][j]) for j in range(n)] for i in range(n)]
    if storage:  # (S), negated: [[S, -PD, -PE], [., diag(tau), 0], [., ., diag(tau_w)]] > 0
        sides = [[*d, *e] for d, e in zip(unit.D, unit.E, strict=True)]
        corner, side = [*tau, *tau_w], mul(P, sides, len(tau) + len(tau_w))
        S = [row + [-v for v in side[i]] for i, row in enumerate(S)]
        S += [
            [-side[i][k] for i in range(n)] + [t if k == j else Fraction(0) for j in range(len(corner))]
            for k, t in enumerate(corner)
        ]
    need(definite(S), f"{where}: the decay inequality does not hold strictly")
    return Evidence(P, a, tau, tau_w)


def read_evidence(document: dict[str, Any], units: list[Unit]) -> list[Evidence]:
    """The evidence, closed unit by closed unit, each known by its kind and by what is folded in."""
    keys = "kind own P a tau tau_w"
    entries = [fields(e, keys, "evidence") for e in items(document["evidence"], "evidence", MANY)]
    need([e["kind"] for e in entries] == [u.name for u in units], "evidence must be given for every unit, in order")
    for entry, unit in zip(entries, units, strict=True):
        own = [fields(x, "take offer strength", "own") for x in items(entry["own"], "own")]
        names = [line.signal for line in unit.lines if line.role == "offer"]
        stated = [(x["take"], x["offer"], number(x["strength"], "own")) for x in own]
        folded = [(unit.takes[take], names[offer], strength) for take, offer, strength in unit.own]
        need(stated == folded, f"the evidence of {unit.name} is for a unit with other own parts")
    storage = document["route"] == "storage"
    return [verified(entry, unit, storage) for entry, unit in zip(entries, units, strict=True)]


def read_point(document: dict[str, Any], names: list[str], fast: bool = False) -> tuple[Row, ...]:
    """The point of strict decay s > 0, the point low >= 0 that bounds the radius from below, with ``fast`` one more.

    The third, also positive, is a point of strict decay of the operator that is weighted with the claimed rate; its
    entries should not differ much, for the constant C contains their spread.
    """
    keys = "of s low" + " fast" * fast
    entries = [fields(e, keys, "point") for e in items(document["point"], "point", MANY)]
    need([e["of"] for e in entries] == names, "the point must name every row of the gain operator, in order")
    s, low = [positive(e["s"], "point") for e in entries], [number(e["low"], "point") for e in entries]
    need(all(v >= 0 for v in low), "the lower point has a negative entry")
    return (s, low, [positive(e["fast"], "point") for e in entries]) if fast else (s, low)


def arriving(system: System, station: int, case: int, sizes: list[Row], growth: dict[Fraction, Fraction]) -> Row:
    """What may arrive at every take of a station when offer k of station j stays within sizes[j][k].

    ``growth`` has e^{alpha delay} for every delay. Of terms with one group only the largest counts.
    """
    found = [Fraction(0)] * len(system.unit(system.stations[station]).takes)
    largest: dict[tuple[int, int], Fraction] = {}
    for term in system.stations[station].cases[case]:
        value = term.gain * growth[term.delay] * sizes[term.source][term.offer]
        if term.group < 0:
            found[term.take] += value
        else:
            key = term.group, term.take
            largest[key] = max(value, largest.get(key, value))
    for (_, take), value in largest.items():
        found[take] += value
    return found


def delays(system: System) -> set[Fraction]:
    """Every delay that occurs."""
    return {term.delay for station in system.stations for case in station.cases for term in case}


def by_kind(system: System, peaks: list[Row]) -> Row:
    """For every line of every kind, in the order of the model, the largest over the stations of that kind."""
    most: dict[str, Row] = {}
    for station, row in zip(system.stations, peaks, strict=True):
        name = system.unit(station).name
        most[name] = [max(pair) for pair in zip(most[name], row, strict=True)] if name in most else row
    return [value for name in system.plants for value in most[name]]


def all_lines(system: System) -> list[Line]:
    """The lines of every kind, in the order of the model."""
    first: dict[str, list[Line]] = {}
    for unit in system.units:
        first.setdefault(unit.name, unit.lines)
    return [line for name in system.plants for line in first[name]]


def sweeps(size: int) -> int:
    """How often a bound is lowered by applying the operator again: fewer times where that costs much."""
    return max(3, min(60, 12_000 // max(size, 1)))


def settled_already(before: Row, after: Row) -> bool:
    """Whether lowering once more is not worth it: no bound fell by more than a ten millionth."""
    return all(new >= old * (1 - Fraction(1, 10**7)) for old, new in zip(before, after, strict=True))

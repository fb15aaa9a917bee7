"""The storage route: r = |x|_P of every unit obeys root-sum-square rows (theory 3b, (6)-(8), 3c)."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

from synth.proof.checking.arithmetic import apply, exp_above, root, solve
from synth.proof.checking.evidence import (
    Derived,
    Evidence,
    all_lines,
    arriving,
    by_kind,
    delays,
    read_evidence,
    read_point,
    settled_already,
    sweeps,
)
from synth.proof.checking.reading import Row, fields, need, positive
from synth.proof.checking.wiring import System


class Storage:
    """The gain operator of the storage route, one row per station: r = |x|_P obeys (6), and |z| <= zeta r.

    (r^2)' <= -2a r^2 + sum tau (what arrives)^2 + sum tau_w w^2, where neighbour j adds g zeta_j r_j.
    """

    def __init__(self, system: System, evidence: list[Evidence]) -> None:
        """Keep the parts, and the square of the least zeta of every line: line P^-1 line'."""
        self.system, self.evidence = system, evidence
        eyes = [[[Fraction(i == j) for j in range(len(e.P))] for i in range(len(e.P))] for e in evidence]
        inverses = [solve(e.P, eye) for e, eye in zip(evidence, eyes, strict=True)]
        self.square = [
            [sum(map(Fraction.__mul__, x.x, apply(V, x.x)), Fraction(0)) for x in unit.lines]
            for unit, V in zip(system.units, inverses, strict=True)
        ]
        self.zeta = [[root(q) for q in row] for row in self.square]
        self.fresh = dict.fromkeys(delays(system), Fraction(1))
        self.calm = [[Fraction(0)] * len(unit.disturbances) for unit in system.units]

    def sizes(self, r: Row) -> list[Row]:
        """How large the offers of every station may be."""
        return [self.offers(i, v) for i, v in enumerate(r)]

    def offers(self, i: int, r: Fraction) -> Row:
        """How large the offers of station i may be while it stays within r."""
        station = self.system.stations[i]
        return [z * r for z in self.zeta[station.spec][: self.system.unit(station).offers]]

    def row(self, i: int, sizes: list[Row], waves: list[Row]) -> Fraction:
        """The square of row i, with disturbances of these sizes per specification; the largest over its cases."""
        station = self.system.stations[i]
        e = self.evidence[station.spec]
        cases = [arriving(self.system, i, case, sizes, self.fresh) for case in range(len(station.cases))]
        taken = max(sum((t * x * x for t, x in zip(e.tau, v, strict=True)), Fraction(0)) for v in cases)
        driven = sum((t * x * x for t, x in zip(e.tau_w, waves[station.spec], strict=True)), Fraction(0))
        return (taken + driven) / (2 * e.a)

    def rows(self, r: Row, waves: list[Row]) -> Row:
        """The square of every row of the gain operator at r."""
        sizes = self.sizes(r)
        return [self.row(i, sizes, waves) for i in range(len(r))]

    def lower(self, low: Row) -> Fraction:
        """A lower bound of the square of the radius: the best over the blocks, each on its own (10)."""
        stations = self.system.stations
        best: dict[int, Fraction] = {}
        for block in {station.block for station, v in zip(stations, low, strict=True) if v}:
            sizes = self.sizes([v if x.block == block else Fraction(0) for x, v in zip(stations, low, strict=True)])
            for i, v in enumerate(low):
                if v and stations[i].block == block:
                    e = self.evidence[stations[i].spec]
                    arrived = arriving(self.system, i, 0, sizes, self.fresh)
                    q = sum((t * x * x for t, x in zip(e.tau, arrived, strict=True)), Fraction(0)) / (2 * e.a * v * v)
                    best[block] = min(q, best.get(block, q))
        return max(best.values(), default=Fraction(0)) * (1 - Fraction(1, 1 << 60))  # zeta was rounded up

    def settled(self, waves: list[Row], s: Row, ratio: Row) -> Row:
        """r with rows(r, waves) <= r^2: a multiple of s (3c), then lowered by applying the rows again and again."""
        calm = self.sizes([Fraction(0)] * len(s))
        size = root(
            max(self.row(i, calm, waves) / ((1 - q) * v * v) for i, (q, v) in enumerate(zip(ratio, s, strict=True)))
        )
        r = [size * v for v in s]
        sizes = self.sizes(r)
        for _ in range(sweeps(len(s))):
            before = r[:]
            for i, v in enumerate(before):
                r[i] = min(v, root(self.row(i, sizes, waves)))
                sizes[i] = self.offers(i, r[i])
            if settled_already(before, r):
                break
        return r

    def peaks(self, r: Row) -> Row:
        """Bound of every line of every kind while every station stays within r."""
        sizes, found = self.sizes(r), []
        for i, station in enumerate(self.system.stations):
            cases = [arriving(self.system, i, case, sizes, self.fresh) for case in range(len(station.cases))]
            lines = self.system.unit(station).lines
            heard = [
                max(sum((abs(a) * b for a, b in zip(x.v, v, strict=True)), Fraction(0)) for v in cases) for x in lines
            ]
            found.append([z * r[i] + h for z, h in zip(self.zeta[station.spec], heard, strict=True)])
        return by_kind(self.system, found)


def derive_storage(document: dict[str, Any], system: System) -> Derived:
    """Radius, rate, constants and peaks from the evidence and the points of the storage route."""
    evidence = read_evidence(document, system.units)
    alpha = positive(fields(document["constants"], "C alpha G norm", "constants")["alpha"], "alpha")
    passing = any(line.role == "offer" and any(line.v + line.w) for unit in system.units for line in unit.lines)
    need(not passing, "the storage route takes no offers with feed-through")
    storage = Storage(system, evidence)
    s, low, fast = read_point(document, [station.name for station in system.stations], fast=True)
    ratio = [q / v**2 for q, v in zip(storage.rows(s, storage.calm), s, strict=True)]
    need(max(ratio) < 1, "the gain operator does not contract at the point s")
    growth = {delay: exp_above(2 * alpha * delay) for delay in delays(system)}
    level = [q / v**2 for q, v in zip(storage.rows(fast, storage.calm), fast, strict=True)]
    for station, q in zip(system.stations, level, strict=True):
        grown = max((growth[term.delay] for case in station.cases for term in case), default=Fraction(1))
        e = evidence[station.spec]
        need(alpha <= e.a * (1 - q * grown), f"{station.name} does not reach the claimed rate (8)")
    found = Derived(lines=all_lines(system))
    found.radius = root(storage.lower(low), up=False), root(max(ratio))
    declared = [[b for _, _, b in unit.disturbances] for unit in system.units]
    ones = [[Fraction(1)] * len(unit.disturbances) for unit in system.units]
    found.base = storage.peaks(storage.settled(declared, s, ratio))
    found.unit = storage.peaks(storage.settled(ones, s, ratio))
    sums = [root(sum((abs(v) for row in e.P for v in row), Fraction(0))) for e in evidence]
    initial = max(sums[station.spec] / v for station, v in zip(system.stations, fast, strict=True))
    found.start = storage.peaks([initial * v for v in fast])
    states = [k for k, line in enumerate(found.lines) if line.role == "state"]
    found.C, found.G = max(found.start[k] for k in states), max(found.unit[k] for k in states)
    return found

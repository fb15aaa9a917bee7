"""The peak route: sup norms, peak gains of every closed unit, and constants from points of strict decay (3a, 3c)."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

from synth.proof.checking.arithmetic import apply, contraction, exp_above, resolvent, rounded, transpose
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
from synth.proof.checking.flow import Flow, free_response, peak_gain
from synth.proof.checking.reading import Matrix, Row, fields, need, positive
from synth.proof.checking.units import Unit
from synth.proof.checking.wiring import System


@dataclass
class Gains:
    """Bounds for one unit and one weight alpha: line by take (low, up), line by disturbance, line by initial state."""

    take_low: Matrix
    take: Matrix
    wave: Matrix
    start: Row


Measure = Callable[[Unit, Evidence, Fraction], Gains]


def unit_gains(unit: Unit, evidence: Evidence, alpha: Fraction) -> Gains:
    """Peak gains and largest free responses of one unit, every signal weighted with e^(alpha t) (theory 3a, (4))."""
    need(alpha < evidence.a, f"{unit.name}: the claimed rate is not below the decay of its evidence")
    n, q = len(unit.A), len(unit.takes)
    A = [[v + (alpha if i == j else 0) for j, v in enumerate(row)] for i, row in enumerate(unit.A)]
    flow = Flow(A, evidence.P, evidence.a - alpha)
    low, up = [], []
    for j in range(q + len(unit.disturbances)):
        entry = [(unit.D[i] + unit.E[i])[j] for i in range(n)]
        found = peak_gain(flow, entry, [line.x for line in unit.lines])
        direct = [abs((line.v + line.w)[j]) for line in unit.lines]
        low.append([f + g[0] for f, g in zip(direct, found, strict=True)])
        up.append([f + g[1] for f, g in zip(direct, found, strict=True)])
    low, up = ([[column[k] for column in side] for k in range(len(unit.lines))] for side in (low, up))
    back = Flow(transpose(A), flow.inverse, flow.decay)  # A P^-1 + P^-1 A' + 2a P^-1 < 0 is the same inequality
    known = {tuple(line.x): Fraction(0) for line in unit.lines}
    known = {row: free_response(back, list(row)) for row in known}
    start = [
        max(known[tuple(x.x)], Fraction(x.role == "offer" and any(x.v + x.w)))  # stored values count too (3c)
        for x in unit.lines
    ]
    return Gains([row[:q] for row in low], [row[:q] for row in up], [row[q:] for row in up], start)


def slim(unit: Unit) -> Unit:
    """The unit without disturbances and actuators: all that a rate needs."""
    lines = [replace(line, w=[]) for line in unit.lines if line.role != "actuator"]
    return replace(unit, lines=lines, disturbances=[], E=[[] for _ in unit.A])


class PeakOperator:
    """The gain operator on the offers of all stations with given peak gains (theory (1), (4), (9), (13), (14))."""

    def __init__(self, system: System, gains: list[Gains], alpha: Fraction = Fraction(0)) -> None:
        """``gains`` per specification, of A + alpha I."""
        self.system, self.gains, self.rows = system, gains, system.rows()
        self.growth = {delay: exp_above(alpha * delay) for delay in delays(system)}
        self.counts = [system.unit(station).offers for station in system.stations]
        self.first = [0]
        for count in self.counts[:-1]:
            self.first.append(self.first[-1] + count)

    def sizes(self, z: Row) -> list[Row]:
        """The entries of z, station by station."""
        return [z[a : a + n] for a, n in zip(self.first, self.counts, strict=True)]

    def station(self, i: int, sizes: list[Row], count: int | None = None) -> Row:
        """What links make of the first ``count`` lines of station i (None: all), the largest over its cases."""
        station = self.system.stations[i]
        take = self.gains[station.spec].take[:count]
        found = [Fraction(0)] * len(take)
        for case in range(len(station.cases)):
            v = arriving(self.system, i, case, sizes, self.growth)
            new = [sum((p * x for p, x in zip(row, v, strict=True) if x), Fraction(0)) for row in take]
            found = [max(pair) for pair in zip(found, new, strict=True)]
        return found

    def image(self, z: Row) -> Row:
        """The operator applied to z."""
        sizes = self.sizes(z)
        return [v for i, n in enumerate(self.counts) for v in self.station(i, sizes, n)]

    def lower(self, low: Row) -> Fraction:
        """A lower bound of the radius: the best over the blocks, each on its own (10)."""
        stations = self.system.stations
        best: dict[int, Fraction] = {}
        for block in {stations[i].block for (i, _), v in zip(self.rows, low, strict=True) if v}:
            kept = [v if stations[i].block == block else Fraction(0) for (i, _), v in zip(self.rows, low, strict=True)]
            sizes = self.sizes(kept)
            for i, mine in enumerate(sizes):
                if any(mine):
                    v = arriving(self.system, i, 0, sizes, self.growth)
                    for size, row in zip(mine, self.gains[stations[i].spec].take_low, strict=False):
                        if size:
                            value = sum((p * x for p, x in zip(row, v, strict=True)), Fraction(0)) / size
                            best[block] = min(value, best.get(block, value))
        return max(best.values(), default=Fraction(0))

    def matrix(self) -> Matrix:
        """The operator of a system that is a small matrix."""
        size = range(len(self.rows))
        columns = [self.image([Fraction(i == j) for i in size]) for j in size]
        return transpose(columns) if columns else []

    def settled(self, s: Row, image: Row, own: list[Row]) -> Row:
        """z with operator(z) + own <= z: exact for a small matrix, else a multiple of s that is lowered step by step.

        ``image`` is the operator at s, below s everywhere; the multiple is c with c s >= c image + own (theory 3c).
        """
        b = [rounded(own[i][k], up=True) if own[i][k] else Fraction(0) for i, k in self.rows]
        if self.system.exact:
            return resolvent(self.matrix(), b)
        c = max((v / (a - g) for v, a, g in zip(b, s, image, strict=True)), default=Fraction(0))
        sizes = self.sizes([rounded(c * v, up=True) if c else Fraction(0) for v in s])
        parts = self.sizes(b)
        for _ in range(sweeps(len(s))):
            before = [v for row in sizes for v in row]
            for i, n in enumerate(self.counts):
                new = [g + v for g, v in zip(self.station(i, sizes, n), parts[i], strict=True)]
                sizes[i] = [min(old, rounded(v, up=True) if v else v) for old, v in zip(sizes[i], new, strict=True)]
            if settled_already(before, [v for row in sizes for v in row]):
                break
        return [v for row in sizes for v in row]

    def peaks(self, z: Row, own: list[Row]) -> Row:
        """Bound of every line of every kind: own part plus what comes in through the links."""
        sizes = self.sizes(z)
        rows = [[a + b for a, b in zip(own[i], self.station(i, sizes), strict=True)] for i in range(len(self.counts))]
        return by_kind(self.system, rows)


def peak_names(system: System) -> list[str]:
    """The name of every row: station and offer."""
    return [f"{system.stations[i].name}.{system.unit(system.stations[i]).lines[k].signal}" for i, k in system.rows()]


def derive_peak(document: dict[str, Any], system: System, measure: Measure = unit_gains) -> Derived:
    """The peak route: G(s) <= radius s, then every constant from z >= G(z) + what comes from inside."""
    evidence = read_evidence(document, system.units)
    alpha = positive(fields(document["constants"], "C alpha G norm", "constants")["alpha"], "alpha")
    plain = [measure(unit, e, Fraction(0)) for unit, e in zip(system.units, evidence, strict=True)]
    fast = [measure(slim(unit), e, alpha) for unit, e in zip(system.units, evidence, strict=True)]
    operator = PeakOperator(system, plain)
    s, low, *more = read_point(document, peak_names(system), not system.exact)
    image = operator.image(s)
    found = Derived(lines=all_lines(system))
    found.radius = operator.lower(low), max((v / w for v, w in zip(image, s, strict=True)), default=Fraction(0))
    need(found.radius[1] < 1, "the gain operator does not contract at the point s")
    weighted = PeakOperator(system, fast, alpha)
    t = more[0] if more else s
    grown = weighted.image(t)
    if more:
        need(all(v < w for v, w in zip(grown, t, strict=True)), "the weighted operator does not contract at the rate")
    else:
        contraction(weighted.matrix())

    def own(gains: list[Gains], part: Callable[[Gains, Unit], Row]) -> list[Row]:
        rows = [part(g, unit) for g, unit in zip(gains, system.units, strict=True)]
        return [rows[station.spec] for station in system.stations]

    def peaks(part: Callable[[Gains, Unit], Row]) -> Row:
        inner = own(plain, part)
        return operator.peaks(operator.settled(s, image, inner), inner)

    found.base = peaks(lambda g, unit: apply(g.wave, [b for _, _, b in unit.disturbances]))
    found.unit = peaks(lambda g, unit: [sum(row, Fraction(0)) for row in g.wave])
    found.start = peaks(lambda g, unit: g.start)
    inner = own(fast, lambda g, unit: g.start)
    kept = [line for line in found.lines if line.role != "actuator"]
    rates = weighted.peaks(weighted.settled(t, grown, inner), inner)
    found.C = max(r for r, line in zip(rates, kept, strict=True) if line.role == "state")
    found.G = max(r for r, line in zip(found.unit, found.lines, strict=True) if line.role == "state")
    return found

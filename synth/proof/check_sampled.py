#!/usr/bin/env python3
"""Peak gains of one unit with a sampled loop, bounded in integers: the arithmetic of check_firmware.py.

At k T the controller samples and computes u_k = R x; it is in force from k T + d to (k+1) T + d. With M = [A B; 0 0],

    E(t) = e^(Mt),   W = [E(d) rows of x; R 0],   Phi = E(T - d) W + [Z 0; 0 0]     acting on (x(kT), u in force)

and a line h = row over (x, u) has at the phase phi of a period the peak gain from an inlet D

    p(phi) = N(h E(phi - start)) + integral_0^phi |h E(s) D| ds,    N(r) = sum_m integral_0^T |r W Phi^m E(s) D| ds,

W = I before d. N is a norm of the row r. In a cell of phases r differs from the straight line between its end values by
at most eta^2/8 of its second derivative, so N at the ends bounds N inside; cells are halved until little is lost. The
tail of a sum over m is bounded in the norm P of the file, of which gamma^2 P - Phi'P Phi > 0 is verified exactly. With
a rate alpha, M + alpha I weighs every signal by e^(alpha t). Nothing but Python's standard library is used.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import factorial, isqrt, lcm
from operator import mul
from typing import TYPE_CHECKING

if TYPE_CHECKING or __package__:
    from synth.proof import check
    from synth.proof.check_flashed import Flashed, Inlet, Line, Matrix, Row, unit
else:  # the files lie side by side in a hand-off bundle
    import check
    from check_flashed import Flashed, Inlet, Line, Matrix, Row, unit

BITS = 160
ONE = 1 << BITS
MOST_PERIODS, MOST_CELLS = 60_000, 256
Whole = list[list[int]]


# ---------------------------------------------------------------- matrices of integers over 2^BITS with one error


@dataclass
class Ball:
    """A matrix known to be within ``err`` of ``mid``, entry by entry, both in units of 2^-BITS."""

    mid: Whole
    err: int


def ball(X: Matrix) -> Ball:
    """A rational matrix, rounded."""
    return Ball([[(v.numerator << BITS) // v.denominator for v in row] for row in X], 1)


def largest(X: Whole) -> int:
    """The largest absolute value."""
    return max((abs(v) for row in X for v in row), default=0)


def times(X: Ball, Y: Ball) -> Ball:
    """X Y; products are cut, and what that and both errors can add up to becomes the new error."""
    columns = list(zip(*Y.mid, strict=True))
    mid = [[sum(x * y for x, y in zip(row, column, strict=True)) >> BITS for column in columns] for row in X.mid]
    n = len(Y.mid)
    err = n * (X.err * largest(Y.mid) + Y.err * largest(X.mid) + X.err * Y.err)
    return Ball(mid, (err >> BITS) + 2)


def plus(X: Ball, Y: Ball) -> Ball:
    """X + Y."""
    return Ball([[a + b for a, b in zip(x, y, strict=True)] for x, y in zip(X.mid, Y.mid, strict=True)], X.err + Y.err)


def exponential(M: Matrix, t: Fraction) -> Ball:
    """e^(Mt): 40 Taylor terms of a halved step with their remainder, then squared."""
    size = max((sum(abs(v) for v in row) for row in M), default=Fraction(0)) * t
    halvings = max(0, (2 * size).numerator.bit_length() - (2 * size).denominator.bit_length() + 1)
    check.need(halvings <= 12, "a unit is too fast for its sample period to be checked")
    step = ball([[v * t / 2**halvings for v in row] for row in M])
    total = term = ball(unit(len(M)))
    for k in range(1, 41):
        term = times(term, step)
        term = Ball([[v // k for v in row] for row in term.mid], term.err // k + 2)
        total = plus(total, term)
    total.err += 1 + (ONE >> 40) // factorial(40)  # the rest is at most 2 (1/2)^41/41! in every row sum
    for _ in range(halvings):
        total = times(total, total)
    return total


def exact(X: Ball) -> Matrix:
    """The midpoints as rationals."""
    return [[Fraction(v, ONE) for v in row] for row in X.mid]


# ---------------------------------------------------------------- one unit at one rate: norms of rows, suprema


@dataclass
class Step:
    """One period of a path: per stretch its columns, their mean over the stretch, and the rest beside the first one."""

    stretches: list[tuple[list[list[int]], list[int], list[int]]]
    error: int  # bound of the P-norm of what is not in the columns
    size: int  # sum of all entries
    norm: int  # sum of the P-norms of all columns


@dataclass
class Path:
    """Phi^m times the columns of one inlet, period by period, until they have died out; ``tail`` bounds the rest."""

    steps: list[Step]
    tail: int
    kernel: bool


class Sampled:
    """One unit at one rate: N of rows, and the supremum over the phase. All sizes in units of 2^-BITS."""

    def __init__(self, unit_: Flashed, P: Matrix, gamma: Fraction, alpha: Fraction) -> None:
        """Form E, W and Phi, and verify that Phi contracts in P by gamma (with the rate: by gamma e^(alpha T))."""
        self.u, self.alpha, self.T, self.d = unit_, alpha, unit_.T, unit_.d
        n, m = len(unit_.A), len(unit_.B[0]) if unit_.B else 0
        self.n, self.size = n, n + m
        below = [[Fraction(0)] * self.size for _ in range(m)]
        self.plain = [a + b for a, b in zip(unit_.A, unit_.B, strict=True)] + below
        self.M = [[v + (alpha if i == j else 0) for j, v in enumerate(row)] for i, row in enumerate(self.plain)]
        self.nodes: dict[Fraction, Ball] = {}
        check.need(
            check.transpose(P) == P and check.definite(P), f"{unit_.name}: P is not symmetric and positive definite"
        )
        self.P_den = lcm(*(v.denominator for row in P for v in row))
        self.P_int = [[int(v * self.P_den) for v in row] for row in P]
        inverse = check.solve(P, unit(self.size))
        self.reach = [int(check.root(inverse[i][i]) * (1 << 64)) + 1 for i in range(self.size)]
        self.spread = int(check.root(sum((abs(v) for row in P for v in row), Fraction(0)))) + 1
        self.late, self.whole = (self.weight(t) for t in (self.d, self.T))
        held = self.E(self.d)
        under = times(ball([[*row, *([Fraction(0)] * m)] for row in unit_.R]), self.late)
        self.W = Ball(held.mid[:n] + under.mid, max(held.err, under.err))
        self.Phi = times(self.E(self.T - self.d), self.W)
        if any(any(row) for row in unit_.Z):
            Z = times(ball([row + [Fraction(0)] * m for row in unit_.Z] + below), self.whole)
            self.Phi = plus(self.Phi, Z)
        grown = check.exp_above(alpha * self.T)
        self.gamma = self.contraction(P, gamma * grown)
        self.degree()
        self.paths: dict[str, Path] = {}
        self.news: dict[str, Ball] = {}
        self.grown: dict[Fraction, Ball] = {}
        self.starts: dict[str, tuple[list[list[int]], int]] = {}
        self.units: list[Matrix] = []
        self.pieces = [(Fraction(0), self.d, ball(unit(self.size)), False)] if self.d else []
        if self.d < self.T:
            self.pieces.append((self.d, self.T - self.d, self.W, True))
        self.start = self.first()

    def weight(self, t: Fraction) -> Ball:
        """e^(alpha t) times the identity."""
        return exponential([[self.alpha * v for v in row] for row in unit(self.size)], t)

    def E(self, t: Fraction) -> Ball:
        """e^((M + alpha I) t)."""
        if t not in self.nodes:
            self.nodes[t] = exponential(self.M, t)
        return self.nodes[t]

    def contraction(self, P: Matrix, gamma: Fraction) -> Fraction:
        """A bound below 1 of |Phi xi|_P/|xi|_P: exact for the midpoints, plus what their error can do."""
        name = self.u.name
        check.need(0 < gamma < 1, f"{name}: the claimed rate is not below the decay of its evidence")
        Phi = exact(self.Phi)
        moved = check.mul(check.transpose(Phi), check.mul(P, Phi, self.size), self.size)
        rest = [[gamma * gamma * a - b for a, b in zip(x, y, strict=True)] for x, y in zip(P, moved, strict=True)]
        check.need(check.definite(rest), f"{name}: the sampled loop does not contract in the norm of its evidence")
        error = Fraction(self.spread * self.Phi.err * sum(self.reach), ONE << 64)
        check.need(short(gamma + error, True) < 1, f"{name}: the sampled loop contracts by too little to be checked")
        return short(gamma + error, True)

    def degree(self) -> None:
        """Stretches of a period and Taylor terms of e^(As) D on each, and what the terms leave out (times max|D|)."""
        size = max((sum(abs(v) for v in row[: self.n]) for row in self.M[: self.n]), default=Fraction(0)) * self.T
        self.parts = max(1, -(-size.numerator // size.denominator))
        mu = size / self.parts
        self.terms = next(j for j in range(4, 24) if 2 * mu**j / factorial(j) * 2**46 <= 1)
        self.left = 2 * mu**self.terms / factorial(self.terms)

    def norm(self, x: Sequence[int]) -> int:
        """An upper bound of |x|_P."""
        total = sum(v * sum(p * w for p, w in zip(row, x, strict=True)) for v, row in zip(x, self.P_int, strict=True))
        return isqrt(total // self.P_den) + 1

    def zeta(self, row: Sequence[int], err: int) -> int:
        """z with |row x| <= z |x|_P for rows within ``err``: the sum of entries times their reach."""
        return (sum((abs(v) + err) * r for v, r in zip(row, self.reach, strict=True)) >> 64) + 1

    def series(self, D: Row) -> tuple[list[list[int]], int]:
        """Columns of Taylor coefficients of e^(As) D, stretch by stretch, and the error of their sum at any s."""
        n, width = self.n, self.T / self.parts
        found, start, worst, top = [], ball([[v] for v in D]), 1, 0
        step = Ball([row[:n] for row in self.E(width).mid[:n]], self.E(width).err)
        slope = ball([[v * width for v in row[:n]] for row in self.M[:n]])
        for _ in range(self.parts):
            term, top = start, max(top, largest(start.mid) + start.err)
            for j in range(self.terms):
                found.append([row[0] for row in term.mid] + [0] * (self.size - n))
                worst = max(worst, term.err)
                term = times(slope, term)
                term = Ball([[v // (j + 1) for v in row] for row in term.mid], term.err + 2)
            start = times(step, start)
        return found, self.terms * worst + int(self.left * top) + 1

    def path(self, key: str, columns: list[list[int]], err: int, kernel: bool) -> Path:
        """Follow ``columns`` (entries within ``err``, together) until they have died out."""
        if key in self.paths:
            return self.paths[key]
        error = self.spread * err
        first = sum(self.norm(c) for c in columns)
        stop = int(first * (1 - self.gamma)) >> 36
        down = int(self.gamma * (1 << 64)) + 1
        steps: list[Step] = []
        while True:
            now = sum(self.norm(c) for c in columns)
            if now <= stop or now <= 4 * error or now <= len(columns):
                break
            check.need(len(steps) < MOST_PERIODS, f"{self.u.name} takes too many periods to come to rest")
            total = sum(abs(v) for c in columns for v in c)
            steps.append(Step(self.stretches(columns) if kernel else [(columns, [], [])], error, total, now))
            columns = [[sum(map(mul, row, c)) >> BITS for row in self.Phi.mid] for c in columns]
            error = (error * down >> 64) + 1 + self.spread * ((self.Phi.err * total >> BITS) + len(columns))
        tail = int((now + error) / (1 - self.gamma)) + 1
        self.paths[key] = Path(steps, tail, kernel)
        return self.paths[key]

    def stretches(self, columns: list[list[int]]) -> list[tuple[list[list[int]], list[int], list[int]]]:
        """The columns cut into stretches; the mean of sum_j c_j tau^j is sum_j c_j/(j+1), cut by less than one each."""
        found = []
        for first in range(0, len(columns), self.terms):
            part = columns[first : first + self.terms]
            entries = list(zip(*part, strict=True))
            mean = [sum(v // (j + 1) for j, v in enumerate(entry)) for entry in entries]
            found.append((part, mean, [sum(map(abs, entry[1:])) for entry in entries]))
        return found

    def total(self, path: Path, row: list[int], err: int) -> tuple[int, int]:
        """Bounds of the sum over all periods of |row x|, or of its integrals over stretches of length one."""
        low = high = 0
        zeta, sizes = self.zeta(row, err), [abs(v) for v in row]
        small = (zeta * path.steps[0].norm >> BITS) >> 40 if path.steps else 0
        cut = (sum(sizes) * self.terms >> BITS) + 2
        for step in path.steps:
            slip = (zeta * step.error + err * step.size >> BITS) + 2
            for columns, mean, rest in step.stretches:
                first = abs(sum(map(mul, row, columns[0])) >> BITS)
                if not path.kernel:
                    low, high = low + max(0, first - slip), high + first + slip
                elif first > (sum(map(mul, sizes, rest)) >> BITS) + slip + 2:  # it keeps its sign on the stretch
                    area = abs(sum(map(mul, row, mean)) >> BITS)
                    low, high = low + max(0, area - slip - cut), high + area + slip + cut
                else:
                    c = [sum(map(mul, row, x)) >> BITS for x in columns]
                    less, more = check.absolute_integral(c, slip + len(c), small)
                    low, high = low + less, high + more
        return low, high + (zeta * path.tail >> BITS) + 1

    def inlet(self, key: str, inlet: Inlet, row: list[int], err: int) -> tuple[Fraction, Fraction]:
        """N of a row for one inlet: everything that came in before the last sample."""
        low = high = Fraction(0)
        if any(inlet.D):
            if key not in self.paths:
                columns, each = self.series(inlet.D)
                self.path(key, columns, self.parts * each, True)
            less, more = self.total(self.paths[key], row, err)
            low, high = low + less * self.T / self.parts, high + more * self.T / self.parts
        if any(inlet.gu) or any(inlet.gx):
            if key + " sampled" not in self.paths:
                direct = times(self.whole, ball([[v] for v in inlet.gx] + [[Fraction(0)] for _ in inlet.gu]))
                begun = plus(times(self.E(self.T - self.d), self.fresh(key, inlet)), direct)
                self.path(key + " sampled", [[v[0] for v in begun.mid]], begun.err, False)
            less, more = self.total(self.paths[key + " sampled"], row, err)
            low, high = low + less, high + more
        return low / ONE, high / ONE

    def fresh(self, key: str, inlet: Inlet) -> Ball:
        """What a sample adds to (x, command in force) at the moment its command comes into force."""
        if key not in self.news:
            self.news[key] = times(self.late, ball([[Fraction(0)] for _ in range(self.n)] + [[v] for v in inlet.gu]))
        return self.news[key]

    def norms(self, piece: int, rho: Ball, inlets: list[tuple[str, Inlet]]) -> list[tuple[Fraction, Fraction]]:
        """(low, high) of N for every inlet, and of the free motion, at a row over (x, command in force)."""
        _, _, W, updated = self.pieces[piece]
        seen = times(rho, W)
        found = []
        for key, inlet in inlets:
            low, high = self.inlet(key, inlet, seen.mid[0], seen.err)
            if updated and any(inlet.gu):
                new = times(rho, self.fresh(key, inlet))
                low += Fraction(max(0, abs(new.mid[0][0]) - new.err), ONE)
                high += Fraction(abs(new.mid[0][0]) + new.err, ONE)
            found.append((short(low, False), short(high, True)))
        return [*found, (Fraction(0), self.moving(seen))]

    def moving(self, row: Ball) -> Fraction:
        """An upper bound of sup over m of sum_i |row Phi^m|_i start_i: free motion after the first sample."""
        zeta = self.zeta(row.mid[0], row.err)
        eye = [[ONE * (i == j) for j in range(self.size)] for i in range(self.size)]
        paths = [self.path(f"free {i}", [e], 0, False) for i, e in enumerate(eye)]
        weights = [int(w * (1 << 32)) + 1 for w in self.start]
        most = 0
        for m in range(max(len(path.steps) for path in paths)):
            now = later = 0
            for path, weight in zip(paths, weights, strict=True):
                if m >= len(path.steps):
                    now, later = now + weight * ((zeta * path.tail >> BITS) + 1), later + weight * zeta * path.tail
                    continue
                step = path.steps[m]
                size = abs(sum(map(mul, row.mid[0], step.stretches[0][0][0])) >> BITS)
                now += weight * (size + (zeta * step.error + row.err * step.size >> BITS) + 3)
                later += weight * zeta * (step.norm + step.error)
            most = max(most, now)
            if (later >> BITS) + self.size <= most:  # in this norm free motion never grows
                return short(Fraction(most, ONE << 32), True)
        rest = sum(w * ((zeta * path.tail >> BITS) + 1) for path, w in zip(paths, weights, strict=True))
        return short(Fraction(max(most, rest), ONE << 32), True)

    def first(self) -> Row:
        """Bounds, up to the first sample of a unit, of its weighted states and commands per unit of initial size.

        At the start the unit may be at any phase of its period: what it holds, and what it has computed, act one after
        the other, so their parts add up to at most the integral of |E(s) B|.
        """
        n, cells = self.n, 16 * self.parts
        eta = self.T / cells
        spread = exponential([[abs(v) for v in row] for row in self.M], eta)
        B = ball([[abs(v) for v in row] for row in self.u.B])
        own, held = [0] * n, [Fraction(0)] * n
        for k in range(cells):
            here = self.E(k * eta)
            part = Ball([[abs(v) + here.err for v in row] for row in here.mid], 0)
            part = times(part, spread)
            xx = Ball([row[:n] for row in part.mid[:n]], part.err)
            own = [max(v, sum(row) + n * xx.err) for v, row in zip(own, xx.mid, strict=True)]
            driven = times(xx, B)
            held = [h + eta * (sum(row) + len(row) * driven.err) for h, row in zip(held, driven.mid, strict=True)]
        grown = Fraction(self.whole.mid[0][0] + self.whole.err, ONE)
        return [short((v + grown * h) / ONE, True) for v, h in zip(own, held, strict=True)] + [grown] * (self.size - n)

    # ------------------------------------------------------------ one line over all phases

    def line(self, line: Line, inlets: list[tuple[str, Inlet]], tight: Fraction) -> tuple[Row, Row]:
        """Bounds of sup over the phase for every inlet, and last of the free motion; a reading is taken at phase 0."""
        h = ball([line.row])
        seen = [self.reached(inlet, line.row) for _, inlet in inlets] + [any(line.row)]
        begun = sum((abs(v) * w for v, w in zip(line.row, self.start, strict=True)), Fraction(0))
        if line.role == "reading":
            self.pieces.append((Fraction(0), Fraction(0), ball(unit(self.size)), False))
            ends = self.norms(len(self.pieces) - 1, h, inlets)
            self.pieces.pop()
            low, high = ([v * s for v, s in zip(side, seen, strict=True)] for side in zip(*ends, strict=True))
            return low, [*high[:-1], max(high[-1], begun)]
        cells = [
            (k, piece[1] * i / count, piece[1] / count)
            for k, piece in enumerate(self.pieces)
            for count in [max(1, -(-(piece[1] * self.parts / self.T) // 1))]
            for i in range(count)
        ]
        known: dict[tuple[int, Fraction], list[tuple[Fraction, Fraction]]] = {}
        while True:
            low, bounds = self.bounds(h, line.row, cells, known, inlets)
            wanted = [v * (1 + tight) for v in low[:-1]]  # of free motion an upper bound is enough
            split = [any(s and b > w for s, b, w in zip(seen, bound, wanted, strict=False)) for bound in bounds]
            small = all(cell[2] * (1 << 12) < self.T for cell, cut in zip(cells, split, strict=True) if cut)
            if not any(split) or small or len(cells) > MOST_CELLS:
                break
            cells = [
                new
                for (k, a, eta), cut in zip(cells, split, strict=True)
                for new in ([(k, a, eta / 2), (k, a + eta / 2, eta / 2)] if cut else [(k, a, eta)])
            ]
        high = [max(side) for side in zip(*bounds, strict=True)]
        low, high = ([v * s for v, s in zip(side, seen, strict=True)] for side in (low, high))
        return low, [*high[:-1], max(high[-1], begun)]

    def bounds(
        self,
        h: Ball,
        row: Row,
        cells: list[tuple[int, Fraction, Fraction]],
        known: dict[tuple[int, Fraction], list[tuple[Fraction, Fraction]]],
        inlets: list[tuple[str, Inlet]],
    ) -> tuple[Row, Matrix]:
        """The best value seen at the ends of cells, and a bound for every cell, per inlet and for free motion."""
        if not self.units:
            for k in range(len(self.pieces)):
                rows = [ball([e]) for e in unit(self.size)]
                self.units.append([[high for _, high in self.norms(k, r, inlets)] for r in rows])
        second = check.mul([row], check.mul(self.M, self.M, self.size), self.size)
        third = check.mul(second, self.M, self.size)
        best, found = [Fraction(0)] * (len(inlets) + 1), []
        inside = [(Fraction(0), Fraction(0))] * (len(inlets) + 1)
        for k, a, eta in cells:
            for t in (a, a + eta):
                if (k, t) not in known:
                    known[k, t] = self.norms(k, times(h, self.E(t)), inlets)
            bend = self.bend(second, third, a, eta)
            more = [*self.inside(h, self.pieces[k][0] + a, eta, inlets), (Fraction(0), Fraction(0), Fraction(0))]
            bound = []
            for i, (less, most, top) in enumerate(more):
                (low_a, high_a), (low_b, high_b) = known[k, a][i], known[k, a + eta][i]
                loss = sum((b * e[i] for b, e in zip(bend, self.units[k], strict=True)), Fraction(0))
                bound.append(max(high_a, high_b + eta * top) + inside[i][1] + loss)
                best[i] = max(best[i], low_a + inside[i][0], low_b + inside[i][0] + less)
                inside[i] = inside[i][0] + less, inside[i][1] + most
            found.append(bound)
        return best, found

    def bend(self, second: Matrix, third: Matrix, a: Fraction, eta: Fraction) -> Row:
        """eta^2/8 times a bound of |h M^2 E(t)| for a <= t <= a + eta: at a, and what |h M^3| can add."""
        here, size = (
            times(ball(second), self.E(a)),
            Ball([[abs(v) for v in row] for row in self.E(a).mid], self.E(a).err),
        )
        if eta not in self.grown:
            self.grown[eta] = exponential([[abs(v) for v in row] for row in self.M], eta)
        more = times(times(ball([[abs(v) for v in row] for row in third]), self.grown[eta]), size)
        return [
            short((abs(v) + here.err + eta * (w + more.err)) * eta * eta / 8 / ONE, True)
            for v, w in zip(here.mid[0], more.mid[0], strict=True)
        ]

    def inside(
        self, h: Ball, phase: Fraction, eta: Fraction, inlets: list[tuple[str, Inlet]]
    ) -> list[tuple[Fraction, Fraction, Fraction]]:
        """Bounds of the integral of |h E(s) D| over phase <= s <= phase + eta, and of the largest value there."""
        row, ratio = times(h, self.E(phase)), eta * self.parts / self.T
        found = []
        for key, inlet in inlets:
            if not any(inlet.D):
                found.append((Fraction(0), Fraction(0), Fraction(0)))
                continue
            if key not in self.starts:
                columns, err = self.series(inlet.D)
                self.starts[key] = columns[: self.terms], err
            columns, err = self.starts[key]
            size = sum(abs(v) + row.err for v in row.mid[0][: self.n])
            slip = (size * err + row.err * sum(abs(v) for c in columns for v in c) >> BITS) + 2 * self.terms
            c = [
                (sum(map(mul, row.mid[0], x)) >> BITS) * ratio.numerator**j // ratio.denominator**j
                for j, x in enumerate(columns)
            ]
            less, more = check.absolute_integral(c, slip, largest([c]) >> 40)
            top = max(map(abs, spans(c))) + slip
            found.append(
                (short(less * eta / ONE, False), short(more * eta / ONE, True), short(Fraction(top, ONE), True))
            )
        return found

    def reached(self, inlet: Inlet, row: Row) -> bool:
        """Whether any path of non-zero entries leads from the inlet to the row."""
        found = [bool(a or b) for a, b in zip(inlet.D, inlet.gx, strict=True)] + [bool(v) for v in inlet.gu]
        m = self.size - self.n
        arrows = [x + [Fraction(0)] * m for x in self.u.Z] + [x + [Fraction(0)] * m for x in self.u.R]
        for _ in range(self.size):
            found = [
                f or any(f2 and (p or z) for f2, p, z in zip(found, plain, step, strict=True))
                for f, plain, step in zip(found, self.plain, arrows, strict=True)
            ]
        return any(f and v for f, v in zip(found, row, strict=True))


def spans(c: Sequence[int]) -> tuple[int, int]:
    """Lower and upper bound of sum c_j tau^j on 0 <= tau <= 1."""
    return c[0] + sum(v for v in c[1:] if v < 0), c[0] + sum(v for v in c[1:] if v > 0)


def short(value: Fraction, up: bool) -> Fraction:
    """A number >= 0 with about 70 binary digits, on the safe side."""
    return check.rounded(value, up=up) if value else value

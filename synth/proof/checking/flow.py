"""Free responses in integer arithmetic: peak gains and the largest response to an initial state."""

from __future__ import annotations

import operator
from collections.abc import Iterator, Sequence
from fractions import Fraction
from math import factorial, isqrt, lcm

from synth.proof.checking.arithmetic import root, rounded, solve
from synth.proof.checking.reading import Matrix, Rejected, Row

BITS, TERMS, DEPTH = 112, 24, 18  # fixed point 2^-112; Taylor terms per cell; halvings of a cell
HALVING = 1 << TERMS  # what the coefficients cut off by one halving can add up to: sum over j < TERMS of 2^j is less


class Flow:
    """Cells of x' = A x where the norm |x|_P = sqrt(x'Px) of every solution decays at least like e^(-a t)."""

    def __init__(self, A: Matrix, P: Matrix, a: Fraction) -> None:
        """Keep A and P as integers over one denominator, the inverse of P, and the decay a > 0."""
        self.size, self.decay = len(A), a
        self.A_den, self.A_int = _integers(A)
        self.P_den, self.P_int = _integers(P)
        self.inverse = solve(P, [[Fraction(i == j) for j in range(self.size)] for i in range(self.size)])
        self.spread = int(root(sum((abs(v) for row in P for v in row), Fraction(0)))) + 1  # |x|_P <= spread |x|_max
        self.powers = [[[int(i == j) for j in range(self.size)] for i in range(self.size)]]
        for _ in range(max(TERMS, self.size)):
            self.powers.append(_times(self.powers[-1], self.A_int))
        self.tables: dict[int, list[list[list[int]]]] = {}

    def weight(self, row: Row) -> Fraction:
        """The least z with |row x| <= z |x|_P, rounded upward."""
        return root(
            sum((p * self.inverse[i][j] * q for i, p in enumerate(row) for j, q in enumerate(row)), Fraction(0))
        )

    def norm(self, x: Sequence[int]) -> int:
        """An upper bound of |x|_P in the units of x."""
        total = sum(v * sum(p * w for p, w in zip(row, x, strict=True)) for v, row in zip(x, self.P_int, strict=True))
        return isqrt(total // self.P_den) + 1

    def unseen(self, row: Row, x: Row) -> bool:
        """Whether row e^(At) x is zero for all t: exactly when row A^j x = 0 for j below the number of states."""
        return not any(
            sum(r * p * v for r, line in zip(row, power, strict=True) for p, v in zip(line, x, strict=True))
            for power in self.powers[: self.size]
        )

    def table(self, m: int) -> list[list[list[int]]]:
        """A^j r^j/j! for r = 2^m and j = 0..TERMS, rounded to the fixed point: every entry off by less than one."""
        if m not in self.tables:
            up, down = max(m, 0), max(-m, 0)
            self.tables[m] = [
                [[(v << (BITS + up * j)) // (factorial(j) * self.A_den**j << (down * j)) for v in row] for row in power]
                for j, power in enumerate(self.powers[: TERMS + 1])
            ]
        return self.tables[m]

    def cells(self, start: Row) -> Iterator[tuple[int, list[list[int]], int]]:
        """Cells of the response from ``start``: (m, coefficients, error), then (0, [], bound of |x|_P at the end).

        On a cell of width r = 2^m, x = sum_j coefficients[j] tau^j, 0 <= tau <= 1, up to an error of that P-norm, in
        units of 2^-BITS. The error collects what was lost before (it cannot grow in this norm), rounding, and the
        Taylor remainder |(rA)^TERMS x|_P/TERMS!, which is largest at the left end of the cell.
        """
        x = [round(v * (1 << BITS)) for v in start]
        error, m, largest = self.spread, 2, self.norm(x)
        for _ in range(20000):
            size = self.norm(x)
            if size <= max(largest >> 50, 3 * error):
                yield 0, [], size + error
                return
            loss = self.spread * (self.size * (max(abs(v) for v in x) >> BITS) + self.size + 2)
            for step in range(min(m + 1, 40), -61, -1):
                m = step
                rest = self.norm(_apply(self.table(m)[TERMS], x)) + loss
                if rest <= max(largest >> 60, 2 * loss):
                    break
            else:
                raise Rejected("a unit is too stiff to be checked")
            coefficients = [_apply(power, x) for power in self.table(m)[:TERMS]]
            error += rest + TERMS * loss
            yield m, coefficients, error
            x = [sum(column) for column in zip(*coefficients, strict=True)]
        raise Rejected("a response takes too many steps to die out")


def _integers(X: Matrix) -> tuple[int, list[list[int]]]:
    """(q, Y) with X = Y/q and Y whole numbers."""
    q = lcm(*(v.denominator for row in X for v in row))
    return q, [[int(v * q) for v in row] for row in X]


def _times(X: list[list[int]], Y: list[list[int]]) -> list[list[int]]:
    return [[sum(x * y for x, y in zip(row, column, strict=True)) for column in zip(*Y, strict=True)] for row in X]


def _apply(X: list[list[int]], x: list[int]) -> list[int]:
    return [sum(map(operator.mul, row, x)) >> BITS for row in X]


def _range(c: list[int]) -> tuple[int, int]:
    """Lower and upper bound of sum c_j tau^j on 0 <= tau <= 1: every power of tau lies between 0 and 1."""
    return c[0] + sum(v for v in c[1:] if v < 0), c[0] + sum(v for v in c[1:] if v > 0)


def _halves(c: list[int]) -> tuple[list[int], list[int]]:
    """The polynomial on the left and the right half of its cell, off by less than HALVING.

    Every coefficient of the left half is cut by less than one; on the right half tau^j of the left one is at most 2^j.
    """
    left = [v >> j for j, v in enumerate(c)]
    right = left[:]
    for i in range(len(c) - 1):
        for j in range(len(c) - 2, i - 1, -1):
            right[j] += right[j + 1]
    return left, right


def absolute_integral(c: list[int], error: int, small: int) -> tuple[int, int]:
    """Bounds of the integral over 0..1 of |p + e| where p = sum c_j tau^j and |e| <= error.

    Where p keeps its sign the integral of |p| is exact; elsewhere the cell is halved until it is small.
    """
    low = high = 0
    stack = [(c, error, 0)]
    while stack:
        c, error, depth = stack.pop()
        bottom, top = _range(c)
        if bottom >= 0 or top <= 0:
            area, slack = abs(sum(v // (j + 1) for j, v in enumerate(c))), error + len(c)
            low += max(0, area - slack) >> depth
            high += ((area + slack) >> depth) + 1
        elif depth == DEPTH or max(top, -bottom) <= small:
            high += ((max(top, -bottom) + error) >> depth) + 1
        else:
            stack += [(half, error + HALVING, depth + 1) for half in _halves(c)]
    return low, high


def peak_gain(flow: Flow, start: Row, rows: list[Row]) -> list[tuple[Fraction, Fraction]]:
    """Lower and upper bound of the integral of |row e^(At) start| over t >= 0, for every row."""
    active = [k for k, row in enumerate(rows) if not flow.unseen(row, start)]
    den, whole = _integers(rows) if rows else (1, [])
    weight = [flow.weight(row) for row in rows]
    zeta = [int(w * den * (1 << 64)) + 1 for w in weight]
    low, high = [0] * len(rows), [0] * len(rows)  # in units of 2^-(BITS+60)/den
    largest = 0
    for m, coefficients, error in flow.cells(start) if active else ():
        largest = largest or (flow.norm(coefficients[0]) if coefficients else 0)
        for k in active:
            slip = (zeta[k] * error >> 64) + 1
            if not coefficients:  # the tail: weight |x|_P / decay
                high[k] += (int(Fraction(slip) / flow.decay) + 1) << 60
                continue
            c = [sum(h * v for h, v in zip(whole[k], x, strict=True) if h) for x in coefficients]
            less, more = absolute_integral(c, slip, (zeta[k] * largest >> 64) >> 44)
            low[k], high[k] = low[k] + (less << (60 + m)), high[k] + (more << (60 + m))
    unit = Fraction(1, den << (BITS + 60))
    return [(rounded(a * unit, up=False), rounded(b * unit, up=True)) for a, b in zip(low, high, strict=True)]


def free_response(flow: Flow, row: Row) -> Fraction:
    """An upper bound of sup over t >= 0 of |row e^(At)|_1; ``flow`` is the transposed one, started in the row."""
    spread = sum((flow.weight([Fraction(i == j) for j in range(flow.size)]) for i in range(flow.size)), Fraction(0))
    factor = int(spread * (1 << 64)) + 1
    if not any(row):
        return Fraction(0)
    seen = bound = sum(int(abs(v) * (1 << BITS)) for v in row)
    for _, coefficients, error in flow.cells(row):
        slip = (factor * error >> 64) + 1
        if not coefficients or (factor * flow.norm(coefficients[0]) >> 64) + slip <= bound:
            bound = max(bound, 0 if coefficients else slip)  # nothing later can exceed the bound
            break
        stack = [([list(c) for c in zip(*coefficients, strict=True)], slip, 0)]
        while stack:
            polynomials, slip, depth = stack.pop()
            rest, together = slip, [0] * TERMS
            for c in polynomials:
                bottom, top = _range(c)
                sign = 1 if bottom >= 0 else -1 if top <= 0 else 0
                rest += 0 if sign else max(top, -bottom)
                together = [t + sign * v for t, v in zip(together, c, strict=True)] if sign else together
            top = _range(together)[1] + rest
            seen = max(seen, sum(abs(c[0]) for c in polynomials) - slip, sum(abs(sum(c)) for c in polynomials) - slip)
            if top <= max(bound, seen + (seen >> 22)) or depth == 30:
                bound = max(bound, top)
            else:
                pairs = [_halves(c) for c in polynomials]
                step = slip + flow.size * HALVING
                stack += [([p[0] for p in pairs], step, depth + 1), ([p[1] for p in pairs], step, depth + 1)]
    return rounded(Fraction(bound + len(row), 1 << BITS), up=True)

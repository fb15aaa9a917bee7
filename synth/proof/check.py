#!/usr/bin/env python3
"""Re-derive everything a certificate claims, in exact arithmetic, with nothing but Python's standard library.

    python check.py certificate.json        prints "verified" (exit code 0) or the reasons why not (1; 2: no such file)

Nothing in the file is believed. From its model, gains and links this program forms the closed units itself and then
(numbers in brackets: docs/theory)
  * both routes: needs P > 0 and A'P + PA + 2aP < 0 (storage: the larger matrix (S)), by exact LDL' elimination;
  * peak route: encloses every peak gain |F| + integral |h e^(A+alpha)t d| dt, and sup_t |h e^At|_1, by Taylor cells in
    integer arithmetic; the P-norm of a free response never grows, which bounds remainders, rounding and the tail;
  * storage route: bounds the rows of (6) by comparing squares of rationals;
  * bounds radius, C, alpha, G, every peak and the region where limits hold, and compares them with what is stated:
    a number that is too good is refused, and so is one more than 0.001 % worse than derived (it is not this proof's).
The sentences of a certificate are made here from its numbers and must agree letter for letter.
"""

from __future__ import annotations

import csv
import hashlib
import json
import operator
import os
import re
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from math import factorial, isqrt, lcm
from typing import Any

SCHEMA, VERSION = "localgain certificate", 1
BITS, TERMS, DEPTH = 112, 24, 18  # fixed point 2^-112; Taylor terms per cell; halvings of a cell
HALVING = 1 << TERMS  # what the coefficients cut off by one halving can add up to: sum over j < TERMS of 2^j is less
LOOSE = Fraction(1, 10**5)  # a stated bound may exceed the derived one by this part (seven digits need less), no more
FIELDS = (
    "schema version network_hash model gains route target evidence radius point constants peaks validity claim covers "
    "excludes cautions provenance hash"
)
NORM = (
    "maximum norm: x, the largest absolute value of a state over all units, each in its declared unit; "
    "w, the largest absolute value of a disturbance over all units and times, likewise"
)
MEANING = (
    "X0: initial size that keeps every limit while disturbances stay within their declared peaks; w: size of "
    "disturbances, from rest, that keeps every limit; factor: the same as a multiple of the declared peaks"
)
CAUTIONS = (
    "Engineering aid, not an approval: the numbers hold for the model in the problem file and only as far as it "
    "describes the plant.",
    "Local codes, the functional-safety procedure of the site and the judgement of the licensed engineer in charge "
    "take precedence.",
    "Commission in steps, with independent protection (brakes, trips, relief) that does not depend on these gains.",
    "Gains are for the sign convention u = K y written beside them; a turned sign or a wrong unit can destabilise the "
    "plant.",
)
Row = list[Fraction]
Matrix = list[Row]


class Rejected(Exception):
    """The certificate does not prove what it claims; the sentence says why."""


def need(condition: bool, sentence: str) -> None:
    """Raise Rejected with the sentence unless the condition holds."""
    if not condition:
        raise Rejected(sentence)


# ---------------------------------------------------------------- reading: exactly the expected fields, exact numbers


def fields(value: Any, names: str, where: str) -> dict[str, Any]:
    """The value, if it is an object with exactly these fields."""
    need(isinstance(value, dict) and set(value) == set(names.split()), f"{where} must have exactly the fields {names}")
    return dict(value)


def items(value: Any, where: str) -> list[Any]:
    """The value, if it is a list of at most 400 entries."""
    need(isinstance(value, list) and len(value) <= 400, f"{where} must be a list")
    return list(value)


def text(value: Any, where: str) -> str:
    """The value, if it is a non-empty text."""
    need(isinstance(value, str) and value != "", f"{where} must be a text")
    return str(value)


def number(value: Any, where: str) -> Fraction:
    """A number written as text: a decimal or p/q, read exactly."""
    good = isinstance(value, str) and len(value) <= 2000
    good = good and re.fullmatch(r"-?\d+(/[1-9]\d*|(\.\d+)?([eE][+-]?\d{1,3})?)", value, re.ASCII) is not None
    need(good, f"{where} must be a number written as an exact text")
    return Fraction(value)


def positive(value: Any, where: str) -> Fraction:
    """A number above zero."""
    found = number(value, where)
    need(found > 0, f"{where} must be positive")
    return found


def optional(value: Any, where: str) -> Fraction | None:
    """A positive number, or None for no bound."""
    return None if value is None else positive(value, where)


def matrix(value: Any, height: int, width: int, where: str) -> Matrix:
    """A matrix of exact numbers of the given shape."""
    rows = [[number(v, where) for v in items(row, where)] for row in items(value, where)]
    need(len(rows) == height and all(len(row) == width for row in rows), f"{where} must be {height} x {width}")
    return rows


# ---------------------------------------------------------------- exact and outward-rounded arithmetic


def mul(X: Matrix, Y: Matrix, width: int) -> Matrix:
    """X Y, where Y has the given width (needed when Y has no rows)."""
    return [[sum((x * Y[k][j] for k, x in enumerate(row) if x), Fraction(0)) for j in range(width)] for row in X]


def plus(X: Matrix, Y: Matrix) -> Matrix:
    """X + Y."""
    return [[a + b for a, b in zip(*rows, strict=True)] for rows in zip(X, Y, strict=True)]


def transpose(X: Matrix) -> Matrix:
    """The transpose of a matrix with at least one row."""
    return [list(column) for column in zip(*X, strict=True)]


def definite(X: Matrix) -> bool:
    """Whether a symmetric matrix is positive definite: every pivot of its LDL' elimination is positive."""
    rest = [row[:] for row in X]
    while rest:
        top = rest[0]
        if top[0] <= 0:
            return False
        rest = [[v - row[0] * w / top[0] for v, w in zip(row[1:], top[1:], strict=True)] for row in rest[1:]]
    return True


def solve(X: Matrix, Y: Matrix) -> Matrix:
    """The matrix Z with X Z = Y, by exact Gauss-Jordan elimination; Rejected if X is singular."""
    size = len(X)
    rows = [list(x) + list(y) for x, y in zip(X, Y, strict=True)]
    for i in range(size):
        pivot = next((k for k in range(i, size) if rows[k][i]), None)
        if pivot is None:
            raise Rejected("a linear system of the proof is singular")
        rows[i], rows[pivot] = rows[pivot], rows[i]
        rows[i] = [v / rows[i][i] for v in rows[i]]
        for k in range(size):
            if k != i and rows[k][i]:
                rows[k] = [v - rows[k][i] * w for v, w in zip(rows[k], rows[i], strict=True)]
    return [row[size:] for row in rows]


def rounded(value: Fraction, up: bool) -> Fraction:
    """A number >= 0 cut to about 70 binary digits, upward or downward, so that fractions stay short."""
    shift = 70 + value.denominator.bit_length() - value.numerator.bit_length()
    scaled = value * Fraction(2) ** shift
    return Fraction(-(-scaled.numerator // scaled.denominator) if up else scaled.numerator // scaled.denominator) / (
        Fraction(2) ** shift
    )


def root(value: Fraction, up: bool = True) -> Fraction:
    """The square root of a number >= 0, rounded upward (or downward) at about 70 binary digits."""
    need(value >= 0, "a square root of a negative number was met")
    shift = 70 + max(0, value.denominator.bit_length() - value.numerator.bit_length())
    low = isqrt((value.numerator << (2 * shift)) // value.denominator)
    return Fraction(low + (1 if up and value else 0), 1 << shift)


def exp_above(x: Fraction) -> Fraction:
    """An upper bound of e^x for x >= 0: the series of x/2^k with its remainder, squared k times."""
    need(0 <= x <= 700, "an exponent is out of range")
    halvings = max(0, x.numerator.bit_length() - x.denominator.bit_length() + 3)
    y = rounded(x / 2**halvings, up=True)
    total = sum((y**j / factorial(j) for j in range(20)), Fraction(0)) + 2 * y**20 / factorial(20)
    for _ in range(halvings + 1):
        total = rounded(total, up=True)
        total = total * total if _ < halvings else total
    return total


# ---------------------------------------------------------------- closed units


@dataclass
class Line:
    """One scalar of a unit, line = x . state + v . taken + w . disturbance: an offer, a state or an actuator."""

    kind: str
    role: str
    signal: str
    unit: str
    limit: Fraction | None
    x: Row
    v: Row
    w: Row


@dataclass
class Unit:
    """A kind with its loop closed: x' = A x + D v + E w, its lines (offers first), and the declared peaks of w."""

    name: str
    A: Matrix
    D: Matrix
    E: Matrix
    lines: list[Line]
    takes: list[str]
    disturbances: list[tuple[str, str, Fraction]]


@dataclass
class Link:
    """Neighbour's part of a link: taken signal += gain * offered signal of the source, no older than delay."""

    name: str
    source: tuple[str, str]
    kind: str
    take: int
    gain: Fraction
    own: Fraction
    delay: Fraction


def signals(value: Any, key: str, where: str) -> list[tuple[str, str, Any]]:
    """(name, physical unit, bound) of every signal of a group; names are unique."""
    found = []
    for entry in items(value, where):
        entry = fields(entry, f"name in {key}", where)
        need(isinstance(entry["in"], str), f"{where}: the physical unit must be a text")
        found.append((text(entry["name"], where), entry["in"], entry[key]))
    need(len({name for name, _, _ in found}) == len(found), f"{where}: a name occurs twice")
    return found


def close(kind: dict[str, Any], links: list[dict[str, Any]], gains: dict[str, Any]) -> Unit:
    """Close the loop u = K y of one kind and fold in the own, fresh part of its relative links (theory 1, case R1)."""
    name = text(kind["name"], "the name of a kind")
    group = {g: signals(kind[g], "band", f"{name}.{g}") for g in ("states", "takes", "offers", "sensors")}
    group["inputs"] = signals(kind["inputs"], "limit", f"{name}.inputs")
    waves = signals(kind["disturbances"], "peak", f"{name}.disturbances")
    need(all(b is None for g in ("takes", "sensors") for _, _, b in group[g]), f"{name}: band on a take or sensor")
    n, m, q = len(group["states"]), len(group["inputs"]), len(group["takes"])
    offers, p, d = len(group["offers"]), len(group["sensors"]), len(waves)
    need(1 <= n <= 60, f"{name} must have 1 to 60 states")
    shape = {"A": (n, n), "B": (n, m), "D": (n, q), "E": (n, d), "C": (p, n), "N": (p, q), "H": (offers, n)}
    shape |= {"F": (offers, q), "Fw": (offers, d), "Fu": (offers, m)}
    kind = {"Fu": [["0"] * m] * offers, **kind}
    X = {key: matrix(kind[key], *size, f"{name}.{key}") for key, size in shape.items()}
    for key, side in (("actuators", "inputs"), ("signals", "sensors")):
        need(gains[key] == [s[0] for s in group[side]], f"the gains of {name} do not name its {side} in order")
    K = matrix(gains["K"], m, p, f"the gains of {name}")
    KN, U = mul(K, X["N"], q), mul(K, X["C"], n)
    D, A, H = plus(X["D"], mul(X["B"], KN, q)), plus(X["A"], mul(X["B"], U, n)), X["H"]
    for link in links:
        own = number(link["own_strength"], "own_strength")
        if link["to"]["kind"] != name or own == 0:
            continue
        take = [s[0] for s in group["takes"]].index(link["to"]["take"])
        need(link["from"]["offer"] in [s[0] for s in group["offers"]], f"{name} has no own value for a relative link")
        k = [s[0] for s in group["offers"]].index(link["from"]["offer"])
        direct = X["F"][k] + X["Fw"][k] + X["Fu"][k]
        need(not any(direct), f"relative link {link['name']} reads an offer with feed-through")
        A = [[a - D[i][take] * own * h for a, h in zip(A[i], X["H"][k], strict=True)] for i in range(n)]
        U = [[u - KN[i][take] * own * h for u, h in zip(U[i], X["H"][k], strict=True)] for i in range(m)]
        H = [[o - X["F"][i][take] * own * h for o, h in zip(H[i], X["H"][k], strict=True)] for i in range(offers)]
    none, eye = [Fraction(0)] * d, [[Fraction(i == j) for j in range(n)] for i in range(n)]
    H, F = plus(H, mul(X["Fu"], U, n)), plus(X["F"], mul(X["Fu"], KN, q))  # z = H x + F v + Fu u, u = U x + KN v
    lines = []
    for role, side, x, v, w in (
        ("offer", "offers", H, F, X["Fw"]),
        ("state", "states", eye, [[Fraction(0)] * q] * n, [none] * n),
        ("actuator", "inputs", U, KN, [none] * m),
    ):
        for i, (signal, unit, bound) in enumerate(group[side]):
            lines.append(Line(name, role, signal, unit, optional(bound, f"{name}.{signal}"), x[i], v[i], w[i]))
    peaks = [(s, unit, number(b, f"{name}.{s}")) for s, unit, b in waves]
    need(all(b >= 0 for _, _, b in peaks), f"{name}: a declared peak is negative")
    return Unit(name, A, D, X["E"], lines, [s[0] for s in group["takes"]], peaks)


def read_model(document: dict[str, Any]) -> tuple[list[Unit], list[Link]]:
    """The closed units and the links of a certificate; Rejected if the model is not exactly as documented."""
    model = fields(document["model"], "description dimension kinds links", "model")
    need(model["description"] == "pattern", "only patterns are proven by this version")
    dimension = model["dimension"]
    need(type(dimension) is int and 1 <= dimension <= 9, "the dimension must be a whole number from 1 to 9")
    keys = "name states inputs disturbances takes offers sensors A B D E C N H F Fw"
    kinds = [fields(kind, keys + " Fu" * ("Fu" in kind), "a kind") for kind in items(model["kinds"], "kinds")]
    names = [text(kind["name"], "the name of a kind") for kind in kinds]
    need(bool(names) and len(set(names)) == len(names), "kinds must be present and have different names")
    gains = [fields(g, "kind actuators signals K", "gains") for g in items(document["gains"], "gains")]
    need([g["kind"] for g in gains] == names, "gains must be given for every kind, in order")
    keys = "name from at to strength own_strength delay"
    extra = {"sort": ("tolerance", "curve"), "own_part": (True,)}  # fields that stand only where they say something
    raw = []
    for x in items(model["links"], "links"):
        more = [key for key in extra if key in x]
        raw.append(fields(x, " ".join([keys, *more]), "a link"))
        need(all(x[key] in extra[key] for key in more), "a link is of a sort that this version does not prove")
    links = []
    for link in raw:
        name = text(link["name"], "the name of a link")
        source, to = fields(link["from"], "kind offer", name), fields(link["to"], "kind take", name)
        need(source["kind"] in names and to["kind"] in names, f"link {name} joins a kind that is not there")
        at = items(link["at"], f"{name}.at")
        need(len(at) == dimension and all(type(v) is int for v in at), f"link {name}: at must be {dimension} integers")
        offers = [s[0] for s in signals(kinds[names.index(source["kind"])]["offers"], "band", name)]
        takes = [s[0] for s in signals(kinds[names.index(to["kind"])]["takes"], "band", name)]
        need(source["offer"] in offers and to["take"] in takes, f"link {name} names a signal that is not there")
        strength, own = number(link["strength"], name), number(link["own_strength"], name)
        delay = number(link["delay"], name)
        need(delay >= 0, f"link {name}: the delay is negative")
        inside = source["kind"] == to["kind"] and not any(at) and delay == own == 0
        need("sort" not in link or inside, f"{name} must stay inside its unit")
        end = (source["kind"], source["offer"])
        links.append(Link(name, end, to["kind"], takes.index(to["take"]), abs(strength), own, delay))
    return [close(kind, raw, g) for kind, g in zip(kinds, gains, strict=True)], links


# ---------------------------------------------------------------- free responses in integer arithmetic


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


# ---------------------------------------------------------------- what the two routes derive


@dataclass
class Derived:
    """Bounds derived from model, gains and evidence: what a certificate may state.

    ``base``, ``unit``, ``start`` hold for every line its peak under the declared disturbances, under disturbances of
    size one, and per unit of initial size; ``radius`` is (lower, upper).
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
    """What the file offers for one kind: P, decay a, and for the storage route the multipliers tau and tau_w."""

    P: Matrix
    a: Fraction
    tau: Row
    tau_w: Row


def read_evidence(document: dict[str, Any], units: list[Unit]) -> list[Evidence]:
    """The evidence, kind by kind; P > 0 and the decay inequality are verified here, exactly and strictly."""
    entries = [fields(e, "kind P a tau tau_w", "evidence") for e in items(document["evidence"], "evidence")]
    need([e["kind"] for e in entries] == [u.name for u in units], "evidence must be given for every kind, in order")
    found = []
    for entry, unit in zip(entries, units, strict=True):
        n, where = len(unit.A), f"the evidence of {unit.name}"
        P, a = matrix(entry["P"], n, n, where), positive(entry["a"], where)
        tau, tau_w = ([positive(v, where) for v in items(entry[key], where)] for key in ("tau", "tau_w"))
        storage = document["route"] == "storage"
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
        found.append(Evidence(P, a, tau, tau_w))
    return found


def read_point(document: dict[str, Any], names: list[str]) -> tuple[Row, Row]:
    """The point of strict decay s > 0 and the point low >= 0 (not all zero) that bounds the radius from below."""
    entries = [fields(e, "of s low", "point") for e in items(document["point"], "point")]
    need([e["of"] for e in entries] == names, "the point must name every row of the gain operator, in order")
    s, low = [positive(e["s"], "point") for e in entries], [number(e["low"], "point") for e in entries]
    need(all(v >= 0 for v in low), "the lower point has a negative entry")
    return s, low


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


def apply(M: Matrix, s: Row) -> Row:
    """M s."""
    return [sum((m * v for m, v in zip(row, s, strict=True)), Fraction(0)) for row in M]


def resolvent(M: Matrix, b: Row) -> Row:
    """y with (I - M) y = b, exactly."""
    system = [[Fraction(i == j) - v for j, v in enumerate(row)] for i, row in enumerate(M)]
    return [row[0] for row in solve(system, [[v] for v in b])]


def contraction(M: Matrix) -> None:
    """Rejected unless the radius of M >= 0 is below 1: y = M y + 1 > M y with y > 0 (10)."""
    y = resolvent(M, [Fraction(1)] * len(M))
    need(all(v > 0 for v in y), "the weighted gain operator does not contract at the claimed rate")


def least(images: Row, low: Row) -> Fraction:
    """The lower bound inf over {low > 0} of image/low of the radius (10); zero where low vanishes altogether."""
    return min((v / w for v, w in zip(images, low, strict=True) if w), default=Fraction(0))


def operators(
    units: list[Unit], links: list[Link], gains: list[Gains], growth: Row | None = None
) -> tuple[Matrix, Matrix]:
    """Lower and upper bound of the gain operator on the offers of one cell (theory (1), (4), (9))."""
    names = [(unit.name, line.signal) for unit in units for line in unit.lines if line.role == "offer"]
    low, up = ([[Fraction(0)] * len(names) for _ in names] for _ in range(2))
    for link, grown in zip(links, growth or [Fraction(1)] * len(links), strict=True):
        j = names.index(link.source)
        u = next(u for u, unit in enumerate(units) if unit.name == link.kind)
        for k, line in enumerate(units[u].lines):
            if line.role == "offer":
                i = names.index((line.kind, line.signal))
                low[i][j] += gains[u].take_low[k][link.take] * link.gain * grown
                up[i][j] += gains[u].take[k][link.take] * link.gain * grown
    return low, up


def slim(unit: Unit) -> Unit:
    """The unit without disturbances and actuators: all that a rate needs."""
    lines = [replace(line, w=[]) for line in unit.lines if line.role != "actuator"]
    return replace(unit, lines=lines, disturbances=[], E=[[] for _ in unit.A])


def derive_peak(
    document: dict[str, Any], units: list[Unit], links: list[Link], measure: Measure = unit_gains
) -> Derived:
    """The peak route (theory 3a, 3c): M s <= radius s, then every constant from exact solutions of (I - M) y = b."""
    evidence = read_evidence(document, units)
    alpha = positive(fields(document["constants"], "C alpha G norm", "constants")["alpha"], "alpha")
    plain = [measure(unit, e, Fraction(0)) for unit, e in zip(units, evidence, strict=True)]
    fast = [measure(slim(unit), e, alpha) for unit, e in zip(units, evidence, strict=True)]
    outlets = [(u, k) for u, unit in enumerate(units) for k, line in enumerate(unit.lines) if line.role == "offer"]
    names = [(units[u].name, units[u].lines[k].signal) for u, k in outlets]
    growth = [exp_above(alpha * link.delay) for link in links]
    M_low, M = operators(units, links, plain)
    M_fast = operators(units, links, fast, growth)[1]
    s, low = read_point(document, [".".join(name) for name in names])
    found = Derived(
        radius=(
            least(apply(M_low, low), low),
            max((v / w for v, w in zip(apply(M, s), s, strict=True)), default=Fraction(0)),
        )
    )
    need(found.radius[1] < 1, "the gain operator does not contract at the point s")

    def peaks(gains: list[Gains], N: Matrix, grown: Row, own: list[Row]) -> Row:
        """Bound of every line: own part plus what comes in through the links, from (I - N) z = own part of offers."""
        y = resolvent(N, [rounded(own[u][k], up=True) for u, k in outlets])
        inflow = [[Fraction(0)] * len(unit.takes) for unit in units]
        for link, g in zip(links, grown, strict=True):
            u = next(u for u, unit in enumerate(units) if unit.name == link.kind)
            inflow[u][link.take] += link.gain * g * y[names.index(link.source)]
        return [
            own[u][k] + sum((p * v for p, v in zip(gains[u].take[k], inflow[u], strict=True)), Fraction(0))
            for u in range(len(units))
            for k in range(len(own[u]))
        ]

    one = [Fraction(1)] * len(links)
    declared = [[b for _, _, b in unit.disturbances] for unit in units]
    found.lines = [line for unit in units for line in unit.lines]
    found.base = peaks(plain, M, one, [apply(g.wave, w) for g, w in zip(plain, declared, strict=True)])
    found.unit = peaks(plain, M, one, [[sum(row, Fraction(0)) for row in g.wave] for g in plain])
    found.start = peaks(plain, M, one, [g.start for g in plain])
    contraction(M_fast)
    rates = peaks(fast, M_fast, growth, [g.start for g in fast])
    lines = [line for line in found.lines if line.role != "actuator"]
    found.C = max(r for r, line in zip(rates, lines, strict=True) if line.role == "state")
    found.G = max(r for r, line in zip(found.unit, found.lines, strict=True) if line.role == "state")
    return found


class Storage:
    """The gain operator of the storage route, one row per kind: r = |x|_P obeys (6), and |z| <= zeta r."""

    def __init__(self, units: list[Unit], links: list[Link], evidence: list[Evidence]) -> None:
        """Keep the parts, and the square of the least zeta of every line: line P^-1 line'."""
        self.units, self.links, self.evidence = units, links, evidence
        self.names = [unit.name for unit in units]
        eyes = [[[Fraction(i == j) for j in range(len(e.P))] for i in range(len(e.P))] for e in evidence]
        inverses = [solve(e.P, eye) for e, eye in zip(evidence, eyes, strict=True)]
        self.square = [
            [sum(map(Fraction.__mul__, x.x, apply(V, x.x)), Fraction(0)) for x in unit.lines]
            for unit, V in zip(units, inverses, strict=True)
        ]
        self.offers = [
            {x.signal: root(q) for x, q in zip(unit.lines, row, strict=True) if x.role == "offer"}
            for unit, row in zip(units, self.square, strict=True)
        ]

    def inflow(self, r: Row) -> list[Row]:
        """What may arrive at every take when every unit j stays within r_j."""
        found = [[Fraction(0)] * len(unit.takes) for unit in self.units]
        for link in self.links:
            j = self.names.index(link.source[0])
            found[self.names.index(link.kind)][link.take] += link.gain * self.offers[j][link.source[1]] * r[j]
        return found

    def rows(self, r: Row, waves: list[Row]) -> Row:
        """The square of every row of the gain operator at r, with disturbances of these sizes."""
        total = []
        for e, v, w in zip(self.evidence, self.inflow(r), waves, strict=True):
            taken = sum((t * x * x for t, x in zip(e.tau, v, strict=True)), Fraction(0))
            total.append((taken + sum((t * x * x for t, x in zip(e.tau_w, w, strict=True)), Fraction(0))) / (2 * e.a))
        return total

    def settled(self, waves: list[Row], s: Row, ratio: Row) -> Row:
        """r with rows(r, waves) <= r^2: a multiple of s (3c), then lowered by applying the rows again and again."""
        calm = [Fraction(0)] * len(s)
        extra = zip(self.rows(calm, waves), ratio, s, strict=True)
        size = root(max(q / ((1 - less) * v * v) for q, less, v in extra))
        r = [size * v for v in s]
        for _ in range(60):
            r = [min(v, root(q)) for v, q in zip(r, self.rows(r, waves), strict=True)]
        return r

    def peaks(self, r: Row) -> Row:
        """Bound of every line while every unit stays within r."""
        return [
            root(q) * r[u] + sum((abs(a) * b for a, b in zip(line.v, v, strict=True)), Fraction(0))
            for u, v in enumerate(self.inflow(r))
            for line, q in zip(self.units[u].lines, self.square[u], strict=True)
        ]


def derive_storage(document: dict[str, Any], units: list[Unit], links: list[Link]) -> Derived:
    """The storage route with root-sum-square rows (theory 3b, (6)-(8), 3c): r = |x|_P of every unit obeys

    (r^2)' <= -2a r^2 + sum tau (sum g zeta r_j)^2 + sum tau_w w^2,   zeta: least with |z| <= zeta r.
    """
    evidence = read_evidence(document, units)
    alpha = positive(fields(document["constants"], "C alpha G norm", "constants")["alpha"], "alpha")
    need(
        not any(line.role == "offer" and any(line.v + line.w) for unit in units for line in unit.lines),
        "the storage route takes no offers with feed-through",
    )
    storage = Storage(units, links, evidence)
    s, low = read_point(document, storage.names)
    calm = [[Fraction(0)] * len(unit.disturbances) for unit in units]
    ratio = [q / v**2 for q, v in zip(storage.rows(s, calm), s, strict=True)]
    need(max(ratio) < 1, "the gain operator does not contract at the point s")
    for name, e, q in zip(storage.names, evidence, ratio, strict=True):
        oldest = max((link.delay for link in links if link.kind == name), default=Fraction(0))
        need(alpha <= e.a * (1 - q * exp_above(2 * alpha * oldest)), f"{name} does not reach the claimed rate (8)")
    found = Derived(lines=[line for unit in units for line in unit.lines])
    lower = least(storage.rows(low, calm), [v * v for v in low]) * (1 - Fraction(1, 1 << 60))  # zeta was rounded up
    found.radius = root(lower, up=False), root(max(ratio))
    declared = [[b for _, _, b in unit.disturbances] for unit in units]
    ones = [[Fraction(1)] * len(unit.disturbances) for unit in units]
    found.base = storage.peaks(storage.settled(declared, s, ratio))
    found.unit = storage.peaks(storage.settled(ones, s, ratio))
    sums = [sum((abs(v) for row in e.P for v in row), Fraction(0)) for e in evidence]
    initial = max(root(q) / v for q, v in zip(sums, s, strict=True))
    found.start = storage.peaks([initial * v for v in s])
    states = [k for k, line in enumerate(found.lines) if line.role == "state"]
    found.C, found.G = max(found.start[k] for k in states), max(found.unit[k] for k in states)
    return found


def derive(document: dict[str, Any], measure: Measure = unit_gains) -> Derived:
    """All bounds that follow from model, gains, route, evidence, point and alpha of a document; Rejected if none do.

    ``measure`` lets a builder that has just called unit_gains remember its results; checking never passes one.
    """
    units, links = read_model(document)
    need(document["route"] in ("peak", "storage"), "the route must be peak or storage")
    if document["route"] == "peak":
        return derive_peak(document, units, links, measure)
    return derive_storage(document, units, links)


# ---------------------------------------------------------------- the sentences, made from the numbers


def shown(value: Any) -> str:
    """A number as a person writes it: the decimal where a short one is exact, else p/q."""
    exact = number(value, "a number")
    short = f"{float(exact):.12g}"
    return short if Fraction(short) == exact else str(exact)


def sentences(document: dict[str, Any]) -> tuple[str, list[str], list[str]]:
    """(claim, covers, excludes) of a document, from its numbers alone."""
    constants, valid, links = document["constants"], document["validity"], document["model"]["links"]
    limited = any(peak["limit"] is not None for peak in document["peaks"])
    claim = (
        f"For any number of units: sup_i |x_i(t)| <= C e^(-alpha t) X0 + G sup|w| with C = {constants['C']}, "
        f"alpha = {constants['alpha']} 1/s, G = {constants['G']} ({constants['norm']}; X0 bounds every state at the "
        f"start and over the longest delay before it, and what offers with feed-through had stored). The gain operator "
        f"of the {document['route']} route has radius at most {document['radius']['upper']}, not above the target "
        f"{shown(document['target'])}."
    )
    if limited:
        claim += (
            f" It holds while no actuator saturates; no actuator reaches its limit and no band is left when X0 <= "
            f"{valid['X0']} and the disturbances stay within their declared peaks, or from rest when |w| <= "
            f"{valid['w']}."
        )
    covers = [
        "any number of units: the pattern without end, closed to a ring, or cut to a finite section whose missing "
        "neighbours are read as zero while the own parts of relative links stay in force"
    ]
    for link in links:
        if "sort" in link:
            what = {
                "tolerance": "any value, steady or varying in time, within the declared tolerance",
                "curve": "any nonlinear term inside its sector, while its argument stays in the band",
            }
            covers.append(f"{link['name']} ({link['to']['kind']}): {what[link['sort']]}")
            continue
        fresh = number(link["delay"], "delay") == 0
        age = (
            "the present value"
            if fresh
            else f"values no older than {shown(link['delay'])} s, constant or varying age, held or lost"
        )
        covers.append(
            f"link {link['name']} ({link['from']['kind']}.{link['from']['offer']} at {link['at']} to "
            f"{link['to']['kind']}.{link['to']['take']}): {age}; any strength, steady or varying, up to "
            f"{shown(link['strength']).lstrip('-')} in "
            f"absolute value (weakened, lost to zero, of either sign)"
        )
    for kind in document["model"]["kinds"]:
        covers += [
            f"disturbance {kind['name']}.{w['name']}: any course in time, declared peak {shown(w['peak'])} {w['in']}"
            for w in kind["disturbances"]
        ]
    excludes = [
        "sampling, computation delay and rounding of the firmware: the proof is about the continuous loop",
        "a saturated actuator, and any state outside the region of validity",
        "dynamics that the model leaves out, and gains or model parameters away from their stated values"
        + (" and tolerances" if any("sort" in link for link in links) else ""),
        "link values older, or strengths larger, than listed under covers; sensor noise and failed sensors",
    ]
    if any(number(link["own_strength"], "g") for link in links):
        excludes.append("the own part of a relative link late, lost or away from its nominal strength")
    if any("sort" in link for link in links):
        excludes.append(
            "how tolerances and sectors follow from the equations: the reader of the problem file bounds them"
        )
    if any(number(v, "N") for kind in document["model"]["kinds"] for row in kind["N"] for v in row):
        excludes.append("a controller that hears a taken signal later, or otherwise, than it acts on its unit")
    return claim, covers, excludes


# ---------------------------------------------------------------- comparing what is stated with what is derived


def canonical(value: Any) -> str:
    """JSON with sorted keys and no spaces, the form that is hashed."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def digest(value: Any) -> str:
    """SHA-256 of the canonical form."""
    return hashlib.sha256(canonical(value).encode("utf-8")).hexdigest()


def above(stated: Any, bound: Fraction, what: str) -> None:
    """A stated upper bound must not be below the derived one, nor needlessly above it."""
    value = number(stated, what)
    need(value >= bound, f"{what} is stated as {stated}, but only {float(bound):.9g} can be derived")
    need(
        value <= bound * (1 + LOOSE) + Fraction(1, 10**9),
        f"{what} is stated as {stated}; this proof gives {float(bound):.9g}",
    )


def below(stated: Any, room: Fraction | None, what: str) -> None:
    """A stated range must stay strictly inside the derived one ('inf' where nothing limits it), by at most 0.001 %."""
    if room is None or stated == "inf":
        need(room is None and stated == "inf", f"{what} does not agree with the limits of the model")
        return
    need(
        room * (1 - LOOSE) <= number(stated, what) < room,
        f"{what} is stated as {stated}, derived: below {float(room):.9g}",
    )


def compare(document: dict[str, Any], found: Derived) -> None:
    """Rejected unless every number and sentence of the document is what its evidence proves."""
    target = positive(document["target"], "target")
    radius = fields(document["radius"], "lower upper", "radius")
    above(radius["upper"], found.radius[1], "radius.upper")
    need(
        number(radius["upper"], "radius") <= target < 1, "the radius is not below the target, or the target not below 1"
    )
    lower = number(radius["lower"], "radius.lower")
    need(
        found.radius[0] * (1 - LOOSE) - Fraction(1, 10**9) <= lower <= found.radius[0] and lower >= 0,
        "radius.lower is not the derived one",
    )
    above(document["constants"]["C"], found.C, "C")
    above(document["constants"]["G"], found.G, "G")
    stated = [fields(p, "kind role signal value in limit", "peaks") for p in items(document["peaks"], "peaks")]
    need(len(stated) == len(found.lines), "peaks must be stated for every offer, state and actuator")
    for peak, line, base in zip(stated, found.lines, found.base, strict=True):
        what = f"the peak of {line.kind}.{line.signal}"
        names = [peak[key] for key in ("kind", "role", "signal", "in")]
        need(names == [line.kind, line.role, line.signal, line.unit], f"{what} is missing or misnamed")
        above(peak["value"], base, what)
        need(optional(peak["limit"], what) == line.limit, f"{what} names another limit than the model")
        if line.limit is not None:
            need(
                base < line.limit,
                f"the declared disturbances alone may drive {line.kind}.{line.signal} to {float(base):.6g} "
                f"{line.unit}, at or beyond its limit of {float(line.limit):.6g}; what rests on keeping limits does "
                f"not hold",
            )
    valid = fields(document["validity"], "X0 w factor meaning", "validity")
    none = [Fraction(0)] * len(found.lines)
    below(valid["X0"], found.room(found.base, found.start), "validity.X0")
    below(valid["w"], found.room(none, found.unit), "validity.w")
    below(valid["factor"], found.room(none, found.base), "validity.factor")


def wording(document: dict[str, Any]) -> None:
    """Rejected unless every fixed text and every sentence is the one that the numbers make."""
    need(document["constants"]["norm"] == NORM, "the norm is not the documented one")
    need(document["validity"]["meaning"] == MEANING, "the meaning of validity is not the documented one")
    need(document["cautions"] == list(CAUTIONS), "the cautions are missing or changed")
    claim, covers, excludes = sentences(document)
    need(document["claim"] == claim, "the claim is not the sentence that its numbers make")
    need(document["covers"] == covers, "covers does not follow from the model")
    need(document["excludes"] == excludes, "excludes does not follow from the model")


def check_document(document: Any) -> list[str]:
    """Reasons why the document does not prove its claim; empty exactly when every part was re-derived."""
    try:
        document = fields(document, FIELDS, "the certificate")
        need(document["schema"] == SCHEMA and type(document["version"]) is int, "not a certificate of this kind")
        need(document["version"] == VERSION, "another version of certificate")
        rest = {key: value for key, value in document.items() if key != "hash"}
        need(document["hash"] == digest(rest), "the content was changed after the certificate was made (hash)")
        need(document["network_hash"] == digest(document["model"]), "network_hash does not belong to the model")
        origin = fields(document["provenance"], "network_hash settings versions", "provenance")
        need(origin["network_hash"] == document["network_hash"], "the provenance names another network")
        wording(document)
        compare(document, derive(document))
    except Rejected as reason:
        return [str(reason)]
    except (ArithmeticError, LookupError, TypeError, ValueError, AttributeError, RecursionError, MemoryError) as error:
        return [f"the certificate is malformed ({type(error).__name__}: {error})"]
    return []


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    need(len({key for key, _ in pairs}) == len(pairs), "a field occurs twice")
    return dict(pairs)


def check_text(content: str) -> list[str]:
    """Reasons why the text of a certificate file does not prove its claim; empty when it does."""
    try:
        document = json.loads(content, object_pairs_hook=_once)
    except (Rejected, ValueError, RecursionError) as error:
        return [f"not a readable certificate: {error}"]
    return check_document(document)


def beside(path: str, proven: dict[tuple[str, str, str], str]) -> int:
    """Compare the gain table that lies beside the certificate, if one does: 0 the same gains, 1 not."""
    if not os.path.exists(path):  # noqa: PTH110
        return 0
    try:
        with open(path, encoding="utf-8", newline="") as stream:  # noqa: PTH123
            rows = list(csv.DictReader(line for line in stream if not line.startswith("#")))
        table = {(row["kind"], row["actuator"], row["signal"]): Fraction(row["gain"]) for row in rows}
        whole = {key: Fraction(value) for key, value in proven.items()}
        same = len(table) == len(rows) and all(table.get(k, 0) == whole.get(k, 0) for k in table.keys() | whole.keys())
        same = same and all(row["sign_convention"] == "u = K y" for row in rows)
    except (OSError, ValueError, LookupError, TypeError, csv.Error):
        same = False
    print("gains.csv beside it holds the same gains" if same else "NOT THE PROVEN GAINS: gains.csv beside it differs")
    return 0 if same else 1


def main(arguments: list[str]) -> int:
    """Check one file; print the result; 0 verified, 1 not verified, 2 no such file."""
    if len(arguments) != 1:
        print("usage: python check.py certificate.json")
        return 2
    try:
        with open(arguments[0], encoding="utf-8") as stream:  # noqa: PTH123 - the shortest standard way
            content = stream.read()
        reasons = check_text(content)
    except (OSError, UnicodeDecodeError) as error:
        print(f"cannot read {arguments[0]}: {error}")
        return 2
    print("\n".join(reasons) if reasons else "verified: every number was derived again in exact arithmetic")
    if reasons:
        return 1
    document = json.loads(content)
    print(f"network {document['network_hash']}\n{document['claim']}\nThe gains, u = K y:")
    proven = {
        (g["kind"], actuator, signal): value
        for g in document["gains"]
        for actuator, row in zip(g["actuators"], g["K"], strict=True)
        for signal, value in zip(g["signals"], row, strict=True)
    }
    for (kind, actuator, signal), value in proven.items():
        print(f"  {kind}: {actuator} {signal} {shown(value)}")
    return beside(os.path.join(os.path.dirname(arguments[0]), "gains.csv"), proven)  # noqa: PTH118, PTH120


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))

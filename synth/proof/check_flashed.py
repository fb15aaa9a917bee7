#!/usr/bin/env python3
"""Units as flashed, read from a certificate of the firmware route: the loops of check_firmware.py.

At k T a unit's controller reads y = C x + N v (with the own parts of relative links in it), computes u_k = K y, and the
command is in force from k T + d to (k+1) T + d. Errors enter as inlets: of a sample through the column of K, of a
command directly, of a state that the firmware keeps once per period. Such a state stands still between samples and is
advanced by T times its rate at the sample. Nothing but Python's standard library is used.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING or __package__:
    from synth.proof import check
else:  # the files lie side by side in a hand-off bundle
    import check

FORMS = {
    "exact": None,
    "single": (Fraction(1, 2**24), Fraction(1, 2**149)),
    "double": (Fraction(1, 2**53), Fraction(1, 2**1074)),
}  # relative and absolute rounding of one product
Row = list[Fraction]
Matrix = list[Row]


@dataclass
class Inlet:
    """What enters: D at all times; at every sample gu into the command, gx into x at the end of the period."""

    D: Row
    gu: Row
    gx: Row


@dataclass
class Line:
    """One scalar: row over (states, commands), what passes of takes and disturbances at once."""

    role: str
    signal: str
    row: Row
    v: Row
    w: Row
    through: int | None = None  # the sensor whose own error passes at once


@dataclass
class Flashed:
    """A kind with its sampled loop; ``errors``: roundings with their bounds; ``floats``: (sensor, command, size)."""

    name: str
    A: Matrix
    B: Matrix
    R: Matrix
    Z: Matrix
    T: Fraction
    d: Fraction
    takes: list[Inlet]
    waves: list[Inlet]
    errors: list[tuple[Inlet, Fraction]]
    lines: list[Line]
    floats: list[tuple[int, int, Fraction]] = field(default_factory=list)


def unit(size: int) -> Matrix:
    """The identity."""
    return [[Fraction(int(i == j)) for j in range(size)] for i in range(size)]


def column(X: Matrix, j: int) -> Row:
    """One column."""
    return [row[j] for row in X]


@dataclass
class Plant:
    """One kind as the file gives it, the own parts of its relative links folded in, with its gains."""

    names: dict[str, list[str]]
    X: dict[str, Matrix]
    K: Matrix

    def count(self, group: str) -> int:
        """How many signals a group has."""
        return len(self.names[group])


def plant(kind: dict[str, Any], links: list[dict[str, Any]], gains: dict[str, Any]) -> Plant:
    """Read one kind; own parts of relative links act on the plant at once, and on sensors when they sample."""
    groups = ("states", "inputs", "takes", "offers", "sensors", "disturbances")
    names = {g: [s["name"] for s in kind[g]] for g in groups}
    n, m, q, z, p, w = (len(names[g]) for g in groups)
    shape = {"A": (n, n), "B": (n, m), "D": (n, q), "E": (n, w), "C": (p, n), "N": (p, q), "H": (z, n)}
    shape |= {"F": (z, q), "Fw": (z, w), "Fu": (z, m)}
    kind = {"Fu": [["0"] * m] * z, **kind}
    X = {key: check.matrix(kind[key], *size, key) for key, size in shape.items()}
    plain = X["H"]
    for link in links:
        own = check.number(link["own_strength"], "own_strength")
        if link["to"]["kind"] != kind["name"] or not own:
            continue
        j, h = names["takes"].index(link["to"]["take"]), plain[names["offers"].index(link["from"]["offer"])]
        for key, through in (("A", "D"), ("C", "N"), ("H", "F")):
            by = column(X[through], j)
            X[key] = [[v - f * own * o for v, o in zip(row, h, strict=True)] for f, row in zip(by, X[key], strict=True)]
    return Plant(names, X, check.matrix(gains["K"], m, p, "K"))


def quanta(value: Any, count: int, where: str) -> Row:
    """Distances of neighbouring numbers, zero where nothing is rounded."""
    found = [check.number(v, where) for v in check.items(value, where)]
    check.need(len(found) == count and all(v >= 0 for v in found), f"{where}: {count} quanta that are not negative")
    return found


def stored_states(one: Plant, part: dict[str, Any], where: str) -> dict[int, tuple[Fraction, str | None]]:
    """Number of each state that the firmware keeps: (quantum, the sensor whose errors it integrates)."""
    found: dict[int, tuple[Fraction, str | None]] = {}
    for entry in check.items(part["stored"], where):
        entry = check.fields(entry, "state quantum integrates", where)
        check.need(entry["state"] in one.names["states"], f"{where}: a stored state is not there")
        i, sensor = one.names["states"].index(entry["state"]), entry["integrates"]
        check.need(i not in found, f"{where}: a state is stored twice")
        check.need(sensor is None or sensor in one.names["sensors"], f"{where}: a sensor is not there")
        check.need(not any(one.X["E"][i]), f"{where}: a disturbance drives a stored state")
        found[i] = quanta([entry["quantum"]], 1, where)[0], sensor
    return found


def flashed(one: Plant, part: dict[str, Any], T: Fraction, d: Fraction) -> Flashed:
    """Close the sampled loop of one kind."""
    where = f"firmware.{part['kind']}"
    n, m, q, w = (one.count(group) for group in ("states", "inputs", "takes", "disturbances"))
    X, K, kept = one.X, one.K, stored_states(one, part, where)
    R, KN = check.mul(K, X["C"], n), check.mul(K, X["N"], q)
    still, none = [Fraction(0)] * n, [Fraction(0)] * m
    rate = check.plus(X["A"], check.mul(X["B"], R, n))
    Z = [[T * v for v in row] if i in kept else still for i, row in enumerate(rate)]

    def sample(gu: Row, gx: Row) -> Inlet:
        """A sampled entry, with what stored states make of the command of the same sample."""
        more = [sum((b * g for b, g in zip(X["B"][i], gu, strict=True)), Fraction(0)) for i in range(n)]
        return Inlet(
            still, gu, [x + (T * y if i in kept else 0) for i, (x, y) in enumerate(zip(gx, more, strict=True))]
        )

    takes = []
    for j in range(q):
        D = column(X["D"], j)
        heard = sample(column(KN, j), [T * v if i in kept else Fraction(0) for i, v in enumerate(D)])
        takes.append(Inlet([Fraction(0) if i in kept else v for i, v in enumerate(D)], heard.gu, heard.gx))
    waves = [Inlet(column(X["E"], j), none, still) for j in range(w)]
    errors = []
    for j, (size, name) in enumerate(
        zip(quanta(part["sensors"], len(X["C"]), where), one.names["sensors"], strict=True)
    ):
        integrated = [T if i in kept and kept[i][1] == name else Fraction(0) for i in range(n)]
        errors.append((sample(column(K, j), integrated), size / 2))
    commands = [sample(row, still) for row in unit(m)]
    errors += list(zip(commands, command_errors(one, part, where), strict=True))
    errors += [(Inlet(still, none, unit(n)[i]), quantum / 2) for i, (quantum, _) in kept.items()]
    A, B = ([[Fraction(0)] * len(row) if i in kept else row for i, row in enumerate(X[key])] for key in "AB")
    found = Flashed(part["kind"], A, B, R, Z, T, d, takes, waves, errors, lines(one))
    form = FORMS[part["form"]]
    if form:
        check.need(not kept, f"{where}: a state stored in floating point is not proven by this version")
        add_readings(found, one, form[0], commands)
    return found


def lines(one: Plant) -> list[Line]:
    """Offers, states and actuators of a unit."""
    n, m, X = one.count("states"), one.count("inputs"), one.X
    still, none = [Fraction(0)] * n, [Fraction(0)] * m
    found = [Line("offer", s, X["H"][k] + X["Fu"][k], X["F"][k], X["Fw"][k]) for k, s in enumerate(one.names["offers"])]
    found += [Line("state", s, row + none, [], []) for s, row in zip(one.names["states"], unit(n), strict=True)]
    found += [Line("actuator", s, still + row, [], []) for s, row in zip(one.names["inputs"], unit(m), strict=True)]
    return found


def command_errors(one: Plant, part: dict[str, Any], where: str) -> Row:
    """Bound of what rounds a command: itself, the products summed for it, and the smallest floating-point numbers."""
    check.need(part["form"] in FORMS, f"{where}: the form of arithmetic must be one of {', '.join(FORMS)}")
    form, m = FORMS[part["form"]], one.count("inputs")
    found = []
    for row, own, each in zip(
        one.K, quanta(part["commands"], m, where), quanta(part["products"], m, where), strict=True
    ):
        products = sum(1 for v in row if v)
        found.append((own + products * each) / 2 + (products * form[1] if form else 0))
    return found


def add_readings(found: Flashed, one: Plant, relative: Fraction, commands: list[Inlet]) -> None:
    """Floating point: the error of a sum of n products is at most (n + 1) u sum |K_j| |y_j|, in any order.

    So every reading becomes a line, and every command an inlet after the takes, of that strength from each reading.
    """
    q, m, none = one.count("takes"), one.count("inputs"), [Fraction(0)] * one.count("inputs")
    found.lines += [
        Line("reading", s, one.X["C"][j] + none, one.X["N"][j], [], j) for j, s in enumerate(one.names["sensors"])
    ]
    for i, row in enumerate(one.K):
        products = sum(1 for v in row if v)
        check.need(products <= 1000, f"firmware.{found.name}: more than 1000 products in one sum")
        found.floats += [(j, i, (products + 1) * relative * abs(v)) for j, v in enumerate(row) if v]
    found.takes = found.takes + commands
    for line in found.lines:
        line.v = (line.v or [Fraction(0)] * q) + [Fraction(0)] * m


def read_units(document: dict[str, Any]) -> tuple[list[check.Unit], list[check.Link], list[Flashed]]:
    """Units and links of the model as check.py reads them, and every kind as flashed."""
    units, links = check.read_model(document)
    model = document["model"]
    check.need(model["description"] == "pattern", "only patterns are proven on this route")
    check.need(not any("weakens" in x or "choice" in x for x in model["links"]), "a link of a sort not proven here")
    part = check.fields(document["firmware"], "period delay kinds", "firmware")
    T, d = check.positive(part["period"], "period"), check.number(part["delay"], "delay")
    check.need(0 <= d <= T, "the computation delay must lie between zero and the period")
    names = "kind sensors commands products form stored"
    parts = [check.fields(p, names, "firmware.kinds") for p in check.items(part["kinds"], "firmware.kinds")]
    check.need([p["kind"] for p in parts] == [u.name for u in units], "firmware is needed for every kind, in order")
    every = zip(model["kinds"], document["gains"], parts, strict=True)
    return units, links, [flashed(plant(kind, model["links"], g), p, T, d) for kind, g, p in every]

"""Units with their loop closed: matrices, signals and limits of one kind."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from synth.proof.checking.arithmetic import mul, plus
from synth.proof.checking.reading import Matrix, Row, fields, items, matrix, need, number, optional, text

Own = tuple[tuple[int, int, Fraction], ...]


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
    """A kind with its loop closed: x' = A x + D v + E w, its lines (offers first), and the declared peaks of w.

    ``own`` lists what is folded in: (take, offer, strength) by position, sorted, zeros left out.
    """

    name: str
    A: Matrix
    D: Matrix
    E: Matrix
    lines: list[Line]
    takes: list[str]
    disturbances: list[tuple[str, str, Fraction]]
    own: Own = ()

    @property
    def offers(self) -> int:
        """How many of the lines are offers."""
        return sum(line.role == "offer" for line in self.lines)


@dataclass
class Plant:
    """One kind as it stands in the file, read: its signals by group, its exact matrices and its gains."""

    name: str
    group: dict[str, list[tuple[str, str, Any]]]
    waves: list[tuple[str, str, Any]]
    X: dict[str, Matrix]
    K: Matrix

    def place(self, group: str, name: Any) -> int | None:
        """The position of a signal in its group, None if it is not there."""
        return self.places[group].get(name) if isinstance(name, str) else None

    def __post_init__(self) -> None:
        """Number the signals."""
        self.places = {key: {s[0]: i for i, s in enumerate(group)} for key, group in self.group.items()}


def signals(value: Any, key: str, where: str) -> list[tuple[str, str, Any]]:
    """(name, physical unit, bound) of every signal of a group; names are unique."""
    found = []
    for entry in items(value, where):
        entry = fields(entry, f"name in {key}", where)
        need(isinstance(entry["in"], str), f"{where}: the physical unit must be a text")
        found.append((text(entry["name"], where), entry["in"], entry[key]))
    need(len({name for name, _, _ in found}) == len(found), f"{where}: a name occurs twice")
    return found


def read_plant(kind: dict[str, Any], gains: dict[str, Any]) -> Plant:
    """A kind of the model with its gains; Rejected unless both are exactly as documented."""
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
    return Plant(name, group, waves, X, matrix(gains["K"], m, p, f"the gains of {name}"))


def close(plant: Plant, own: Own) -> Unit:
    """Close the loop u = K y of one kind and fold in the own, fresh part of what it takes (theory 1, R1 and R2)."""
    name, X, group, waves = plant.name, plant.X, plant.group, plant.waves
    n, m, q, d = len(group["states"]), len(group["inputs"]), len(group["takes"]), len(waves)
    offers = len(group["offers"])
    KN, U = mul(plant.K, X["N"], q), mul(plant.K, X["C"], n)
    D, A, H = plus(X["D"], mul(X["B"], KN, q)), plus(X["A"], mul(X["B"], U, n)), X["H"]
    for take, k, g in own:
        need(
            not any(X["F"][k] + X["Fw"][k] + X["Fu"][k]), f"a relative link of {name} reads an offer with feed-through"
        )
        A = [[a - D[i][take] * g * h for a, h in zip(A[i], X["H"][k], strict=True)] for i in range(n)]
        U = [[u - KN[i][take] * g * h for u, h in zip(U[i], X["H"][k], strict=True)] for i in range(m)]
        H = [[o - X["F"][i][take] * g * h for o, h in zip(H[i], X["H"][k], strict=True)] for i in range(offers)]
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
    return Unit(name, A, D, X["E"], lines, [s[0] for s in group["takes"]], peaks, own)

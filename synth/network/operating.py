"""The operating point of a kind: reads what is given, finds the rest, and proves that it is there.

Values that are found are first searched in floating point, then improved in rationals, and at last proven: an
interval Newton step (Krawczyk) shows that within ``REACH`` of the printed value, in parts of it, there is one true
equilibrium. The model is about deviations from that true one, and every bound of a curve holds for all of the
interval around it, so no residual is left out. Where nothing is to be found, the given values must make the rates
vanish to ``LEFT`` of the size of their terms; what is left is rounding of the given numbers, is reported, and is no
part of the model.
"""

from __future__ import annotations

import random
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from synth.network.bounds import Box, Dual, Located, evaluate
from synth.network.dynamics import compiled
from synth.network.formula import Formula
from synth.network.intervals import ONE, ZERO, Interval, rounded_down

REACH = Fraction(1, 10**20)
LEFT = Fraction(1, 10**12)
STARTS = 24
STEPS = 80


class NoPoint(Exception):
    """There is no operating point to work with; one sentence without full stop."""


@dataclass(frozen=True)
class Unknowns:
    """What is to be found: per name the SI value of its declared unit, and where to look (None: anywhere)."""

    factors: Mapping[str, Fraction]
    about: Mapping[str, Fraction | None]


def rest_of(
    rates: Mapping[str, Formula],
    given: Mapping[str, Fraction],
    unknowns: Unknowns,
    parameters: Mapping[str, Fraction],
) -> dict[str, Interval]:
    """The value of every signal at rest, proven (SI units); NoPoint or Located if there is none.

    ``rates`` are the right-hand sides by state, ``given`` the values that stand, ``parameters`` the nominal ones.
    """
    known = {**given, **parameters}
    wanted = list(unknowns.factors)
    rows = {state: rate for state, rate in rates.items() if rate.signals & set(wanted)}
    idle = [name for name in wanted if not any(name in rate.signals for rate in rows.values())]
    if idle:
        raise NoPoint(
            f"no equation depends on {_names(idle)}, so every value is one; give {'them' if len(idle) > 1 else 'it'}"
        )
    if len(rows) < len(wanted):
        raise NoPoint(
            f"{len(wanted)} values are not given ({_names(wanted)}), and {len(rows)} equations hold them "
            f"({_names([derivative(s) for s in rows])}); give {len(wanted) - len(rows)} more"
        )
    if len(rows) > len(wanted) and wanted:
        raise NoPoint(
            f"{len(rows)} equations ({_names([derivative(s) for s in rows])}) hold only {len(wanted)} values that "
            f"are not given ({_names(wanted)}); leave out {len(rows) - len(wanted)} more of the given ones, they are "
            "then found ('find' for a taken signal or a disturbance)"
        )
    found: dict[str, Interval] = {name: Interval.of(value) for name, value in given.items()}
    if wanted:
        found |= _found(list(rows.values()), wanted, known, unknowns)
    return found


def remainder(formula: Formula, at: Mapping[str, Interval], parameters: Mapping[str, Fraction]) -> Fraction:
    """The absolute value of a formula at rest in parts of the sum of its absolute terms (0 if zero is enclosed)."""
    names = {name: Dual(value) for name, value in at.items()}
    names |= {name: Dual(Interval.of(value)) for name, value in parameters.items()}
    box = Box(names, {})
    value = evaluate(formula, box).value
    if 0 in value:
        return Fraction(0)
    sizes = (evaluate(Formula((term,)), box).value.size for term in formula.terms)
    return value.size / sum(sizes, Fraction(0))


def derivative(state: str) -> str:
    """The key of a state's equation."""
    return f"{state}'"


def _names(names: Sequence[str]) -> str:
    return ", ".join(names)


def _found(
    rows: Sequence[Formula], wanted: Sequence[str], known: Mapping[str, Fraction], unknowns: Unknowns
) -> dict[str, Interval]:
    """Newton from several starts; every solution is proven, and two different ones are refused."""
    import numpy as np

    functions = [compiled(row) for row in rows]
    fixed = {name: np.float64(value) for name, value in known.items()}
    scale = np.array([float(unknowns.factors[name]) for name in wanted])

    def f(x: Any) -> Any:
        names = fixed | dict(zip(wanted, x * scale, strict=True))
        with np.errstate(all="ignore"):
            return np.array([float(function(names)) for function in functions])

    proven: list[dict[str, Interval]] = []
    seen: list[Any] = []
    guided = any(value is not None for value in unknowns.about.values())
    reason = ""
    for start in _starts(wanted, unknowns):
        x = _newton(f, np.array(start), np)
        if x is None or any(np.all(np.abs(x - y) <= 1e-6 * np.abs(x) + 1e-12) for y in seen):
            continue
        seen.append(x)
        try:
            point = _proven(rows, wanted, known, [Fraction(float(v)) for v in x * scale])
        except NoPoint as error:
            reason = str(error)
            continue
        if not any(_same(point, other) for other in proven):
            proven.append(point)
        if guided or len(proven) > 1:
            break
    if not proven:
        raise NoPoint(
            reason
            or f"no equilibrium was found for {_names(wanted)}; check the equations and the given values, or say "
            f"where to look, such as '{wanted[0]}: about 12' with its unit"
        )
    if len(proven) > 1:
        said = " and ".join(
            ", ".join(f"{n} = {float(p[n].middle / unknowns.factors[n]):.6g}" for n in wanted) for p in proven
        )
        raise NoPoint(
            f"there is more than one equilibrium ({said}); say which, such as '{wanted[0]}: about "
            f"{float(proven[0][wanted[0]].middle / unknowns.factors[wanted[0]]):.3g}' with its unit"
        )
    return proven[0]


def _same(a: Mapping[str, Interval], b: Mapping[str, Interval]) -> bool:
    return all(a[n].low <= b[n].high and b[n].low <= a[n].high for n in a)


def _starts(wanted: Sequence[str], unknowns: Unknowns) -> list[list[float]]:
    """Where to start, in declared units: what the user said, then all alike, then random sizes (fixed seed)."""
    chance = random.Random(len(wanted))
    said = [unknowns.about[name] for name in wanted]
    found = [[common] * len(wanted) for common in (1.0, 10.0, 0.1, 100.0, -1.0, 0.01, 1000.0)]
    found += [
        [10 ** chance.uniform(-2, 3) * chance.choice((1, 1, -1)) for _ in wanted] for _ in range(STARTS - len(found))
    ]
    for start in found:
        for k, value in enumerate(said):
            if value is not None:
                start[k] = float(value / unknowns.factors[wanted[k]])
    return found


def _newton(f: Any, x: Any, np: Any) -> Any:
    """Damped Newton with a numerical Jacobian; None if it does not settle. Only a guide: the result is proven later."""
    value = f(x)
    for _ in range(STEPS):
        if not np.all(np.isfinite(value)):
            return None
        columns = []
        for k in range(len(x)):
            step = 1e-7 * max(abs(x[k]), 1e-3)
            ahead, behind = x.copy(), x.copy()
            ahead[k] += step
            behind[k] -= step
            up, down = f(ahead), f(behind)
            columns.append(np.where(np.isfinite(up - down), (up - down) / (2 * step), (up - value) / step))
        jacobian = np.array(columns).T
        if not np.all(np.isfinite(jacobian)):
            return None
        move = np.linalg.lstsq(jacobian, -value, rcond=None)[0]
        size, factor = np.max(np.abs(value)), 1.0
        while factor > 1e-6:
            fresh = f(x + factor * move)
            if np.all(np.isfinite(fresh)) and (np.max(np.abs(fresh)) < size or size == 0):
                break
            factor /= 2
        else:
            small = np.abs(value) <= 1e-6 * (np.abs(jacobian) @ np.abs(x))  # rounding, not a minimum above zero
            return x if np.all(small) else None
        x, value = x + factor * move, fresh
        if factor == 1.0 and np.all(np.abs(move) <= 1e-13 * np.maximum(np.abs(x), 1e-12)):
            return x
    return None


def _duals(
    rows: Sequence[Formula], wanted: Sequence[str], known: Mapping[str, Fraction], x: Sequence[Interval]
) -> tuple[list[Interval], list[list[Interval]]]:
    """Values and the Jacobian over a box."""
    names = {name: Dual(Interval.of(value)) for name, value in known.items()}
    names |= {name: Dual(value) for name, value in zip(wanted, x, strict=True)}
    values = [evaluate(row, Box(names, {})).value for row in rows]
    table = [[ZERO] * len(wanted) for _ in rows]
    for k, name in enumerate(wanted):
        moved = Box({**names, name: Dual(x[k], ONE)}, {})
        for i, row in enumerate(rows):
            if name in row.signals:
                table[i][k] = evaluate(row, moved).slope
    return values, table


def _inverse(table: Sequence[Sequence[Interval]]) -> list[list[Fraction]]:
    """An approximate inverse of the middles; NoPoint if they are singular."""
    from synth.network.rational import reduced

    n = len(table)
    middle = [[v.middle for v in row] + [Fraction(int(i == j)) for j in range(n)] for i, row in enumerate(table)]
    solved, pivots = reduced(middle, 2 * n)
    if pivots[:n] != list(range(n)):
        raise NoPoint("singular")
    return [[rounded_down(v, 200, 90) for v in row[n:]] for row in solved]


def _proven(
    rows: Sequence[Formula], wanted: Sequence[str], known: Mapping[str, Fraction], x: Sequence[Fraction]
) -> dict[str, Interval]:
    """An interval per name in which there is exactly one equilibrium; NoPoint if this cannot be shown."""
    many = NoPoint(
        f"the equilibrium of {_names(wanted)} is not isolated or lies on a corner of a function, so it cannot be "
        "fixed; give one of these values"
    )
    n = len(wanted)
    try:
        for _ in range(6):
            values, table = _duals(rows, wanted, known, [Interval.of(v) for v in x])
            inverse = _inverse(table)
            step = [sum((a * v.middle for a, v in zip(row, values, strict=True)), Fraction(0)) for row in inverse]
            x = [rounded_down(v - s, 0, 110) for v, s in zip(x, step, strict=True)]
        simple = [Interval.of(v.limit_denominator(10**6)) for v in x]
        values, _ = _duals(rows, wanted, known, simple)
        if all(value == ZERO for value in values):  # an equilibrium in short numbers is kept as it is
            return dict(zip(wanted, simple, strict=True))
        for grow in (1, 10**4, 10**8):
            reach = [grow * REACH * max(abs(v), Fraction(1, 10**6)) for v in x]
            box = [Interval.of(v - r, v + r) for v, r in zip(x, reach, strict=True)]
            values, table = _duals(rows, wanted, known, [Interval.of(v) for v in x])
            _, over = _duals(rows, wanted, known, box)
            inverse = _inverse(table)
            if all(_krawczyk(inverse[i], values, over, reach, i) < reach[i] for i in range(n)):
                return dict(zip(wanted, box, strict=True))
    except (Located, NoPoint):
        pass
    raise many


def _krawczyk(
    row: Sequence[Fraction],
    values: Sequence[Interval],
    over: Sequence[Sequence[Interval]],
    reach: Sequence[Fraction],
    i: int,
) -> Fraction:
    """How far the Krawczyk operator moves component i from the middle of the box, at most."""
    n = len(reach)
    total = sum((Interval.of(a) * v for a, v in zip(row, values, strict=True)), ZERO).size
    for j in range(n):
        entry = Interval.of(Fraction(int(i == j)))
        for a, line in zip(row, over, strict=True):
            entry = entry - Interval.of(a) * line[j]
        total += entry.size * reach[j]
    return total

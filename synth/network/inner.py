"""Turns uncertain coefficients and nonlinear terms into self-links: internal takes, internal offers and disturbances.

    x' = A x + B u + D v + E w + d (phi(q x) - centre q x)      becomes      v' = strength-bounded link from z' = q x

(theory section 6). Internal names hold a space, so they cannot be names of the user. An internal offer that is the
argument of a curve has the curve's half width as its band: the proof of bands then proves that the curve's bounds hold.
What parameters within their tolerance do to the operating point becomes an internal disturbance with its peak.

Law: the plant's rows = the nominal matrices + columns of internal takes times what their links may bring + columns of
internal disturbances times what these may be.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.base.unit_text import quotient
from synth.base.units import Dimension, Unit
from synth.network.bounds import Box, Dual, Located, evaluate, least_and_most
from synth.network.curves import Curve, NoBand, Surroundings, bound_curve, short
from synth.network.formula import (
    Atom,
    Formula,
    atom_dimension,
    atom_parameters,
    atom_signals,
    collected,
    common_factors_out,
    curved,
    linear_part,
)
from synth.network.intervals import Interval
from synth.network.model import Disturbance, Network, SelfLink, Signal
from synth.network.rational import Rows
from synth.network.tolerances import Effect, effects

GROUPS = ("states", "inputs", "takes", "disturbances")
ROWS = ("states", "offers", "sensors")


@dataclass(frozen=True)
class Row:
    """One row of the model: a state's rate, an offer or a sensor, with the unit its value is counted in."""

    group: str  # 'states', 'offers' or 'sensors'
    name: str
    text: str  # the unit as the user wrote it (of the state, not of its rate)
    unit: Unit
    formula: Formula


@dataclass(frozen=True)
class Column:
    """One signal a row may depend on, with its declared unit."""

    group: str
    name: str
    text: str
    unit: Unit


@dataclass(frozen=True)
class InnerOffer:
    """An internal offer: its coefficients by user column, in its own unit per declared unit."""

    signal: Signal
    row: tuple[Fraction, ...]


@dataclass(frozen=True)
class InnerSource:
    """An internal take or disturbance: its coefficients by user row, in declared unit per its own unit."""

    name: str
    unit: str
    column: tuple[Fraction, ...]
    peak: Fraction | None = None  # of a disturbance


@dataclass
class Inner:
    """The internal signals and self-links of one kind."""

    takes: list[InnerSource] = field(default_factory=list)
    offers: list[InnerOffer] = field(default_factory=list)
    shifts: list[InnerSource] = field(default_factory=list)
    links: list[SelfLink] = field(default_factory=list)

    def connect(self, offer: InnerOffer, take: str, strength: Fraction, sort: str) -> None:
        """Add an offer and its link to an internal take."""
        self.offers.append(offer)
        self.links.append(SelfLink(offer.signal.name, take, strength, sort))


@dataclass(frozen=True)
class Plant:
    """The nominal matrix (user rows by user columns, declared units) and what goes beyond it."""

    matrix: Rows
    inner: Inner
    curves: tuple[Curve, ...]
    effects: tuple[Effect, ...]


@dataclass(frozen=True)
class Fault:
    """Why a term cannot be used: the row, the term (None: the row as a whole) and what was raised."""

    row: int
    atom: Atom | None
    error: NoBand | Located | None  # None: a tolerance moves what a sensor reads at rest


def build(rows: Sequence[Row], columns: Sequence[Column], around: Surroundings, faults: list[Fault]) -> Plant:
    """The nominal matrix and the internal signals of the rows; what stands in the way is added to ``faults``."""
    at = {column.name: j for j, column in enumerate(columns)}
    matrix = _zeros(rows, columns)
    uncertain: dict[Atom, Rows] = {}
    terms: dict[Atom, list[Fraction]] = {}
    for i, row in enumerate(rows):
        for atom, c in row.formula.terms:
            linear = linear_part(atom)
            if linear is None:
                continue
            target = matrix if not linear[1] else uncertain.setdefault(linear[1], _zeros(rows, columns))
            j = at[linear[0]]
            target[i][j] += c * columns[j].unit.factor / row.unit.factor
        for atom, c in curved(row.formula):
            terms.setdefault(atom, [Fraction(0)] * len(rows))[i] += c / row.unit.factor
    inner = Inner()
    found: list[Effect] = []
    try:
        found = effects(uncertain, around.ranges)
    except Located as error:
        faults.append(Fault(_home(rows, error), None, error))
    for effect in found:
        _tolerance(effect, matrix, columns, inner)
    curves = []
    for atom, column in terms.items():
        first = next(i for i, v in enumerate(column) if v)
        try:
            curves.append(bound_curve(atom, around))
        except (NoBand, Located) as error:
            faults.append(Fault(first, atom, error))
            continue
        _curve(curves[-1], column, matrix, rows, columns, inner)
    for i, row in enumerate(rows):
        if faults:
            break
        try:
            _shift(i, row, len(rows), around, inner, faults)
        except Located as error:
            faults.append(Fault(i, None, error))
    return Plant(matrix, inner, tuple(curves), tuple(found))


def _home(rows: Sequence[Row], error: Located) -> int:
    """The first row in which the factor at fault stands."""

    def holds(formula: Formula) -> bool:
        return any(f is error.factor or any(map(holds, f.inside)) for atom, _ in formula.terms for f, _ in atom)

    return next(i for i, row in enumerate(rows) if holds(row.formula))


def _zeros(rows: Sequence[Row], columns: Sequence[Column]) -> Rows:
    return [[Fraction(0)] * len(columns) for _ in rows]


def _named(what: str, of: str, taken: Sequence[InnerSource]) -> str:
    """An internal name that is not taken: 'tolerance of lag', 'tolerance 2 of lag', ..."""
    names = {source.name for source in taken}
    number = next(k for k in range(1, len(taken) + 2) if f"{what}{f' {k}' if k > 1 else ''} of {of}" not in names)
    return f"{what}{f' {number}' if number > 1 else ''} of {of}"


def _tolerance(effect: Effect, matrix: Rows, columns: Sequence[Column], inner: Inner) -> None:
    """Middle into the matrix, and one self-link per rank. The offer counts in the unit of its first signal."""
    for line, extra in zip(matrix, effect.matrix, strict=True):
        for j, value in enumerate(extra):
            line[j] += value * effect.bounds.middle
    if not effect.bounds.half:
        return
    (atom, _), *_ = effect.function.terms
    for column, row in zip(*effect.factored(len(columns)), strict=True):
        first = columns[next(j for j, v in enumerate(row) if v)]
        unit = _product(atom_dimension(atom), first.unit.dimension)
        name = _named("tolerance", " and ".join(effect.parameters), inner.takes)
        # matrix entries count row units per column unit; the link brings (SI unit of q) times (unit of the offer).
        inner.takes.append(InnerSource(name, unit.text, tuple(v / first.unit.factor for v in column)))
        offer = InnerOffer(Signal(name, first.text), tuple(row))
        inner.connect(offer, name, _up(effect.bounds.half * first.unit.factor), "tolerance")


def _product(first: Dimension, second: Dimension) -> Unit:
    return Unit(Fraction(1), tuple(a + b for a, b in zip(first, second, strict=True)))


def _curve(
    curve: Curve,
    column: Sequence[Fraction],
    matrix: Rows,
    rows: Sequence[Row],
    columns: Sequence[Column],
    inner: Inner,
) -> None:
    """Middles of the slopes into the matrix, and one take with a self-link per argument whose slope is not constant."""
    at = {c.name: j for j, c in enumerate(columns)}
    where = next(row.name for row, v in zip(rows, column, strict=True) if v)
    name = _named("curve", where, inner.takes)
    for argument, slopes in zip(curve.arguments, curve.slopes, strict=True):
        for signal, c in argument.line:
            j = at[signal]
            for i, value in enumerate(column):
                matrix[i][j] += value * slopes.middle * c * columns[j].unit.factor
    bent = [k for k, slopes in enumerate(curve.slopes) if slopes.half]
    if not bent:
        return
    unit = Unit(Fraction(1), atom_dimension(curve.atom))
    inner.takes.append(InnerSource(name, unit.text, tuple(column)))
    for k in bent:
        argument = curve.arguments[k]
        first = columns[at[argument.line[0][0]]]
        row = [Fraction(0)] * len(columns)
        for signal, c in argument.line:
            row[at[signal]] = c * columns[at[signal]].unit.factor / first.unit.factor
        label = name if len(bent) == 1 else f"{name} in {_line_text(argument.line)}"
        offer = InnerOffer(Signal(label, first.text, argument.half / first.unit.factor or None), tuple(row))
        inner.connect(offer, name, _up(curve.slopes[k].half * first.unit.factor), "curve")


def _line_text(line: Sequence[tuple[str, Fraction]]) -> str:
    """A linear combination in words of the file: 'h1 - h2'."""
    text = ""
    for name, c in line:
        size = "" if abs(c) == 1 else f"{abs(c)} "
        text += (" - " if c < 0 else " + " if text else "") + size + name
    return text.strip()


def _shift(i: int, row: Row, height: int, around: Surroundings, inner: Inner, faults: list[Fault]) -> None:
    """What tolerances do to a row at rest, as an internal disturbance with its peak."""
    if not row.formula.parameters:
        return
    shared = {tuple(pair for pair in atom if pair[0].parameters) for atom, _ in row.formula.terms}
    if row.group == "states" and len(shared) == 1:
        return  # parameters times what is zero at rest
    at_rest, left_out = _at_rest(row.formula, around)
    rest = {name: around.rest[name] for name in at_rest.signals}
    span = least_and_most(at_rest, rest | {name: around.ranges[name] for name in at_rest.parameters})
    nominal = {name: Dual(value) for name, value in rest.items()}
    nominal |= {name: Dual(Interval.of(around.nominal[name])) for name in at_rest.parameters}
    moved = span - evaluate(at_rest, Box(nominal, {})).value
    size = (moved.size + left_out) / row.unit.factor
    if not size:
        return
    if row.group == "sensors":
        faults.append(Fault(i, None, None))
        return
    unit = quotient(row.text, "s") if row.group == "states" else row.text
    column = tuple(Fraction(int(k == i)) for k in range(height))
    inner.shifts.append(InnerSource(_named("shift", row.name, inner.shifts), unit, column, _up(size)))


def _at_rest(formula: Formula, around: Surroundings) -> tuple[Formula, Fraction]:
    """The terms with parameters, numbers in the place of factors of signals alone, and what rounding these leaves out.

    Terms that hold each other at rest cancel here before any range is put in.
    """
    pairs, left_out = [], Fraction(0)
    for atom, c in formula.terms:
        if not atom_parameters(atom):
            continue
        kept = tuple((factor, power) for factor, power in atom if factor.parameters)
        known = tuple((factor, power) for factor, power in atom if not factor.parameters)
        box = Box({name: Dual(around.rest[name]) for name in atom_signals(known)}, {})
        value = evaluate(Formula(((known, c),)), box).value
        pairs.append((kept, value.middle))
        if value.half:
            names = {name: Dual(around.rest[name]) for name in atom_signals(kept)}
            names |= {name: Dual(around.ranges[name]) for name in atom_parameters(kept)}
            left_out += 2 * value.half * evaluate(Formula(((kept, Fraction(1)),)), Box(names, {})).value.size
    return common_factors_out(collected(pairs, None, {})), left_out


def _up(value: Fraction) -> Fraction:
    """A bound, rounded up to a double unless it is a short rational."""
    return short(Interval(value, value)).high


def extended(
    blocks: Mapping[str, ExactMatrix], inner: Inner, rows: Sequence[tuple[str, str]], sizes: Mapping[str, int]
) -> dict[str, ExactMatrix]:
    """The matrices of the user's signals with the internal ones appended (takes, offers, disturbances).

    ``rows`` lists the user's rows as (group, name); ``sizes`` counts the user's states, inputs, takes, disturbances.
    """
    if not (inner.takes or inner.offers or inner.shifts):
        return dict(blocks)
    result = dict(blocks)
    place: dict[str, list[int]] = {group: [k for k, (g, _) in enumerate(rows) if g == group] for group in ROWS}
    for group, across, sources in (
        ("states", "D", inner.takes), ("offers", "F", inner.takes), ("sensors", "N", inner.takes),
        ("states", "E", inner.shifts), ("offers", "Fw", inner.shifts),
    ):  # fmt: skip
        old = blocks[across]
        new = [[*line, *(s.column[k] for s in sources)] for line, k in zip(old.rows, place[group], strict=True)]
        result[across] = ExactMatrix.of(new, (old.shape[0], old.shape[1] + len(sources)))
    starts, start = {}, 0
    for group in GROUPS:
        starts[group] = slice(start, start + sizes[group])
        start += sizes[group]
    extra = {"takes": len(inner.takes), "disturbances": len(inner.shifts)}
    for name, group in (("H", "states"), ("F", "takes"), ("Fw", "disturbances"), ("Fu", "inputs")):
        pad = (Fraction(0),) * extra.get(group, 0)
        old = result[name]
        added = [(*offer.row[starts[group]], *pad) for offer in inner.offers]
        result[name] = ExactMatrix.of([*old.rows, *added], (old.shape[0] + len(added), old.shape[1]))
    return result


def inner_disturbances(inner: Inner) -> tuple[Disturbance, ...]:
    """The internal disturbances with their peaks."""
    return tuple(Disturbance(s.name, s.unit, s.peak or Fraction(0)) for s in inner.shifts)


def with_self_links(network: Network) -> Network:
    """The network with the self-links of its kinds, one of each per unit; unchanged where no kind has any."""
    if not any(kind.inner for kind in network.kinds):
        return network
    members = network.members
    dimension = 0 if members is not None or network.rules else network.dimension
    added = [(k, link) for k, kind in enumerate(network.kinds) for link in kind.self_links(dimension)]
    links = (*network.links, *(link for _, link in added))
    if members is None:
        return replace(network, links=links)
    import numpy as np

    to, source, form = [members.to], [members.source], [members.form]
    for n, (k, _) in enumerate(added):
        units = np.flatnonzero(members.kind == k).astype(np.int32)
        to.append(units)
        source.append(units)
        form.append(np.full(len(units), len(members.parts) + n, dtype=np.int32))
    parts = (*members.parts, *((len(network.links) + n,) for n in range(len(added))))
    grown = replace(
        members, to=np.concatenate(to), source=np.concatenate(source), form=np.concatenate(form), parts=parts
    )
    return replace(network, links=links, members=grown)

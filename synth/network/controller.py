"""Controllers with states of their own: the unit is widened by them, so that the rest of the work sees plain gains.

    integrals   q' = y_j                                         the integral of a sensor, exact
    memory      m' = K_m [y; m]                                  states of a dynamic compensator, all gains free
    estimator   x^' = A x^ + B u + D v + L (y - C x^ - N v)      a model of the unit beside it, u = K x^

(v only as far as a sensor reads it.) The widened unit has the states [x; x^; q; m], the inputs [u; rates that L adds
to x^; rates of m], and further sensors [x^; y - C x^ - N v; q; m]. u = K y of the widened unit is then the whole
controller, and what may feed what is a pattern of exact zeros in K: everything downstream closes, proves, checks and
simulates it as any other unit (theory section 5). ``Controller`` records which rows run in the firmware.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

from synth.base.exact import ExactMatrix
from synth.base.unit_text import product, quotient
from synth.network.model import Actuator, Kind, Signal

Rows = list[list[Fraction]]


@dataclass(frozen=True)
class Controller:
    """Which states, inputs and sensors of a widened kind are made by its controller and not by the plant.

    ``integrals`` maps a controller state to the sensor it integrates, ``estimates`` to the state of the plant it
    follows; ``memory`` lists the states of the compensator. ``inputs`` are the rates that gains add to controller
    states (no actuator carries them out), ``sensors`` what the gains read of the controller. ``structure`` lists, per
    input, the sensors it may use; inputs that are not listed may use all. ``corrected`` are the sensors that correct
    the estimator, ``heard`` the taken signals that sensors read as they are.
    """

    integrals: Mapping[str, str] = field(default_factory=dict)
    estimates: Mapping[str, str] = field(default_factory=dict)
    memory: tuple[str, ...] = ()
    inputs: tuple[str, ...] = ()
    sensors: tuple[str, ...] = ()
    structure: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    corrected: tuple[str, ...] = ()
    heard: tuple[str, ...] = ()

    @property
    def states(self) -> tuple[str, ...]:
        """The states that run in the firmware, in the order of the kind's states."""
        return (*self.estimates, *self.integrals, *self.memory)


@dataclass(frozen=True)
class Wanted:
    """What a controller is asked to have: sensors to integrate, number of memory states, sensors of the estimator."""

    integrals: tuple[str, ...] = ()
    memory: int = 0
    estimator: tuple[str, ...] | None = None


def names_made(kind: Kind, wanted: Wanted) -> tuple[str, ...]:
    """The names that the controller adds to the kind's signals, each once."""
    estimates = () if wanted.estimator is None else tuple(s.name for s in kind.states)
    return (
        *(f"{name}_estimate" for name in estimates),
        *(f"{name}_correction" for name in estimates),
        *(f"{name}_innovation" for name in wanted.estimator or ()),
        *(f"{name}_integral" for name in wanted.integrals),
        *(f"memory_{k + 1}" for k in range(wanted.memory)),
        *(f"memory_{k + 1}_rate" for k in range(wanted.memory)),
    )


def heard_takes(kind: Kind) -> dict[int, int]:
    """Takes that some sensor reads exactly as they are delivered: index of the take to index of the sensor."""
    found: dict[int, int] = {}
    for j, (own, taken) in enumerate(zip(kind.C.rows, kind.N.rows, strict=True)):
        there = [k for k, value in enumerate(taken) if value]
        if not any(own) and len(there) == 1 and taken[there[0]] == 1:
            found.setdefault(there[0], j)
    return found


def with_controller(kind: Kind, wanted: Wanted) -> Kind:
    """``kind`` widened by the controller's states; its ``controller`` says which rows they are.

    Shapes, with e states of the estimator (0 or n), i integrals and m memory states: the states grow by e + i + m, the
    inputs by e + m, the sensors by e + (sensors of the estimator) + i + m. ``wanted`` must name sensors of the kind;
    KeyError otherwise. Units: an integral has the sensor's unit times s, a memory state none.
    """
    n, inputs, sensors = len(kind.states), len(kind.inputs), len(kind.sensors)
    e = 0 if wanted.estimator is None else n
    integrated = [kind.index("sensors", name) for name in wanted.integrals]
    corrected = [kind.index("sensors", name) for name in wanted.estimator or ()]
    heard = heard_takes(kind) if e else {}
    size = n + e + len(integrated) + wanted.memory
    names = _Names.of(kind, wanted)
    grown = replace(
        kind,
        states=(*kind.states, *names.states),
        inputs=(*kind.inputs, *names.inputs),
        sensors=(*kind.sensors, *names.sensors),
        A=_A(kind, e, integrated, size),
        B=_B(kind, e, size, wanted.memory),
        D=_stacked(
            kind.D, _heard_only(kind.D, heard) if e else None, kind.N, integrated, wanted.memory
        ),
        E=_tall(kind.E, size),
        C=_C(kind, e, integrated, corrected, size),
        N=_N(kind, e, corrected, heard, len(integrated) + wanted.memory),
        H=_wide(kind.H, size),
        Fu=None if kind.Fu is None else _wide(kind.Fu, inputs + e + wanted.memory),
        equations={**kind.equations, **(_equations(kind, wanted, heard) if kind.equations else {})},
    )  # fmt: skip
    own = tuple(s.name for s in names.sensors)
    return replace(grown, controller=_record(kind, wanted, heard, own, tuple(a.name for a in names.inputs), sensors))


def _record(
    kind: Kind, wanted: Wanted, heard: Mapping[int, int], own: tuple[str, ...], inputs: tuple[str, ...], sensors: int
) -> Controller:
    """The record of the widened kind, with the structure that makes it the controller it is named for."""
    integrals = {f"{name}_integral": name for name in wanted.integrals}
    memory = tuple(f"memory_{k + 1}" for k in range(wanted.memory))
    if wanted.estimator is None:
        return Controller(integrals, {}, memory, inputs, own)
    estimates = {f"{s.name}_estimate": s.name for s in kind.states}
    innovations = tuple(f"{name}_innovation" for name in wanted.estimator)
    feeding = (*(kind.sensors[j].name for j in sorted(heard.values())), *estimates, *integrals)
    structure = {a.name: feeding for a in kind.inputs} | {f"{s.name}_correction": innovations for s in kind.states}
    takes = tuple(kind.takes[k].name for k in sorted(heard))
    return Controller(integrals, estimates, memory, inputs, own, structure, tuple(wanted.estimator), takes)


@dataclass(frozen=True)
class _Names:
    """The signals that are added, in the order of the matrices."""

    states: tuple[Signal, ...]
    inputs: tuple[Actuator, ...]
    sensors: tuple[Signal, ...]

    @staticmethod
    def of(kind: Kind, wanted: Wanted) -> _Names:
        units = {s.name: s.unit for s in kind.sensors}
        estimated = kind.states if wanted.estimator is not None else ()
        estimates = tuple(Signal(f"{s.name}_estimate", s.unit) for s in estimated)
        innovations = tuple(Signal(f"{name}_innovation", units[name]) for name in wanted.estimator or ())
        integrals = tuple(Signal(f"{name}_integral", product(units[name], "s")) for name in wanted.integrals)
        memory = tuple(Signal(f"memory_{k + 1}", "1") for k in range(wanted.memory))
        rates = tuple(Actuator(f"{s.name}_correction", quotient(s.unit, "s")) for s in estimated)
        return _Names(
            (*estimates, *integrals, *memory),
            (*rates, *(Actuator(f"{s.name}_rate", "1/s") for s in memory)),
            (*estimates, *innovations, *integrals, *memory),
        )


def _A(kind: Kind, e: int, integrated: Sequence[int], size: int) -> ExactMatrix:
    n = len(kind.states)
    rows = [_padded(row, 0, size) for row in kind.A.rows]
    if e:
        rows += [_padded(row, n, size) for row in kind.A.rows]
    rows += [_padded(kind.C.rows[j], 0, size) for j in integrated]
    return ExactMatrix.of([*rows, *_zeros(size - len(rows), size)], (size, size))


def _B(kind: Kind, e: int, size: int, memory: int) -> ExactMatrix:
    inputs, n = len(kind.inputs), len(kind.states)
    width = inputs + e + memory
    rows = [_padded(row, 0, width) for row in kind.B.rows]
    for k in range(e):
        rows.append(_padded(kind.B.rows[k], 0, width))
        rows[-1][inputs + k] = Fraction(1)
    rows += _zeros(size - n - e, width)
    for k in range(memory):
        rows[size - memory + k][inputs + e + k] = Fraction(1)
    return ExactMatrix.of(rows, (size, width))


def _C(kind: Kind, e: int, integrated: Sequence[int], corrected: Sequence[int], size: int) -> ExactMatrix:
    n = len(kind.states)
    rows = [_padded(row, 0, size) for row in kind.C.rows]
    rows += [_one(n + k, size) for k in range(e)]
    for j in corrected:
        row = _padded(kind.C.rows[j], 0, size)
        for k, value in enumerate(kind.C.rows[j]):
            row[n + k] -= value
        rows.append(row)
    rows += [_one(k, size) for k in range(n + e, size)]
    return ExactMatrix.of(rows, (len(rows), size))


def _N(kind: Kind, e: int, corrected: Sequence[int], heard: Mapping[int, int], rest: int) -> ExactMatrix:
    takes = len(kind.takes)
    rows = [list(row) for row in kind.N.rows] + _zeros(e, takes)
    for j in corrected:  # what is heard is predicted, so only the rest is news
        rows.append([Fraction(0) if k in heard else value for k, value in enumerate(kind.N.rows[j])])
    rows += _zeros(rest, takes)
    return ExactMatrix.of(rows, (len(rows), takes))


def _heard_only(D: ExactMatrix, heard: Mapping[int, int]) -> ExactMatrix:
    """D with the columns of takes that no sensor reads set to zero: the estimator cannot know them."""
    return ExactMatrix.of([[v if k in heard else Fraction(0) for k, v in enumerate(row)] for row in D.rows], D.shape)


def _stacked(
    D: ExactMatrix, estimator: ExactMatrix | None, N: ExactMatrix, integrated: Sequence[int], memory: int
) -> ExactMatrix:
    """Rows of D for the plant, the estimator, the integrals and the memory."""
    rows = [list(row) for row in D.rows] + [list(row) for row in (estimator.rows if estimator else ())]
    rows += [list(N.rows[j]) for j in integrated] + _zeros(memory, D.shape[1])
    return ExactMatrix.of(rows, (len(rows), D.shape[1]))


def _tall(matrix: ExactMatrix, height: int) -> ExactMatrix:
    rows = [list(row) for row in matrix.rows] + _zeros(height - matrix.shape[0], matrix.shape[1])
    return ExactMatrix.of(rows, (height, matrix.shape[1]))


def _wide(matrix: ExactMatrix, width: int) -> ExactMatrix:
    return ExactMatrix.of([_padded(row, 0, width) for row in matrix.rows], (matrix.shape[0], width))


def _zeros(height: int, width: int) -> Rows:
    return [[Fraction(0)] * width for _ in range(height)]


def _padded(row: Sequence[Fraction], start: int, width: int) -> list[Fraction]:
    """``row`` at position ``start`` of a row of zeros."""
    return [Fraction(0)] * start + list(row) + [Fraction(0)] * (width - start - len(row))


def _one(place: int, width: int) -> list[Fraction]:
    return [Fraction(int(k == place)) for k in range(width)]


def _equations(kind: Kind, wanted: Wanted, heard: Mapping[int, int]) -> dict[str, str]:
    """The equations of the controller's states in words of the problem file, for people to read."""
    found: dict[str, str] = {}
    if wanted.estimator is not None:
        estimate = [f"{s.name}_estimate" for s in kind.states]
        for k, state in enumerate(kind.states):
            terms = _terms(kind.A.rows[k], estimate) + _terms(kind.B.rows[k], [a.name for a in kind.inputs])
            row = [v if i in heard else Fraction(0) for i, v in enumerate(kind.D.rows[k])]
            terms += _terms(row, [t.name for t in kind.takes])
            found[f"{estimate[k]}'"] = " + ".join([*terms, f"{state.name}_correction"])
    found |= {f"{name}_integral'": name for name in wanted.integrals}
    return found | {f"memory_{k + 1}'": f"memory_{k + 1}_rate" for k in range(wanted.memory)}


def _terms(row: Sequence[Fraction], names: Sequence[str]) -> list[str]:
    return [name if v == 1 else f"({v})*{name}" for v, name in zip(row, names, strict=True) if v]


def firmware_rows(kind: Kind) -> tuple[tuple[str, tuple[tuple[str, Fraction], ...]], ...]:
    """The fixed part of each controller state's rate, beside what the gains add: (state, ((signal, factor), ...)).

    Signals are sensors, estimates, inputs and heard takes; factors in (state unit per second)/(signal unit). Empty for
    a kind without controller states.
    """
    record = kind.controller
    if record is None:
        return ()
    found = []
    names = {k: s.name for k, s in enumerate(kind.states)}
    for state in record.states:
        i = kind.index("states", state)
        if state in record.integrals:
            parts: list[tuple[str, Fraction]] = [(record.integrals[state], Fraction(1))]
        else:
            parts = [(names[k], v) for k, v in enumerate(kind.A.rows[i]) if v]
            parts += [(kind.inputs[k].name, v) for k, v in enumerate(kind.B.rows[i]) if v]
            parts += [(kind.takes[k].name, v) for k, v in enumerate(kind.D.rows[i]) if v]
        found.append((state, tuple(parts)))
    return tuple(found)


def innovation_rows(kind: Kind) -> tuple[tuple[str, tuple[tuple[str, Fraction], ...]], ...]:
    """How each innovation follows from a sensor, estimates and heard takes: (innovation, ((signal, factor), ...))."""
    record = kind.controller
    if record is None:
        return ()
    found = []
    for sensor in record.corrected:
        j = kind.index("sensors", sensor)
        parts = [(sensor, Fraction(1))]
        parts += [
            (estimate, -kind.C.rows[j][kind.index("states", state)])
            for estimate, state in record.estimates.items()
            if kind.C.rows[j][kind.index("states", state)]
        ]
        parts += [
            (take, -kind.N.rows[j][kind.index("takes", take)])
            for take in record.heard
            if kind.N.rows[j][kind.index("takes", take)]
        ]
        found.append((f"{sensor}_innovation", tuple(parts)))
    return tuple(found)

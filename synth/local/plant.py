"""The open units as scaled floating-point matrices: what every search of this stage works on.

Units come from the plan of the network's gain operator, whatever its description: one plant per specification (a kind,
and what relative links fold into it), however many units share it.

Time is counted in 1/omega, omega the radius of the mode disc, and every signal in a unit of its own chosen so that
the non-zero entries of all matrices lie as close to one as scaling can bring them (least squares of their
logarithms). The scaled problem is therefore the same whatever units the user declared.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.descriptions import plan_of
from synth.gain.plan import Plan, UnitSpec, starts
from synth.local.aims import aims_of
from synth.local.intake import Intake
from synth.local.scaling import scales_of
from synth.network.model import Goal, Kind, Network, Signal

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Plant:
    """One open unit, scaled; own parts of relative links are folded in, so closing the loop is affine in K.

    A_c = A + B K C, D_c = D + B K N, command u = K C x + K N v, z = H x + F v + Fu u. ``E`` and ``Fw`` carry the
    declared disturbance peaks: each scaled disturbance is bounded by one. ``H`` and ``F`` list the offers first, then
    the states with a band or aimed at.
    ``allowed`` (inputs, sensors) is the structure, ``bound`` the scaled bound of each gain (inf: none), ``limit``
    the scaled actuator limits and ``band`` the scaled bands of the rows of ``H`` (inf: none). ``aimed`` has an entry
    per row of ``H`` and then per actuator: a peak times its entry is what the search makes small (0: not aimed at).
    """

    kind: Kind
    A: Array
    B: Array
    C: Array
    D: Array
    N: Array
    E: Array
    H: Array
    F: Array
    Fw: Array
    Fu: Array
    allowed: Mask
    bound: Array
    limit: Array
    band: Array
    aimed: Array
    gain_unit: Array  # (inputs, sensors): user's gain = scaled gain * gain_unit
    state_unit: Array  # user's state = scaled state * state_unit, likewise below
    input_unit: Array
    sensor_unit: Array
    directions: tuple[Array, Array, Array, Array]  # derivatives of A, [D E], [H; U], [F Fw; UV 0] by each allowed gain

    @property
    def offers(self) -> int:
        """Number of offered signals, the first rows of ``H``."""
        return len(self.kind.offers)

    def to_user(self, K: Array) -> Array:
        """A scaled gain matrix in the user's units; entries outside the structure are exact zeros."""
        return np.where(self.allowed, K * self.gain_unit, 0.0)

    def to_scaled(self, K: Array) -> Array:
        """A gain matrix in the user's units, scaled; entries outside the structure are dropped."""
        return np.where(self.allowed, K / self.gain_unit, 0.0)


class Region(Protocol):
    """Plants whose closed modes must keep to one region: slower than ``fastest``, faster than ``slowest``."""

    @property
    def plants(self) -> tuple[Plant, ...]:
        """The open units."""

    @property
    def slowest(self) -> float:
        """Least decay, in 1/scaled time."""

    @property
    def fastest(self) -> float:
        """Radius of the disc, in 1/scaled time."""


@dataclass(frozen=True, eq=False)
class Field:
    """All plants of a network, one per specification of its plan, with the scaled links between their units.

    ``intake`` says which units share a plant and what reaches their takes; ``slowest`` and ``fastest`` are in units of
    ``omega`` (1/s); ``fastest_given`` tells whether the user set the disc or the search chose it. ``groups`` lists the
    plants that carry one gain set (their inputs and sensors are scaled alike, so that equal gains are equal scaled
    gains). ``ceiling`` is None where the radius is made small; else the radius must not exceed it and the peaks that
    the plants aim at are made small.
    """

    network: Network
    plan: Plan
    plants: tuple[Plant, ...]
    intake: Intake
    omega: float
    slowest: float
    fastest: float
    fastest_given: bool
    groups: tuple[tuple[int, ...], ...]
    ceiling: float | None = None

    def arriving(self, i: int, z: Array) -> Array:
        """What arrives at most at each take of plant i, over all its units, from scaled sizes ``z`` of all rows."""
        own = self.intake.brought(z)[self.intake.takes[i]]
        return np.asarray(own.max(axis=0, initial=0.0))


def allowed_entries(kind: Kind, goal: Goal) -> Mask:
    """Which entries (inputs, sensors) of K may differ from zero under ``goal.uses``."""
    mask = np.ones((len(kind.inputs), len(kind.sensors)), dtype=bool)
    for actuator, sensors in goal.uses.get(kind.name, {}).items():
        row = kind.index("inputs", actuator)
        mask[row] = [sensor.name in sensors for sensor in kind.sensors]
    return mask


def with_outlets(network: Network) -> Network:
    """The network in which every kind offers something: a kind without offers is given one that is always zero.

    A plan has terms only where there are rows; what such a kind takes counts for the peaks of its other signals.
    """
    kinds = []
    for kind in network.kinds:
        if not kind.offers:
            n, takes, w, inputs = (len(getattr(kind, g)) for g in ("states", "takes", "disturbances", "inputs"))
            kind = replace(
                kind, offers=(Signal("nothing offered", "1"),), H=ExactMatrix.zeros(1, n),
                F=ExactMatrix.zeros(1, takes), Fw=ExactMatrix.zeros(1, w),
                Fu=None if kind.Fu is None else ExactMatrix.zeros(1, inputs),
            )  # fmt: skip
        kinds.append(kind)
    return replace(network, kinds=tuple(kinds))


def field_of(network: Network, ceiling: float | None = None) -> Field:
    """Fold, scale and collect the units of ``network``; pure arithmetic.

    ``ceiling`` (0 to 1) turns the search to what ``network.goal.aim`` names, with the radius bounded by it; without
    it the search is for the smallest radius. InputError where kinds of one group differ in their inputs or sensors.
    """
    plan = plan_of(with_outlets(network))
    folded = [_folded(plan.kinds[spec.kind], spec) for spec in plan.specs]
    modes = [abs(v) for A, *_ in folded for v in np.linalg.eigvals(A.floats())] or [0.0]
    slowest = float(network.goal.slowest or 0)
    given = network.goal.fastest is not None
    # Without a disc the radius falls for ever as gains grow; the search then keeps to a generous disc of its own.
    natural = max(*modes, 5 * slowest)
    omega = float(network.goal.fastest or 10 * (natural if natural > 0 else 0.1))
    kinds = [plan.kinds[spec.kind] for spec in plan.specs]
    tables = [_tables(kind, parts, omega) for kind, parts in zip(kinds, folded, strict=True)]
    scales = scales_of(network, plan, tables)
    aims = aims_of(network) if ceiling is not None else {}
    plants = tuple(
        _plant(kind, network.goal, table, scale, aims) for kind, table, scale in zip(kinds, tables, scales, strict=True)
    )
    groups = _groups_of_plants(network, plan)
    return Field(
        network,
        plan,
        _alike(plants, groups),
        _intake(plan, scales),
        omega,
        slowest / omega,
        1.0,
        given,
        groups,
        ceiling,
    )


def groups_of(network: Network) -> tuple[tuple[int, ...], ...]:
    """Positions of the kinds that carry one gain set, in the order of their first kinds.

    InputError where their inputs or sensors differ: one K could then not be theirs.
    """
    found: dict[str, list[int]] = {}
    for i, kind in enumerate(network.kinds):
        found.setdefault(kind.group, []).append(i)
    for name, members in found.items():
        first = network.kinds[members[0]]
        for i in members[1:]:
            other = network.kinds[i]
            for group in ("inputs", "sensors"):
                ours, theirs = ([(s.name, s.unit) for s in getattr(kind, group)] for kind in (first, other))
                if ours != theirs:
                    raise InputError(
                        f"{first.name} and {other.name} cannot carry the same gains ({name}): their {group} differ; "
                        "give them gain sets of their own."
                    )
    return tuple(tuple(members) for members in found.values())


def _groups_of_plants(network: Network, plan: Plan) -> tuple[tuple[int, ...], ...]:
    """Plants that carry one gain set: those of all kinds of a group."""
    of_kind: dict[int, list[int]] = {}
    for i, spec in enumerate(plan.specs):
        of_kind.setdefault(spec.kind, []).append(i)
    found = (tuple(i for k in kinds for i in of_kind.get(k, ())) for kinds in groups_of(network))
    return tuple(group for group in found if group)


def _alike(plants: tuple[Plant, ...], groups: tuple[tuple[int, ...], ...]) -> tuple[Plant, ...]:
    """The plants with the structure and the gain bounds that all of their group have."""
    found = list(plants)
    for members in groups:
        if len(members) > 1:
            allowed = np.logical_and.reduce([plants[i].allowed for i in members])
            bound = np.minimum.reduce([plants[i].bound for i in members])
            for i in members:
                alike = replace(plants[i], allowed=allowed, bound=bound)
                found[i] = replace(alike, directions=_directions(alike))
    return tuple(found)


def _folded(kind: Kind, spec: UnitSpec) -> tuple[ExactMatrix, ExactMatrix, ExactMatrix]:
    """Exact A, C and H with the own parts of a specification folded in (theory section 1, case R1)."""
    A, C, H = kind.A, kind.C, kind.H
    for take, offer, strength in spec.own:
        own = kind.H.row(offer).scaled(strength)
        A = A - kind.D.column(take) @ own
        C = C - kind.N.column(take) @ own
        H = H - kind.F.column(take) @ own
    return A, C, H


def _tables(kind: Kind, folded: tuple[ExactMatrix, ExactMatrix, ExactMatrix], omega: float) -> dict[str, Array]:
    """Unscaled float matrices with time in 1/omega and disturbances in units of their peaks."""
    peaks = np.array([float(w.peak) for w in kind.disturbances])
    return {
        "A": folded[0].floats() / omega,
        "B": kind.B.floats() / omega,
        "C": folded[1].floats(),
        "D": kind.D.floats() / omega,
        "N": kind.N.floats(),
        "E": kind.E.floats() / omega * peaks,
        "H": folded[2].floats(),
        "F": kind.F.floats(),
        "Fu": (kind.Fu or ExactMatrix.zeros(len(kind.offers), len(kind.inputs))).floats(),
        "Fw": kind.Fw.floats() * peaks,
    }


def _plant(
    kind: Kind,
    goal: Goal,
    table: dict[str, Array],
    scale: dict[str, Array],
    aims: Mapping[tuple[str, str, str], Fraction],
) -> Plant:
    """The plant in scaled signals: x = scale * x_scaled and so on."""
    x, u, v, z, y = (scale[g] for g in ("states", "inputs", "takes", "offers", "sensors"))
    banded = [i for i, s in enumerate(kind.states) if s.band is not None or (kind.name, "states", s.name) in aims]
    states = np.eye(len(kind.states))[banded]
    allowed = allowed_entries(kind, goal)
    unit = u[:, None] / y[None, :]
    bound = np.full(allowed.shape, np.inf)
    for actuator, entries in goal.gain_bounds.get(kind.name, {}).items():
        for sensor, value in entries.items():
            bound[kind.index("inputs", actuator), kind.index("sensors", sensor)] = float(value)
    bands = [s.band for s in kind.offers] + [kind.states[i].band for i in banded]
    heights = np.concatenate((z, x[banded]))
    plant = Plant(
        kind=kind,
        A=table["A"] * x / x[:, None],
        B=table["B"] * u / x[:, None],
        C=table["C"] * x / y[:, None],
        D=table["D"] * v / x[:, None],
        N=table["N"] * v / y[:, None],
        E=table["E"] / x[:, None],
        H=np.concatenate((table["H"] * x / z[:, None], states)),
        F=np.concatenate((table["F"] * v / z[:, None], np.zeros((len(banded), len(v))))),
        Fw=np.concatenate((table["Fw"] / z[:, None], np.zeros((len(banded), table["Fw"].shape[1])))),
        Fu=np.concatenate((table["Fu"] * u / z[:, None], np.zeros((len(banded), len(u))))),
        allowed=allowed,
        bound=bound / unit,
        limit=_bounds([a.limit for a in kind.inputs]) / u,
        band=_bounds(bands) / heights,
        aimed=_aimed(kind, banded, aims) * np.concatenate((heights, u)),
        gain_unit=unit,
        state_unit=x,
        input_unit=u,
        sensor_unit=y,
        directions=(),  # type: ignore[arg-type]
    )
    return replace(plant, directions=_directions(plant))


def _aimed(kind: Kind, banded: list[int], aims: Mapping[tuple[str, str, str], Fraction]) -> Array:
    """One over the value that counts as one, for each row of H and each actuator; 0 where it is not aimed at."""
    rows = [
        *(("offers", s.name) for s in kind.offers),
        *(("states", kind.states[i].name) for i in banded),
        *(("inputs", a.name) for a in kind.inputs),
    ]
    values = [aims.get((kind.name, *row)) for row in rows]
    return np.array([0.0 if value is None else 1.0 / float(value) for value in values])


def _directions(plant: Plant) -> tuple[Array, Array, Array, Array]:
    """Derivatives of the closed matrices by every allowed gain, in the order of ``np.nonzero(allowed)``."""
    rows, columns = np.nonzero(plant.allowed)
    count, (n, w) = len(rows), plant.E.shape
    takes, heads, actuators = plant.D.shape[1], plant.H.shape[0], plant.B.shape[1]
    dA = np.einsum("ng,gm->gnm", plant.B[:, rows], plant.C[columns])
    dD = np.zeros((count, n, takes + w))
    dD[:, :, :takes] = np.einsum("ng,gt->gnt", plant.B[:, rows], plant.N[columns])
    dH = np.zeros((count, heads + actuators, n))
    dH[:, :heads] = np.einsum("og,gm->gom", plant.Fu[:, rows], plant.C[columns])
    dH[np.arange(count), heads + rows] = plant.C[columns]
    dF = np.zeros((count, heads + actuators, takes + w))
    dF[:, :heads, :takes] = np.einsum("og,gt->got", plant.Fu[:, rows], plant.N[columns])
    dF[np.arange(count), heads + rows, :takes] = plant.N[columns]
    return dA, dD, dH, dF


def _bounds(values: list[Fraction | None]) -> Array:
    return np.array([np.inf if value is None else float(value) for value in values], dtype=float)


def _intake(plan: Plan, scales: list[dict[str, Array]]) -> Intake:
    """What reaches every take, scaled: one ray per term of a unit's first offer (the others hear the same)."""
    count = [len(plan.kinds[k].takes) for k in plan.unit_kind.tolist()]
    first_take = starts(np.array(count, dtype=np.intp))
    units = _sorted(plan)
    rows = tuple(
        plan.first_row[part][:, None] + np.arange(len(plan.kinds[spec.kind].offers))
        for part, spec in zip(units, plan.specs, strict=True)
    )
    takes = tuple(
        first_take[part][:, None] + np.arange(len(plan.kinds[spec.kind].takes))
        for part, spec in zip(units, plan.specs, strict=True)
    )
    row_scale, take_scale = np.ones(plan.size), np.ones(int(first_take[-1]))
    for i, scale in enumerate(scales):
        row_scale[rows[i]], take_scale[takes[i]] = scale["offers"], scale["takes"]
    heard = plan.row_offer[plan.row] == 0
    take = first_take[plan.row_unit[plan.row[heard]]] + plan.take[heard]
    source = plan.source[heard]
    factor = plan.factors()[heard] * row_scale[source] / take_scale[take]
    return Intake(rows, takes, take, source, factor, plan.choice[heard])


def _sorted(plan: Plan) -> list[NDArray[np.intp]]:
    """The units of every specification, by one sort."""
    order = np.argsort(plan.unit_spec, kind="stable")
    ends = starts(np.bincount(plan.unit_spec, minlength=len(plan.specs)))
    return [order[ends[i] : ends[i + 1]] for i in range(len(plan.specs))]

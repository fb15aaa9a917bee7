"""Hands a kind or a finite section of a network to other tools, as ``control.StateSpace`` objects with named signals.

A section is a part of the network cut out, with open ends: a link from a unit outside the section is not there, its own
part included. It is for looking, simulating and comparing; what is proven about the network is not read off from it.

Laws: reading ``kind_to_statespace(kind)`` as a plant gives the matrices of ``kind`` back, as far as doubles hold them;
the section with gains is the open section with u = K y closed round it. Graphs come from ``Network.to_networkx``.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.network.describing import internal
from synth.network.gains import Gains
from synth.network.model import Kind, Link, Network

if TYPE_CHECKING:
    import control

MOST_STATES = 2000
Floats = NDArray[np.float64]


def kind_to_statespace(kind: Kind) -> control.StateSpace:
    """The open kind: inputs are its actuators, takes and disturbances, outputs its offers and sensors, all by name.

    Numbers are the nearest doubles in the declared units, time in seconds. A sensor that has the name of an offer is
    called ``<name>_sensor``.
    """
    import control

    kind = _declared(kind)
    offers = [s.name for s in kind.offers]
    sensors = [f"{s.name}_sensor" if s.name in offers else s.name for s in kind.sensors]
    n, m = len(kind.states), len(kind.inputs)
    sensor_zeros = [ExactMatrix.zeros(len(sensors), m), kind.N, ExactMatrix.zeros(len(sensors), len(kind.disturbances))]
    offer_inputs = kind.Fu or ExactMatrix.zeros(len(offers), m)
    B = np.hstack([matrix.floats() for matrix in (kind.B, kind.D, kind.E)])
    C = np.vstack([kind.H.floats().reshape(-1, n), kind.C.floats().reshape(-1, n)])
    D = np.vstack([_row((offer_inputs, kind.F, kind.Fw)), _row(sensor_zeros)])
    names = [signal.name for group in (kind.inputs, kind.takes, kind.disturbances) for signal in group]
    return control.ss(
        kind.A.floats(), B, C, D,
        states=[s.name for s in kind.states], inputs=names, outputs=[*offers, *sensors], name=kind.name,
    )  # fmt: skip


def _declared(kind: Kind) -> Kind:
    """The kind without the signals that tolerances and curves added: its nominal model, as far as a user named it."""
    own = {
        group: [k for k, signal in enumerate(getattr(kind, group)) if not internal(signal.name)]
        for group in ("takes", "offers", "disturbances")
    }

    def part(matrix: ExactMatrix, rows: str | None, columns: str | None) -> ExactMatrix:
        down = own[rows] if rows else range(matrix.shape[0])
        across = own[columns] if columns else range(matrix.shape[1])
        return ExactMatrix(tuple(tuple(matrix.rows[i][j] for j in across) for i in down), (len(down), len(across)))

    return replace(
        kind,
        takes=tuple(kind.takes[k] for k in own["takes"]),
        offers=tuple(kind.offers[k] for k in own["offers"]),
        disturbances=tuple(kind.disturbances[k] for k in own["disturbances"]),
        D=part(kind.D, None, "takes"),
        E=part(kind.E, None, "disturbances"),
        N=part(kind.N, None, "takes"),
        H=part(kind.H, "offers", None),
        F=part(kind.F, "offers", "takes"),
        Fw=part(kind.Fw, "offers", "disturbances"),
        Fu=None if kind.Fu is None else part(kind.Fu, "offers", None),
        inner=(),
    )


def _row(parts: Sequence[ExactMatrix]) -> Floats:
    return np.hstack([part.floats() for part in parts])


@dataclass(frozen=True)
class _Section:
    """Units with names, and connections (receiving unit, sending unit, link) among them."""

    units: tuple[tuple[str, Kind], ...]
    connections: tuple[tuple[int, int, Link], ...]


def section_to_statespace(
    network: Network, gains: Gains | None = None, cells: int = 5, fresh: bool = False
) -> control.StateSpace:
    """A finite section of a network, open or (with ``gains``) closed by u = K y, as a ``control.StateSpace`` object.

    Patterns are cut to ``cells`` cells along every dimension; explicit members are exported whole. Signals are named
    ``<unit>_<signal>``, such as ``hauler_2_slot`` in cell 2 (``tank_0_3_level`` in two dimensions). Open: inputs are
    all actuators, then all disturbances; outputs all offers, then all sensors. Closed: inputs are the disturbances,
    outputs offers, sensors and commands. Declared units, time in seconds.

    A StateSpace has no dead time: where a link has a delay, InputError is raised unless ``fresh`` asks for the member
    of the class in which every link is fresh. Tolerances and curves are at their nominal values (zero). InputError also
    for networks given by rules, for more than ``MOST_STATES`` states and for an algebraic loop without solution.
    """
    import control

    if not 1 <= cells <= 1000:
        raise InputError(f"a section of {cells} cells cannot be made; name 1 to 1000.")
    late = next((link.name for link in network.links if link.delay and link.sort == "link"), None)
    if late is not None and not fresh:
        raise InputError(
            f"the link {late!r} has a delay, which a state-space model cannot hold; say fresh=True to export the "
            "network with every link fresh."
        )
    part = _members(network) if network.members is not None else _pattern(network, cells)
    part = _Section(tuple((name, _declared(kind)) for name, kind in part.units), part.connections)
    size = sum(len(kind.states) for _, kind in part.units)
    if size > MOST_STATES:
        raise InputError(f"the section has {size} states, more than {MOST_STATES}; name fewer cells.")
    names = {
        group: [
            f"{unit}_{signal.name}".replace(".", "_") for unit, kind in part.units for signal in getattr(kind, group)
        ]
        for group in ("states", "inputs", "disturbances", "offers", "sensors")
    }
    A, B, C, D = _joined(part, gains)
    if gains is None:
        inputs, outputs = names["inputs"] + names["disturbances"], names["offers"] + names["sensors"]
    else:
        inputs, outputs = names["disturbances"], names["offers"] + names["sensors"] + names["inputs"]
    return control.ss(
        A, B, C, D, states=_apart(names["states"]), inputs=_apart(inputs), outputs=_apart(outputs), name="section"
    )


def _apart(names: Sequence[str]) -> list[str]:
    """The names, of which the second and later of equal ones get their position as an ending."""
    return [name if names.index(name) == k else f"{name}_{k}" for k, name in enumerate(names)]


def _pattern(network: Network, cells: int) -> _Section:
    """The units of a box of cells and the links inside it."""
    if network.description != "pattern":
        network.refuse_beyond("the export of a section", "pattern", "members")
    places = list(itertools.product(range(cells), repeat=network.dimension))
    index: dict[tuple[tuple[int, ...], str], int] = {}
    units: list[tuple[str, Kind]] = []
    for place in places:
        for kind in network.kinds:
            index[place, kind.name] = len(units)
            units.append(("_".join([kind.name, *map(str, place)]), kind))
    connections: list[tuple[int, int, Link]] = []
    for place in places:
        for link in network.links:
            there = tuple(a + b for a, b in zip(place, link.at, strict=True))
            if link.sort == "link" and (there, link.source_kind) in index:
                connections.append((index[place, link.kind], index[there, link.source_kind], link))
    return _Section(tuple(units), tuple(connections))


def _members(network: Network) -> _Section:
    """All explicit units and their links."""
    members = network.members
    assert members is not None  # the caller has looked
    units = tuple((name, network.kinds[k]) for name, k in zip(members.names, members.kind.tolist(), strict=True))
    rows = zip(*(array.tolist() for array in members.expanded()), strict=True)
    links = ((to, source, network.links[sort]) for to, source, sort in rows)
    return _Section(units, tuple(row for row in links if row[2].sort == "link"))


def _joined(part: _Section, gains: Gains | None) -> tuple[Floats, Floats, Floats, Floats]:
    """The matrices of the section; the takes are eliminated: v = L z, z = H x + F v + Fu u + Fw w."""

    def blocks(name: str) -> Floats:
        from scipy.linalg import block_diag

        return np.asarray(block_diag(*(_matrix(kind, name) for _, kind in part.units)), dtype=float)

    A, B, D, E, C, N, H, F, Fw, Fu = map(blocks, ("A", "B", "D", "E", "C", "N", "H", "F", "Fw", "Fu"))
    L = _wiring(part)
    try:
        taken = np.linalg.solve(np.eye(len(L)) - L @ F, np.hstack([L @ H, L @ Fu, L @ Fw]))
    except np.linalg.LinAlgError:
        raise InputError("the links of this section form an algebraic loop without solution.") from None
    vx, vu, vw = np.split(taken, [H.shape[1], H.shape[1] + Fu.shape[1]], axis=1)
    through = np.hstack([Fu + F @ vu, Fw + F @ vw])
    A, B, E = A + D @ vx, B + D @ vu, E + D @ vw
    offers, sensors = H + F @ vx, C + N @ vx
    if gains is None:
        direct = np.vstack([through, np.hstack([N @ vu, N @ vw])])
        return A, np.hstack([B, E]), np.vstack([offers, sensors]), direct
    from scipy.linalg import block_diag

    K = np.asarray(block_diag(*(gains[kind.name].K.floats() for _, kind in part.units)), dtype=float)
    try:  # u = K (sensors x + N vu u + N vw w)
        ux, uw = np.split(
            np.linalg.solve(np.eye(len(K)) - K @ N @ vu, np.hstack([K @ sensors, K @ N @ vw])), [len(A)], axis=1
        )
    except np.linalg.LinAlgError:
        raise InputError("the gains and the links of this section form an algebraic loop without solution.") from None
    zu, zw = through[:, : len(K)], through[:, len(K) :]
    outputs = np.vstack([offers + zu @ ux, sensors + N @ vu @ ux, ux])
    return A + B @ ux, E + B @ uw, outputs, np.vstack([zw + zu @ uw, N @ (vw + vu @ uw), uw])


def _matrix(kind: Kind, name: str) -> Floats:
    matrix: Any = getattr(kind, name)
    return np.asarray((matrix or ExactMatrix.zeros(len(kind.offers), len(kind.inputs))).floats())


def _wiring(part: _Section) -> Floats:
    """The matrix L (all takes x all offers) with v = L z, own parts of relative links included."""
    starts = {
        group: np.cumsum([0, *(len(getattr(kind, group)) for _, kind in part.units)]) for group in ("takes", "offers")
    }
    L = np.zeros((starts["takes"][-1], starts["offers"][-1]))
    for to, source, link in part.connections:
        kind = part.units[to][1]
        row = starts["takes"][to] + kind.index("takes", link.take)
        if source >= 0:
            L[row, starts["offers"][source] + part.units[source][1].index("offers", link.offer)] += float(link.strength)
        if link.relative:
            L[row, starts["offers"][to] + kind.index("offers", link.offer)] -= float(link.own_strength)
    return L

"""Kinds and sections as StateSpace objects: round trips, and the general library's own interconnection as a witness."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from typing import Any

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.closed import close_network
from synth.network import Network, kind_to_statespace, read, section_to_statespace
from synth.network.model import Kind, Signal
from tests.build import convoy, convoy_gains, hauler, scalar_kind
from tests.network.files import CONVOY, GAP_ONLY
from tests.network.fuzzing import EXAMPLES

fresh_convoy = convoy(delay=0)


def as_problem(kind: Kind, plant: control.StateSpace) -> dict[str, Any]:
    """A problem whose only kind is ``plant`` with the signals of ``kind``."""
    sensors = {s.name: s.unit for s in kind.sensors}
    return {
        "synth": 1,
        "kinds": {
            kind.name: {
                "states": {s.name: s.unit for s in kind.states},
                "inputs": {a.name: {"in": a.unit} for a in kind.inputs},
                "takes": {s.name: s.unit for s in kind.takes},
                "disturbances": {w.name: {"in": w.unit, "peak": float(w.peak)} for w in kind.disturbances},
                "offers": {s.name: s.unit for s in kind.offers},
                "sensors": sensors,
                "plant": plant,
            }
        },
        "network": {"pattern": {"links": []}},
    }


@pytest.mark.parametrize("kind", [hauler(), scalar_kind(), read(GAP_ONLY).kinds[0]], ids=["hauler", "scalar", "gap"])
def test_a_kind_comes_back_from_its_plant_object(kind: Kind) -> None:
    back = read(as_problem(kind, kind_to_statespace(kind))).kinds[0]
    for name in ("A", "B", "D", "E", "C", "N", "H", "F", "Fw"):
        assert getattr(back, name) == getattr(kind, name), name


def test_a_sensor_with_the_name_of_an_offer_is_kept_apart() -> None:
    kind = replace(
        hauler(), sensors=(Signal("place", "m/s"),), C=ExactMatrix.of([[0, 1, 0]]), N=ExactMatrix.zeros(1, 1)
    )
    system = kind_to_statespace(kind)
    assert system.output_labels == ["place", "place_sensor"] and system.C.tolist() == [[1, 0, 0], [0, 1, 0]]


def test_names_and_order_of_a_section() -> None:
    system = section_to_statespace(fresh_convoy, cells=2)
    assert system.state_labels[3] == "hauler_1_slot"
    assert system.input_labels == ["hauler_0_demand", "hauler_1_demand", "hauler_0_slope", "hauler_1_slope"]
    assert system.output_labels[:3] == ["hauler_0_place", "hauler_1_place", "hauler_0_slot"]
    closed = section_to_statespace(fresh_convoy, convoy_gains(), cells=2)
    assert closed.input_labels == ["hauler_0_slope", "hauler_1_slope"]
    assert closed.output_labels[-1] == "hauler_1_demand"


def witness(network: Network, cells: int) -> control.StateSpace:
    """The open section put together by the control library from one system per unit and the wiring between takes and
    offers."""
    systems = []
    for i in range(cells):
        for kind in network.kinds:
            system = kind_to_statespace(kind)
            system.name = f"{kind.name}_{i}"
            systems.append(system)
    whole = control.append(*systems)
    takes, offers = [], []
    start_in = start_out = 0
    for i in range(cells):
        for kind in network.kinds:
            takes += [((kind.name, i, t.name), start_in + len(kind.inputs) + k) for k, t in enumerate(kind.takes)]
            offers += [((kind.name, i, o.name), start_out + k) for k, o in enumerate(kind.offers)]
            start_in += len(kind.inputs) + len(kind.takes) + len(kind.disturbances)
            start_out += len(kind.offers) + len(kind.sensors)
    at_in, at_out = dict(takes), dict(offers)
    L = np.zeros((start_in, start_out))
    for i in range(cells):
        for link in network.links:
            j = i + link.at[0]
            if 0 <= j < cells:
                row = at_in[link.kind, i, link.take]
                L[row, at_out[link.source_kind, j, link.offer]] += float(link.strength)
                if link.relative:
                    L[row, at_out[link.kind, i, link.offer]] -= float(link.own_strength)
    return control.feedback(whole, control.ss([], [], [], L), sign=1)


def test_an_open_section_is_what_the_control_library_makes_of_it() -> None:
    two_kinds = replace(
        fresh_convoy,
        kinds=(hauler(), replace(scalar_kind(2), F=ExactMatrix.of([["1/3"]]), offers=(Signal("level", "m"),))),
        links=(
            *convoy(delay=0, offsets=(-1, 1)).links,
            replace(fresh_convoy.links[0], source_kind="tank", offer="level", at=(1,), own_strength=Fraction(0)),
            replace(
                fresh_convoy.links[0], kind="tank", take="inflow", source_kind="tank", offer="level", own_strength=0
            ),
        ),
    )
    for network in (fresh_convoy, two_kinds):
        ours, other = section_to_statespace(network, cells=4), witness(network, 4)
        # the library orders inputs by unit, ours by group: compare the frequency responses of matching channels
        names_in, names_out = [], []
        for i in range(4):
            for kind in network.kinds:
                groups = ("inputs", "takes", "disturbances")
                names_in += [f"{kind.name}_{i}_{s.name}" for g in groups for s in getattr(kind, g)]
                names_out += [(f"{kind.name}_{i}_{s.name}", g) for g in ("offers", "sensors") for s in getattr(kind, g)]
        columns = [names_in.index(name) for name in ours.input_labels]
        offers = [k for k, (_, group) in enumerate(names_out) if group == "offers"]
        for w in (0.1, 1.0, 7.0):
            mine, theirs = ours(1j * w), other(1j * w)
            rows = [names_out.index((n, "offers")) for n in ours.output_labels[: len(offers)]]
            assert np.allclose(mine[: len(offers)], theirs[np.ix_(rows, columns)], rtol=1e-9, atol=1e-12)


def test_a_closed_section_has_the_modes_of_its_closed_units() -> None:
    """Links that point one way leave the modes of the units: theory (1); the first unit has no link, so no own part."""
    gains = convoy_gains()
    closed = close_network(fresh_convoy, gains)[0].A.floats()
    alone = close_network(replace(fresh_convoy, links=()), gains)[0].A.floats()
    modes = np.sort_complex(np.concatenate([np.linalg.eigvals(alone), np.linalg.eigvals(closed)]))
    assert np.allclose(np.sort_complex(section_to_statespace(fresh_convoy, gains, cells=2).poles()), modes, atol=1e-7)


@settings(max_examples=25, deadline=None)
@given(st.lists(st.fractions(-9, 9, max_denominator=8), min_size=3, max_size=3), st.integers(1, 4))
def test_law_closing_the_open_section_gives_the_closed_one(K: list[Fraction], cells: int) -> None:
    gains = convoy_gains((K[0], K[1], K[2]))
    opened, closed = section_to_statespace(fresh_convoy, cells=cells), section_to_statespace(fresh_convoy, gains, cells)
    rows = [opened.output_labels.index(f"hauler_{i}_slot") for i in range(cells)]
    C, B = opened.C[cells:], opened.B[:, :cells]
    big = np.kron(np.eye(cells), gains["hauler"].K.floats())
    assert rows[0] == cells and np.allclose(closed.A, opened.A + B @ big @ C)
    assert np.allclose(closed.C[-cells:], big @ C)


def test_explicit_members_are_exported_whole() -> None:
    """The wiring of the five basins written by hand: rows receive, columns send, own parts stand on the diagonal."""
    network = read(EXAMPLES / "members.yaml")
    system = section_to_statespace(network)
    assert network.members is not None
    order = [network.members.names.index(name) for name in ("north", "south", "east", "west", "low")]
    flows = np.zeros((5, 5))
    flows[4, 0] = flows[4, 1] = 0.05
    flows[4, 4] = -0.1
    flows[1, 2], flows[1, 3], flows[1, 1] = 0.02, 0.02, -0.02
    area = np.array([2, 2, 3, 2, 4])
    level = [2 * k for k in order]
    assert np.allclose(system.A[np.ix_(level, level)], flows / area[:, None], rtol=1e-12, atol=0)


def test_tolerances_and_curves_leave_the_nominal_model() -> None:
    kind = read(EXAMPLES / "curved.yaml").kinds[0]
    assert kind.inner
    system = kind_to_statespace(kind)
    assert system.input_labels == ["demand", "ahead", "slope"] and system.output_labels[0] == "place"
    assert np.array_equal(system.A, kind.A.floats())
    section = section_to_statespace(read(EXAMPLES / "curved.yaml"), cells=2, fresh=True)
    assert not any(" " in name for name in section.output_labels + section.input_labels)


def test_what_cannot_be_exported_is_said() -> None:
    with pytest.raises(InputError, match=r"the link 'follow' has a delay.*fresh=True"):
        section_to_statespace(read(CONVOY))
    assert section_to_statespace(read(CONVOY), fresh=True).nstates == 15
    with pytest.raises(InputError, match="name 1 to 1000"):
        section_to_statespace(fresh_convoy, cells=0)
    for name in ("rules", "edge"):
        with pytest.raises(InputError, match="the export of a section"):
            section_to_statespace(read(EXAMPLES / f"{name}.yaml"), fresh=True)
    with pytest.raises(InputError, match="name fewer cells"):
        section_to_statespace(fresh_convoy, cells=1000)
    loop = scalar_kind()
    link = replace(fresh_convoy.links[0], source_kind="tank", offer="level", kind="tank", take="inflow", at=(0,))
    looped = replace(
        fresh_convoy,
        kinds=(replace(loop, F=ExactMatrix.of([[1]])),),
        links=(replace(link, strength=Fraction(1), own_strength=Fraction(0)),),
    )
    with pytest.raises(InputError, match="algebraic loop"):
        section_to_statespace(looped, cells=1)

"""Cells with several units of one kind: places, gain sets, gain tables (all data invented)."""

from __future__ import annotations

import copy
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import synth
from synth.base.errors import InputError
from synth.handoff.table import csv_text, gain_rows
from synth.network import Network, describe, obstruction, read, read_gains
from synth.network.symbol import symbol_of
from tests.network.fuzzing import EXAMPLES

CAR: dict[str, Any] = {
    "parameters": {"lag": "0.5 s", "pull": "0.3 1/s^2"},
    "states": {"slot": "m", "speed": "m/s"},
    "inputs": {"push": "m/s^2"},
    "takes": {"ahead": "m/s^2"},
    "offers": {"place": "slot"},
    "sensors": ["slot", "speed"],
    "equations": {"slot'": "speed", "speed'": "push + ahead - speed/lag"},
}


HEADER = "kind,actuator,signal,gain,gain_unit,actuator_unit,signal_unit,sign_convention,period_s,certificate_sha256"


def line(name: str, source: str, at: int, to: str, strength: object = "0.3 1/s^2", **more: object) -> dict[str, Any]:
    return {"name": name, "from": source, "at": at, "to": to, "strength": strength, "relative": True, **more}


def twin(design: object = None, cell: object = None, kinds: object = None, edge: object = None) -> Network:
    """Two cars per cell, the rear one pulled less than the front one."""
    links = [
        line("follow", "rear.place", -1, "front.ahead", "from.pull"),
        line("follow", "front.place", 0, "rear.ahead", "0.1 1/s^2"),
    ]
    pattern: dict[str, Any] = {"links": links}
    if kinds is None:
        pattern["cell"] = cell or {"front": "car", "rear": "car"}
    network: dict[str, Any] = {"pattern": pattern}
    if edge is not None:
        network["edge"] = edge
    problem: dict[str, Any] = {"synth": 1, "kinds": kinds or {"car": CAR}, "network": network}
    if design is not None:
        problem["design"] = design
    return read(problem)


def test_places_are_what_declaring_a_kind_each_by_hand_would_give() -> None:
    by_hand = twin(kinds={"front": CAR, "rear": CAR})
    network = twin()
    assert network.hash == by_hand.hash and network.links == by_hand.links and network.same_model(by_hand)
    assert [kind.name for kind in network.cell_kinds] == ["front", "rear"] and network.cell is None
    assert network.links[0].strength == Fraction(3, 10)
    assert twin(cell={"front": "car", "rear": "car", "third": "car"}).hash != network.hash


def test_the_modes_are_those_of_a_ring_of_cars_written_out() -> None:
    """Literal check: a ring of 2 cells with 2 cars each, rows by hand, against the phases 0 and pi."""
    A = np.zeros((8, 8))
    for k in range(4):  # car k of the ring; even: front, pulled by the car before with 0.3; odd: rear, with 0.1
        g = 0.1 if k % 2 else 0.3
        A[2 * k, 2 * k + 1] = 1
        A[2 * k + 1, 2 * k + 1] = -2
        A[2 * k + 1, 2 * k] -= g
        A[2 * k + 1, 2 * ((k - 1) % 4)] += g
    blocks = [symbol_of(twin()).floating((theta,)) for theta in (0.0, np.pi)]
    found = np.concatenate([np.linalg.eigvals(b[0]) for b in blocks if b is not None])
    np.testing.assert_allclose(np.sort_complex(found), np.sort_complex(np.linalg.eigvals(A)), atol=1e-7)


@pytest.mark.parametrize(
    ("gains", "groups"),
    [
        (None, {"car": ("front", "rear")}),
        ("per_kind", {"car": ("front", "rear")}),
        ("per_place", {"front": ("front",), "rear": ("rear",)}),
        ({"crew": ["front", "rear"]}, {"crew": ("front", "rear")}),
        ({"crew": "car"}, {"crew": ("front", "rear")}),
        ({"lead": "front"}, {"lead": ("front",), "car": ("rear",)}),
    ],
)
def test_which_places_carry_the_same_gains(gains: object, groups: object) -> None:
    network = twin(None if gains is None else {"gains": gains})
    assert network.gain_groups() == groups
    assert network.hash == twin().hash  # what gains may be found is no part of the model
    assert ("carry the same gains" in describe(network).as_text()) == (len(network.gain_groups()) == 1)
    assert describe(network).as_json()["gain_groups"] == {name: list(kinds) for name, kinds in groups.items()}


def test_a_kind_without_places_is_a_group_of_its_own() -> None:
    network = twin(kinds={"front": CAR, "rear": CAR})
    assert network.gain_groups() == {"front": ("front",), "rear": ("rear",)}
    joined = twin({"gains": {"both": ["front", "rear"]}}, kinds={"front": CAR, "rear": CAR})
    assert joined.gain_groups() == {"both": ("front", "rear")}


def test_members_with_other_parameters_share_gains_unless_asked() -> None:
    import networkx as nx

    graph = nx.DiGraph()
    graph.add_node("a", kind="car")
    graph.add_node("b", kind="car", lag="0.6 s")
    graph.add_edge("a", "b", name="follow", offer="place", take="ahead", strength="0.1 1/s^2")
    problem: dict[str, Any] = {"synth": 1, "kinds": {"car": CAR}, "network": {"members": {"graph": graph}}}
    assert list(read(problem).gain_groups()) == ["car"]
    for word in ("per_unit", "per_place"):
        own = read({**problem, "design": {"gains": word}})
        assert [len(names) for names in own.gain_groups().values()] == [1, 1]


def test_what_the_design_says_of_a_kind_holds_at_all_its_places() -> None:
    network = twin({"uses": {"car": {"push": ["slot"]}}, "gain_bounds": {"car": {"push": {"slot": "4 1/s^2"}}}})
    assert network.goal.uses == {"front": {"push": ("slot",)}, "rear": {"push": ("slot",)}}
    assert network.goal.gain_bounds == {k: {"push": {"slot": Fraction(4)}} for k in ("front", "rear")}
    own = twin({"gains": "per_place", "uses": {"car": {"push": ["slot"]}, "rear": {"push": ["speed"]}}})
    assert own.goal.uses == {"front": {"push": ("slot",)}, "rear": {"push": ("speed",)}}
    with pytest.raises(InputError, match="cannot carry the same gains, because"):
        twin({"uses": {"rear": {"push": ["speed"]}}})


def test_an_edge_of_a_cell_with_places() -> None:
    edge = {"side": "first", "units": {"leader": {"at": 0, "kind": "car", "instead_of": "front"}}}
    network = twin(edge=edge)
    assert network.cell == ("front", "rear") and [kind.name for kind in network.kinds] == ["front", "rear", "car"]
    assert network.gain_groups() == {"car": ("front", "rear", "car")}
    # the leader hears nobody, the rear car of its cell hears the leader
    assert describe(network).intake == {"front.ahead": Fraction(3, 10), "rear.ahead": Fraction(1, 10), "car.ahead": 0}


def test_the_obstruction_names_the_places() -> None:
    blind = copy.deepcopy(CAR)
    blind["sensors"] = ["speed"]
    links = [line("follow", "rear.place", -1, "front.ahead"), line("follow", "front.place", 0, "rear.ahead")]
    pattern = {"cell": {"front": "car", "rear": "car"}, "links": links}
    found = obstruction(read({"synth": 1, "kinds": {"car": blind}, "network": {"pattern": pattern}}))
    assert found is not None and found.cause == "not seen"
    assert dict(found.direction) == {"front.slot": 1, "rear.slot": 1}


def test_a_table_may_name_a_gain_set_once(tmp_path: Path) -> None:
    file = tmp_path / "gains.csv"

    def gains(network: Network, *rows: str) -> Any:
        file.write_text("\n".join([HEADER, *rows, ""]))
        return read_gains(file, network)

    once = gains(twin(), *rows_of("car", -3, -4))
    assert once["front"].K == once["rear"].K and once["front"].K.rows == ((-3, -4),)
    assert gains(twin(), *rows_of("front", -3, -4), *rows_of("rear", -3, -4)) == once
    with pytest.raises(InputError, match="this table gives them different ones"):
        gains(twin(), *rows_of("front", -3, -4), *rows_of("rear", -3, -5))
    apart = gains(twin({"gains": "per_place"}), *rows_of("front", -3, -4), *rows_of("rear", -3, -5))
    assert apart["rear"].K.rows == ((-3, -5),)
    with pytest.raises(InputError, match="unknown kind 'car'"):
        gains(twin({"gains": "per_place"}), *rows_of("car", -3, -4))
    with pytest.raises(InputError, match="has rows of its own"):
        gains(twin(), *rows_of("front", -3, -4), *rows_of("rear", -3, -4), *rows_of("car", -3, -4))


def rows_of(kind: str, slot: int, speed: int) -> tuple[str, str]:
    return (
        f"{kind},push,slot,{slot},1/s^2,m/s^2,m,u = K y,,",
        f"{kind},push,speed,{speed},1/s,m/s^2,m/s,u = K y,,",
    )


def test_the_example_reads() -> None:
    network = read(EXAMPLES / "cell.yaml")
    assert list(network.gain_groups()) == ["front", "rear", "loader"]
    assert "Kinds front and rear, alike" in describe(network).as_text()


CART: dict[str, Any] = {
    "states": {"x": "m"},
    "inputs": {"push": "m/s"},
    "takes": {"pull": "m/s"},
    "offers": {"place": "x"},
    "sensors": ["x"],
    "equations": {"x'": "push + pull"},
}


@pytest.mark.parametrize(
    ("gains", "front", "rear", "radius"),
    [
        ("per_place", -1.4, -1.9, np.sqrt(0.6 / 2 * 0.1 / 2)),
        ("per_kind", -1.4, -1.4, np.sqrt(0.6 / 2 * 0.1 / 1.5)),
    ],
)
def test_places_go_through_design_and_proof(
    gains: str, front: float, rear: float, radius: float, tmp_path: Path
) -> None:
    """x' = u + g (z_other - x) closes at u + g. The fastest mode allowed is 2 1/s, so own gains reach 2 at both places,
    shared ones 2 at the front place and 1.5 at the rear one; the radius is the mean of the two links' p |g| (by hand).
    """
    links = [
        line("tow", "rear.place", -1, "front.pull", "0.6 1/s"),
        line("tow", "front.place", 0, "rear.pull", "0.1 1/s"),
    ]
    pattern = {"cell": {"front": "cart", "rear": "cart"}, "links": links}
    goal = {"target": "0.5", "slowest": "0.2 1/s", "fastest": "2 1/s", "gains": gains}
    network = read({"synth": 1, "kinds": {"cart": CART}, "network": {"pattern": pattern}, "design": goal})
    found = synth.design(network).gains
    assert float(found["front"].K.rows[0][0]) == pytest.approx(front, abs=2e-3)
    assert float(found["rear"].K.rows[0][0]) == pytest.approx(rear, abs=2e-3)
    certificate = synth.prove(network, found)
    assert certificate.proven
    assert certificate.radius.lower <= certificate.radius.upper
    assert certificate.radius.upper == pytest.approx(radius, rel=2e-3)
    file = tmp_path / "gains.csv"
    file.write_text(csv_text(gain_rows(network, found)))
    assert read_gains(file, network) == found

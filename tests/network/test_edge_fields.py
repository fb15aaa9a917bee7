"""Edges of fields: half planes and half spaces that repeat along their edge (all data invented)."""

from __future__ import annotations

import copy
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
import yaml

from synth.base.errors import InputError
from synth.network import Network, describe, obstruction, read
from synth.network.cuts import section_of, strip_of
from synth.network.obstructions import examine
from synth.network.symbol import member_symbol, symbol_of
from synth.report.picture import network_picture
from tests.network.fuzzing import EXAMPLES

TILE: dict[str, Any] = {
    "states": {"x": "K"},
    "inputs": {"heat": "K/s"},
    "takes": {"flow": "K/s"},
    "offers": {"warmth": "x"},
    "sensors": ["x"],
    "equations": {"x'": "heat + flow"},
}
WALL = {**TILE, "takes": {"flow": "K/s", "heard": "K"}, "equations": {"x'": "heat + flow - leak*x"}}
WALL["parameters"] = {"leak": "2 1/s"}


def step(axis: int, by: int, dimension: int) -> list[int]:
    return [by if k == axis else 0 for k in range(dimension)]


def field(
    edge: object = None, axis: int = 0, dimension: int = 2, wall: dict[str, Any] | None = None, **tile: object
) -> Network:
    """A field in which tiles take 3 1/s from both sides across ``axis`` and 5 1/s from one side along the others."""
    links = [
        {"name": "flow", "from": "tile.warmth", "at": step(k, by, dimension), "to": "tile.flow",
         "strength": "3 1/s" if k == axis else "5 1/s", "relative": True}
        for k in range(dimension) for by in ((-1, 1) if k == axis else (-1,))
    ]  # fmt: skip
    kinds: dict[str, Any] = {"tile": {**copy.deepcopy(TILE), **tile}, "wall": wall or WALL}
    network: dict[str, Any] = {"pattern": {"dimension": dimension, "links": links}}
    if edge is None:
        del kinds["wall"]
    else:
        network["edge"] = edge
    return read({"synth": 1, "kinds": kinds, "network": network})


def walled(axis: int = 1, **more: object) -> dict[str, Any]:
    return {"side": "first", "axis": axis, "units": {"rim": {"at": 0, "kind": "wall"}}, **more}


def test_what_an_edge_of_a_field_holds() -> None:
    network = field(walled(2, links=[{"name": "pipe", "from": "rim.warmth", "along": -4, "to": "tile@2.flow",
                                      "strength": "1 1/s"}]))  # fmt: skip
    (edge,) = network.edges
    assert network.description == "edge pattern" and network.cell == ("tile",) and edge.axis == 1
    assert edge.links[0].link.at == (-4, -2) and edge.links[0].to == 2
    assert field(walled(1)).edges[0].axis == 0
    first = walled()
    del first["axis"]
    assert field(first).hash == field(walled(1)).hash != field(walled(2)).hash
    assert field(walled(1)) != field(walled(2))
    assert not field(walled(1)).same_model(field(walled(2)))
    assert network.scaled(Fraction(2)).edges[0].links[0].link.strength == 2
    with pytest.raises(InputError, match="design of edge patterns is not offered"):
        network.refuse_beyond_fixed_links("design")


def test_rows_at_the_edge_written_out() -> None:
    """Literal check at the phases 0 and pi along the edge: rim, two rows of tiles, the third row beyond the cut."""
    strip = strip_of(field(walled()), field(walled()).edges[0], 3)
    assert strip.dimension == 1 and [kind.name for kind in strip.kinds] == ["rim", "tile 1", "tile 2"]
    for wave, along in (((1,), 5), ((-1,), -5)):  # 5 from the neighbour along the edge, minus 5 of its own
        blocks = symbol_of(strip).exact(wave)
        assert blocks is not None
        A = np.array([[float(v) for v in row] for row in blocks[0]])
        inner = along - 5
        expected = [[-2 - 3 + inner, 3, 0], [3, -6 + inner, 3], [0, 3, -6 + inner]]
        np.testing.assert_array_equal(A, expected)


def test_the_last_edge_mirrors_the_first() -> None:
    first, last = (field({**walled(), "side": side}) for side in ("first", "last"))
    mirrored = [symbol_of(strip_of(n, n.edges[0], 3)).exact((1,)) for n in (first, last)]
    assert mirrored[0] == mirrored[1]


@pytest.mark.parametrize("dimension", [2, 3])
def test_turning_the_field_turns_nothing_else(dimension: int) -> None:
    """The edge across the last axis of a field whose axes are turned round is the same edge."""
    one = field(walled(1), 0, dimension)
    other = field(walled(dimension), dimension - 1, dimension)
    strips = [strip_of(n, n.edges[0], 4) for n in (one, other)]
    assert strips[0].same_model(strips[1]) and strips[0].dimension == dimension - 1
    assert one.to_networkx(2).number_of_edges() == other.to_networkx(2).number_of_edges()


def test_a_section_is_a_cut_of_the_strip() -> None:
    """Three rows, four columns: its rows are those of the strip, with the first column's neighbour left out."""
    network = field(walled())
    whole = section_of(network, network.edges[0], 3, 4)
    assert whole.members is not None and whole.members.names[:5] == (
        "rim 0 0",
        "rim 0 1",
        "rim 0 2",
        "rim 0 3",
        "tile 1 0",
    )
    blocks = member_symbol(whole).exact(())
    assert blocks is not None
    A = np.array([[float(v) for v in row] for row in blocks[0]])
    across = np.array([[-5, 3, 0], [3, -6, 3], [0, 3, -6]])
    along = np.diag([-5.0] * 4) + np.diag([5.0] * 3, -1)
    np.testing.assert_array_equal(A, np.kron(across, np.eye(4)) + np.kron(np.eye(3), along))
    graph = network.to_networkx(3)
    assert ("rim 0 1", "rim 0 2", 0) in graph.edges and ("tile 1 0", "rim 0 0", 0) in graph.edges
    assert graph.number_of_nodes() == 9


def test_a_mode_that_lives_at_the_edge() -> None:
    """A rim that nobody reads and that does not decay is found; one that leaks is not."""
    blind = {**WALL, "sensors": [], "inputs": {"heat": "K/s"}, "equations": {"x'": "heat + 0.0*flow - leak*x"},
             "parameters": {"leak": "-1 1/s"}}  # fmt: skip
    alone = walled(links=[])
    cut_off: dict[str, Any] = {"takes": {"flow": "K/s"}, "offers": {"warmth": "x"}}
    found = obstruction(field(alone, wall={**blind, "offers": {"other": "x"}}, **cut_off))
    assert found is not None and found.cause == "not seen" and dict(found.direction) == {"rim.x": 1}
    assert found.theta == (0.0,) and found.s == 1 and "the units at the first edge moving alone" in found.advice
    still = {**blind, "parameters": {"leak": "1 1/s"}, "offers": {"other": "x"}}
    tested = examine(field(alone, wall=still, **cut_off))
    assert tested.obstruction is None and "on its outermost 4 rows alone and have the phases 0 and pi" in tested.tested


def test_a_mode_that_alternates_along_the_edge() -> None:
    """Rim units read the sum of their own and the next one's value, so the alternating direction is unseen."""
    wall = {**WALL, "takes": {"heard": "K"}, "offers": {"warmth": "x"}, "sensors": {"both": {"is": "x + heard"}},
            "equations": {"x'": "heat"}, "parameters": {}}  # fmt: skip
    link = {"name": "read", "from": "rim.warmth", "along": -1, "to": "rim.heard", "strength": 1}
    deaf = {"offers": {"other": "x"}, "takes": {"flow": "K/s"}}

    def edged(strength: object) -> Network:
        links = [{"name": "flow", "from": "tile.other", "at": [0, -1], "to": "tile.flow", "strength": "0.1 1/s"}]
        edge = walled(links=[{**link, "strength": strength}])
        network = {"pattern": {"dimension": 2, "links": links}, "edge": edge}
        return read({"synth": 1, "kinds": {"tile": {**TILE, **deaf}, "wall": wall}, "network": network})

    found = obstruction(edged(1))
    assert found is not None and found.theta == (np.pi,) and dict(found.direction) == {"rim.x": 1}
    assert "every other one along it the opposite way" in found.advice
    assert obstruction(edged("0.5")) is None


def test_the_intake_counts_what_enters_at_the_edge() -> None:
    network = field(walled(links=[{"name": "pipe", "from": "tile@2.warmth", "to": "tile@1.flow", "strength": "1 1/s"}]))
    assert describe(network).intake == {"tile.flow": 12, "wall.flow": 8, "wall.heard": 0}
    assert describe(field()).intake == {"tile.flow": 11}


def test_the_example_is_explained() -> None:
    said = describe(read(EXAMPLES / "shore.yaml"))
    text = said.as_text()
    assert "The first edge across axis 2, the same all along it" in text
    assert "quay: a row of harbour units, at the edge itself, instead of the basin" in text
    assert "into the units 1 place in from the edge, channel: harbour.depth at (-3, -1) -> basin.inflow" in text
    assert said.as_json()["edges"][0]["axis"] == 2  # type: ignore[index]
    assert said.intake["basin.inflow"] == Fraction(12, 100) and said.intake["harbour.inflow"] == Fraction(8, 100)


def test_the_picture_shows_the_rows_at_the_edge() -> None:
    svg = network_picture(read(EXAMPLES / "shore.yaml"))
    assert "The first edge across axis 2" in svg and ">quay<" in svg and ">row 3<" in svg
    # seep into the cell: 3; quay and rows 1 to 3: 3 arcs in, 3 arcs out and 4 loops; and the channel
    assert svg.count("<path") == 3 + 10 + 1


def test_the_picture_shows_what_an_edge_unit_sends_and_no_more() -> None:
    text = (EXAMPLES / "edge.yaml").read_text()
    problem = yaml.safe_load(text)
    shown = network_picture(read(problem)).count("<path")
    problem["kinds"]["lake"]["offers"] = {"other": "level"}
    del problem["network"]["edge"]["links"]
    assert network_picture(read(problem)).count("<path") == shown - 2  # seep into place 1, and relief

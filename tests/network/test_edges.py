"""Edges of a line: what stands there, which links are left, and that a leader does not help (all data invented)."""

from __future__ import annotations

import copy
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.network import Network, obstruction, read
from synth.network.cuts import section_of
from synth.network.obstructions import examine
from synth.network.symbol import member_symbol, symbol_of

FOLLOWER: dict[str, Any] = {
    "states": {"x": "m"},
    "inputs": {"push": "m/s"},
    "takes": {"pull": "m/s", "gap": "m"},
    "offers": {"place": "x"},
    "sensors": ["gap"],
    "equations": {"x'": "push + pull"},
}
LEADER: dict[str, Any] = {
    "states": {"x": "m", "v": "m/s"},
    "inputs": {"push": "m/s^2"},
    "offers": {"place": "x"},
    "sensors": ["x", "v"],
    "equations": {"x'": "v", "v'": "push"},
}


def string(edge: object = None, sensors: object = None, links: object = None, **kinds: object) -> dict[str, Any]:
    """A diffusive string: both neighbours pull with 1 1/s, and sensors read the gaps to both."""
    follower = copy.deepcopy(FOLLOWER)
    if sensors:
        follower["sensors"] = sensors
    both = [
        {"name": name, "from": "wagon.place", "at": at, "to": f"wagon.{take}", "strength": g, "relative": True}
        for name, take, g in (("pull", "pull", "1 1/s"), ("ranging", "gap", 1))
        for at in (-1, 1)
    ]
    network: dict[str, Any] = {"pattern": {"links": both if links is None else links}}
    if edge is not None:
        network["edge"] = edge
    return {"synth": 1, "kinds": {"wagon": follower, **kinds}, "network": network}


LED: dict[str, Any] = {"side": "first", "units": {"leader": {"at": 0, "kind": "truck"}}}


def led(**changes: Any) -> Network:
    return read(string({**LED, **changes}, truck=LEADER))


def test_trap_12_a_leader_anchored_diffusive_string_is_refused() -> None:
    """The leader sees its own position, and still the string as a whole drifts unseen: theory (26)."""
    network = led()
    assert network.description == "edge pattern" and network.units is None
    found = obstruction(network)
    assert found is not None and found.cause == "not seen"
    assert found.theta == (0.0,) and found.s == 0
    assert dict(found.direction) == {"wagon.x": 1}
    assert "A leader at the edge (leader) does not help" in found.advice and "at bounded gaps" in found.advice
    seen = read(string(LED, sensors=["x", "gap"], truck=LEADER))
    assert obstruction(seen) is None


def test_the_leader_fades(capsys: pytest.CaptureFixture[str]) -> None:
    """What the refusal means: anchored strings of N wagons pass a static push on with a gain that grows like N^2.

    G = 55/820/12880 for N = 10/40/160 (theory section 8), the column sum of the inverse of a second difference."""
    for n, gain in ((10, 55), (40, 820), (160, 12880)):
        A = np.diag([2.0] * n) - np.diag([1.0] * (n - 1), 1) - np.diag([1.0] * (n - 1), -1)
        A[-1, -1] = 1
        assert np.abs(np.linalg.inv(A)).sum(axis=1).max() == pytest.approx(gain)


def test_what_an_edge_holds() -> None:
    network = led(links=[{"name": "radio", "from": "leader.place", "to": "wagon@2.pull", "strength": "0.1 1/s"}])
    (edge,) = network.edges
    assert network.cell == ("wagon",) and [k.name for k in network.cell_kinds] == ["wagon"]
    assert (edge.side, edge.units[0].name, edge.units[0].instead_of) == ("first", "leader", "wagon")
    assert (edge.links[0].to, edge.links[0].link.at, edge.links[0].link.strength) == (2, (-2,), Fraction(1, 10))
    assert network.scaled(Fraction(3)).edges[0].links[0].link.strength == Fraction(3, 10)
    assert network.hash != led().hash != read(string(truck=LEADER)).hash
    assert led().hash == led().hash
    assert set(symbol_of(network).names) == {"wagon.x"}


def test_a_section_is_the_half_line_cut() -> None:
    """Literal check: rows of the section, written out by hand, with the far own part kept and the missing one gone."""
    whole = section_of(led(), led().edges[0], 4)
    assert whole.members is not None and whole.units == 4
    assert whole.members.names == ("leader", "wagon 1", "wagon 2", "wagon 3")
    blocks = member_symbol(whole).exact(())
    assert blocks is not None
    A = np.array([[float(v) for v in row] for row in blocks[0]])
    expected = [
        [0, 1, 0, 0, 0],
        [0, 0, 0, 0, 0],
        [1, 0, -2, 1, 0],
        [0, 0, 1, -2, 1],
        [0, 0, 0, 1, -2],
    ]  # fmt: skip
    np.testing.assert_array_equal(A, expected)


def test_the_last_edge_and_a_line_with_both() -> None:
    last = read(string({"side": "last"}))
    A = member_symbol(section_of(last, last.edges[0], 3)).exact(())
    assert A is not None
    assert [[int(v) for v in row] for row in A[0]] == [[-1, 1, 0], [1, -2, 1], [0, 1, -2]]  # wagon 0 is the last
    both = read(string([LED, {"side": "last", "units": {"tail": {"at": -1, "kind": "truck"}}}], truck=LEADER))
    assert [edge.side for edge in both.edges] == ["first", "last"]
    assert (
        both.hash
        == read(string([{"side": "last", "units": {"tail": {"at": -1, "kind": "truck"}}}, LED], truck=LEADER)).hash
    )
    members = section_of(both, both.edges[1], 3).members
    assert members is not None and members.names == ("wagon 0", "tail", "wagon -2")


def test_late_differences_and_intervals_at_an_edge() -> None:
    """A link without a source is gone with all its parts; one that is cut keeps its own part."""
    line = {"name": "pull", "from": "wagon.place", "at": -1, "to": "wagon.pull", "relative": True}
    for said in ({"strength": "1 1/s", "late": "difference", "delay": "1 s"}, {"strength": "0.5..1 1/s"}):
        network = read(string({"side": "first"}, links=[{**line, **said}, {**line, **said, "at": 1}]))
        blocks = member_symbol(section_of(network, network.edges[0], 3)).exact(())
        assert blocks is not None
        assert [[int(v) for v in row] for row in blocks[0]][:2] == [[-1, 1, 0], [1, -2, 1]]


def test_a_mode_of_the_edge_alone() -> None:
    """The pattern is fine, but the leader has a double integrator that nothing reads."""
    blind = {**LEADER, "sensors": ["v"]}
    network = read(string(LED, sensors=["x", "gap"], truck={**blind, "offers": {"other": "x"}}))
    found = obstruction(network)
    assert found is not None and found.theta == () and dict(found.direction) == {"leader.x": 1}
    assert "the units at the first edge moving alone" in found.advice
    heard = read(string(LED, sensors=["x", "gap"], truck=blind))
    assert obstruction(heard) is None, "the wagon behind hears it through its gap"
    passive = {"states": {"x": "m"}, "offers": {"place": "x"}, "equations": {"x'": "0"}}
    found = obstruction(read(string(LED, sensors=["x", "gap"], truck=passive)))
    assert found is not None and found.cause == "not reached" and "leader.x" in found.direction
    assert "outermost" in examine(heard).tested


def test_units_are_converted_at_an_edge() -> None:
    far = {**copy.deepcopy(LEADER), "states": {"x": "km", "v": "km/h"}, "inputs": {"push": "km/h/s"}}
    far["parameters"] = {}
    whole = section_of(read(string(LED, truck=far)), read(string(LED, truck=far)).edges[0], 3)
    strengths = {link.strength for link in whole.links if link.source_kind == "truck" and link.take == "pull"}
    assert strengths == {Fraction(1000)}


@pytest.mark.parametrize(
    ("edge", "sentence"),
    [
        ({"side": "left"}, "accepted are 'first' (places 0, 1, 2, ...) and 'last'"),
        ({}, "the key 'side' is missing"),
        ({**LED, "units": {"leader": {"at": -1, "kind": "truck"}}}, "from 0 to 1000"),
        ({**LED, "units": {"leader": {"at": 0, "kind": "trck"}}}, "unknown kind 'trck'"),
        ({**LED, "units": {"wagon": {"at": 0, "kind": "truck"}}}, "the name of another kind"),
        ({**LED, "units": {"a": {"at": 0, "kind": "truck"}, "b": {"at": 0, "kind": "truck"}}}, "stands at this place"),
        ([LED, LED], "a line has one first edge"),
        (
            {**LED, "links": [{"name": "r", "from": "lead.place", "to": "wagon@1.pull", "strength": "1 1/s"}]},
            "names no unit",
        ),
        (
            {**LED, "links": [{"name": "r", "from": "leader.place", "to": "wagon@-1.pull", "strength": "1 1/s"}]},
            "no unit of the pattern stands",
        ),
        (
            {**LED, "links": [{"name": "r", "from": "leader.place", "to": "wagon@0.pull", "strength": "1 1/s"}]},
            "'leader' stands there",
        ),
        (
            {**LED, "links": [{"name": "r", "from": "leader.place", "to": "wagon@1.pul", "strength": "1 1/s"}]},
            "did you mean 'pull'",
        ),
        ({**LED, "rows": 3}, "unknown key 'rows'"),
    ],
)
def test_what_is_refused(edge: Any, sentence: str) -> None:
    with pytest.raises(InputError) as caught:
        read(string(edge, truck=LEADER))
    assert sentence in str(caught.value)


def test_edges_belong_to_patterns() -> None:
    problem = string(LED, truck=LEADER)
    del problem["network"]["pattern"]
    with pytest.raises(InputError, match="there is none; add 'pattern'"):
        read(problem)
    other = {**LEADER, "offers": {"place": "v"}}
    with pytest.raises(InputError, match="counted in m/s, but the pattern's links carry"):
        read(string(LED, truck=other))


def test_looking_at_an_edge() -> None:
    graph = led().to_networkx(4)
    assert set(graph.nodes) == {"leader", "wagon 1", "wagon 2", "wagon 3"}
    with pytest.raises(InputError, match="design of edge patterns is not offered"):
        led().refuse_beyond("design", "pattern")

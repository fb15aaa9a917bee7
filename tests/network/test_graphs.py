"""Members as graphs: the same network out and in, by CSV, GraphML, node-link JSON and networkx (all data invented)."""

from __future__ import annotations

import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import networkx as nx
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.network import Network, read
from synth.network.graphs import write_csv, write_graphml, write_node_link

TANK: dict[str, Any] = {
    "parameters": {"area": "2 m^2", "leak": "0.1 1/s"},
    "states": {"level": "cm"},
    "inputs": {"pump": "m^3/s"},
    "takes": {"inflow": "m^3/s", "nudge": "L/min"},
    "offers": {"height": "level", "spare": "level"},
    "sensors": ["level"],
    "equations": {"level'": "(pump + inflow + nudge)/area - leak*level"},
}
BASIN: dict[str, Any] = {**TANK, "states": {"level": "m"}, "parameters": {"area": "50 m^2", "leak": "0.01 1/s"}}
KINDS = {"tank": TANK, "basin": BASIN}


def problem(members: object) -> dict[str, Any]:
    return {"synth": 1, "kinds": KINDS, "network": {"members": members}}


def graph() -> nx.MultiDiGraph:
    """Every sort of link: R1, R2, R3, an interval, absolute, late, with units that differ between the ends."""
    g = nx.MultiDiGraph(title="x")
    g.add_node("a", kind="tank")
    g.add_node("b & <c>", kind="tank", area="3 m^2")
    g.add_node("c", kind="basin", area="1/3 m^2", leak="0.02 1/s")
    common = {"name": "pipe", "offer": "height", "take": "inflow", "strength": "0.01 m^2/s"}
    g.add_edge("a", "b & <c>", **common)
    g.add_edge("b & <c>", "a", **common, relative=True, weakens=True, delay="2 s", late="neighbour")
    g.add_edge("a", "c", **{**common, "strength": "1/3 m^2/s"}, relative=True)
    g.add_edge("c", "a", **{**common, "name": "late"}, relative=True, late="difference", delay="0.1 s")
    g.add_edge("c", "a", **{**common, "strength": "0.01..0.03 m^2/s"}, relative="true", late="neighbour", delay="1 s")
    g.add_edge(
        "c", "b & <c>", **{**common, "strength": "-0.02..0.02 m^2/s"}, relative=True, late="neighbour", delay="1 s"
    )
    g.add_edge("c", "b & <c>", **{**common, "take": "nudge", "strength": "to.area*(0.1 1/s)"})
    return g


def network() -> Network:
    return read(problem({"graph": graph()}))


def test_a_networkx_graph_is_read() -> None:
    found = network()
    assert found.units == 3 and [k.name for k in found.kinds] == ["tank", "tank area=3", "basin area=1/3, leak=1/50"]
    assert len(found.links) == 7 + 3
    assert found.hash == read(problem(graph())).hash, "the graph may stand where members are"


def test_networkx_out_and_in() -> None:
    found = network()
    again = read(problem({"graph": found.to_networkx()}))
    assert again.hash == found.hash and again.same_model(found)
    assert again.links == found.links and again.members is not None and found.members is not None
    assert again.members.names == found.members.names and again.members.to.tolist() == found.members.to.tolist()
    assert found.to_networkx().graph["title"] == found.title


def test_files_out_and_in(tmp_path: Path) -> None:
    found = network()
    write_graphml(found, tmp_path / "g.graphml")
    write_node_link(found, tmp_path / "g.json")
    write_csv(found, tmp_path / "u.csv", tmp_path / "l.csv")
    for members in ({"graph": "g.graphml"}, {"graph": "g.json"}, {"units": "u.csv", "links": "l.csv"}):
        file = tmp_path / "problem.yaml"
        file.write_text(json.dumps(problem(members), indent=1), encoding="utf-8")
        again = read(file)
        assert again.hash == found.hash, members
        assert again.links == found.links and again.kinds == found.kinds


def test_what_networkx_itself_writes_is_read(tmp_path: Path) -> None:
    """Its own GraphML (with typed keys) and its own node-link data."""
    found = network()
    nx.write_graphml(graph(), tmp_path / "g.graphml")
    (tmp_path / "g.json").write_text(json.dumps(nx.node_link_data(graph(), edges="edges")), encoding="utf-8")
    (tmp_path / "h.json").write_text(json.dumps(nx.node_link_data(graph(), edges="links")), encoding="utf-8")
    for name in ("g.graphml", "g.json", "h.json"):
        (tmp_path / "p.yaml").write_text(json.dumps(problem({"graph": name}), indent=1), encoding="utf-8")
        assert read(tmp_path / "p.yaml").hash == found.hash, name
    ours = write_graphml(found, tmp_path / "ours.graphml")
    theirs = nx.read_graphml(ours, force_multigraph=True)
    assert read(problem({"graph": theirs})).hash == found.hash


strengths = st.fractions(-3, 3, max_denominator=50)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.lists(
        st.tuples(st.integers(0, 3), st.integers(0, 3), strengths, strengths, st.sampled_from("akwid")), max_size=8
    )
)
def test_any_links_out_and_in(links: list[tuple[int, int, Fraction, Fraction, str]]) -> None:
    """Law: reading what was written gives the same network, for every sort of link."""
    g = nx.MultiDiGraph()
    for i in range(4):
        g.add_node(i, kind="tank" if i < 2 else "basin", **({"area": f"{i} m^2"} if i % 2 else {}))
    for a, b, low, high, sort in links:
        data = {"name": "l", "offer": "height", "take": "inflow", "strength": f"{low} m^2/s"}
        if sort != "a" and a != b:
            data |= {"relative": "true", "late": "difference" if sort == "d" else "neighbour", "delay": "0.3 s"}
            data |= {"weakens": "true"} if sort == "w" else {}
            if sort in "id" and low < high:
                data["strength"] = f"{low} m^2/s..{high} m^2/s"
        g.add_edge(a, b, **data)
    found = read(problem({"graph": g}))
    assert read(problem({"graph": found.to_networkx()})).hash == found.hash
    twice = found.scaled(Fraction(2))
    assert read(problem({"graph": twice.to_networkx()})).hash == twice.hash


def test_undirected_edges_are_two_links() -> None:
    one = nx.Graph()
    one.add_nodes_from(["a", "b"], kind="tank")
    one.add_edge("a", "b", name="pipe", offer="height", take="inflow", strength="0.01 m^2/s", relative=True)
    found = read(problem({"graph": one}))
    assert found.hash == read(problem({"graph": nx.MultiDiGraph(one)})).hash
    assert found.members is not None and sorted(found.members.to.tolist()) == [0, 1]


def test_numbers_of_graphs_are_the_decimals_they_print() -> None:
    kinds = {"t": {**TANK, "takes": {"inflow": "cm/s"}, "parameters": {"area": 1, "leak": "0.1 1/s"},
                   "equations": {"level'": "inflow - leak*level + 0*leak*pump*level"}, "inputs": {}, "sensors": [],
                   "offers": {"rate": {"is": "leak*level"}}}}  # fmt: skip
    kinds["t"]["equations"] = {"level'": "inflow - leak*level"}
    g = nx.DiGraph()
    g.add_nodes_from([1, 2], kind="t")
    g.add_edge(1, 2, name="l", strength=0.1)
    found = read({"synth": 1, "kinds": kinds, "network": {"members": {"graph": g}}})
    assert found.links[0].strength == Fraction(1, 10) * 100
    assert found.members is not None and found.members.names == ("1", "2")


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (lambda g: g.add_node("d", kind="tnk"), "node 'd', kind: unknown kind 'tnk'"),
        (lambda g: g.add_node("d"), "node 'd', kind: unknown kind ''"),
        (lambda g: g.add_node("d", kind="tank", colour="red"), "node 'd', colour: tank has no parameter 'colour'"),
        (lambda g: g.add_edge("a", "c", weight=3), "edge 'a' -> 'c', weight: unknown attribute"),
        (
            lambda g: g.add_edge("a", "c", name="l", offer="height", take="inflow"),
            "edge 'a' -> 'c', name: the key 'strength'",
        ),
        (
            lambda g: g.add_edge("a", "c", name="l", offer="hight", take="inflow", strength="1 m^2/s"),
            "did you mean 'height'",
        ),
        (
            lambda g: g.add_edge("a", "c", name="l", offer="height", take="inflow", strength="1 m"),
            "edge 'a' -> 'c', strength: '1 m'",
        ),
    ],
)
def test_messages_name_the_node_or_edge(change: Any, said: str, tmp_path: Path) -> None:
    g = graph()
    change(g)
    with pytest.raises(InputError) as caught:
        read(problem({"graph": g}))
    assert said in str(caught.value)
    nx.write_graphml(g, tmp_path / "g.graphml")
    (tmp_path / "p.yaml").write_text(json.dumps(problem({"graph": "g.graphml"})), encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read(tmp_path / "p.yaml")
    assert said in str(caught.value)
    assert all(p.place is not None and p.place.file.endswith("g.graphml") for p in caught.value.problems)


@pytest.mark.parametrize(
    ("name", "text", "said"),
    [
        ("g.graphml", "<graphml><graph>", "g.graphml:1:17: this is not valid XML: no element found"),
        ("g.graphml", "<!DOCTYPE a []><graphml/>", "a DOCTYPE is not accepted"),
        ("g.graphml", "<graphml/>", "there is no <graph>"),
        ("g.graphml", "<graphml><graph><node/></graph></graphml>", "g.graphml:1:17: <node> needs the attribute 'id'"),
        ("g.graphml", "<graphml><graph><node id='a'><graph/></node></graph></graphml>", "a second or nested graph"),
        ("g.graphml", "<graphml><graph><hyperedge/></graph></graphml>", "<hyperedge> is not accepted"),
        (
            "g.graphml",
            "<graphml><graph><node id='a'><data key='x'>1</data></node></graph></graphml>",
            "is not declared",
        ),
        ("g.json", "{", "g.json:1:2: this is not valid JSON"),
        ("g.json", "[]", "one object with the lists 'nodes' and 'edges'"),
        ("g.json", '{"nodes": [{}], "edges": []}', "nodes[0]: the key 'id' is missing"),
        ("g.json", '{"nodes": [], "edges": [3]}', "edges[0]: the key 'source' is missing"),
        ("g.json", '{"nodes": [{"id": 1, "kind": [2]}], "edges": []}', "a list or an object is not accepted"),
        ("g.json", "[" * 100_000, "nested too deeply"),
        ("g.json", '{"nodes": [], "edges": []}', "there is no unit"),
        ("g.txt", "", "ends neither in .graphml nor in .json"),
        ("g.json", "", "g.json:1:1: this is not valid JSON"),
    ],
)
def test_files_that_cannot_be_used(name: str, text: str, said: str, tmp_path: Path) -> None:
    (tmp_path / name).write_text(text, encoding="utf-8")
    (tmp_path / "p.yaml").write_text(json.dumps(problem({"graph": name})), encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read(tmp_path / "p.yaml")
    assert said in str(caught.value), str(caught.value)


def test_members_are_said_one_way(tmp_path: Path) -> None:
    (tmp_path / "p.yaml").write_text(json.dumps(problem({"graph": "g.json", "units": "u.csv"})), encoding="utf-8")
    with pytest.raises(InputError, match="a graph holds units and links already"):
        read(tmp_path / "p.yaml")
    with pytest.raises(InputError, match="the key 'links' is missing"):
        read(problem({"units": "u.csv"}))


def test_what_no_file_can_say(tmp_path: Path) -> None:
    apart = network().scaled(Fraction(2), own_parts=False)
    with pytest.raises(InputError, match="scaled apart"):
        apart.to_networkx()
    kinds = {"tank": TANK}
    line = {"name": "l", "from": "tank.height", "at": -1, "to": "tank.inflow", "strength": "1 m^2/s"}
    pattern = read({"synth": 1, "kinds": kinds, "network": {"pattern": {"links": [line]}}})
    with pytest.raises(InputError, match="writing a table of units and links of patterns is not offered"):
        write_graphml(pattern, tmp_path / "x.graphml")

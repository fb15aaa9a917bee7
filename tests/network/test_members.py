"""Members: explicit units and links from tables, and the obstruction test on them (all data invented)."""

from __future__ import annotations

import json
import random
import resource
import time
from fractions import Fraction
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.network import Network, obstruction, read
from synth.network.blind import blind_states
from synth.network.members import LINK_COLUMNS
from synth.network.obstructions import examine

AREA: dict[str, Any] = {
    "parameters": {"inertia": "10 s", "damping": "1"},
    "states": {"angle": "rad", "rate": "rad/s"},
    "inputs": {"power": "1"},
    "takes": {"tie": "1"},
    "offers": {"phase": "angle"},
    "sensors": ["angle", "rate"],
    "equations": {"angle'": "rate", "rate'": "base*(power + tie)/inertia - damping*rate/inertia"},
}
AREA["parameters"]["base"] = "1 1/s"
UNITS = """id,kind,inertia
north,area,8 s
south,area,
east,area,8.0 s
west,area,10 s
"""
LINKS = """name,from,to,offer,take,strength,relative
line,north.phase,south.tie,,,0.5,true
line,south,north,phase,tie,0.5,true
line,south,east,,,1/2,true
line,east,west,,,from.inertia/to.inertia*0.3,true
"""


def problem(folder: Path, units: str = UNITS, links: str = LINKS, area: Any = None, **network: Any) -> Path:
    (folder / "units.csv").write_text(units, encoding="utf-8")
    (folder / "links.csv").write_text(links, encoding="utf-8")
    data = {
        "synth": 1,
        "kinds": {"area": area or AREA},
        "network": {"members": {"units": "units.csv", "links": "links.csv"}, **network},
    }
    (folder / "problem.yaml").write_text(json.dumps(data, indent=1), encoding="utf-8")
    return folder / "problem.yaml"


def test_units_with_equal_parameters_share_a_kind(tmp_path: Path) -> None:
    """8 s and 8.0 s are the same; the declared value written out is the declared kind."""
    network = read(problem(tmp_path))
    assert (network.description, network.units, network.dimension) == ("members", 4, 0)
    assert [kind.name for kind in network.kinds] == ["area", "area inertia=8"]
    assert network.members is not None
    assert network.members.kind.tolist() == [1, 0, 1, 0]
    assert network.kinds[1].A[1, 1] == Fraction(-1, 8)


def test_equal_links_are_kept_once(tmp_path: Path) -> None:
    network = read(problem(tmp_path))
    assert network.members is not None
    strengths = {(link.source_kind, link.kind): link.strength for link in network.links}
    assert (
        strengths
        == {
            ("area", "area inertia=8"): Fraction(1, 2),
            ("area inertia=8", "area"): Fraction(3, 10) * 8 / 10,
        }
        or len(network.links) == 3
    )
    assert {link.strength for link in network.links} == {Fraction(1, 2), Fraction(24, 100)}
    to, source, sort = network.members.expanded()
    ends = [(network.members.names[j], network.members.names[i]) for i, j in zip(to, source, strict=True)]
    assert ends == [("north", "south"), ("south", "north"), ("south", "east"), ("east", "west")]
    assert all(network.links[k].relative for k in sort)
    assert network.classes() == ("line",)


def test_arrays_are_frozen(tmp_path: Path) -> None:
    members = read(problem(tmp_path)).members
    assert members is not None
    for array in (members.kind, members.to, members.source, members.form):
        assert array.dtype == np.int32
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1


def test_the_order_of_the_rows_means_nothing(tmp_path: Path) -> None:
    network = read(problem(tmp_path))
    shuffled = [UNITS.splitlines(), LINKS.splitlines()]
    for lines in shuffled:
        lines[1:] = lines[:0:-1]
    other = read(problem(tmp_path, *("\n".join(lines) for lines in shuffled)))
    assert other.members != network.members
    assert other.hash == network.hash and other.same_model(network)
    assert [kind.name for kind in other.kinds] == [kind.name for kind in network.kinds]
    changed = read(problem(tmp_path, UNITS, LINKS.replace("0.5,true", "0.4,true", 1)))
    assert changed.hash != network.hash
    again = read(problem(tmp_path))
    assert again.members == network.members


def test_parts_of_late_differences(tmp_path: Path) -> None:
    links = (
        "name,from,to,strength,relative,late,delay\n"
        "line,north,south,0.5,true,difference,0.1 s\n"
        "line,south,east,0.4..0.6,true,neighbour,0.1 s\n"
    )
    network = read(problem(tmp_path, links=links))
    assert network.members is not None
    assert [len(part) for part in network.members.parts] == [2, 2]
    to, source, sort = network.members.expanded()
    assert to.tolist() == [1, 2, 1, 2] and source.tolist() == [0, 1, 1, 2]
    assert [network.links[k].own_part for k in sort] == [False, False, True, True]


def test_the_design_section_holds_for_all_units_of_a_kind(tmp_path: Path) -> None:
    path = problem(tmp_path)
    text = json.loads(path.read_text(encoding="utf-8")) | {"design": {"uses": {"area": {"power": ["rate"]}}}}
    path.write_text(json.dumps(text), encoding="utf-8")
    assert read(path).goal.uses["area inertia=8"] == {"power": ("rate",)}


@pytest.mark.parametrize(
    ("units", "links", "said"),
    [
        (UNITS.replace("south,area", "north,area"), LINKS, "units.csv:3:1: id: the unit 'north' stands twice"),
        (
            UNITS.replace("south,area", "south,aera"),
            LINKS,
            "units.csv:3:7: kind: unknown kind 'aera' (did you mean 'area'?)",
        ),
        (UNITS.replace("8.0 s", "8.0 m"), LINKS, "units.csv:4:11: inertia: '8.0 m' has not the unit"),
        (
            UNITS.replace("8.0 s", "0 s"),
            LINKS,
            "units.csv:4:11: inertia: with inertia = 0 s the kind area is not accepted",
        ),
        (UNITS.replace("id,kind,inertia", "id,kind,mass"), LINKS, "units.csv:2:12: mass: area has no parameter 'mass'"),
        (UNITS.replace("id,", "name,"), LINKS, "units.csv:1:1: the column 'id' is missing"),
        (UNITS.replace("south,area,", "south,area"), LINKS, "units.csv:3:1: this row has 2 cells and the first line 3"),
        (UNITS.replace("south", '"so"uth'), LINKS, "units.csv:3:1: a quotation mark is out of place"),
        ("", LINKS, "units.csv:1:1: the table is empty"),
        ("id,kind\n", "name,from,to,strength\n", "there is no unit"),
        (
            UNITS,
            LINKS.replace("line,south,east", "line,sooth,east"),
            "links.csv:4:6: from: there is no unit 'sooth' (did you mean 'south'?)",
        ),
        (
            UNITS,
            LINKS.replace("east,west", "east,west.tei"),
            "links.csv:5:11: to: area takes no signal 'tei' (did you mean 'tie'?)",
        ),
        (UNITS, LINKS.replace("to.inertia", "to.inrtia"), "links.csv:5:18: strength: unknown parameter 'to.inrtia'"),
        (UNITS, LINKS.replace("1/2,true", "1/2 m,true"), "links.csv:4:19: strength: '1/2 m' has the unit m"),
        (UNITS, LINKS.replace("1/2,true", ",true"), "links.csv:4:1: name: the key 'strength' is missing"),
        (UNITS, LINKS.replace("1/2,true", "1/2,yes"), "links.csv:4:23: relative: true or false is expected"),
        (
            UNITS,
            LINKS.replace("relative", "relativ"),
            "links.csv:1:34: unknown column 'relativ' (did you mean 'relative'?)",
        ),
        (UNITS, LINKS.replace("line,south,east", "li-ne,south,east"), "links.csv:4:1: name: 'li-ne' cannot be a name"),
        (UNITS, LINKS.replace("south,north,", "south,south,"), "always zero"),
    ],
)
def test_messages_have_their_place(units: str, links: str, said: str, tmp_path: Path) -> None:
    with pytest.raises(InputError) as caught:
        read(problem(tmp_path, units, links))
    assert said in str(caught.value).replace(f"{tmp_path}/", ""), str(caught.value)


def test_the_same_mistake_in_many_rows_is_said_once(tmp_path: Path) -> None:
    links = LINKS + "line,north,south,phase,tie,3 m,true\n" * 300
    with pytest.raises(InputError) as caught:
        read(problem(tmp_path, links=links))
    assert len(caught.value.problems) == 1


def test_quoted_cells_remarks_and_dots_in_ids(tmp_path: Path) -> None:
    units = '# invented\r\nid,kind\r\n"a,1",area\r\nb.phase,area\r\nb,area\r\n'
    links = 'name,from,to,strength\r\nl,"a,1",b.phase,0.1\r\nl,b.phase.phase,b,"0.2"\r\n'
    members = read(problem(tmp_path, units, links)).members
    assert members is not None and members.names == ("a,1", "b.phase", "b")
    assert members.source.tolist() == [0, 1] and members.to.tolist() == [1, 2]


def test_files_that_are_not_there(tmp_path: Path) -> None:
    path = problem(tmp_path)
    (tmp_path / "links.csv").unlink()
    with pytest.raises(InputError, match=r"problem\.yaml:\d+:\d+: .*links\.csv does not exist"):
        read(path)
    (tmp_path / "links.csv").write_bytes(b"name,from\n\xff")
    with pytest.raises(InputError, match=r"links\.csv:2:1: .*not UTF-8"):
        read(path)


def test_signs_of_classes(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"links\.csv:2:\d+: strength: the strength is positive, but the class 'line'"):
        read(problem(tmp_path, classes={"line": {"sign": "negative"}}))


def ringed(count: int, sensors: Any, links: bool = True, anchored: bool = False) -> dict[str, Any]:
    """Areas on a ring whose controllers hear the differences of angle; optionally one that sees its own angle."""
    area = {**AREA, "takes": {"tie": "1", "seen": "rad"}, "sensors": sensors}
    free = {**area, "sensors": ["angle", "rate"]}
    return {"count": count, "kinds": {"area": area, "sighted": free}, "links": links, "anchored": anchored}


def ring_network(folder: Path, count: int, sensors: Any, anchored: bool = False, broken: int | None = None) -> Network:
    names = [f"a{i}" for i in range(count)]
    kinds = ringed(count, sensors)["kinds"]
    rows = ["id,kind", *(f"{n},{'sighted' if anchored and not i else 'area'}" for i, n in enumerate(names))]
    table = ["name,from,to,take,strength,relative"]
    for i in range(count if broken is None else broken):
        a, b = names[i], names[(i + 1) % count]
        for x, y in ((a, b), (b, a)):
            table += [f"line,{x},{y},tie,0.5,true", f"view,{x},{y},seen,1,true"]
    (folder / "u.csv").write_text("\n".join(rows), encoding="utf-8")
    (folder / "l.csv").write_text("\n".join(table), encoding="utf-8")
    data = {"synth": 1, "kinds": kinds, "network": {"members": {"units": "u.csv", "links": "l.csv"}}}
    (folder / "ring.yaml").write_text(json.dumps(data, indent=1), encoding="utf-8")
    return read(folder / "ring.yaml")


@pytest.mark.parametrize("count", [3, 8, 40, 300])
def test_areas_that_see_only_differences_of_angle_are_refused(count: int, tmp_path: Path) -> None:
    """Every way of testing (exact, dense, by groups) finds the common drift, and nothing where one sees its angle."""
    found = obstruction(ring_network(tmp_path, count, ["seen", "rate"]))
    assert found is not None and found.cause == "not seen" and found.s == pytest.approx(0, abs=1e-9)
    assert all(name.endswith(".angle") for name in found.direction)
    assert {round(abs(v), 9) for v in found.direction.values()} == {1}
    assert "bounded gaps" in found.advice
    assert obstruction(ring_network(tmp_path, count, ["seen", "rate"], anchored=True)) is None
    assert obstruction(ring_network(tmp_path, count, ["angle"])) is None


def test_large_networks_say_what_was_tested(tmp_path: Path) -> None:
    assert "as a whole, exactly" in examine(ring_network(tmp_path, 3, ["angle"])).tested
    assert "numerically" in examine(ring_network(tmp_path, 40, ["angle"])).tested
    full = examine(ring_network(tmp_path, 300, ["angle"]))
    assert full.obstruction is None and "every unit shows all its states" in full.tested
    some = examine(ring_network(tmp_path, 300, ["seen", "rate"], anchored=True))
    assert some.obstruction is None and "every direction at s = 0" in some.tested


def test_a_direction_that_is_no_common_drift(tmp_path: Path) -> None:
    """A unit in a large network that hears twice its neighbour: the unseen direction is a_0 = 2 a_1, others zero."""
    kinds = ringed(3, {"seen": "seen - angle", "rate": "rate"})["kinds"]
    names = [f"a{i}" for i in range(300)]
    rows = ["id,kind", *(f"{n},{'area' if i < 2 else 'sighted'}" for i, n in enumerate(names))]
    table = ["name,from,to,take,strength", "view,a1,a0,seen,2", "view,a0,a1,seen,0.5"]
    (tmp_path / "u.csv").write_text("\n".join(rows), encoding="utf-8")
    (tmp_path / "l.csv").write_text("\n".join(table), encoding="utf-8")
    data = {"synth": 1, "kinds": kinds, "network": {"members": {"units": "u.csv", "links": "l.csv"}}}
    (tmp_path / "p.yaml").write_text(json.dumps(data, indent=1), encoding="utf-8")
    found = obstruction(read(tmp_path / "p.yaml"))
    assert found is not None and found.direction == pytest.approx({"a0.angle": 1, "a1.angle": 0.5})


def test_what_is_not_reached(tmp_path: Path) -> None:
    idle = {**AREA, "inputs": {}, "equations": {"angle'": "rate", "rate'": "tie*base/inertia - damping*rate/inertia"}}
    idle["sensors"] = []
    found = obstruction(read(problem(tmp_path, area=idle)))
    assert found is not None
    many = "id,kind\n" + "".join(f"u{i},area\n" for i in range(100))
    links = "name,from,to,strength,relative\n" + "".join(f"l,u{i},u{i + 1},0.5,true\n" for i in range(99))
    idle = {**AREA, "equations": {"angle'": "rate", "rate'": "base*tie/inertia - damping*rate/inertia"}}
    idle["equations"] = {**idle["equations"], "angle'": "rate + 0*base*power"}
    found = obstruction(read(problem(tmp_path, many, links, idle)))
    assert found is not None and found.cause == "not reached"


def big(folder: Path, units: int, links: int, strengths: int, kinds: int) -> tuple[Network, float]:
    """A random network with so many distinct strengths and sets of parameters; and how long reading took."""
    chance = random.Random(7)
    with (folder / "units.csv").open("w", encoding="utf-8") as stream:
        stream.write("id,kind,inertia\n")
        stream.writelines(f"u{i},area,{8 + i % kinds / 100} s\n" for i in range(units))
    with (folder / "links.csv").open("w", encoding="utf-8") as stream:
        stream.write("name,from,to,strength,relative\n")
        for k in range(links):
            a, b = chance.randrange(units), chance.randrange(units - 1)
            b += b >= a
            stream.write(f"line,u{a},u{b},{1 + k % strengths / 1000},true\n")
    data = {
        "synth": 1,
        "kinds": {"area": AREA},
        "network": {"members": {"units": "units.csv", "links": "links.csv"}},
    }
    (folder / "problem.yaml").write_text(json.dumps(data, indent=1), encoding="utf-8")
    start = time.process_time()
    network = read(folder / "problem.yaml")
    return network, time.process_time() - start


def test_five_thousand_members(tmp_path: Path) -> None:
    network, seconds = big(tmp_path, 5_000, 10_000, 50, 3)
    assert network.units == 5_000 and len(network.kinds) == 3
    assert seconds < 5
    assert obstruction(network) is None
    assert len(network.hash) == 64


@pytest.mark.long
def test_a_hundred_thousand_members(tmp_path: Path) -> None:
    """Read in under 20 s and 4 GB, also with many strengths; then hash and obstruction."""
    network, seconds = big(tmp_path, 100_000, 200_000, 1_000, 20)
    assert network.units == 100_000 and network.members is not None and len(network.members.to) == 200_000
    assert seconds < 20
    assert obstruction(network) is None and len(network.hash) == 64
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss < 4_000_000  # kB


def test_the_columns_are_the_documented_ones() -> None:
    assert LINK_COLUMNS == ("name", "from", "to", "offer", "take", "strength", "relative", "weakens", "late", "delay")


def test_what_stays_unseen_whatever_the_neighbours_do() -> None:
    """V* of small units, worked out by hand."""
    zero, one = Fraction(0), Fraction(1)
    chain = [[zero, one], [zero, zero]]  # x1' = x2, x2' = v
    push = [[zero], [one]]
    assert blind_states(chain, push, [[one, zero]], [[zero]]) == []  # x1 seen: then x2, and v must vanish too
    assert blind_states(chain, push, [[zero, one]], [[zero]]) == [[one, zero]]  # x2 seen: x1 may be anything
    assert blind_states(chain, push, [[one, zero]], [[-one]]) != []  # a gap v - x1 can be kept at zero by v = x1
    assert len(blind_states(chain, push, [], [])) == 2
    assert blind_states(chain, [[one], [zero]], [[one, zero]], [[zero]]) == [[zero, one]]  # v cancels x2 in x1'


@settings(max_examples=40, deadline=None)
@given(st.lists(st.fractions(-9, 9, max_denominator=99), min_size=2, max_size=6), st.sampled_from(["", " %", " 1"]))
def test_templates_give_what_the_careful_reader_gives(values: list[Fraction], unit: str) -> None:
    """Law: the first row of a class is read with care and the others by template; each alone gives the same."""

    def strengths(texts: list[str]) -> list[Fraction]:
        graph = nx.MultiDiGraph()
        graph.add_nodes_from(["a", "b"], kind="area")
        for text in texts:
            graph.add_edge("a", "b", name="l", strength=text, relative="true", weakens="true")
        found = read({"synth": 1, "kinds": {"area": AREA}, "network": {"members": {"graph": graph}}})
        _, _, sort = found.members.expanded()  # type: ignore[union-attr]
        return [found.links[k].own_strength for k in sort]

    texts = [f"{value}{unit}" for value in values]
    assert strengths(texts) == [strengths([text])[0] for text in texts]
    assert strengths(texts) == [value / 100 if unit == " %" else value for value in values]

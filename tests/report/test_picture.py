"""The picture of a network: well-formed, the same bytes every time, everything named, nothing outside the page."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import pytest

from synth.network import Network, read
from synth.report.pen import stroke_of
from synth.report.picture import WIDTH, network_picture
from tests.network.files import CONVOY, GAP_ONLY

TANK = """  {name}:
    states: {{level: m}}
    inputs: {{valve: m/s}}
    takes: {{inflow: m/s}}
    offers: {{depth: level}}
    sensors: [level]
    equations: {{level': valve + inflow}}
"""


def network_of(layout: str, folder: Path, kinds: tuple[str, ...] = ("tank",)) -> Network:
    file = folder / "p.yaml"
    text = "synth: 1\ntitle: A <b> & c\nkinds:\n" + "".join(TANK.format(name=name) for name in kinds)
    file.write_text(f"{text}network:\n{layout}", encoding="utf-8")
    return read(file)


def pattern(dimension: int, *links: tuple[str, str, str, str]) -> str:
    lines = [
        f"      - {{name: {name}, from: {source}.depth, at: {at}, to: {to}.inflow, strength: 0.1 1/s}}\n"
        for name, source, at, to in links
    ]
    return f"  pattern:\n    dimension: {dimension}\n    links:\n" + "".join(lines)


def members(count: int, folder: Path) -> str:
    units = "id,kind\n" + "".join(f"u{i},{'pump' if i % 3 == 0 else 'tank'}\n" for i in range(count))
    links = "".join(f"{'seep' if i % 2 else 'feed'},u{i // 2},u{i},depth,inflow,0.1 1/s\n" for i in range(1, count))
    (folder / "u.csv").write_text(units, encoding="utf-8")
    (folder / "l.csv").write_text("name,from,to,offer,take,strength\n" + links, encoding="utf-8")
    return "  members: {units: u.csv, links: l.csv}\n"


def cases(folder: Path) -> dict[str, Network]:
    two = ("tank", "pump")
    line = pattern(1, ("seep", "tank", "-1", "tank"), ("far", "tank", "-9", "tank"), ("feed", "pump", "0", "tank"))
    edge = "  edge: {side: first, units: {lake: {at: 0, kind: pump}}}\n"
    rules = "  rules:\n    seep: {to: tank.inflow, from: [tank.depth, pump.depth], most: 3, strength: 0.1 1/s}\n"
    return {
        "convoy": read(CONVOY),
        "gap": read(GAP_ONLY),
        "line": network_of(line, folder, two),
        "field": network_of(pattern(2, ("seep", "tank", "[1, 0]", "tank")), folder, two),
        "space": network_of(pattern(3, ("seep", "tank", "[0, 0, -1]", "tank")), folder),
        "edge": network_of(pattern(1, ("seep", "tank", "-1", "tank")) + edge, folder, two),
        "rules": network_of(rules, folder, two),
        "few": network_of(members(9, folder), folder, two),
        "some": network_of(members(120, folder), folder, two),
        "many": network_of(members(700, folder), folder, two),
        "none": replace(read(CONVOY), links=()),
    }


@pytest.fixture(scope="module")
def pictures(tmp_path_factory: pytest.TempPathFactory) -> dict[str, tuple[Network, str]]:
    found = cases(tmp_path_factory.mktemp("nets"))
    return {name: (network, network_picture(network)) for name, network in found.items()}


def test_every_picture_is_well_formed_and_says_what_it_shows(pictures: dict[str, tuple[Network, str]]) -> None:
    for name, (network, svg) in pictures.items():
        root = ElementTree.fromstring(svg)
        words = [text.text or "" for text in root.iter("{http://www.w3.org/2000/svg}text")]
        assert network.title in words, name
        for class_name in network.classes():
            assert any(class_name in word for word in words), (name, class_name)
        assert root.get("width") == f"{WIDTH:g}"


def test_the_same_network_gives_the_same_bytes(pictures: dict[str, tuple[Network, str]]) -> None:
    for name, (network, svg) in pictures.items():
        assert network_picture(network) == svg, name


def test_names_are_escaped(pictures: dict[str, tuple[Network, str]]) -> None:
    svg = pictures["line"][1]
    assert "A &lt;b&gt; &amp; c" in svg and "<b>" not in svg


def test_nothing_lies_far_outside_the_page(pictures: dict[str, tuple[Network, str]]) -> None:
    for name, (_, svg) in pictures.items():
        root = ElementTree.fromstring(svg)
        height = float(root.get("height") or 0)
        for mark in root.iter():
            for key, most in (("x", WIDTH), ("cx", WIDTH), ("y", height), ("cy", height)):
                value = mark.get(key)
                assert value is None or -1 <= float(value) <= most + 1, (name, mark.tag, key, value)


def test_kinds_differ_by_shape_and_classes_by_dash(pictures: dict[str, tuple[Network, str]]) -> None:
    svg = pictures["few"][1]
    circles, squares = svg.count("<circle"), len(re.findall(r"<polygon [^>]*stroke=\"#1a1a1a\"", svg))
    assert circles == 6 + 1 and squares == 3 + 1  # six tanks, three pumps, and one of each to explain them
    strokes = [stroke_of(k) for k in range(36)]
    assert len({(s.colour, s.dash) for s in strokes}) == 36
    assert len({s.dash for s in strokes[:6]}) == 6


def test_small_graphs_name_every_unit_and_large_ones_are_summed_up(pictures: dict[str, tuple[Network, str]]) -> None:
    assert all(f">u{i}<" in pictures["few"][1] for i in range(9))
    assert ">u5<" not in pictures["some"][1] and pictures["some"][1].count("<circle") == 80 + 1
    many = pictures["many"][1]
    assert many.count("<circle") == 2 and "466 units" in many and "links" in many
    assert "any number of units" in pictures["rules"][1] and "at most 3 links into a unit" in pictures["rules"][1]


def test_an_edge_is_drawn_with_its_own_units(pictures: dict[str, tuple[Network, str]]) -> None:
    assert "The first end of the line" in pictures["edge"][1] and ">lake<" in pictures["edge"][1]

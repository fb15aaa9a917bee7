"""Labels of network pictures stand clear of links and marks, long lines are broken and not cut."""

from __future__ import annotations

import re
from pathlib import Path
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.network import Network, read
from synth.report.pen import wrapped
from synth.report.picture import network_picture
from synth.report.placing import Room, Spot, around
from synth.report.svg import text_width

SVG = "{http://www.w3.org/2000/svg}"
ROOM = """  {name}:
    states: {{temp: degC}}
    inputs: {{heat: kW}}
    takes: {{flow: kW}}
    offers: {{warmth: temp}}
    sensors: [temp]
    parameters: {{c: 2000 kJ/K}}
    equations: {{temp': (heat + flow)/c}}
"""
EDGE = "  edge: {side: first, units: {porch: {at: 0, kind: hall}}}\n"
EDGE_1 = "  edge: {side: first, axis: 1, units: {porch: {at: 0, kind: hall}}}\n"
RULES = """  rules:
    seep: {to: room.flow, from: [room.warmth, hall.warmth], most: 3, strength: 0.1 kW/degC, relative: true,
           delay: 12.5 s, late: neighbour, weakens: true}
"""


def network_of(layout: str, folder: Path, names: tuple[str, ...] = ("room", "hall")) -> Network:
    file = folder / "p.yaml"
    kinds = "".join(ROOM.format(name=name) for name in names)
    file.write_text(f"synth: 1\ntitle: Invented rooms\nkinds:\n{kinds}network:\n{layout}", encoding="utf-8")
    return read(file)


def pattern(dimension: int, *places: str) -> str:
    """One link per place, of the room to the room."""
    lines = [
        f"      - {{name: link_{k}, from: room.warmth, at: {at}, to: room.flow, strength: 0.1 kW/degC}}\n"
        for k, at in enumerate(places)
    ]
    return f"  pattern:\n    dimension: {dimension}\n    links:\n" + "".join(lines)


def quadratic_points(root: ElementTree.Element) -> list[tuple[float, float]]:
    """Points of every drawn link (an SVG quadratic curve), worked out here from the path texts."""
    found = []
    for path in root.iter(f"{SVG}path"):
        match = re.fullmatch(r"M(\S+) (\S+)Q(\S+) (\S+) (\S+) (\S+)", path.get("d") or "")
        if match and path.get("stroke") != "#b4b4b4":
            ax, ay, mx, my, bx, by = map(float, match.groups())
            for k in range(41):
                t = k / 40
                u, v, w = (1 - t) ** 2, 2 * t * (1 - t), t * t
                found.append((u * ax + v * mx + w * bx, u * ay + v * my + w * by))
    return found


def labels(root: ElementTree.Element, wanted: str) -> list[tuple[str, float, float, float, float]]:
    """Text and box of every label that matches, a little tighter than the picture itself assumes."""
    found = []
    for text in root.iter(f"{SVG}text"):
        if re.fullmatch(wanted, text.text or ""):
            size, x, y = (float(text.get(key) or 0) for key in ("font-size", "x", "y"))
            width = 0.85 * text_width(text.text or "", size)
            left = x - width * {"start": 0.0, "middle": 0.5, "end": 1.0}[text.get("text-anchor") or "start"]
            found.append((text.text or "", left, y - 0.7 * size, left + width, y))
    return found


@pytest.mark.parametrize(
    ("layout", "wanted", "count"),
    [
        (pattern(2, "[1, 0]", "[-1, 0]", "[0, 1]", "[0, -1]", "[-1, 1]"), r"\(-?\d, -?\d\)", 9),
        (pattern(3, "[1, 0, 0]", "[-1, 0, 0]", "[0, 1, 0]", "[0, -1, 0]", "[0, 0, 1]", "[0, 0, -1]"),
         r"\(-?\d, -?\d, -?\d\)", 7),
        (pattern(1, "-1", "1", "-2", "2") + EDGE, r"place \d|porch", 4),
        (pattern(2, "[1, 0]", "[0, 1]", "[-1, 1]", "[1, -1]") + EDGE_1, r"row \d|porch", 4),
    ],
)  # fmt: skip
def test_no_link_runs_through_the_label_of_a_place(layout: str, wanted: str, count: int, tmp_path: Path) -> None:
    root = ElementTree.fromstring(network_picture(network_of(layout, tmp_path)))
    points, found = quadratic_points(root), labels(root, wanted)
    assert len(found) == count and len(points) >= 41
    for text, left, top, right, bottom in found:
        assert not any(left < x < right and top < y < bottom for x, y in points), text


def test_place_labels_of_a_grid_stand_beside_their_marks(tmp_path: Path) -> None:
    network = network_of(pattern(2, "[1, 0]", "[0, 1]"), tmp_path, ("room",))
    root = ElementTree.fromstring(network_picture(network))
    marks = [
        (float(c.get("cx") or 0), float(c.get("cy") or 0)) for c in root.iter(f"{SVG}circle") if c.get("r") == "13"
    ]
    assert len(marks) == 9
    for text, left, top, right, bottom in labels(root, r"\(-?\d, -?\d\)"):
        x, y = (left + right) / 2, (top + bottom) / 2
        assert min(max(abs(a - x), abs(b - y)) for a, b in marks) < 40, text


def test_aslant_links_at_an_edge_come_from_marks_of_their_own(tmp_path: Path) -> None:
    def starts(*places: str) -> tuple[int, bool]:
        svg = network_picture(network_of(pattern(2, *places) + EDGE_1, tmp_path))
        return len(re.findall(r'<circle [^>]*r="7" fill="#f6f6f6"', svg)), "+1 along" in svg

    assert starts("[1, 0]") == (0, False)
    assert starts("[-1, 1]") == (2, True)  # rows 1 and 2; the row at the edge itself holds the hall, a square
    both = network_picture(network_of(pattern(2, "[-1, 1]", "[-1, -1]") + EDGE_1, tmp_path))
    assert "+1 along" in both and "-1 along" in both


def test_units_read_as_in_the_text_and_long_lines_are_broken(tmp_path: Path) -> None:
    svg = network_picture(network_of(RULES, tmp_path))
    assert "kW per degC" in svg and "(kW)/(degC)" not in svg
    shown = " ".join(text.text or "" for text in ElementTree.fromstring(svg).iter(f"{SVG}text"))
    assert "may weaken to zero at any time, up to 12.5 s late" in shown
    assert "..." not in shown
    assert "absolute" not in shown  # the own value is subtracted whichever source is wired


def test_the_picture_is_told_in_words(tmp_path: Path) -> None:
    root = ElementTree.fromstring(network_picture(network_of(pattern(1, "-1"), tmp_path)))
    words = root.findtext(f"{SVG}desc") or ""
    assert "Links link_0: room.warmth to room.flow, 1 place before (at -1); strength 0.1 kW per degC" in words
    assert root.get("role") == "img" and root.get("aria-labelledby") == "network-title network-text"


@given(st.lists(st.text("abcde", min_size=1, max_size=12), min_size=1, max_size=30))
def test_breaking_lines_loses_no_word(words: list[str]) -> None:
    lines = wrapped(" ".join(words), 120, 11)
    assert " ".join(lines).split() == words
    assert all(0.93 * text_width(line, 11) <= 120 for line in lines)


def test_room_prefers_the_first_free_spot() -> None:
    room = Room()
    spots = around(100, 100, 13, 13)
    assert room.best("word", spots, 10) == spots[0]
    assert room.best("word", spots, 10) != spots[0]  # the first label stands there now
    room.curve((0, 50), (50, 50), (100, 50))
    assert room.crossings("word", Spot(50, 53), 10) > 0
    assert room.crossings("word", Spot(50, 80), 10) == 0
    assert room.shared_drop([("word", (30.0, 30.0)), ("word", (70.0, 30.0))], (23.0, 60.0), 10) == 60.0
    assert room.lowest() > 90

"""The pictures are well-formed, stay inside their frame, say their numbers in words, and repeat byte for byte."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import replace
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.report.charts import Curve, Level, curves, share_bar
from synth.report.figures import (
    class_words,
    closest,
    draw_margin,
    draw_peaks_along,
    draw_radius,
    draw_string_response,
    draw_worst_run,
    exact_words,
    proven_words,
)
from tests.report.standins import exact_limit, margin, run, trajectory

SVG = "{http://www.w3.org/2000/svg}"
NUMBER = re.compile(r"-?\d+(?:\.\d+)?")


def texts(svg: str) -> str:
    return " | ".join(element.text or "" for element in ElementTree.fromstring(svg).iter(f"{SVG}text"))


def inside(svg: str) -> bool:
    """Whether every coordinate of every mark lies inside the view box (patterns aside), and every text starts in it."""
    root = ElementTree.fromstring(svg)
    _, _, width, height = map(float, root.attrib["viewBox"].split())
    horizontal, vertical = [], []
    for element in root:
        values = element.attrib
        horizontal += [float(values[k]) for k in ("x", "x1", "x2", "cx") if k in values]
        vertical += [float(values[k]) for k in ("y", "y1", "y2", "cy") if k in values]
        if element.tag == f"{SVG}rect":
            horizontal.append(float(values["x"]) + float(values["width"]))
            vertical.append(float(values["y"]) + float(values["height"]))
        plain = [float(v) for v in NUMBER.findall(values.get("d", "") + values.get("points", ""))]
        horizontal += plain[::2]
        vertical += plain[1::2]
    return all(0 <= x <= width for x in horizontal) and all(0 <= y <= height for y in vertical)


def drawn_points(svg: str) -> list[list[tuple[float, float]]]:
    found = []
    for path in ElementTree.fromstring(svg).iter(f"{SVG}path"):
        plain = [float(v) for v in NUMBER.findall(path.attrib["d"])]
        found.append(list(zip(plain[::2], plain[1::2], strict=True)))
    return found


SERIES = st.lists(st.tuples(st.floats(-1e6, 1e6), st.floats(-1e6, 1e6)), min_size=1, max_size=30)


@given(st.lists(SERIES, min_size=1, max_size=7), st.lists(st.floats(0, 2e6), max_size=2))
def test_curves_and_levels_stay_inside_the_picture(
    series: list[list[tuple[float, float]]], levels: list[float]
) -> None:
    lines = [Curve(f"line {k}", [x for x, _ in s], [y for _, y in s]) for k, s in enumerate(series)]
    svg = curves("c", "t", "d", ("x", "y"), lines, [Level(v, "bound") for v in levels], symmetric=True, markers=True)
    assert inside(svg)
    assert len(drawn_points(svg)) == len(series)


def test_a_curve_lands_where_its_ticks_say() -> None:
    svg = curves("c", "t", "d", ("x", "y"), [Curve("a", [0, 5, 10], [0, 200, 400])])
    root = ElementTree.fromstring(svg)
    at = {e.text: e.attrib for e in root.iter(f"{SVG}text")}
    _, middle, end = drawn_points(svg)[0]
    assert end[0] == pytest.approx(float(at["10"]["x"]), abs=0.02)
    assert middle[1] == pytest.approx(float(at["200"]["y"]) - 4, abs=0.02)
    assert end[1] == pytest.approx(float(at["400"]["y"]) - 4, abs=0.02)


def test_a_value_that_is_not_finite_is_refused() -> None:
    with pytest.raises(ValueError, match="not finite"):
        curves("c", "t", "d", ("x", "y"), [Curve("a", [0.0, 1.0], [0.0, math.inf])])
    with pytest.raises(ValueError, match="nothing to draw"):
        curves("c", "t", "d", ("x", "y"), [])


def test_lines_differ_by_more_than_colour() -> None:
    svg = draw_string_response(trajectory(), "hauler", "place")
    dashes = [p.attrib.get("stroke-dasharray", "") for p in ElementTree.fromstring(svg).iter(f"{SVG}path")]
    assert len(dashes) == 4
    assert len(set(dashes)) == len(dashes)


@given(st.floats(0, 3), st.floats(0, 0.5), st.floats(0.01, 0.999))
def test_the_radius_picture_stays_inside_and_says_its_numbers(low: float, width: float, target: float) -> None:
    svg = draw_radius(low, low + width, target)
    assert inside(svg)
    assert "target" in texts(svg)


def test_the_radius_picture_says_outward_rounded_ends() -> None:
    svg = draw_radius(0.61234, 0.61239, 0.9)
    assert "radius 0.6123 to 0.6124" in texts(svg)
    assert "below 0.9" in svg
    assert "not below 0.6" in draw_radius(0.61234, 0.61239, 0.6)


def test_an_infinite_radius_is_drawn_at_the_arrow() -> None:
    svg = draw_radius(1.25, math.inf, 0.9)
    assert inside(svg)
    assert "radius at least 1.25" in texts(svg)


UNLIMITED = exact_limit(lower=math.inf, upper=math.inf)
UNSTABLE = exact_limit(lower=0.0, upper=0.5, nominal_stable=False)
MARGINS: dict[str, tuple[dict[str, Any], str]] = {
    "plain": ({}, "proven up to 1.625"),
    "all unlimited": (
        {"proven_factor": math.inf, "covered": math.inf, "class_limit": math.inf, "exact": UNLIMITED},
        "exact limit: unlimited",
    ),
    "capped": (
        {"proven_factor": 500.0, "covered": 500.0, "capped": True, "class_limit": 500.0, "class_capped": True,
         "exact": exact_limit(lower=1000.0, upper=math.inf, capped=True)},
        "exact limit: above 1000 (search ended there)",
    ),
    "nothing proven": (
        {"proven_factor": 0.0, "covered": 0.0, "class_limit": 0.02, "exact": UNSTABLE},
        "unstable as declared",
    ),
    "proven only weaker": (
        {"proven_factor": 0.75, "covered": 0.0, "class_limit": 0.76, "exact": exact_limit(lower=2.0, upper=2.001)},
        "proven at 0.75, not throughout",
    ),
    "exact not found": ({"exact": exact_limit(lower=0.0, upper=math.inf)}, "limit of the class: 1.633"),
    "far apart": ({"exact": exact_limit(lower=640.0, upper=640.5)}, "exact limit: 640 to 640.5"),
}  # fmt: skip


@pytest.mark.parametrize("name", MARGINS)
def test_every_sort_of_margin_can_be_drawn(name: str) -> None:
    changes, words = MARGINS[name]
    svg = draw_margin(margin(**changes))
    assert inside(svg)
    assert words in texts(svg)


def test_words_of_the_margin_round_towards_the_safe_side() -> None:
    assert proven_words(margin(proven_factor=1.62539, covered=1.62539)) == "proven up to 1.625"
    assert proven_words(margin(proven_factor=0.0)) == "nothing proven at any strength tried"
    assert class_words(margin(class_limit=1.6331)) == "limit of the class: 1.633"
    assert exact_words(margin()) == "exact limit: 4.187 to 4.189"
    assert exact_words(margin(exact=exact_limit(lower=0.0, upper=math.inf))) == "exact limit: not found"


def test_the_response_shows_units_counted_from_the_disturbed_one() -> None:
    svg = draw_string_response(trajectory(), "hauler", "place")
    assert inside(svg)
    assert [word for word in texts(svg).split(" | ") if word.startswith("unit ")] == [
        "unit 0",
        "unit 1",
        "unit 2",
        "unit 4",
    ]
    assert "place in m" in texts(svg)
    assert "unit 0: largest 0.3" in svg


def test_the_response_ends_where_it_has_settled() -> None:
    slow = trajectory()
    short = slow.runs[0].offers["hauler"]
    values = np.concatenate([short, np.repeat(short[-1:], 400, axis=0)])
    long = replace(slow.runs[0], time=np.linspace(0.0, 500.0, 501), offers={"hauler": values})
    svg = draw_string_response(replace(slow, runs=(long,)), "hauler", "place")
    ticks = [float(t) for t in texts(svg).split(" | ") if re.fullmatch(r"\d+", t)]
    assert 50 < max(ticks) <= 70  # within 1 % after 46 s, and half as long again
    assert inside(svg)


def test_the_picture_along_the_string_shows_the_guarantee_above_every_run() -> None:
    svg = draw_peaks_along(trajectory(), "hauler", "place")
    assert inside(svg)
    assert "guaranteed for every unit: 0.5\u00a0m" in texts(svg)
    level = next(
        float(line.attrib["y1"])
        for line in ElementTree.fromstring(svg).iter(f"{SVG}line")
        if line.attrib.get("stroke-dasharray") == "1.5 2.5"
    )
    assert all(y > level for points in drawn_points(svg) for _, y in points)


def test_the_closest_run_is_found_among_counted_runs_from_rest() -> None:
    good = trajectory()
    found = closest(good)
    assert found is not None
    assert (found.run.name, found.cell, found.signal) == ("adversary against hauler.place", 5, "place")
    assert found.share == pytest.approx(0.4875 * (1 - math.exp(-10)) / 0.5, rel=1e-9)
    worse = run("set aside", (0.6, 0.6, 0.6, 0.6, 0.6, 0.6), counted=False, reason="saturated")
    offset = run("start", (0.6, 0.6, 0.6, 0.6, 0.6, 0.6), X0=1.0)
    again = closest(replace(good, runs=(*good.runs, worse, offset)))
    assert again is not None
    assert again.run.name == found.run.name
    svg = draw_worst_run(good)
    assert svg is not None
    assert inside(svg)
    assert "guaranteed: ± 0.5\u00a0m" in texts(svg)


def test_without_a_guaranteed_peak_there_is_no_worst_run() -> None:
    assert draw_worst_run(trajectory(measures={})) is None


def test_a_run_that_ran_away_is_drawn_as_far_as_it_is_finite() -> None:
    wild = run("leader", (0.3, 0.2, 0.1))
    values = wild.offers["hauler"].copy()
    values[50:] = np.inf
    good = trajectory()
    svg = draw_string_response(replace(good, runs=(replace(wild, offers={"hauler": values}),)), "hauler", "place")
    assert inside(svg)
    svg = draw_peaks_along(replace(good, runs=(replace(wild, offers={"hauler": values}),)), "hauler", "place")
    assert inside(svg)


@pytest.mark.parametrize("arguments", [("hauler", "speed"), ("tug", "place"), ("hauler", "place", "no such run")])
def test_a_signal_or_run_that_is_not_there_is_refused(arguments: tuple[str, ...]) -> None:
    with pytest.raises(ValueError, match="the trajectory has no"):
        draw_string_response(trajectory(), *arguments)


PICTURES: list[Callable[[], str | None]] = [
    lambda: draw_radius(0.61234, 0.61239, 0.9),
    lambda: draw_margin(margin()),
    lambda: draw_string_response(trajectory(), "hauler", "place"),
    lambda: draw_peaks_along(trajectory(), "hauler", "place"),
    lambda: draw_worst_run(trajectory()),
]


@pytest.mark.parametrize("picture", PICTURES)
def test_pictures_repeat_byte_for_byte_and_describe_themselves(picture: Callable[[], str | None]) -> None:
    svg = picture()
    assert svg is not None
    assert svg == picture()
    root = ElementTree.fromstring(svg)
    assert root.findtext(f"{SVG}title")
    assert root.findtext(f"{SVG}desc")
    assert "http" not in svg.replace("http://www.w3.org/2000/svg", "")


@pytest.mark.parametrize(("share", "words"), [(None, "no bound"), (0.25, "25 %"), (1.5, "150 %")])
def test_share_bars(share: float | None, words: str) -> None:
    svg = share_bar("s", share)
    assert inside(svg)
    assert words in svg


def test_curves_of_runs_from_rest_start_at_zero() -> None:
    def starts(first: float, **changes: object) -> tuple[str, str]:
        made = run("leader", (0.3, 0.2))
        kept = made.time > first
        made = replace(
            made,
            time=made.time[kept],
            offers={"hauler": made.offers["hauler"][kept]},
            **changes,  # type: ignore[arg-type]
        )
        svg = draw_string_response(trajectory(runs=(made,)), "hauler", "place")
        found = re.search(r'<path d="M(\S+) (\S+?)L', svg)
        assert found is not None
        return found[1], found[2]

    assert starts(0.05)[0] == "58"  # the left edge of the frame, although the first stored sample is at 0.1 s
    assert starts(0.05) == starts(-1.0)
    assert "<svg" in draw_string_response(trajectory(), "hauler", "place")
    late = replace(run("leader", (0.3, 0.2)), time=run("leader", (0.3,)).time + 98.0)
    assert ">98<" in draw_string_response(trajectory(runs=(late,)), "hauler", "place")
    assert starts(0.05, X0=0.1)[1] != starts(0.05)[1]  # nothing is known of such a run before its first sample


def test_a_number_on_the_line_interrupts_a_leader() -> None:
    svg = draw_radius(0.4, 0.4001, 0.8)
    papers = [float(x) + float(w) / 2 for x, w in re.findall(r'<rect x="(\S+)" y="63" width="(\S+)" [^>]*#ffffff', svg)]
    leader = re.search(r'<line x1="(\S+)" [^>]*stroke-dasharray="4 3"', svg)
    assert leader is not None and any(abs(x - float(leader[1])) < 0.1 for x in papers)
    last_line = max(m.start() for m in re.finditer(r'stroke-dasharray="4 3"', svg))
    assert last_line < svg.index('y="63"')  # the paper lies over the leader, the number over the paper


def test_a_fast_swing_gets_a_band() -> None:
    time = np.linspace(0.0, 50.0, 1000)
    swing = np.sin(1.9 * np.arange(1000))[:, None, None] * np.ones((1, 2, 1))
    made = replace(run("leader", (0.3, 0.2)), time=time, offers={"hauler": swing})
    made = replace(made, disturbances={})
    assert "fill-opacity" in draw_string_response(trajectory(runs=(made,)), "hauler", "place")
    assert "fill-opacity" not in draw_string_response(trajectory(), "hauler", "place")

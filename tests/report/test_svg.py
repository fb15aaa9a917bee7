"""The drawing board: nothing leaves its frame, labels stay apart, the text is well-formed and repeats."""

from __future__ import annotations

import math
from itertools import pairwise
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.report.svg import Board, Scale, envelope, number, spread, thin, ticks

VALUE = st.floats(-1e12, 1e12)


@given(VALUE, VALUE, VALUE, st.floats(0, 500), st.floats(0, 500))
def test_a_scale_never_leaves_its_frame_and_keeps_the_ends(a: float, b: float, v: float, p: float, q: float) -> None:
    low, high = min(a, b), max(a, b)
    if not low < high:
        with pytest.raises(ValueError, match="low < high"):
            Scale(low, high, p, q)
        return
    scale = Scale(low, high, p, q)
    assert min(p, q) - 1e-6 <= scale(v) <= max(p, q) + 1e-6
    assert scale(low) == pytest.approx(p, abs=1e-6)
    assert scale(high) == pytest.approx(q, abs=1e-6)


@given(st.floats(1e-9, 1e9), st.floats(1.01, 1e9), VALUE)
def test_a_logarithmic_scale_never_leaves_its_frame(low: float, ratio: float, v: float) -> None:
    scale = Scale(low, low * ratio, 10, 200, log=True)
    assert 10 <= scale(v) <= 200
    assert scale(low * math.sqrt(ratio)) == pytest.approx(105, abs=1e-3)


@given(VALUE, st.floats(1e-3, 1e6), st.integers(2, 10))
def test_ticks_lie_inside_are_even_and_say_their_value(low: float, span: float, count: int) -> None:
    high = low + span
    if not (high - low) > 1e-9 * max(abs(low), abs(high)):
        return
    found = ticks(low, high, count)
    assert len(found) <= count + 1
    for value, text in found:
        slack = 1e-9 * max(abs(low), abs(high))
        assert low - slack <= value <= high + slack
        assert float(text.replace("−", "-")) == pytest.approx(value, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize(
    ("low", "high", "texts"),
    [
        (0, 1, ["0", "0.2", "0.4", "0.6", "0.8", "1.0"]),
        (-3, 12, ["0", "5", "10"]),
        (0.0, 0.0021, ["0", "0.0005", "0.0010", "0.0015", "0.0020"]),
    ],
)
def test_ticks_examples(low: float, high: float, texts: list[str]) -> None:
    assert [text for _, text in ticks(low, high, 5)] == texts


@given(st.lists(st.floats(-50, 150), max_size=9), st.floats(1, 20))
def test_spread_labels_keep_order_room_and_frame(positions: list[float], gap: float) -> None:
    placed = spread(positions, gap, 0, 100)
    assert all(-1e-9 <= p <= 100 + 1e-9 for p in placed)
    order = sorted(range(len(positions)), key=lambda i: (positions[i], i))
    room = min(gap, 100 / max(len(positions) - 1, 1))
    for i, j in pairwise(order):
        assert placed[j] - placed[i] >= room - 1e-9


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=600), st.integers(2, 40))
def test_a_thinned_line_keeps_its_extremes_its_ends_and_its_order(ys: list[float], columns: int) -> None:
    xs = [float(i) for i in range(len(ys))]
    short_x, short_y = thin(xs, ys, columns)
    assert (min(short_y), max(short_y)) == (min(ys), max(ys))
    assert (short_x[0], short_x[-1]) == (xs[0], xs[-1])
    assert short_x == sorted(set(short_x))
    assert len(short_x) <= 4 * columns
    assert all(ys[int(x)] == y for x, y in zip(short_x, short_y, strict=True))


@pytest.mark.parametrize(
    ("value", "text"), [(1.0, "1"), (0.126, "0.13"), (-0.001, "0"), (-2.5, "-2.5"), (100.0, "100")]
)
def test_coordinates_have_two_decimals_at_most(value: float, text: str) -> None:
    assert number(value) == text


@given(st.text(max_size=30))
def test_every_text_is_escaped(text: str) -> None:
    text = "".join(c for c in text if c.isprintable())
    board = Board("b", "t", "d", 10, 10)
    board.text(1, 2, text + "<script>&\"'")
    root = ElementTree.fromstring(board.svg())
    assert root.findall("{http://www.w3.org/2000/svg}text")[0].text == text + "<script>&\"'"


@given(st.floats(0.3, 3.1), st.integers(330, 900))
def test_a_band_holds_every_sample_of_a_fast_swing(step: float, count: int) -> None:
    xs = [0.1 * k for k in range(count)]
    ys = [math.exp(-0.002 * k) * math.sin(step * k) for k in range(count)]
    band = envelope(xs, ys)
    turns = sum((b - a) * (c - b) < 0 for a, b, c in zip(ys, ys[1:], ys[2:], strict=False))
    if turns < 0.3 * count:
        assert band == []
    if turns > 0.35 * count:
        assert len(band) == 220 and [x for x, _, _ in band] == sorted(x for x, _, _ in band)
        for (left, low, high), (right, _, _) in zip(band[::2], band[1::2], strict=True):
            assert all(low <= y <= high for x, y in zip(xs, ys, strict=True) if left <= x <= right)
        assert max(high - low for _, low, high in band) > 1.5


def test_slow_lines_dust_and_few_samples_have_no_band() -> None:
    xs = [float(k) for k in range(500)]
    assert envelope(xs, [math.sin(0.05 * x) for x in xs]) == []
    assert envelope(xs, [1.0 + 1e-9 * (-1) ** k for k in range(500)]) == []
    assert envelope(xs[:300], [float((-1) ** k) for k in range(300)]) == []
    assert envelope(xs, [float((-1) ** k) for k in range(500)]) != []

"""Link tolerances against bisection on the radius of literal operators."""

from __future__ import annotations

from dataclasses import replace
from math import inf, sqrt

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.gain import GainOperator
from synth.margin import FiniteLink, finite_link_tolerances, pattern_link_tolerances
from tests.build import scalar_kind
from tests.margin.networks import kind_of, link, network_of


def operator_radius(peaks: list[np.ndarray], links: list[FiniteLink]) -> float:
    """Definition: radius of the outlet operator M[(i, k), (j, k')] = sum of p g over links (theory (1))."""
    starts = np.cumsum([0, *[len(p) for p in peaks]])
    M = np.zeros((starts[-1], starts[-1]))
    for one in links:
        for k in range(len(peaks[one.to])):
            M[starts[one.to] + k, starts[one.source] + one.outlet] += peaks[one.to][k, one.inlet] * one.strength
    return float(np.max(np.abs(np.linalg.eigvals(M))))


def by_bisection(peaks: list[np.ndarray], links: list[FiniteLink], which: int) -> float:
    def radius(factor: float) -> float:
        return operator_radius(
            peaks, [replace(o, strength=o.strength * factor) if i == which else o for i, o in enumerate(links)]
        )

    if radius(1e7) < 1:
        return inf
    low, high = 1.0, 1e7
    for _ in range(100):
        middle = sqrt(low * high)
        low, high = (middle, high) if radius(middle) < 1 else (low, middle)
    return low


@settings(max_examples=20, deadline=None)
@given(data=st.data())
def test_formula_is_where_the_radius_reaches_one(data: st.DataObject) -> None:
    """Random networks of three units with several outlets and inlets, radius below one."""
    shapes = [data.draw(st.tuples(st.integers(1, 2), st.integers(1, 2))) for _ in range(3)]
    gain = st.integers(0, 10).map(lambda v: v / 10)
    peaks = [np.array([[data.draw(gain) for _ in range(w)] for _ in range(h)]) for h, w in shapes]
    links = []
    for _ in range(data.draw(st.integers(1, 6))):
        source, to = data.draw(st.integers(0, 2)), data.draw(st.integers(0, 2))
        outlet, inlet = data.draw(st.integers(0, shapes[source][0] - 1)), data.draw(st.integers(0, shapes[to][1] - 1))
        links.append(FiniteLink(source, outlet, to, inlet, data.draw(st.integers(1, 10)) / 10))
    radius = operator_radius(peaks, links)
    if radius >= 0.95:
        shrink = 0.9 / radius
        links = [replace(one, strength=one.strength * shrink) for one in links]
    found = finite_link_tolerances(peaks, links)
    for which, value in enumerate(found):
        assert value > 1
        if value < 1e6:
            # A true lower bound: with that link so much stronger the enclosure lies below 1.
            stronger = [
                replace(one, strength=one.strength * value) if k == which else one for k, one in enumerate(links)
            ]
            assert enclosed(peaks, stronger) < 1
            assert value == pytest.approx(by_bisection(peaks, links, which), rel=1e-6)
        else:
            assert by_bisection(peaks, links, which) > 1e5


def enclosed(peaks, links) -> float:
    """Upper end of the radius, from an operator written out entry by entry."""
    first = np.concatenate([[0], np.cumsum([len(p) for p in peaks])]).tolist()
    entries = [
        (first[one.to] + k, first[one.source] + one.outlet, peaks[one.to][k][one.inlet] * one.strength)
        for one in links
        for k in range(len(peaks[one.to]))
    ]
    to, source, gain = zip(*entries, strict=True)
    return GainOperator.from_links(first[-1], list(to), list(source), list(gain)).radius(1e-12).upper


def test_a_network_without_margin_is_refused() -> None:
    with pytest.raises(InputError, match="radius is below 1"):
        finite_link_tolerances([[[1.0]]], [FiniteLink(0, 0, 0, 0, 1.0)])


def test_one_way_pattern_tolerates_anything_on_one_link() -> None:
    """Nothing that one link of a one-way string carries ever returns to it; all of them together are another matter."""
    kind = scalar_kind(1)
    assert pattern_link_tolerances(network_of(kind, [link(kind, -1, "0.9")]), {"tank": [[1.0]]}) == (inf,)


def test_single_link_of_a_chain_against_long_finite_chains() -> None:
    """x' = -x + .4 (l + r), p = 1: the pattern's single tolerance is the limit of the middle link of long chains."""
    kind = scalar_kind(1)
    found = pattern_link_tolerances(network_of(kind, [link(kind, -1, "0.4"), link(kind, 1, "0.4")]), {"tank": [[1.0]]})
    n = 121
    links = [FiniteLink(i + d, 0, i, 0, 0.4) for i in range(n) for d in (-1, 1) if 0 <= i + d < n]
    middle = links.index(FiniteLink(60, 0, 61, 0, 0.4))
    (finite,) = finite_link_tolerances([[[1.0]]] * n, links, [middle])
    assert found == pytest.approx((finite, finite), rel=1e-9)
    # closed form: G(0) = 1/sqrt(1 - 4g^2) on the units; R_ll - 1 = g G(1), G(1) = (G(0) - 1)/(2g)
    back = (1 / sqrt(1 - 4 * 0.16) - 1) / 2
    assert found[0] == pytest.approx((1 + back) / back, rel=1e-9)
    assert found[0] > 0.5 / 0.4  # more than all of them together may take


def test_pattern_with_several_outlets_against_a_long_ring() -> None:
    """Two kinds, an outlet read by nobody else, two inlets: middle instance of a finite chain of cells."""
    a = kind_of([[-1, 0], [0, -2]], [[1, 0], [0, 1]], [[1, 0], [0, 1]], "a")
    b = kind_of([[-1]], [[1]], [[1]], "b")
    pattern = [
        link(a, -1, "0.3", offer=0, take=1),
        link(a, 0, "0.5", source=b, take=0),
        link(b, 1, "0.4", source=a, offer=1),
        link(b, 1, "0.1", source=a, offer=0),
    ]
    peaks = {"a": np.array([[0.6, 0.2], [0.3, 0.5]]), "b": np.array([[0.9]])}
    found = pattern_link_tolerances(network_of((a, b), pattern), peaks)
    cells, links, marks = 61, [], []
    for c in range(cells):
        for which, one in enumerate(pattern):
            if 0 <= c + one.at[0] < cells:
                source = 2 * (c + one.at[0]) + (one.source_kind == "b")
                take = int(one.take[1:])
                if c == cells // 2:
                    marks.append(len(links))
                links.append(
                    FiniteLink(source, int(one.offer[1:]), 2 * c + (one.kind == "b"), take, float(one.strength))
                )
                assert which < 4
    values = finite_link_tolerances([peaks["a"], peaks["b"]] * cells, links, marks)
    assert found == pytest.approx(values, rel=1e-7)

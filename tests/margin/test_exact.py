"""Where a declared network breaks: closed forms, brackets, first failures, and what is said when nothing breaks."""

from __future__ import annotations

from math import inf

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.margin.exact import ExactLimit, exact_limit, rightmost
from synth.margin.symbol import loop_family
from synth.network.model import Network
from tests.build import scalar_kind
from tests.margin.networks import chain, interrupted, kind_of, link, network_of, no_gains, oscillators


def limit_of(network: Network, **settings_: float) -> ExactLimit:
    return exact_limit(loop_family(network, no_gains(network)), **settings_)


def holds(limit: ExactLimit, value: float, width: float = 1e-3) -> bool:
    """The bracket holds the value, is as narrow as asked, and both ends are certified."""
    narrow = limit.upper - limit.lower <= width * limit.upper
    return narrow and limit.lower <= value <= limit.upper and limit.lower_certified and limit.upper_certified


def test_endless_chain_breaks_where_long_paths_do() -> None:
    """x' = -a x + k (left + right): a path of n breaks at a/(2 cos(pi/(n+1))), endless at a/2 (from memory; Brouwer
    and Haemers, Spectra of Graphs, 2012, for the path's spectral radius)."""
    paths = [1 / (2 * np.cos(np.pi / (n + 1))) for n in (10, 100, 1000)]
    assert paths[0] == pytest.approx(0.5211085581, abs=1e-10)
    for n, k in zip((10, 100), paths, strict=False):
        adjacency = np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
        assert np.linalg.eigvalsh(-np.eye(n) + k * adjacency)[-1] == pytest.approx(0, abs=1e-12)
    limit = limit_of(chain(k="0.1"))
    assert holds(limit, 5.0)
    assert limit.between_certified
    assert (limit.theta, limit.wavelength, limit.frequency) == (0.0, inf, 0.0)
    assert all(0.1 * limit.lower < k for k in paths)  # the endless chain is the hardest
    assert 0.1 * limit.upper > 0.5
    assert paths[-1] == pytest.approx(0.5, abs=1e-5)


def test_chain_of_lightly_damped_units_breaks_at_one_half() -> None:
    """x'' + .1 x' + x = k (left + right): (exact) .5, all units alike: 1 - 2k changes sign (elementary)."""
    limit = limit_of(oscillators("0.1"))
    assert holds(limit, 5.0)
    assert limit.theta == pytest.approx(0, abs=1e-6)


def test_alternating_signs_break_at_half_a_wave() -> None:
    """x' = -x - k (left + right) breaks at k = 1/2 with neighbours in opposite phase: wavelength two units."""
    limit = limit_of(chain(k="-0.25"))
    assert holds(limit, 2.0)
    assert limit.wavelength == pytest.approx(2.0)


def test_single_delay_of_a_unit_on_itself() -> None:
    """x' = -b x(t - tau) as a link of a unit with itself: b tau = pi/2 (from memory; Yorke 1970)."""
    kind = scalar_kind(0)
    limit = limit_of(network_of(kind, [link(kind, 0, -1, delay="0.5")]))
    assert holds(limit, np.pi)
    assert limit.with_delays
    assert limit.frequency == pytest.approx(np.pi, rel=1e-3)


def test_delay_that_is_not_there_has_no_limit_but_with_it_one() -> None:
    kind = scalar_kind(0)
    family = loop_family(network_of(kind, [link(kind, 0, -1, delay="0.5")]), no_gains(network_of(kind, [])))
    fresh = exact_limit(family.without_delays(), cap=50.0)
    assert (fresh.lower, fresh.upper, fresh.capped, fresh.between_certified) == (50.0, inf, True, True)
    assert "beyond that nothing is said" in fresh.note


def test_two_late_links_against_the_closed_form() -> None:
    """x' = -x + k (left + right)(t - d), k < 0: at theta = pi s = -1 + 2|k| e^{-sd}, which breaks at |k| = 1/2;
    at theta = 0 x' = -x - 2|k| x(t - d), which breaks later."""
    limit = limit_of(chain(k="-0.25", delay=1))
    assert holds(limit, 2.0)
    assert limit.wavelength == pytest.approx(2.0)


def test_one_way_string_is_not_judged_by_the_eigenvalues_of_a_section() -> None:
    """x_i' = -x_i + 10 x_{i-1}: every finite section has all eigenvalues at -1, yet the endless string breaks at .1.

    The order-20 section and its sensitivity: Malyshev and Sadkane, J. Comput. Appl. Math. 102 (1999): 1e-18 in the
    corner moves an eigenvalue to +0.12201845430196343559.
    """
    kind = scalar_kind(1)
    section = -np.eye(20) + np.diag(np.full(19, 10.0), -1)
    assert np.all(np.linalg.eigvals(section).real < 0)
    # (s + 1)^20 = 10^19 * 1e-18 (expansion along the corner)
    corner = 10 ** (1 / 20) - 1
    assert corner == pytest.approx(0.12201845430196343559, abs=1e-15)
    limit = limit_of(network_of(kind, [link(kind, -1, 10)]))
    assert not limit.nominal_stable
    assert limit.lower <= 0.1 <= limit.upper
    assert limit.upper - limit.lower < 1e-4


def test_first_failure_is_reported_where_the_stable_set_has_a_hole() -> None:
    """(1+k)^2 > 7k - 5 fails between 2 and 3 and holds again above: 2 is reported, and proven to be the first."""
    limit = limit_of(interrupted())
    assert holds(limit, 2.0)
    assert limit.between_certified
    network = interrupted()
    again = rightmost(loop_family(network, no_gains(network)).at(3.5))
    assert again is not None
    assert again.s.real < 0


@pytest.mark.parametrize(
    "links",
    [("0.1", "-0.1", "0", "0"), ("0.1", "0.1", "0.1", "0.1")],
    ids=["skew", "springs"],
)
def test_couplings_of_any_strength(links: tuple[str, str, str, str]) -> None:
    """x' = -x + k (l - r), and x' = -x + k (l - 2x + r): stable for every k; the answer is the cap, and says so."""
    kind = scalar_kind(1)
    left, right, own_left, own_right = links
    limit = limit_of(network_of(kind, [link(kind, -1, left, own_left), link(kind, 1, right, own_right)]), cap=100.0)
    assert (limit.lower, limit.upper, limit.capped) == (100.0, inf, True)
    assert limit.lower_certified
    assert limit.as_json()["upper"] == "inf"


def test_ladder_line_is_stable_at_every_strength_tried() -> None:
    """V' = -.2V - I + k I_left, I' = -.2I + V - k V_right: energy falls at every k (skew coupling)."""
    kind = kind_of([["-0.2", -1], [1, "-0.2"]], [[1, 0], [0, 1]], [[1, 0], [0, 1]], "rung")
    network = network_of(kind, [link(kind, -1, "0.5", offer=1, take=0), link(kind, 1, "-0.5", offer=0, take=1)])
    limit = limit_of(network, cap=20.0)
    assert limit.capped
    assert limit.lower_certified


def test_units_that_drift_are_stable_at_no_strength() -> None:
    """x' = k (left - x): all units alike never return, whatever k; lower is 0 and the note says why."""
    kind = scalar_kind(0)
    limit = limit_of(network_of(kind, [link(kind, -1, 1, 1)]))
    assert limit.lower == 0
    assert not limit.nominal_stable
    assert "not stable at any factor" in limit.note


@settings(max_examples=15, deadline=None)
@given(
    a=st.integers(5, 30).map(lambda v: v / 10),
    left=st.integers(-9, 9).filter(bool),
    right=st.integers(-9, 9).filter(bool),
)
def test_first_order_pattern_against_its_closed_form(a: float, left: int, right: int) -> None:
    """x' = -a x + k (l x_left + r x_right): breaks at k = a / max over theta of (l + r) cos theta = a / |l + r|."""
    kind = scalar_kind(str(a))
    network = network_of(kind, [link(kind, -1, f"{left}/10"), link(kind, 1, f"{right}/10")])
    limit = limit_of(network, cap=100.0)
    if left + right == 0:
        assert limit.capped
        return
    value = 10 * a / abs(left + right)
    assert limit.lower * (1 - 1e-6) <= value <= limit.upper * (1 + 1e-6)
    assert limit.upper - limit.lower <= 1e-3 * limit.upper


def test_a_narrower_width_gives_a_narrower_bracket_inside() -> None:
    wide, narrow = limit_of(chain(k="0.1"), width=1e-2), limit_of(chain(k="0.1"), width=1e-5)
    assert holds(wide, 5.0, 1e-2)
    assert holds(narrow, 5.0, 1e-5)

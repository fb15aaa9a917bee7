"""The proven strength and the limit of the class: closed forms, laws, and what the search does where it is awkward."""

from __future__ import annotations

from fractions import Fraction
from math import inf, pi, sqrt, tanh

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.margin.coupling import CouplingLimit, Scaling, bottleneck, coupling_limit, tidy
from synth.network.model import Network
from tests.build import convoy, convoy_gains, scalar_kind
from tests.margin.networks import chain, interrupted, link, network_of, no_gains, oscillators


def limit_of(network: Network, classes: tuple[str, ...] | None = None, own_parts: bool = True) -> CouplingLimit:
    return coupling_limit(Scaling(network, no_gains(network), classes, own_parts, 5e-5))


def test_class_limit_of_lightly_damped_units() -> None:
    """x'' + .1 x' + x = k (l + r): p = coth(pi zeta / (2 sqrt(1 - zeta^2))), zeta = .05, so k = 1/(2 p) = .0392
    (derived: peak gain of a second-order lag)."""
    zeta = 0.05
    expected = tanh(pi * zeta / (2 * sqrt(1 - zeta**2))) / 2
    assert expected == pytest.approx(0.0392, abs=5e-5)
    found = limit_of(oscillators("0.01"))
    assert 0.01 * found.proven <= expected <= 0.01 * found.lost
    assert 0.01 * found.lost == pytest.approx(expected, rel=2e-4)
    assert found.covered == found.proven


def test_springs_with_own_parts_that_grow() -> None:
    """x'' + .1 x' + x = k (l - 2x + r), own part in the unit: proven up to k = .0408, by the same peak gain with
    wn^2 = 1 + 2k: 2k p/(1 + 2k) = 1 (derived)."""

    def excess(k: float) -> float:
        wn = sqrt(1 + 2 * k)
        zeta = 0.05 / wn
        return 2 * k / (wn**2 * tanh(pi * zeta / (2 * sqrt(1 - zeta**2)))) - 1

    low, high = 0.03, 0.05
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if excess(middle) < 0 else (low, middle)
    found = limit_of(oscillators("0.01", "0.01"))
    assert low == pytest.approx(0.0408, abs=5e-5)
    assert 0.01 * found.proven <= low <= 0.01 * found.lost
    assert found.lost - found.proven <= 1e-3 * found.lost
    assert found.lost_confirmed
    assert found.covered == found.proven  # every strength in between, not only those tried


def test_own_parts_may_stay() -> None:
    """With own parts fixed the limit is 1/radius of today's operator, so it differs from the growing one."""
    fixed, growing = limit_of(oscillators("0.01", "0.01"), own_parts=False), limit_of(oscillators("0.01", "0.01"))
    assert fixed.lost < growing.lost
    radius = Scaling(oscillators("0.01", "0.01"), no_gains(oscillators()), None, False).folded(1.0).radius()
    assert fixed.proven < 1 / radius[0]
    assert fixed.lost >= 1 / radius[1]


def test_a_network_not_proven_today_is_searched_downward() -> None:
    found = limit_of(oscillators("0.1"))
    assert not found.nominal_proven
    assert found.proven < 1
    assert 0.1 * found.proven == pytest.approx(0.0392, abs=1e-4)


@pytest.mark.parametrize("own", ["0", "0.1"])
def test_a_relative_network_not_proven_today(own: str) -> None:
    found = limit_of(oscillators("0.1", own))
    assert not found.nominal_proven
    assert found.proven < found.lost < 1


def test_units_that_need_their_neighbours_prove_nothing() -> None:
    """x' = -x(t - 1) as a link: stable as declared, but the class contains a link that is cut."""
    kind = scalar_kind(0)
    assert limit_of(network_of(kind, [link(kind, 0, -1, delay=1)])).proven == 0


def test_first_failure_with_a_hole_in_the_stable_set() -> None:
    """Own parts make the unit itself unstable between 2 and 3: the proof stops before 2 though 3.5 would prove."""
    network = interrupted("1/20")
    scaling = Scaling(network, no_gains(network), width=1e-3)
    found = coupling_limit(scaling, width=1e-2)
    assert 1 < found.proven < found.lost <= 2.03
    assert not scaling.folded(2.5).stable
    assert 1 <= found.covered <= found.proven


@pytest.mark.parametrize("factor", [0.8, 1.2, 1.6])
def test_drift_bounds_what_it_stands_for(factor: float) -> None:
    """Own parts counted as drift from one folding bound the radius at every factor in between, also where it grows."""
    for network in (interrupted("1/20"), oscillators("0.01", "0.01")):
        scaling = Scaling(network, no_gains(network), width=1e-2)
        base = scaling.folded(1.0)
        bound = base.drifted(max(factor, 1.0), abs(factor - 1.0))
        assert bound >= max(scaling.guess(1 + part * (factor - 1)) for part in (0.0, 0.5, 1.0)) * (1 - 1e-3)
    unstable_inside = interrupted("1/20")
    assert Scaling(unstable_inside, no_gains(unstable_inside), width=1e-2).folded(1.0).drifted(2.1, 1.1) >= 1


def test_where_nothing_fails_the_cap_is_named() -> None:
    """x' = -x + k (left - x): k/(1 + k) < 1 for every k; the search stops at its cap and says so."""
    kind = scalar_kind(1)
    found = limit_of(network_of(kind, [link(kind, -1, "0.5", "0.5")]))
    assert found.capped
    assert found.proven == found.lost == 1000
    assert 10 < found.covered <= 1000  # what is proven without gaps is stated apart from what was tried


def test_links_on_no_closed_path_never_matter() -> None:
    first, second = scalar_kind(1, "first"), scalar_kind(1, "second")
    found = limit_of(network_of((first, second), [link(second, 0, 7, source=first)]))
    assert found.unlimited
    assert found.proven == inf
    assert limit_of(network_of(first, [])).proven == inf


def test_a_class_alone() -> None:
    """k1 on the left, k2 on the right, a = 1: scaling the left alone breaks at (1 - k2)/k1 (one-signed responses)."""
    kind = scalar_kind(1)
    network = network_of(kind, [link(kind, -1, "0.2", name="left"), link(kind, 1, "0.4", name="right")])
    assert limit_of(network, ("left",)).lost == pytest.approx(3.0, rel=1e-4)
    assert limit_of(network, ("right",)).lost == pytest.approx(2.0, rel=1e-4)
    assert limit_of(network).lost == pytest.approx(1 / 0.6, rel=1e-4)
    too_strong = network_of(kind, [link(kind, -1, "0.2", name="left"), link(kind, 1, "1.4", name="right")])
    assert limit_of(too_strong, ("left",)).proven == 0


@settings(max_examples=12, deadline=None)
@given(factor=st.integers(2, 50), k=st.integers(1, 30))
def test_scaling_all_links_divides_the_limit(factor: int, k: int) -> None:
    """Law: strengths times c, limit divided by c."""
    base = limit_of(chain(k=Fraction(k, 100)))
    scaled = limit_of(chain(k=Fraction(k * factor, 100)))
    assert base.lost / factor == pytest.approx(scaled.lost, rel=1e-3)
    assert base.lost == pytest.approx(50 / k, rel=1e-3)


def test_shares_are_derivatives() -> None:
    """Share of a class = d log radius / d log strength (theory (15)), against a difference; shares sum to one."""
    kind, other = scalar_kind(1, "tank"), scalar_kind(2, "pond")

    def network(left: str) -> Network:
        return network_of(
            (kind, other),
            [
                link(kind, -1, left, name="a"),
                link(kind, 0, "0.2", name="b", source=other),
                link(other, 1, "0.3", name="c", source=kind),
            ],
        )

    shares = dict(bottleneck(Scaling(network("0.3"), no_gains(network("0.3"))).folded(1.0)))
    assert sum(shares.values()) == pytest.approx(1)
    ends = [Scaling(network(k), no_gains(network(k))).folded(1.0).radius()[1] for k in ("0.2999", "0.3001")]
    slope = (ends[1] - ends[0]) / 0.0002 * 0.3 / ((ends[0] + ends[1]) / 2)
    assert shares["a"] == pytest.approx(slope, rel=1e-4)
    assert shares["b"] == pytest.approx(shares["c"])


def test_estimates_agree_with_enclosures() -> None:
    scaling = Scaling(convoy(), convoy_gains())
    for factor in (0.5, 1.0, 6.0):
        lower, upper = scaling.folded(factor).radius()
        assert lower * (1 - 1e-3) <= scaling.guess(factor) <= upper * (1 + 1e-3)


@given(value=st.floats(1e-9, 1e9))
def test_tidy_rounds_down_and_only_a_little(value: float) -> None:
    assert value * (1 - 1e-5) <= tidy(value) <= Fraction(value)

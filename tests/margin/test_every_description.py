"""Margins of members, edges, rules, fields and links that weaken: closed forms, literal eigenvalues, and the order."""

from __future__ import annotations

import random
from dataclasses import replace
from fractions import Fraction
from math import inf

import numpy as np
import pytest

import synth
from synth.gain.descriptions import plan_of, wiring_of
from synth.margin.coupling import Scaling, coupling_limit
from synth.margin.folded import rays_of
from synth.margin.large import large_family, rightmost_of_large
from synth.margin.limits import worst_use
from synth.margin.nominal import nominal_limits, regular_wirings
from synth.margin.symbol import loop_family
from synth.network.layout import Edge, EdgeLink, EdgeUnit
from synth.network.model import Link, Network, Signal
from tests.build import convoy, convoy_gains, scalar_kind
from tests.gain.literal import some_edges, some_members, some_pattern
from tests.gain.test_descriptions import half_line, ring_of, tank_link
from tests.margin.networks import kind_of, link, network_of, no_gains, oscillator
from tests.simulate.test_units import fed, literal_loop, random_members


def margin_of(network: Network, **options: object) -> synth.margin.Margin:
    return synth.margin(network, no_gains(network), **options)  # type: ignore[no-any-return]


def limits_of(network: Network, own_parts: bool = True) -> tuple[Scaling, object]:
    scaling = Scaling(network, no_gains(network), None, own_parts, 5e-5)
    return scaling, coupling_limit(scaling)


def test_a_ring_has_the_class_limit_of_its_pattern() -> None:
    """Theory (9): the class limit is the pattern's; the exact one is that of six waves only, so not below it."""
    pattern = coupling_limit(Scaling(convoy(), convoy_gains(), width=5e-5))
    found = synth.margin(ring_of(convoy(), 6), convoy_gains())
    assert found.class_limit == pytest.approx(pattern.lost, rel=1e-3)
    assert found.proven_factor == pytest.approx(pattern.proven, rel=1e-3)
    assert found.exact.lower >= 11.27 and found.exact.wavelength is None
    assert "for these 6 units and no larger network" in found.sentence()
    document = found.as_json()
    assert {"proven_factor", "class_limit", "exact", "links", "bottleneck", "smallest_gap"} <= set(document)
    assert document["links"][0]["single"] > document["links"][0]["tolerance"]


@pytest.mark.parametrize("seed", [3, 5])
def test_members_break_where_the_literal_loop_does(seed: int) -> None:
    """The exact limit against eigenvalues of the loop written out link by link; the proof lies below it."""
    network = random_members(seed)
    gains = no_gains(network)
    scaling, limit = limits_of(network)
    exact, fresh = nominal_limits(scaling, limit)
    assert exact == fresh

    def rightmost(factor: float) -> float:
        return float(np.linalg.eigvals(literal_loop(network.scaled(Fraction(factor)), gains)[0]).real.max())

    assert limit.proven <= exact.upper
    assert rightmost(exact.lower) < 0
    if exact.upper < inf:
        assert rightmost(exact.upper) >= -1e-9
        assert exact.upper - exact.lower < 2e-3 * exact.upper
    for factor in np.linspace(1, exact.lower, 9):
        assert rightmost(float(factor)) < 0


def test_large_members_have_the_same_modes() -> None:
    network = random_members(5, 12)
    family, small = large_family(network, no_gains(network)), loop_family(network, no_gains(network))
    for factor in (0.5, 1.0, 3.0):
        sparse, dense = family.at(factor).A.toarray(), small.at(factor)
        literal = literal_loop(network.scaled(Fraction(factor)), no_gains(network))[0]
        assert sparse == pytest.approx(literal, abs=1e-12)
        root = rightmost_of_large(family.at(factor))
        whole = np.linalg.eigvals(dense.A + sum(t.J for t in dense.terms)).real.max()
        assert root is not None and root.s.real == pytest.approx(whole, abs=1e-9)


def test_links_that_weaken_in_closed_form() -> None:
    """x' = -x + m (left - x), 0 <= m <= k: 1/(1 + k) k < 1 always; own part kept at .5: max(k, .5)/1.5 = 1, k = 1.5."""
    tank = scalar_kind(1)
    network = network_of(tank, [replace(link(tank, -1, "0.5", "0.5"), weakens=True)])
    _, growing = limits_of(network)
    assert growing.capped
    scaling, kept = limits_of(network, own_parts=False)
    assert kept.lost == pytest.approx(3, rel=1e-4)
    assert kept.proven < 3 <= kept.lost
    assert scaling.folded(1.0).radius(0.1) == pytest.approx((1 / 3, 1 / 3), rel=1e-4)  # the own part is still there
    exact, _ = nominal_limits(scaling, kept)
    assert exact.upper == pytest.approx(3, rel=1e-3)
    assert "any weakening" in exact.note


def test_drift_with_alternatives_bounds_what_it_stands_for() -> None:
    swing = oscillator()
    network = network_of(swing, [replace(link(swing, at, "0.01", "0.01"), weakens=True) for at in (-1, 1)])
    scaling = Scaling(network, no_gains(network), width=1e-3)
    base = scaling.folded(1.0)
    for factor in (0.6, 1.5, 2.5):
        bound = base.drifted(max(factor, 1.0), abs(factor - 1.0))
        assert bound >= scaling.folded(factor).radius()[0]
    _, found = limits_of(network)
    assert found.covered == found.proven > 1


def test_half_lines_by_bulk_and_edge() -> None:
    """Forward .2 and back .3: 2; forward .9 and back .2: 1/1.1, though sections alone say 1/.8485 (theory (14))."""
    assert limits_of(half_line((tank_link(-1, "0.2"), tank_link(1, "0.3"))))[1].lost == pytest.approx(2, rel=2e-3)
    found = limits_of(half_line((tank_link(-1, "0.9"), tank_link(1, "0.2"))))[1]
    assert not found.nominal_proven
    assert found.proven <= 1 / 1.1 <= found.lost <= 1 / 1.1 * 1.003


def test_a_mode_at_the_edge_breaks_first() -> None:
    """The two units at the edge hear each other by .4 besides .1 of the bulk: they break before the bulk."""
    tank = scalar_kind(1)
    extra = tuple(
        EdgeLink(replace(tank_link(at, "0.4"), name="radio"), to, "tank", "tank") for to, at in ((0, 1), (1, -1))
    )
    network = half_line((tank_link(-1, "0.1"), tank_link(1, "0.1")), Edge("first", (), extra))
    network = replace(network, kinds=(tank,))
    scaling, limit = limits_of(network)
    exact, _ = nominal_limits(scaling, limit)
    links = 0.1 * (np.eye(60, k=1) + np.eye(60, k=-1))
    links[0, 1] += 0.4
    links[1, 0] += 0.4
    expected = 1 / np.linalg.eigvals(links).real.max()
    assert exact.lower <= expected <= exact.upper * (1 + 1e-3)
    assert exact.about == "a mode at the first edge"
    assert not exact.upper_certified and "no proof" in exact.note
    assert limit.proven <= exact.upper * (1 + 1e-3)


def test_an_edge_in_a_field_is_looked_at_along_the_edge() -> None:
    links = tuple(replace(tank_link(0, "0.05"), at=at) for at in ((1, 0), (-1, 0), (0, 1), (0, -1)))
    extra = tuple(
        EdgeLink(replace(tank_link(0, "0.8"), at=(at, 0), name="radio"), to, "tank", "tank")
        for to, at in ((0, 1), (1, -1))
    )
    network = replace(half_line(links, Edge("first", (), extra)), dimension=2)
    scaling, limit = limits_of(network)
    exact, _ = nominal_limits(scaling, limit, 1e-2)
    line = 0.05 * (np.eye(30, k=1) + np.eye(30, k=-1)) + 0.1 * np.eye(30)
    line[0, 1] += 0.8
    line[1, 0] += 0.8
    assert exact.upper == pytest.approx(1 / np.linalg.eigvals(line).real.max(), rel=2e-2)
    assert limit.proven <= exact.upper * (1 + 1e-2)


@pytest.mark.parametrize("dimension", [2, pytest.param(3, marks=pytest.mark.long)])
def test_fields_break_where_all_units_are_alike(dimension: int) -> None:
    """x' = -x + k sum of all neighbours: 1/(2 d k) for the class and for the declared network."""
    tank = scalar_kind(1)
    steps = [tuple(s if n == axis else 0 for n in range(dimension)) for axis in range(dimension) for s in (-1, 1)]
    network = replace(network_of(tank, [replace(link(tank, 0, "0.05"), at=at) for at in steps]), dimension=dimension)
    scaling, limit = limits_of(network)
    exact, _ = nominal_limits(scaling, limit, 1e-2)
    expected = 1 / (2 * dimension * 0.05)
    assert limit.proven <= expected <= limit.lost * (1 + 1e-9)
    assert exact.lower <= expected <= exact.upper
    assert len(exact.theta) == dimension and exact.wavelength == inf  # type: ignore[arg-type]


def test_the_wave_that_breaks_a_field_is_found() -> None:
    """-k times the neighbours along the first direction, +k along the second: theta = (pi, 0) breaks at 1/(4 k)."""
    tank = scalar_kind(1)
    signed = (((1, 0), "-0.1"), ((-1, 0), "-0.1"), ((0, 1), "0.1"), ((0, -1), "0.1"))
    links = [replace(link(tank, 0, g), at=at) for at, g in signed]
    network = replace(network_of(tank, links), dimension=2)
    scaling, limit = limits_of(network)
    exact, _ = nominal_limits(scaling, limit, 1e-2)
    assert exact.upper == pytest.approx(2.5, rel=1e-2)
    assert np.abs(exact.theta) == pytest.approx([np.pi, 0], abs=1e-3)


def test_rules_by_a_counterexample() -> None:
    """x' = -x + .4 (at most two others): 1/.8; the regular wiring breaks there too; the words say what was tried."""
    found = margin_of(fed())
    assert found.class_limit == pytest.approx(1.25, rel=1e-3)
    assert found.exact.upper == pytest.approx(1.25, rel=2e-3)
    assert found.exact.about == "a wiring within the rules"
    assert "cannot be tried" in found.exact.note
    assert "every wiring within the rules" in found.sentence()
    (regular,) = regular_wirings(fed())
    (one,) = regular.links
    assert (one.at, float(one.strength), one.choice) == ((-1,), 0.8, "")


def test_relative_rules_fold_the_largest_intake_at_every_strength() -> None:
    """The class limit against the plan's radius at today's strength times the factor, built anew."""
    network = fed(2, "0.02", relative=True)
    _, limit = limits_of(network)
    below, above = (
        synth.gain.network_radius(network.scaled(Fraction(f)), no_gains(network)) for f in (limit.proven, limit.lost)
    )
    assert below.upper < 1 <= above.lower * (1 + 1e-6)


def test_bands_of_members_in_closed_form() -> None:
    """u1 hears u0 by k = .5: peaks 1 and 1.5; a band of 3 is half used at today's strength, all of it at k = 2."""
    tank = replace(scalar_kind(1), offers=(Signal("level", "m", Fraction(3)),))
    from tests.simulate.test_units import flat, members_of

    network = members_of((tank,), [0, 0], (flat(link(tank, 0, "0.5")),), [(1, 0, 0)])
    assert worst_use(Scaling(network, no_gains(network)), 1.0) == pytest.approx(0.5, rel=1e-4)
    found = margin_of(network)
    assert found.proven_factor == inf
    assert found.within_limits_factor == pytest.approx(4, rel=5e-3)


def test_what_arrives_counts_the_largest_of_alternatives() -> None:
    rays = rays_of(wiring_of(fed(2, "0.02", relative=True)))
    assert sorted(rays.strength.tolist()) == [0.04, 0.04] and len(set(rays.group.tolist())) == 1
    tank = scalar_kind(1)
    plain = rays_of(wiring_of(network_of(tank, [link(tank, -1, "0.1"), link(tank, 1, "-0.2")])))
    assert plain.strength.tolist() == [0.1, 0.2] and len(set(plain.group.tolist())) == 2


@pytest.mark.parametrize("seed", [0, 3, *(pytest.param(n, marks=pytest.mark.long) for n in (1, 2, 4, 5, 6, 7, 8))])
def test_nothing_is_proven_beyond_the_exact_limit(seed: int) -> None:
    """Random small networks of each description: proven <= class limit <= exact limit, up to the widths."""
    chance = random.Random(seed)
    make = (lambda: some_members(chance, 4), lambda: some_edges(chance, ("first",)), lambda: some_pattern(chance, 2))
    network = make[seed % 3]()
    network = network.scaled(Fraction(1, 8))
    scaling = Scaling(network, no_gains(network), None, bool(seed % 2), 1e-3)
    limit = coupling_limit(scaling, 1e-2)
    exact, fresh = nominal_limits(scaling, limit, 1e-2)
    assert limit.proven <= limit.lost
    assert limit.proven <= min(exact.upper, fresh.upper) * (1 + 3e-2)
    assert plan_of(network).size > 0
    if limit.proven > 1:
        radius = scaling.folded((1 + limit.proven) / 2).radius()
        assert radius[0] <= radius[1] and (radius[1] < 1 or scaling.moves_units)


def test_words_without_a_certificate_say_so(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where no certificate is made the factor stands on the enclosure, and the text does not call it checked."""
    from synth.base.errors import InputError

    def refuse(*_: object, **__: object) -> None:
        raise InputError("not offered.")

    monkeypatch.setattr("synth.margin.find.prove", refuse)
    kind = kind_of([[-1]], [[1]], [[1]])
    network = ring_of(replace(network_of(kind, [link(kind, -1, "0.5")])), 3)
    found = margin_of(network)
    assert found.certificate is None and found.proven_factor == pytest.approx(2, rel=1e-3)
    assert any("no stand-alone check" in note for note in found.notes)
    assert "radius is below 1" in found.as_text()
    with pytest.raises(InputError, match="not offered"):
        margin_of(network_of(kind, [link(kind, -1, "0.5")]))


def test_a_link_of_members_on_no_loop_changes_nothing() -> None:
    """By kinds there is a loop, by units there is none: a chain of three, of any strength."""
    from tests.simulate.test_units import flat, members_of

    tank = scalar_kind(1)
    chain = members_of((tank,), [0] * 3, (flat(link(tank, 0, 7)),), [(1, 0, 0), (2, 1, 0)])
    assert Scaling(chain, no_gains(chain)).unaffected
    assert not Scaling(ring_of(replace(network_of(tank, [link(tank, -1, 1)])), 3), no_gains(chain)).unaffected


def test_edge_units_take_part() -> None:
    """A lead of its own kind at the edge and its follower hear each other, so strongly that they break first."""
    lead = scalar_kind(1, "lead")
    edge = Edge("first", (EdgeUnit("front", "lead", 0, "tank"),), (
        EdgeLink(Link("hear", "tank", "level", (1,), "lead", "inflow", Fraction("0.9")), 0, "tank", "tank"),
        EdgeLink(Link("tell", "lead", "level", (-1,), "tank", "inflow", Fraction("0.9")), 1, "tank", "tank"),
    ))  # fmt: skip
    network = half_line((tank_link(-1, "0.05"), tank_link(1, "0.05")), edge, kinds=(lead,))
    _, limit = limits_of(network)
    links = 0.05 * (np.eye(40, k=1) + np.eye(40, k=-1))
    links[0, 1] += 0.9  # the pattern's own link from the follower is there as well: a lead can take what a tank takes
    links[1, 0] += 0.9
    assert limit.lost == pytest.approx(1 / np.linalg.eigvals(links).real.max(), rel=3e-3)

"""The plan of every description against the definition, loop by loop over units (all networks invented)."""

from __future__ import annotations

import itertools
import random
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain.descriptions import across, plan_of, section_wiring, shortest_string, string_wiring
from synth.gain.plan import Plan, UnitSpec, plan_of_units
from synth.network.layout import Edge, EdgeLink, EdgeUnit
from synth.network.model import Link, Network
from tests.gain.literal import (
    Literal,
    kind_of,
    literal_line,
    literal_members,
    literal_rules,
    peak_number,
    peaks_of,
    some_edges,
    some_members,
    some_pattern,
    some_rules,
)

ALPHA = 0.3


def image_of(plan: Plan, s: dict[tuple[str, str], float], alpha: float = ALPHA) -> dict[tuple[str, str], float]:
    point = np.array([s[outlet] for outlet in plan.outlets])
    return dict(zip(plan.outlets, plan.operator(peaks_of(plan), alpha)(point).tolist(), strict=True))


def assert_same(plan: Plan, literal: Literal, seed: int) -> None:
    s = literal.sizes(random.Random(seed))
    assert set(plan.outlets) == set(s)
    found = image_of(plan, s)
    wanted = {outlet: literal.row(*outlet, s, ALPHA) for outlet in plan.outlets}
    assert found == pytest.approx(wanted, rel=1e-12)


@pytest.mark.parametrize("seed", range(12))
def test_members_are_the_definition(seed: int) -> None:
    network = some_members(random.Random(seed), 7)
    plan = plan_of(network)
    assert_same(plan, literal_members(network), seed)
    assert plan.names == network.members.names
    for number, spec in enumerate(plan.specs):
        for name in plan.units_of(number):
            own = literal_members(network).own(name)
            assert {(t, k): g for t, k, g in spec.own} == {key: g for key, g in own.items() if g}


@pytest.mark.parametrize("seed", range(12))
def test_a_pattern_is_its_ring_at_equal_sizes(seed: int) -> None:
    """Theory (9), and for rings literally: what a unit of a ring hears, offsets and all, is the quotient's row."""
    network = some_pattern(random.Random(seed))
    plan, ring = plan_of(network), literal_line(network, 7, ring=True)
    assert len(plan.specs) == len(network.kinds)
    chance = random.Random(seed)
    cell = {outlet: chance.uniform(0.1, 2) for outlet in plan.outlets}
    s = {(f"{kind} {c}", offer): value for (kind, offer), value in cell.items() for c in range(7)}
    found = image_of(plan, cell)
    for kind, offer in plan.outlets:
        assert found[kind, offer] == pytest.approx(ring.row(f"{kind} 3", offer, s, ALPHA), rel=1e-12)


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("relative", [False, True])
def test_rules_are_the_definition(seed: int, relative: bool) -> None:
    network = some_rules(random.Random(seed), relative)
    assert_same(plan_of(network), literal_rules(network), seed)


@pytest.mark.parametrize("seed", range(12))
def test_a_finite_line_is_the_definition(seed: int) -> None:
    network = some_edges(random.Random(seed), ("first", "last"))
    line = across(network)
    for cells in (shortest_string(line), shortest_string(line) + 2):
        plan, literal = plan_of_units(string_wiring(line, cells)), literal_line(network, cells)
        assert_same(plan, literal, seed)
    with pytest.raises(InputError, match=f"at least {shortest_string(line)} cells"):
        string_wiring(line, shortest_string(line) - 1)


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("side", ["first", "last"])
def test_a_section_is_the_line_away_from_the_cut(seed: int, side: str) -> None:
    """Rows farther from the cut than the longest link are those of a long line; rows near it hear less."""
    network = some_edges(random.Random(seed), (side,))
    line = across(network)
    plan, literal = plan_of_units(section_wiring(line, line.edges[0], 9)), literal_line(network, 15)
    there = {
        (name if side == "first" else _counted(name, 15), offer) for name, offer in literal.sizes(random.Random(0))
    }
    s = {outlet: random.Random(str(outlet)).uniform(0.1, 2) for outlet in there}
    literal_s = {(name, offer): s[name if side == "first" else _counted(name, 15), offer] for name, offer in
                 literal.sizes(random.Random(0))}  # fmt: skip
    found = image_of(plan, s)
    for name, offer in literal_s:
        here = name if side == "first" else _counted(name, 15)
        if (here, offer) not in found:
            continue
        wanted = literal.row(name, offer, literal_s, ALPHA)
        assert found[here, offer] <= wanted * (1 + 1e-12)
        place = abs(int(here.split()[-1])) if here[0] == "k" else 0
        if place < 7:
            assert found[here, offer] == pytest.approx(wanted, rel=1e-12)


def _counted(name: str, cells: int) -> str:
    """'kind 3' of a line counted from its first edge, as it is called from its last."""
    head, place = name.split()
    return f"{head} {int(place) + 1 - cells}" if head[0] == "k" else name


def test_the_plan_of_an_edge_pattern_stands_beside_itself() -> None:
    network = some_edges(random.Random(5), ("first", "last"))
    plan = plan_of(network, cells=6)
    line = across(network)
    alone = [plan_of(replace(network, edges=(), cell=None, kinds=network.cell_kinds, description="pattern"))]
    alone += [plan_of_units(section_wiring(line, edge, 6)) for edge in line.edges]
    assert plan.size == sum(part.size for part in alone)
    assert plan.specs[: len(alone[0].specs)] == alone[0].specs
    assert set(plan.specs) == {spec for part in alone for spec in part.specs}
    chance = np.random.default_rng(3)
    s = chance.uniform(0.1, 2, plan.size)
    pieces = np.split(s, np.cumsum([part.size for part in alone])[:-1])
    wanted = [part.operator(peaks_of(part), ALPHA)(piece) for part, piece in zip(alone, pieces, strict=True)]
    np.testing.assert_allclose(plan.operator(peaks_of(plan), ALPHA)(s), np.concatenate(wanted), rtol=1e-13)
    assert len(set(plan.outlets)) == plan.size and ("first lead (first edge)", "out0") in plan.outlets


def test_edges_of_a_field_are_summed_along_the_edge() -> None:
    """A half plane with a wall along its edge, against a wide literal strip: equal sizes along the edge stay equal."""
    tile, wall = kind_of("tile"), kind_of("wall")

    def link(source: str, to: str, at: tuple[int, int], g: str, own: str = "0") -> Link:
        return Link("tie", source, "out0", at, to, "in0", Fraction(g), Fraction(own))

    steps = {(-1, 0): "0.2", (1, 0): "0.3", (0, 1): "0.15", (1, -1): "0.1"}
    near = EdgeLink(link("wall", "tile", (-2, 3), "0.4"), 2, "tile", "tile")
    edge = Edge("first", (EdgeUnit("quay", "wall", 0, "tile"),), (near,), axis=0)
    network = Network(
        "Invented shore", (tile, wall), tuple(link("tile", "tile", at, g, g) for at, g in steps.items()), dimension=2,
        description="edge pattern", edges=(edge,), cell=("tile",),
    )  # fmt: skip
    line = across(network)
    plan = plan_of_units(section_wiring(line, line.edges[0], 6))
    size = [1.0, 0.7, 1.3, 0.4, 0.9, 0.6]
    found = plan.operator(peaks_of(plan))(size)
    total = {at: float(g) for at, g in steps.items()}
    for place in range(5):
        own = sum(Fraction(g) for at, g in steps.items() if place + at[0] >= 0)
        p = peak_number("wall" if place == 0 else "tile", {(0, 0): own}, 0, 0)
        heard = sum(g * size[place + at[0]] for at, g in total.items() if place + at[0] >= 0)
        heard += 0.4 * size[0] if place == 2 else 0
        assert found[place] == pytest.approx(p * heard, rel=1e-12)


def test_units_are_told_apart_by_what_is_folded_in() -> None:
    """Equal totals are one specification, whichever links they come from; zero totals count as nothing folded."""
    tank = kind_of("tank")

    def link(own: str) -> Link:
        return Link("tie", "tank", "out0", (), "tank", "in0", Fraction(1), Fraction(own))

    links = (link("0.5"), link("0.2"), link("0.3"), link("-0.5"))
    from synth.network.layout import Members

    arrays = ([0] * 4, [0, 1, 1, 2, 2, 3], [1, 0, 2, 0, 1, 0], [0, 1, 2, 0, 3, 1])
    members = Members(tuple("abcd"), *(np.array(a, dtype=np.int32) for a in arrays), ((0,), (1,), (2,), (3,)), ())
    plan = plan_of(Network("Invented", (tank,), links, dimension=0, description="members", members=members))
    half, fifth = Fraction(1, 2), Fraction(1, 5)
    assert plan.specs == (UnitSpec(0, ((0, 0, half),)), UnitSpec(0), UnitSpec(0, ((0, 0, fifth),)))
    assert plan.unit_spec.tolist() == [0, 0, 1, 2]
    assert plan.units_of(0) == ("a", "b")


def test_alternatives_that_cannot_win_are_left_out() -> None:
    """In a pattern of one kind the unit's own value is as large as the neighbour's: R2 costs nothing there."""
    weak = Link("tie", "k", "out0", (-1,), "k", "in0", Fraction(1, 2), Fraction(1, 2), weakens=True)
    network = Network("Invented", (kind_of("k"),), (weak,))
    plan = plan_of(network)
    assert (plan.row.size, plan.choice.tolist(), plan.own.tolist()) == (1, [-1], [False])
    stronger = replace(weak, own_strength=Fraction(3, 4))
    plan = plan_of(replace(network, links=(stronger,)))
    assert plan.choice.tolist() == [plan.choice[0]] * 2 and plan.choice[0] >= 0
    # At a rate the late neighbour's value may overtake: both alternatives must stay.
    late = plan_of(replace(network, links=(replace(stronger, delay=Fraction(2)),)))
    assert late.operator(np.ones(1), 0.0)([1.0]) == pytest.approx([0.75])
    assert late.operator(np.ones(1), 0.5)([1.0]) == pytest.approx([0.5 * np.e])


def test_terms_of_fixed_links_keep_their_order() -> None:
    network = some_pattern(random.Random(3))
    fixed = tuple(replace(link, weakens=False) for link in network.links)
    plan = plan_of(replace(network, links=fixed))
    wanted = [(n, k) for n, link in enumerate(fixed) for k in range(len(network.kind(link.kind).offers))]
    assert list(zip(plan.link.tolist(), plan.row_offer[plan.row].tolist(), strict=True)) == wanted
    assert [plan.modulus(t) for t in range(plan.row.size)] == [plan.moduli[m] for m in plan.modulus_of.tolist()]


def test_every_wiring_lies_below_the_rules_and_one_attains_them() -> None:
    """Theory (13): absolute links are tight over the enumerated wirings of two units per kind; relative ones lie below.

    Each unit receives at most ``most`` links per rule from admitted sources; own parts follow the number received.
    """
    for seed in range(6):
        for relative in (False, True):
            network = some_rules(random.Random(seed), relative)
            plan = plan_of(network)
            bound = plan.operator(_degree_peaks(plan)).radius(1e-9)
            radii = [_frozen_radius(network, wiring) for wiring in _wirings(network)]
            assert max(radii) <= bound.upper * (1 + 1e-9)
            if not relative:
                assert max(radii) == pytest.approx(bound.lower, rel=1e-7)


def _damped(own: float) -> float:
    """The peak gain of x' = -(1 + own) x + v."""
    return 1 / (1 + own)


def _degree_peaks(plan: Plan) -> np.ndarray:
    found = []
    for spec in plan.specs:
        found += [_damped(float(sum(g for _, _, g in spec.own)))] * len(plan.kinds[spec.kind].takes)
    return np.array(found)


def _wirings(network: Network) -> list[dict[str, tuple[int, tuple[str, ...]]]]:
    """One choice per rule: how many links every unit of the receiving kind gets, and from which kinds."""
    options = []
    for rule in network.rules:
        sources = [link.source_kind for link in network.links if link.choice == rule.name]
        counts = [
            chosen for n in range(rule.most + 1) for chosen in itertools.combinations_with_replacement(sources, n)
        ]
        options.append([(rule.name, chosen) for chosen in counts])
    return [{name: (len(chosen), chosen) for name, chosen in combo} for combo in itertools.product(*options)]


def _frozen_radius(network: Network, wiring: dict[str, tuple[int, tuple[str, ...]]]) -> float:
    """Radius of the wiring in which all units of a kind are wired alike, as a matrix over the kinds."""
    names = [kind.name for kind in network.kinds]
    matrix = np.zeros((len(names), len(names)))
    own = dict.fromkeys(names, 0.0)
    for rule in network.rules:
        link = next(k for k in network.links if k.choice == rule.name)
        own[rule.kind] += wiring[rule.name][0] * float(link.own_strength / rule.most)
    for rule in network.rules:
        strength = {k.source_kind: float(k.strength / rule.most) for k in network.links if k.choice == rule.name}
        for source in wiring[rule.name][1]:
            matrix[names.index(rule.kind), names.index(source)] += _damped(own[rule.kind]) * strength[source]
    return float(np.abs(np.linalg.eigvals(matrix)).max())


def test_refusals() -> None:
    network = some_pattern(random.Random(1))
    plan = plan_of(network)
    with pytest.raises(InputError, match="peak gains are needed"):
        plan.operator(np.ones(1 + int(plan.first_peak[-1])))
    with pytest.raises(InputError, match="offers no 'out0' of its own"):
        silent = replace(network, kinds=(replace(kind_of("k"), offers=()), kind_of("l")), links=(
            Link("tie", "l", "out0", (0,), "k", "in0", Fraction(1), Fraction(1)),))  # fmt: skip
        plan_of(silent)
    members = some_members(random.Random(1), 4)
    swapped = replace(members.members, kind=1 - members.members.kind)
    with pytest.raises(InputError, match="does not fit the unit 'u"):
        plan_of(replace(members, members=swapped))
    empty = replace(network, kinds=(replace(kind_of("k"), offers=()),), links=())
    with pytest.raises(InputError, match="no unit offers a signal"):
        plan_of(empty).operator(np.ones(0))

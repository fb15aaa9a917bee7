"""The radius of every description with guaranteed peak gains: what it is, what it covers, what is refused."""

from __future__ import annotations

import random
from dataclasses import replace
from fractions import Fraction
from math import sqrt
from pathlib import Path

import numpy as np
import pytest

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix
from synth.gain import assemble, close_network, network_radius
from synth.gain.assembly import PeakTable, assemble_plan
from synth.gain.descriptions import across, plan_of, settled_cells, string_wiring
from synth.gain.edge_sections import bulk_piece, edge_piece
from synth.gain.peak import PeakGain
from synth.gain.plan import Plan, plan_of_units
from synth.network import read
from synth.network.gains import Gains, gain_set
from synth.network.layout import Edge, EdgeLink, EdgeUnit, Members
from synth.network.model import Kind, Link, Network
from tests.build import convoy, convoy_gains, hauler, scalar_kind
from tests.gain.literal import literal_line, peaks_of, some_edges

EXAMPLES = Path(__file__).parents[1] / "network" / "examples"


def tank_link(at: int, strength: str, own: str = "0", **more: object) -> Link:
    return Link("tie", "tank", "level", (at,), "tank", "inflow", Fraction(strength), Fraction(own), **more)


def no_gains(*kinds: Kind) -> Gains:
    return Gains(tuple(gain_set(kind, ExactMatrix.zeros(len(kind.inputs), len(kind.sensors))) for kind in kinds))


def half_line(links: tuple[Link, ...], *sides: Edge, kinds: tuple[Kind, ...] = ()) -> Network:
    tank = scalar_kind(1)
    edges = sides or (Edge("first", ()),)
    return Network(
        "Invented line", (tank, *kinds), links, description="edge pattern", edges=edges, cell=("tank",), dimension=1
    )


def ring_of(network: Network, units: int) -> Network:
    """A ring of a pattern of one kind, as members."""
    links = tuple(replace(link, at=()) for link in network.links)
    to = np.tile(np.arange(units), len(links))
    source = np.concatenate([(np.arange(units) + link.at[0]) % units for link in network.links])
    form = np.repeat(np.arange(len(links)), units)
    arrays = (np.array(a, dtype=np.int32) for a in ([0] * units, to, source, form))
    members = Members(
        tuple(f"unit {i}" for i in range(units)), *arrays, tuple((i,) for i in range(len(links))), (("hauler", {}),)
    )
    return replace(network, links=links, dimension=0, description="members", members=members)


@pytest.mark.parametrize("alpha", [Fraction(0), Fraction("0.2")])
def test_members_of_a_ring_have_the_radius_of_the_pattern(alpha: Fraction) -> None:
    """Theory (9): one specification, one peak gain, and the same radius for every length of the ring."""
    network = convoy(offsets=(-1, 2))
    pattern = network_radius(network, convoy_gains(), alpha)
    for units in (3, 8):
        ring = network_radius(ring_of(network, units), convoy_gains(), alpha)
        assert len(ring.assembly.plan.specs) == 1
        assert ring.upper == pytest.approx(pattern.upper, rel=1e-8)
        assert ring.lower == pytest.approx(pattern.lower, rel=1e-8)
        assert ring.covers == f"these {units} units with their links, and no larger network" and ring.size == units
    assert pattern.size is None and "any number of units" in pattern.covers and pattern.reached


def test_a_network_and_its_closed_units_give_the_same_assembly() -> None:
    network, gains = convoy(offsets=(-1, 2)), convoy_gains()
    one, two = assemble(network, gains, Fraction("0.1")), assemble(
        close_network(network, gains), network.links, Fraction("0.1")
    )  # fmt: skip
    assert one.entries == two.entries and one.outlets == two.outlets
    np.testing.assert_array_equal(one.unit_peaks[0].upper, two.unit_peaks[0].upper)


def test_members_close_once_per_specification() -> None:
    """A hauler that follows nobody, and haulers that follow one or two: three closed units for a thousand members."""
    link = convoy(delay=0).links[0]
    units = 1000
    to = [*range(1, units), *range(2, units, 2)]
    source = [*range(units - 1), *range(0, units - 2, 2)]
    arrays = (np.array(a, dtype=np.int32) for a in ([0] * units, to, source, [0] * len(to)))
    members = Members(tuple(f"h{i}" for i in range(units)), *arrays, ((0,),), (("hauler", {}),))
    network = convoy(links=(replace(link, at=()),), dimension=0, description="members", members=members)
    table = PeakTable(convoy_gains())
    found = assemble_plan(plan_of(network), table)
    assert [spec.own for spec in found.plan.specs] == [(), ((0, 0, Fraction(1, 2)),), ((0, 0, Fraction(1)),)]
    assert found.plan.unit_spec.tolist()[:5] == [0, 1, 2, 1, 2]
    assert found.radius().upper == 0  # nobody is heard by those in front: no loop, and nothing about longer strings
    assert table.of(found.plan)[1] is found.unit_peaks[1]
    wider = assemble(close_network(convoy(delay=0), convoy_gains()), convoy(delay=0).links)
    assert found.unit_peaks[1].upper == pytest.approx(wider.unit_peaks[0].upper)


def test_a_link_that_weakens_counts_the_unit_itself() -> None:
    """Two kinds that hear each other weakly (R2): row a is p max(|g| s_b, |g| s_a), so the unit's own size counts.

    a: x' = -(1 + 1/2) x + ..., p = 2/3; b: y' = -4 y + s_a: radius max(1/3, sqrt(1/2 * 2/3 * 1/4)) = 1/3."""
    a, b = scalar_kind(1, "a"), scalar_kind(4, "b")
    half, one = Fraction(1, 2), Fraction(1)
    weak = Link("weak", "b", "level", (0,), "a", "inflow", half, half, weakens=True)
    back = Link("back", "a", "level", (0,), "b", "inflow", one)
    network = Network("Invented", (a, b), (weak, back))
    found = network_radius(network, no_gains(a, b))
    assert found.upper == pytest.approx(1 / 3, rel=1e-5) and found.lower == pytest.approx(1 / 3, rel=1e-5)
    fixed = network_radius(replace(network, links=(replace(weak, weakens=False), back)), no_gains(a, b))
    assert fixed.upper == pytest.approx(sqrt(1 / 12), rel=1e-5)
    # With a rate only what is late grows.
    late = replace(network, links=(replace(weak, delay=Fraction(2)), back))
    p_a, p_b, growth = 1 / (1.5 - 0.5), 1 / (4 - 0.5), np.exp(0.5 * 2)
    wanted = max(p_a / 2, sqrt(p_a / 2 * growth * p_b))
    assert network_radius(late, no_gains(a, b), Fraction(1, 2)).upper == pytest.approx(wanted, rel=1e-5)


def test_rules_say_what_they_cover() -> None:
    network = read(EXAMPLES / "rules.yaml")
    gains = Gains(tuple(gain_set(kind, _pushing(kind)) for kind in network.kinds))
    found = network_radius(network, gains)
    assert found.covers == "every wiring within the rules, with any number of units, rewired at any time"
    assert found.size is None and 0 < found.lower <= found.upper
    assert {unit for unit, _ in found.outlets} == {kind.name for kind in network.kinds if kind.offers}


def _pushing(kind: Kind) -> ExactMatrix:
    """Every actuator against the states it moves first: enough to make the examples' units stable, or an error."""
    rows = [[-1 if any(kind.B[s, a] for s in range(len(kind.states))) else 0 for _ in kind.sensors] for a in
            range(len(kind.inputs))]  # fmt: skip
    return ExactMatrix.of(rows, (len(kind.inputs), len(kind.sensors)))


def test_one_more_link_than_the_rule_allows_is_more() -> None:
    kinds = {"a": {"states": {"x": "m"}, "inputs": {"push": "m/s"}, "takes": {"inflow": "m/s"},
                   "offers": {"level": "x"}, "sensors": ["x"], "equations": {"x'": "push + inflow"}}}  # fmt: skip
    rule = {"to": "a.inflow", "from": ["a.level"], "strength": "0.5 1/s"}
    radii = []
    for most in (1, 2, 3):
        network = read({"synth": 1, "kinds": kinds, "network": {"rules": {"follow": {**rule, "most": most}}}})
        radii.append(network_radius(network, Gains((gain_set(network.kinds[0], ExactMatrix.of([[-1]])),))).upper)
    assert radii == pytest.approx([0.5, 1.0, 1.5], rel=1e-5)


def test_an_edge_that_amplifies_holds_the_radius() -> None:
    """Bulk .3 + .3; two special units at the edge that push each other by .8 and 1.25: radius 1, in the window."""
    strong = replace(scalar_kind(1, "strong"), offers=(replace(scalar_kind(1).offers[0], name="force"),))
    pair = (
        EdgeLink(Link("pair", "strong", "force", (1,), "strong", "inflow", Fraction("0.8")), 0, "tank", "tank"),
        EdgeLink(Link("pair", "strong", "force", (-1,), "strong", "inflow", Fraction("1.25")), 1, "tank", "tank"),
    )
    units = (EdgeUnit("left", "strong", 0, "tank"), EdgeUnit("right", "strong", 1, "tank"))
    network = half_line((tank_link(-1, "0.3"), tank_link(1, "0.3")), Edge("first", units, pair), kinds=(strong,))
    found = network_radius(network, no_gains(*network.kinds))
    assert found.leading.name == "first edge" and found.reached
    assert found.upper == pytest.approx(1, rel=1e-5) and found.lower == pytest.approx(1, rel=1e-5)
    assert found.covers == "the half line with this first edge"
    assert {"tank", "left"} <= set(found.peaks())
    assert ("left", "force") in found.leading.assembly.outlets


def test_an_edge_mode_that_reaches_into_the_line() -> None:
    """Forward .4, back .2, and a first unit that holds itself up by a: the mode of the edge is the root of
    t = a + .2 r, r = (t - sqrt(t^2 - .32))/.4, where it exceeds the bulk's .6 (r < 1), from a = .4 on."""
    for a, name in (("0.7", "first edge"), ("0.3", "pattern")):
        near = EdgeLink(tank_link(0, a), 0, "tank", "tank")
        network = half_line((tank_link(-1, "0.4"), tank_link(1, "0.2")), Edge("first", (), (near,)))
        found = network_radius(network, no_gains(network.kinds[0]), peak_width=1e-12)
        t = 0.6
        if name == "first edge":
            for _ in range(200):
                t = float(a) + 0.2 * (t - sqrt(t * t - 0.32)) / 0.4
        assert found.reached
        assert found.lower <= t * (1 + 1e-9) and found.upper >= t * (1 - 1e-9)
        assert found.upper - found.lower <= 3e-9 * found.upper
        if name == "first edge":
            assert found.leading.name == name


class Numbers(PeakTable):
    """Peak gains that are invented per specification, so that no loop need be closed."""

    def __init__(self) -> None:
        self.alpha = Fraction(0)

    def of(self, plan: Plan) -> tuple[PeakGain, ...]:
        numbers = np.split(peaks_of(plan), plan.first_peak[1:-1])
        kinds = [plan.kinds[spec.kind] for spec in plan.specs]
        tables = [p.reshape(len(k.offers), len(k.takes)) for p, k in zip(numbers, kinds, strict=True)]
        return tuple(PeakGain(table.copy(), table.copy(), 0.0) for table in tables)


@pytest.mark.parametrize("seed", [*range(16), 71])
def test_one_point_holds_for_every_long_line(seed: int) -> None:
    """Unit by unit: on a line longer than both windows, the windows' points with the bulk's between them have
    no quotient above the bounds; and the bounds are as narrow as asked. (In 71 small entries need careful pivots.)"""
    network = some_edges(random.Random(seed), ("first", "last"))
    line, table = across(network), Numbers()
    bulk = bulk_piece(line, table, 1e-6)
    first, last = (edge_piece(line, edge, bulk, table, 1e-6) for edge in line.edges)
    upper = max(first.upper, last.upper)
    assert first.reached and last.reached and bulk.upper <= upper
    cells = first.window + last.window + 9
    literal = literal_line(network, cells)
    heard = dict(zip(bulk.assembly.outlets, bulk.point.tolist(), strict=True))
    s = {(name, offer): heard.get((name.split()[0], offer), 0.0) for name, offer in literal.sizes(random.Random(0))}
    for piece, shift in ((first, 0), (last, cells - 1)):
        for (name, offer), value in zip(piece.assembly.outlets, piece.point.tolist(), strict=True):
            head, place = name.split()
            if place == "lead":
                s[name, offer] = value
            elif abs(int(place)) < piece.window:
                s[f"{head} {int(place) + shift}", offer] = value
    assert min(s.values()) > 0
    near = first.window + 3
    for name, offer in s:
        place = name.split()[1]
        if place == "lead" or int(place) < near or int(place) > cells - 1 - last.window - 3:
            assert literal.row(name, offer, s) <= upper * s[name, offer] * (1 + 1e-9)


@pytest.mark.parametrize("seed", range(6))
def test_the_claim_for_all_lengths_holds_for_each(seed: int) -> None:
    network = some_edges(random.Random(seed), ("first", "last"))
    gains = Gains(tuple(gain_set(kind, ExactMatrix.of([[-3]])) for kind in network.kinds))
    found = network_radius(network, gains, width=1e-6)
    line, table = across(network), PeakTable(gains)
    assert found.least_cells is not None and f"every line of {found.least_cells} or more cells" in found.covers
    longest = sum(piece.window for piece in found.pieces[1:3]) + 10
    for cells in (found.least_cells, found.least_cells + 3, longest):
        whole = assemble_plan(plan_of_units(string_wiring(line, cells)), table)
        assert set(whole.outlets) == set(literal_line(network, cells).sizes(random.Random(0)))
        assert whole.lower.radius(1e-6).lower <= found.upper
    assert found.pieces[0].lower <= found.lower <= found.upper
    assert found.pieces[1].window >= settled_cells(line, line.edges[0])


def test_both_edges_and_the_lengths_they_cover() -> None:
    """A string with two ends: the windows cover long lines, the short ones are enclosed one by one."""
    lead = replace(scalar_kind(2, "lead"))
    first = Edge("first", (EdgeUnit("head", "lead", 0, "tank"),))
    last = Edge("last", (EdgeUnit("tail", "lead", 0, "tank"),))
    network = half_line((tank_link(-1, "0.4"), tank_link(1, "0.2")), first, last, kinds=(lead,))
    found = network_radius(network, no_gains(*network.kinds))
    assert found.least_cells == 2 and found.covers == (
        "every line of 2 or more cells between these two edges, and both half lines"
    )
    assert found.upper == pytest.approx(0.6, rel=1e-5) and found.leading.name in ("pattern", "first edge", "last edge")
    names = [piece.name for piece in found.pieces]
    assert names[:4] == ["pattern", "first edge", "last edge", "line of 2 cells"]
    windows = found.pieces[1].window + found.pieces[2].window
    assert names[-1] == f"line of {windows + 1} cells"


def test_fields_with_an_edge(tmp_path: Path) -> None:
    """The invented shore: a half plane with a quay along it; offsets along the shore are summed."""
    network = read(EXAMPLES / "shore.yaml")
    gains = Gains(tuple(gain_set(kind, ExactMatrix.of([["-0.5", "-1"]])) for kind in network.kinds))
    found = network_radius(network, gains)
    assert found.covers == "the half plane with this edge" and found.reached
    pattern = replace(network, kinds=network.cell_kinds, description="pattern", edges=(), cell=None)
    assert found.lower >= network_radius(pattern, gains).lower


def test_what_is_refused() -> None:
    network, gains = convoy(), convoy_gains()
    for width in (0, 1, "wide"):
        with pytest.raises(InputError, match="width must lie between 0 and 1"):
            network_radius(network, gains, width=width)
    with pytest.raises(InputError, match="no gains for the kind 'hauler'"):
        network_radius(network, Gains(()))
    with pytest.raises(InputError, match="alpha must not be negative"):
        network_radius(network, gains, alpha=-1)
    with pytest.raises(UnstableLoop, match=r"^kind 'hauler'"):
        network_radius(network, gains, alpha=50)
    ring = ring_of(network, 3)
    with pytest.raises(UnstableLoop, match=r"^unit unit 0 and 2 more, kind 'hauler'"):
        network_radius(ring, gains, alpha=50)
    through = replace(hauler(), F=ExactMatrix.of([[1]]))
    with pytest.raises(InputError, match=r"into hauler\.ahead reads the offer 'place', which has feed-through"):
        network_radius(replace(network, kinds=(through,)), gains)
    with pytest.raises(InputError, match="given by members"):
        close_network(ring, gains)

"""The limit that is blamed is the true one: relaxing it reaches the target, relaxing any other does not."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction
from itertools import pairwise

import pytest

from synth.local import Design, design
from synth.local.relaxing import relaxations
from synth.network.model import Goal, Link, Network
from tests.build import scalar_kind
from tests.local.test_shared import two_carts
from tests.local.unreachable import unreachable


def slow_tanks() -> Network:
    """x' = -x + u + v + w between neighbours, no mode faster than 2 1/s: the smallest radius is 1/bound."""
    kind = scalar_kind()
    kind = replace(kind, inputs=(replace(kind.inputs[0], limit=Fraction(9)),))
    links = tuple(Link("pipe", "tank", "level", (at,), "tank", "inflow", Fraction(1, 2)) for at in (-1, 1))
    return Network("Invented slow tanks", (kind,), links, Goal(Fraction("0.3"), Fraction("0.1"), Fraction(2)))


def with_needed(network: Network, found: Design) -> Network:
    """The network with the blamed limit at the value that is said to do."""
    blocking = found.blocking
    assert blocking is not None and blocking.needed is not None
    relaxation = next(
        r for r in relaxations(network) if (r.cause, r.kind, r.name) == (blocking.cause, blocking.kind, blocking.name)
    )
    assert relaxation.value is not None
    shrinks = blocking.cause in ("slowest", "link strength")
    return relaxation.apply(relaxation.value / blocking.needed if shrinks else blocking.needed / relaxation.value)


def test_a_bound_on_modes_is_blamed_and_its_value_solved_for() -> None:
    network = slow_tanks()
    found = design(network, starts=2)
    blocking = found.blocking
    assert not found.reached and blocking is not None and blocking.cause == "fastest"
    assert blocking.needed is not None and 1 / 0.3 <= blocking.needed <= 1.06 / 0.3
    assert {(t.cause, t.reaches) for t in blocking.tried} == {
        ("fastest", True), ("slowest", False), ("actuator limit", False), ("link strength", True),
    }  # fmt: skip
    assert design(with_needed(network, found), starts=2).reached
    curve = next(c for c in blocking.curves if c.cause == "fastest")
    assert curve.unit == "1/s" and len(curve.points) >= 4
    for value, radius, kept in curve.points:  # the exact curve is 1/value
        assert kept and radius == pytest.approx(1 / value, rel=2e-3)
    assert all(a[0] < b[0] for a, b in pairwise(curve.points))
    data = json.loads(json.dumps(found.as_json(), allow_nan=False))["blocking"]
    assert data["curves"][0]["points"][0]["value"] == 2.0 and data["tried"][0]["cause"] == "fastest"
    assert "is what blocks" in blocking.sentence and "Smallest radius met over" in found.explain()


@pytest.mark.long
@pytest.mark.parametrize("name", list(unreachable()))
def test_the_named_cause_is_the_true_one(name: str) -> None:
    network = unreachable()[name]
    found = design(network)
    assert not found.reached and found.blocking is not None
    assert found.blocking.cause == name
    for tried in found.blocking.tried:
        if tried.cause == name:
            assert tried.reaches
        elif tried.cause != "link strength":  # weaker links help nearly every network; they are named last
            assert not tried.reaches
    if found.blocking.needed is not None:
        assert design(with_needed(network, found)).reached
    if name == "gain bound":
        assert "The gain bounds of cart.push are what blocks" in found.blocking.sentence
    if name == "link strength":
        assert "weaker links do" in found.blocking.sentence


def test_what_a_group_shares_is_relaxed_for_all_of_it() -> None:
    network = two_carts()
    goal = replace(
        network.goal,
        uses={name: {"push": ("place",)} for name in ("light", "heavy")},
        gain_bounds={name: {"push": {"place": Fraction(2)}} for name in ("light", "heavy")},
    )
    found = {
        (r.cause, r.kind): r for r in relaxations(replace(network, goal=goal)) if r.cause in ("structure", "gain bound")
    }
    assert set(found) == {("structure", "light"), ("gain bound", "light")}
    wider = found["structure", "light"].apply(2.0).goal.uses
    assert wider == {name: {"push": ("place", "speed")} for name in ("light", "heavy")}
    bounds = found["gain bound", "light"].apply(3.0).goal.gain_bounds
    assert {bounds[name]["push"]["place"] for name in bounds} == {Fraction(6)}
    assert "it leaves out speed" in found["structure", "light"].words

"""Rules: how many links of a class a unit may receive, whatever the wiring (all data invented)."""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import pytest

from synth.base.errors import InputError
from synth.network import Network, obstruction, read
from synth.network.layout import Rule
from synth.network.model import Link
from synth.network.obstructions import examine


def zone(sensors: list[str], gap: bool = False) -> dict[str, Any]:
    return {
        "states": {"x": "m"},
        "inputs": {"push": "m/s"},
        "takes": {"inflow": "m/s", **({"gap": "m"} if gap else {})},
        "offers": {"level": "x"},
        "sensors": sensors,
        "equations": {"x'": "push + inflow"},
    }


FOLLOW: dict[str, Any] = {"to": "a.inflow", "from": ["a.level"], "most": 2, "strength": "0.5 1/s"}


def ruled(sensors: list[str] | None = None, **rule: Any) -> Network:
    kinds = {"a": zone(sensors or ["x"]), "b": zone(["x"])}
    return read({"synth": 1, "kinds": kinds, "network": {"rules": {"follow": {**FOLLOW, **rule}}}})


def test_an_absolute_rule() -> None:
    network = ruled()
    assert (network.description, network.units, network.dimension) == ("rules", None, 0)
    assert network.rules == (Rule("follow", "a", "inflow", 2),)
    assert network.links == (Link("follow", "a", "level", (), "a", "inflow", Fraction(1), choice="follow"),)
    assert network.classes() == ("follow",)


def test_sources_are_alternatives() -> None:
    first, second = ruled(**{"from": ["a.level", "b.level"]}).links
    assert (first.strength, second.strength) == (1, 1)
    assert first.choice == second.choice == "follow"
    assert ruled(**{"from": "b.level"}).links[0].source_kind == "b"


def test_a_relative_rule_folds_the_largest_intake_once() -> None:
    """Theory (13): fold most * g, row most * g * max(s_c, s_self); a second source adds no second own part."""
    first, second = ruled(relative=True, **{"from": ["a.level", "b.level"]}).links
    assert (first.strength, first.own_strength, first.weakens) == (1, 1, True)
    assert (second.strength, second.own_strength) == (1, 0)
    (link,) = ruled(relative=True, strength="0.3..0.5 1/s").links
    assert (link.strength, link.own_strength, link.weakens) == (1, 1, True)


def test_a_late_difference_is_not_folded() -> None:
    first, itself = ruled(relative=True, late="difference", delay="1 s").links
    assert (first.strength, first.own_strength, itself.strength, itself.own_part) == (1, 0, -1, True)
    assert (first.choice, itself.choice) == ("follow", "")


def test_order_means_nothing() -> None:
    kinds = {"a": zone(["x"]), "b": zone(["x"])}
    rules = {"follow": FOLLOW, "other": {**FOLLOW, "from": ["b.level", "a.level"], "most": 1}}
    one = read({"synth": 1, "kinds": kinds, "network": {"rules": rules}})
    turned = {"other": {**FOLLOW, "from": ["a.level", "b.level"], "most": 1}, "follow": FOLLOW}
    two = read({"synth": 1, "kinds": dict(reversed(kinds.items())), "network": {"rules": turned}})
    assert one.hash == two.hash and one.same_model(two)
    assert (
        one.hash
        != read({"synth": 1, "kinds": kinds, "network": {"rules": {**rules, "follow": {**FOLLOW, "most": 3}}}}).hash
    )


def test_obstructions_of_rules() -> None:
    """One wiring with an unseen mode is enough: gaps alone are never enough, own positions always are."""
    assert obstruction(ruled()) is None
    kinds = {"a": zone(["gap"], True)}
    ranging = {"to": "a.gap", "from": ["a.level"], "most": 2, "strength": 1, "relative": True}
    network = read({"synth": 1, "kinds": kinds, "network": {"rules": {"follow": FOLLOW, "ranging": ranging}}})
    found = obstruction(network)
    assert found is not None and found.theta == () and dict(found.direction) == {"a.x": 1} and found.s == 0.0
    assert "in a wiring that the rules allow" in found.advice and "forbid such wirings" in found.advice
    # Absolute intake of a unit that hears only the difference of what it may receive: unseen only if heard oppositely.
    kinds = {"a": {**zone(["sum"], True), "sensors": {"sum": "x + gap"}}}
    network = read({"synth": 1, "kinds": kinds, "network": {"rules": {"l": {**ranging, "relative": False, "most": 1}}}})
    found = obstruction(network)
    assert found is not None and "moving oppositely" in found.advice
    assert "wirings that obey the rules" in examine(network).tested


@pytest.mark.parametrize(
    ("rule", "sentence"),
    [
        ({"most": 0}, "from 1 to 10000"),
        ({"most": None}, "the key 'most' is missing"),
        ({"from": []}, "name at least one signal"),
        ({"from": ["a.level", "a.level"]}, "stands twice"),
        ({"from": ["c.level"]}, "unknown kind 'c'"),
        ({"to": "a.level"}, "takes no signal 'level'"),
        ({"relative": True, "delay": "1 s"}, "must say what arrives late"),
        ({"strength": "0.5 1/s^2"}, "has the unit 1/s^2"),
        ({"at": -1}, "unknown key 'at'"),
    ],
)
def test_what_is_refused(rule: dict[str, Any], sentence: str) -> None:
    with pytest.raises(InputError) as caught:
        ruled(**rule)
    assert sentence in str(caught.value)


def test_one_description_at_a_time() -> None:
    kinds = {"a": zone(["x"]), "b": zone(["x"])}
    with pytest.raises(InputError, match="pattern and rules are different descriptions"):
        read({"synth": 1, "kinds": kinds, "network": {"pattern": {"links": []}, "rules": {"follow": FOLLOW}}})
    with pytest.raises(InputError, match="rules describe every wiring"):
        ruled().to_networkx()
    different = {"a": {**zone(["x"]), "offers": {"level": "x", "depth": "x"}}}
    with pytest.raises(InputError, match="all its sources must have one name"):
        read(
            {"synth": 1, "kinds": different, "network": {"rules": {
                "follow": {**FOLLOW, "from": ["a.level", "a.depth"], "relative": True}}}}
        )  # fmt: skip

"""Uncertain strengths, feed-through from commands, unused parameters, hints for units (all data invented)."""

from __future__ import annotations

import warnings
from fractions import Fraction
from typing import Any

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.base.units import UnitError, parse_quantity, parse_unit
from synth.gain.closed import close_network
from synth.network import Network, describe, kind_to_statespace, read
from synth.network.gains import Gains, gain_set
from synth.network.phases import balance

TANK: dict[str, Any] = {
    "parameters": {"leak": "0.1 1/s +- 10%", "area": "2 m2 +- 20%", "pipe": "0.5 m2/s"},
    "states": {"level": "m"},
    "inputs": {"pump": "m/s"},
    "takes": {"inflow": "m/s"},
    "offers": {"depth": "level"},
    "sensors": ["level"],
    "equations": {"level'": "pump + inflow - leak*level"},
}


def tanks(strength: str, kind: dict[str, Any] | None = None, **more: object) -> Network:
    link = {"name": "pipe", "from": "tank.depth", "at": -1, "to": "tank.inflow", "strength": strength, **more}
    return read({"synth": 1, "kinds": {"tank": kind or TANK}, "network": {"pattern": {"links": [link]}}})


def written(network: Network) -> list[tuple[str, Fraction, Fraction]]:
    return [(link.source_kind, link.strength, link.own_strength) for link in network.links if link.sort == "link"]


# --- strengths with tolerances --------------------------------------------------------------------------------------


def test_a_tolerance_makes_the_strength_an_interval() -> None:
    """pipe/area with area in [1.6, 2.4] m2 is in [5/24, 5/16] 1/s, as if the interval had been written."""
    absolute = tanks("to.pipe/to.area")
    assert written(absolute) == [("tank", Fraction(5, 16), Fraction(0))]
    said = tanks("to.pipe/to.area", relative=True)
    by_hand = tanks("5/24..5/16 1/s", relative=True)
    assert said.links == by_hand.links and said.hash == by_hand.hash
    assert len([link for link in said.links if link.own_part]) == 1


@given(st.fractions(Fraction(9, 100), Fraction(11, 100)), st.fractions(Fraction(8, 5), Fraction(12, 5)))
@settings(max_examples=30, deadline=None)
def test_every_member_is_in_the_interval(leak: Fraction, area: Fraction) -> None:
    """Law: the interval holds the strength for all parameters in their tolerances (own arithmetic, written out)."""
    (link,) = [link for link in UNCERTAIN.links if link.sort == "link"]
    assert abs(leak * area**2 - leak) <= link.strength


UNCERTAIN = tanks("to.leak*from.area**2*(1 1/m4) - to.leak")


@pytest.mark.parametrize(
    ("strength", "said"),
    [
        ("1/(to.area - from.area)*0.1 m2/s", "the divisor may be zero"),
        ("to.pipe/to.area*1 m", "the term 'to.pipe/to.area*1 m' has the unit m/s, but 1/s"),
        ("to.ara*1 1/(m2 s)", "unknown parameter 'to.ara'"),
    ],
)
def test_a_strength_that_is_not_bounded_is_refused(strength: str, said: str) -> None:
    with pytest.raises(InputError) as caught:
        tanks(strength)
    assert said in str(caught.value)


# --- feed-through from commands -------------------------------------------------------------------------------------

PUMP: dict[str, Any] = {
    "states": {"level": "m"},
    "inputs": {"pump": "m/s"},
    "takes": {"inflow": "m/s"},
    "offers": {"depth": "m", "push": "m/s"},
    "sensors": {"level": "m"},
    "matrices": {
        "A": [["-0.1"]], "B": [[1]], "D": [[1]], "H": [[1], [0]], "Fu": [[0], [1]], "C": [[1]], "N": [[0]],
    },
}  # fmt: skip


def pumps(**matrices: object) -> Network:
    kind = {**PUMP, "matrices": {**PUMP["matrices"], **matrices}}
    link = {"name": "feed", "from": "tank.push", "at": -1, "to": "tank.inflow", "strength": "0.3"}
    return read({"synth": 1, "kinds": {"tank": kind}, "network": {"pattern": {"links": [link]}}})


def test_an_offer_may_pass_a_command_on() -> None:
    """u = K y with K = -2 makes the offered command -2 x: checked by hand in the closed unit."""
    network = pumps()
    kind = network.kinds[0]
    assert kind.Fu is not None and kind.Fu == ExactMatrix.of([[0], [1]])
    closed = close_network(network, Gains((gain_set(kind, ExactMatrix.of([[-2]])),)))[0]
    assert ExactMatrix.of([["-2.1"]]) == closed.A and ExactMatrix.of([[1], [-2]]) == closed.H
    assert pumps(Fu=[[0], [0]]).kinds[0].Fu is None
    assert network.hash != pumps(Fu=[[0], [0]]).hash == pumps(Fu=None).hash
    np.testing.assert_array_equal(np.asarray(kind_to_statespace(kind).D)[:2, 0], [0, 1])


def test_a_relative_link_cannot_subtract_a_command() -> None:
    link = {"name": "feed", "from": "tank.push", "at": -1, "to": "tank.inflow", "strength": "0.3", "relative": True}
    with pytest.raises(InputError, match="contains a taken signal, a command or a disturbance"):
        read({"synth": 1, "kinds": {"tank": PUMP}, "network": {"pattern": {"links": [link]}}})


def test_a_plant_object_passes_a_command_on() -> None:
    plant = control.ss(
        [[-0.1]], [[1, 1]], [[1], [0]], [[0, 0], [1, 0]],
        states=["level"], inputs=["pump", "inflow"], outputs=["depth", "push"],
    )  # fmt: skip
    kind = {**PUMP, "plant": plant, "sensors": ["level"]}
    del kind["matrices"]
    link = {"name": "feed", "from": "tank.push", "at": -1, "to": "tank.inflow", "strength": "0.3"}
    network = read({"synth": 1, "kinds": {"tank": kind}, "network": {"pattern": {"links": [link]}}})
    assert network.hash == pumps().hash


# --- notes, hints, damaged numbers ----------------------------------------------------------------------------------


def test_an_unused_parameter_is_remarked_and_not_refused() -> None:
    network = tanks("0.2 1/s")
    assert [note.split(" is ")[0] for note in network.notes] == [
        "The parameter area of tank", "The parameter pipe of tank"
    ]  # fmt: skip
    assert "Notes" in describe(network).as_text() and describe(network).as_json()["notes"] == list(network.notes)
    assert [note.split(" is ")[0] for note in tanks("to.pipe*0.4 1/m2").notes] == ["The parameter area of tank"]
    used = tanks("from.pipe/to.area")
    assert used.notes == () and "Notes" not in describe(used).as_text()
    assert network == read_again(network) and network.notes


def read_again(network: Network) -> Network:
    """The same network from a kind without the parameters that nothing uses: notes do not tell networks apart."""
    kind = {**TANK, "parameters": {"leak": "0.1 1/s +- 10%"}}
    again = tanks("0.2 1/s", kind)
    assert not again.notes
    return again


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("n", "(did you mean 'N'?)"),
        ("Y", "unknown unit 'Y';"),
        ("KG", "(did you mean 'kg'?)"),
        ("barr", "(did you mean 'bar'?)"),
    ],
)
def test_hints_for_units(name: str, said: str) -> None:
    with pytest.raises(UnitError) as caught:
        parse_unit(name)
    assert said in str(caught.value)


def test_a_text_that_is_no_quantity_is_quoted_without_blanks() -> None:
    with pytest.raises(UnitError, match=r"^'some' is not a quantity"):
        parse_quantity(" some ")


def test_entries_far_apart_are_balanced_in_silence() -> None:
    """Found by the fuzzer: scipy casts a scaling beyond 2^63 to a whole number and warns."""
    size = np.array([[1e-45, 1e45, 1e-68, 1e-36], [0, 0, 1e3, 1e-42], [0, 1e-16, 1e24, 0], [1e55, 0, 0, 0]])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        d = balance(size)
        assert np.all(balance(np.array([[0, 1e300], [1e-300, 0]])) == 1)
    scaled = size * d / d[:, None]
    assert d.max() > 2.0**63 and np.all(np.log2(d) == np.round(np.log2(d)))
    assert scaled.max() < size.max() / 1e10

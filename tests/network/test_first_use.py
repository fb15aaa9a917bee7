"""What people tripped over who described their first networks: numbers that were not theirs, sentences about mistakes
that were not made, places that were not the mistake's. All data invented."""

from __future__ import annotations

import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest

from synth.base.errors import InputError
from synth.network import describe, read
from synth.network.starter import write_starter

HAULER: dict[str, Any] = {
    "parameters": {"k": "900..1100 N/m", "mass": "200 kg +- 10%"},
    "states": {"x": {"in": "m", "band": 2}, "v": "m/s"},
    "inputs": {"force": "m/s^2"},
    "takes": {"beam": "m/s^2"},
    "offers": ["x", "v"],
    "sensors": ["x", "v"],
    "equations": {"x'": "v", "v'": "force + beam"},
}
BEAM: dict[str, Any] = {"name": "beam", "from": "truck.x", "to": "truck.beam", "relative": True}
LEAD: dict[str, Any] = {**HAULER, "takes": {"call": "m/s^2"}, "equations": {"x'": "v", "v'": "force + call"}}


def problem(*links: dict[str, Any], edge: Any = None, **kinds: Any) -> dict[str, Any]:
    network: dict[str, Any] = {"pattern": {"links": list(links)}}
    if edge is not None:
        network["edge"] = edge
    return {"synth": 1, "kinds": {"truck": HAULER, **kinds}, "network": network}


def sentences(source: dict[str, Any]) -> list[str]:
    with pytest.raises(InputError) as caught:
        read(source)
    return [str(found) for found in caught.value.problems]


def test_every_interval_leaves_its_own_width_over() -> None:
    """Two relative links with intervals enter one taken signal; each is shown with its own half-width."""
    network = read(
        problem(
            {**BEAM, "at": -1, "strength": "to.k/to.mass/10"},
            {**BEAM, "at": 1, "strength": "0.4..0.5 1/s^2"},
        )
    )
    before, behind = (
        line for line in describe(network).as_text().replace("\n      ", " ").splitlines() if "->" in line
    )
    half = (1100 / 180 - 900 / 220) / 20
    assert f"counts {half:.6g} more" in before and "counts 0.05 more" in behind


def test_strengths_of_different_quantities_are_not_added() -> None:
    speed = {**BEAM, "from": "truck.v", "at": -1, "strength": "0.05 1/s"}
    described = describe(read(problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, speed)))
    assert described.intake == {
        "truck.beam (m/s^2 per m)": Fraction(1, 5),
        "truck.beam (m/s^2 per m/s)": Fraction(1, 20),
    }
    lines = [line.split() for line in described.as_text().splitlines() if line.startswith("  truck.beam")]
    assert lines == [["truck.beam", "0.2", "m/s^2", "per", "m"], ["truck.beam", "0.05", "m/s^2", "per", "m/s"]]


def test_one_quantity_in_two_units_is_added_in_the_first() -> None:
    """0.2 per m and 0.03 per m, the second offered in cm by the unit at the edge: 0.2 + 3e-4 * 100."""
    lead = {**LEAD, "states": {"x": "cm", "v": "cm/s"}}
    call = {"name": "call", "from": "first.x", "to": "truck@1.beam", "strength": "0.03 1/s^2"}
    edge = {"side": "first", "units": {"first": {"at": 0, "kind": "lead"}}, "links": [call]}
    lead["equations"] = {"x'": "v", "v'": "force + call"}
    described = describe(read(problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, edge=edge, lead=lead)))
    assert described.intake["truck.beam"] == Fraction(23, 100)
    assert "truck.beam               0.23 m/s^2 per m\n" in described.as_text()


def test_links_of_the_pattern_at_an_edge_unit_are_told() -> None:
    """The unit at the edge offers x like the pattern, so the pattern's link from it is there; it takes none."""
    edge = {"side": "first", "units": {"first": {"at": 0, "kind": "lead"}}}
    link = {**BEAM, "at": -1, "strength": "0.2 1/s^2"}
    assert "of the pattern's links it gives to beam\n" in describe(read(problem(link, edge=edge, lead=LEAD))).as_text()
    deaf = {**LEAD, "offers": {"spot": "x"}}
    assert "takes part in no link of the pattern" in describe(read(problem(link, edge=edge, lead=deaf))).as_text()
    alike = {"side": "first", "units": {"first": {"at": 0, "kind": "truck"}}}
    both = describe(read(problem(link, {**link, "at": 1}, edge=alike))).as_text()
    assert "of the pattern's links it takes from beam and gives to beam\n" in both


@pytest.mark.parametrize(
    ("term", "low", "high"),
    [
        ("sin(x)", math.sin(0.3) / 0.3, 1.0),
        ("tanh(3*x)", math.tanh(0.9) / 0.3, 3.0),
        ("x/(1 + x**2)", 1 / 1.09, 1.0),
        ("x*abs(x)", 0.0, 0.3),
    ],
)
def test_chords_of_a_curve_that_bends_both_ways_are_sharp(term: str, low: float, high: float) -> None:
    """By hand: the chords from zero of these terms are monotone on either side, so the ends of the band decide."""
    kind = {
        "parameters": {"r": "1 1/s"}, "states": {"x": {"in": "1", "band": 0.3}}, "inputs": {"u": "1/s"},
        "takes": {"t": "1/s"}, "offers": ["x"], "sensors": ["x"], "equations": {"x'": f"r*({term}) + u + t"},
    }  # fmt: skip
    links = [{"name": "a", "from": "k.x", "at": -1, "to": "k.t", "strength": "0.1 1/s"}]
    found = read({"synth": 1, "kinds": {"k": kind}, "network": {"pattern": {"links": links}}}).kinds[0]
    centre, half = float(found.A.rows[0][0]), float(found.inner[0].strength)
    assert centre - half <= low + 1e-12 and centre + half >= high - 1e-12
    assert half <= (high - low) / 2 * 1.004 + 1e-12


def test_a_misspelt_kinds_is_one_mistake() -> None:
    source = problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"})
    source["kind"] = source.pop("kinds")
    (found,) = sentences(source)
    assert "unknown key 'kind' (did you mean 'kinds'?)" in found


def test_a_kind_with_a_mistake_still_stands_in_the_cell_and_at_the_edge() -> None:
    broken = {**HAULER, "equations": {"x'": "v", "v'": "force + bean"}}
    edge = {
        "side": "first",
        "units": {"first": {"at": 0, "kind": "truck"}},
        "links": [{"name": "far", "from": "first.x", "to": "truck@2.beam", "strength": "0.1 1/s^2"}],
    }
    source = problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, edge=edge)
    source["kinds"]["truck"] = broken
    (found,) = sentences(source)
    assert "unknown name 'bean'" in found


@pytest.mark.parametrize(
    ("unit", "said"),
    [
        ({"at": 0, "kind": "leed"}, "unknown kind 'leed' (did you mean 'lead'?)"),
        ({"at": 0, "kind": "lead", "instead_of": "lead"}, "'lead' is no place of the cell; say whose place"),
        ({"kind": "lead"}, "the key 'at' is missing"),
    ],
)
def test_a_link_of_a_mistaken_edge_unit_is_no_second_mistake(unit: dict[str, Any], said: str) -> None:
    links = [{"name": "far", "from": "first.x", "to": "truck@2.beam", "strength": "0.1 1/s^2"}]
    edge = {"side": "first", "units": {"first": unit}, "links": links}
    (found,) = sentences(problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, edge=edge, lead=LEAD))
    assert said in found
    edge = {"side": "left", "units": {"first": {"at": 0, "kind": "lead"}}, "links": links}
    (found,) = sentences(problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, edge=edge, lead=LEAD))
    assert "'left' is not accepted" in found


@pytest.mark.parametrize(
    ("key", "value", "said"),
    [
        ("equations", {"x'": "v", "v'": "force + (beam - r v)"}, "nothing stands between 'r' and 'v'; write r*v"),
        ("equations", {"x'": "v", "v'": "force + beam*sin x"}, "nothing stands between 'sin' and 'x'; write sin(x)"),
        ("equations", {"x'": "v", "v'": "beam*sqrt(x)"}, "whole power; multiply by parameters under the root"),
        ("sensors", "x, v", "a list or mapping of names is expected"),
        ("parameters", {"81 m": None}, "a number has a decimal point and no comma"),
    ],
)
def test_the_sentence_says_what_to_do(key: str, value: Any, said: str) -> None:
    kinds = {"truck": {**HAULER, key: value}}
    found = sentences({**problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}), "kinds": kinds})
    assert said in found[0]


@pytest.mark.parametrize(
    ("strength", "said"),
    [
        ("k/mass/10", "'k' is a parameter, and a link has two ends; write from.k or to.k."),
        ("to.k/to.mas", "unknown parameter 'to.mas' (did you mean 'to.mass'?)"),
    ],
)
def test_parameters_in_a_strength_belong_to_an_end(strength: str, said: str) -> None:
    (found,) = sentences(problem({**BEAM, "at": -1, "strength": strength}))
    assert said in found


def test_a_unit_is_no_parameter() -> None:
    """A kind may have a parameter called like a unit; a quantity stays a quantity."""
    kind = {**HAULER, "parameters": {"s": "2 s", "m": "3 m"}}
    source = {**problem({**BEAM, "at": -1, "strength": "0.2 m/(m s^2)"}), "kinds": {"truck": kind}}
    assert read(source).links[0].strength == Fraction(1, 5)


def test_the_tolerance_at_fault_is_named_alone() -> None:
    kind = {**HAULER, "parameters": {"k": "900..1100 N/m", "mass": "200 kg +- 110%"}}
    kind["equations"] = {"x'": "v", "v'": "force + beam - k*x/mass"}
    found = sentences({**problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}), "kinds": {"truck": kind}})
    assert "the divisor may be zero; narrow the tolerance of mass." in found[0]


def test_a_relative_link_to_itself_at_an_edge_names_a_key_that_is_there() -> None:
    links = [{"name": "own", "from": "first.x", "to": "first.call", "strength": "0.1 1/s^2", "relative": True}]
    edge = {"side": "first", "units": {"first": {"at": 0, "kind": "lead"}}, "links": links}
    (found,) = sentences(problem({**BEAM, "at": -1, "strength": "0.2 1/s^2"}, edge=edge, lead=LEAD))
    assert "links[0].from: a relative link" in found and "name another unit" in found


def test_the_commands_to_go_on_with_can_be_pasted(tmp_path: Path) -> None:
    said = write_starter(tmp_path / "my basins")
    assert f"synth check '{tmp_path}/my basins.yaml'\n" in said and "--out 'out/my basins'\n" in said

"""Links: dimensions, the cases R1, R2 and R3, intervals and expressions of strengths (all data invented)."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import lambertw

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain.closed import close_network
from synth.network import Network, read
from synth.network.gains import Gains, gain_set
from synth.network.model import Link
from tests.network.files import convoy_text, read_text, refusal

TANK: dict[str, Any] = {
    "states": {"x": "m"},
    "inputs": {"push": "m/s"},
    "takes": {"inflow": "m/s"},
    "offers": {"level": "x"},
    "sensors": ["x"],
    "equations": {"x'": "inflow + push - leak*x"},
    "parameters": {"leak": "0.1 1/s"},
}


def tanks(dimension: int = 1, **link: object) -> Network:
    """x' = -0.1 x + u + inflow with one link, by default relative, from the unit before."""
    at: object = -1 if dimension == 1 else [-1] + [0] * (dimension - 1)
    line = {"name": "pipe", "from": "tank.level", "at": at, "to": "tank.inflow", "strength": "1 1/s", **link}
    pattern = {"dimension": dimension, "links": [line]}
    return read({"synth": 1, "kinds": {"tank": TANK}, "network": {"pattern": pattern}})


def entries(network: Network) -> dict[tuple[str, tuple[int, ...]], Fraction]:
    """p |g| per link of scalar units without feedback: p = 1/a for x' = -a x + v, z = x."""
    zero = ExactMatrix.zeros(1, 1)
    closed = close_network(network, Gains(tuple(gain_set(kind, zero) for kind in network.kinds)))[0]
    return {(link.name, link.at): abs(link.strength) / -closed.A[0, 0] for link in network.links}


def test_trap_1_a_late_difference_is_not_folded() -> None:
    """x_i' = -.1 x_i + (x_{i-1} - x_i)(t-d): two links of strength 1 with p = 10, so the radius is 20, not 0.909."""
    network = tanks(relative=True, late="difference", delay="0.8 s")
    assert network.links == (
        Link("pipe", "tank", "level", (-1,), "tank", "inflow", Fraction(1), delay=Fraction(4, 5)),
        Link("pipe", "tank", "level", (0,), "tank", "inflow", Fraction(-1), delay=Fraction(4, 5), own_part=True),
    )
    assert network.classes() == ("pipe",)
    assert sum(entries(network).values()) == 20
    # The growth that the folded answer would hide: s + .1 = (e^{i theta} - 1) e^{-s d} by Lambert's function.
    c = np.exp(1j * np.linspace(0, np.pi, 401)) - 1
    s = -0.1 + lambertw(0.8 * np.exp(0.08) * c) / 0.8
    assert s.real.max() == pytest.approx(0.157, abs=5e-4)


def test_r1_is_the_default_for_constant_strengths() -> None:
    network = tanks(relative=True, late="neighbour", delay="0.8 s")
    assert network.links == (
        Link("pipe", "tank", "level", (-1,), "tank", "inflow", Fraction(1), Fraction(1), Fraction(4, 5)),
    )
    assert sum(entries(network).values()) == Fraction(10, 11)


@pytest.mark.parametrize(
    "said",
    [
        {"strength": "1 1/s", "weakens": True},
        {"strength": "0..1 1/s"},
        {"strength": "0 1/s .. 1 1/s"},
        {"strength": "0.5 1/s +- 100%"},
        {"strength": "0.3..1 1/s", "weakens": True},
    ],
)
def test_r2_folds_the_largest_strength(said: dict[str, object]) -> None:
    network = tanks(relative=True, late="neighbour", delay="0.8 s", **said)
    assert network.links == (
        Link("pipe", "tank", "level", (-1,), "tank", "inflow", Fraction(1), Fraction(1), Fraction(4, 5), weakens=True),
    )


def test_r2_of_negative_strength() -> None:
    (link,) = tanks(relative=True, strength="-1..0 1/s").links
    assert (link.strength, link.own_strength, link.weakens) == (-1, -1, True)


def test_r1_with_an_interval() -> None:
    """Centre folded; the neighbour's part at the far end, the own part's width as a self-link without delay."""
    network = tanks(relative=True, strength="0.3..0.5 1/s", late="neighbour", delay="0.1 s")
    first, itself = network.links
    assert (first.strength, first.own_strength, first.delay) == (Fraction(1, 2), Fraction(2, 5), Fraction(1, 10))
    assert (itself.strength, itself.at, itself.delay, itself.own_part) == (Fraction(-1, 10), (0,), 0, True)
    assert not first.weakens and not itself.relative
    assert network.links == tanks(relative=True, strength="0.4 1/s +- 25%", late="neighbour", delay="0.1 s").links


halves = st.fractions(0, 2, max_denominator=20)
numbers = st.fractions(-2, 2, max_denominator=20)


@settings(max_examples=200, deadline=None)
@given(numbers, halves, st.fractions(0, 1, max_denominator=20), numbers, numbers, st.booleans())
def test_every_strength_of_the_interval_is_inside_the_parts(
    low: Fraction, width: Fraction, where: Fraction, z_j: Fraction, z_i: Fraction, weakens: bool
) -> None:
    """Law: v = g (z_j - z_i) plus the folded own part is within the links' bound, for every g of the interval."""
    high = low + width
    if weakens and low < 0 < high:
        return
    network = tanks(relative=True, strength=f"{low} 1/s .. {high} 1/s", weakens=weakens)
    links = network.links
    ends = (min(low, Fraction(0)), max(high, Fraction(0))) if weakens else (low, high)
    g = ends[0] + where * (ends[1] - ends[0])
    rest = g * (z_j - z_i) + links[0].own_strength * z_i  # what is left after folding
    if links[0].weakens:
        bound = max(abs(links[0].strength * z_j), abs(links[0].own_strength * z_i))
    else:
        bound = abs(links[0].strength * z_j) + sum(abs(link.strength * z_i) for link in links[1:])
    assert abs(rest) <= bound
    literal = links[0].strength * z_j - links[0].own_strength * z_i + sum(link.strength * z_i for link in links[1:])
    assert literal == (high if abs(high) >= abs(low) else low) * (z_j - z_i)  # the member of largest strength


def test_absolute_intervals_count_by_their_largest_value() -> None:
    assert [link.strength for link in tanks(strength="-0.7..0.5 1/s").links] == [Fraction(-7, 10)]
    assert tanks(strength="0.5 1/s +- 0.1 1/s").links[0].strength == Fraction(3, 5)


def test_own_parts_scale_only_if_asked() -> None:
    for said in ({"late": "difference", "delay": "1 s"}, {"strength": "0.8..1 1/s"}):
        network = tanks(relative=True, **said)
        twice = network.scaled(Fraction(2))
        assert [link.strength for link in twice.links] == [2 * link.strength for link in network.links]
        apart = network.scaled(Fraction(2), own_parts=False)
        assert apart.links[0].strength == 2 and apart.links[1] == network.links[1]


def test_strengths_from_parameters_of_both_ends() -> None:
    """A spring between masses: (to.k/to.mass), and an orifice from.area*0.2 1/s, exactly."""
    kind = {**TANK, "parameters": {"leak": "0.1 1/s", "k": "7 N/m", "mass": "3 kg", "area": "2", "fuzzy": "1 +- 10%"}}

    def strength(text: str, unit: str = "m/s^2") -> Fraction:
        own = {
            **kind,
            "takes": {"inflow": "m/s", "pull": unit},
            "states": {"x": "m", "y": unit},
            "equations": {"x'": "push + inflow - leak*x", "y'": "leak*(pull - y)"},
        }
        line = {"name": "l", "from": "tank.level", "at": -1, "to": "tank.pull", "strength": text}
        return read({"synth": 1, "kinds": {"tank": own}, "network": {"pattern": {"links": [line]}}}).links[0].strength

    assert strength("to.k/to.mass") == Fraction(7, 3)
    assert strength("-(from.k + to.k)/(2*to.mass)") == Fraction(-7, 3)
    assert strength("from.area*0.2 1/s", "m/s") == Fraction(2, 5)
    assert strength("(0.2 1/s)*from.area", "m/s") == Fraction(2, 5)
    assert strength("from.area*from.area/to.area*0.5 1/min", "m/s") == Fraction(1, 60)
    assert strength("sqrt(from.area*8)*(1/3 km/(m s))", "km/s") == Fraction(4, 3) / 1000 * 1000
    for text, said in [
        ("to.k/to.mas", "unknown parameter 'to.mas'"),
        ("to.k", "kg/s^2"),
        ("to.k/to_mass", "unknown name 'to_mass'"),
        ("to.k/(to.mass - 3*from.area/2*1 kg)", ""),
        ("__import__('os').system('x') + to.k", ""),
        ("to.k/to.mass..2", "unit"),
        ("to.k.real/to.mass", ""),
        ("to.k/3 kg", "put the quantity in parentheses"),
    ]:
        with pytest.raises(InputError) as caught:
            strength(text)
        assert said in str(caught.value), (text, str(caught.value))


def test_places_in_expressions(tmp_path: Path) -> None:
    """The message points at the wrong name inside the strength."""
    message = refusal(convoy_text(("strength: 0.5 1/s^2", "strength: to.lag*from.lga/to.lag")), tmp_path)
    column = next(line for line in (convoy_text().splitlines()) if "strength:" in line).index("strength:") + 11
    assert f"problem.yaml:24:{column + 7}: " in message and "unknown parameter 'from.lga'" in message


@pytest.mark.parametrize(
    ("said", "sentence"),
    [
        ({"weakens": True}, "an absolute link may weaken anyway"),
        ({"relative": True, "delay": "1 s"}, "must say what arrives late"),
        ({"relative": True, "weakens": True, "delay": "1 s"}, "must say what arrives late"),
        ({"relative": True, "late": "both"}, "accepted are 'neighbour'"),
        ({"late": "difference"}, "'late' is about relative links"),
        ({"relative": True, "weakens": True, "strength": "-1..1 1/s"}, "does not weaken towards zero"),
        ({"strength": "0.5..0.3 1/s"}, "ends below its start"),
        ({"strength": "0.3..0.5"}, "has no unit"),
        ({"strength": "0.3..0.5 1/s^2"}, "has the unit 1/s^2"),
        ({"strength": "0.3..0.4..0.5 1/s"}, "is not a range"),
        ({"strength": "0.5 1/s +- -10%"}, "zero or more"),
        ({"strength": "0.5 1/s +- x"}, "is not a quantity"),
        ({"at": [0, -1]}, "one whole number is expected here (dimension 1)"),
        ({"at": []}, "one whole number"),
    ],
)
def test_what_is_refused(said: dict[str, object], sentence: str) -> None:
    with pytest.raises(InputError, match=r".") as caught:
        tanks(**said)
    assert sentence in str(caught.value)


def test_a_strength_that_may_be_negative_breaks_a_declared_sign() -> None:
    kinds = {"tank": TANK}
    line = {"name": "pipe", "from": "tank.level", "at": -1, "to": "tank.inflow", "strength": "-0.1..0.5 1/s"}
    network = {"pattern": {"links": [line]}, "classes": {"pipe": {"sign": "positive"}}}
    with pytest.raises(InputError, match="the strength may be negative, but the class 'pipe' is declared positive"):
        read({"synth": 1, "kinds": kinds, "network": network})


@pytest.mark.parametrize("dimension", [2, 3])
def test_patterns_in_more_dimensions(dimension: int) -> None:
    network = tanks(dimension)
    assert network.dimension == dimension and network.links[0].at == (-1, *[0] * (dimension - 1))
    assert network.units is None and network.description == "pattern"
    graph = network.to_networkx(3)
    assert len(graph) == 3**dimension and len(graph.edges) == 2 * 3 ** (dimension - 1)
    assert len(tanks(dimension, relative=True, late="difference", delay="1 s").links[1].at) == dimension
    with pytest.raises(InputError, match=rf"{dimension} whole numbers are expected here \(dimension {dimension}\)"):
        tanks(dimension, at=-1)


def test_old_files_keep_their_hash(tmp_path: Path) -> None:
    """The document of a pattern without the new keys is what it was; the number is that of the first version."""
    network = read_text(convoy_text(), tmp_path)
    assert network.hash == "609cb45ba6cbbc04acf21475951f3524c13fdb90cc725a73ca39fa1e4b6d985a"
    document = network.model_document()
    assert set(document) == {"description", "dimension", "kinds", "links"}
    link = document["links"][0]  # type: ignore[index]
    assert set(link) == {"name", "from", "at", "to", "strength", "own_strength", "delay"}
    assert tanks(relative=True, strength="0..1 1/s").hash != tanks(relative=True, strength="1 1/s").hash


def test_order_means_nothing_to_same_model(tmp_path: Path) -> None:
    text = convoy_text(
        (
            "    links:\n",
            "    links:\n      - {name: a, from: hauler.place, at: 1, to: hauler.ahead, strength: 1 1/s^2}\n",
        )
    )
    network = read_text(text, tmp_path)
    turned = replace(network, links=network.links[::-1])
    assert network.same_model(turned) and network.hash != turned.hash
    assert not network.same_model(network.scaled(Fraction(2)))


def test_a_stage_refuses_what_it_cannot_use() -> None:
    network = tanks()
    network.refuse_beyond("design", "pattern")
    rules = replace(network, description="rules")
    with pytest.raises(
        InputError,
        match=r"^this network is given by rules; design of networks given by rules is not "
        r"offered by this version \(patterns are\)\.$",
    ):
        rules.refuse_beyond("design", "pattern")
    assert math.isfinite(float(network.links[0].strength))

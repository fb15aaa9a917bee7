"""Nonlinear terms: the sectors hold every chord, are as narrow as can be, and missing bands are said."""

from __future__ import annotations

import math
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.base.units import Unit
from synth.network import Kind, read
from synth.network import bounds as bounds_module
from synth.network.bounds import Located
from synth.network.curves import Curve, Surroundings, bound_curve
from synth.network.dynamics import compiled
from synth.network.equations import Scope, read_formula
from synth.network.formula import Formula, curved
from synth.network.intervals import Interval
from tests.network.files import convoy_text, refusal

NAMES = ("x", "y", "z")
SCOPE = Scope({}, dict.fromkeys(NAMES, Unit()), dict.fromkeys(NAMES, "state"))


def curves_of(text: str, rest: dict[str, Any], bands: dict[str, Any]) -> list[Curve]:
    """The curves of the nonlinear terms of an expression without units."""
    around = Surroundings(
        {n: Interval.of(Fraction(rest.get(n, 0))) for n in NAMES},
        {n: Fraction(bands[n]) if n in bands else None for n in NAMES}, {}, {}, {},
    )  # fmt: skip
    return [bound_curve(atom, around) for atom, _ in curved(read_formula(text, SCOPE))]


def expressions() -> st.SearchStrategy[str]:
    """Expressions of three signals that are defined wherever these are within [-3, 3]."""
    leaves = st.sampled_from(["x", "y", "z", "0.5", "2", "(x - y)", "(x + 2*z - 1)"])

    def larger(inner: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
        one = st.sampled_from(
            ["sin({})", "cos({})", "tanh({})", "abs({})", "({})**2", "({})**3", "sat({}, 1.5)", "deadzone({}, 0.5)",
             "exp(-0.1*abs({}))", "sqrt(1 + ({})**2)", "1/(1 + ({})**2)", "(1 + abs({}))**1.5"]
        )  # fmt: skip
        two = st.sampled_from(["({}) + ({})", "({}) * ({})", "min({}, {})", "max({}, {})", "({}) - ({})"])
        return st.builds(str.format, one, inner) | st.builds(str.format, two, inner, inner)

    return st.recursive(leaves, larger, max_leaves=4)


@settings(max_examples=80, deadline=None)
@given(expressions(), st.lists(st.integers(-100, 100), min_size=9, max_size=9), st.randoms())
def test_every_chord_lies_in_its_sector(text: str, values: list[int], chance: Any) -> None:
    """The law of curves: phi(rest + xi) - phi(rest) = sum m_i xi_i with every m_i in its interval."""
    rest = {n: Fraction(v, 80) for n, v in zip(NAMES, values[:3], strict=True)}
    bands = {n: Fraction(abs(v) + 1, 60) for n, v in zip(NAMES, values[3:6], strict=True)}
    most, bounds_module.MOST_CELLS = bounds_module.MOST_CELLS, 12  # the law does not depend on the subdivision
    try:
        curves = curves_of(text, rest, bands)
    finally:
        bounds_module.MOST_CELLS = most
    for curve in curves:
        phi = compiled(Formula(((curve.atom, Fraction(1)),)))
        at_rest = phi({n: float(v) for n, v in rest.items()})
        for _ in range(20):
            moved = {n: chance.choice((-1, 1, chance.uniform(-1, 1))) * float(bands[n]) for n in NAMES}
            difference = phi({n: float(rest[n]) + moved[n] for n in NAMES}) - at_rest
            allowed = 1e-9 * (1 + abs(at_rest) + abs(difference))
            for argument, slopes in zip(curve.arguments, curve.slopes, strict=True):
                xi = sum(float(c) * moved[n] for n, c in argument.line)
                assert abs(xi) <= float(argument.half) * (1 + 1e-12)
                difference -= float(slopes.middle) * xi
                allowed += float(slopes.half) * abs(xi)
            assert abs(difference) <= allowed, (text, rest, bands)


@pytest.mark.parametrize(
    ("text", "rest", "bands", "sectors"),
    [
        ("x*abs(x)", {}, {"x": 2}, [(0, 2)]),
        ("x**2", {"x": 1}, {"x": 0.5}, [(1.5, 2.5)]),
        ("x**3", {}, {"x": 2}, [(0, 4)]),
        ("sqrt(x)", {"x": 4}, {"x": 4}, [((math.sqrt(8) - 2) / 4, 0.5)]),  # the slope at 0 is infinite, no chord is
        ("sin(x)", {}, {"x": 1}, [(math.sin(1), 1)]),
        ("tanh(2*x)", {}, {"x": 3}, [(math.tanh(6) / 3, 2)]),
        ("sat(x, 1)", {}, {"x": 4}, [(0.25, 1)]),
        ("deadzone(x, 1)", {}, {"x": 4}, [(0, 0.75)]),
        ("sin(x - y)", {}, {"x": 1, "y": 1}, [(math.sin(2) / 2, 1)]),
        ("x*y", {"x": 2, "y": 3}, {"x": 0.5, "y": 1}, [(3, 3), (1.5, 2.5)]),  # one argument costs nothing
        ("(x - y)*(x - y)", {}, {"x": 1, "y": 1}, [(-2, 2)]),
        ("x**1.5", {"x": 4}, {"x": 3}, [(7 / 3, (7**1.5 - 8) / 3)]),
        ("exp(x)", {}, {"x": 1}, [(1 - math.exp(-1), math.e - 1)]),
        ("1/(1 + x)", {}, {"x": 0.5}, [(-2, -2 / 3)]),
        ("max(x, 2*x)", {}, {"x": 3}, [(1, 2)]),
        ("abs(x)", {"x": 1}, {"x": 0.5}, [(1, 1)]),
    ],
)
def test_sectors_are_the_best_ones(text: str, rest: Any, bands: Any, sectors: list[tuple[float, float]]) -> None:
    """Sectors from elementary calculus; outside them there is nothing, and hardly more is claimed."""
    (curve,) = curves_of(text, rest, bands)
    for slopes, (low, high) in zip(curve.slopes, sectors, strict=True):
        slack = 0.01 * (high - low) + 1e-12
        assert low - slack <= slopes.low <= low + 1e-12 and high - 1e-12 <= slopes.high <= high + slack


@pytest.mark.parametrize(
    ("text", "rest", "bands"),
    [("sqrt(x)", {"x": 1}, {"x": 2}), ("1/x", {"x": 1}, {"x": 1}), ("sqrt(x - y)", {"x": 3}, {"x": 2, "y": 2}),
     ("x**-1.5", {"x": 1}, {"x": 1}), ("sqrt(abs(x))", {}, {"x": 1}), ("1/sin(x)", {"x": 2}, {"x": 2})],
)  # fmt: skip
def test_terms_that_are_not_defined_in_their_band_are_refused(text: str, rest: Any, bands: Any) -> None:
    with pytest.raises(Located):
        curves_of(text, rest, bands)


def drag_file(*changes: tuple[str, str]) -> str:
    """The convoy with quadratic drag (invented), and a tyre curve on the command."""
    return convoy_text(
        ("parameters: {lag: 0.5 s}", "parameters: {lag: 0.5 s, drag: 0.02 1/m, grip: 2 m/s^2}"),
        ("speed: m/s", "speed: {in: m/s, band: 3 m/s}"),
        ("speed': drive + slope", "speed': drive + slope - drag*speed*abs(speed)"),
        ("(demand + ahead - drive)/lag", "(grip*tanh(demand/grip) + ahead - drive)/lag"),
        *changes,
    )


def read_kind_text(text: str, folder: Path) -> Kind:
    file = folder / "problem.yaml"
    file.write_text(text, encoding="utf-8")
    return read(file).kinds[0]


def test_curves_become_self_links(tmp_path: Path) -> None:
    (tmp_path / "problem.yaml").write_text(drag_file(), encoding="utf-8")
    network = read(tmp_path / "problem.yaml")
    kind = network.kinds[0]
    assert [s.name for s in kind.takes] == ["ahead", "curve of speed", "curve of drive"]
    assert [(s.name, s.unit, s.band) for s in kind.offers[1:]] == [
        ("curve of speed", "m/s", Fraction(3)), ("curve of drive", "m/s^2", Fraction("2.5")),
    ]  # fmt: skip
    inner = [link for link in network.links if link.sort == "curve"]
    assert [(k.offer, k.take, k.at, k.own_strength, k.delay) for k in inner] == [
        ("curve of speed", "curve of speed", (0,), 0, 0), ("curve of drive", "curve of drive", (0,), 0, 0),
    ]  # fmt: skip
    assert kind.inner and network.classes() == ("follow",)
    assert network.scaled(Fraction(2)).links[1:] == network.links[1:]
    assert kind.Fu is not None and kind.Fu.rows[2] == (1,) and not any(kind.Fu.rows[0] + kind.Fu.rows[1])
    # drag*speed*|speed| is in [0, 0.06] speed: middle 0.03 in A, 0.03 in the link.
    assert float(kind.A[1, 1]) == pytest.approx(-0.03, rel=2e-3)
    assert float(inner[0].strength * -kind.D[1, 1]) == pytest.approx(0.03, rel=2e-3)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.floats(-1, 1), min_size=6, max_size=6))
def test_nominal_and_self_links_enclose_the_equations(parts: list[float]) -> None:
    """x' of the equations as written is the nominal x' plus internal takes within the strength of their links."""
    kind = DRAG
    assert kind.dynamics is not None
    x, u, v, w = np.array([9, 3, 5]) * parts[:3], [2.5 * parts[3]], [parts[4]], [0.3 * parts[5]]
    truth = kind.dynamics.rate(x, u, v, w)
    nominal = kind.A.floats() @ x + kind.B.floats() @ u + kind.D.floats()[:, :1] @ v + kind.E.floats() @ w
    assert kind.Fu is not None
    offered = kind.H.floats() @ x + kind.F.floats()[:, :1] @ v + kind.Fu.floats() @ u
    room = np.zeros(3)
    for link in kind.inner:
        brought = float(link.strength) * abs(offered[kind.index("offers", link.offer)])
        room += np.abs(kind.D.floats()[:, kind.index("takes", link.take)]) * brought
    assert np.all(np.abs(truth - nominal) <= room * (1 + 1e-9) + 1e-12)
    literal = np.array([x[1], x[2] + w[0] - 0.02 * x[1] * abs(x[1]), (2 * np.tanh(u[0] / 2) + v[0] - x[2]) / 0.5])
    np.testing.assert_allclose(truth, literal, rtol=1e-13, atol=1e-13)


def _drag() -> Kind:
    import yaml

    return read(yaml.safe_load(drag_file())).kinds[0]


DRAG = _drag()


def test_dynamics_broadcast_over_units() -> None:
    assert DRAG.dynamics is not None
    x = np.random.default_rng(0).normal(size=(3, 7))
    rates = DRAG.dynamics.rate(x)
    assert rates.shape == (3, 7)
    for k in range(7):
        np.testing.assert_allclose(rates[:, k], DRAG.dynamics.rate(x[:, k]), rtol=1e-14)
    np.testing.assert_allclose(DRAG.dynamics.sensors_at(x), x)
    np.testing.assert_allclose(DRAG.dynamics.offers_at(x), x[:1])
    with pytest.raises(ValueError, match="3 values are needed"):
        DRAG.dynamics.rate([0, 0])


def test_one_term_in_two_equations_is_one_curve() -> None:
    """What leaves one tank enters the next: one nonlinear term, one self-link, two entries of D (invented numbers)."""
    kind = read({
        "synth": 1,
        "kinds": {"tanks": {
            "parameters": {"c": "2 cm^2/s", "one": "1 cm", "area": "20 cm^2"},
            "states": {"a": {"in": "cm", "band": "2 cm"}, "b": {"in": "cm", "band": "2 cm"}},
            "inputs": {"pump": "cm^3/s"},
            "sensors": ["a", "b"],
            "equations": {
                "a'": "pump/area - c*one/area*sqrt(a/one)",
                "b'": "one*c/area*sqrt(a/one) - c*one/area*sqrt(b/one)",
            },
            "operating_point": {"a": "9 cm"},
        }},
        "network": {"pattern": {"links": []}},
    }).kinds[0]  # fmt: skip
    assert [s.name for s in kind.takes] == ["curve of a", "curve of b"]
    assert kind.D[0, 0] == -kind.D[1, 0] != 0
    assert float(kind.A[0, 0]) == pytest.approx(-0.1 / 6, rel=0.03)  # derivative of -0.1 sqrt(a) at 9
    assert kind.dynamics is not None and kind.dynamics.operating["states"]["b"] == 9
    assert kind.dynamics.operating["inputs"]["pump"] == 6


def test_an_offer_may_bound_a_combination(tmp_path: Path) -> None:
    """The band of an offer that is the argument itself is used where it is narrower than the bands of its parts."""
    text = """
synth: 1
kinds:
  pair:
    parameters: {c: 1 1/s}
    states: {a: {in: 1, band: 3}, b: {in: 1, band: 3}}
    inputs: {u: {in: 1, limit: 9}}
    sensors: [a, b]
    offers: {head: {is: 2*a - 2*b, band: 1}}
    equations:
      a': c*u - c*sqrt(a - b)
      b': c*sqrt(a - b) - c*b
    operating_point: {u: 2}
network: {pattern: {dimension: 1, links: []}}
"""
    kind = read_kind_text(text, tmp_path)
    assert [s.band for s in kind.offers] == [1, Fraction(1, 2)]
    assert "has no value or no bounded slope everywhere in the bands of a, b" in refusal(
        text.replace(", band: 1}}", "}}"), tmp_path
    )


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("speed: {in: m/s, band: 3 m/s}", "speed: m/s"),
         "the nonlinear term 'drag*speed*abs(speed)' needs to know how far speed may go from the operating point; "
         "declare a band, such as 'speed: {in: m/s, band: 2 m/s}'"),
        (("demand: {in: m/s^2, limit: 2.5}", "demand: m/s^2"), "such as 'demand: {in: m/s^2, limit: 2 m/s^2}'"),
        (("tanh(demand/grip) + ahead", "tanh((demand + ahead)/grip)"),
         "how far ahead may go from the operating point; declare a band, such as 'ahead: {in: m/s^2, band: 2 m/s^2}'"),
        (("drag*speed*abs(speed)", "drag*lag*speed*abs(drive)"), "needs to know how far drive may go"),
        (("drag*speed*abs(speed)", "drag*speed*abs(speed) - grip"), "is not zero when all signals are (-2 m/s^2)"),
        (("drag*speed*abs(speed)", "grip*sqrt(drag*slot)"),
         "'sqrt(drag*slot)' has no value or no bounded slope everywhere in the bands of slot"),
        (("drag*speed*abs(speed)", "grip*speed/(speed + speed*abs(drag*speed*lag))"),
         "'grip*speed/(speed + speed*abs(drag*speed*lag))' has no value or no bounded slope at zero: the divisor "
         "may be zero; name an operating point"),
    ],
)  # fmt: skip
def test_what_a_nonlinear_term_needs_is_said(change: tuple[str, str], said: str, tmp_path: Path) -> None:
    message = refusal(drag_file(change), tmp_path)
    assert said in message and message.startswith("problem.yaml:"), message


def test_the_band_of_a_take_serves_curves_only(tmp_path: Path) -> None:
    text = drag_file(
        ("tanh(demand/grip) + ahead", "tanh((demand + ahead)/grip)"),
        ("takes: {ahead: m/s^2}", "takes: {ahead: {in: m/s^2, band: 1.5}}"),
    )
    kind = read_kind_text(text, tmp_path)
    assert kind.takes[0].band is None and kind.offers[2].band == 4
    assert [float(v) for v in kind.F.rows[2]] == [1, 0, 0]


def test_curves_in_offers_and_sensors(tmp_path: Path) -> None:
    """A nonlinear output is fed by the same internal take, through F and N."""
    text = drag_file(
        ("offers: {place:", "offers: {drag_force: 'drag*speed*abs(speed)', place:"),
        ("sensors: [slot, speed, drive]", "sensors: {slot: slot, speed: 'speed + 0.1*lag*drag*speed*abs(speed)'}"),
    )
    kind = read_kind_text(text, tmp_path)
    assert [s.name for s in kind.takes] == ["ahead", "curve of speed", "curve of drive"]
    take = kind.index("takes", "curve of speed")
    assert float(kind.F[0, take]) == 0.02 and float(kind.N[1, take]) == 0.001
    assert float(kind.H[0, 1]) == pytest.approx(0.03, rel=2e-3)


def test_wrong_curves_are_caught_by_a_mapping_too() -> None:
    import yaml

    with pytest.raises(InputError, match=r"^kinds\.hauler\.equations\.speed': the nonlinear term"):
        read(yaml.safe_load(drag_file(("speed: {in: m/s, band: 3 m/s}", "speed: m/s"))))

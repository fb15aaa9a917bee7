"""Operating points: found and proven, refused with the reason where there is none, and tolerances about them."""

from __future__ import annotations

import random
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.base.units import Unit
from synth.network import Kind, bounds, read
from synth.network.equations import Scope, read_formula
from synth.network.operating import REACH, NoPoint, Unknowns, rest_of


def kind_of(**parts: Any) -> Kind:
    return read({"synth": 1, "kinds": {"k": parts}, "network": {"pattern": {"links": []}}}).kinds[0]


def refusal_of(**parts: Any) -> str:
    with pytest.raises(InputError) as caught:
        kind_of(**parts)
    return str(caught.value)


CAR: dict[str, Any] = {  # invented: a car that holds its speed on a grade
    "parameters": {"lag": "0.5 s", "drag": "0.002 1/m", "g": "9.81 m/s^2", "roll": "0.01"},
    "states": {"slot": "m", "speed": {"in": "km/h", "band": "20 km/h"}, "drive": "m/s^2"},
    "inputs": {"demand": {"in": "m/s^2", "limit": 2}},
    "disturbances": {"grade": {"in": "%", "peak": "3 %"}},
    "sensors": ["slot", "speed"],
    "equations": {
        "slot'": "speed - wanted",
        "speed'": "drive - g*roll - g*grade - drag*speed**2",
        "drive'": "(demand - drive)/lag",
    },
    "operating_point": {"slot": 0, "wanted": "find", "speed": "72 km/h"},
    "takes": {"wanted": "m/s"},
}


def test_the_rest_is_found_and_everything_counts_from_it() -> None:
    kind = kind_of(**CAR)
    assert kind.dynamics is not None
    operating = kind.dynamics.operating
    drive = 9.81 * 0.01 + 0.002 * 400
    assert operating["inputs"]["demand"] == pytest.approx(drive, rel=1e-15)
    assert operating["takes"]["wanted"] == pytest.approx(20) and operating["sensors"]["speed"] == pytest.approx(72)
    np.testing.assert_allclose(kind.dynamics.rate([0, 0, 0]), 0, atol=1e-12)
    # -2 drag v = -0.08 1/s in the middle of its sector, both sides of it by drag*band.
    assert float(kind.A[1, 1]) == pytest.approx(-0.08, rel=1e-9)
    assert [float(s.strength * abs(kind.D[1, 1])) for s in kind.inner] == [pytest.approx(0.002 * 20 / 3.6, rel=1e-9)]
    assert kind.offers[0].band == 20
    x = np.array([1.0, 7.2, 0.1])
    expected = [2, (0.1 - 0.002 * ((20 + 2) ** 2 - 400)) * 3.6, -0.2]
    np.testing.assert_allclose(kind.dynamics.rate(x), expected, rtol=1e-10, atol=1e-12)


def test_short_numbers_stay_exact() -> None:
    kind = kind_of(**CAR)
    assert kind.dynamics is not None
    assert kind.dynamics.point["demand"] == Fraction("0.0981") + Fraction("0.8") == kind.dynamics.point["drive"]
    assert kind.dynamics.residual == 0


@settings(max_examples=25, deadline=None)
@given(st.integers(1, 200), st.integers(1, 50), st.integers(1, 9))
def test_an_equilibrium_is_enclosed_and_narrow(a: int, b: int, c: int) -> None:
    """sqrt(x) = a/10, y**3 + y = b: closed forms lie in the proven intervals, whose width is the documented one."""
    scope = Scope({}, {"x": Unit(), "y": Unit()}, {"x": "state", "y": "state"})
    rates = {"x": read_formula(f"{a}/10 - sqrt(x)*{c}", scope), "y": read_formula(f"{b} - y**3 - y + 0*x", scope)}
    found = rest_of(rates, {}, Unknowns({"x": Fraction(1), "y": Fraction(1)}, {"x": None, "y": None}), {})
    assert Fraction(a, 10 * c) ** 2 in found["x"]
    low, high = found["y"].low, found["y"].high
    assert low**3 + low <= b <= high**3 + high
    for value in found.values():
        assert value.half <= 2 * REACH * max(value.size, Fraction(1, 10**6))


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"operating_point": {"speed": "72 km/h", "slot": 0, "wanted": "72 km/h", "demand": 1}},
         "2 equations (speed', drive') hold only 1 values that are not given (drive); leave out 1 more of the given"),
        ({"operating_point": {"slot": 0, "wanted": "find"}},
         "4 values are not given (speed, drive, demand, wanted), and 3 equations hold them (slot', speed', drive')"),
        ({"operating_point": {"speed": "72 km/h", "wanted": "find"}},
         "no equation depends on slot, so every value is one; give it"),
        ({"operating_point": {"speed": "72 km/h", "slot": 0}},
         "the operating point is no equilibrium, slot' is 20 m/s there; leave one of its values out"),
        ({"operating_point": {"speed": "72 km/h", "slot": 0, "wanted": "72 km/h", "drive": 1, "demand": 1}},
         "the operating point is no equilibrium, speed' is 0.36684 km/(h*s) there"),
        ({"operating_point": {"sped": 3}}, "'sped' is no state, input, taken signal or disturbance; accepted are slot"),
        ({"operating_point": {"speed": "72 m"}}, "but km/h is needed here"),
        ({"operating_point": 3}, "a mapping is expected here"),
        ({"operating_point": {"slot": 0, "demand": 2, "drive": 2, "speed": "about 80 m"}}, "km/h is needed here"),
        ({"equations": {**CAR["equations"], "speed'": "drive - g*roll - g*grade - drag*speed**2"},
          "operating_point": {"slot": 0, "wanted": "find", "drive": 0}}, "no equilibrium was found for speed, demand"),
        ({"operating_point": {"slot": 0, "wanted": "find", "drive": "0.8981"}},
         "there is more than one equilibrium (speed = 72, demand = 0.8981, wanted = 20 and"),
        ({"equations": {**CAR["equations"], "speed'": "drive - demand - drag*speed**2"},
          "operating_point": {"slot": 0, "speed": 0, "wanted": 0}},
         "the equilibrium of drive, demand is not isolated or lies on a corner of a function"),
    ],
)  # fmt: skip
def test_why_there_is_no_point_is_said(changes: dict[str, Any], said: str) -> None:
    message = refusal_of(**{**CAR, **changes})
    assert said in message, message


def test_about_chooses_among_several() -> None:
    point = {"slot": 0, "wanted": "find", "drive": "0.8981"}
    for about, speed in (("about 60 km/h", 72), ("about -60 km/h", -72)):
        kind = kind_of(**{**CAR, "operating_point": {**point, "speed": about}})
        assert kind.dynamics is not None and kind.dynamics.operating["states"]["speed"] == pytest.approx(speed)


def test_an_operating_point_belongs_to_equations() -> None:
    message = refusal_of(states={"x": "m"}, matrices={"A": [[-1]]}, operating_point={"x": 1})
    assert "an operating point belongs to equations; matrices carry numbers. Take it out" in message


def test_constants_are_welcome_at_an_operating_point() -> None:
    """A linear kind with constants: the matrices are those without them."""
    kind = kind_of(
        parameters={"g": "9.81 m/s^2", "r": "1 1/s"}, states={"v": "m/s"}, inputs={"u": "m/s^2"},
        sensors={"reading": {"is": "v", "in": "m/s"}}, equations={"v'": "u - g - r*v"}, operating_point={"v": "2 m/s"},
    )  # fmt: skip
    assert kind.A.rows == ((-1,),) and kind.B.rows == ((1,),) and not kind.inner
    assert kind.dynamics is not None and kind.dynamics.operating["inputs"]["u"] == pytest.approx(11.81)
    message = refusal_of(
        parameters={"g": "9.81 m/s^2"},
        states={"v": "m/s"},
        inputs={"u": "m/s^2"},
        sensors=["v"],
        equations={"v'": "u - g"},
    )
    assert "this expression has a constant part" in message


TANK: dict[str, Any] = {  # invented: a tank whose outlet is known to 5 %
    "parameters": {"area": "2 m^2", "c": "0.1 m^2 +- 5%", "g": "9.81 m/s^2"},
    "states": {"level": {"in": "cm", "band": "20 cm"}},
    "inputs": {"flow": {"in": "L/s", "limit": 100}},
    "sensors": ["level"],
    "offers": {"out": {"is": "c*sqrt(2*g*level)", "in": "L/s"}},
    "equations": {"level'": "(flow - c*sqrt(2*g*level))/area"},
    "operating_point": {"level": "1 m"},
}


@settings(max_examples=40, deadline=None)
@given(st.floats(-1, 1), st.floats(-1, 1), st.floats(-1, 1))
def test_a_tolerance_that_moves_the_point_is_a_disturbance(move: float, part: float, push: float) -> None:
    """True rate = nominal + shift + curve, with |shift| <= its peak and the curve within its link; output likewise."""
    kind = UNCERTAIN
    assert kind.dynamics is not None
    assert [w.name for w in kind.disturbances] == ["shift of level", "shift of out"]
    c, x, u = 0.1 * (1 + 0.05 * part), 20 * move, 100 * push
    truth = kind.dynamics.rate([x], [u], parameters={"c": c})
    flow = float(kind.dynamics.point["flow"])
    literal = (flow + u / 1000 - c * np.sqrt(2 * 9.81 * (1 + x / 100))) / 2 * 100
    assert truth[0] == pytest.approx(literal, abs=1e-9)
    outer = kind.dynamics.offers_at([x], parameters={"c": c})
    assert outer[0] == pytest.approx((c * np.sqrt(2 * 9.81 * (1 + x / 100)) - 0.1 * np.sqrt(2 * 9.81)) * 1000, abs=1e-8)
    room = float(kind.inner[0].strength) * abs(x)
    rate = abs(float(kind.D[0, 0])) * room + float(kind.disturbances[0].peak)
    assert abs(truth[0] - float(kind.A[0, 0]) * x - float(kind.B[0, 0]) * u) <= rate * (1 + 1e-9)
    out = abs(float(kind.F[0, 0])) * room + float(kind.disturbances[1].peak)
    assert abs(outer[0] - float(kind.H[0, 0]) * x) <= out * (1 + 1e-9)


UNCERTAIN = kind_of(**TANK)


def test_the_shift_is_attained() -> None:
    assert float(UNCERTAIN.disturbances[0].peak) == pytest.approx(0.05 * 0.1 * np.sqrt(2 * 9.81) / 2 * 100, rel=1e-6)
    assert UNCERTAIN.disturbances[0].unit == "cm/s" and UNCERTAIN.disturbances[1].unit == "L/s"
    assert UNCERTAIN.E.rows == ((1, 0),) and UNCERTAIN.Fw.rows == ((0, 1), (0, 0))


def test_a_sensor_that_a_tolerance_moves_is_refused() -> None:
    message = refusal_of(**{**TANK, "sensors": {"out": {"is": "c*sqrt(2*g*level)", "in": "L/s"}}})
    assert "a tolerance moves what the sensor 'out' reads at the operating point" in message


def test_no_point_is_an_exception_with_a_sentence() -> None:
    scope = Scope({}, {"x": Unit()}, {"x": "state"})
    with pytest.raises(NoPoint, match="no equilibrium was found for x"):
        rest_of({"x": read_formula("x**2 + 1", scope)}, {}, Unknowns({"x": Fraction(1)}, {"x": None}), {})


def random_expression(chance: random.Random, depth: int) -> str:
    """An expression of x, y, u, v, w and the parameters p, q, without units; it need not be defined everywhere."""
    if depth == 0 or chance.random() < 0.15:
        return chance.choice(["x", "y", "u", "v", "w", "p", "q", "2", "0.5", "(x - y)"])
    form = chance.choice(
        ["{a} + {b}", "{a} - {b}", "({a})*({b})", "({a})/({b})", "sin({a})", "cos({a})", "tanh({a})", "exp({a})",
         "sqrt({a})", "abs({a})", "min({a}, {b})", "max({a}, {b})", "sat({a}, 1)", "deadzone({a}, 0.1)", "({a})**2",
         "({a})**-1", "({a})**1.5", "({a})**3"]
    )  # fmt: skip
    return form.format(a=random_expression(chance, depth - 1), b=random_expression(chance, depth - 1))


def random_kind(chance: random.Random) -> dict[str, Any]:
    """A kind with bands, tolerances, an operating point and random equations; two extra takes make it one."""
    texts = [random_expression(chance, chance.randint(1, 3)) for _ in range(2)]
    return {
        "parameters": {"p": "1..1.2", "q": "2 +- 50%", "h": "1 1/s"},
        "states": {"x": {"in": "1", "band": chance.choice([0.1, 1, 2])}, "y": {"in": "%", "band": 200}},
        "inputs": {"u": {"in": "1", "limit": 3}},
        "takes": {"v": {"in": "1", "band": 1}, "more": "1", "rest": "1"},
        "disturbances": {"w": {"in": "1", "peak": 0.5}},
        "sensors": {"s": {"is": "x + 0.1*x*abs(x)", "in": "1"}},
        "offers": {"z": {"is": chance.choice(["x", "sin(x)*y", "p*x"]), "in": "%"}},
        "equations": {"x'": f"h*({texts[0]}) + h*more", "y'": f"h*({texts[1]}) + h*rest"},
        "operating_point": {"x": chance.choice([0, 1, 0.5]), "y": 100, "u": chance.choice([0, 2]), "v": 0.5,
                            "more": "find", "rest": "find"},
    }  # fmt: skip


def test_everything_together_encloses_the_equations(monkeypatch: pytest.MonkeyPatch) -> None:
    """Random kinds: rates, offers and readings differ from the nominal ones by no more than the self-links and shifts
    may bring, for every parameter in its tolerance and every signal in its band."""
    monkeypatch.setattr(bounds, "MOST_CELLS", 20)  # coarse bounds are bounds as well
    chance = random.Random(7)
    accepted = compared = 0
    while accepted < 25:
        parts = random_kind(chance)
        try:
            kind = kind_of(**parts)
        except InputError:
            continue
        accepted += 1
        for _ in range(10):
            compared += _compared(kind, chance, float(parts["states"]["x"]["band"]))
    assert compared >= 500


def _compared(kind: Kind, chance: random.Random, band: float) -> int:
    def part() -> float:
        return chance.choice([-1, 1, chance.uniform(-1, 1)])

    dynamics = kind.dynamics
    assert dynamics is not None
    x, u, v, w = np.array([band, 200]) * [part(), part()], [3 * part()], [part(), part(), part()], [part() / 2]
    values = {name: chance.choice([low, high, chance.uniform(low, high)]) for name, (low, high) in
              {"p": (1, 1.2), "q": (1, 3)}.items()}  # fmt: skip
    Fu = np.zeros((len(kind.offers), 1)) if kind.Fu is None else kind.Fu.floats()
    H, F, Fw, D, E = (getattr(kind, name).floats() for name in ("H", "F", "Fw", "D", "E"))
    offered = H @ x + Fu @ u + F[:, :3] @ v + Fw[:, :1] @ w
    for offer, value in zip(kind.offers[1:], offered[1:], strict=True):
        assert offer.band is None or abs(value) <= float(offer.band) * (1 + 1e-9)
    shifts = [float(disturbance.peak) for disturbance in kind.disturbances[1:]]
    outcomes = (
        (dynamics.rate(x, u, v, w, values), kind.A.floats() @ x + kind.B.floats() @ u, D, E),
        (dynamics.offers_at(x, v, w, values), (H @ x)[:1], F[:1], Fw[:1]),
        (
            dynamics.sensors_at(x, v, values),
            kind.C.floats() @ x,
            kind.N.floats(),
            np.zeros((1, len(kind.disturbances))),
        ),
    )
    for truth, nominal, takes, outside in outcomes:
        nominal = nominal + takes[:, :3] @ v + outside[:, :1] @ w
        room = np.abs(outside[:, 1:]) @ shifts
        for link in kind.inner:
            brought = float(link.strength) * abs(offered[kind.index("offers", link.offer)])
            room = room + np.abs(takes[:, kind.index("takes", link.take)]) * brought
        slack = 1e-9 * (np.abs(nominal) + np.abs(truth) + room + 1e-3)
        assert np.all(np.abs(truth - nominal) <= room + slack), (kind.equations, values)
    return sum(len(truth) for truth, *_ in outcomes)

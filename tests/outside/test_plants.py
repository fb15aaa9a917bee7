"""Plants from the literature, read from equations: do the numbers others published come out?"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from scipy.linalg import eigvals

from synth.network import Kind, Network, read
from synth.network.rational import reduced


def network_of(kinds: dict[str, Any], links: list[dict[str, Any]] | None = None) -> Network:
    return read({"synth": 1, "kinds": kinds, "network": {"pattern": {"dimension": 1, "links": links or []}}})


# D1. The quadruple tank: K. H. Johansson, "The quadruple-tank process", IEEE Trans. Control Systems Technology 8(3),
# 2000, parameters and levels of the minimum-phase (P-) and nonminimum-phase (P+) points. The levels are printed with
# two or three digits and do not balance exactly: two extra inflows, found with the operating point, hold them there.
# The pump voltages (3.00 V, 3.15 V) are from memory.
POINTS: dict[str, dict[str, Any]] = {
    "P-": {"h": (12.4, 12.7, 1.8, 1.4), "k": (3.33, 3.35), "gamma": (0.70, 0.60), "T": (62, 90, 23, 30),
           "zeros": (-0.060, -0.018), "rga": 1.40, "volts": 3.00},
    "P+": {"h": (12.6, 13.0, 4.8, 4.9), "k": (3.14, 3.29), "gamma": (0.43, 0.34), "T": (63, 91, 39, 56),
           "zeros": (-0.057, 0.013), "rga": -0.64, "volts": 3.15},
}  # fmt: skip


def tanks(
    point: dict[str, Any], levels: tuple[float, ...] | None = None, band: str = "0.0001 cm", pumps: float | None = None
) -> Kind:
    """At the printed (or given) levels, or where both pumps' voltage brings them."""
    k1, k2 = point["k"]
    g1, g2 = point["gamma"]
    h = levels or point["h"]
    kind = {
        "parameters": {
            "A1": "28 cm^2", "A2": "32 cm^2", "A3": "28 cm^2", "A4": "32 cm^2", "a1": "0.071 cm^2", "a2": "0.057 cm^2",
            "a3": "0.071 cm^2", "a4": "0.057 cm^2", "g": "981 cm/s^2", "kc": "0.5 V/cm", "k1": f"{k1} cm^3/(s V)",
            "k2": f"{k2} cm^3/(s V)", "split1": g1, "split2": g2,
        },
        "states": {f"h{i}": {"in": "cm", "band": band} for i in (1, 2, 3, 4)},
        "inputs": {"v1": "V", "v2": "V"},
        "disturbances": {f"extra{i}": {"in": "cm^3/s", "peak": 0} for i in (3, 4)},
        "sensors": {f"y{i}": {"is": f"kc*h{i}", "in": "V"} for i in (1, 2)},
        "equations": {
            "h1'": "-a1/A1*sqrt(2*g*h1) + a3/A1*sqrt(2*g*h3) + split1*k1/A1*v1",
            "h2'": "-a2/A2*sqrt(2*g*h2) + a4/A2*sqrt(2*g*h4) + split2*k2/A2*v2",
            "h3'": "-a3/A3*sqrt(2*g*h3) + (1 - split2)*k2/A3*v2 + extra3/A3",
            "h4'": "-a4/A4*sqrt(2*g*h4) + (1 - split1)*k1/A4*v1 + extra4/A4",
        },
        "operating_point": {f"h{i}": f"{v} cm" for i, v in enumerate(h, 1)} | {"extra3": "find", "extra4": "find"},
    }  # fmt: skip
    if pumps is not None:
        kind["operating_point"] = {"v1": f"{pumps} V", "v2": f"{pumps} V"}
    return network_of({"tanks": kind}).kinds[0]


def time_constants(kind: Kind) -> list[float]:
    return [-1 / float(kind.A[i, i]) for i in range(4)]


@pytest.mark.parametrize("name", sorted(POINTS))
def test_quadruple_tank_time_constants(name: str) -> None:
    """Published in whole seconds, truncated. T4 of P- comes to 29.993 s at the printed 1.4 cm and is published as 30:
    what the two digits of that level leave open (1.35 .. 1.45 cm) reaches it."""
    point = POINTS[name]
    found = time_constants(tanks(point))
    for i, (value, published) in enumerate(zip(found, point["T"], strict=True)):
        if (name, i) == ("P-", 3):
            assert value == pytest.approx(29.993, abs=5e-4)
            assert time_constants(tanks(point, (*point["h"][:3], 1.45)))[3] >= published > value > published - 0.01
        else:
            assert 0 <= value - published < 1, (name, i, value)
    formula = [
        A / a * np.sqrt(2 * h / 981) for A, a, h in zip((28, 32, 28, 32), (0.071, 0.057) * 2, point["h"], strict=True)
    ]
    np.testing.assert_allclose(found, formula, rtol=1e-6)


def zeros(kind: Kind) -> list[float]:
    """Multivariable zeros: the finite generalised eigenvalues of [A B; C 0] - s [I 0; 0 0]."""
    A, B, C = kind.A.floats(), kind.B.floats(), kind.C.floats()
    pencil, mass = np.block([[A, B], [C, np.zeros((2, 2))]]), np.diag([1.0] * 4 + [0.0] * 2)
    return sorted(z.real for z in eigvals(pencil, mass) if np.isfinite(z) and abs(z) < 1)


@pytest.mark.parametrize("name", sorted(POINTS))
def test_quadruple_tank_zeros_and_relative_gain(name: str) -> None:
    """Published with two digits. Where the pumps hold the levels they come out within 4 %; at the printed levels within
    5 % (P-: -0.0172 against -0.018, because the printed 1.8 cm is 10 % above the equilibrium of the third tank)."""
    point = POINTS[name]
    for kind, within in ((tanks(point, pumps=point["volts"]), 0.04), (tanks(point), 0.05)):
        found = zeros(kind)
        assert len(found) == 2
        for value, published in zip(found, point["zeros"], strict=True):
            assert abs(value - published) <= within * abs(published), (value, published)
        A, B, C = kind.A.floats(), kind.B.floats(), kind.C.floats()
        G = -C @ np.linalg.solve(A, B)
        rga = (G * np.linalg.inv(G).T)[0, 0]
        assert rga == pytest.approx(point["rga"], abs=0.005)
        g1, g2 = point["gamma"]
        assert rga == pytest.approx(g1 * g2 / (g1 + g2 - 1), rel=1e-6)


def test_quadruple_tank_from_the_pumps() -> None:
    """With the published voltages the lower levels come out within 5 % of the printed ones; curves are exact chords."""
    for point in POINTS.values():
        driven = tanks(point, pumps=point["volts"]).dynamics
        assert driven is not None
        levels = driven.operating["states"]
        assert levels["h1"] == pytest.approx(point["h"][0], rel=0.05)
        assert levels["h2"] == pytest.approx(point["h"][1], rel=0.05)
    point = POINTS["P-"]
    wide = tanks(point, band="1 cm")
    ratios = []
    for link in wide.inner:
        i, j = wide.index("offers", link.offer), wide.index("takes", link.take)
        state = next(k for k, v in enumerate(wide.H.rows[i]) if v)
        ratios.append(float(link.strength * abs(wide.D[state, j]) / abs(wide.A[state, state])))
    # chords of sqrt over h +- 1 cm, relative to their middle: (s+ - s-)/(s+ + s-) with s = 1/(sqrt(h) + sqrt(h +- 1))
    for ratio, h in zip(ratios, (12.4, 1.8, 12.7, 1.4), strict=True):
        up, down = (1 / (np.sqrt(h) + np.sqrt(h + d)) for d in (-1, 1))
        assert ratio == pytest.approx((up - down) / (up + down), rel=1e-6)


# D2. Two-area load frequency control: O. I. Elgerd and C. E. Fosha, "Optimum megawatt-frequency control of multiarea
# electric energy systems", IEEE Trans. Power Apparatus and Systems PAS-89(4), 1970 (data and results from memory).
AREA = {"Tg": "0.08 s", "Tt": "0.3 s", "Kp": "120 Hz", "Tp": "20 s", "R": "2.4 Hz", "coupling": "0.545 1"}


def area(number: int, tie: str) -> dict[str, str]:
    return {
        f"f{number}'": f"(Kp*(power{number} - load{number} {tie}) - f{number})/Tp",
        f"power{number}'": f"(valve{number} - power{number})/Tt",
        f"valve{number}'": f"(reference{number} - f{number}/R - valve{number})/Tg",
    }


def steady(A: list[list[Fraction]], E: list[Fraction], w: Fraction) -> list[Fraction]:
    """-A^{-1} E w over the rationals."""
    n = len(A)
    solved, pivots = reduced([[*row, -e * w] for row, e in zip(A, E, strict=True)], n + 1)
    assert pivots == list(range(n))
    return [row[n] for row in solved]


FREQUENCY = -Fraction(1, 100) / (2 * (Fraction(1, 120) + 1 / Fraction("2.4")))  # -step/(2 beta), beta = D + 1/R


def test_two_areas_in_one_kind() -> None:
    kind = network_of({"areas": {
        "parameters": AREA,
        "states": {f"{s}{i}": u for i in (1, 2) for s, u in (("f", "Hz"), ("power", "pu"), ("valve", "pu"))}
        | {"tie": "pu"},
        "inputs": {"reference1": "pu", "reference2": "pu"},
        "disturbances": {"load1": {"in": "pu", "peak": 0.01}, "load2": {"in": "pu", "peak": 0.01}},
        "sensors": ["f1", "f2", "tie"],
        "equations": area(1, "- tie") | area(2, "+ tie") | {"tie'": "coupling*(f1 - f2)"},
    }}).kinds[0]  # fmt: skip
    x = steady([list(r) for r in kind.A.rows], [r[0] for r in kind.E.rows], Fraction(1, 100))
    found = {s.name: v for s, v in zip(kind.states, x, strict=True)}
    assert abs(float(found["f1"]) - -0.0117647) < 5e-8 and abs(float(found["tie"]) - -0.005) < 1e-9
    assert found["f1"] == found["f2"] == FREQUENCY and found["tie"] == -Fraction(1, 200)
    assert np.all(np.linalg.eigvals(kind.A.floats()).real < 0)


def test_two_areas_as_two_kinds_in_one_cell() -> None:
    """The same with the tie line owned by the first area and links at: 0 between the kinds."""

    def kind(number: int, tie: dict[str, Any], sign: str) -> dict[str, Any]:
        return {
            "parameters": AREA,
            "states": {f"{s}{number}": u for s, u in (("f", "Hz"), ("power", "pu"), ("valve", "pu"))} | tie["states"],
            "inputs": {f"reference{number}": "pu"},
            "disturbances": {f"load{number}": {"in": "pu", "peak": 0.01}},
            "takes": tie["takes"], "offers": tie["offers"], "sensors": [f"f{number}"],
            "equations": area(number, sign) | tie["equations"],
        }  # fmt: skip

    first = kind(1, {"states": {"tie": "pu"}, "takes": {"other": "Hz"}, "offers": ["tie"],
                     "equations": {"tie'": "coupling*(f1 - other)"}}, "- tie")  # fmt: skip
    second = kind(2, {"states": {}, "takes": {"flow": "pu"}, "offers": ["f2"], "equations": {}}, "+ flow")
    network = network_of({"first": first, "second": second}, [
        {"name": "line", "from": "first.tie", "at": 0, "to": "second.flow", "strength": 1},
        {"name": "line", "from": "second.f2", "at": 0, "to": "first.other", "strength": 1},
    ])  # fmt: skip
    starts = {"first": 0, "second": 4}
    A = [[Fraction(0)] * 7 for _ in range(7)]
    for k in network.kinds:
        for i, row in enumerate(k.A.rows):
            A[starts[k.name] + i][starts[k.name] : starts[k.name] + len(row)] = list(row)
    for link in network.links:
        to, source = network.kind(link.kind), network.kind(link.source_kind)
        for i, d in enumerate(to.D.rows):
            for j, h in enumerate(source.H.rows[source.index("offers", link.offer)]):
                A[starts[link.kind] + i][starts[link.source_kind] + j] += d[0] * link.strength * h
    E = [r[0] for r in network.kinds[0].E.rows] + [Fraction(0)] * 3
    x = steady(A, E, Fraction(1, 100))
    assert x[0] == x[4] == FREQUENCY and x[3] == -Fraction(1, 200)


# D4. ISO 13790:2008, zone with one heat capacity: internal heat capacity per floor area by class of construction
# (80 .. 370 kJ/(K m2)), time constant C_m/H. Invented: 100 m2 and a loss of 150 W/K.
@pytest.mark.parametrize(("capacity", "hours"), [(80, 14.81), (110, 20.37), (165, 30.56), (260, 48.15), (370, 68.52)])
def test_zone_time_constants(capacity: int, hours: float) -> None:
    zone = {
        "parameters": {"c": f"{capacity} kJ/(K m2)", "floor": "100 m2", "loss": "150 W/K"},
        "states": {"room": "degC"},
        "inputs": {"heat": "kW"},
        "disturbances": {"outside": {"in": "degC", "peak": 5}},
        "sensors": ["room"],
        "equations": {"room'": "(heat - loss*(room - outside))/(c*floor)"},
    }
    kind = network_of({"zone": zone}).kinds[0]
    assert -1 / kind.A[0, 0] == Fraction(capacity * 1000 * 100, 150)
    assert float(-1 / kind.A[0, 0]) / 3600 == pytest.approx(hours, abs=0.005)
    assert kind.B[0, 0] == Fraction(1, capacity * 100) and kind.E[0, 0] == -kind.A[0, 0]

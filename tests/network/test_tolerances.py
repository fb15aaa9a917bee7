"""Tolerances: how they are written, and that nominal plus self-link is the plant for every value in the range."""

from __future__ import annotations

import re
from dataclasses import replace
from fractions import Fraction
from functools import cache
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix
from synth.base.units import UnitError, parse_unit
from synth.gain.closed import close_unit
from synth.network import Kind, read
from synth.network.gains import gain_set
from synth.network.rational import Rows, reduced
from synth.network.tolerances import parse_tolerance
from tests.build import convoy, convoy_gains
from tests.network.files import convoy_text, refusal


@pytest.mark.parametrize(
    ("text", "low", "nominal", "high", "unit"),
    [
        ("0.5 s +- 10%", "0.45", "0.5", "0.55", "s"),
        ("0.5 s ± 10 %", "0.45", "0.5", "0.55", "s"),
        ("0.5 s +- 0.05 s", "0.45", "0.5", "0.55", "s"),
        ("500 ms +- 0.05 s", "450", "500", "550", "ms"),
        ("0.5 +- 0.05 s", "0.45", "0.5", "0.55", "s"),
        ("0.45..0.55 s", "0.45", "0.5", "0.55", "s"),
        ("0.45 s .. 550 ms", "0.45", "0.5", "0.55", "s"),
        ("-2 +- 25%", "-2.5", "-2", "-1.5", "1"),
        ("1/3 m +- 1/3 m", "0", "1/3", "2/3", "m"),
        ("3 +- 1", "2", "3", "4", "1"),
        ("45..55 %", "45", "50", "55", "%"),
        ("3 m +- 0%", "3", "3", "3", "m"),
    ],
)
def test_three_ways_to_write_a_range(text: str, low: str, nominal: str, high: str, unit: str) -> None:
    found = parse_tolerance(text)
    assert (found.low, found.nominal, found.high) == (Fraction(low), Fraction(nominal), Fraction(high))
    assert found.unit == parse_unit(unit)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("0.5 s +- 0.05", "has no unit"),
        ("0.5 s +- 0.05 m", "different units"),
        ("0.5 s +- -0.1 s", "zero or more"),
        ("0.6..0.5 s", "ends below its start"),
        ("50 % +- 10 %", "in two ways"),
        ("0.5 s +-", "is not a range"),
        ("1..2..3", "is not a range"),
        ("+- 3", "is not a range"),
        ("0.5 s +- x", "is not a quantity"),
    ],
)
def test_what_is_no_range_is_refused(text: str, said: str, tmp_path: Path) -> None:
    with pytest.raises(UnitError, match=said):
        parse_tolerance(text)
    message = refusal(convoy_text(("{lag: 0.5 s}", f"{{lag: {text}}}")), tmp_path)
    assert re.match(r"problem\.yaml:\d+:23: kinds\.hauler\.parameters\.lag: ", message) and said in message


def file_with(parameters: str, *changes: tuple[str, str]) -> dict[str, Any]:
    loaded: dict[str, Any] = yaml.safe_load(convoy_text(("{lag: 0.5 s}", parameters), *changes))
    return loaded


# (parameters, changes, number of self-links): one parameter, one row; several parameters; products; outputs too.
MODELS: dict[str, tuple[dict[str, str], tuple[tuple[str, str], ...], int]] = {
    "lag": ({"lag": "0.5 s +- 10%"}, (), 1),
    "mass and stiffness": (
        {"lag": "0.5 s", "k": "4..5 N/m", "c": "0.3 kg/s +- 20%", "m": "2 kg +- 5%"},
        (("speed': drive + slope", "speed': drive + (slope*m - k*slot - c*speed)/m"),),
        2,
    ),
    "two rows": ({"lag": "0.5 s +- 10%"}, (("slot': speed", "slot': speed - slot/lag"),), 2),
    "rank one over two rows": (
        {"lag": "0.5 s", "share": "0.6 +- 0.1", "h": "1 1/s"},
        (("slot': speed", "slot': speed + share*h*slot"), ("drive + slope", "drive + slope + (1 - share)*h*h*slot")),
        1,
    ),
    "outputs": (
        {"lag": "0.5 s", "scale": "1 +- 3%"},
        (("place: {is: slot", "scaled: scale*slot, place: {is: slot"),
         ("sensors: [slot, speed, drive]", "sensors: {slot: scale*slot, speed: speed}")),
        1,
    ),
    "two functions of one parameter": (
        {"lag": "0.5 s", "w": "3 1/s +- 10%", "z": "0.1..0.3"},
        (("speed': drive + slope", "speed': drive + slope - w**2*slot - 2*z*w*speed"),),
        2,
    ),
    "a function in one entry": (
        {"lag": "0.5 s", "w": "0.5..2", "h": "1 1/s^2"},
        (("speed': drive + slope", "speed': drive + slope - (w + 1/w)*h*slot - w*exp(-w)*h*slot"),),
        1,
    ),
}  # fmt: skip


def model(name: str, values: dict[str, Fraction] | None = None) -> Kind:
    """The kind of one of the models, with its tolerances or with exact values (in the written unit)."""
    parameters, changes, _ = MODELS[name]
    texts = dict(parameters)
    for key, value in (values or {}).items():
        texts[key] = f"{value} {unit_of(parameters[key])}"
    return read(file_with("{" + ", ".join(f"{k}: {v}" for k, v in texts.items()) + "}", *changes)).kinds[0]


@cache
def nominal(name: str) -> Kind:
    """The kind with its tolerances."""
    return model(name)


def unit_of(text: str) -> str:
    found = parse_tolerance(text)
    assert found.unit.factor == 1
    return found.unit.text


def whole(kind: Kind) -> Rows:
    """All nominal matrices of the user's signals in one table."""
    takes = sum(" " not in s.name for s in kind.takes)
    offers = sum(" " not in s.name for s in kind.offers)
    rows = [
        [*a, *b, *d[:takes], *e] for a, b, d, e in zip(kind.A.rows, kind.B.rows, kind.D.rows, kind.E.rows, strict=True)
    ]
    zero = (Fraction(0),) * len(kind.inputs)
    rows += [[*kind.H.rows[i], *zero, *kind.F.rows[i][:takes], *kind.Fw.rows[i]] for i in range(offers)]
    none = (Fraction(0),) * len(kind.disturbances)
    rows += [[*c, *zero, *n[:takes], *none] for c, n in zip(kind.C.rows, kind.N.rows, strict=True)]
    return rows


def products(kind: Kind) -> list[tuple[Fraction, Rows]]:
    """Per self-link its strength and the matrix column * row that it adds per unit of what it carries."""
    takes = sum(" " not in s.name for s in kind.takes)
    offers = sum(" " not in s.name for s in kind.offers)
    found = []
    for link in kind.inner:
        i, j = kind.index("offers", link.offer), kind.index("takes", link.take)
        commands = kind.Fu.rows[i] if kind.Fu is not None else (Fraction(0),) * len(kind.inputs)
        row = [*kind.H.rows[i], *commands, *kind.F.rows[i][:takes], *kind.Fw.rows[i]]
        column = [r[j] for r in (*kind.D.rows, *kind.F.rows[:offers], *kind.N.rows)]
        found.append((link.strength, [[a * b for b in row] for a in column]))
    return found


@settings(max_examples=60, deadline=None)
@given(st.sampled_from(sorted(MODELS)), st.lists(st.sampled_from([0, 1, 2, 3, 4, 8]), min_size=4, max_size=4))
def test_every_plant_is_nominal_plus_self_links(name: str, parts: list[int]) -> None:
    """Exactly: true matrices = nominal + sum of factor * column * row with |factor| <= strength."""
    parameters, _, count = MODELS[name]
    values = {}
    for (key, text), part in zip([p for p in parameters.items() if "+-" in p[1] or ".." in p[1]], parts, strict=False):
        found = parse_tolerance(text)
        values[key] = found.low + (found.high - found.low) * Fraction(part, 8)
    uncertain, true = nominal(name), model(name, values)
    assert len(uncertain.inner) == count and not true.inner
    links = products(uncertain)
    table, goal = [], []
    for r, line in enumerate(whole(true)):
        for c, value in enumerate(line):
            table.append([matrix[r][c] for _, matrix in links])
            goal.append(value - whole(uncertain)[r][c])
    solved, pivots = reduced([[*row, g] for row, g in zip(table, goal, strict=True)], len(links) + 1)
    if "exp" in str(MODELS[name]):  # exp of a constant is rounded to 40 digits, so the difference is not exactly there
        biggest = max(abs(g) / abs(row[0]) for row, g in zip(table, goal, strict=True) if row[0])
        assert biggest <= links[0][0] * (1 + Fraction(1, 10**12))
        return
    assert len(links) not in pivots, "the difference is no combination of the self-links"
    for k, (strength, _) in enumerate(links):
        factor = next((row[-1] for row, p in zip(solved, pivots, strict=True) if p == k), Fraction(0))
        assert abs(factor) <= strength * (1 + Fraction(1, 10**12)), (name, values)


def test_the_strength_is_attained_at_the_ends() -> None:
    """1/lag over 0.45 .. 0.55 s is 20/11 .. 20/9: middle 200/99, half 20/99, exactly."""
    kind = model("lag")
    assert kind.A[2, 2] == -Fraction(200, 99) and kind.B[2, 0] == kind.D[2, 0] == Fraction(200, 99)
    assert [s.strength * abs(kind.D[2, 1]) * abs(kind.H[1, 2]) for s in kind.inner] == [Fraction(20, 99)]
    assert [(s.offer, s.take, s.sort) for s in kind.inner] == [("tolerance of lag", "tolerance of lag", "tolerance")]
    assert kind.offers[1].band is None and kind.offers[1].unit == "m/s^2" and kind.takes[1].unit == "m/s^3"


@given(st.integers(0, 20))
@settings(max_examples=10, deadline=None)
def test_the_closed_loop_too(part: int) -> None:
    """With the loop closed: A_c + column factor row is the true closed unit, feed-through of the command included."""
    lag = Fraction(45, 100) + Fraction(part, 200)
    network = read(file_with("{lag: 0.5 s +- 10%}"))
    true = convoy(kinds=(model("lag", {"lag": lag}),))
    K = convoy_gains()["hauler"].K
    a, b = close_unit(network.kinds[0], network.links, K), close_unit(true.kinds[0], true.links, K)
    factor = (1 / lag - Fraction(200, 99)) * -1
    strength = next(link.strength for link in network.links if link.sort == "tolerance")
    scale = a.kind.D[2, 1] * a.kind.H[1, 2]
    assert abs(factor / scale) <= strength
    moved = a.A + (a.D.column(1) @ a.H.row(1)).scaled(factor / scale)
    assert moved == b.A
    driven = a.D.column(0) + (a.D.column(1) @ ExactMatrix.of([[a.F[1, 0]]])).scaled(factor / scale)
    assert driven == b.D.column(0)


def test_files_without_tolerances_are_what_they_were() -> None:
    """The hash of the convoy is the one of the matrices written by hand; a tolerance of zero is none."""
    for parameters in ("{lag: 0.5 s}", "{lag: 0.5 s +- 0%}", "{lag: 0.5..0.5 s}"):
        network = read(file_with(parameters))
        assert network.hash == convoy().hash
        assert not network.kinds[0].inner and network.kinds[0].dynamics is None and network.kinds[0].Fu is None
    assert read(file_with("{lag: 0.5 s +- 1%}")).hash != convoy().hash
    assert read(file_with("{lag: 0.5 s, unused: 1 m +- 5%}")).hash == convoy().hash


def test_matrix_entries_may_have_a_tolerance(tmp_path: Path) -> None:
    kind = matrix_kind("'-2 +- 10%'", "3..4")
    assert kind.A.rows == ((0, 1), (0, -2)) and kind.B.rows == ((0,), (Fraction(7, 2),))
    assert [(s.offer, s.strength) for s in kind.inner] == [
        ("tolerance of A[2,2]", Fraction(1, 5)),
        ("tolerance of B[2,1]", Fraction(1, 2)),
    ]
    assert [s.unit for s in kind.takes] == ["m/s^2", "m/s^2"] and [s.unit for s in kind.offers] == ["m/s", "V"]
    assert [[*row] for row in kind.D.rows] == [[0, 0], [1, 1]]
    assert kind.H.rows == ((0, 1), (0, 0)) and kind.Fu is not None and kind.Fu.rows == ((0,), (1,))
    assert kind.dynamics is None
    for entry, said in (("-2 m +- 10%", "is not a number"), ("-2 +- x", "is not a quantity"), ("'2..1'", "ends below")):
        (tmp_path / "problem.yaml").write_text(matrix_text(entry, "3"), encoding="utf-8")
        message = refusal(matrix_text(entry, "3"), tmp_path)
        assert message.startswith("problem.yaml:8:") and said in message


def matrix_text(a: str, b: str) -> str:
    return f"""synth: 1
kinds:
  cart:
    states: {{place: m, speed: m/s}}
    inputs: {{motor: V}}
    sensors: [place, speed]
    matrices:
      A: [[0, 1], [0, {a}]]
      B: [[0], [{b}]]
network: {{pattern: {{links: []}}}}
"""


def matrix_kind(a: str, b: str) -> Kind:
    return read(yaml.safe_load(matrix_text(a, b))).kinds[0]


@pytest.mark.parametrize(
    ("parameters", "change", "said"),
    [
        ("{lag: -0.1..0.5 s}", ("", ""),
         "kinds.hauler.equations.drive': 'lag' has no value or no bounded slope everywhere in the tolerance of lag: "
         "the divisor may be zero; narrow the tolerance of lag"),
        ("{lag: 0.5 s, p: 1..2}", ("speed': drive + slope", "speed': drive*2**p + slope"),
         "a power must be a number from -12 to 12 without unit and tolerance"),
        ("{lag: 0.5 s, p: 1..2 m/s^2}", ("speed': drive + slope", "speed': drive + slope - p"),
         "is not zero when all signals are (-1.5 m/s^2)"),
        ("{lag: 0.5 s, p: 1..2 kg}", ("speed': drive + slope", "speed': drive + slope*p"), "has the unit m kg/s^2"),
    ],
)  # fmt: skip
def test_what_a_tolerance_cannot_do_is_said(
    parameters: str, change: tuple[str, str], said: str, tmp_path: Path
) -> None:
    assert said in refusal(convoy_text(("{lag: 0.5 s}", parameters), change), tmp_path)


def test_a_renamed_kind_keeps_its_self_links() -> None:
    kind = replace(model("lag"), name="other")
    assert {(k.kind, k.source_kind, k.at) for k in kind.self_links(2)} == {("other", "other", (0, 0))}
    assert gain_set(kind, convoy_gains()["hauler"].K).kind == "other"


def test_every_description_gets_the_self_links(tmp_path: Path) -> None:
    """In two dimensions the offset has two zeros; explicit units get one each, at the unit itself."""
    data = file_with("{lag: 0.5 s +- 10%}")
    data["network"]["pattern"]["dimension"] = 2
    data["network"]["pattern"]["links"][0]["at"] = [-1, 0]
    flat = read(data)
    assert [(link.at, link.sort) for link in flat.links] == [((-1, 0), "link"), ((0, 0), "tolerance")]
    (tmp_path / "units.csv").write_text(
        "id,kind,lag\na,hauler,\nb,hauler,0.4 s +- 5%\nc,hauler,1 s\n", encoding="utf-8"
    )
    (tmp_path / "links.csv").write_text(
        "name,from,to,strength,relative\n"
        "follow,a.place,b.ahead,0.5 1/s^2,true\nfollow,b.place,c.ahead,0.5 1/s^2,true\n",
        encoding="utf-8",
    )
    data = file_with("{lag: 0.5 s +- 10%}")
    data["network"] = {"members": {"units": "units.csv", "links": "links.csv"}}
    (tmp_path / "problem.yaml").write_text(yaml.safe_dump(data), encoding="utf-8")
    listed = read(tmp_path / "problem.yaml")
    assert listed.members is not None and len(listed.kinds) == 3
    to, source, sort = listed.members.expanded()
    inner = {
        (int(i), int(j), listed.links[k].strength, listed.kinds[listed.members.kind[i]].name == listed.links[k].kind)
        for i, j, k in zip(to, source, sort, strict=True)
        if listed.links[k].sort == "tolerance"
    }
    middle = (1 / Fraction("0.38") - 1 / Fraction("0.42")) / 2
    assert inner == {(0, 0, Fraction(20, 99), True), (1, 1, middle, True)}

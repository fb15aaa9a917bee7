"""Equations: the same network as from matrices, exact coefficients, units of every term, and located refusals."""

from __future__ import annotations

import math
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.units import Unit, parse_unit
from synth.network import read
from synth.network.equations import Refused, Scope, read_formula

UNITS = ("m", "km", "km/h", "bar", "kW", "degC", "1", "%", "m3/h", "A")
numbers = st.fractions(min_value=-50, max_value=50, max_denominator=60)


@st.composite
def models(draw: st.DrawFn) -> tuple[dict[str, object], dict[str, object]]:
    """The same kind written by equations with parameters, and by matrices in declared units."""
    groups = {
        "x": draw(st.integers(1, 3)),
        "u": draw(st.integers(0, 2)),
        "v": draw(st.integers(0, 2)),
        "w": draw(st.integers(0, 2)),
    }
    units = {f"{g}{i}": draw(st.sampled_from(UNITS)) for g, count in groups.items() for i in range(count)}
    names = {g: [n for n in units if n[0] == g] for g in groups}
    outputs = {f"z{i}": draw(st.sampled_from(UNITS)) for i in range(draw(st.integers(0, 2)))}
    sensors = {f"y{i}": draw(st.sampled_from(UNITS)) for i in range(draw(st.integers(1, 2)))}
    parameters: dict[str, str] = {}

    def row(target: str, unit: str, rate: str, columns: list[str]) -> tuple[list[str], str]:
        entries, terms = [], []
        for column in columns:
            value = draw(numbers)
            entries.append(str(value))
            parameters[f"p_{target}_{column}"] = f"{value} ({unit})/(({units[column]}){rate})"
            terms.append(f"p_{target}_{column}*{column}")
        return entries, " + ".join(terms) or "0"

    blocks = {"A": "x", "B": "u", "D": "v", "E": "w", "C": "x", "N": "v", "H": "x", "F": "v", "Fw": "w"}
    matrices: dict[str, list[list[str]]] = {name: [] for name in blocks}
    texts = {}
    for rows, rate, parts in (
        ({n: units[n] for n in names["x"]}, " s", "ABDE"),
        (sensors, "", ("C", "N")),
        (outputs, "", ("H", "F", "Fw")),
    ):
        for target, unit in rows.items():
            pieces = []
            for block in parts:
                entries, text = row(target, unit, rate, names[blocks[block]])
                matrices[block].append(entries)
                pieces.append(text)
            texts[target] = " + ".join(pieces)
    shared = {
        "states": {n: units[n] for n in names["x"]},
        "inputs": {n: units[n] for n in names["u"]},
        "takes": {n: units[n] for n in names["v"]},
        "disturbances": {n: {"in": units[n], "peak": 1} for n in names["w"]},
    }
    by_equations = shared | {
        "parameters": parameters,
        "offers": {n: {"is": texts[n], "in": u} for n, u in outputs.items()},
        "sensors": {n: {"is": texts[n], "in": u} for n, u in sensors.items()},
        "equations": {f"{n}'": texts[n] for n in names["x"]},
    }
    by_matrices = shared | {
        "offers": outputs,
        "sensors": sensors,
        "matrices": {n: m for n, m in matrices.items() if n != "H" or m},
    }
    if not outputs:
        by_matrices["matrices"] = {n: m for n, m in matrices.items() if n not in ("H", "F", "Fw")}
    return by_equations, by_matrices


def network_of(kind: dict[str, object]) -> dict[str, object]:
    return {"synth": 1, "kinds": {"k": kind}, "network": {"pattern": {"links": []}}}


@settings(max_examples=60, deadline=None)
@given(models())
def test_equations_and_matrices_give_identical_networks(pair: tuple[dict[str, object], dict[str, object]]) -> None:
    """The law of the two forms: equal hashes, whatever units are declared."""
    by_equations, by_matrices = pair
    assert read(network_of(by_equations)).model_document() == read(network_of(by_matrices)).model_document()


SCOPE = Scope(
    {
        "lag": (Fraction(1, 2), parse_unit("s").dimension),
        "two": (Fraction(2), Unit().dimension),
        "area": (Fraction(4), parse_unit("m2").dimension),
    },
    {"x": parse_unit("m"), "v": parse_unit("km/h"), "u": parse_unit("m")},
    {"x": "state", "v": "state", "u": "input"},
)


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("x/lag", {"x": 2}),
        ("-(x - 2*x)*3/4", {"x": Fraction(3, 4)}),
        ("0.1*x + v*lag", {"x": Fraction(1, 10), "v": Fraction(1, 2)}),
        ("x*two**-3", {"x": Fraction(1, 8)}),
        ("x*sqrt(area)/sqrt(area)", {"x": 1}),
        ("x*sqrt(0.25)", {"x": Fraction(1, 2)}),
        ("x*max(1, 2, two)*min(3, two)*abs(-1)", {"x": 4}),
        ("+x", {"x": 1}),
        ("x*sat(3, two) + x*sat(-3, 2) + x*sat(0.5, 1)", {"x": Fraction(1, 2)}),
        ("x*deadzone(3, two) + x*deadzone(-5, 1) + x*deadzone(0.5, 1)", {"x": -3}),
        ("x*2**-2 + x*0**0.5", {"x": Fraction(1, 4)}),
        ("x*u/x", {"u": 1}),
        ("(x + u)*two - (x - u)/2", {"x": Fraction(3, 2), "u": Fraction(5, 2)}),
        ("x*cos(0) + x*sin(0) + x*exp(0)", {"x": 2}),
        ("0", {}),
        ("x - x", {}),
        ("1e-3*x", {"x": Fraction(1, 1000)}),
        ("x*sin(pi)", {}),
        ("x**1", {"x": 1}),
        ("0 + x", {"x": 1}),
        ("x + 0*two", {"x": 1}),
    ],
)
def test_coefficients_are_exact(text: str, parts: dict[str, Fraction]) -> None:
    found = read_formula(text, SCOPE)
    assert found.parts == parts and (found.straight or not found.terms)


@given(st.floats(-30, 30))
def test_functions_agree_with_the_standard_library(x: float) -> None:
    """Rounded to 40 digits, so the nearest doubles are those of math up to its own rounding."""
    value = f"{x:.6f}"
    for name, truth in (("sin", math.sin), ("cos", math.cos), ("exp", math.exp)):
        found = float(read_formula(f"{name}({value})*x", SCOPE).parts.get("x", 0))
        assert found == pytest.approx(truth(float(value)), rel=1e-13, abs=1e-14)
    tangent = float(read_formula(f"tanh({value})*x", SCOPE).parts.get("x", 0))
    assert tangent == pytest.approx(math.tanh(float(value)), rel=1e-13, abs=1e-14)
    power = float(read_formula(f"abs({value})**1.7*x", SCOPE).parts.get("x", 0))
    assert power == pytest.approx(abs(float(value)) ** 1.7, rel=1e-12, abs=1e-14)
    root = read_formula(f"sqrt(abs({value}))*x", SCOPE).parts.get("x", Fraction(0))
    assert abs(root * root - abs(Fraction(value))) <= Fraction(1, 10**37) * 100


@pytest.mark.parametrize(
    ("text", "said", "at"),
    [
        ("x + v", "the term 'v' has the unit m/s, but m is needed here because 'x' has it", 4),
        ("x + 1", "the term '1' has the unit 1", 4),
        ("x + y", "unknown name 'y'", 4),
        ("x + laq*x", "did you mean 'lag'", 4),
        ("x^2", "write **", 1),
        ("x/0", "cannot divide", 2),
        ("x/(two - 2)", "cannot divide", 3),
        ("x if x else x", "is not accepted", 0),
        ("x.real", "is not accepted", 0),
        ("x and x", "is not accepted", 0),
        ("__import__('os').system('true')", "is not a function here", 0),
        ("(lambda: x)()", "is not a function", 0),
        ("[x][0]", "is not accepted", 0),
        ("f'{x}'", "is not accepted", 0),
        ("x + 'a'", "is not accepted", 4),
        ("True*x", "is not accepted", 0),
        ("1j*x", "is not accepted", 0),
        ("x +", "this is not an expression", None),
        ("0.5 s * x", "give it a name under 'parameters'", 4),
        ("x'", "a derivative stands only on the left", 1),
        ("x # y", "'#' is not accepted", 2),
        ("x, x", "is not accepted", 0),
        ("x)+(x", "this is not an expression", 1),
        ("0x10*x", "is not a number", 0),
        ("1e999*x", "exponent", 0),
        ("(((9**9)**9)**9)**9*x", "too many digits", 0),
        ("x*sqrt(0 - 1)", "not real", 2),
        ("x*sqrt(lag)", "not a whole power", 2),
        ("x*exp(lag)", "needs a number without unit", 2),
        ("x*min(1)", "two or more", 2),
        ("x*min(1, lag)", "different units", 2),
        ("x*exp(1000)", "accepts arguments up to", 2),
        ("x + 2*sin(x)", "sin needs a number without unit", 6),
        ("x**two + lag", "the term 'lag' has the unit s, but m^2 is needed here because 'x**two' has it", 9),
        ("x**0.5", "the power 0.5 of the unit m is not whole", 3),
        ("two**x", "a power must be a number", 5),
        ("x**13", "a power must be a number from -12 to 12", 3),
        ("0**-1*x", "is zero and cannot have the power", 0),
        ("(0 - 2)**0.5*x", "not real", 0),
        ("sat(x)", "sat takes a signal and its limit", 0),
        ("sat(x, u)", "must be a constant above zero", 0),
        ("deadzone(x, lag)", "different units", 0),
        ("x*tanh(lag)", "needs a number without unit", 2),
        ("", "this is not an expression", 0),
        ("-" * 500 + "x", "nested too deeply", None),
        ("(" * 300 + "x" + ")" * 300, "expression", None),
        ("x" * 3000, "too long", 0),
        ("x + lag", "the term 'lag'", 4),
        ("x + 0.1*v", "a number has no unit in an equation", 4),
        ("x := 2", "expression", None),
        ("x\0", "expression|cannot be read", None),
    ],
)
def test_what_is_not_accepted_is_located(text: str, said: str, at: int | None) -> None:
    """One character and one sentence for each reason."""
    with pytest.raises(Refused) as caught:
        read_formula(text, SCOPE)
    sentence = caught.value.sentence
    assert any(option in sentence for option in said.replace("\\", "").split("|")), sentence
    assert at is None or caught.value.offset == at


def test_long_sums_are_read() -> None:
    assert read_formula(" + ".join(["x"] * 400), SCOPE).parts == {"x": 400}


def test_a_group_that_is_not_allowed_is_said() -> None:
    scope = Scope(SCOPE.parameters, SCOPE.signals, SCOPE.groups, ("state",), "only states count.")
    with pytest.raises(Refused, match="the input 'u' cannot be used here; only states count"):
        read_formula("x + u", scope)

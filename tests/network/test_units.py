"""Units: exact factors, the laws of products and powers, and messages with the nearest name."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.base.units import PI, UNITS, Unit, UnitError, parse_number, parse_quantity, parse_unit

names = st.sampled_from(sorted(UNITS))


@pytest.mark.parametrize(
    ("text", "factor", "same_as"),
    [
        ("m/s^2", 1, "m/s/s"),
        ("km/h", Fraction(5, 18), "m/s"),
        ("1/s^2", 1, "s^-2"),
        ("kW", 1000, "N m/s"),
        ("m3/h", Fraction(1, 3600), "m^3/s"),
        ("L", Fraction(1, 1000), "m³"),
        ("bar", 100000, "N/m2"),
        ("%", Fraction(1, 100), "1"),
        ("degC", 1, "K"),
        ("degF", Fraction(5, 9), "K"),
        ("rad", 1, "1"),
        ("deg", PI / 180, "1"),
        ("rpm", PI / 30, "1/s"),
        ("min", 60, "s"),
        ("kWh", 3600000, "J"),
        ("V/A", 1, "ohm"),
        ("mH", Fraction(1, 1000), "V s/A"),
        ("/s", 1, "1/s"),
        ("kg m^2/(s^3 A)", 1, "V"),
        ("(m/s)^2", 1, "m^2/s^2"),
        ("N·m", 1, "J"),
        ("t", 1000, "kg"),
        ("Hz", 1, "1/s"),
    ],
)
def test_units_have_their_exact_factor(text: str, factor: Fraction, same_as: str) -> None:
    """Factors from the SI brochure; degrees and turns from pi to 40 decimals."""
    unit = parse_unit(text)
    assert unit.factor == factor
    assert unit.dimension == parse_unit(same_as).dimension


def test_pound_force_per_square_inch() -> None:
    """psi: 6894.757293168... Pa, as published in NIST SP 811."""
    assert float(parse_unit("psi").factor) == pytest.approx(6894.757293168, rel=1e-12)


@given(names, names, st.integers(-2, 2), st.integers(-1, 1))
def test_text_composes_as_units_do(a: str, b: str, p: int, q: int) -> None:
    """Reading is a homomorphism: products and powers of texts are products and powers of units."""
    together = parse_unit(f"({a})^{p}*({b})^{q}")
    assert together == UNITS[a] ** p * UNITS[b] ** q
    assert parse_unit(f"({a})/({b})") == UNITS[a] / UNITS[b]
    assert parse_unit(together.text).dimension == together.dimension


@pytest.mark.parametrize(
    "text",
    [
        "",
        "metre",
        "m/",
        "m/s kg",
        "2 m",
        "m^99",
        "m)",
        "(m",
        "m^x",
        "((((((((m))))))))",
        "m;s",
        "x" * 200,
        "^2",
        "m^12^12",
    ],
)
def test_what_is_no_unit_is_refused(text: str) -> None:
    with pytest.raises(UnitError):
        parse_unit(text)


def test_an_unknown_unit_names_the_nearest() -> None:
    with pytest.raises(UnitError, match="did you mean 'bar'"):
        parse_unit("baar")
    with pytest.raises(UnitError, match="did you mean 's'"):
        parse_unit("seconds")


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("0.5 s", "1/2", "s"),
        ("2.5", "5/2", "1"),
        ("1/3 s", "1/3", "s"),
        ("1/s", "1", "1/s"),
        ("2 1/s^2", "2", "1/s^2"),
        ("-1e-3 km/h", "-1/1000", "km/h"),
        ("90 %", "90", "%"),
        ("5m", "5", "m"),
        (".5 /s", "1/2", "1/s"),
        ("1/3", "1/3", "1"),
    ],
)
def test_quantities(text: str, value: str, unit: str) -> None:
    number, read, _ = parse_quantity(text)
    assert number == Fraction(value)
    assert read == parse_unit(unit)


@pytest.mark.parametrize("text", ["", "m", "1/0 s", "1e999", "1e9999999999", "9" * 500, "nan", "inf", "1_0", "٣"])
def test_what_is_no_quantity_is_refused(text: str) -> None:
    with pytest.raises(UnitError):
        parse_quantity(text)


@given(st.decimals(allow_nan=False, allow_infinity=False, min_value=-(10**9), max_value=10**9, places=6))
def test_numbers_are_exact(value: object) -> None:
    assert parse_number(str(value)) == Fraction(str(value))


def test_units_are_values() -> None:
    assert Unit() * parse_unit("m") == parse_unit("m")

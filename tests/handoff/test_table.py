"""The gain table says the exact gains in the right units, in a form that a plain CSV reader understands."""

from __future__ import annotations

import csv
import io
from fractions import Fraction

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from synth.base.units import parse_unit
from synth.handoff.digits import digits
from synth.handoff.quantity import quotient
from synth.handoff.table import COLUMNS, csv_text, exact_text, gain_rows
from tests.build import convoy, convoy_gains


@given(st.fractions())
def test_exact_text_loses_nothing(value: Fraction) -> None:
    assert Fraction(exact_text(value)) == value


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_double_is_written_as_a_decimal(value: float) -> None:
    assume(value == 0 or abs(value) > 1e-100)
    text = exact_text(Fraction(value))
    assert "/" not in text
    assert "e" not in text
    assert Fraction(text) == Fraction(value)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        ("-6", "-6"),
        ("-3/2", "-1.5"),
        ("1/3", "1/3"),
        ("1/80", "0.0125"),
        ("0", "0"),
        ("1200", "1200"),
        ("-1/40", "-0.025"),
    ],
)
def test_exact_text_examples(value: str, text: str) -> None:
    assert exact_text(Fraction(value)) == text


@pytest.mark.parametrize(
    ("above", "below", "text"),
    [
        ("m/s^2", "m", "1/s^2"),
        ("m/s^2", "m/s", "1/s"),
        ("m/s^2", "m/s^2", "1"),
        ("N*m", "rad", "N*m/rad"),
        ("N", "m/s", "N*s/m"),
        ("km", "m", "km/m"),
        ("V", "1", "V"),
        ("1", "m", "1/m"),
        ("A", "kg*m", "A/(kg*m)"),
        ("a weird (unit)", "m", "(a weird (unit))/(m)"),
        ("m/s*s", "m", "(m/s*s)/(m)"),
    ],
)
def test_unit_of_a_gain(above: str, below: str, text: str) -> None:
    assert quotient(above, below) == text


UNITS = st.sampled_from(["m", "m/s", "m/s^2", "rad", "N*m", "kg", "1/s", "1"])


@given(UNITS, UNITS)
def test_a_unit_cancels_against_itself_only(above: str, below: str) -> None:
    assert (quotient(above, below) == "1") == (above == below)


def test_rows_of_the_convoy_are_read_back_by_a_plain_reader() -> None:
    text = csv_text(gain_rows(convoy(), convoy_gains(), "ab" * 32))
    assert text.count("\r\n") == 4
    rows = list(csv.DictReader(io.StringIO(text, newline="")))
    assert tuple(rows[0]) == COLUMNS
    assert [(r["signal"], r["gain"], r["gain_unit"]) for r in rows] == [
        ("slot", "-6", "1/s^2"),
        ("speed", "-5", "1/s"),
        ("drive", "-1.5", "1"),
    ]
    assert {r["sign_convention"] for r in rows} == {"u = K y"}
    assert {r["period_s"] for r in rows} == {"0.02"}
    assert {r["certificate_sha256"] for r in rows} == {"ab" * 32}


def test_a_zero_gain_keeps_its_row() -> None:
    rows = gain_rows(convoy(), convoy_gains(("-6", "0", "-1.5")))
    assert [row.gain for row in rows] == ["-6", "0", "-1.5"]


@given(st.floats(allow_nan=False, allow_infinity=False), st.integers(1, 8))
def test_digits_rounded_up_is_never_below_and_down_never_above(value: float, count: int) -> None:
    assert Fraction(digits(value, count, "up")) >= Fraction(repr(value))
    assert Fraction(digits(value, count, "down")) <= Fraction(repr(value))


@given(st.fractions(), st.integers(1, 8))
def test_digits_of_a_fraction_round_outward_too(value: Fraction, count: int) -> None:
    assert Fraction(digits(value, count, "down")) <= value <= Fraction(digits(value, count, "up"))


@pytest.mark.parametrize(
    ("value", "rounding", "text"),
    [
        (0.61234, "up", "0.6124"),
        (0.61234, "down", "0.6123"),
        (0.703, "down", "0.703"),
        (1.0, "up", "1"),
        (1234567.0, "nearest", "1.235e6"),
        (0.000012, "nearest", "1.2e-5"),
        (-0.05, "nearest", "-0.05"),
        (float("inf"), "up", "unlimited"),
        (150000.0, "nearest", "150000"),
    ],
)
def test_digits_examples(value: float, rounding: str, text: str) -> None:
    assert digits(value, 4, rounding) == text


def test_digits_refuses_what_is_no_number() -> None:
    with pytest.raises(ValueError, match="NaN"):
        digits(float("nan"))


WRITTEN = st.sampled_from(
    [
        "m",
        "m/s",
        "m/s^2",
        "rad",
        "N*m",
        "N m",
        "kg",
        "1/s",
        "1",
        "m/s/s",
        "kg/(m s)",
        "m3",
        "s^-1",
        "m/s²",
        "°C",
        "m/s*s",
        "%",
    ]
)


@given(WRITTEN, WRITTEN)
def test_the_text_of_a_gain_unit_is_the_quotient_by_the_reader_of_units(above: str, below: str) -> None:
    assert parse_unit(quotient(above, below)) == parse_unit(above) / parse_unit(below)

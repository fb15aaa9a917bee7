"""Units of products and quotients read as a person writes them, and mean what their parts mean."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.base.unit_text import product, quotient
from synth.base.units import LARGEST_POWER, UNITS, UnitError, parse_unit

names = st.sampled_from(sorted(UNITS))
units = st.one_of(names, st.builds("{}/{}".format, names, names), st.builds("{}^{}".format, names, st.integers(2, 3)))


@given(units, units)
def test_the_text_has_the_unit_of_the_product_and_of_the_quotient(a: str, b: str) -> None:
    for text, meant in (
        (product(a, b), parse_unit(a) * parse_unit(b)),
        (quotient(a, b), parse_unit(a) / parse_unit(b)),
    ):
        if max(map(abs, meant.dimension)) <= LARGEST_POWER:
            assert parse_unit(text) == meant


@pytest.mark.parametrize(
    ("shown", "text"),
    [
        (product("K", "s"), "K s"),
        (product("m/s", "s"), "m"),
        (product("1", "s"), "s"),
        (quotient("K", "s"), "K/s"),
        (quotient("m/s", "s"), "m/s^2"),
        (quotient("°C", "s"), "°C/s"),
    ],
)
def test_no_bracket_where_none_is_needed(shown: str, text: str) -> None:
    assert shown == text


@pytest.mark.parametrize(
    ("text", "hint"),
    [
        ("Ns", "did you mean 'N s' or 'ns'?"),
        ("Nm", "did you mean 'N m' or 'nm'?"),
        ("kgm", "did you mean 'kg m'?"),
        ("KW", "did you mean 'kW' or 'K W'?"),
        ("baar", "did you mean 'bar'?"),
        ("m2.5", "powers in the unit 'm2.5' must be whole numbers"),
        ("m^0.5", "must be whole numbers"),
        ("m^(1/2)", "must be whole numbers"),
    ],
)
def test_a_refused_unit_is_answered_with_what_was_meant(text: str, hint: str) -> None:
    with pytest.raises(UnitError) as refused:
        parse_unit(text)
    assert hint in str(refused.value)

"""Gain tables: the same exact gains come back, and nothing doubtful is let in."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from synth.base.errors import InputError
from synth.network import Gains, read, read_gains
from synth.network.gain_table import COLUMNS
from tests.build import convoy_gains
from tests.network.files import CONVOY, convoy_text, read_text

CELLS = [
    ["hauler", "demand", "slot", "-6", "(m/s^2)/(m)", "m/s^2", "m", "u = K y", "0.02", ""],
    ["hauler", "demand", "speed", "-5", "1/s", "m/s^2", "m/s", "u = K y", "0.02", ""],
    ["hauler", "demand", "drive", "-3/2", "1", "m/s^2", "m/s^2", "u = K y", "0.02", "0" * 64],
]


def table_text(json_form: bool = False) -> str:
    """The convoy's gains as a table."""
    if json_form:
        rows = [dict(zip(COLUMNS, row, strict=True)) for row in CELLS]
        return json.dumps({"table": "localgain gains", "rows": rows}, indent=1)
    return "\n".join(["# invented", ",".join(COLUMNS), *(",".join(row) for row in CELLS)]) + "\n"


def gains_of(text: str, folder: Path) -> Gains:
    file = folder / "gains"
    file.write_text(text, encoding="utf-8", newline="")
    return read_gains(file, read(CONVOY))


def refusal(text: str, folder: Path) -> str:
    with pytest.raises(InputError) as caught:
        gains_of(text, folder)
    said = "\n".join(str(problem) for problem in caught.value.problems)
    return said.replace(str(folder / "gains"), "gains")


def test_both_forms_give_the_gains_back(tmp_path: Path) -> None:
    expected = convoy_gains()
    for text in (
        table_text(),
        table_text(True),
        table_text().replace("\n", "\r\n"),
        table_text(True)
        .replace(" ", "\t")
        .replace("u\t=\tK\ty", "u = K y")
        .replace("localgain\tgains", "localgain gains"),
    ):
        assert gains_of(text, tmp_path) == expected
    quoted = table_text().replace("u = K y", '"u = K y"').replace("hauler", '"hauler"', 1)
    assert gains_of(quoted, tmp_path) == expected


def test_json_numbers_are_decimals(tmp_path: Path) -> None:
    text = table_text(True).replace('"-3/2"', "-1.5").replace('"0.02"', "2e-2")
    assert gains_of(text, tmp_path) == convoy_gains()


@pytest.mark.parametrize(
    ("before", "after", "said"),
    [
        ("hauler,demand,slot", "haulr,demand,slot", "gains:3:1: kind: unknown kind 'haulr' (did you mean 'hauler'?)"),
        (
            "hauler,demand,slot",
            "hauler,demnd,slot",
            "gains:3:8: actuator: hauler has no actuator 'demnd' (did you mean 'demand'?)",
        ),
        (
            "demand,speed,-5",
            "demand,sped,-5",
            "gains:4:15: signal: hauler has no sensor 'sped' (did you mean 'speed'?)",
        ),
        ("demand,speed,-5", "demand,slot,-5", "stands twice"),
        (",-6,", ",six,", "gains:3:20: gain: 'six' is not a number"),
        (",-6,", ",1/0,", "is not a number"),
        (",-6,", ",nan,", "is not a number"),
        (",-6,", ",1e300,", "too large"),
        (",-6,", ",,", "this cell is empty"),
        ("m/s^2,m,u", "km/h,m,u", "actuator_unit: 'km/h' is not the declared unit 'm/s^2'"),
        ("m/s^2,m,u", "m/s^2,km,u", "signal_unit: 'km' is not the declared unit 'm'"),
        ("(m/s^2)/(m)", "1/s", "gain_unit: '1/s' is not the declared unit '(m/s^2)/(m)'"),
        ("(m/s^2)/(m)", "blah", "unknown unit 'blah'"),
        ("u = K y", "u = -K y", "turn every sign"),
        ("0.02", "-1", "period_s"),
        ("0" * 64, "abc", "SHA-256"),
        ("gain_unit", "gainunit", "unknown column 'gainunit' (did you mean 'gain_unit'?)"),
        ("u = K y,0.02,\n", "u = K y\n", "this row has 8 cells"),
        ("hauler,demand,drive", "hauler,demand,slot", "the gain of hauler from drive to demand is missing"),
        ("# invented\n", '"', "never closed"),
    ],
)
def test_a_doubtful_table_is_refused(before: str, after: str, said: str, tmp_path: Path) -> None:
    """Start from the valid table and break one thing."""
    text = table_text()
    assert before in text
    assert said in refusal(text.replace(before, after, 1), tmp_path)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "empty"),
        ("{", "not valid JSON"),
        ('{"table": "x", "rows": []}', "'table' must be"),
        ('{"table": "localgain gains"}', "'rows' must be"),
        ('{"table": "localgain gains", "rows": [1]}', "an object with the keys"),
        ('{"a": NaN}', "not a finite number"),
        ('{"table": "localgain gains", "table": 1, "rows": []}', "stands twice"),
        ("[" * 100_000, "unknown column"),
        ('{"a":' * 100_000, "cannot be read"),
    ],
)
def test_what_is_no_table_is_refused(text: str, said: str, tmp_path: Path) -> None:
    assert said in refusal(text, tmp_path)


def test_json_places(tmp_path: Path) -> None:
    message = refusal(table_text(True).replace('"gain": "-6"', '"gain": "six"'), tmp_path)
    assert message.startswith("gains:8:12:") and "'six' is not a number" in message


def test_entries_that_design_excludes(tmp_path: Path) -> None:
    """``design.uses`` lets a row be absent, and refuses a gain other than zero there."""
    network = read_text(convoy_text(("period: 0.02 s", "uses: {hauler: {demand: [slot, speed]}}")), tmp_path)
    file = tmp_path / "gains.csv"
    lines = table_text().splitlines()
    file.write_text("\n".join(lines[:-1]))
    assert read_gains(file, network)["hauler"].K.rows[0][2] == 0
    file.write_text("\n".join(lines))
    with pytest.raises(InputError, match=r"design\.uses does not let demand use drive"):
        read_gains(file, network)

"""What is handed off comes back digit for digit, from the CSV table and from the JSON table."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from synth.base.errors import InputError
from synth.handoff import bundle, hand_off
from synth.handoff.table import csv_text, gain_rows
from synth.network.gain_table import read_gains
from synth.network.model import Goal
from tests.build import convoy, convoy_gains
from tests.handoff.standins import FakeCertificate

GAIN = st.one_of(
    st.fractions(min_value=-1000, max_value=1000, max_denominator=10**6),
    st.floats(-1e3, 1e3).map(Fraction),
    st.decimals(-100, 100, places=6, allow_nan=False).map(Fraction),
).filter(lambda value: value == 0 or abs(value) > Fraction(1, 10**99))


@given(st.tuples(GAIN, GAIN, GAIN))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_the_csv_table_reads_back_to_the_same_gains(tmp_path: Path, K: tuple[Fraction, Fraction, Fraction]) -> None:
    gains = convoy_gains(K)
    path = tmp_path / "gains.csv"
    path.write_bytes(csv_text(gain_rows(convoy(), gains)).encode())
    assert read_gains(path, convoy()) == gains


@pytest.mark.parametrize("name", ["gains.csv", "gains.json"])
@pytest.mark.parametrize("K", [("-6", "-5", "-1.5"), ("-16/3", "0", "1/7"), (0.1, -1e-9, 12345.678)])
def test_both_tables_of_a_bundle_read_back(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, K: tuple[str, str, str]
) -> None:
    monkeypatch.setattr(bundle, "_still_verified", lambda path, network: None)
    gains = convoy_gains(K)
    hand_off(convoy(), gains, FakeCertificate(convoy(), gains), tmp_path / "out")
    assert read_gains(tmp_path / "out" / name, convoy()) == gains


def test_a_table_without_a_period_reads_back(tmp_path: Path) -> None:
    network = replace(convoy(), goal=Goal())
    (tmp_path / "gains.csv").write_bytes(csv_text(gain_rows(network, convoy_gains())).encode())
    assert read_gains(tmp_path / "gains.csv", network) == convoy_gains()


def test_a_turned_sign_convention_does_not_read_back(tmp_path: Path) -> None:
    text = csv_text(gain_rows(convoy(), convoy_gains())).replace("u = K y", "u = -K y", 1)
    (tmp_path / "gains.csv").write_bytes(text.encode())
    with pytest.raises(InputError, match="sign_convention"):
        read_gains(tmp_path / "gains.csv", convoy())

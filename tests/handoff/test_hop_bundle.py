"""The bundle of a hop claim: exact tables, what they mean, and what to fall back to without radio."""

from __future__ import annotations

import hashlib
import json
from dataclasses import replace
from fractions import Fraction

import pytest

from synth.base.errors import InputError
from synth.handoff.bundle import UnprovenTable
from synth.handoff.hop_bundle import _deaf, hand_off_hop, radio_lost
from synth.network import read_gains
from synth.proof.hop_statement import prove_hop
from tests.gain.gap_files import gains, network

SHORT = {"loaded": ("0.5", "1")}


def test_a_bundle_carries_the_gains_the_claim_and_its_meaning(tmp_path):
    string = network("loaded", "empty")
    K = gains(string)
    bundle = hand_off_hop(string, K, prove_hop(string, K), tmp_path / "out")
    assert bundle.as_json()["proven"] is False
    assert bundle.as_json()["hop_claim"] == "peak"
    assert read_gains(tmp_path / "out" / "gains.csv", string) == K
    readme = (tmp_path / "out" / "README.txt").read_text()
    assert "weaker than a proof that the whole stays calm" in readme
    assert "no certificate" in readme
    assert "loaded: 2 s" in readme
    for line in (tmp_path / "out" / "SHA256SUMS").read_text().splitlines():
        digest, name = line.split(maxsplit=1)
        assert hashlib.sha256((tmp_path / "out" / name).read_bytes()).hexdigest() == digest
    assert bundle.fallback_gaps is None


def test_radio_lost_has_its_own_table_at_a_wider_gap(tmp_path):
    """Mean square: with the predecessor's acceleration the gap may be smaller than without (A7 of the literature:
    Darbha, Konduri and Pagilla, IEEE T-ITS 20(5), 2019)."""
    string = network("loaded", heard="0 s", types=SHORT, notion="mean square", radio=["radio"])
    K = gains(string, convergence="0.1", weight="0.3", types=SHORT)
    statement = prove_hop(string, K)
    assert statement.proven
    lost = radio_lost(string, K)
    assert lost.statement.proven
    assert Fraction(11, 10) > lost.statement.time_gaps["loaded"] > 1
    assert lost.gains["loaded"].K.rows[0] == (*K["loaded"].K.rows[0][:2], 0)
    assert all(link.name != "radio" for link in lost.network.links)
    bundle = hand_off_hop(string, K, statement, tmp_path / "out")
    assert "gains_radio_lost.csv" in bundle.files
    assert bundle.fallback_gaps["loaded"] == float(lost.statement.time_gaps["loaded"])
    assert bundle.as_json()["radio_lost"]["switching"].startswith("Not covered")
    assert "Not covered: the instant of switching" in (tmp_path / "out" / "README.txt").read_text()
    document = json.loads((tmp_path / "out" / "hop_statement_radio_lost.json").read_text())
    assert document["network_hash"] == lost.network.hash


def test_what_is_not_proven_or_about_something_else_is_not_handed_off(tmp_path):
    string = network("loaded")
    K = gains(string)
    statement = prove_hop(string, K)
    other = gains(string, convergence="0.3")
    with pytest.raises(UnprovenTable, match="other gains"):
        hand_off_hop(string, other, statement, tmp_path / "out")
    with pytest.raises(UnprovenTable, match="does not stand"):
        hand_off_hop(string, K, replace(statement, proven=False), tmp_path / "out")
    with pytest.raises(UnprovenTable, match="another network"):
        hand_off_hop(network("empty"), K, statement, tmp_path / "out")
    assert not (tmp_path / "out").exists()
    with pytest.raises(InputError, match="names no radio"):
        radio_lost(string, K)


def test_only_sensors_of_the_radio_are_silenced():
    string = network("loaded", heard="0.1 s", radio=["radio"])
    K = gains(string, weight="0.4")
    assert _deaf(string, K, string.goal.hop)["loaded"].K.rows == ((Fraction(1, 5), Fraction(1, 2), 0),)

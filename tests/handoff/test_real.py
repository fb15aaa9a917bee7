"""With real certificates: what is shipped is re-verified here and on the other side, and a false one does not leave."""

from __future__ import annotations

import json
import subprocess
import sys
from copy import deepcopy
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest

from synth.handoff import UnprovenTable, hand_off
from synth.network.gain_table import read_gains
from synth.network.gains import Gains, gain_set
from synth.network.model import Link, Network
from synth.proof import Certificate, prove
from tests.build import M, scalar_kind


def tanks() -> tuple[Network, Gains]:
    """Invented tanks in a row, each fed by half the level of the one before: quick to prove."""
    kind = scalar_kind(2)
    link = Link("pipe", "tank", "level", (-1,), "tank", "inflow", Fraction(1, 2))
    return Network("Invented tanks", (kind,), (link,)), Gains((gain_set(kind, M([["-1"]])),))


@pytest.fixture(scope="module")
def certificate() -> Certificate:
    network, gains = tanks()
    found = prove(network, gains)
    assert found.proven
    return found


def check(folder: Path) -> subprocess.CompletedProcess[str]:
    """What the firmware team runs: the shipped checker, with nothing of this package in reach."""
    command = [sys.executable, "-I", "check.py", "certificate.json"]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)


def test_the_other_side_verifies_the_proof_and_reads_the_gains(tmp_path: Path, certificate: Certificate) -> None:
    network, gains = tanks()
    made = hand_off(network, gains, certificate, tmp_path / "out")
    assert made.proven_continuous
    assert check(tmp_path / "out").returncode == 0
    assert read_gains(tmp_path / "out/gains.csv", network) == gains
    assert read_gains(tmp_path / "out/gains.json", network) == gains
    # peak of |x| is 1/(3 - 1/2) of the declared disturbance 1, and the range is the next power of two
    facts = made.scaling["tank.push.x"]
    assert facts["signal_peak"] == pytest.approx(0.4, rel=1e-3)
    assert facts["signal_peak"] >= 0.4
    assert facts["signal_range"] == 0.5


def test_a_certificate_changed_on_the_way_is_refused_on_the_other_side(
    tmp_path: Path, certificate: Certificate
) -> None:
    network, gains = tanks()
    hand_off(network, gains, certificate, tmp_path / "out")
    path = tmp_path / "out/certificate.json"
    document = json.loads(path.read_text())
    document["gains"][0]["K"] = [["-2"]]
    path.write_text(json.dumps(document))
    assert check(tmp_path / "out").returncode == 1


def test_a_certificate_that_only_says_proven_does_not_leave(tmp_path: Path, certificate: Certificate) -> None:
    network, gains = tanks()
    document = deepcopy(certificate.document)
    document["constants"]["G"] = "0.001"
    with pytest.raises(UnprovenTable, match="the checker refuses the certificate"):
        hand_off(network, gains, replace(certificate, document=document), tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


def test_the_same_proof_made_twice_gives_the_same_bundle(tmp_path: Path, certificate: Certificate) -> None:
    network, gains = tanks()
    hand_off(network, gains, certificate, tmp_path / "one")
    hand_off(network, gains, prove(network, gains), tmp_path / "two")
    for path in (tmp_path / "one").iterdir():
        assert path.read_bytes() == (tmp_path / "two" / path.name).read_bytes(), path.name

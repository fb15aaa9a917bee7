"""A certificate of the firmware route makes a bundle that is proven as flashed, and that checks itself."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

from synth.base.errors import InputError
from synth.handoff import hand_off
from synth.network.gains import Gains, gain_set
from synth.proof import Rounding, prove_firmware
from tests.build import M
from tests.proof.networks import chain


def test_proven_as_flashed(tmp_path):
    network, _ = chain()
    gains = Gains((gain_set(network.kinds[0], M([["-1"]])),))
    found = prove_firmware(network, gains, "0.5", "0.5", Rounding({"tank.x": "0.01"}))
    made = hand_off(network, gains, found, tmp_path / "out")
    assert made.proven is True
    assert made.proven_continuous is False
    table = json.loads((tmp_path / "out" / "gains.json").read_text(encoding="utf-8"))
    assert (table["proven_as_flashed"], table["proven_continuous"]) == (True, False)
    origin = json.loads((tmp_path / "out" / "provenance.json").read_text(encoding="utf-8"))
    assert origin["predicate"]["proven_as_flashed"] is True
    readme = (tmp_path / "out" / "README.txt").read_text(encoding="utf-8")
    assert "check_firmware.py certificate.json" in readme
    assert "does not count as proven as flashed" not in " ".join(readme.split())
    command = [sys.executable, "-S", "check_firmware.py", "certificate.json"]
    done = subprocess.run(command, cwd=tmp_path / "out", capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "gains.csv beside it holds the same gains" in done.stdout
    other = Gains((gain_set(network.kinds[0], M([["-1.001"]])),))
    with pytest.raises(InputError, match="other gains"):
        hand_off(network, other, found, tmp_path / "other")

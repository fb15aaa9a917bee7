"""A certificate of the firmware route makes a bundle that is proven as flashed, and that checks itself."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction

import pytest

from synth.base.errors import InputError
from synth.handoff import hand_off
from synth.network.controller import Wanted
from synth.network.gain_table import read_gains
from synth.network.gains import Gains, gain_set
from synth.proof import Rounding, prove, prove_firmware
from synth.proof.firmware_limits import prove_as_flashed
from synth.whole_job import bundle_of
from tests.build import M
from tests.handoff.test_real import tanks
from tests.local.test_controllers import tanks as tanks_with
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


def sampled(network, period, **goal):
    return replace(network, goal=replace(network.goal, period=Fraction(period), **goal))


def test_both_proofs_and_the_timing_sheet_in_one_bundle(tmp_path):
    network, gains = tanks()
    network = sampled(network, "1/2", rounding=Rounding({"tank.x": "0.01"}))
    flashed = prove_as_flashed(network, gains)
    made = bundle_of(network, gains, prove(network, gains), flashed, tmp_path / "out")
    assert made.proven and made.proven_continuous
    for checker, name in (("check_firmware.py", "certificate.json"), ("check.py", "certificate_continuous.json")):
        command = [sys.executable, "-S", checker, name]
        done = subprocess.run(command, cwd=tmp_path / "out", capture_output=True, text=True)
        assert done.returncode == 0, done.stdout + done.stderr
    rows = list(csv.DictReader((tmp_path / "out" / "timing.csv").open(encoding="utf-8", newline="")))
    assert rows[0]["quantity"] == "sample period" and float(rows[0]["longest_proven_s"]) > 0.5
    assert made.as_json()["timing"]["rows"][0]["declared_s"] == 0.5
    readme = " ".join((tmp_path / "out" / "README.txt").read_text(encoding="utf-8").split())
    assert "How far times may grow" in readme and "sample tank.x: multiples of 0.01" in readme
    table = json.loads((tmp_path / "out" / "gains.json").read_text(encoding="utf-8"))
    assert table["sampling"]["rounding"]["sensors"] == {"tank.x": "0.01"} and table["sampling"]["part_of_the_proof"]


def test_an_unproven_period_says_which_one_proves(tmp_path):
    network, gains = tanks()
    network = sampled(network, "6")
    gains = Gains((gain_set(network.kinds[0], M([["-3"]])),))
    flashed = prove_as_flashed(network, gains)
    made = bundle_of(network, gains, prove(network, gains), flashed, tmp_path / "out")
    assert not made.proven and made.proven_continuous
    assert "with these gains a period of" in made.reason and "does not count as proven as flashed" in made.reason
    readme = " ".join((tmp_path / "out" / "README.txt").read_text(encoding="utf-8").split())
    assert "with these gains a period of" in readme


def test_gains_json_lists_shared_gains_once_and_the_rows_of_controllers(tmp_path):
    network = tanks_with(Wanted(estimator=("x",)))
    kind = network.kinds[0]
    twin = replace(kind, name="twin", group="crew")
    links = tuple(replace(link, strength=Fraction(1, 5)) for link in network.links)
    network = replace(network, kinds=(replace(kind, group="crew"), twin), links=links)
    K = M([["0", "-0.8", "0"], ["0", "0", "1.5"]])
    gains = Gains(tuple(gain_set(one, K) for one in network.kinds))
    hand_off(network, gains, prove(network, gains), tmp_path / "out")
    table = json.loads((tmp_path / "out" / "gains.json").read_text(encoding="utf-8"))
    assert {row["kind"] for row in table["rows"]} == {"crew"} and len(table["rows"]) == 6
    assert table["gain_sets"] == {"crew": ["tank", "twin"]}
    told = table["controllers"]["tank"]
    assert told["innovation_rows"] == [
        {"of": "x_innovation", "sum": [{"signal": "x", "factor": "1"}, {"signal": "x_estimate", "factor": "-1"}]}
    ]
    rate = {part["signal"]: part["factor"] for part in told["firmware_rows"][0]["sum"]}
    assert rate == {"x_estimate": "-1", "push": "1", "x_correction": "1"}
    assert read_gains(tmp_path / "out" / "gains.json", network) == gains
    assert read_gains(tmp_path / "out" / "gains.csv", network) == gains

"""Gains about an operating point must travel with that point, or the first command sent would be wrong."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import synth
from synth.handoff.operating import operating_values
from tests.build import convoy

BASIN = """
synth: 1
title: Row of basins, invented data
kinds:
  basin:
    parameters: {area: 30 m^2, valve: 0.05 m^2/s, metre: 1 m}
    states: {level: {in: m, band: 0.4 m}}
    inputs: {pump: {in: m^3/s, limit: 0.05}}
    disturbances: {rain: {in: m^3/s, peak: 0.003}}
    takes: {inflow: m^3/s}
    offers: [level]
    sensors: [level]
    operating_point: {level: 2 m}
    equations:
      level': (pump + inflow + rain - valve*sqrt(level*metre))/area
network:
  pattern:
    dimension: 1
    links: [{name: spill, from: basin.level, at: -1, to: basin.inflow, strength: 0.004 m^2/s}]
design: {target: 0.9, slowest: 0.0005 1/s, fastest: 0.01 1/s}
"""


def test_values_at_rest_stand_in_the_bundle(tmp_path: Path) -> None:
    file = tmp_path / "basins.yaml"
    file.write_text(BASIN, encoding="utf-8")
    network = synth.read(file)
    rest = operating_values(network)["basin"]
    assert rest["sensor"]["level"] == (2.0, "m")
    assert rest["actuator"]["pump"][0] == pytest.approx(0.05 * 2**0.5, rel=1e-12)
    design = synth.design(network)
    certificate = synth.prove(network, design)
    assert certificate.proven, certificate.reasons
    bundle = synth.hand_off(network, design, certificate, tmp_path / "bundle")
    text = (bundle.path / "README.txt").read_text(encoding="utf-8")
    assert "value at rest" in text
    assert repr(rest["actuator"]["pump"][0]) in text
    table = json.loads((bundle.path / "gains.json").read_text(encoding="utf-8"))
    assert table["at_rest"]["basin"]["sensor"]["level"] == {"value": 2.0, "unit": "m"}


def test_a_network_of_differences_has_none() -> None:
    assert operating_values(convoy()) == {}

"""Design of networks that are no patterns of fixed links: members, rules, edges, links that may weaken."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain.dense import radius_literally
from synth.gain.enclosure import network_radius
from synth.local import Design, design
from synth.local.finish import Chart
from synth.local.journal import Journal, key_of
from synth.local.merit import measure
from synth.local.plant import field_of
from synth.local.pull import scaled
from synth.local.sweeping import sweep
from synth.network import read
from tests.local.members import FOLLOW, HAULER, pattern, problem, ring

RULES = {"rules": {"follow": {"to": "hauler.ahead", "from": ["hauler.place"], "most": 2, "strength": "0.25 1/s^2",
                              "relative": True}}}  # fmt: skip
WEAK = {"pattern": {"dimension": 1, "links": [{**FOLLOW, "weakens": True}]}}
EDGE: dict[str, Any] = {"pattern": {"dimension": 1, "links": [FOLLOW]}, "edge": {"side": "first"}}


def small(described: dict[str, Any]) -> Design:
    return design(read(described), starts=1, check_obstruction=False)


def test_a_ring_of_equal_members_is_designed_as_the_pattern() -> None:
    members, line = small(ring(4, lags=1)), small({**pattern(), "kinds": {"hauler": _lag("0.3 s")}})
    assert members.reached and line.reached
    assert members.upper == pytest.approx(line.upper, rel=0.02)


def _lag(text: str) -> dict[str, Any]:
    return {**HAULER, "parameters": {"lag": text}}


def test_two_variants_share_one_gain_set_that_no_grid_beats() -> None:
    network = read(ring(4, lags=2, gains=None))  # type: ignore[arg-type]
    assert list(network.gain_groups()) == ["hauler"] and len(network.kinds) == 2
    found = design(network, starts=1, check_obstruction=False)
    assert found.reached and len({gain.K for gain in found.gains.sets}) == 1
    field = field_of(network)
    rng, best = np.random.default_rng(0), np.inf
    (K,) = {gain.K for gain in found.gains.sets}
    for _ in range(150):
        trial = K.floats() * (1 + rng.normal(0, rng.choice([0.02, 0.1, 0.4]), (1, 3)))
        merit = measure(field, tuple(p.to_scaled(trial) for p in field.plants), steep=False)
        best = min(best, merit.radius if merit.excess <= 1e-9 else np.inf)
    assert found.upper <= 1.01 * best


@pytest.mark.parametrize("described", [RULES, WEAK, EDGE], ids=["rules", "weakening link", "edge"])
def test_every_description_is_designed_and_its_radius_is_the_literal_one(described: dict[str, Any]) -> None:
    found = small(problem(described))
    assert found.reached and found.broken == ()
    whole = network_radius(found.network, found.gains)
    assert whole.lower <= found.upper and found.lower <= whole.upper
    for piece in whole.pieces[:2]:
        literal = radius_literally(piece.assembly.upper, 60)
        assert literal <= max(found.upper, 1e-9) * 1.1
        if piece is whole.pieces[0]:  # a section that is cut off may lie far below
            assert piece.lower * (1 - 1e-6) <= literal


@pytest.mark.parametrize(
    "described", [RULES, WEAK, EDGE, ring(3, lags=1)["network"]], ids=["rules", "weak", "edge", "members"]
)
def test_merit_agrees_with_what_is_guaranteed_and_its_slopes_with_differences(described: dict[str, Any]) -> None:
    from synth.local.guarantee import guarantee
    from synth.local.pull import rounded

    network = read(problem(described))
    field = field_of(network)
    chart = Chart(field, 0.0)
    point = chart.random(np.random.default_rng(3), clustered=False)
    value, slope = chart.value(point, 7.0)
    for k in range(chart.size):
        step = np.zeros(chart.size)
        step[k] = 1e-6
        difference = (chart.value(point + step, 7.0)[0] - chart.value(point - step, 7.0)[0]) / 2e-6
        assert slope[k] == pytest.approx(difference, rel=2e-3, abs=2e-3 * (1 + np.abs(slope).max()))
    exact = rounded(field, chart.gains(point)[0], 12)
    merit, result = measure(field, scaled(field, exact)), guarantee(network, exact)
    assert merit.radius == pytest.approx(result.upper, rel=1e-4)
    demand = max(p.value / float(p.limit) for p in result.peaks if p.role == "actuator" and p.limit)
    assert max(float(p[-1]) for p in merit.peaks) == pytest.approx(demand, rel=1e-3)
    assert np.isfinite(value)


def test_gains_of_their_own_are_no_worse_and_a_second_run_uses_the_first(tmp_path: Path) -> None:
    network = read(ring(6, "per_unit"))
    field, path = field_of(network), tmp_path / "finished"
    own = sweep(field, Journal(path), workers=1)
    assert own.merit.excess < 1e-6
    shared = field_of(read(ring(6)))
    chart = Chart(shared, 0.0)
    rng = np.random.default_rng(2)
    best = min(chart.height(chart.random(rng, clustered=k % 2 == 0), 30.0) for k in range(40))
    assert own.merit.radius < np.exp(best)
    lines = path.read_text().count("\n")
    again = sweep(field, Journal(path), workers=1)
    assert path.read_text().count("\n") == lines
    assert np.array_equal(again.point, own.point)


def test_equal_units_are_solved_once() -> None:
    network = read(ring(5, "per_unit", lags=1))
    assert len(field_of(network).plants) == 1


def test_killed_and_run_again_uses_finished_work_and_ends_the_same(tmp_path: Path) -> None:
    script = (
        "import sys\nfrom synth.local.plant import field_of\nfrom synth.local.journal import Journal\n"
        "from synth.local.sweeping import sweep\nfrom synth.network import read\nfrom tests.local.members import ring\n"
        "import synth.local.sweeping as s\ns._CHUNK, s._SWEEPS, s._FIRST, s._NEXT = 1, 2, 8, 8\n"
        "print(sweep(field_of(read(ring(4, 'per_unit'))), Journal(sys.argv[1]), 1).point.tolist())\n"
    )
    whole, cut = tmp_path / "whole", tmp_path / "cut"
    run = [sys.executable, "-c", script]
    first = subprocess.run([*run, str(whole)], capture_output=True, text=True, check=True)
    process = subprocess.Popen([*run, str(cut)], stdout=subprocess.DEVNULL)
    until = time.monotonic() + 120
    while time.monotonic() < until and not (cut.exists() and cut.read_text().count('"key"') >= 2):
        time.sleep(0.02)
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    kept = len(Journal(cut).known)
    assert 2 <= kept < len(Journal(whole).known)
    with cut.open("a") as file:
        file.write('{"key": "half a li')
    assert len(Journal(cut).known) == kept
    second = subprocess.run([*run, str(cut)], capture_output=True, text=True, check=True)
    assert second.stdout == first.stdout
    assert Journal(cut).known == Journal(whole).known


def test_a_foreign_file_is_not_taken_for_finished_work(tmp_path: Path) -> None:
    path = tmp_path / "notes.txt"
    path.write_text("mine\n")
    with pytest.raises(InputError, match="finished work"):
        Journal(path)
    assert path.read_text() == "mine\n"
    assert key_of(np.ones(2), 1) != key_of(np.ones((2, 1)), 1)


def test_aims_beside_many_gain_sets_are_refused() -> None:
    network = read(ring(12, "per_unit", aim={"least": "effort"}))
    with pytest.raises(InputError, match="12 gain sets"):
        design(network, check_obstruction=False)

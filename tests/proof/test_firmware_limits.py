"""The verdict about the code as flashed, how far times may grow, and controllers that keep an estimate (invented)."""

from __future__ import annotations

import csv
import io
import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import InputError
from synth.gain.sampled.network import sampled_units
from synth.gain.sampled.peaks import sampled_peaks
from synth.network.controller import Wanted
from synth.network.gains import Gains, gain_set
from synth.proof import Rounding, prove_firmware
from synth.proof.firmware_limits import guaranteed, prove_as_flashed
from tests.build import M
from tests.local.test_controllers import tanks
from tests.proof.networks import chain


def sampled_chain(period="0.5", delay="0", K="-1", rounding=None):
    network, _ = chain(strength="0.3")
    goal = replace(
        network.goal,
        period=Fraction(period),
        computation_delay=Fraction(delay),
        rounding=rounding or Rounding(),
    )
    return replace(network, goal=goal), Gains((gain_set(network.kinds[0], M([[K]])),))


@pytest.fixture(scope="module")
def flashed():
    network, gains = sampled_chain()
    found = prove_as_flashed(network, gains, target=Fraction(7, 10))
    assert found.proven, found.reason
    return network, gains, found


def test_longest_times_prove_and_longer_ones_do_not(flashed):
    network, gains, found = flashed
    goal = Fraction(7, 10)
    rows = {(row.quantity, row.link): row for row in found.timing.rows if row.longest != math.inf}
    longest = Fraction(rows["sample period", ""].longest).limit_denominator(1000)
    assert 0.5 < longest < 5
    assert prove_firmware(network, gains, longest, target=goal).proven
    assert not prove_firmware(network, gains, longest * Fraction(11, 10), target=goal).proven
    late = Fraction(rows["computation delay", ""].longest).limit_denominator(1000)
    assert 0 < late <= Fraction(1, 2)
    assert guaranteed(replace(network, goal=replace(network.goal, computation_delay=late)), gains, goal)
    if late < Fraction(45, 100):
        more = replace(network.goal, computation_delay=late * Fraction(11, 10))
        assert not guaranteed(replace(network, goal=more), gains, goal)
    assert rows["jitter of the sampling instants", ""].longest is None


def test_the_longest_age_keeps_the_rate_by_hand(flashed):
    """Two links of 0.3: the weighted radius is 0.3 p (e^(alpha age) + e^(alpha 0.1)) with the weighted peak gain p."""
    network, gains, found = flashed
    alpha = Fraction(found.certificate.document["constants"]["alpha"])
    p = sampled_peaks(sampled_units(network, gains)[0], alpha).gains["offers"]["takes"].upper[0, 0]
    age = next(row.longest for row in found.timing.rows if row.quantity == "age of values" and row.longest < math.inf)

    def radius(age):
        return 0.3 * p * (math.exp(float(alpha) * age) + math.exp(float(alpha) * 0.1))

    assert radius(age) < 1 < radius(age * 1.12) * 1.01
    assert any(row.longest == math.inf for row in found.timing.rows)


def test_the_sheet_as_table_and_text(flashed):
    sheet = flashed[2].timing
    rows = list(csv.DictReader(io.StringIO(sheet.csv_text())))
    assert [row["quantity"] for row in rows] == [row.quantity for row in sheet.rows]
    assert {row["longest_proven_s"] for row in rows} >= {"any", ""}
    assert "declare it and prove again" in sheet.as_text()
    assert sheet.as_json()["rows"][0]["declared_s"] == 0.5


def test_a_period_too_long_is_refused_with_one_that_proves():
    network, gains = sampled_chain("3", K="-2")
    found = prove_as_flashed(network, gains)
    assert not found.proven and found.takes and found.timing is None
    assert 0 < found.longest_period < 3
    assert f"a period of {found.longest_period:g} s is" in found.reason
    assert guaranteed(
        replace(network, goal=replace(network.goal, period=Fraction(str(found.longest_period)))), gains, Fraction(9, 10)
    )


def test_what_the_route_cannot_take_is_said():
    network, gains = chain()
    without = prove_as_flashed(network, gains)
    assert not without.proven and not without.takes and "no sample period" in without.reason
    ruled = prove_as_flashed(replace(sampled_chain()[0], description="rules"), gains)
    assert not ruled.takes and "patterns" in ruled.reason
    single, _ = sampled_chain(rounding=Rounding(form="single"))
    third = Gains((gain_set(single.kinds[0], M([["-1/3"]])),))
    assert "no number of single precision" in prove_as_flashed(single, third).reason


@pytest.fixture(scope="module")
def observed():
    """Tanks whose code keeps an estimate of the level: u = -0.8 estimate, corrected by 1.5 times the innovation."""
    network = tanks(Wanted(estimator=("x",)))
    kind = network.kinds[0]
    assert [s.name for s in kind.sensors] == ["x", "x_estimate", "x_innovation"]
    gains = Gains((gain_set(kind, M([["0", "-0.8", "0"], ["0", "0", "1.5"]])),))
    rounding = Rounding({"tank.x": "0.02"}, {"tank.push": "0.05"}, stored={"tank.x_estimate": "0.001"})
    goal = replace(network.goal, period=Fraction(1, 5), computation_delay=Fraction(1, 20), rounding=rounding)
    links = tuple(replace(link, strength=Fraction(3, 10)) for link in network.links)
    return replace(network, goal=goal, links=links), gains


def test_an_estimator_as_it_runs_stays_inside(observed):
    """A ring whose units run the code literally, pushed as hard as declared, each on its own clock."""
    network, gains = observed
    found = prove_firmware(network, gains)
    assert found.proven, found.reasons
    assert any("x_estimate kept in the firmware" in line for line in found.covers)
    peaks = {(p.role, p.signal): p.value for p in found.peaks}
    rng, N, dt, per = np.random.default_rng(4), 8, 0.01, 20
    A = -np.eye(N) + 0.3 * (np.roll(np.eye(N), 1, axis=0) + np.roll(np.eye(N), -1, axis=0))
    step = scipy.linalg.expm(A * dt)
    push = np.linalg.solve(A, step - np.eye(N))
    worst = worst_estimate = 0.0

    def nearest(v, q):
        return np.round(v / q) * q

    for style in ("constant", "flips", "noise"):
        x, estimate, held, waiting, clock = np.zeros(N), np.zeros(N), np.zeros(N), np.zeros(N), rng.integers(0, per, N)
        for n in range(2500):
            at = (n - clock) % per
            heard = nearest(x, 0.02)
            command = nearest(-0.8 * estimate, 0.05)
            rate = -estimate + command + 1.5 * (heard - estimate)
            waiting = np.where(at == 0, command, waiting)
            estimate = np.where(at == 0, nearest(estimate + 0.2 * rate, 0.001), estimate)
            held = np.where(at == 5, waiting, held)
            w = {"constant": np.ones(N), "flips": np.sign(x) + (x == 0), "noise": rng.uniform(-1, 1, N)}[style]
            x = step @ x + push @ (held + w)
            worst, worst_estimate = max(worst, np.abs(x).max()), max(worst_estimate, np.abs(estimate).max())
    assert 0.8 * peaks["state", "x"] < worst <= peaks["state", "x"]
    assert 0.6 * peaks["state", "x_estimate"] < worst_estimate <= peaks["state", "x_estimate"]


def test_the_error_of_a_sample_reaches_the_innovation(observed):
    """The innovation is computed from the rounded sample, so it carries at least its error; floats are refused."""
    network, gains = observed
    kinds = prove_firmware(network, gains, target="0.01").document.get("firmware") or {}
    assert kinds == {}  # nothing is stated where nothing is proven
    from synth.proof.firmware import _parts

    (part,) = _parts(network, network.goal.rounding)
    assert part["sensors"] == ["1/50", "0", "1/50"]
    assert [entry["state"] for entry in part["stored"]] == ["x_estimate"]
    with pytest.raises(InputError, match="floating"):
        prove_firmware(network, gains, rounding=Rounding(form="double"))

"""Strings in time: against the exact solution and finer steps, limits, collisions, bounds that are attained."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import scipy.linalg

from synth.base.errors import InputError
from synth.proof.hop_statement import prove_hop
from synth.simulate.leaders import Manoeuvre, manoeuvres, recorded
from synth.simulate.manoeuvres import run_manoeuvres
from synth.simulate.string import String
from tests.gain.gap_files import gains, network


def ramp(seconds: float, rate: float) -> Manoeuvre:
    return Manoeuvre("ramp", np.array([0.0, 1.0, 1.0 + seconds]), np.array([0.0, 0.0, rate * seconds]))


def test_three_vehicles_follow_the_exact_solution():
    """The chain as one linear system driven by a ramp, by matrix exponential."""
    string = network("loaded", "empty")
    K = gains(string)
    order = ["loaded", "empty", "loaded"]
    run = String(string, K, string.goal.hop, order).run(ramp(30.0, -0.1), 10.0, limits=False, dt=0.05)
    A, b = np.zeros((11, 11)), np.zeros(11)
    for i, name in enumerate(order):
        kind = string.kind(name)
        at = slice(3 * i, 3 * i + 3)
        kp, kv = K[name].K.floats()[0]
        h, lag = float(-kind.C[0, 1]), float(1 / kind.B[2, 0])
        A[at, at] = [[0, -1, 0], [0, 0, 1], [kp / lag, (-kp * h - kv) / lag, -1 / lag]]
        ahead = np.array([1, 0, kv / lag])
        if i:
            A[at, 3 * i - 2] = ahead
        else:
            A[at, 9] = ahead
    A[9, 10] = -0.1  # the leader's speed, and a constant 1 that drives it
    b[10] = 1
    exact = scipy.linalg.expm(A * 9.0) @ b
    # Errors of the steps only: the ramp starts on a step.
    assert run.signal[-1] == pytest.approx(exact[[1, 4, 7]], abs=2e-6)
    assert run.gap[-1] == pytest.approx(exact[[0, 3, 6]], abs=2e-6)


def test_dead_times_and_delays_agree_with_finer_steps():
    string = network("loaded", heard="0.1 s", dead_time="0.15 s", sensing={"closing": "0.05 s"})
    K = gains(string, weight="0.2")
    runs = [
        String(string, K, string.goal.hop, ["loaded"] * 4).run(ramp(10.0, -1.0), 12.0, limits=False, dt=dt)
        for dt in (0.05, 0.0125)
    ]
    assert runs[0].dt == 0.05
    # What is late is read in straight lines between samples: the jump of the leader's acceleration, heard by radio, is
    # smeared over a step.
    assert runs[0].signal[-1] == pytest.approx(runs[1].signal[-1], abs=5e-3)
    fresh = network("loaded", heard="0.1 s")
    other = String(fresh, K, fresh.goal.hop, ["loaded"] * 4).run(ramp(10.0, -1.0), 12.0, limits=False, dt=0.05)
    assert np.abs(other.signal[-1] - runs[1].signal[-1]).max() > 0.02


def test_peaks_reach_their_bounds_and_never_pass_them():
    string = network("loaded", "empty")
    K = gains(string)
    statement = prove_hop(string, K)
    found = run_manoeuvres(string, K, statement, units=10, seconds=40, dt=0.1)
    assert found.compared
    assert found.violations == 0
    worst = {run.name: run.ratios["gap error"] for run in found.runs}
    assert worst["worst for the gap of vehicle 1"] > 0.98
    assert worst["worst for the gap of vehicle 10"] > 0.98
    assert found.as_json()["worst"]["bound_ratio"] <= 1 + 1e-6
    assert {run.name for run in found.runs} >= {"hard brake", "stop and go", "sine sweep"}
    # A bound that is too small is noticed.
    low = replace(
        statement,
        hops=replace(
            statement.hops,
            hops=tuple(
                replace(hop, gap_error=replace(hop.gap_error, upper=0.9 * hop.gap_error.upper))
                for hop in statement.hops.hops
            ),
        ),
    )
    assert run_manoeuvres(string, K, low, units=2, seconds=40, dt=0.1).violations > 0


def test_collisions_are_counted_where_gaps_close():
    """A string that swings about its gap touches the vehicle ahead where there is nothing left at standstill."""
    short = {"loaded": ("0.5", "0.3")}
    near = network("loaded", types=short, standstill="0 m", leader={"acceleration": "3 m/s^2", "speed": "10 m/s"})
    K = gains(near, types=short)
    found = run_manoeuvres(near, K, prove_hop(near, K), units=4, seconds=25)
    assert found.collisions > 0
    assert found.runs[0].closest < 0
    assert not found.compared
    assert "Nothing is proven for peaks" in found.as_text()
    far = network("loaded")
    found = run_manoeuvres(far, gains(far), prove_hop(far, gains(far)), units=4, seconds=25)
    assert found.collisions == 0
    assert min(run.closest for run in found.runs if run.closest is not None) > 3
    unknown = network("loaded", standstill=None)
    found = run_manoeuvres(unknown, gains(unknown), prove_hop(unknown, gains(unknown)), units=2, seconds=5)
    assert found.runs[0].collisions is None
    assert "standstill" in found.as_text()


def test_limits_and_jerk_hold_commands_back_and_bounds_are_then_about_the_run_without():
    string = network("loaded", jerk="0.2 m/s^3", leader={"acceleration": "3.4 m/s^2", "speed": "10 m/s"})
    K = gains(string)
    wish = string.goal.hop
    hard = manoeuvres(10.0, 3.4, 20.0)[0]
    line = String(string, K, wish, ["loaded"] * 3)
    held, free = line.run(hard, 20.0), line.run(hard, 20.0, limits=False)
    assert held.limited > 0
    assert free.limited == free.saturated == 0
    assert held.rate[0] < free.rate[0]
    found = run_manoeuvres(string, K, prove_hop(string, K), units=3, seconds=20)
    assert found.runs[0].met
    assert found.violations == 0
    kind = replace(string.kinds[0], inputs=(replace(string.kinds[0].inputs[0], limit=1),))
    weak = replace(string, kinds=(kind,))
    cut = String(weak, K, replace(wish, jerk=None), ["loaded"] * 3).run(hard, 20.0)
    assert cut.saturated > 0
    assert cut.rate[0] <= 1 + 1e-9


def test_a_thousand_vehicles_of_mixed_types_in_any_order():
    string = network("loaded", "empty", "water")
    found = run_manoeuvres(string, gains(string), prove_hop(string, gains(string)), units=1000, seconds=5, seed=3)
    assert found.units == 1000
    assert found.violations == 0
    assert len(set(found.runs[0].run.order)) == 3
    assert found.runs[0].run.order != run_order(string, 4)


def run_order(string, seed):
    found = run_manoeuvres(string, gains(string), prove_hop(string, gains(string)), units=1000, seconds=0.2, seed=seed)
    return found.runs[0].run.order


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ("time_s,pace\n0,1\n1,2\n", "'speed' is missing"),
        ("time_s,speed\n0,1\n0,2\n", "must increase"),
        ("time_s,speed\n0,one\n1,2\n", "two numbers"),
        ("time_s,speed\n0,nan\n1,2\n", "finite"),
        ("time_s,speed\n0,1\n", "two lines"),
    ],
)
def test_recordings_that_are_none_are_told(tmp_path, rows, words):
    path = tmp_path / "drive.csv"
    path.write_text(rows)
    with pytest.raises(InputError, match=words):
        recorded(path, "speed")
    path.write_text("time_s,speed\n2,10\n\n4,6\n5,6\n")
    drive, speed = recorded(path, "speed")
    assert (speed, drive.peak, drive.rate) == (10.0, 4.0, 2.0)
    assert drive.at(np.array([-1.0, 1.0, 9.0])).tolist() == [0.0, -2.0, -4.0]


def test_manoeuvres_keep_within_the_acceleration():
    for leader in manoeuvres(12.0, 1.7, 50.0):
        assert leader.rate <= 1.7 * (1 + 1e-9)
        assert leader.rate > 0.8 * 1.7
        assert leader.peak <= 12.0
    with pytest.raises(InputError, match="above zero"):
        manoeuvres(0.0, 1.0, 1.0)


def test_sizes_out_of_reach_are_told():
    string = network("loaded")
    with pytest.raises(InputError, match="cannot be run"):
        String(string, gains(string), string.goal.hop, ["loaded"] * 10_001)
    with pytest.raises(InputError, match="kinds that the cell does not have"):
        String(string, gains(string), string.goal.hop, ["tram"])
    with pytest.raises(InputError, match="too much"):
        String(string, gains(string), string.goal.hop, ["loaded"] * 10_000).run(ramp(1, 1), 1e5)

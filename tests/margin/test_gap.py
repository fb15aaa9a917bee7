"""The smallest time gap: what is proven holds, what breaks fails, and both are checked without the search."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain import QuasiPolynomial, hop_gains, mean_square_gain, peak_to_peak_gain
from synth.margin.gap import TimeGapPolicy, gap_table, holds_at, smallest_gap, table_text
from tests.gain.strings import string

Q, F = QuasiPolynomial.of, Fraction


def test_both_ends_are_what_they_say():
    """At the proven gap the exact peak gain is 1; at the one that breaks it is certainly above."""
    policy = TimeGapPolicy("0.5", "0.4")
    found = smallest_gap(policy, "peak", width=1e-3)
    assert 1 < found.proven / found.breaks <= F(1001, 1000)
    for h, above in ((found.proven, False), (found.breaks - F(1, 50), True)):
        loop = policy.loop(h)
        gain = peak_to_peak_gain(loop.now, loop.D[F(0)], loop.H["hop"], width=1e-9)
        assert bool(gain.lower[0, 0] > 1) is above
    assert "proven at a time gap" in found.sentence()
    assert "not a proof that the string stays calm" in found.sentence()


def test_mean_square_is_less_than_peak_and_says_so():
    policy = TimeGapPolicy("0.5", "0.4")
    mean = smallest_gap(policy, "mean square")
    assert mean.proven < F("1.01") < smallest_gap(policy).proven
    assert "peaks may grow" in mean.sentence()
    assert mean.as_json()["claim"] == "mean square"
    loop = policy.loop(mean.breaks)
    assert mean_square_gain(loop.now, loop.D[F(0)], loop.H["hop"]).lower > 1


def test_the_policy_is_the_string_built_from_equations():
    """The loop of the policy and that of a network with the same gains have the same transfer function."""
    policy = TimeGapPolicy("0.5", "0.4", dead_time="0.1", radio_weight="0.25", radio_delay="0.2", speed_gain="0.6")
    ours = policy.loop(F("1.3"))
    network, gains = string(("0.5", "1.3", F("0.4") * F("0.6"), "0.6", "0.25"), radio_delay="0.2")
    theirs = hop_gains(network, gains, gap_error="spacing", dead_time="0.1").hops[0].loop.loop
    for outlet in ("hop", "gap_error"):
        (n, d), (m, e) = ours.transfer(outlet), theirs.transfer(outlet)
        assert (n * e - m * d).terms == {}


def test_longer_dead_times_need_larger_gaps_and_radio_smaller_ones():
    policy = TimeGapPolicy("0.3", "0.2", radio_weight="0.4", radio_delay="0.05")
    rows = gap_table(policy, "mean square", lags=["0.5"], dead_times=["0.1"], radio_delays=["0.2"], width=5e-2)
    first, *changed = rows
    assert [row.what for row in rows][-1] == "radio lost"
    assert len(rows) == 5
    assert all(row.gap.proven > first.gap.proven for row in changed)
    assert "delay of the radio 0.2 s" in table_text(rows)


def test_peak_gap_with_dead_time_is_proven_and_broken():
    found = smallest_gap(TimeGapPolicy("0.3", "0.2", dead_time="0.1"), width=2e-3)
    assert found.breaks is not None
    assert 1.31 < found.breaks < found.proven < 1.33
    without = smallest_gap(TimeGapPolicy("0.3", "0.2"), width=2e-3)
    assert without.proven < found.breaks


def test_a_string_that_keeps_a_constant_distance_is_refused_whatever_the_gains():
    for speed, gap in (("0.5", "0.1"), ("2", "0.3"), (10, 5)):
        found = smallest_gap(
            lambda h, kv=speed, kp=gap: (Q({0: [kp, kv]}), Q({0: [kp, kv, 1, "0.05"]})), "mean square", width=0.1
        )
        assert found.proven is None
        assert found.constant_distance
        assert "whatever the gains" in found.sentence()


def test_decisions_that_do_not_need_a_search():
    stable, weak = Q({0: [1, 1]}), Q({0: [2, 1]})
    assert holds_at((Q({0: [1]}), stable), "peak") is True
    assert holds_at((Q({0: [1]}), weak), "peak") is True
    assert holds_at((Q({0: [3]}), weak), "peak") is False
    assert holds_at((Q({0: [1]}), Q({0: [1, "0.2", 1]})), "peak") is False
    assert holds_at((Q({0: [1]}), Q({0: [-1, 1]})), "mean square") is False
    # T(0) = 1/2 with an overshoot that keeps the integral of the modulus below 1: no need for one sign.
    assert holds_at((Q({0: [1]}), Q({0: [2, "1.6", 1]})), "peak") is True


def test_the_answer_does_not_depend_on_where_the_search_starts():
    policy = TimeGapPolicy("0.4", "0.3")
    near = smallest_gap(policy, "mean square", low="0.5", high=2)
    wide = smallest_gap(policy, "mean square", low="0.02", high=100)
    assert float(near.proven) == pytest.approx(float(wide.proven), rel=2e-3)
    none = smallest_gap(policy, "mean square", low="0.1", high="0.6")
    assert none.proven is None
    assert not none.constant_distance
    assert "No time gap" in none.sentence()
    holds = smallest_gap(policy, "mean square", low="0.9", high=2)
    assert holds.breaks is None
    assert holds.proven == F("0.9")


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: smallest_gap(TimeGapPolicy(1), "loud"), "'peak' and 'mean square'"),
        (lambda: smallest_gap(TimeGapPolicy(1), low=2, high=1), "low < high"),
        (lambda: smallest_gap(TimeGapPolicy(1), width=2), "between 1e-6"),
        (lambda: TimeGapPolicy(0), "lag must be positive"),
        (lambda: TimeGapPolicy(1, dead_time=-1), "must not be negative"),
        (lambda: TimeGapPolicy(1, radio_weight=1), r"\[0, 1\)"),
    ],
)
def test_wrong_arguments_are_told(call, words):
    with pytest.raises(InputError, match=words):
        call()


def test_tried_gaps_agree_with_a_dense_grid():
    policy = TimeGapPolicy("0.5", "0.4", dead_time="0.1")
    found = smallest_gap(policy, "mean square", width=1e-2)
    w = np.geomspace(1e-2, 50, 20000)
    for h, holds in found.tried:
        num, den = policy.loop(h).transfer("hop")
        value = [
            sum(
                np.exp(-1j * w * float(b)) * np.polyval([float(c) for c in row[::-1]], 1j * w)
                for b, row in q.terms.items()
            )
            for q in (num, den)
        ]
        highest = np.abs(value[0] / value[1]).max()
        assert (highest > 1 + 1e-9) == (holds is False) or abs(highest - 1) < 1e-4

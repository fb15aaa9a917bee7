"""Mean-square gains: exact decisions against a dense grid, and dead time against values found without our code."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from flint import fmpq_poly

from synth.base.errors import InputError, UnstableLoop
from synth.gain import mean_square_gain
from synth.gain.strings.dead_time import QuasiPolynomial, loop_of_transfer
from synth.gain.strings.dead_time_roots import is_stable, rate_of_decay, zeros_right_of
from synth.gain.strings.mean_square import roots_above_zero
from synth.gain.strings.mean_square_loop import fraction_mean_square, level_holds, loop_mean_square

Q, F = QuasiPolynomial.of, Fraction


def on_grid(A, D, H, feed, w):
    A, D, H, feed = (np.array(m, dtype=float) for m in (A, D, H, feed))
    return max(np.linalg.norm(feed + H @ np.linalg.solve(1j * x * np.eye(len(A)) - A, D), 2) for x in w)


@pytest.mark.parametrize("seed", range(6))
def test_the_enclosure_holds_against_a_dense_grid(seed):
    rng = np.random.default_rng(seed)
    n, inlets, outlets = 3, 1 + seed % 2, 1 + seed % 3
    A = np.round(rng.normal(size=(n, n)) - 3 * np.eye(n), 2)
    D, H = np.round(rng.normal(size=(n, inlets)), 2), np.round(rng.normal(size=(outlets, n)), 2)
    feed = np.round(rng.normal(size=(outlets, inlets)) * (seed > 2), 2)
    found = mean_square_gain(A, D, H, feed, width=1e-7)
    grid = on_grid(A, D, H, feed, np.concatenate([[0], np.geomspace(1e-3, 1e4, 1500)]))
    assert grid <= found.upper
    assert found.upper <= found.lower * (1 + 1e-7)
    assert grid >= found.lower * (1 - 1e-3)


def test_scaling_an_inlet_scales_the_gain():
    first = mean_square_gain([[0, 1], [-1, "-0.4"]], [[0], [1]], [[1, 0]])
    second = mean_square_gain([[0, 1], [-1, "-0.4"]], [[0], [3]], [[1, 0]])
    assert second.lower == pytest.approx(3 * first.lower, rel=2e-6)
    assert first.frequency == pytest.approx(math.sqrt(1 - 2 * 0.2**2), rel=1e-3)


def test_a_gain_that_is_reached_only_at_high_frequency_or_nowhere():
    assert mean_square_gain([[-1]], [[1]], [[-1]], 1).frequency == math.inf
    assert mean_square_gain([[-1]], [[1]], [[0]]).upper == 0.0


def test_what_is_refused():
    with pytest.raises(UnstableLoop, match="not Hurwitz"):
        mean_square_gain([[1]], [[1]], [[1]])
    with pytest.raises(InputError, match="width"):
        mean_square_gain([[-1]], [[1]], [[1]], width=2)
    with pytest.raises(InputError, match="neutral"):
        zeros_right_of(Q({0: [1, 1], 1: [0, 1]}), F(0))


def test_roots_are_counted_once_and_only_where_asked():
    p = fmpq_poly([0, 1]) * fmpq_poly([-2, 1]) ** 2 * fmpq_poly([-3, 1]) * fmpq_poly([5, 1])
    assert roots_above_zero(p) == 2
    assert roots_above_zero(p, closed=True) == 3


def test_touching_a_level_is_not_exceeding_it():
    """1/(s + 1) touches 1 at w = 0, and (s^2 + 1)/(s + 1)^2 at infinity; a hair below the level fails."""
    for num, den in (([1], [1, 1]), ([1, 0, 1], [1, 2, 1])):
        assert level_holds(Q({0: num}), Q({0: den}), F(1)) is True
        failed = level_holds(Q({0: num}), Q({0: den}), F(999, 1000))
        assert isinstance(failed, float)
        value = abs(np.polyval(num[::-1], 1j * failed) / np.polyval(den[::-1], 1j * failed))
        assert value > 0.999


def test_roots_with_dead_time_are_counted():
    """x' = -b x(t - 1) is stable below b = pi/2 (Yorke 1970 quotes it), and two roots cross there."""
    assert is_stable(Q({0: [0, 1], 1: ["1.57"]}))
    assert not is_stable(Q({0: [0, 1], 1: ["1.571"]}))
    assert zeros_right_of(Q({0: [0, 1], 1: ["1.571"]}), F(0)) == 2
    assert zeros_right_of(Q({0: [-1, 1]}) * Q({0: [2, 1]}), F(3)) == 2


def test_the_rate_of_decay_solves_its_equation():
    """v' = -2 v + v(t - 1): s = -2 + e^{-s}; the root is -0.4428544010 (Halanay's rate for a = 2, b = 1, delay 1)."""
    rate = float(rate_of_decay(Q({0: [2, 1], 1: [-1]}), 1e-5))
    assert rate == pytest.approx(0.4428544010, rel=2e-5)
    assert rate < 0.4428544011


def test_dead_time_agrees_with_a_dense_grid_and_a_delay_alone_changes_nothing():
    num, den = Q({"0.3": ["0.2", 1]}), Q({0: [0, 0, 1, "0.5"], "0.3": ["0.2", "1.2"]})
    found = fraction_mean_square(num, den)
    w = np.linspace(0, 30, 60001)[1:]
    s, late = 1j * w, np.exp(-0.3j * w)
    grid = np.abs(late * (s + 0.2) / (0.5 * s**3 + s**2 + late * (1.2 * s + 0.2))).max()
    assert found.lower * (1 - 1e-5) <= grid <= found.upper
    same = fraction_mean_square(Q({2: ["0.2", 1]}), den)
    assert same.upper == pytest.approx(found.upper, rel=2e-6)
    loop = loop_of_transfer(num, den)
    assert loop.transfer("hop")[1].degree == 3
    assert loop_mean_square(loop, "hop").upper == pytest.approx(found.upper, rel=2e-6)


def test_a_level_with_dead_time_is_decided_on_both_sides():
    den = Q({0: [0, 1], "0.5": [1]})  # x' = v(t - .5) - x(t - .5): gain 1 at rest, resonance above
    found = fraction_mean_square(Q({"0.5": [1]}), den)
    assert level_holds(Q({"0.5": [1]}), den, F(found.upper)) is True
    assert isinstance(level_holds(Q({"0.5": [1]}), den, F(found.lower) * F(999, 1000)), float)
    slow = Q({0: [0, 1], "0.1": [1]})
    assert level_holds(Q({"0.1": [1]}), slow, F(1)) is True

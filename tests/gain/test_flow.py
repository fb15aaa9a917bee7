"""The cells of the walk: what each one claims about the kernel is checked against an independent exponential."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
import scipy.special
from flint import arb, ctx

from synth.base.exact import ExactMatrix
from synth.gain.flow import TICK_BITS, Track, exact_terms
from synth.gain.free import _cell
from synth.gain.lyapunov import rationals
from synth.gain.peak import Peaks
from synth.gain.walk import Budget, Walk
from tests.gain.test_peak import hurwitz, literal


def engine(seed, n):
    A, D, H = hurwitz(seed, n, 0.3)
    # Powers of two as column sizes would hide an exchange of D and H; these are plain doubles. No balancing is needed.
    peaks = Peaks(ExactMatrix.of(A), ExactMatrix.of(H), 1e-6)
    scale = np.array([float(t) for t in peaks.scale])
    column = rationals(ExactMatrix.of(D / scale[:, None]))
    return A, D, H, peaks, column


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("level", [TICK_BITS - 3, TICK_BITS, TICK_BITS + 1])
def test_the_kernel_lies_in_its_bernstein_hull(seed, level):
    """h(t0 + r u) = sum b_i B_i(u) +- rho u^J, on a coarse cell where the remainder matters and on a fine one."""
    A, D, H, peaks, column = engine(seed, 3)
    flow = peaks.flow(0)
    with ctx.workprec(flow.bits):
        track = Track(flow, column, exact_terms(peaks.A, column))
        for tick in (0, 1 << level):
            state = track.states[tick] if tick in track.states else track.advance(0, level)
            r = float(flow.length(level))
            b = np.array([float(v.mid()) for v in track.bernstein(0, tick, level, peaks.H)])
            slack = float(flow.zeta[0] * state.error)
            rho = float(flow.remainder(0, state, level))
            t0 = flow.seconds(tick)
            lows, highs = b - slack, b + slack
            lows[-1] -= rho
            highs[-1] += rho
            for u in np.linspace(0, 1, 9):
                h = (H @ scipy.linalg.expm(A * (t0 + r * u)) @ D)[0, 0]
                weights = np.array([scipy.special.comb(len(b) - 1, i) for i in range(len(b))])
                weights *= u ** np.arange(len(b)) * (1 - u) ** np.arange(len(b))[::-1]
                tolerance = 1e-11 * (1 + abs(h))
                assert weights @ lows - tolerance <= h <= weights @ highs + tolerance


@pytest.mark.parametrize("seed", range(10))
def test_the_free_response_lies_below_the_bound_of_its_cell(seed):
    A, _, H, peaks, _ = engine(seed, 3)
    flow = peaks.flow(0)
    with ctx.workprec(flow.bits):
        tracks = []
        for q, scale in enumerate(peaks.scale):
            unit = [[0] for _ in range(3)]
            unit[q] = [1 / scale]
            column = rationals(ExactMatrix.of(unit))
            tracks.append(Track(flow, column, exact_terms(peaks.A, column)))
        for level in (TICK_BITS - 4, TICK_BITS - 1, TICK_BITS + 1):
            start, end, bound = _cell(flow, tracks, 0, peaks.H, 0, level)
            r = float(flow.length(level))
            values = [np.abs(H @ scipy.linalg.expm(A * t)).sum() for t in np.linspace(0, r, 33)]
            assert max(values) <= float(bound) * (1 + 1e-12)
            assert float(start) <= values[0] * (1 + 1e-12)
            assert float(end) <= values[-1] * (1 + 1e-12)


@pytest.mark.parametrize("spent", ["tail", "root", "cell"])
@pytest.mark.parametrize("seed", range(12))
def test_generous_allowances_still_enclose(seed, spent):
    """Whatever is skipped is counted: with a hundredth of the value allowed to one kind of gap the ends still hold."""
    A, D, H, peaks, column = engine(seed, 2 + seed % 3)
    value = literal(A, D, H)
    flow = peaks.flow(0)
    fine = {"tail": 1e-9 * value, "root": 1e-12 * value, "cell": 1e-12 * value, spent: 0.02 * value}
    with ctx.workprec(flow.bits):
        low, high = Walk(Track(flow, column, exact_terms(peaks.A, column)), 0, peaks.H).integral(Budget(**fine))
    assert float(low) <= value * (1 + 2e-6)
    assert float(high) >= value * (1 - 2e-6)


def test_what_a_bracket_may_hide_is_counted():
    """h = (1 - t) e^-t has one root and the integral 2/e: with a wide bracket the ends stand well apart, round it."""
    A = ExactMatrix.of([[-1, 1], [0, -1]])
    peaks = Peaks(A, ExactMatrix.of([[1, 0]]), 1e-6)
    column = rationals(ExactMatrix.of([[1 / peaks.scale[0]], [-1 / peaks.scale[1]]]))
    flow = peaks.flow(0)
    with ctx.workprec(flow.bits):
        track = Track(flow, column, exact_terms(peaks.A, column))
        ends = []
        for root in (1e-2, 1e-12):
            low, high = Walk(track, 0, peaks.H).integral(Budget(1e-15, root, 0.0))
            exact = 2 / arb(1).exp()
            assert low <= exact
            assert high >= exact
            ends.append(float(high - low))
    # The wide bracket is used, and what it hides is in the upper end.
    assert ends[0] > 1e-9
    assert ends[1] < 1e-11


def test_a_rising_free_response_lies_below_the_bound_of_its_cell():
    """(1 + 9 t) e^-t rises up to t = 8/9, so the end of the cell decides."""
    A, H = np.array([[-1.0, 9.0], [0.0, -1.0]]), np.array([[1.0, 0.0]])
    peaks = Peaks(ExactMatrix.of(A), ExactMatrix.of(H), 1e-6)
    flow = peaks.flow(0)
    with ctx.workprec(flow.bits):
        tracks = []
        for q, scale in enumerate(peaks.scale):
            column = rationals(ExactMatrix.of([[1 / scale if i == q else 0] for i in range(2)]))
            tracks.append(Track(flow, column, exact_terms(peaks.A, column)))
        for level in (TICK_BITS - 5, TICK_BITS - 3):
            start, end, bound = _cell(flow, tracks, 0, peaks.H, 0, level)
            r = float(flow.length(level))
            value = (1 + 9 * r) * np.exp(-r)
            assert r < 8 / 9
            assert float(start) == pytest.approx(1.0)
            assert float(end) <= value <= float(bound)
            assert float(bound) - float(end) < 1e-6

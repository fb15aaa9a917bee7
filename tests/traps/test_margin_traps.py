"""Traps of the margin: each looks right, and each has a counterexample here."""

from __future__ import annotations

from math import inf

import numpy as np
import pytest

from synth.margin import FiniteLink, finite_link_tolerances, pattern_link_tolerances, rightmost_roots
from synth.margin.coupling import Scaling, coupling_limit
from synth.margin.exact import exact_limit
from synth.margin.symbol import loop_family
from tests.build import scalar_kind
from tests.margin.networks import link, network_of, no_gains, oscillators


def test_link_tolerance_counts_the_link_not_its_entries() -> None:
    """Unit 0 has p = [1 1] (one outlet, two inlets), unit 1 p = [1; 1]; link 0 -> 1 of .4, two links back of .5.

    The link 0 -> 1 may get 2.5 times as strong. Treating its two entries of the outlet matrix one by one says 4.0.
    """
    links = [FiniteLink(0, 0, 1, 0, 0.4), FiniteLink(1, 0, 0, 0, 0.5), FiniteLink(1, 1, 0, 1, 0.5)]
    assert finite_link_tolerances([[[1, 1]], [[1], [1]]], links) == pytest.approx((2.5, 4.0, 4.0))
    M = np.array([[0, 0.5, 0.5], [0.4, 0, 0], [0.4, 0, 0]])  # the outlet matrix
    R = np.linalg.inv(np.eye(3) - M)
    entry = 1 + 1 / (M[1, 0] * R[0, 1])  # one entry alone
    assert entry == pytest.approx(4.0)
    for factor, expected in ((2.5, 1.0), (4.0, np.sqrt(1.6))):
        grown = M.copy()
        grown[1:, 0] *= factor
        assert np.max(np.abs(np.linalg.eigvals(grown))) == pytest.approx(expected)


def test_one_copy_of_a_link_is_not_the_link_everywhere() -> None:
    """One-way string of gain .9: one copy tolerates any strength, all copies together only 1/.9."""
    kind = scalar_kind(1)
    network = network_of(kind, [link(kind, -1, "0.9")])
    assert pattern_link_tolerances(network, {"tank": [[1.0]]}) == (inf,)
    found = coupling_limit(Scaling(network, no_gains(network), width=5e-5))
    assert found.lost == pytest.approx(1 / 0.9, rel=1e-3)


def test_a_finite_section_of_a_one_way_string_says_nothing() -> None:
    """Every section of x_i' = -x_i + 2 x_{i-1} has all modes at -1; the endless string breaks at .5."""
    kind = scalar_kind(1)
    network = network_of(kind, [link(kind, -1, 2)])
    section = -np.eye(50) + 2 * np.eye(50, k=-1)
    assert np.all(np.linalg.eigvals(section).real < -0.99)
    limit = exact_limit(loop_family(network, no_gains(network)))
    assert limit.upper == pytest.approx(0.5, rel=1e-3)
    assert not limit.nominal_stable


def test_own_parts_that_grow_help_and_the_margin_must_say_which() -> None:
    """Springs k (l - 2x + r): class limit .0408 with growing own parts, less with fixed ones; both are named."""
    network = oscillators("0.03", "0.03")
    growing = coupling_limit(Scaling(network, no_gains(network), None, True, 5e-5))
    fixed = coupling_limit(Scaling(network, no_gains(network), None, False, 5e-5))
    assert 0.03 * growing.lost == pytest.approx(0.0408, abs=1e-4)
    assert fixed.lost < growing.lost * (1 - 1e-3)


def test_a_delay_can_help_and_its_absence_is_another_network() -> None:
    """x'' - .1 x' + 2 x = x(t - tau) is stable for .1001683 < tau < 1.7178582 only (Gu, Kharitonov, Chen 2003, from
    memory): stable with the delay, unstable without it, so the two exact limits are never mixed up."""
    A, A1 = [[0.0, 1.0], [-2.0, 0.1]], [[0.0, 0.0], [1.0, 0.0]]
    assert rightmost_roots(A, [(A1, 0.5)])[0].s.real < 0
    assert rightmost_roots(A, [(A1, 0.0)])[0].s.real > 0

"""Roots with constant delays against closed forms and published stability limits."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.special import lambertw

from synth.margin import rightmost_roots
from synth.margin.roots import Root, encircled, polished
from synth.margin.symbol import loop_family
from tests.margin.networks import chain, no_gains


def real_part(A: list[list[float]], delayed: list[tuple[list[list[float]], float]]) -> float:
    return rightmost_roots(A, delayed)[0].s.real


def test_one_delay_is_stable_up_to_half_pi() -> None:
    """x' = -b x(t - tau): b tau < pi/2 (from memory; Yorke 1970 for the fixed delay)."""
    for b in (0.3, 2.0, 17.0):
        limit = brentq(lambda tau, b=b: real_part([[0.0]], [([[-b]], tau)]), 1.2 / b, 2.2 / b, xtol=1e-13)
        assert limit * b == pytest.approx(np.pi / 2, abs=1e-10)


def test_second_order_loop_is_stable_between_two_delays() -> None:
    """Stable only for .1001683 < tau < 1.7178582 (Gu, Kharitonov, Chen, 2003; from memory)."""
    A, A1 = [[0.0, 1.0], [-2.0, 0.1]], [[0.0, 0.0], [1.0, 0.0]]
    found = [brentq(lambda tau: real_part(A, [(A1, tau)]), *ends, xtol=1e-13) for ends in ((0.05, 0.5), (1.0, 2.0))]
    assert found == pytest.approx([0.1001683, 1.7178582], abs=5e-8)
    assert [np.sign(real_part(A, [(A1, tau)])) for tau in (0.0, 0.05, 0.15, 1.6, 1.8)] == [1, 1, -1, -1, 1]


def test_the_classical_two_state_example() -> None:
    """A = diag(-2, -.9), A1 = [[-1, 0], [-1, -1]]: stable up to 6.1725813712 (memory, the same book)."""
    A, A1 = [[-2.0, 0.0], [0.0, -0.9]], [[-1.0, 0.0], [-1.0, -1.0]]
    assert brentq(lambda tau: real_part(A, [(A1, tau)]), 4, 8, xtol=1e-12) == pytest.approx(6.1725813712, abs=1e-9)


@settings(max_examples=40, deadline=None)
@given(a=st.floats(-3, 2), b=st.floats(-3, 3).filter(lambda v: abs(v) > 1e-3), delay=st.floats(0.05, 2))
def test_scalar_roots_are_lambert_w(a: float, b: float, delay: float) -> None:
    """s = a + W0(b d e^{-a d})/d is the rightmost root of x' = a x + b x(t - d) (Corless et al. 1996)."""
    expected = a + complex(lambertw(b * delay * np.exp(-a * delay))) / delay
    (root,) = rightmost_roots([[a]], [([[b]], delay)])
    # near the branch point the root is double and only half the digits are there
    loose = 1e-5 if abs(b * delay * np.exp(-a * delay) + np.exp(-1)) < 1e-6 else 1e-8
    assert root.s.real == pytest.approx(expected.real, abs=loose * (1 + abs(expected)))
    assert root.residual < 1e-9


def test_roots_without_delay_are_eigenvalues() -> None:
    A = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [-1.0, -2.0, -3.0]])
    found = sorted(root.s.real for root in rightmost_roots(A, count=3))
    assert found == pytest.approx(sorted(np.linalg.eigvals(A).real), abs=1e-12)


def test_a_negative_delay_is_refused() -> None:
    with pytest.raises(ValueError, match="negative"):
        rightmost_roots([[0.0]], [([[-1.0]], -0.1)])


def test_the_winding_number_sees_a_root_and_only_a_root() -> None:
    """Above the limit .5 of the chain the root is encircled; below it there is no root in the right half plane."""
    network = chain(k="0.5")
    family = loop_family(network, no_gains(network))
    (above,), (below,) = polished(family.at(1.2), 0.0), polished(family.at(0.8), 0.0)
    assert above.s.real == pytest.approx(0.2)
    assert encircled(family.at(1.2), above)
    assert not encircled(family.at(0.8), below)
    assert not encircled(family.at(0.8), Root(0.3 + 0j, 0.0, 0.0))  # no root near a point that is none

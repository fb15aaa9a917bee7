"""Scaling, coordinates, exact bounds on modes, descent and the merit's slopes, each against its definition."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from synth.gain import close_network
from synth.local.coordinates import coordinates
from synth.local.descent import descend
from synth.local.finish import Chart
from synth.local.guarantee import guarantee
from synth.local.merit import measure
from synth.local.plant import field_of
from synth.local.pull import scaled
from synth.local.region import decays_faster, inside_disc
from tests.build import convoy, convoy_gains
from tests.local.cases import bounded, cases, light_unit, mixed_convoy, tight, without_drive

Array = NDArray[np.float64]


@given(st.lists(st.tuples(st.integers(-9, 9), st.integers(0, 9)), min_size=1, max_size=3), st.integers(1, 12))
def test_exact_bounds_on_modes(pairs: list[tuple[int, int]], bound: int) -> None:
    """Against the roots the polynomial was built from; roots on the boundary are outside."""
    polynomial = [Fraction(1)]
    for real, imaginary in pairs:
        factor = [Fraction(1), Fraction(-2 * real), Fraction(real * real + imaginary * imaginary)]
        grown = [Fraction(0)] * (len(polynomial) + 2)
        for i, a in enumerate(polynomial):
            for j, b in enumerate(factor):
                grown[i + j] += a * b
        polynomial = grown
    assert inside_disc(polynomial, Fraction(bound)) == all(r * r + i * i < bound * bound for r, i in pairs)
    assert decays_faster(polynomial, Fraction(bound)) == all(r < -bound for r, _ in pairs)


@given(st.integers(0, 1000))
@settings(max_examples=25, deadline=None)
def test_mode_coordinates_never_leave_the_region(seed: int) -> None:
    """Every point gives modes inside; the derivative is the finite difference; the inverse map returns the gains."""
    field = field_of(convoy())
    chart = coordinates(field, 0)
    assert chart.placed == 0
    point = np.random.default_rng(seed).uniform(0.2, 1.35, chart.size)
    K, slope = chart.gains(point)
    plant = field.plants[0]
    modes = np.linalg.eigvals(plant.A + plant.B @ K @ plant.C)
    assert np.abs(modes).max() <= chart.fastest * (1 + 1e-4)
    assert modes.real.max() <= -chart.slowest * (1 - 1e-4)
    for k in range(chart.size):
        step = np.zeros(chart.size)
        step[k] = 1e-6
        np.testing.assert_allclose(
            slope[k], (chart.gains(point + step)[0] - chart.gains(point - step)[0]) / 2e-6, atol=1e-6
        )
    np.testing.assert_allclose(chart.gains(chart.point(K))[0], K, rtol=1e-4, atol=1e-4)


def test_plain_coordinates_keep_structure_and_bounds() -> None:
    field = field_of(without_drive())
    chart = coordinates(field, 0)
    assert chart.placed is None and chart.size == 2
    K, _ = chart.gains(np.array([3.0, -4.0]))
    assert K[0, 2] == 0.0 and K[0, 0] == 3.0
    np.testing.assert_array_equal(chart.point(K), [3.0, -4.0])


@pytest.mark.parametrize(
    "network", [convoy(), tight("0.3"), bounded(), light_unit("0.3"), mixed_convoy(), without_drive()]
)
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_merit_slopes_are_finite_differences(network: object, seed: int) -> None:
    """With limits kept and broken alike; the weight makes every penalty visible."""
    field = field_of(network)  # type: ignore[arg-type]
    chart = Chart(field, 0.0)
    point = chart.random(np.random.default_rng(seed), clustered=False)
    value, slope = chart.value(point, 7.0)
    assert np.isfinite(value)
    assert chart.height(point, 7.0) == pytest.approx(value, rel=1e-9)
    for k in range(chart.size):
        step = np.zeros(chart.size)
        step[k] = 1e-6
        difference = (chart.value(point + step, 7.0)[0] - chart.value(point - step, 7.0)[0]) / 2e-6
        assert slope[k] == pytest.approx(difference, rel=2e-3, abs=2e-3 * (1 + np.abs(slope).max()))


@pytest.mark.parametrize("name", ["convoy", "two kinds in one cell"])
def test_estimates_agree_with_what_is_guaranteed(name: str) -> None:
    """Radius and peaks of the merit against the enclosures, at gains far from any optimum."""
    network = cases()[name]
    field = field_of(network)
    chart = Chart(field, 0.0)
    gains, _ = chart.gains(chart.random(np.random.default_rng(5), clustered=True))
    from synth.local.pull import rounded

    exact = rounded(field, gains, 12)
    merit = measure(field, scaled(field, exact))
    result = guarantee(network, exact)
    assert result.lower * (1 - 1e-5) <= merit.radius <= result.upper * (1 + 1e-5)
    for i, kind in enumerate(network.kinds):
        demand = next(p for p in result.peaks if p.kind == kind.name and p.role == "actuator")
        assert demand.limit is not None
        assert merit.peaks[i][-1] == pytest.approx(demand.value / float(demand.limit), rel=1e-5)


def test_scaled_gains_close_the_same_loop() -> None:
    """Modes of the scaled closed unit times omega are those of the exact one."""
    network = convoy()
    field = field_of(network)
    K = scaled(field, convoy_gains())[0]
    plant = field.plants[0]
    ours = np.sort_complex(np.linalg.eigvals(plant.A + plant.B @ K @ plant.C) * field.omega)
    exact = np.sort_complex(np.linalg.eigvals(close_network(network, convoy_gains())[0].A.floats()))
    np.testing.assert_allclose(ours, exact, rtol=1e-9)


def test_descent_reaches_the_kink_of_a_nonsmooth_function() -> None:
    """|x| + 5 |y - x^2|, the first example of Lewis and Overton's kind: the minimum is a kink."""

    def value(p: Array) -> tuple[float, Array]:
        gap = p[1] - p[0] ** 2
        slope = np.array([np.sign(p[0]) - 10 * p[0] * np.sign(gap), 5 * np.sign(gap)])
        return float(abs(p[0]) + 5 * abs(gap)), slope

    run = descend(value, np.array([1.3, 0.4]), 500)
    assert run.value < 1e-4


def test_descent_never_returns_a_higher_value() -> None:
    """Even with a gradient that lies."""

    def value(p: Array) -> tuple[float, Array]:
        return float(p @ p), -p

    run = descend(value, np.array([1.0, 2.0]), 50)
    assert run.value <= 5.0

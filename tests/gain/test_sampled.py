"""Sampled peak gains against their slow literal definition, closed forms, and the estimates that guide searches."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.integrate

from synth.base.errors import InputError, UnstableLoop, WidthNotReached
from synth.base.exact import ExactMatrix
from synth.gain import peak_to_peak_gain
from synth.gain.sampled import sup as sampled_sup
from synth.gain.sampled.guide import sampled_peak_guide
from synth.gain.sampled.loop import SampledLoop
from synth.gain.sampled.numbers import FixedPoint, gains_as_flashed, row_error
from synth.gain.sampled.peaks import _enclosed, sampled_peak_gain, sampled_peaks, sampled_unit
from synth.gain.sampled.sup import Inlet, Outlet, absolute_integral, bernstein_matrix
from tests.build import M, convoy, convoy_gains, hauler, scalar_kind
from tests.gain.sampled_truth import Adjoint


def fractions(values):
    return tuple(Fraction(float(v)) for v in values)


def random_loop(rng, n, m, share, stored=False):
    """A well damped loop with its period and computation delay, and one inlet of each sort."""
    while True:
        A, B, R = (np.round(rng.normal(size=s), 2) for s in ((n, n), (n, m), (m, n)))
        T = Fraction(int(rng.integers(2, 8)), 10)
        Z = None
        if stored:
            A[-1], B[-1] = 0.0, 0.0
            Z = np.zeros((n, n))
            Z[-1] = np.round(rng.normal(size=n) * 0.3, 2)
            Z[-1, -1] = -0.4
        exact_Z = None if Z is None else M(Z.tolist())
        loop = SampledLoop(M(A.tolist()), M(B.tolist()), M(R.tolist()), T, T * share, exact_Z)
        if np.abs(np.linalg.eigvals(loop.transition())).max() < 0.6:
            return loop, Adjoint(A, B, R, T, T * share, Z)


@pytest.mark.parametrize(
    ("seed", "n", "m", "share", "stored"),
    [
        (9, 1, 1, Fraction(1, 4), False),
        (2, 2, 1, Fraction(3, 10), False),
        (3, 2, 2, Fraction(1), False),
        (4, 2, 1, Fraction(1, 2), True),
        (5, 3, 2, Fraction(0), False),
    ],
)
def test_agrees_with_the_adjoint_simulation(seed, n, m, share, stored):
    rng = np.random.default_rng(seed)
    loop, truth = random_loop(rng, n, m, share, stored)
    D, gu, gx = (np.round(rng.normal(size=k), 2) for k in (n, m, n))
    if stored:
        D[-1] = 0.0
    row = np.round(rng.normal(size=n + m), 2)
    if seed % 2:
        row[n:] = 0.0
    none, still = (Fraction(0),) * m, (Fraction(0),) * n
    inlets = [
        Inlet(fractions(D), none, still),
        Inlet(still, fractions(gu), still),
        Inlet(still, none, fractions(gx)),
        Inlet(fractions(D), fractions(gu), fractions(gx)),
    ]
    low, high = _enclosed(loop, Fraction(0), inlets, [Outlet(fractions(row))], (), 1e-6)
    for k, parts in enumerate(({"D": D}, {"gu": gu}, {"gx": gx}, {"D": D, "gu": gu, "gx": gx})):
        found = truth.supremum(row, grid=13, **parts)
        assert low[0, k] * (1 - 1e-6) <= found <= high[0, k] * (1 + 1e-6)
        assert high[0, k] - low[0, k] <= 1e-6 * high[0, k]
    guide = sampled_peak_guide(loop, inlets, [Outlet(fractions(row))])
    assert guide is not None
    assert guide.gains[0] == pytest.approx(high[0, :4], rel=2e-3)


@pytest.mark.parametrize(("a", "k", "alpha"), [(0.5, -2.0, 0.0), (-1.0, -0.5, 0.0), (0.5, -2.0, 0.3)])
def test_closed_form_of_one_state(a, k, alpha):
    """x' = a x + u + v, u = k x held for T, no delay: everything is an exponential and a geometric series."""
    T = 0.25
    factor = math.exp(a * T) + k / a * (math.exp(a * T) - 1)
    ratio = abs(factor) * math.exp(alpha * T)
    b = a + alpha
    inside = (math.exp(b * T) - 1) / b

    def gain(phi):
        reach = (math.exp(a * phi) + k / a * (math.exp(a * phi) - 1)) * math.exp(alpha * phi)
        return (math.exp(b * phi) - 1) / b + abs(reach) * inside / (1 - ratio)

    best = max(gain(phi) for phi in np.linspace(0, T, 4001))
    loop = SampledLoop(M([[a]]), M([[1]]), M([[k]]), Fraction(1, 4))
    inlet = Inlet((Fraction(1),), (Fraction(0),), (Fraction(0),))
    low, high = _enclosed(loop, Fraction(alpha), [inlet], [Outlet((Fraction(1), Fraction(0)))], (), 1e-6)
    assert low[0, 0] * (1 - 1e-6) <= best <= high[0, 0] * (1 + 1e-12)
    assert high[0, 0] == pytest.approx(best, rel=1e-6)


def test_the_unit_worked_by_hand_in_the_documentation():
    """x' = u + v, u = -x held: T = 1 forgets everything within a period, T = 1.5 gives 3 at both ends of a period."""
    loop = ([[0]], [[1]], [[-1]], [[1]], [[1]])
    assert sampled_peak_gain(*loop, 1).upper[0, 0] == pytest.approx(1, rel=1e-6)
    assert sampled_peak_gain(*loop, "1.5").upper[0, 0] == pytest.approx(3, rel=1e-6)
    with pytest.raises(UnstableLoop):
        sampled_peak_gain(*loop, 2)


def test_tends_to_the_continuous_loop():
    A, B, D, H = [[0, 1], [-1, "-0.2"]], [[0], [1]], [[0], [1]], [[1, 0]]
    R = [[-1, -1]]
    limit = peak_to_peak_gain([[0, 1], [-2, "-1.2"]], D, H).upper[0, 0]
    errors = [sampled_peak_gain(A, B, R, D, H, T).upper[0, 0] - limit for T in ("0.1", "0.05", "0.025")]
    assert errors[0] / errors[1] == pytest.approx(2, rel=0.1)
    assert errors[1] / errors[2] == pytest.approx(2, rel=0.05)


def test_free_response_from_a_sample_on():
    loop, _ = random_loop(np.random.default_rng(8), 2, 1, Fraction(1, 2))
    row = (Fraction(1), Fraction(-1, 2), Fraction(0))
    low, high = _enclosed(loop, Fraction(0), [], [Outlet(row)], (1.0, 2.0, 0.5), 1e-6)
    Mx, T, d = loop.generator.floats(), float(loop.period), float(loop.delay)
    W = scipy.linalg.expm(Mx * d)
    W[2:] = 0.0
    W[2:, :2] = loop.R.floats()
    Phi, best = loop.transition(), 0.0
    for phi in np.linspace(0, T, 801):
        reach = scipy.linalg.expm(Mx * phi) if phi < d else scipy.linalg.expm(Mx * (phi - d)) @ W
        seen = np.array([1.0, -0.5, 0.0]) @ reach
        for _ in range(40):
            best = max(best, np.abs(seen) @ np.array([1.0, 2.0, 0.5]))
            seen = seen @ Phi
    assert low[0, -1] * (1 - 1e-5) <= best <= high[0, -1] * (1 + 1e-12)


def test_a_unit_with_everything_sampled():
    """Received samples, sensor noise and command rounding enter where they do; own parts are sampled as well."""
    kind = replace(scalar_kind("0.5"), N=M([["0.4"]]))
    link = replace(convoy().links[0], source_kind="tank", offer="level", kind="tank", take="inflow")
    K, T, d = M([["-0.8"]]), Fraction(3, 10), Fraction(1, 10)
    unit = sampled_unit(kind, (link,), K, T, d)
    own = float(link.own_strength)
    # By hand: x' = (-.5 - own) x + u + v, y = x + .4 (v - own x), u = -.8 y.
    truth = Adjoint([[-0.5 - own]], [[1.0]], [[-0.8 * (1 - 0.4 * own)]], T, d)
    found = sampled_peaks(unit, width=1e-6)
    state, command = [1.0, 0.0], [0.0, 1.0]
    for role, row in (("states", state), ("actuators", command)):
        for group, parts in (("takes", {"D": [1.0], "gu": [-0.32]}), ("sensors", {"gu": [-0.8]})):
            assert found.gains[role][group].upper[0, 0] == pytest.approx(truth.supremum(row, **parts), rel=1e-6)
        assert found.gains[role]["commands"].upper[0, 0] == pytest.approx(truth.supremum(row, gu=[1.0]), rel=1e-6)
    # At the sampling instant the reading is x alone, plus what the sensor itself hears and its own error.
    reading = truth.gains([0.0], [1 - 0.4 * own, 0.0], D=[1.0], gu=[-0.32])[0]
    assert found.gains["readings"]["takes"].upper[0, 0] == pytest.approx(reading + 0.4, rel=1e-6)
    noise = truth.gains([0.0], [1 - 0.4 * own, 0.0], gu=[-0.8])[0]
    assert found.gains["readings"]["sensors"].upper[0, 0] == pytest.approx(noise + 1, rel=1e-6)


def test_no_path_no_gain_and_what_is_refused(monkeypatch):
    A, B, R, D = [[-1, 0], [1, -2]], [[0], [1]], [[0, "-0.5"]], [[0], [1]]
    assert sampled_peak_gain(A, B, R, D, [[1, 0]], "0.1").upper[0, 0] == 0.0
    assert sampled_peak_gain(A, B, R, D, [[0, 1]], "0.1").upper[0, 0] > 0
    with pytest.raises(UnstableLoop, match="shorter period"):
        sampled_peak_gain([[0]], [[1]], [[-1]], [[1]], [[1]], 2)
    for period, delay in ((0, 0), ("0.1", "0.2"), ("0.1", "-0.1")):
        with pytest.raises(InputError):
            sampled_peak_gain(A, B, R, D, [[0, 1]], period, delay)
    for wrong in ([[1]], [[1, 2, 3]]):
        with pytest.raises(InputError):
            sampled_peak_gain(A, B, R, D, wrong, "0.1")
    with pytest.raises(InputError, match="disturbance"):
        sampled_unit(hauler(), (), convoy_gains()["hauler"].K, "0.1", stored=("speed",))
    monkeypatch.setattr(sampled_sup, "_MOST_CELLS", 8)
    with pytest.raises(WidthNotReached, match="larger width"):
        sampled_peak_gain(A, B, R, D, [[0, 1]], 1)


def test_absolute_integral_against_quadrature():
    rng = np.random.default_rng(11)
    c = rng.normal(size=(30, 7)) * rng.integers(0, 2, size=(30, 7))
    low, high, sup = absolute_integral(c, np.zeros(30), bernstein_matrix(7))
    s = np.linspace(0, 1, 200_001)
    for row, a, b, top in zip(c, low, high, sup, strict=True):
        values = np.abs(np.polynomial.polynomial.polyval(s, row))
        assert a - 1e-9 <= scipy.integrate.trapezoid(values, s) <= b + 1e-9
        assert values.max() <= top
        assert b - a <= 1e-6 * max(b, 1e-9)
    loose = absolute_integral(c, np.full(30, 0.1), bernstein_matrix(7))
    assert np.all(loose[0] <= low) and np.all(loose[1] >= high + 0.0999)


def test_numbers_as_flashed():
    numbers = FixedPoint(16, 8)
    found = gains_as_flashed(convoy_gains(("-6.001", "-5", "-1.499")), numbers)["hauler"].K
    assert found == ExactMatrix.of([[Fraction(-1536, 256), -5, Fraction(-384, 256)]])
    with pytest.raises(InputError, match=r"hauler: demand slot = -6"):
        gains_as_flashed(convoy_gains(), FixedPoint(16, 13))
    with pytest.raises(InputError):
        FixedPoint(16, 8, "up")
    with pytest.raises(InputError):
        row_error(5000)

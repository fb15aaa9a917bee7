"""Hop gains: kernels against slow simulations, claims against counterexamples, the worst leader against its bound."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.integrate
import scipy.linalg

from synth.base.errors import InputError, UnstableLoop
from synth.gain import hop_gains, hop_growth, leader_signal, peak_to_peak_gain
from synth.gain.strings.dead_time import DelayLoop, QuasiPolynomial, loop_of_transfer
from synth.gain.strings.dead_time_kernel import absolute_integral, kernel_sign, peak_of_response, response
from synth.gain.strings.dead_time_steps import method_of_steps
from synth.network.model import Link
from tests.gain.strings import M, classic, string

Q, F = QuasiPolynomial.of, Fraction


def literal_kernel(loop: DelayLoop, outlet: str, seconds: float, dt: float):
    """Slow and plain: Runge-Kutta of order 4 on a grid of which every delay is a whole number; values at the grid."""
    n, count = loop.size, round(seconds / dt)
    A = {round(float(b) / dt): m.floats() for b, m in loop.A.items()}
    D = {round(float(d) / dt): m.floats()[:, 0] for d, m in loop.D.items()}
    x = np.zeros((2 * count + 1, n))  # half steps, so that delayed middles are known

    def slope(k, now):
        return A.get(0, 0) @ now + sum(m @ x[k - 2 * b] for b, m in A.items() if b and k - 2 * b >= 0)

    out = []
    state = np.zeros(n)
    for k in range(count):
        state = state + D.get(k, 0)
        x[2 * k] = state
        h, K = dt, 2 * k
        a = slope(K, state)
        b = slope(K + 1, state + h / 2 * a)
        c = slope(K + 1, state + h / 2 * b)
        x[2 * k + 1] = state + h / 2 * (a + b) / 2
        d = slope(K + 2, state + h * c)
        out.append(float((loop.H[outlet].floats() @ state)[0]))
        state = state + h / 6 * (a + 2 * b + 2 * c + d)
        x[2 * k + 2] = state
    return np.array(out)


def late_loop(tau="0.3", h="1.2", lam="0.2", dead="0.1"):
    network, gains = classic(tau, h, lam)
    return hop_gains(network, gains, gap_error="spacing", dead_time=dead).hops[0].loop.loop


def test_the_method_of_steps_follows_a_plain_simulation():
    loop = late_loop()
    steps = method_of_steps(loop, 12.0)
    ours = response(steps, loop.H["hop"], loop.D).coefficients[:, 0]
    plain = literal_kernel(loop, "hop", 12.0, 0.005)
    every = round(float(steps.step) / 0.005)
    assert steps.residual.max() < 1e-11
    assert np.abs(ours[: len(plain) // every] - plain[::every][: len(ours)]).max() < 2e-4


def test_peak_gain_with_dead_time_encloses_the_plain_sum():
    loop = late_loop(h="0.9")
    found = peak_of_response(loop, "hop", 1e-7)
    plain = np.abs(literal_kernel(loop, "hop", 50.0, 0.01)).sum() * 0.01
    assert found.width < 1e-7
    assert plain == pytest.approx(found.upper, rel=1e-3)
    assert found.lower > 1.03


def test_without_dead_time_both_methods_agree():
    """The exact walk over the rational kernel against the method of steps with its residual."""
    network, gains = classic("0.5", "1", "0.4")
    loop = hop_gains(network, gains, gap_error="spacing").hops[0].loop.loop
    exact = peak_to_peak_gain(loop.now, loop.D[F(0)], loop.H["hop"], width=1e-9)
    steps = method_of_steps(loop, 60.0)
    y = response(steps, loop.H["hop"], loop.D)
    inside = absolute_integral(*y.bernstein, float(steps.step))
    assert inside.lower == pytest.approx(exact.lower[0, 0], rel=1e-8)
    assert inside.upper == pytest.approx(exact.upper[0, 0], rel=1e-8)


def test_a_wrong_solution_shows_in_its_residual():
    loop = late_loop()
    steps = method_of_steps(loop, 4.0)
    from synth.gain.strings.dead_time_steps import _residual

    pieces = {
        steps.lag(b): np.array(
            [[float(m[i, j] * steps.scale[j] / steps.scale[i]) for j in range(loop.size)] for i in range(loop.size)]
        )
        * float(steps.step)
        for b, m in loop.A.items()
    }
    assert _residual(pieces, steps.X).max() < 1e-11
    wrong = steps.X.copy()
    wrong[7, 1] += 1e-6
    assert _residual(pieces, wrong).max() > 1e-7


def test_one_sign_is_proven_and_refuted_with_a_witness():
    assert kernel_sign(late_loop(h="1.5"), "hop").sign == 1
    loop = late_loop(h="1.0")
    found = kernel_sign(loop, "hop")
    assert found.sign == 0
    kernel = literal_kernel(loop, "hop", found.time + 2, 0.005)
    near = kernel[int(found.time / 0.005) - 2 : int((found.time + 0.2) / 0.005)]
    assert near.min() < 0


@pytest.mark.parametrize(
    ("num", "den", "sign"),
    [
        ({0: [1]}, {0: [1, 2, 1]}, 1),  # a double root: t e^{-t}
        ({0: [-1]}, {0: [2, 3, 1]}, -1),
        ({0: [1, -1]}, {0: [1, 2, 1]}, 0),  # (1 - s)/(1 + s)^2 starts below and ends above
        ({0: [1], 1: [-2]}, {0: [1, 1]}, 0),  # a late pulse of the other sign
        ({"0.7": [1, "0.5"]}, {0: [2, 3, 1]}, 1),
        ({0: [1]}, {0: [5, 2, 1]}, 0),
    ],
)
def test_signs_known_by_hand(num, den, sign):
    found = kernel_sign(loop_of_transfer(Q(num), Q(den)), "hop")
    # Two equal roots are not told apart from a near pair by a count, so there None would be honest too.
    assert found.sign == sign or (den == {0: [1, 2, 1]} and found.sign is None)


def test_claims_and_steady_gain():
    good = hop_gains(*classic("0.5", "1.9", "0.4"), gap_error="spacing")
    assert good.claim == "peak"
    assert good.peak.upper == 1.0
    assert good.one_signed
    assert good.hops[0].steady == 1
    assert good.gap_error(1) == good.gap_error(500) == pytest.approx(0.9530, abs=1e-4)
    half = hop_gains(*classic("0.5", "1", "0.4"), gap_error="spacing")
    assert half.claim == "mean square"
    assert not half.one_signed
    assert half.gap_error(3) > half.gap_error(1) * 1.4
    none = hop_gains(*classic("0.5", "0.8", "0.4"), gap_error="spacing")
    assert none.claim == "none"
    for found in (good, half, none):
        text = found.as_text() + str(found.as_json()["meaning"])
        assert "weaker than a proof" in text
        assert "ISS" not in text and "stable" not in text


def test_gap_error_of_a_ramp_is_that_of_the_augmented_unit():
    """|T_e/s|_1 by the moved states equals the peak gain of a unit with the leader's speed as one more, slow, state."""
    loop = late_loop(dead="0")
    found = hop_gains(*classic("0.3", "1.2", "0.2"), gap_error="spacing").hops[0].gap_error
    A, D, H = loop.now.floats(), loop.D[F(0)].floats(), loop.H["gap_error"].floats()
    leak = 1e-7
    big = np.block([[A, D], [np.zeros((1, 3)), np.array([[-leak]])]])
    slow = peak_to_peak_gain(big, [[0], [0], [0], [1]], np.hstack([H, [[0.0]]]), width=1e-4)
    assert slow.upper[0, 0] == pytest.approx(found.upper, rel=1e-3)


def test_gap_error_with_dead_time_against_a_plain_simulation():
    network, gains = classic("0.3", "1.2", "0.2")
    found = hop_gains(network, gains, gap_error="spacing", dead_time="0.1").hops[0]
    slope = literal_kernel(found.loop.loop, "gap_error", 40.0, 0.005)
    kernel = scipy.integrate.cumulative_trapezoid(slope, dx=0.005, initial=0)
    kernel -= kernel[-1]  # what the jumps cost the plain simulation stays in its integral, and is taken off
    assert np.abs(kernel).sum() * 0.005 == pytest.approx(found.gap_error.upper, rel=5e-3)
    assert found.gap_error.width < 1e-6


def test_any_order_of_three_types_and_one_bad_type_spoils_it():
    types = [
        ("0.5", "1.9", F("0.4") / F("1.9"), 1 / F("1.9")),
        ("0.3", "1.2", F(1, 6), 1 / F("1.2")),
        ("0.4", 2, "0.2", "0.6"),
    ]
    network, gains = string(*types)
    found = hop_gains(network, gains, gap_error="spacing", any_order=True)
    assert [hop.after for hop in found.hops] == ["any kind"] * 3
    assert found.claim == "peak"
    spoilt = string(*types[:2], ("0.5", 1, "0.4", 1))
    assert hop_gains(*spoilt, gap_error="spacing", any_order=True).claim == "mean square"


def test_any_order_holds_for_orders_drawn_at_random():
    """The product of |T|_1 over any order bounds the peak gain of that order, here by a dense convolution."""
    types = [("0.5", "1.0", "0.4", 1), ("0.3", "1.2", F(1, 6), 1 / F("1.2")), ("0.4", 2, "0.2", "0.6")]
    found = hop_gains(*string(*types), gap_error="spacing", any_order=True)
    rng = np.random.default_rng(3)
    dt, count = 0.02, 4000
    kernels = []
    for hop in found.hops:
        loop = hop.loop.loop
        E = scipy.linalg.expm(loop.now.floats() * dt)
        x = loop.D[F(0)].floats()[:, 0]
        row = []
        for _ in range(count):
            row.append(float((loop.H["hop"].floats() @ x)[0]))
            x = E @ x
        kernels.append(np.array(row) * dt)
    for _ in range(5):
        order = rng.integers(0, 3, size=6)
        total = np.ones(1)
        for i in order:
            total = np.convolve(total, kernels[i])[:count]
        bound = np.prod([found.hops[i].peak.upper for i in order])
        assert np.abs(total).sum() <= bound * 1.01
        assert np.abs(total).sum() > 0.9


def test_radio_changes_the_hop_and_a_pair_matters_only_if_the_predecessor_does():
    plain = ("0.5", "1.2", "0.1", "0.5", "0.5")
    network, gains = string(plain, ("0.4", "1.5", "0.2", "0.6", "0.5"), radio_delay="0.1")
    found = hop_gains(network, gains, gap_error="spacing", any_order=True)
    assert len(found.hops) == 2
    assert found.claim == "peak"
    # Drag on one kind's speed: what it offers as acceleration is then speed' + drag speed, and the pair matters.
    dragged = replace(network.kinds[0], A=M([[0, -1, 0], [0, "-0.2", 1], [0, 0, -2]]))
    mixed = replace(network, kinds=(dragged, network.kinds[1]))
    assert len(hop_gains(mixed, gains, gap_error="spacing", any_order=True).hops) == 4


def test_radio_with_delay_is_exact():
    """T = (Ka s^2 e^{-s r} + kv s + kp)/(tau s^3 + s^2 + (kv + h kp) s + kp), written down by hand."""
    network, gains = string(("0.5", "1.2", "0.1", "0.5", "0.25"), radio_delay="0.2")
    loop = hop_gains(network, gains, gap_error="spacing").hops[0].loop.loop
    num, den = loop.transfer("hop")
    lead = den.leading(3)[F(0)]
    want = Q({0: ["0.1", "0.5"], "0.2": [0, 0, "0.25"]}).scaled(lead / F(1, 2))
    assert (num - want).terms == {}
    assert (den - Q({0: ["0.1", "0.62", 1, "0.5"]}).scaled(lead * 2)).terms == {}


def test_what_is_not_a_one_way_string_is_refused():
    network, gains = classic("0.5", "1.9", "0.4")
    link = network.links[0]
    for links, words in (
        ((link, replace(link, at=(1,))), "exactly one"),
        ((replace(link, at=(-2,)),), "next unit"),
        ((), "nobody"),
        ((replace(link, weakens=True),), "weaken"),
        ((link, replace(link, sort="tolerance", at=(0,))), "tolerances"),
    ):
        with pytest.raises(InputError, match=words):
            hop_gains(replace(network, links=links), gains)
    with pytest.raises(InputError, match="no sensor"):
        hop_gains(network, gains, sensing={"nose": 1})
    with pytest.raises(InputError, match="derivatives of one signal"):
        odd = Link("odd", "type0", "spacing", (-1,), "type0", "radio", F(1))
        hop_gains(replace(network, links=(link, odd)), gains)
    with pytest.raises(UnstableLoop):
        hop_gains(*string(("0.5", "1", "-0.1", "0.5")))


def whole_string(loop: DelayLoop, vehicles: int):
    """Exact matrices of ``vehicles`` followers in a row, the leader's speed the inlet (no dead time)."""
    A, D, H = loop.now.floats(), loop.D[F(0)].floats(), loop.H["hop"].floats()
    n = len(A)
    big, inlet = np.zeros((n * vehicles,) * 2), np.zeros((n * vehicles, 1))
    for k in range(vehicles):
        big[n * k : n * k + n, n * k : n * k + n] = A
        if k:
            big[n * k : n * k + n, n * k - n : n * k] = D @ H
    inlet[:n] = D
    return big, inlet


@pytest.mark.parametrize(("h", "lam"), [("1", "0.4"), ("1.9", "0.4")])
@pytest.mark.parametrize("vehicle", [1, 10, 100])
def test_the_worst_leader_reaches_the_bound_of_that_vehicle_and_never_passes_it(h, lam, vehicle):
    """Whole string simulated by its matrix exponential with the leader's signal held over each step."""
    found = hop_gains(*classic("0.5", h, lam), gap_error="spacing")
    growth = hop_growth(found, max(vehicle, 2))
    loop = found.hops[0].loop.loop
    big, inlet = whole_string(loop, vehicle)
    n = len(big)
    for outlet, place in (("hop", 0), ("gap_error", 1)):
        times, values, estimate = leader_signal(found, vehicle, outlet)
        step, stride = times[1] - times[0], max(1, len(times) // 3000)
        # The leader's speed is one more state; its rate is held over every step (for the hop, its value is).
        ramp = outlet == "gap_error"
        total = np.zeros((n + 2, n + 2))
        total[:n, :n], total[:n, n : n + 1] = big, inlet
        total[n, n + 1] = float(ramp)
        E = scipy.linalg.expm(total * step * stride)
        state = np.zeros(n + 2)
        row = np.zeros(n + 2)
        row[n - loop.size : n] = loop.H[outlet].floats()[0]
        reached = 0.0
        for value in values[len(values) % stride :: stride]:
            state[n + 1 if ramp else n] = value
            state = E @ state
            reached = max(reached, abs(float(row @ state)))
        bound = growth.at(vehicle)[place]
        assert reached >= 0.98 * bound
        assert reached <= bound * (1 + max(3 * growth.error, 2e-3))
        proven = (found.peak.upper**vehicle, found.gap_error(vehicle))[place]
        assert reached <= proven * (1 + 1e-9)
        assert estimate == pytest.approx(bound, rel=0.02)


def test_growth_is_a_square_root_where_peaks_do_not_grow_and_linear_where_they_do():
    good = hop_growth(hop_gains(*classic("0.5", "1.9", "0.4"), gap_error="spacing"), 400)
    assert good.law.startswith("k^0.5")
    assert good.extrapolated[1][0] == 100_000
    assert good.extrapolated[1][1] == pytest.approx(good.at(400)[2] * np.sqrt(250), rel=0.05)
    assert "not computed" in good.as_text()
    assert np.all(np.diff(good.gap_error) < 0)
    linear = hop_growth(hop_gains(*classic("0.5", "1", "0.4"), gap_error="spacing"), 200)
    assert linear.law.startswith("k^1")
    bad = hop_growth(hop_gains(*classic("0.5", "0.6", "0.4"), gap_error="spacing"), 60)
    assert bad.law.endswith("^k")
    with pytest.raises(InputError, match="between 2"):
        hop_growth(hop_gains(*classic("0.5", "1.9", "0.4")), 1)

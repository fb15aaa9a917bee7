"""The stepper against whole-network exponentials, closed forms and its laws."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from synth.base.errors import InputError
from synth.simulate.model import build_section, fold_fresh, open_loop
from synth.simulate.stepper import Control, Stepper, march
from tests.build import M, convoy, convoy_gains
from tests.simulate.nets import tanks, two_kinds


def end_state(network, gains, cells, step, steps, x0, w=None, keep=None):
    """Last state of one march; ``w`` [disturbance, cell] constant or a supply; ``keep`` collects copies of the blocks'
    states.
    """
    section = build_section(network, gains, cells)
    system, late = fold_fresh(section.block, section.wires)
    runs = x0.shape[2]
    zero = np.zeros((section.block.sizes[2], cells))

    def supply(first, count):
        if callable(w):
            return w(first, count)
        return np.repeat(np.broadcast_to(zero if w is None else w, (count, *zero.shape))[..., None], runs, axis=-1)

    def listen(block):
        if keep is not None:
            keep.append((block.times.copy(), block.x.copy(), block.z1.copy(), block.y1.copy()))

    return march(Stepper(system, late, Fraction(step)), x0, steps, supply, listen)


def by_hand(network, gains, cells):
    """A and E of the open-ended section without delays, entry by entry from the definition (no feed-through)."""
    section = build_section(network, gains, cells)
    b = section.block
    n, _, nw, *_ = b.sizes
    A, E = np.zeros((cells, n, cells, n)), np.zeros((cells, n, cells, nw))
    for c in range(cells):
        A[c, :, c, :] += b.A
        E[c, :, c, :] += b.E
        for wire in section.wires:
            if 0 <= c + wire.at < cells:
                A[c, :, c + wire.at, :] += np.outer(b.D[:, wire.take], wire.strength * b.H[wire.offer])
    return A.reshape(cells * n, -1), E.reshape(cells * n, -1)


@pytest.mark.parametrize("cells", [1, 2, 7])
def test_without_delay_a_march_is_the_matrix_exponential(cells):
    rng = np.random.default_rng(1)
    network, gains = convoy(strength="1.5", delay=0, offsets=(-1, 1)), convoy_gains()
    x0, w = rng.standard_normal((3, cells, 1)), rng.standard_normal((1, cells))
    found = end_state(network, gains, cells, "0.05", 400, x0, w)
    A, E = by_hand(network, gains, cells)
    big = np.zeros((A.shape[0] + E.shape[1],) * 2)
    big[: A.shape[0]] = np.hstack([A, E]) * 20.0
    flow = expm(big)[: A.shape[0]]
    exact = flow @ np.concatenate([x0[:, :, 0].T.ravel(), w.T.ravel()])
    assert np.abs(found[:, :, 0].T.ravel() - exact).max() < 1e-9 * np.abs(exact).max() + 1e-12


def test_feed_through_without_delay_solves_the_algebraic_loop():
    """Two kinds with feed-through: values and derivative satisfy the equations of section 1, checked by differences."""
    network, gains = two_kinds()
    kept = []
    x0 = np.random.default_rng(2).standard_normal((3, 5, 1))
    w = np.random.default_rng(3).standard_normal((3, 5))
    h = 1e-4
    end_state(network, gains, 5, "0.0001", 3, x0, w, kept)
    x, z = np.concatenate([k[1] for k in kept])[..., 0], np.concatenate([k[2] for k in kept])[..., 0]
    b = build_section(network, gains, 5)
    v = np.zeros((2 + 1, 5))
    for wire in b.wires:
        for c in range(5):
            if 0 <= c + wire.at < 5:
                v[wire.take, c] += wire.strength * z[1, wire.offer, c + wire.at]
    assert np.allclose(z[1], b.block.H @ x[1] + b.block.F @ v + b.block.Fw @ w, atol=1e-12)
    slope = (x[2] - x[0]) / (2 * h)
    assert np.allclose(slope, b.block.A @ x[1] + b.block.D @ v + b.block.E @ w, atol=1e-6)


def test_an_algebraic_loop_that_has_no_solution_is_refused():
    network, gains = two_kinds(feed=5)
    # cross carries 0.2 of an outlet with feed-through 5 to the neighbour: nilpotent on open ends, so make it a loop on
    # itself
    from dataclasses import replace

    loop = replace(network, links=tuple(replace(k, at=(0,)) if k.name == "cross" else k for k in network.links))
    section = build_section(loop, gains, 3)
    with pytest.raises(InputError, match="algebraic loop"):
        fold_fresh(section.block, section.wires)


def test_large_sections_use_sparse_maps_and_stay_exact():
    network, gains = convoy(delay=0, offsets=(-1, 1)), convoy_gains()
    x0 = np.random.default_rng(4).standard_normal((3, 200, 1))
    section = build_section(network, gains, 200)
    stepper = Stepper(*fold_fresh(section.block, section.wires), Fraction("0.05"))
    assert not isinstance(stepper.map, np.ndarray)
    found = end_state(network, gains, 200, "0.05", 100, x0)
    A, _ = by_hand(network, gains, 200)
    exact = expm(5.0 * A) @ x0[:, :, 0].T.ravel()
    assert np.abs(found[:, :, 0].T.ravel() - exact).max() < 1e-9


def delayed_tank(t, g):
    """x' = -x + g x(t-1), x = 1 before 0, by the method of steps up to t = 3."""
    x1 = np.exp(-1) + g * (1 - np.exp(-1))
    if t <= 1:
        return np.exp(-t) + g * (1 - np.exp(-t))
    s = t - 1
    second = lambda s: x1 * np.exp(-s) + g * (1 - g) * s * np.exp(-s) + g**2 * (1 - np.exp(-s))  # noqa: E731
    if t <= 2:
        return second(s)
    s, x2 = t - 2, second(1.0)
    decay = np.exp(-s)
    return x2 * decay + g * (x1 - g**2) * s * decay + g**2 * (1 - g) * s**2 / 2 * decay + g**3 * (1 - decay)


def test_delay_converges_with_order_four_to_the_method_of_steps():
    network, gains = tanks(strength="0.8", offsets=(0,), delay=1)
    errors = []
    for many in (2, 4, 8, 16):
        found = end_state(network, gains, 1, Fraction(1, many), 3 * many, np.ones((1, 1, 1)))
        errors.append(abs(found[0, 0, 0] - delayed_tank(3.0, 0.8)))
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert errors[-1] < 1e-7
    assert orders.min() > 3.7, (errors, orders)


@pytest.mark.parametrize(
    "network", [convoy(strength="1.5", delay="0.37"), convoy(strength="1.5", delay="0.37", offsets=(-1, 1))]
)
def test_a_delay_that_is_no_multiple_of_the_step_converges_with_order_four(network):
    x0 = np.zeros((3, 4, 1))
    x0[2] = 1.0
    reference = end_state(network, convoy_gains(), 4, "0.0025", 1200, x0)  # 0.37 is 148 of these steps
    errors = []
    for step, steps in (("0.2", 15), ("0.1", 30), ("0.05", 60), ("0.025", 120)):
        found = end_state(network, convoy_gains(), 4, step, steps, x0)
        errors.append(np.abs(found - reference).max())
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    assert errors[-1] < 1e-6
    assert orders.mean() > 3.5, (errors, orders)


def test_delayed_feed_through_against_a_very_fine_run():
    network, gains = two_kinds(delay="0.3")
    x0 = np.random.default_rng(5).standard_normal((3, 4, 1))
    w = np.random.default_rng(6).standard_normal((3, 4))
    fine = end_state(network, gains, 4, "0.005", 600, x0, w)
    errors = [
        np.abs(end_state(network, gains, 4, s, n, x0, w) - fine).max()
        for s, n in (("0.1", 30), ("0.05", 60), ("0.025", 120))
    ]
    assert errors[-1] < 1e-7
    assert np.log2(errors[0] / errors[1]) > 3.5


def test_moduli_must_add_growth_of_two_links_that_cancel_without_delay():
    """z' = -z + 5 z(t) - 4.5 z(t-d) is calm at d = 0 (rate -0.5) and grows at d = 0.3: the net strength 0.5 proves
    nothing.

    The growth is a root of s + 1 - 5 + 4.5 e^{-0.3 s} = 0.
    """
    from dataclasses import replace

    network, gains = tanks(strength="5", offsets=(0, 0))
    first, second = network.links
    late = replace(second, strength=Fraction("-4.5"), delay=Fraction("0.3"))
    kept = []
    end_state(replace(network, links=(first, late)), gains, 1, "0.01", 1000, np.ones((1, 1, 1)), None, kept)
    x = np.concatenate([k[1] for k in kept])[:, 0, 0, 0]
    # two samples far back fix the recurrence x[k+2] = p x[k+1] + q x[k] of the dominant pair, whose roots are e^{s 0.1}
    late_x = x[600::10]
    p, q = np.linalg.lstsq(
        np.stack([late_x[1:-1], late_x[:-2]], axis=1) / late_x.max(), late_x[2:] / late_x.max(), rcond=None
    )[0]
    root = np.log(np.roots([1, -p, -q]).astype(complex)[0]) / 0.1
    assert abs(root + 1 - 5 + 4.5 * np.exp(-0.3 * root)) < 1e-4
    assert root.real > 0.8


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**31), st.sampled_from(["0", "0.1", "0.13"]), st.floats(-3, 3), st.floats(-3, 3))
def test_law_of_superposition(seed, delay, a, b):
    rng = np.random.default_rng(seed)
    network, gains = convoy(delay=delay, offsets=(-1, 2)), convoy_gains()
    x, w = rng.standard_normal((3, 5, 2)), rng.standard_normal((40, 1, 5, 2))
    both = np.concatenate([x, (a * x[..., :1] + b * x[..., 1:])], axis=-1)
    all_w = np.concatenate([w, a * w[..., :1] + b * w[..., 1:]], axis=-1)
    found = end_state(network, gains, 5, "0.05", 40, both, lambda first, count: all_w[first : first + count])
    assert np.allclose(found[..., 2], a * found[..., 0] + b * found[..., 1], atol=1e-10)


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 2**31), st.integers(1, 150), st.sampled_from(["0", "0.1", "0.13"]))
def test_law_of_time_shift(seed, shift, delay):
    rng = np.random.default_rng(seed)
    network, gains = convoy(delay=delay), convoy_gains()
    w = rng.standard_normal((30, 1, 4, 1))
    shifted = np.concatenate([np.zeros((shift, 1, 4, 1)), w])
    zero = np.zeros((3, 4, 1))
    early = end_state(network, gains, 4, "0.05", 30, zero, lambda first, count: w[first : first + count])
    late = end_state(network, gains, 4, "0.05", 30 + shift, zero, lambda first, count: shifted[first : first + count])
    assert np.allclose(early, late, atol=1e-12)


@settings(max_examples=10, deadline=None)
@given(st.permutations(range(6)))
def test_law_uncoupled_units_may_be_permuted(order):
    from dataclasses import replace

    x0 = np.random.default_rng(7).standard_normal((3, 6, 1))
    network = replace(convoy(), links=())
    found = end_state(network, convoy_gains(), 6, "0.05", 50, x0)
    assert np.array_equal(end_state(network, convoy_gains(), 6, "0.05", 50, x0[:, list(order)]), found[:, list(order)])


def test_the_middle_of_a_long_section_is_the_endless_pattern_until_the_ends_are_heard():
    """One-way links with delay: what happens at cell i before time k d cannot depend on cells more than k away."""
    network, gains = convoy(strength="1.5", delay="0.5"), convoy_gains()
    w = lambda n: np.ones((1, n))  # noqa: E731
    short = end_state(network, gains, 12, "0.05", 90, np.zeros((3, 12, 1)), w(12))
    long = end_state(network, gains, 30, "0.05", 90, np.zeros((3, 30, 1)), w(30))
    assert np.allclose(short[:, -1], long[:, -1], atol=1e-14)
    assert not np.allclose(short[:, 0], long[:, -1], atol=1e-3)


def test_open_ends_deliver_nothing_and_keep_the_own_part():
    """The first of a one-way convoy of relative links is alone with its own part folded in."""
    network, gains = convoy(strength="1.5", delay=0), convoy_gains()
    x0 = np.random.default_rng(8).standard_normal((3, 3, 1))
    found = end_state(network, gains, 3, "0.05", 40, x0)
    A = build_section(network, gains, 3).block.A
    assert A[2, 0] == pytest.approx(2 * (-6 - 1.5))
    assert np.allclose(found[:, 0, 0], expm(2.0 * A) @ x0[:, 0, 0], atol=1e-12)


def test_a_delay_shorter_than_the_step_is_refused():
    section = build_section(convoy(delay="0.1"), convoy_gains(), 3)
    with pytest.raises(InputError, match="shorter than the step"):
        Stepper(section.block, section.wires, Fraction("0.2"))


def limited(step, steps, limit, x0):
    from dataclasses import replace

    section = build_section(replace(convoy(), links=()), convoy_gains(), 1)
    control = Control(np.array([limit]))
    return march(
        Stepper(section.block, (), Fraction(step)),
        x0,
        steps,
        lambda f, n: np.zeros((n, 1, 1, 1)),
        lambda b: None,
        control,
    )


def test_saturation_follows_a_general_integrator_and_is_free_where_it_is_not_reached():
    x0 = np.array([1.0, 0.5, 0.0])[:, None, None]
    free = limited("0.01", 300, 1e9, x0)
    section = build_section(convoy(strength=0), convoy_gains(), 1)
    b = section.block
    assert np.allclose(free[:, 0, 0], expm(3.0 * b.A) @ x0[:, 0, 0], atol=1e-11)
    K = np.array([-6.0, -5.0, -1.5])
    plant = b.A - b.B @ K[None, :]
    right = lambda t, x: plant @ x + b.B[:, 0] * np.clip(K @ x, -1.0, 1.0)  # noqa: E731
    exact = solve_ivp(right, (0, 3), x0[:, 0, 0], rtol=1e-10, atol=1e-12).y[:, -1]
    errors = [
        np.abs(limited(s, n, 1.0, x0)[:, 0, 0] - exact).max() for s, n in (("0.02", 150), ("0.01", 300), ("0.005", 600))
    ]
    assert errors[-1] < 0.01
    assert errors[2] < 0.6 * errors[1] < 0.4 * errors[0]


def test_a_sampled_and_held_controller_is_stepped_exactly():
    """x(kT) of one unit: (e^{AT} + J(T) K)^k x0 with the plant's own A (theory section 6, no computation delay)."""
    from dataclasses import replace

    section = build_section(replace(convoy(), links=()), convoy_gains(), 1)
    x0 = np.array([1.0, -0.5, 0.2])[:, None, None]
    plant = M([[0, 1, 0], [0, 0, 1], [0, 0, -2]]).floats()
    big = np.zeros((4, 4))
    big[:3, :3], big[:3, 3] = plant * 0.3, np.array([0, 0, 2]) * 0.3
    E = expm(big)
    Phi = E[:3, :3] + np.outer(E[:3, 3], [-6, -5, -1.5])
    found = march(
        Stepper(open_loop(section), (), Fraction("0.1")), x0, 30, lambda f, n: np.zeros((n, 1, 1, 1)), lambda b: None,
        Control(np.array([np.inf]), 3),
    )  # fmt: skip
    assert np.allclose(found[:, 0, 0], np.linalg.matrix_power(Phi, 10) @ x0[:, 0, 0], atol=1e-12)


def test_a_stopped_run_stays_at_zero_and_leaves_the_others_alone():
    network, gains = tanks(strength="0.5", delay="0.5")
    section = build_section(network, gains, 3)
    x0 = np.ones((1, 3, 2))
    stop = np.array([True, False])
    stepper = Stepper(section.block, section.wires, Fraction("0.05"))
    w = lambda f, n: np.ones((n, 1, 3, 2))  # noqa: E731
    found = march(stepper, x0, 400, w, lambda b: stop if b.first else None)
    alone = march(stepper, x0[..., 1:], 400, lambda f, n: np.ones((n, 1, 3, 1)), lambda b: None)
    assert not found[..., 0].any()
    assert np.allclose(found[..., 1], alone[..., 0], atol=1e-14)

"""The symbol and the covering against slow literal definitions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix
from synth.margin.cover import cover, no_crossing_between, stable_at_every_angle
from synth.margin.symbol import loop_family
from tests.build import convoy, convoy_gains
from tests.margin.networks import chain, interrupted, kind_of, link, network_of, no_gains, oscillators

numbers = st.integers(-20, 20).map(lambda v: v / 10)


def ring_modes(network, kappa: float, units: int) -> np.ndarray:
    """Definition: eigenvalues of a ring of ``units`` cells, assembled link by link (fresh links, zero gains)."""
    sizes = [kind.A.shape[0] for kind in network.kinds]
    cell = sum(sizes)
    first = {kind.name: sum(sizes[:i]) for i, kind in enumerate(network.kinds)}
    A = np.zeros((cell * units, cell * units))
    for c in range(units):
        for kind in network.kinds:
            n, o = kind.A.shape[0], c * cell + first[kind.name]
            A[o : o + n, o : o + n] += kind.A.floats()
        for one in network.links:
            to, source = network.kind(one.kind), network.kind(one.source_kind)
            D = to.D.floats()[:, [to.index("takes", one.take)]]
            H = source.H.floats()[[source.index("offers", one.offer)]]
            row = c * cell + first[one.kind]
            column = ((c + one.at[0]) % units) * cell + first[one.source_kind]
            rows = slice(row, row + len(D))
            A[rows, column : column + H.shape[1]] += kappa * float(one.strength) * D @ H
            A[rows, row : row + len(D)] -= kappa * float(one.own_strength) * D @ H if one.own_strength else 0
    return np.linalg.eigvals(A)


@settings(max_examples=25, deadline=None)
@given(values=st.lists(numbers, min_size=14, max_size=14), kappa=st.floats(0.2, 3))
def test_symbol_holds_exactly_the_modes_of_a_ring(values: list[float], kappa: float) -> None:
    """Two kinds, links to both sides, one of them relative: modes of a 7-ring = roots at the seven angles."""
    text = [str(v) for v in values]
    a = kind_of([[text[0], text[1]], [text[2], text[3]]], [[text[4]], [text[5]]], [[1, text[6]]], "a")
    b = kind_of([[text[7]]], [[1]], [[text[8]]], "b")
    network = network_of(
        (a, b),
        [
            link(a, -1, text[9], text[10]),
            link(a, 0, text[11], source=b),
            link(b, 2, text[12], source=a),
            link(b, 1, text[13]),
        ],
    )
    family = loop_family(network, no_gains(network))
    found = [np.linalg.eigvals(family.at(kappa).split(2 * np.pi * k / 7)[0]) for k in range(7)]
    rest = list(np.concatenate(found))
    for mode in ring_modes(network, kappa, 7):
        nearest = min(range(len(rest)), key=lambda i: abs(rest[i] - mode))
        assert abs(rest.pop(nearest) - mode) < 1e-4  # double eigenvalues keep only half the digits
    assert rest == []


def test_feed_through_is_kept_without_solving_the_loop_first() -> None:
    """z = x + .3 v: the pencil has the same roots as the matrix with v eliminated by hand."""
    base = chain(k="0.4")
    kind = replace(base.kinds[0], F=ExactMatrix.of([["0.3"]]))
    network = replace(base, kinds=(kind,))
    loop = loop_family(network, no_gains(network)).at(1.0)
    for theta in (0.0, 1.0, 3.0):
        g = 0.8 * np.cos(theta)
        s = -1 + g / (1 - 0.3 * g)
        assert abs(np.linalg.det(loop.matrix(np.array([theta]), np.array([s + 0j]))[0])) < 1e-12
    assert loop.radius >= 1 + 0.8 / (1 - 0.24) - 1e-9
    assert stable_at_every_angle(loop_family(network, no_gains(network)).at(0.9)).complete
    # z-loop of strength 2 * .4 * .3 * k reaches one: no bound on fast roots, so nothing may be claimed
    assert loop_family(network, no_gains(network)).at(5.0).radius == np.inf
    assert not stable_at_every_angle(loop_family(network, no_gains(network)).at(5.0)).complete


@settings(max_examples=60, deadline=None)
@given(entries=st.lists(numbers, min_size=8, max_size=8), spot=st.floats(-0.9, 0.9))
def test_a_complete_covering_never_hides_a_singular_point(entries: list[float], spot: float) -> None:
    """M(p) = B + p1 C with det made zero at p1 = spot: never complete; shifted away from zero: complete."""
    B, C = np.array(entries[:4]).reshape(2, 2), np.array(entries[4:]).reshape(2, 2)
    x = np.array([0.6, 0.8])
    singular = B - np.outer((B + spot * C) @ x, x)  # (singular + spot C) x = 0
    steps = np.array([np.linalg.norm(C, 2) + 1e-9])
    low, high = np.array([-1.0]), np.array([1.0])

    def matrices(points: np.ndarray) -> np.ndarray:
        return (singular + points[:, :1, None] * C).astype(complex)

    assert not cover(low, high, matrices, steps, 3000).complete
    lift = 2 * np.linalg.norm(singular) + 2 * np.linalg.norm(C) + 1
    assert cover(low, high, lambda p: matrices(p) + lift * np.eye(2), steps, 3000).complete


@pytest.mark.parametrize(("kappa", "stable"), [(0.99, True), (1.01, False)])
def test_covering_agrees_with_the_known_limit_of_the_chain(kappa: float, stable: bool) -> None:
    """x' = -x + k (left + right): stable iff k < 1/2."""
    network = chain(k="0.5")
    assert stable_at_every_angle(loop_family(network, no_gains(network)).at(kappa), 20_000).complete is stable


def test_no_crossing_is_shown_only_where_there_is_none() -> None:
    """The cubic of the other tests breaks at 2 and recovers at 3: both ends stable, yet something crosses between."""
    network = interrupted()
    family = loop_family(network, no_gains(network))
    assert stable_at_every_angle(family.at(1.9)).complete
    assert stable_at_every_angle(family.at(3.2)).complete
    assert no_crossing_between(family, 1.0, 1.9).complete
    assert not no_crossing_between(family, 1.0, 3.2, 50_000).complete


@pytest.mark.parametrize("kappa", [0.5, 1.0, 4.0])
def test_root_bound_and_steps_are_bounds(kappa: float) -> None:
    rng = np.random.default_rng(1)
    for network, gains in ((convoy(), convoy_gains()), (oscillators("0.3", "0.3"), no_gains(oscillators()))):
        loop = loop_family(network, gains).at(kappa)
        points = 200
        theta, s = rng.uniform(0, np.pi, points), rng.uniform(0, 3, points) + 1j * rng.uniform(-9, 9, points)
        there, back = loop.matrix(theta, s), loop.matrix(theta + 1e-4, s)
        assert np.max(np.linalg.norm(back - there, 2, axis=(1, 2))) <= loop.step_theta * 1e-4 * (1 + 1e-9)
        aside = loop.matrix(theta, s + 1e-4j)
        assert np.max(np.linalg.norm(aside - there, 2, axis=(1, 2))) <= loop.step_s * 1e-4 * (1 + 1e-9)
        far = np.linalg.svd(loop.matrix(theta, loop.radius * 1.001 * np.exp(1j * rng.uniform(-1.57, 1.57, points))))[1]
        assert np.min(far[:, -1]) > 0

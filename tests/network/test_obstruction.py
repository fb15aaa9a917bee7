"""Obstructions, theory (26): what is seen and reached decides, and no gains help where it says so."""

from __future__ import annotations

import json
import math
import random
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix
from synth.network import Network, obstruction, read
from synth.network.model import Link
from synth.network.rational import characteristic, hurwitz, null_space, rank, times, unseen
from synth.network.symbol import symbol_of
from tests.build import convoy, convoy_gains, scalar_kind
from tests.network.files import CONVOY, GAP_ONLY, read_text

RELATIVE_SPEED = (
    ("takes: {ahead: m/s^2, gap: m}", "takes: {ahead: m/s^2, gap: m, closing: m/s}"),
    ("band: 1.5 m}}", "band: 1.5 m}, pace: speed}"),
    (
        "  - {name: ranging",
        "  - {name: ranging, from: hauler.pace, at: -1, to: hauler.closing, strength: 1, relative: true}\n      "
        "- {name: ranging",
    ),
)


def gap_network(sensors: str, folder: Path, *changes: tuple[str, str]) -> Network:
    text = GAP_ONLY.read_text(encoding="utf-8")
    for before, after in (("sensors: [gap, speed, drive]", f"sensors: [{sensors}]"), *changes):
        assert before in text
        text = text.replace(before, after, 1)
    return read_text(text, folder)


def ring(network: Network, K: np.ndarray, cells: int) -> np.ndarray:
    """Literal closed loop of one kind on a ring of cells, unit by unit, without delays or feed-through."""
    kind = network.kinds[0]
    A, B, C, D, N, H = (getattr(kind, name).floats() for name in ("A", "B", "C", "D", "N", "H"))
    n = len(A)
    full = np.kron(np.eye(cells), A + B @ K @ C)
    for link in network.links:
        column = (D + B @ K @ N)[:, [kind.index("takes", link.take)]]
        row = H[[kind.index("offers", link.offer)], :]
        for i in range(cells):
            j = (i + link.at[0]) % cells
            full[i * n : (i + 1) * n, j * n : (j + 1) * n] += float(link.strength) * column @ row
            full[i * n : (i + 1) * n, i * n : (i + 1) * n] -= float(link.own_strength) * column @ row
    return full


@pytest.mark.parametrize("sensors", ["gap", "gap, speed", "gap, closing", "gap, closing, drive", "gap, speed, drive"])
def test_units_that_see_only_gaps_are_refused(sensors: str, tmp_path: Path) -> None:
    network = gap_network(sensors, tmp_path, *RELATIVE_SPEED)
    found = obstruction(network)
    assert found is not None and found.cause == "not seen"
    assert found.theta == (0.0,) and found.s == 0
    assert set(found.direction) == {"hauler.slot"}
    assert "Measure hauler.slot" in found.advice and "leader at the edge does not help" in found.advice
    assert json.loads(json.dumps(found.as_json()))["s"] == [0.0, 0.0]


@pytest.mark.parametrize("sensors", ["gap, slot", "slot", "slot, speed, drive"])
def test_absolute_position_is_enough(sensors: str, tmp_path: Path) -> None:
    assert obstruction(gap_network(sensors, tmp_path, *RELATIVE_SPEED)) is None


def test_the_convoy_has_no_obstruction() -> None:
    assert obstruction(convoy()) is None
    assert obstruction(read(CONVOY)) is None


def test_no_gains_move_the_mode(tmp_path: Path) -> None:
    """The literal ring of six haulers keeps the eigenvalue s with the announced direction, whatever the gains."""
    network = gap_network("gap, speed, drive", tmp_path)
    found = obstruction(network)
    assert found is not None
    one = np.array([found.direction.get(f"hauler.{s.name}", 0) for s in network.kinds[0].states])
    together = np.tile(one, 6)
    chance = random.Random(5)
    for _ in range(5):
        K = np.array([[chance.uniform(-9, 9) for _ in range(3)]])
        np.testing.assert_allclose(ring(network, K, 6) @ together, found.s * together, atol=1e-12)
    stable = ring(convoy(), convoy_gains()["hauler"].K.floats(), 6)
    assert np.linalg.eigvals(stable).real.max() < -0.1


def test_a_gap_two_places_ahead_is_blind_at_pi() -> None:
    """z at -1 plus z of oneself is zero when neighbours move oppositely: theta = pi."""
    network = convoy()
    kind = replace(
        network.kinds[0],
        C=ExactMatrix.of([[1, 0, 0], [0, 0, 0], [0, 0, 1]]),
        N=ExactMatrix.of([[1], [0], [0]]),
        D=ExactMatrix.zeros(3, 1),
    )
    link = replace(network.links[0], strength=Fraction(1), own_strength=Fraction(0))
    found = obstruction(replace(network, kinds=(kind,), links=(link,)))
    assert found is not None and found.theta == (math.pi,) and "opposite" in found.advice


def test_blind_between_the_grid_points() -> None:
    """A sensor that reads z(-1) + z(+1) - 2 cos(1) z sees nothing at theta = 1, which is no grid point."""
    network = convoy()
    kind = replace(
        network.kinds[0],
        C=ExactMatrix.of([[-2 * Fraction(math.cos(1.0)), 0, 0], [0, 0, 0], [0, 0, 1]]),
        N=ExactMatrix.of([[1], [0], [0]]),
        D=ExactMatrix.zeros(3, 1),
    )
    links = tuple(replace(network.links[0], at=(at,), strength=Fraction(1), own_strength=Fraction(0)) for at in (-1, 1))
    found = obstruction(replace(network, kinds=(kind,), links=links))
    assert found is not None and found.theta[0] == pytest.approx(1, abs=1e-6) and found.s == pytest.approx(0, abs=1e-9)


def test_a_sensor_in_odd_units_is_no_obstruction() -> None:
    """The same convoy with the slot counted in nanometres and in light years is accepted alike."""
    for unit in (Fraction(1, 10**12), Fraction(10**12)):
        network = convoy()
        kind = replace(
            network.kinds[0],
            C=ExactMatrix.of([[unit, 0, 0]]),
            N=ExactMatrix.zeros(1, 1),
            sensors=network.kinds[0].sensors[:1],
        )
        assert obstruction(replace(network, kinds=(kind,))) is None


def test_what_is_not_reached() -> None:
    """A drifting tank without any actuator; a leaking one is harmless."""

    def tank(a: int) -> Network:
        return Network("t", (replace(scalar_kind(a), B=ExactMatrix.zeros(1, 1)),), ())

    found = obstruction(tank(0))
    assert found is not None and found.cause == "not reached" and "actuator" in found.advice
    grows = obstruction(tank(-2))
    assert grows is not None and grows.s == 2
    assert obstruction(tank(1)) is None


def test_an_undamped_swing_that_nobody_sees() -> None:
    network = convoy()
    kind = replace(
        network.kinds[0],
        A=ExactMatrix.of([[0, 3, 0], [-3, 0, 0], [0, 0, -1]]),
        C=ExactMatrix.of([[0, 0, 1]]),
        N=ExactMatrix.zeros(1, 1),
        sensors=network.kinds[0].sensors[2:],
        B=ExactMatrix.of([[1], [0], [1]]),
        D=ExactMatrix.zeros(3, 1),
    )
    found = obstruction(replace(network, kinds=(kind,)))
    assert found is not None and found.s == pytest.approx(3j) and "swings without decay" in found.advice


def test_seen_by_one_kind_and_reached_by_the_other_only() -> None:
    """A fixed mode of decentralised control: each kind sees its own state and drives the other's."""
    first, second = scalar_kind(0, "a"), scalar_kind(1, "b")
    deaf = replace(first, B=ExactMatrix.zeros(1, 1))
    network = Network("two", (deaf, second), ())
    found = obstruction(network)
    assert found is not None and found.cause == "not reached" and set(found.direction) == {"a.x"}

    helped = replace(network, links=(Link("l", "b", "level", (0,), "a", "inflow", Fraction(1)),))
    found = obstruction(helped)
    assert found is not None and found.cause == "not seen" and "let them use those sensors" in found.advice
    told = replace(second, N=ExactMatrix.of([[1]]))
    links = (*helped.links, Link("m", "a", "level", (0,), "b", "inflow", Fraction(1)))
    assert obstruction(replace(helped, kinds=(deaf, told), links=links)) is None


def test_a_sensor_that_no_actuator_may_use_does_not_count() -> None:
    network = convoy()
    goal = replace(network.goal, uses={"hauler": {"demand": ("speed", "drive")}})
    found = obstruction(replace(network, goal=goal))
    assert found is not None and set(found.direction) == {"hauler.slot"}


def test_triple_integrators_are_exact() -> None:
    """x1' = x2, x2' = x3, x3' = u seen at x1 is fine, seen at x2 it is not: no tolerance decides."""
    network = convoy(strength=0)
    chain = replace(
        network.kinds[0],
        A=ExactMatrix.of([[0, 1, 0], [0, 0, 1], [0, 0, 0]]),
        N=ExactMatrix.zeros(1, 1),
        sensors=network.kinds[0].sensors[:1],
    )
    assert obstruction(replace(network, kinds=(replace(chain, C=ExactMatrix.of([[1, 0, 0]])),), links=())) is None
    found = obstruction(replace(network, kinds=(replace(chain, C=ExactMatrix.of([[0, 1, 0]])),), links=()))
    assert found is not None and found.s == 0


matrices = st.integers(1, 4).flatmap(
    lambda n: st.lists(st.lists(st.integers(-2, 2).map(Fraction), min_size=n, max_size=n), min_size=n, max_size=n)
)


@settings(max_examples=60, deadline=None)
@given(matrices, st.integers(0, 2))
def test_exact_algebra_against_numpy(A: list[list[Fraction]], sensors: int) -> None:
    """Rank, null space, invariance, characteristic polynomial and stability against floating point."""
    n = len(A)
    dense = np.array([[float(v) for v in row] for row in A])
    assert rank(A, n) == np.linalg.matrix_rank(dense)
    basis, _ = null_space(A, n)
    assert all(not any(times(A, vector)) for vector in basis) and len(basis) == n - rank(A, n)
    polynomial = characteristic(A)
    np.testing.assert_allclose([float(c) for c in polynomial], np.poly(dense).real, atol=1e-8)
    worst = np.linalg.eigvals(dense).real.max()
    if abs(worst) > 1e-3:
        assert hurwitz(polynomial) == (worst < 0)
    C = A[:sensors]
    hidden, inner = unseen(A, C)
    literal = np.vstack(
        [
            np.array([[float(v) for v in row] for row in C]).reshape(-1, n) @ np.linalg.matrix_power(dense, k)
            for k in range(n)
        ]
    )
    assert len(hidden) == n - (np.linalg.matrix_rank(literal) if len(literal) else 0)
    span = np.array([[float(v) for v in vector] for vector in hidden]).reshape(-1, n).T
    small = np.array([[float(v) for v in row] for row in inner]).reshape(len(hidden), len(hidden))
    np.testing.assert_allclose(dense @ span, span @ small, atol=1e-9)


@pytest.mark.parametrize("cells", [3, 4, 7])
def test_the_symbol_has_the_modes_of_the_ring(cells: int) -> None:
    """Law of the symbol: its eigenvalues over the phases 2 pi k/n are those of the ring, written unit by unit."""
    network = convoy(offsets=(-1, 2))
    symbol = symbol_of(network)
    modes = []
    for k in range(cells):
        pair = symbol.floating((2 * math.pi * k / cells,))
        assert pair is not None
        modes.extend(np.poly(pair[0] + 10 * np.eye(3)))  # compared by polynomials: the ring has defective modes
    whole = np.poly(ring(network, np.zeros((1, 3)), cells) + 10 * np.eye(3 * cells))
    product = np.ones(1)
    for k in range(cells):
        product = np.polymul(product, modes[4 * k : 4 * k + 4])
    np.testing.assert_allclose(product, whole, rtol=1e-8, atol=1e-6 * np.abs(whole).max())


def test_many_actuators_stay_quick() -> None:
    """Six kinds in a cell with one actuator each: every split is ruled out by one look per mode."""
    names = [f"k{i}" for i in range(6)]
    kinds = tuple(scalar_kind(0, name) for name in names)
    links = tuple(
        Link("l", names[i - 1], "level", (0 if i else -1,), names[i], "inflow", Fraction(1, 4)) for i in range(6)
    )
    assert obstruction(Network("six", kinds, links)) is None

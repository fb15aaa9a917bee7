"""Leading pairs fenced in: both points are rigorous by their quotients, and a pair that is wrong is found out."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csr_array

from synth.gain import GainOperator
from synth.gain.solving.krylov import may_factor, spreads
from synth.gain.solving.leading import fence, leading_pair
from tests.gain.families import families
from tests.speed.graphs import FAMILIES


def matrix_of(family: str, size: int) -> csr_array:
    count, to, source, gain = FAMILIES[family](size, np.random.default_rng(1))
    return GainOperator.from_links(count, to, source, gain).matrix


def grid(size: int) -> csr_array:
    return next(GainOperator.from_links(size, *ends).matrix for name, *ends in families(size) if name == "grid")


def bounds(B: csr_array, fenced) -> tuple[float, float]:
    kept = fenced.y > 0
    return float(((B @ fenced.y)[kept] / fenced.y[kept]).min()), float(((B @ fenced.x) / fenced.x).max())


def test_both_points_close_where_the_vector_itself_proves_nothing() -> None:
    B = grid(900)
    theta, v = leading_pair(B, np.ones(900), 1e-12)
    expected = max(np.linalg.eigvals(B.toarray()).real)
    assert theta == pytest.approx(expected, rel=1e-11)
    # By itself the vector has rounding for entries far out, and its quotients are worthless.
    assert np.ptp((B @ v) / np.maximum(v, 1e-300)) > 1e-6
    fenced = fence(B, theta, v, 1e-9)
    low, high = bounds(B, fenced)
    assert fenced.closes
    assert low <= expected * (1 + 1e-14)
    assert high >= expected * (1 - 1e-14)
    assert high - low <= 7e-10 * high


def test_a_vector_of_a_part_is_continued() -> None:
    """The vector cut where it has fallen to 1e-5: the cut would cost more than the width."""
    B = grid(900)
    theta, v = leading_pair(B, np.ones(900), 1e-12)
    fenced = fence(B, theta, np.where(v > 1e-5, v, 0.0), 1e-9)
    low, high = bounds(B, fenced)
    assert fenced.closes
    assert high - low <= 7e-10 * high


@pytest.mark.parametrize("factor", [1 - 1e-6, 1 + 1e-6])
def test_a_wrong_value_does_not_close(factor: float) -> None:
    B = grid(900)
    theta, v = leading_pair(B, np.ones(900), 1e-12)
    fenced = fence(B, theta * factor, v, 1e-9)
    assert not fenced.closes
    if fenced.x is not None:
        low, high = bounds(B, fenced)
        assert low <= theta * (1 + 1e-12)
        assert high >= theta * (1 - 1e-12)


def test_a_hotter_place_elsewhere_is_pointed_at() -> None:
    """Two separate pairs of outlets, radius 1 and 2: beside the first the solve turns negative at the second."""
    n = 60
    i = np.arange(n)
    to, source = np.concatenate([i[1:], i[:-1]]), np.concatenate([i[:-1], i[1:]])
    gain = np.full(to.size, 0.1)
    gain[(to < 2) & (source < 2)] = 1.0
    gain[(to >= 58) & (source >= 58)] = 2.0
    B = GainOperator.from_links(n, to, source, gain).matrix
    v = np.where(i < 2, 1.0, 0.0)
    fenced = fence(B, 1.0, v, 1e-9)
    assert fenced.x is None
    assert fenced.spot >= 55


def test_links_at_random_spread_and_others_do_not() -> None:
    assert {name: spreads(matrix_of(name, 4000)) for name in FAMILIES} == {
        "ring": False,
        "homogeneous ring": False,
        "grid": False,
        "smooth grid": False,
        "geometric": False,
        "scale-free": True,
        "random": True,
        "string": False,
        "cycle": False,
    }
    assert not may_factor(matrix_of("random", 4000))


@pytest.mark.parametrize("rows", ["sum", "max", "mixed"])
def test_links_at_random_close(rows: str) -> None:
    """Elimination on such a graph fills up: 20,000 outlets once took more than a minute."""
    count, to, source, gain = FAMILIES["random"](20_000, np.random.default_rng(2))
    kinds = rows if rows != "mixed" else [("sum", "max", "root_sum_square")[i % 3] for i in range(count)]
    found = GainOperator.from_links(count, to, source, gain, kinds).radius(1e-9)
    assert found.reached
    assert found.work < 3000

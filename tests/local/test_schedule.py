"""Gain tables: the pairs of corners decide, in exact arithmetic; weights, breakpoints, lookup (data invented)."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError, SolverFailure
from synth.base.exact import ExactMatrix
from synth.local import GainSchedule, chosen_grid, gain_schedule, grid_of
from synth.local.schedule import _open, broken_pairs, definite, pairs_of
from synth.network.model import Goal, Kind, Link, Network
from tests.build import M, convoy, hauler, scalar_kind

LAGS = (Fraction("0.3"), Fraction("0.5"), Fraction("0.8"))
Lag = Fraction


@pytest.fixture(scope="module")
def made() -> GainSchedule:
    return gain_schedule(convoy(), {"hauler": grid_of(("lag",), (LAGS,), hauler)}, rates=(0.2, 0.35))


def turning(b: str) -> Kind:
    """x' = 0.5 x + b u + v."""
    return replace(scalar_kind(Fraction(-1, 2)), B=M([[b]]))


def test_corners_alone_would_pass_a_table_that_is_unstable_between_them() -> None:
    """B = 1 with K = -1 and B = -1 with K = 1: both corners decay with 0.5, the middle grows with 0.5."""
    network = Network("Invented", (turning("1"),), (), Goal())
    grid = grid_of(("angle",), ((0, 1),), (turning("1"), turning("-1")))
    opened, gains = [_open(k, network) for k in grid.kinds], (M([[-1]]), M([[1]]))
    assert broken_pairs(grid, opened, gains, M([[1]]), Fraction(1, 10), (Fraction(100),)) == [(0, 1)]
    constant = grid_of(("angle",), ((0, 1),), (turning("1"), turning("1")))
    opened = [_open(k, network) for k in constant.kinds]
    same = (M([[-1]]), M([["-1.2"]]))
    assert broken_pairs(constant, opened, same, M([[1]]), Fraction(1, 10), (Fraction(100),)) == []
    link = Link("l", "tank", "level", (1,), "tank", "inflow", Fraction(1, 10))
    with pytest.raises(SolverFailure, match="no common storage function"):
        gain_schedule(Network("Invented", (turning("1"),), (link,), Goal()), {"tank": grid}, rates=(0.05, 0.2))


def test_the_convoy_over_its_lag_is_proven(made: GainSchedule) -> None:
    (table,) = made.tables
    assert made.proven and 0 < made.level < 0.9
    opened = [_open(kind, made.network) for kind in table.grid.kinds]
    assert pairs_of(table.grid) == [(0, 0), (0, 1), (1, 1), (1, 2), (2, 2)]
    assert broken_pairs(table.grid, opened, table.gains, table.Q, table.a, table.tau) == []
    turned = (table.gains[0], table.gains[1].scaled(-1), table.gains[2])
    assert (1, 1) in broken_pairs(table.grid, opened, turned, table.Q, table.a, table.tau)
    assert broken_pairs(table.grid, opened, table.gains, table.Q, table.a * 1000, table.tau)
    assert broken_pairs(table.grid, opened, table.gains, table.Q, table.a, [t / 10**6 for t in table.tau])
    assert broken_pairs(table.grid, opened, table.gains, table.Q.scaled(-1), table.a, table.tau) == [(0, 0)]


def test_decay_holds_between_the_corners(made: GainSchedule) -> None:
    """In floating point at random weights, from the definition of the storage inequality."""
    (table,) = made.tables
    rng = np.random.default_rng(2)
    opened = [_open(kind, made.network) for kind in table.grid.kinds]
    Q, tau, a = table.Q.floats(), float(table.tau[0]), float(table.a)
    for _ in range(200):
        cell, share = int(rng.integers(0, 2)), rng.random()
        parts = ((cell, 1 - share), (cell + 1, share))
        A, B, D = (sum(w * getattr(opened[p], name).floats() for p, w in parts) for name in "ABD")
        lag = (1 - share) * float(LAGS[cell]) + share * float(LAGS[cell + 1])
        K = made.lookup("hauler", [lag]).floats()
        loop = (A + B @ K) @ Q
        whole = np.block([[loop + loop.T + 2 * a * Q, D], [D.T, np.array([[-tau]])]])
        scale = np.sqrt(np.abs(np.diag(whole)))
        assert np.linalg.eigvalsh(whole / np.outer(scale, scale)).max() < 1e-9
    # Offers: H Q H' <= zeta^2, and the row at the point.
    H = made.network.kinds[0].H.floats()
    assert (H @ Q @ H.T).item() <= float(table.zeta[0]) ** 2 * (1 + 1e-12)
    row = (tau * (0.5 * float(table.zeta[0])) ** 2 / (2 * a)) ** 0.5
    assert made.level == pytest.approx(row, rel=1e-9)


def test_two_variables_and_a_second_kind_without_a_table() -> None:
    def plant(lag: Fraction, push: Fraction) -> Kind:
        kind = hauler(lag)
        return replace(kind, B=kind.B.scaled(push))

    other = replace(scalar_kind(), name="post")
    links = (
        *convoy().links,
        Link("call", "post", "level", (0,), "hauler", "ahead", Fraction(1, 10)),
        Link("answer", "hauler", "place", (0,), "post", "inflow", Fraction(1, 5)),
    )
    network = replace(convoy(), kinds=(hauler(), other), links=links)
    grid = grid_of(("lag", "push"), (("0.4", "0.6"), (1, "1.3")), plant)
    made = gain_schedule(network, {"hauler": grid}, rates=(0.2,))
    assert made.proven and [t.kind for t in made.tables] == ["hauler", "post"]
    assert len(pairs_of(grid)) == 10 and len(made.tables[0].gains) == 4
    middle = made.lookup("hauler", ["0.5", "1.15"])
    mean = sum((K for K in made.tables[0].gains[1:]), made.tables[0].gains[0]).scaled(Fraction(1, 4))
    assert middle == mean
    assert made.lookup("post", [0]) == made.tables[1].gains[0]


def test_breakpoints_follow_the_tolerance() -> None:
    span: tuple[tuple[str, str]] = (("0.3", "0.8"),)
    coarse, fine = (chosen_grid(("lag",), span, hauler, tol) for tol in (0.2, 0.02))
    assert len(coarse.axes[0]) < len(fine.axes[0])
    assert coarse.error is not None and fine.error is not None and fine.error <= 0.02 < coarse.error <= 0.2
    assert chosen_grid(("a",), ((1, 3),), scalar_kind, 1e-9).axes == ((Fraction(1), Fraction(3)),)
    with pytest.raises(InputError, match="at most 200"):
        chosen_grid(("a",), ((1, 3),), lambda a: scalar_kind(a * a), 1e-9)


def test_lookup_interpolates_and_refuses_to_extrapolate(made: GainSchedule) -> None:
    first, second = made.tables[0].gains[:2]
    assert made.lookup("hauler", ["0.3"]) == first
    assert made.lookup("hauler", ["0.4"]) == (first + second).scaled(Fraction(1, 2))
    with pytest.raises(InputError, match=r"lag = 0\.9 lies outside the table"):
        made.lookup("hauler", ["0.9"])
    with pytest.raises(InputError, match="1 values are needed"):
        made.lookup("hauler", ["0.4", 1])
    with pytest.raises(InputError, match="no table of 'truck'"):
        made.lookup("truck", ["0.4"])
    assert made.as_json()["proven"] and "over lag" in made.as_text()


def test_unfit_tables_are_refused() -> None:
    with pytest.raises(InputError, match="must rise strictly"):
        grid_of(("lag",), (("0.5", "0.5"),), hauler)
    with pytest.raises(InputError, match="one or two variables"):
        grid_of((), (), hauler)
    with pytest.raises(InputError, match="2 kinds are needed"):
        grid_of(("lag",), (("0.4", "0.5"),), (hauler(),))
    with pytest.raises(InputError, match="states of hauler differ"):
        grid_of(("lag",), (("0.4", "0.5"),), (hauler(), replace(scalar_kind(), name="hauler")))
    with pytest.raises(InputError, match="no kind 'truck'"):
        gain_schedule(convoy(), {"truck": grid_of(("lag",), (LAGS,), hauler)})
    blind = replace(hauler(), C=M([[1, 0, 0], [0, 1, 0], [1, 1, 0]]))
    with pytest.raises(InputError, match="sensors that give every state"):
        gain_schedule(replace(convoy(), kinds=(blind,)), {})


def test_definite_is_exact() -> None:
    assert definite(M([[2, 1], [1, 1]])) and not definite(M([[1, 1], [1, 1]]))
    assert not definite(ExactMatrix.of([[1, Fraction(1, 3)], [Fraction(1, 3), Fraction(1, 9)]], (2, 2)))

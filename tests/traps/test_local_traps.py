"""Two ways in which the cell problem can be written wrongly and still look solved."""

from __future__ import annotations

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.gain.guide import peak_gain_guide
from synth.local.cell import CellData, best_cell, broken

ONE = np.ones((1, 1))


def test_trap_16_one_tau_per_disturbance_component() -> None:
    """x' = -x + w1 + w2 with |w1|, |w2| <= 1 reaches 2; one shared tau_w would promise the root of two."""
    data = CellData(
        A=-ONE, B=np.zeros((1, 0)), D=np.zeros((1, 0)), E=np.ones((1, 2)), H=ONE, intake=np.zeros(0),
        limit=np.zeros(0), size=np.ones(1), slowest=0.0, fastest=10.0,
    )  # fmt: skip
    answer = best_cell(data, grid=(0.25, 0.5, 0.75))
    assert answer is not None
    assert len(answer.tau_w) == 2
    assert answer.size == pytest.approx(2.0, abs=1e-4)
    guide = peak_gain_guide(-ONE, np.ones((1, 2)), ONE, np.zeros((1, 2)))
    assert guide is not None
    assert answer.size >= guide.gains.sum() - 1e-4
    # The shared multiplier: its 'optimum' Q = 2 fails the recheck with any honest split of the same total.
    for share in (0.3, 0.5, 0.7):
        assert broken(data, 0.5, np.array([[2.0]]), np.zeros((0, 1)), np.zeros(0), np.array([share, 1 - share])) == (
            "dissipation",
        )


def test_trap_17_negative_budget_is_refused_before_it_is_squared() -> None:
    """x' = -x + u + v, neighbours of size 1, L = -1, |u| <= .5: passing on takes 1 of .5, so nothing is left."""
    data = CellData(
        A=-ONE, B=ONE, D=ONE, E=np.zeros((1, 0)), H=ONE, intake=np.ones(1), limit=np.array([0.5]),
        size=np.ones(1), slowest=0.0, fastest=10.0, L=-ONE,
    )  # fmt: skip
    with pytest.raises(InputError, match="limit"):
        _ = data.budget
    with pytest.raises(InputError):
        best_cell(data)
    # With the sign lost in the square the inequalities themselves would all hold.
    assert (0.5 - 1.0) ** 2 > 0

"""The design against a global search that is never told our answer."""

from __future__ import annotations

import pytest

from tests.local.cases import cases
from tests.local.made import made
from tests.speed.global_search import global_search


@pytest.mark.parametrize("name", ["convoy", "convoy, no drive sensor", "lightly damped masses"])
def test_within_three_percent_of_a_short_global_search(name: str) -> None:
    """One seed, a small budget."""
    best = min(global_search(cases()[name], 1, over, rounds=25, crowd=8).radius for over in ("gains", "modes"))
    assert best < float("inf")
    assert made(name).upper <= 1.03 * best


@pytest.mark.long
@pytest.mark.parametrize("name", list(cases()))
def test_within_three_percent_of_five_global_searches(name: str) -> None:
    """Five seeds, over gains and over modes."""
    runs = [global_search(cases()[name], seed, over, rounds=150) for seed in range(1, 6) for over in ("gains", "modes")]
    best = min(run.radius for run in runs)
    assert best < float("inf")
    assert made(name).upper <= 1.03 * best

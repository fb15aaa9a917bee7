"""One gain set for several kinds: the gains are equal, good for each of them, and no better ones are near."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.local import design
from synth.local.cell import CellData
from synth.local.merit import measure
from synth.local.plant import field_of
from synth.local.shared_cell import best_shared
from synth.network.model import Kind, Link, Network, Signal
from tests.build import M
from tests.local.unreachable import roomy


def two_carts(shared: bool = True) -> Network:
    """A light and a heavy cart in turn; ``shared`` says whether they carry the same gains."""
    network = roomy()
    light: Kind = replace(network.kinds[0], name="light", group="cart" if shared else "")
    heavy: Kind = replace(light, name="heavy", A=M([[0, 1], ["-0.3", "-0.1"]]), B=M([[0], ["0.4"]]),
                          group="cart" if shared else "")  # fmt: skip
    links = (
        Link("tie", "heavy", "offset", (-1,), "light", "pull", Fraction(1)),
        Link("tie", "light", "offset", (0,), "heavy", "pull", Fraction(1)),
    )
    goal = replace(network.goal, gain_bounds={}, fastest=Fraction(8))
    return Network("Invented light and heavy carts", (light, heavy), links, goal)


def test_kinds_of_one_group_carry_the_same_exact_gains() -> None:
    network = two_carts()
    found = design(network, starts=1)
    assert network.gain_groups() == {"cart": ("light", "heavy")}
    assert found.reached
    assert found.gains["light"].K == found.gains["heavy"].K
    field = field_of(network)
    best = np.inf
    for first in np.geomspace(1, 60, 14):
        for second in np.geomspace(1, 20, 14):
            K = np.array([[-first, -second]])
            merit = measure(field, tuple(plant.to_scaled(K) for plant in field.plants), steep=False)
            if merit.excess <= 1e-9:
                best = min(best, merit.radius)
    assert found.upper <= 1.005 * best


@pytest.mark.long
def test_gains_of_their_own_are_better() -> None:
    assert design(two_carts(shared=False), starts=4).upper < design(two_carts(), starts=4).lower


def test_equal_gains_are_equal_when_scaled() -> None:
    light, heavy = field_of(two_carts()).plants
    assert np.array_equal(light.gain_unit, heavy.gain_unit)


def test_structure_and_bounds_hold_for_all_of_a_group() -> None:
    """What one kind may not do, the gain set may not do."""
    network = two_carts()
    goal = replace(
        network.goal, uses={"heavy": {"push": ("speed",)}}, gain_bounds={"light": {"push": {"speed": Fraction(3)}}}
    )
    for plant in field_of(replace(network, goal=goal)).plants:
        assert plant.allowed.tolist() == [[False, True]]
        assert plant.bound[0, 1] * plant.gain_unit[0, 1] == pytest.approx(3)


def test_kinds_that_cannot_share_are_refused() -> None:
    network = two_carts()
    light, heavy = network.kinds
    lame = replace(heavy, sensors=(Signal("place", "m"),), C=M([[1, 0]]), N=ExactMatrix.zeros(1, 1))
    with pytest.raises(InputError, match="their sensors differ"):
        design(replace(network, kinds=(light, lame)))


def test_one_q_for_both_is_an_answer_for_each() -> None:
    """The common size is no smaller than either's own, and the common K settles both."""
    from synth.local.cell import best_cell

    field = field_of(two_carts())
    units = [
        CellData(p.A, p.B, p.D, p.E, p.H[:1], field.arriving(i, np.full(field.intake.size, 0.05)), p.limit,
                 np.ones(1), field.slowest, field.fastest)
        for i, p in enumerate(field.plants)
    ]  # fmt: skip
    shared = best_shared(units)
    assert shared is not None
    for unit, plant in zip(units, field.plants, strict=True):
        assert np.linalg.eigvals(plant.A + plant.B @ shared.K).real.max() < -unit.slowest * (1 - 1e-6)
    own = [best_cell(unit) for unit in units]
    assert all(answer is not None and shared.size >= answer.size * (1 - 1e-4) for answer in own)

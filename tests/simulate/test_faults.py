"""A wrong gain in the running units must show as violations of the certificate for the right gains, every time."""

from __future__ import annotations

from fractions import Fraction
from functools import cache

import pytest

from synth.simulate import simulate
from tests.build import convoy, convoy_gains
from tests.simulate.claims import stand_in

K = (Fraction(-6), Fraction(-5), Fraction("-1.5"))
ONE_WAY, TWO_WAY = (-1,), (-1, 1)


@cache
def proven(offsets):
    network = convoy(strength="0.5", delay="0.1", offsets=offsets)
    return network, stand_in(network, convoy_gains(K), cells=6000, slack=1e-4)


@pytest.mark.parametrize("offsets", [ONE_WAY, TWO_WAY])
def test_the_right_gains_violate_nothing(offsets):
    network, claim = proven(offsets)
    run = simulate(network, convoy_gains(K), claim, units=12, seconds=30)
    assert run.checked
    assert run.violations == 0
    assert 0.9 < run.worst.G_ratio <= 1 + 1e-9
    assert 0 < run.worst.envelope_ratio <= 1


@pytest.mark.parametrize(
    "offsets, entry, factor",
    [(ONE_WAY, e, f) for e in range(3) for f in (5, -1)]
    + [(TWO_WAY, 0, 5), (TWO_WAY, 1, 5), (TWO_WAY, 1, -1), (TWO_WAY, 2, 5)],
)
def test_one_wrong_entry_is_found(offsets, entry, factor):
    """Ten trials; each must be found by the runs from an initial corner and by the others separately where it grows."""
    network, claim = proven(offsets)
    wrong = list(K)
    wrong[entry] *= factor
    run = simulate(
        network,
        convoy_gains(K),
        claim,
        units=12,
        seconds=30,
        scenarios=["start", "adversary"],
        plant_gains=convoy_gains(tuple(wrong)),
    )
    assert run.violations > 0
    found = {r.name.split(" against ")[0] for r in run.runs if r.counted and r.violations}
    assert len(found) >= 3, found  # not by luck of a single scenario


def test_a_fault_that_is_not_planted_is_not_found():
    network, claim = proven(ONE_WAY)
    run = simulate(
        network,
        convoy_gains(K),
        claim,
        units=12,
        seconds=10,
        scenarios=["start", "adversary"],
        plant_gains=convoy_gains(K),
    )
    assert run.violations == 0

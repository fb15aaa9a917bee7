"""The assembled operator and the unit's peak gains against direct calls, and their refusals."""

from __future__ import annotations

import math
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError, UnstableLoop
from synth.base.exact import ExactMatrix
from synth.gain import assemble, close_network, close_unit, largest_free_response, peak_to_peak_gain, state_peaks
from tests.build import convoy, convoy_gains, scalar_kind


def closed_convoy(**changes):
    network = convoy(**changes)
    return close_network(network, convoy_gains()), network.links


def test_importing_the_package_stays_light():
    heavy = "{'numpy', 'scipy', 'flint', 'cvxpy', 'networkx'}"
    code = f"import sys, synth.gain; assert not {heavy} & set(sys.modules); synth.gain.GainOperator"
    subprocess.run([sys.executable, "-c", code], check=True)


def test_every_public_name_is_there():
    import synth.gain

    for name in synth.gain.__all__:
        assert callable(getattr(synth.gain, name))
    with pytest.raises(AttributeError, match="no attribute"):
        synth.gain.no_such_name  # noqa: B018


@pytest.mark.parametrize("alpha", [0, "0.2"])
def test_entries_are_peak_gain_times_strength(alpha):
    """Theory (1) and (4): p |g| e^{alpha d}, p of A + alpha I."""
    closed, links = closed_convoy(strength="0.5", delay="0.1", offsets=(-1, 2))
    found = assemble(closed, links, alpha=Fraction(alpha), width=1e-9)
    assert found.outlets == (("hauler", "place"),)
    unit = closed[0]
    A = unit.A + ExactMatrix.identity(3).scaled(alpha)
    peak = peak_to_peak_gain(A, unit.D, unit.H, unit.F, width=1e-9)
    factor = 0.5 * math.exp(float(Fraction(alpha)) * 0.1)
    assert len(found.entries) == 2  # parallel links stay separate
    for entry in found.entries:
        assert (entry.row, entry.column) == (0, 0)
        assert entry.lower <= peak.upper[0, 0] * factor * (1 + 1e-15)
        assert entry.upper >= peak.lower[0, 0] * factor * (1 - 1e-15)
        assert entry.upper - entry.lower <= 1.001e-9 * entry.upper
    radius = found.radius()
    assert radius.lower <= 2 * found.entries[0].upper
    assert radius.upper >= 2 * found.entries[0].lower
    assert np.all(found.lower([1.0]) <= found.upper([1.0]))


def test_two_kinds_and_feedthrough():
    """tank (x' = -x + v) and pipe (z = x/2 + v/4, x' = -2x + v): p = 1 and 1/2 * 1/2 + 1/4 = 1/2."""
    tank = scalar_kind(1)
    quarter, half = ExactMatrix.of([["1/4"]]), ExactMatrix.of([["1/2"]])
    pipe = replace(scalar_kind(2, "pipe"), F=quarter, H=half)
    no = ExactMatrix.of([[0]])
    base = convoy().links[0]
    make = lambda source, kind, g: replace(  # noqa: E731
        base,
        source_kind=source,
        offer="level",
        kind=kind,
        take="inflow",
        strength=Fraction(g),
        own_strength=Fraction(0),
    )
    links = (make("tank", "pipe", "0.5"), make("pipe", "tank", "-3"))
    found = assemble([close_unit(kind, links, no) for kind in (tank, pipe)], links, width=1e-9)
    assert found.outlets == (("tank", "level"), ("pipe", "level"))
    assert [(e.row, e.column) for e in found.entries] == [(1, 0), (0, 1)]
    assert [p.upper[0, 0] for p in found.unit_peaks] == pytest.approx([1, 0.5], rel=1e-9)
    assert found.radius().upper == pytest.approx(math.sqrt(0.25 * 3), rel=1e-8)


def test_refusals():
    closed, links = closed_convoy()
    assemble(closed, links)
    with pytest.raises(InputError, match=r"known offers are hauler\.place"):
        assemble(closed, [replace(links[0], offer="colour")])
    with pytest.raises(InputError, match="runs from"):
        assemble(closed, [replace(links[0], kind="ship")])
    with pytest.raises(InputError, match="takes"):
        assemble(closed, [replace(links[0], take="behind")])
    with pytest.raises(InputError, match="alpha"):
        assemble(closed, links, alpha=-1)
    with pytest.raises(InputError, match="width"):
        assemble(closed, links, width=0)
    with pytest.raises(UnstableLoop, match=r"hauler.*alpha = 50"):
        assemble(closed, links, alpha=50)


@pytest.mark.parametrize("alpha", [0, "0.3"])
def test_state_peaks_are_the_single_calls(alpha):
    closed, _ = closed_convoy()
    unit = closed[0]
    found = state_peaks(unit, alpha, width=1e-8)
    A = unit.A + ExactMatrix.identity(3).scaled(alpha)
    wanted = {"offers": unit.H, "states": ExactMatrix.identity(3), "actuators": unit.U}
    through = {"offers_takes": unit.F, "offers_dist": unit.Fw, "actuators_takes": unit.UV}
    for outlet, H in wanted.items():
        for inlet, D in (("takes", unit.D), ("dist", unit.E)):
            name = f"{outlet}_{inlet}"
            F = through.get(name, ExactMatrix.zeros(H.shape[0], D.shape[1]))
            direct, ours = peak_to_peak_gain(A, D, H, F, width=1e-8), getattr(found, name)
            assert ours.lower.shape == (H.shape[0], D.shape[1])
            assert ours.width <= 1e-8
            assert np.all(np.maximum(direct.lower, ours.lower) <= np.minimum(direct.upper, ours.upper))
        direct, ours = largest_free_response(A, H, 1e-8), getattr(found, f"{outlet}_free")
        assert np.all(np.maximum(direct.lower, ours.lower) <= np.minimum(direct.upper, ours.upper))


def test_state_peaks_with_feedthrough_and_refusals():
    pipe = replace(scalar_kind(2, "pipe"), F=ExactMatrix.of([["1/3"]]), N=ExactMatrix.of([[1]]))
    unit = close_unit(pipe, (), ExactMatrix.of([[-1]]))
    found = state_peaks(unit, width=1e-9)
    # D + B K N = 0: nothing but the direct paths is left: 1/3 to the offer, |K N| = 1 to the actuator.
    assert Fraction(found.offers_takes.lower[0, 0]) < Fraction(1, 3) < Fraction(found.offers_takes.upper[0, 0])
    assert (found.actuators_takes.lower[0, 0], found.actuators_takes.upper[0, 0]) == (1.0, 1.0)
    assert found.states_takes.upper[0, 0] == 0.0
    with pytest.raises(InputError, match="alpha"):
        state_peaks(unit, -1)
    with pytest.raises(UnstableLoop, match="pipe"):
        state_peaks(unit, 3)

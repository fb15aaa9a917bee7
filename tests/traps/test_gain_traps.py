"""Counterexamples about peak gains and the gain operator: each must stay caught."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
import scipy.special

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.gain import GainOperator, assemble, close_unit, pattern_upper_bound
from synth.gain.sensitivity import LinkNetwork
from synth.network.model import Link
from tests.build import scalar_kind

NO_FEEDBACK = ExactMatrix.of([[0]])


def link(strength, at, delay=0, own=0):
    return Link("couple", "tank", "level", (at,), "tank", "inflow", *map(Fraction, (strength, own, delay)))


def fastest_growth(now, late, d):
    """Growth of s = now(e^{i theta}) + late(e^{i theta}) e^{-s d} over the spatial modes, by Lambert's function."""
    growth = []
    for theta in np.linspace(0.01, np.pi, 400):
        z = np.exp(1j * theta)
        a, b = now(z), late(z)
        growth += [(scipy.special.lambertw(b * d * np.exp(-a * d), k) / d + a).real for k in range(-6, 7)]
    return max(growth)


def test_trap_1_a_late_difference_is_two_links():
    """x_i' = -.1 x_i + (x_{i-1} - x_i)(t - d): folding the own part as if it were fresh would print .909, but the
    network grows at +.157 for d = .8. Kept as two links, the unit's own late value is one of them: the radius is 20."""
    kind = scalar_kind("0.1")
    folded_links = (link(1, -1, "0.8", own=1),)
    folded = assemble([close_unit(kind, folded_links, NO_FEEDBACK)], folded_links)
    assert folded.radius().upper == pytest.approx(1 / 1.1, rel=1e-5)  # right for a late *neighbour* only
    late_links = (link(1, -1, "0.8"), link(-1, 0, "0.8"))
    late = assemble([close_unit(kind, late_links, NO_FEEDBACK)], late_links)
    assert late.radius().lower > 1
    assert late.radius().upper == pytest.approx(20, rel=1e-5)
    # The growth is real: the spatial modes obey s = -.1 + (e^{i theta} - 1) e^{-s d}.
    assert fastest_growth(lambda z: -0.1, lambda z: z - 1, 0.8) == pytest.approx(0.157, abs=1e-3)
    # With the own value fresh there is none, whatever the delay of the neighbour's: there .909 is right.
    assert fastest_growth(lambda z: -1.1, lambda z: z, 0.8) < 0


def test_trap_2_moduli_add_on_two_paths():
    """z' = -z + 5 z_j(t) - 4.5 z_j(t - d): the paths carry different delays, so they are two links, 5 + 4.5."""
    links = (link(5, -1), link("-4.5", -1, "0.3"))
    found = assemble([close_unit(scalar_kind(1), links, NO_FEEDBACK)], links)
    assert len(found.entries) == found.upper.gain.size == 2
    assert found.radius().lower > 1
    assert found.radius().upper == pytest.approx(9.5, rel=1e-5)
    # The loss is real: the spatial modes obey s = -1 + 5 e^{i theta} - 4.5 e^{i theta} e^{-s d}.
    assert fastest_growth(lambda z: -1 + 5 * z, lambda z: -4.5 * z, 0.3) == pytest.approx(1.59, abs=5e-3)


def test_trap_3_two_links_on_one_inlet():
    """x' = -x + k (z1 + z2), storage row with a = .5, tau = 1, k = .55: both enter one inlet, so they add before the
    square: sqrt(tau (2 k)^2/(2 a)) = 1.10; as two inlets it would read .78 and call a growing network safe."""
    k, a, tau = 0.55, 0.5, 1.0
    gain = k * math.sqrt(tau / (2 * a))
    ends = (1, [0, 0], [0, 0], [gain, gain], "root_sum_square")
    together = GainOperator.from_links(*ends, inlet=[0, 0]).radius()
    apart = GainOperator.from_links(*ends).radius()
    assert together.lower <= 1.1 <= together.upper * (1 + 1e-15)
    assert apart.upper == pytest.approx(0.7778, abs=1e-4)
    # The unit itself: x' = -x + 2 k x grows.
    assert -1 + 2 * k > 0


def test_trap_4_closed_form_of_max_rows_elsewhere():
    """Rows [0, .5, .45] sum, [.6, 0, .2] max, [.3, .5, 0] max: joined by max the point has the quotient .758 and lambda
    is .716. The max form is refused, the sum form is verified."""
    op = GainOperator.from_links(
        3, [0, 0, 1, 1, 2, 2], [1, 2, 0, 2, 0, 1], [0.5, 0.45, 0.6, 0.2, 0.3, 0.5], ["sum", "max", "max"]
    )
    target = 0.716
    for form in ("max", "root_sum_square"):
        with pytest.raises(InputError, match="use the sum form"):
            op.decay_point(target, form)
    found = op.decay_point(target)
    assert found.form == "sum"
    assert op.upper_bound(found.s) <= target * (1 + 1e-15)
    # What the refused form would have given.
    s, term = np.ones(3), np.ones(3)
    for _ in range(2000):
        term = op(term) / target
        if np.all(term <= 1):
            break
        s = np.maximum(s, term)
    assert op.upper_bound(s) == pytest.approx(0.758, abs=1e-3)


def test_trap_6_a_link_is_not_an_entry():
    """Unit 0 with peak gains [1 1] (outlet x), unit 1 with [1; 1] (outlets a, b); link 0 -> 1 of .4 feeds a and b,
    which both come back with .5. That link may be 2.5 times as strong; the formula on one matrix entry says 4."""

    def radius(to_a, to_b):
        return GainOperator.from_links(3, [1, 2, 0, 0], [0, 0, 1, 2], [to_a, to_b, 0.5, 0.5]).radius(1e-12)

    assert radius(0.4, 0.4).upper < 1
    # The link carries both entries: at 2.5 times its strength the radius is one, below it is less, above it is more.
    assert radius(0.4 * 2.5, 0.4 * 2.5).lower == pytest.approx(1, abs=1e-12)
    assert radius(0.4 * 2.49, 0.4 * 2.49).upper < 1 < radius(0.4 * 2.51, 0.4 * 2.51).lower
    # The entry alone would stand 4.0, and the link at 4.0 is far beyond the limit.
    assert radius(0.4 * 4, 0.4).lower == pytest.approx(1, abs=1e-12)
    assert radius(0.4 * 4, 0.4 * 4).lower > 1.2
    net = LinkNetwork.of([[[1, 1]], [[1], [1]]], [0, 1, 1], [0, 0, 1], [1, 0, 0], [0, 0, 1], [0.4, 0.5, 0.5])
    assert net.tolerances()[0] == pytest.approx(2.5)


def test_trap_7_sections_are_not_the_half_line():
    """Forward .9, back .2 on a half line: all sections have 2 sqrt(.18) cos(pi/(n+1)) < .8486, the bulk 1.1."""
    for size in (2, 10, 200):
        ends = [*range(1, size), *range(size - 1)], [*range(size - 1), *range(1, size)]
        section = GainOperator.from_links(size, *ends, [0.9] * (size - 1) + [0.2] * (size - 1)).radius(1e-9)
        value = 2 * math.sqrt(0.18) * math.cos(math.pi / (size + 1))
        assert section.lower <= value * (1 + 1e-14)
        assert value * (1 - 1e-14) <= section.upper < 0.8486
    # The quotient of the endless pattern on one cell listens to its own kind twice.
    bulk = GainOperator.from_links(1, [0, 0], [0, 0], [0.9, 0.2]).radius()
    assert bulk.lower <= 0.9 + 0.2 <= bulk.upper * (1 + 1e-15)
    # No bounded point of the line comes below it, though the unbounded one of the sections does.
    for s in ([1.0], [3.0, 1.0, 2.0]):
        assert pattern_upper_bound([-1, 1], [0.9, 0.2], s, left=1.0, right=1.0) >= 1.1 * (1 - 1e-15)
    with pytest.raises(InputError, match="unbounded s proves nothing"):
        pattern_upper_bound([-1, 1], [0.9, 0.2], lambda i: math.sqrt(4.5) ** i)


def test_trap_8_an_unbounded_point_proves_nothing():
    """One-way chain with gain 2 and s_i = 4^i: every quotient is .5, the radius is 2. Such a point is refused in each
    way it can be offered, and every point that is accepted gives 2 or more."""
    for i in range(-5, 6):
        assert 2 * 4.0 ** (i - 1) / 4.0**i == 0.5
    with pytest.raises(InputError, match="unbounded s proves nothing"):
        pattern_upper_bound([-1], [2], lambda i: 4.0**i)
    window = [4.0**i for i in range(8)]
    with pytest.raises(InputError, match="unbounded s proves nothing"):
        pattern_upper_bound([-1], [2], window, left=1, right=math.inf)
    with pytest.raises(InputError, match="away from zero"):
        pattern_upper_bound([-1], [2], window, left=0, right=4.0**8)
    for s in (window, window[::-1], [3, 1, 7], []):
        assert pattern_upper_bound([-1], [2], s, left=0.25, right=4.0**8) >= 2
    # The finite operator refuses such points as well.
    chain = GainOperator.from_links(3, [1, 2], [0, 1], [2.0, 2.0])
    assert chain.upper_bound([1, 4, 16]) == 0.5  # right: three units and no more have radius 0
    for s in ([1, 4, math.inf], [0, 4, 16]):
        with pytest.raises(InputError):
            chain.upper_bound(s)


def test_trap_14_a_finite_string_is_not_the_pattern():
    """A one-way string of any number of units has radius 0; the endless string has the gain of its link. What assemble
    returns is the pattern's, whatever the offset."""
    for size in (2, 10, 100):
        chain = GainOperator.from_links(size, range(1, size), range(size - 1), [3.0] * (size - 1))
        assert chain.radius().upper == 0.0
    for at in (-1, 1, -7):
        links = (link(3, at),)
        pattern = assemble([close_unit(scalar_kind(1), links, NO_FEEDBACK)], links)
        radius = pattern.radius()
        assert radius.lower <= 3 <= radius.upper
    renamed = replace(links[0], strength=Fraction(1, 2))
    small = assemble([close_unit(scalar_kind(1), (renamed,), NO_FEEDBACK)], (renamed,))
    assert small.radius().lower <= 0.5 <= small.radius().upper

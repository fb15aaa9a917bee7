"""Points of strict decay (theory (12)): verified exactly, and closed forms only where they are valid."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings

from synth.base.errors import InputError
from synth.gain import GainOperator
from tests.gain.operators import operators


def exactly_below(op, s, target):
    """G(s) <= target s in rationals, written out again here (squares compared for roots)."""
    s = [Fraction(float(v)) for v in s]
    for i in range(op.size):
        links = [k for k in range(op.gain.size) if op.to[k] == i]
        terms = {k: Fraction(float(op.gain[k])) * s[op.source[k]] for k in links}
        right = Fraction(target) * s[i]
        if op.rows[i] == "sum":
            left = sum(terms.values(), Fraction(0))
        elif op.rows[i] == "max":
            left = max(terms.values(), default=Fraction(0))
        else:
            inlets = {int(op.inlet[k]) for k in links}
            left = sum((sum(t for k, t in terms.items() if op.inlet[k] == g) ** 2 for g in inlets), Fraction(0))
            right = right**2
        if left > right:
            return False
    return True


@settings(max_examples=200, deadline=None)
@given(operators())
def test_the_point_decays(op):
    target = op.radius().upper * 1.01 + 1e-3
    found = op.decay_point(target)
    assert np.all(found.s > 0)
    assert found.terms >= 1
    assert exactly_below(op, found.s, target)


@pytest.mark.parametrize(("rows", "form"), [("sum", "sum"), ("max", "max"), ("root_sum_square", "root_sum_square")])
def test_the_tightest_valid_form_is_taken(rows, form):
    op = GainOperator.from_links(2, [0, 1, 1], [1, 0, 1], [0.5, 0.4, 0.2], rows)
    for asked in ("auto", form, "sum"):
        found = op.decay_point(0.7, asked)
        assert found.form == (form if asked == "auto" else asked)
        assert exactly_below(op, found.s, 0.7)


def test_shared_inlets_take_only_the_sum():
    op = GainOperator.from_links(1, [0, 0], [0, 0], [0.3, 0.3], "root_sum_square", inlet=[1, 1])
    assert op.decay_point(0.7).form == "sum"
    with pytest.raises(InputError, match="one link per inlet"):
        op.decay_point(0.7, "root_sum_square")


def test_target_at_or_below_the_radius_is_refused():
    op = GainOperator.from_links(1, [0], [0], [0.5])
    op.decay_point(0.51)
    for target in (0.5, 0.4):
        with pytest.raises(InputError, match="above it"):
            op.decay_point(target)
    for target in (0, -1, float("inf"), float("nan")):
        with pytest.raises(InputError, match="positive and finite"):
            op.decay_point(target)
    with pytest.raises(InputError, match="form"):
        op.decay_point(0.6, "product")


def test_chain_needs_only_its_length():
    op = GainOperator.from_links(5, [1, 2, 3, 4], [0, 1, 2, 3], [2.0] * 4)
    assert op.decay_point(0.5).terms <= 6


def ring(size, gain=0.4):
    i = np.arange(size)
    to, source = np.concatenate([i, i]), np.concatenate([(i - 1) % size, (i + 1) % size])
    return size, to, source, np.random.default_rng(2).uniform(0.1, gain, 2 * size)


def test_close_to_the_radius_a_solve_takes_over():
    """The sum would need millions of terms; the point of the solve decays all the same, checked row by row again."""
    op = GainOperator.from_links(*ring(200))
    radius = op.radius(1e-9)
    target = radius.upper * (1 + 1e-7)
    found = op.decay_point(target)
    assert found.form == "solve"
    assert exactly_below(op, found.s, target)
    far = op.decay_point(radius.upper * 1.1)
    assert far.form == "sum"
    assert far.terms < 500
    # Asked for by name the sum is tried, and given up in words.
    with pytest.raises(InputError, match="too close to the radius"):
        GainOperator.from_links(2, [0, 1, 0], [1, 0, 0], [0.5, 0.5, 0.1]).decay_point(
            0.5524937810560444 * (1 + 1e-9), "sum"
        )


def test_a_point_beyond_doubles_is_given_with_exponents():
    """Forward 1e3, back 1e-3: radius near 2, and a point near it grows by 1e3 per outlet, beyond doubles after 103."""
    size = 400
    i = np.arange(1, size)
    links = np.concatenate([i, i - 1]), np.concatenate([i - 1, i]), np.repeat([1e3, 1e-3], size - 1)
    op = GainOperator.from_links(size, *links)
    found = op.decay_point(2.0)
    assert found.exponent is not None
    assert op.upper_bound(found.s, found.exponent) <= 2.0


def test_alternatives_keep_their_forms():
    """One largest term per inlet is a maximum of squares: the root form holds; two terms at an inlet: only the sum."""
    links = (2, [0, 0, 1, 1], [0, 1, 0, 1], [0.5, 0.4, 0.3, 0.6], "root_sum_square")
    op = GainOperator.from_links(*links, choice=[0, 0, 0, 0])
    found = op.decay_point(0.65)
    assert found.form == "root_sum_square"
    assert op.upper_bound(found.s) <= 0.65
    op = GainOperator.from_links(*links, [0, 0, 1, 1], [0, -1, 0, -1])
    assert op.decay_point(1.0).form == "sum"

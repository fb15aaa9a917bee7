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

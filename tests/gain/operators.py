"""Hypothesis strategies for small random operators of every row type, reducible or not."""

from __future__ import annotations

from hypothesis import strategies as st

from synth.gain import GainOperator
from synth.gain.operator import ROW_TYPES


@st.composite
def operators(draw, rows=None, size=None, fewest=0):
    """An operator with up to 6 outlets and 14 links; parallel links, self links, empty rows and shared inlets occur."""
    n = draw(st.integers(1, 6)) if size is None else size
    links = draw(st.integers(fewest, 14))
    ends = st.lists(st.integers(0, n - 1), min_size=links, max_size=links)
    gains = draw(st.lists(st.floats(1e-3, 10), min_size=links, max_size=links))
    kinds = rows or draw(
        st.one_of(st.sampled_from(ROW_TYPES), st.lists(st.sampled_from(ROW_TYPES), min_size=n, max_size=n))
    )
    inlet = draw(st.one_of(st.none(), st.lists(st.integers(0, 2), min_size=links, max_size=links)))
    return GainOperator.from_links(n, draw(ends), draw(ends), gains, kinds, inlet)


def vectors(size):
    """Non-negative points, zeros included."""
    return st.lists(st.one_of(st.just(0.0), st.floats(1e-3, 1e3)), min_size=size, max_size=size)

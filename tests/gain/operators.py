"""Hypothesis strategies for small random operators of every row type, reducible or not."""

from __future__ import annotations

from hypothesis import strategies as st

from synth.gain import GainOperator
from synth.gain.operator import ROW_TYPES


@st.composite
def operators(draw, rows=None, size=None, fewest=0, alternatives=False):
    """An operator with up to 6 outlets and 14 links; parallel links, self links, empty rows and shared inlets occur.

    ``alternatives``: choices too, at inlets of their own in half of the cases.
    """
    n = draw(st.integers(1, 6)) if size is None else size
    links = draw(st.integers(fewest, 14))
    ends = st.lists(st.integers(0, n - 1), min_size=links, max_size=links)
    gains = draw(st.lists(st.floats(1e-3, 10), min_size=links, max_size=links))
    kinds = rows or draw(
        st.one_of(st.sampled_from(ROW_TYPES), st.lists(st.sampled_from(ROW_TYPES), min_size=n, max_size=n))
    )
    inlet = draw(st.one_of(st.none(), st.lists(st.integers(0, 2), min_size=links, max_size=links)))
    to, source = draw(ends), draw(ends)
    choice = None
    if alternatives:
        choice = draw(st.one_of(st.none(), st.lists(st.integers(-1, 2), min_size=links, max_size=links)))
        if choice is not None and inlet is not None:
            # Alternatives must share an inlet.
            inlet = [i if c < 0 else 10 + c for i, c in zip(inlet, choice, strict=True)]
    return GainOperator.from_links(n, to, source, gains, kinds, inlet, choice)


def vectors(size):
    """Non-negative points, zeros included."""
    return st.lists(st.one_of(st.just(0.0), st.floats(1e-3, 1e3)), min_size=size, max_size=size)

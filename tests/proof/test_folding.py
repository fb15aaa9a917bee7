"""Two programs close the loop, gain/closed.py and the checker; on every sort of kind they must agree exactly."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.exact import ExactMatrix
from synth.gain.closed import close_network
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Disturbance, Kind, Link, Network, Signal
from synth.proof import check
from tests.build import M, scalar_kind


def gain_documents(gains: Gains) -> list[dict[str, object]]:
    return [
        {"kind": g.kind, "actuators": list(g.actuators), "signals": list(g.signals), "K": g.K.texts()}
        for g in gains.sets
    ]


entries = st.fractions(min_value=-3, max_value=3, max_denominator=4)


def matrices(height: int, width: int) -> st.SearchStrategy[ExactMatrix]:
    row = st.lists(entries, min_size=width, max_size=width)
    return st.lists(row, min_size=height, max_size=height).map(lambda rows: ExactMatrix.of(rows, (height, width)))


@st.composite
def kinds(draw: st.DrawFn) -> Kind:
    """Two states, two actuators, two takes; the first offer has no feed-through, the second any."""
    second = {name: draw(matrices(1, width)).rows for name, width in (("F", 2), ("Fw", 1), ("Fu", 2))}
    return Kind(
        "unit",
        (Signal("a", "1"), Signal("b", "1")),
        (Actuator("u", "1"), Actuator("q", "1")),
        (Disturbance("w", "1", Fraction(1)),),
        (Signal("v", "1"), Signal("t", "1")),
        (Signal("z", "1"), Signal("heard", "1")),
        (Signal("a", "1"), Signal("both", "1")),
        draw(matrices(2, 2)), draw(matrices(2, 2)), draw(matrices(2, 2)), draw(matrices(2, 1)),
        draw(matrices(2, 2)), draw(matrices(2, 2)), draw(matrices(2, 2)),
        F=M([[0, 0], *second["F"]]), Fw=M([[0], *second["Fw"]]), Fu=M([[0, 0], *second["Fu"]]),
    )  # fmt: skip


@settings(max_examples=60, deadline=None)
@given(kinds(), matrices(2, 2), entries, entries)
def test_the_checker_folds_like_the_builder(kind: Kind, K: ExactMatrix, g: Fraction, h: Fraction) -> None:
    links = (
        Link("follow", "unit", "z", (-1,), "unit", "v", g, g, Fraction(1, 10)),
        Link("other", "unit", "z", (1,), "unit", "t", h, h),
    )
    network = Network("random", (kind,), links)
    gains = Gains((gain_set(kind, K),))
    (closed,) = close_network(network, gains)
    units, _ = check.read_model({"model": network.model_document(), "gains": gain_documents(gains)})
    (unit,) = units
    rows = {role: [line for line in unit.lines if line.role == role] for role in ("offer", "actuator")}
    assert ExactMatrix.of(unit.A) == closed.A
    assert ExactMatrix.of(unit.D) == closed.D
    assert ExactMatrix.of([line.x for line in rows["offer"]]) == closed.H
    assert ExactMatrix.of([line.v for line in rows["offer"]]) == closed.F
    assert ExactMatrix.of([line.x for line in rows["actuator"]]) == closed.U
    assert ExactMatrix.of([line.v for line in rows["actuator"]]) == closed.UV


def test_an_offer_that_passes_on_what_is_taken_passes_on_the_own_part() -> None:
    """x' = -x + v, heard = v, v = (z_j - x)/2: with the neighbour at rest the offer reads -x/2, not zero."""
    plain = scalar_kind(1)
    kind = replace(
        plain,
        offers=(*plain.offers, Signal("heard", "m/s")),
        H=M([[1], [0]]),
        F=M([[0], [1]]),
        Fw=ExactMatrix.zeros(2, 1),
    )
    half = Fraction(1, 2)
    network = Network("heard", (kind,), (Link("follow", "tank", "level", (-1,), "tank", "inflow", half, half),))
    gains = Gains((gain_set(kind, M([[0]])),))
    (closed,) = close_network(network, gains)
    assert M([[1], ["-1/2"]]) == closed.H
    units, _ = check.read_model({"model": network.model_document(), "gains": gain_documents(gains)})
    assert [line.x for line in units[0].lines[:2]] == [[1], [-half]]

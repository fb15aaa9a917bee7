"""The margin as a whole: three limits in order, certificates, actuator limits, words and plain data."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction
from math import inf

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import synth
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.margin import Margin
from synth.margin.coupling import Scaling
from synth.margin.limits import largest_within, worst_use
from synth.margin.redesign import largest_redesigned
from synth.margin.result import _number_below
from synth.network.gains import Gains, gain_set
from synth.network.model import Actuator, Goal, Network, Signal
from synth.proof import prove
from tests.build import convoy, convoy_gains, scalar_kind
from tests.margin.networks import chain, kind_of, link, network_of, no_gains, oscillators


def margin_of(network: Network, **options: object) -> Margin:
    return synth.margin(network, no_gains(network), **options)  # type: ignore[no-any-return]


@pytest.fixture(scope="module")
def convoy_margin() -> Margin:
    return synth.margin(convoy(), convoy_gains())  # type: ignore[no-any-return]


def in_order(found: Margin, width: float = 1e-3) -> bool:
    """The law: proven factor <= class limit <= exact limit, up to the widths of the brackets."""
    return found.proven_factor <= found.class_limit <= found.exact.upper * (1 + 2 * width)


def test_the_chain_of_the_convoy(convoy_margin: Margin) -> None:
    assert in_order(convoy_margin)
    assert 1 < convoy_margin.proven_factor < convoy_margin.class_limit < convoy_margin.exact.lower
    assert convoy_margin.certificate is not None
    assert convoy_margin.certificate.proven
    assert convoy_margin.covered == convoy_margin.proven_factor


def test_the_certificate_is_about_the_stronger_network(convoy_margin: Margin) -> None:
    """The strengths in the certificate are today's times the proven factor, exactly."""
    assert convoy_margin.certificate is not None
    (one,) = convoy_margin.certificate.document["model"]["links"]
    factor = Fraction(one["strength"]) / Fraction("0.5")
    assert float(factor) == convoy_margin.proven_factor
    assert one["own_strength"] == one["strength"]


def test_actuator_limits_come_first_for_the_convoy(convoy_margin: Margin) -> None:
    """The demand reaches 2.5 m/s^2 at half the proven strength; a certificate keeps every peak below its limit."""
    factor = convoy_margin.within_limits_factor
    assert factor is not None
    assert 1 < factor < convoy_margin.proven_factor
    assert convoy_margin.within_limits_certified
    assert f"inside actuator limits and bands up to {factor:.4g}" in convoy_margin.sentence()
    assert any("too large for the limits" in note for note in convoy_margin.notes)
    inside = prove(convoy().scaled(Fraction(str(factor))), convoy_gains(), route="peak", target="0.999999")
    outside = prove(convoy().scaled(Fraction(str(factor * 1.01))), convoy_gains(), route="peak", target="0.999999")
    assert (inside.proven, outside.proven) == (True, False)
    assert max(p.value / p.limit for p in inside.peaks if p.limit) == pytest.approx(1, abs=5e-3)


def test_worst_use_in_closed_form() -> None:
    """x' = -x + k x_left + w, |w| <= 1: peak of x = 1/(1 - k); band 2 is left at k = 1/2."""
    kind = scalar_kind(1)
    kind = replace(kind, offers=(Signal("level", "m", Fraction(2)),))
    network = network_of(kind, [link(kind, -1, "0.1")])
    scaling = Scaling(network, no_gains(network))
    assert worst_use(scaling, 3.0) == pytest.approx(1 / 0.7 / 2, rel=1e-4)
    assert worst_use(scaling, 10.5) == inf
    assert largest_within(scaling, 9.99, 1e-4) == pytest.approx(5, rel=2e-4)
    tight = replace(kind, states=(Signal("x", "m", Fraction(1)),))
    assert largest_within(Scaling(replace(network, kinds=(tight,)), no_gains(network)), 9.99, 1e-3) < 1e-2


def test_actuator_use_counts_what_the_controller_hears() -> None:
    """u = -y, y = x + .5 v: |u| <= |x| part + direct part; x' = -2x + .5v + w, x peak = w/(2 - .5k), k = 1."""
    kind = replace(scalar_kind(1), N=ExactMatrix.of([["0.5"]]), inputs=(Actuator("push", "m/s", Fraction(1)),))
    network = network_of(kind, [link(kind, -1, 1)])
    gains = Gains((gain_set(kind, ExactMatrix.of([[-1]])),))
    z = 1 / (2 - 0.5)
    # u = -x - .5 v: from v the kernel -.5 delta - .5 e^{-2t} (gain .5 + .25), from w the kernel -e^{-2t} (gain .5)
    assert worst_use(Scaling(network, gains), 1.0) == pytest.approx(0.75 * z + 0.5, rel=1e-4)


@settings(max_examples=5, deadline=None)
@given(data=st.data())
def test_limits_come_in_order_on_random_networks(data: st.DataObject) -> None:
    """proven factor <= class limit <= exact limit; the exact limit of the fresh network is above the class too."""
    entry = st.integers(-9, 9)
    A = [[f"-{data.draw(st.integers(8, 20))}/10", f"{data.draw(entry)}/10"], [f"{data.draw(entry)}/10", "-2"]]
    kind = kind_of(A, [[1], [f"{data.draw(entry)}/10"]], [[1, f"{data.draw(entry)}/10"]])
    delay = data.draw(st.sampled_from(["0", "0.3"]))
    own = data.draw(st.booleans())
    links = []
    for at in (-1, 1):
        g = f"{data.draw(entry.filter(bool))}/20"
        links.append(link(kind, at, g, g if own else 0, delay))
    found = margin_of(network_of(kind, links))
    assert in_order(found)
    assert found.class_limit <= found.exact_no_delay.upper * (1 + 2e-3)
    assert (found.certificate is not None) == (found.proven_factor > 0)
    for one in found.links:
        assert one.single >= one.tolerance * (1 - 2e-3) or found.relative


def test_tolerances_of_a_chain_are_told_apart() -> None:
    """All copies of both links: 1/(2k); one single copy: much more."""
    found = margin_of(chain(k="0.25"))
    assert [one.tolerance for one in found.links] == pytest.approx([2, 2], rel=1e-3)
    assert all(one.single > 4 for one in found.links)
    assert found.bottleneck == (("couple", 1.0),)


def test_a_network_not_proven_today() -> None:
    found = margin_of(oscillators("0.1"))
    assert 0 < found.proven_factor < 1
    assert found.covered == 0
    assert found.exact.nominal_stable
    assert found.exact.lower == pytest.approx(5, rel=1e-3)
    assert found.links == ()
    assert any("not proven" in note for note in found.notes)


def test_an_unstable_network_says_so() -> None:
    kind = scalar_kind(1)
    found = margin_of(network_of(kind, [link(kind, -1, 10)]))
    assert found.proven_factor == pytest.approx(0.1, rel=1e-2)
    assert "is unstable today and stable at" in found.sentence()
    growing = scalar_kind(-1)
    lost = margin_of(network_of(growing, [link(growing, -1, "0.1")]))
    assert lost.proven_factor == 0
    assert lost.certificate is None
    assert lost.sentence().startswith("Nothing is proven")


def test_links_that_cannot_matter_have_no_limit() -> None:
    first, second = scalar_kind(1, "first"), scalar_kind(1, "second")
    found = margin_of(network_of((first, second), [link(second, 0, 7, source=first)]))
    document = found.as_json()
    assert (document["proven_factor"], document["class_limit"]) == ("inf", "inf")
    assert document["exact"]["upper"] == "inf"  # type: ignore[index]
    assert "every strength" in found.sentence()


@pytest.mark.parametrize("delay", ["0", "0.2"])
def test_offers_with_feed_through(delay: str) -> None:
    """x' = -x + v, z = x + .3 v, v = k (l + r): p = 1.3, so the class is lost at k = 1/2.6; so is the declared network
    (all alike: g/(1 - .3 g) = 1 with g = 2k). No limit is declared: the certificate keeps the disturbances."""
    base = chain(k="0.3", delay=delay)
    network = replace(base, kinds=(replace(base.kinds[0], F=ExactMatrix.of([["0.3"]])),))
    found = margin_of(network)
    expected = 1 / 2.6 / 0.3
    assert found.proven_factor <= expected <= found.class_limit
    assert found.exact.lower <= expected <= found.exact.upper
    assert found.exact.lower_certified
    assert found.class_limit - found.proven_factor < 2e-3 * expected
    assert found.notes == ()
    assert found.certificate is not None
    assert found.certificate.document["model"]["kinds"][0]["disturbances"][0]["peak"] == "1"


def test_links_that_cannot_destabilise_may_still_drive_a_signal_out_of_its_band() -> None:
    """x2' = -x2 + k x1 + w, x1' = -x1 + w, |w| <= 1: peak of x2 is 1 + k, so a band of 8 is left at k = 7."""
    first, second = scalar_kind(1, "first"), scalar_kind(1, "second")
    second = replace(second, offers=(Signal("level", "m", Fraction(8)),))
    found = margin_of(network_of((first, second), [link(second, 0, 1, source=first)]))
    assert found.proven_factor == inf
    assert found.within_limits_factor == pytest.approx(7, rel=2e-3)
    assert found.within_limits_certified


def test_the_cap_is_told() -> None:
    kind = scalar_kind(1)
    found = margin_of(network_of(kind, [link(kind, -1, "0.5", "0.5")]), width=1e-2)
    assert found.capped
    assert found.proven_factor == 1000
    assert found.exact.capped
    assert "was not lost at any strength tried" in found.sentence()
    assert found.covered < 1000
    assert any("the ones in between were not" in note for note in found.notes)


def test_json_carries_the_contract(convoy_margin: Margin) -> None:
    document = json.loads(json.dumps(convoy_margin.as_json(), allow_nan=False))
    wanted = {"proven_factor", "class_limit", "exact", "route", "links", "bottleneck", "smallest_gap"}
    assert wanted <= set(document)
    assert {"lower", "upper", "theta", "frequency", "wavelength", "cap"} <= set(document["exact"])
    assert {"name", "tolerance", "single"} <= set(document["links"][0])
    assert document["links"][0]["single"] == "inf"
    assert document["smallest_gap"] is None
    assert document["certificate_sha256"] == convoy_margin.certificate.hash  # type: ignore[union-attr]
    assert document["cautions"]


def test_text_begins_with_one_plain_sentence(convoy_margin: Margin) -> None:
    first, blank = convoy_margin.as_text().splitlines()[:2]
    assert first.startswith("Proven up to 9.087 times today's strength for any number of haulers")
    assert "the class is lost at 9.08" in first
    assert "the nominal network breaks at 11.28 (a wave 3.082 haulers long, at 2.279 rad/s)" in first
    assert blank == ""
    assert "own parts of relative links grow with them" in convoy_margin.as_text()
    assert repr(convoy_margin) == f"<Margin: {first}>"


def test_wrong_inputs_are_named() -> None:
    network = chain()
    with pytest.raises(InputError, match="did you mean 'couple'"):
        margin_of(network, classes=("cuple",))
    with pytest.raises(InputError, match="width"):
        margin_of(network, width=0.5)
    with pytest.raises(InputError, match="no entry for kind 'tank'"):
        synth.margin(network, Gains(()))


def test_a_class_may_be_named_alone() -> None:
    kind = scalar_kind(1)
    network = network_of(kind, [link(kind, -1, "0.2", name="left"), link(kind, 1, "0.4", name="right")])
    found = margin_of(network, classes=("left",))
    assert found.class_limit == pytest.approx(3, rel=1e-3)
    assert found.exact.lower <= 3 <= found.exact.upper
    assert {one.name: one.tolerance for one in found.links} == pytest.approx({"left": 3, "right": 2}, rel=1e-3)


def test_gains_picked_anew_carry_more(monkeypatch: pytest.MonkeyPatch) -> None:
    """x' = -x + u + k (l + r), u = K x with K >= -3: K = 0 proves k < 1/2, picked anew k < 2 = four times .5."""

    class Picked:
        gains = Gains((gain_set(scalar_kind(1), ExactMatrix.of([[-3]])),))
        broken: tuple[str, ...] = ()

    monkeypatch.setattr("synth.local.design", lambda network: Picked(), raising=False)
    network = chain(k="0.25")
    scaling = Scaling(network, no_gains(network))
    start = prove(network, no_gains(network), route="peak")
    found = largest_redesigned(scaling, 1.0, start)
    assert found is not None
    assert found.factor == pytest.approx(8, rel=0.06)
    assert found.factor < 8 <= found.failed  # type: ignore[operator]
    assert found.certificate.proven
    assert found.gains["tank"].K[0, 0] == -3
    assert found.as_json()["factor"] == found.factor


def test_gains_that_leave_the_limits_of_the_design_are_no_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    """The same gains, reported by the design as beyond one of its limits, do not count."""

    class Picked:
        gains = Gains((gain_set(scalar_kind(1), ExactMatrix.of([[-3]])),))
        broken = ("tank: gain bound",)

    monkeypatch.setattr("synth.local.design", lambda network: Picked(), raising=False)
    network = chain(k="0.25")
    start = prove(network, no_gains(network), route="peak")
    found = largest_redesigned(Scaling(network, no_gains(network)), 1.0, start)
    assert found is not None
    assert found.factor == 1.0


@pytest.mark.long
def test_redesign_by_the_real_search() -> None:
    bound = {"tank": {"push": {"x": Fraction(3)}}}
    network = replace(chain(k="0.25"), goal=Goal(gain_bounds=bound))
    found = synth.margin(network, no_gains(network), redesign=True)
    assert found.redesigned is not None
    assert found.redesigned.factor == pytest.approx(8, rel=0.06)


@given(st.floats(1e-6, 1e6))
def test_a_printed_claim_is_never_more_than_the_claim(value: float) -> None:
    """Law: four digits rounded down, so "proven up to" is never read as more than was proven."""
    shown = float(_number_below(value))
    assert shown <= value < shown * (1 + 2e-3) + 1e-12

"""Smallest time gap of a file, how it moves, and the share of absolute reference that makes it a proof."""

from __future__ import annotations

from fractions import Fraction

import pytest

from synth.base.errors import InputError
from synth.gain.strings.hop_network import hop_loops
from synth.margin.gap import TimeGapPolicy, holds_at, smallest_gap
from synth.margin.hop_finding import _cases, hop_margin
from synth.margin.hop_to_proof import absolute_share, with_share
from synth.network.varying import with_parameters
from synth.proof import prove
from tests.gain.gap_files import gains, network

F = Fraction


def test_the_bracket_is_that_of_the_policy_with_the_same_gains():
    """Gains fixed, headway varied: the same as the policy in code, which shares no matrices with the file."""
    string = network("loaded", notion="mean square")
    found = hop_margin(string, gains(string), table=False, shares=False)
    gap = found.gaps["loaded"]
    theirs = smallest_gap(
        TimeGapPolicy("0.5", speed_gain="0.5", gap_gain="0.2"), "mean square", F(1, 20), 30, width=2e-3
    )
    assert gap.proven == theirs.proven
    assert gap.breaks == theirs.breaks
    assert found.holds is True
    document = found.as_json()
    assert document["claim"] == "mean square"
    assert document["smallest_gap"]["proven"] == float(gap.proven)
    assert document["proven_factor"] is None
    assert "declared 2 s" in found.as_text()


def test_every_kind_has_its_own_gap_and_the_largest_counts():
    string = network("empty", "loaded", notion="mean square")
    found = hop_margin(string, gains(string), width=2e-2, table=False, shares=False)
    assert set(found.gaps) == {"empty", "loaded"}
    assert found.worst == "loaded"
    for name, gap in found.gaps.items():
        for h, wanted in ((gap.proven, True), (gap.breaks, False)):
            other = with_parameters(string, {name: {"headway": h}})
            _, hops = hop_loops(other, gains(string), None, any_order=True)
            assert holds_at(next(hop.loop for hop in hops if hop.kind == name), "mean square") is wanted


def test_one_thing_is_changed_at_a_time_and_the_table_moves_the_right_way():
    string = network("loaded", heard="0.1 s", notion="mean square", radio=["radio"])
    cases = list(_cases(string, string.goal.hop, "loaded"))
    assert [(what, value) for what, value, _, _ in cases] == [
        ("lag", "0.375 s"),
        ("lag", "0.625 s"),
        ("dead time of the command", "0.1 s"),
        ("delay of radio", "0.05 s"),
        ("delay of radio", "0.2 s"),
        ("radio lost for good", ""),
    ]
    plain = network("loaded")
    found = hop_margin(plain, gains(plain), width=1e-2, shares=False)
    less, more, late = (float(row.gap.proven) for row in found.table)
    assert less < float(found.gaps["loaded"].proven) < min(more, late)
    assert "How it moves for a loaded" in found.as_text()


def test_a_claim_that_fails_as_declared_is_told_and_no_parameter_means_no_gap():
    types = {"loaded": ("0.5", "1")}
    string = network("loaded", types=types, gap_parameter=None)
    found = hop_margin(string, gains(string, types=types), shares=False)
    assert found.holds is False
    assert found.as_json()["smallest_gap"] == {"proven": None, "breaks": None, "kind": None}
    assert "names no gap_parameter" in found.as_text()


def test_a_share_of_absolute_reference_makes_the_radius_one_minus_the_share():
    """The hop becomes (1 - c) T with |T|_1 = 1, so the radius is exactly 1 - c; without a share nothing is proven."""
    string = network("loaded")
    K = gains(string)
    for share in (F(1, 10), F(1, 3)):
        other, used = with_share(string, K, share)
        radius = prove(other, used, route="peak", target=F(999, 1000)).radius
        assert radius.lower <= float(1 - share) <= radius.upper
        assert radius.upper - radius.lower < 1e-5
    other, used = with_share(string, K, F(0))
    assert not prove(other, used, route="peak", target=F(999, 1000)).proven


def test_the_rewritten_string_has_the_hop_of_the_old_one():
    """At share 0 the sums that go between the units have the transfer of the speed, exactly."""
    string = network("loaded", "empty")
    K = gains(string)
    other, used = with_share(string, K, F(0))
    _, before = hop_loops(string, K)
    _, after = hop_loops(other, used)
    # Around the whole cell the sums cancel out: the product of the hops is the same.
    (a, b), (c, d) = ([hop.loop.transfer("hop") for hop in hops] for hops in (before, after))
    assert (a[0] * b[0] * c[1] * d[1] - c[0] * d[0] * a[1] * b[1]).terms == {}


def test_shares_say_where_actuators_would_saturate():
    string = network("loaded")
    found = absolute_share(string, gains(string), (F(1, 50), F(1, 2)))
    few, many = found.tried
    assert few.proven
    assert few.beyond == ("loaded",)
    assert many.beyond == ()
    assert found.least is many
    assert many.G < few.G
    assert "share of 0.5" in found.as_text()
    assert found.as_json()["least_share"] == 0.5


def test_what_cannot_be_rewritten_is_told():
    string = network("loaded", dead_time="0.1 s")
    with pytest.raises(InputError, match="outside the proof of calm"):
        absolute_share(string, gains(string))
    with pytest.raises(InputError, match=r"\[0, 1\)"):
        with_share(network("loaded"), gains(network("loaded")), F(1))

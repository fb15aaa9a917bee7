"""Hop statements: proven only for the notion asked for, worded as weaker, contradicted by nothing seen elsewhere."""

from __future__ import annotations

import json
from fractions import Fraction

import numpy as np
import pytest

from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.base.provenance import canonical, sha256
from synth.gain.strings.hop_length import evaluated
from synth.gain.strings.hop_network import hop_loops
from synth.network import read
from synth.network.gains import Gains, gain_set
from synth.proof import hop_statement
from synth.proof.hop_response import hop_response, largest_response
from synth.proof.hop_statement import prove_hop
from tests.gain.gap_files import gains, network
from tests.network.files import GAP_ONLY

SHORT = {"loaded": ("0.5", "1"), "empty": ("0.3", "1.2")}


def test_a_peak_claim_is_proven_for_any_order_and_says_it_is_weaker():
    string = network("loaded", "empty")
    found = prove_hop(string, gains(string))
    assert found.proven
    assert found.claim == "peak"
    document = found.as_json()
    assert document["route"] == "hop"
    assert document["weaker_than_calm"] is True
    assert document["radius"] == {"lower": None, "upper": None}
    assert document["certificate"] is None
    assert "weaker than a proof that the whole stays calm" in document["claim"]
    assert "no certificate" in document["rechecked"]
    assert found.time_gaps == {"loaded": 2, "empty": Fraction(6, 5)}
    assert any("any order" in text for text in found.covers)
    assert "not collision avoidance" in found.as_text()


def test_a_mean_square_result_is_not_sold_as_a_peak_result():
    """At h = 2 tau the mean-square claim holds and the peak claim does not (Swaroop and Rajagopal 1999)."""
    asked = network("loaded", types=SHORT)
    K = gains(asked, types=SHORT)
    found = prove_hop(asked, K)
    assert not found.proven
    assert found.claim == "mean square"
    assert "above 1" in found.reasons[0]
    assert found.bounds == ()
    with pytest.raises(InputError, match="nothing was proven"):
        found.save("nowhere.json")
    less = network("loaded", types=SHORT, notion="mean square")
    found = prove_hop(less, K)
    assert found.proven
    assert "peak may" in found.sentence


def test_an_unstable_unit_and_a_wrong_signal_are_told():
    string = network("loaded")
    turned = Gains(tuple(gain_set(k, gains(string)[k.name].K.scaled(Fraction(-1))) for k in string.kinds))
    found = prove_hop(string, turned)
    assert not found.proven
    assert found.hops is None
    assert "Nothing is proven" in found.as_text()
    json.dumps(found.as_json()["peaks"])
    with pytest.raises(InputError, match="the file must name it"):
        prove_hop(read(GAP_ONLY), turned)
    heard = network("loaded", heard="0.1 s", signal="drive", standstill=None, leader=None)
    with pytest.raises(InputError, match="is 'speed', not 'drive'"):
        prove_hop(heard, gains(heard))


def test_bounds_under_the_declared_leader():
    """|T|_1 = 1: the acceleration is the leader's; the command is at most acceleration plus lag times jerk."""
    string = network("loaded")
    bounds = {b.what: b for b in prove_hop(string, gains(string)).bounds}
    assert bounds["acceleration"].value == pytest.approx(1.5)
    assert bounds["acceleration"].unit == "m/s^2"
    assert bounds["jerk"].unit == "m/s^3"
    assert bounds["command"].value == pytest.approx(1.5 + 0.5 * bounds["jerk"].value)
    assert bounds["command"].limit == 3.5
    # 1.9 s: .9530 s^2 at the first follower (theory of the hop route); at 2 s a little more.
    assert bounds["gap error"].value / 1.5 == pytest.approx(0.976042, rel=1e-5)


def test_the_separate_response_agrees_and_would_contradict(monkeypatch):
    string = network("loaded", "empty", heard="0.1 s", dead_time="0.05 s", sensing={"closing": "0.1 s"})
    K = gains(string, weight="0.2")
    wish = string.goal.hop
    links = [link for link in string.links if link.kind == "loaded"]
    s = 1j * np.array([0.1, 1.0, 3.0])
    seen = hop_response(string.kinds[0], string.kinds[1], links, K, wish, s)
    _, hops = hop_loops(string, K, "spacing", wish.dead_time, dict(wish.sensing), any_order=True)
    num, den = next(hop for hop in hops if hop.kind == "loaded").loop.transfer("hop")
    assert np.abs(seen - evaluated(num, s) / evaluated(den, s)).max() < 1e-12
    assert largest_response(string, K, wish) > 0.99
    good = network("loaded")
    monkeypatch.setattr(hop_statement, "largest_response", lambda *_: 1.1)
    with pytest.raises(Exception, match=r"frequency response of 1\.1"):
        prove_hop(good, gains(good))


def test_the_file_names_everything_it_is_about(tmp_path):
    string = network("loaded")
    found = prove_hop(string, gains(string))
    saved = json.loads(found.save(tmp_path / "hop.json").read_text())
    digest = saved.pop("hash")
    assert digest == sha256(canonical(saved))
    assert saved["network_hash"] == string.hash
    assert saved["gains"][0]["K"] == [["1/5", "1/2"]]
    assert "a certificate" in saved["is_not"]
    later = network("loaded", leader={"acceleration": "2 m/s^2"})
    assert prove_hop(later, gains(later)).document["hash"] != digest


def test_it_is_no_certificate(tmp_path):
    from synth.proof import verify

    string = network("loaded")
    path = prove_hop(string, gains(string)).save(tmp_path / "hop.json")
    assert not verify(path).verified


def test_a_wrong_matrix_is_not_gains():
    string = network("loaded")
    with pytest.raises(InputError, match="gains or a design were expected"):
        prove_hop(string, ExactMatrix.of([[1]]))

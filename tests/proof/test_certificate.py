"""Certificates are accepted, refused for other networks, saved whole, and honest about failure."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction
from functools import cache
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.network.gains import Gains, gain_set
from synth.proof import Certificate, check, prove, verify
from synth.proof.joined import PARTS as PARTS_IN_ORDER
from synth.proof.joined import checker_text
from tests.build import M, convoy, convoy_gains
from tests.proof.networks import chain, passing, tanks
from tests.proof.truth import is_true, peak_numbers, storage_numbers

PARTS = Path(check.__file__).parent / "checking"


@cache
def proven(name: str, route: str = "auto") -> Certificate:
    """One proof per network and route, shared by the tests that only look at it."""
    network, gains = {"convoy": lambda: (convoy(), convoy_gains()), "tanks": tanks, "chain": chain}[name]()
    return prove(network, gains, route=route)


@pytest.mark.parametrize("route", ["peak", "storage", "auto"])
def test_convoy_is_proven_and_verified_by_the_checker_alone(route, tmp_path):
    certificate = proven("convoy", route)
    assert certificate.proven, certificate.reasons
    assert certificate.route == ("peak" if route == "auto" else route)
    path = certificate.save(tmp_path / "certificate.json")
    assert verify(path).as_json() == {"verified": True, "reasons": []}
    checker = tmp_path / "check.py"
    checker.write_text(checker_text(), encoding="utf-8")
    run = subprocess.run([sys.executable, "-I", str(checker), str(path)], capture_output=True, text=True, check=False)
    assert run.returncode == 0 and run.stdout.startswith("verified"), run.stdout + run.stderr
    assert is_true(certificate.document)


def test_checker_exit_codes(tmp_path):
    good = proven("chain").save(tmp_path / "good.json")
    document = json.loads(good.read_text())
    document["constants"]["G"] = "0.1"
    (tmp_path / "bad.json").write_text(json.dumps(document))
    assert check.main([str(good)]) == 0
    assert check.main([str(tmp_path / "bad.json")]) == 1
    assert check.main([str(tmp_path / "absent.json")]) == 2
    assert check.main([]) == 2


def test_checker_imports_only_the_standard_library():
    tree = ast.parse(checker_text())
    names = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            names |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            names.add((node.module or "").split(".")[0])
    assert names and names <= set(sys.stdlib_module_names)
    for part in ("arithmetic", "flow", "peak_route", "storage_route", "wiring", "edges", "units", "evidence"):
        assert "float(" not in (PARTS / f"{part}.py").read_text(), f"{part} uses no floats"


def test_no_name_is_defined_by_two_parts():
    """The parts are joined into one file, where a second definition would silently replace the first."""
    assert {path.stem for path in PARTS.glob("*.py")} == {*PARTS_IN_ORDER, "__init__"}
    known: dict[str, str] = {}
    for part in PARTS_IN_ORDER:
        for node in ast.parse((PARTS / f"{part}.py").read_text(encoding="utf-8")).body:
            names = [node.name] if isinstance(node, ast.FunctionDef | ast.ClassDef) else []
            if isinstance(node, ast.Assign):
                names = [n.id for t in node.targets for n in ast.walk(t) if isinstance(n, ast.Name)]
            for name in names:
                assert known.setdefault(name, part) == part, name
    assert checker_text() == checker_text()


def test_cautions_have_one_wording():
    assert check.CAUTIONS == CAUTIONS


@pytest.mark.parametrize(("route", "numbers"), [("peak", lambda d: peak_numbers(d, 0.0)), ("storage", storage_numbers)])
def test_every_number_agrees_with_a_second_evaluation(route, numbers):
    certificate = proven("tanks", route)
    assert certificate.proven, certificate.reasons
    found = numbers(certificate.document)
    peaks = [float(v) for part in found["base"].values() for v in part]
    assert [peak.value for peak in certificate.peaks] == pytest.approx(peaks, rel=1e-3)
    states = [
        found["unit"][k][unit["offers"] : unit["offers"] + unit["states"]]
        for k, unit in enumerate(found["model"].units)
    ]
    assert pytest.approx(max(float(part.max()) for part in states), rel=1e-3) == certificate.constants.G
    assert is_true(certificate.document)


def test_known_chain_in_closed_form():
    """x' = -x + k(l + r) + w, k = 1/4, undelayed: radius 2k, peaks and G = 1/(1 - 2k), C at rate alpha likewise."""
    certificate = prove(*chain("1", "0.25", "0"), route="peak")
    assert certificate.radius.upper == pytest.approx(0.5, rel=1e-6) and certificate.radius.lower <= 0.5
    assert certificate.radius.lower == pytest.approx(0.5, rel=1e-6)
    assert pytest.approx(2, rel=1e-6) == certificate.constants.G and certificate.constants.G >= 2
    alpha = certificate.constants.alpha
    assert alpha == pytest.approx(1 / 3, abs=2e-3)  # .5/(1 - alpha) = (1 + .5)/2
    assert pytest.approx(1 / (1 - 0.5 / (1 - alpha)), rel=1e-5) == certificate.constants.C
    assert certificate.peaks[0].value == pytest.approx(2, rel=1e-6)


def test_storage_needs_the_sum_where_links_share_an_inlet():
    """Trap 3: two links of .55 on one inlet of x' = -x + v give 1.10, not .78; nothing is proven by either route."""
    for route in ("peak", "storage"):
        certificate = prove(*chain("1", "0.55", "0"), route=route)
        assert not certificate.proven
        assert 1.1 <= certificate.radius.upper <= 1.1 * 1.01


def test_feed_through_is_counted_and_refused_by_storage():
    network, gains = passing()
    certificate = prove(network, gains, route="peak")
    assert certificate.proven and is_true(certificate.document)
    assert certificate.radius.upper == pytest.approx(0.8 * (0.25 + 1 / 2.5), rel=1e-6)
    refused = prove(network, gains, route="storage")
    assert not refused.proven and "feed-through" in refused.reasons[0]


def test_networks_without_links_or_disturbances():
    for network in (convoy(links=()), without_disturbances()):
        for route in ("peak", "storage"):
            certificate = prove(network, convoy_gains(), route=route)
            assert certificate.proven, (route, certificate.reasons)
            assert is_true(certificate.document)
    assert certificate.validity.w == float("inf") and certificate.constants.G == 0
    assert json.dumps(certificate.as_json(), allow_nan=False)


def without_disturbances():
    network = convoy()
    kind = replace(network.kinds[0], disturbances=(), E=ExactMatrix.zeros(3, 0), Fw=ExactMatrix.zeros(1, 0))
    return replace(network, kinds=(kind,))


def test_a_kind_that_only_stands_there():
    """No takes, no offers, no actuator: one stable state and a disturbance."""
    network, _ = chain()
    kind = replace(
        network.kinds[0],
        inputs=(),
        takes=(),
        offers=(),
        sensors=(),
        B=ExactMatrix.zeros(1, 0),
        D=ExactMatrix.zeros(1, 0),
        C=ExactMatrix.zeros(0, 1),
        N=ExactMatrix.zeros(0, 0),
        H=ExactMatrix.zeros(0, 1),
        F=ExactMatrix.zeros(0, 0),
        Fw=ExactMatrix.zeros(0, 1),
    )
    network = replace(network, kinds=(kind,), links=())
    gains = Gains((gain_set(kind, ExactMatrix.zeros(0, 0)),))
    for route in ("peak", "storage"):
        certificate = prove(network, gains, route=route)
        assert certificate.proven, certificate.reasons
        assert certificate.constants.G >= 1


def test_failures_are_ordinary_results():
    unstable = prove(convoy(), convoy_gains(("1", "0", "0")))
    assert not unstable.proven and "not stable" in unstable.reasons[0]
    assert unstable.as_json()["radius"]["upper"] == "inf"
    far = prove(convoy(strength="9"), convoy_gains())
    assert not far.proven and far.radius.upper > 0.9 and len(far.reasons) == 2
    broken = prove(
        convoy(
            kinds=(replace(convoy().kinds[0], inputs=(replace(convoy().kinds[0].inputs[0], limit=Fraction("0.5")),)),)
        ),
        convoy_gains(),
        route="peak",
    )
    assert not broken.proven and "disturbances alone" in broken.reasons[0] and "hauler.demand" in broken.reasons[0]
    with pytest.raises(InputError, match="nothing was proven"):
        broken.save("never.json")
    tight = prove(convoy(), convoy_gains(), target="0.05", route="peak")
    assert not tight.proven and "target 0.05" in tight.reasons[0]


def test_wrong_arguments():
    for bad in ({"route": "shortest"}, {"target": 1}, {"target": 0}):
        with pytest.raises(InputError):
            prove(convoy(), convoy_gains(), **bad)
    with pytest.raises(InputError, match="no gains"):
        prove(tanks()[0], convoy_gains())


def test_certificate_of_another_network_is_refused(tmp_path):
    path = proven("chain").save(tmp_path / "c.json")
    assert verify(path, network=chain()[0]).verified
    verdict = verify(path, network=chain(strength="0.31")[0])
    assert not verdict.verified and "another network" in verdict.reasons[0]


@pytest.mark.parametrize(
    "content", ["{}", "[]", "3", "null", '{"schema": "localgain certificate"}', '{"a": 1, "a": 1}']
)
def test_garbage_is_not_verified(content, tmp_path):
    path = tmp_path / "c.json"
    path.write_text(content)
    assert not verify(path).verified


def test_files_that_are_no_json_or_not_there(tmp_path):
    (tmp_path / "c.json").write_text("certificate")
    for name in ("c.json", "absent.json"):
        with pytest.raises(InputError):
            verify(tmp_path / name)


def test_what_is_said_about_coverage():
    certificate = proven("convoy")
    assert any("0.1 s" in line and "follow" in line for line in certificate.covers)
    assert any("sampling" in line for line in certificate.excludes)
    assert any("own part" in line for line in certificate.excludes)
    assert not any("own part of a relative link late" in line for line in proven("chain").excludes)
    assert not any("not yet re-derived" in line for line in certificate.excludes)
    for number in (certificate.document["constants"]["C"], certificate.document["radius"]["upper"]):
        assert number in certificate.claim


@settings(max_examples=6, deadline=None)
@given(st.integers(1, 40), st.sampled_from(["peak", "storage"]))
def test_guaranteed_peaks_scale_with_declared_peaks(tenths, route):
    """Law: with every declared peak times c, every guaranteed peak is c times as large."""
    one, many = prove(*chain("2", "0.3"), route=route), prove(*chain("2", "0.3", peak=f"{tenths}/10"), route=route)
    assert one.proven and many.proven
    if route == "storage":  # its evidence weighs the disturbances, so compare the numbers of one evidence
        document = many.document | {"evidence": one.document["evidence"], "point": one.document["point"]}
        document["constants"] = document["constants"] | {"alpha": one.document["constants"]["alpha"]}
        peaks = [float(v) for v in check.derive(document).base]
    else:
        peaks = [peak.value for peak in many.peaks]
    assert peaks == pytest.approx([peak.value * tenths / 10 for peak in one.peaks], rel=1e-5)


@settings(max_examples=6, deadline=None)
@given(st.integers(1, 30))
def test_scaling_all_links_scales_the_radius(twentieths):
    factor = Fraction(twentieths, 20)
    network, gains = chain("2", "0.4")
    one, other = prove(network, gains, route="peak"), prove(network.scaled(factor), gains, route="peak")
    assert other.radius.upper == pytest.approx(one.radius.upper * float(factor), rel=1e-5)


def test_a_gain_changed_in_its_last_digit_is_another_certificate():
    network, _ = chain()
    one = proven("chain")
    two = prove(network, Gains((gain_set(network.kinds[0], M([["1e-9"]])),)))
    assert one.proven and two.proven and one.hash != two.hash


def test_what_a_person_and_a_notebook_see():
    certificate = proven("chain")
    assert certificate.as_text().startswith("PROVEN (peak route)") and CAUTIONS[0] in certificate.as_text()
    assert certificate._repr_html_().startswith("<pre>PROVEN")
    assert set(certificate.as_json()["peaks"]) == {"tank.level", "tank.x", "tank.push"}
    assert "document" not in repr(certificate)

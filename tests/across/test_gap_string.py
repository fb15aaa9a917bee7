"""A string that sees only gaps, by the command line: refused as ever without the key, a weaker claim with it."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from tests.across.conftest import CASES, synth

STRING, RADIO = CASES / "gap_string" / "gap_string.yaml", CASES / "gap_string" / "with_radio.yaml"
HEADER = "kind,actuator,signal,gain,gain_unit,actuator_unit,signal_unit,sign_convention,period_s,certificate_sha256"
GAINS = {"loaded": ("0.2", "0.5"), "empty": ("0.3333333", "0.8333333"), "water": ("0.25", "0.625")}


def table(folder: Path, scale: float = 1) -> Path:
    """Gains in service: u = (closing + .4 spacing)/headway."""
    rows = [HEADER]
    for kind, (spacing, closing) in GAINS.items():
        rows += [
            f"{kind},demand,spacing,{spacing},1/s^2,m/s^2,m,u = K y,,",
            f"{kind},demand,closing,{float(closing) * scale:.7g},1/s,m/s^2,m/s,u = K y,,",
        ]
    path = folder / "gains.csv"
    path.write_text("\n".join(rows) + "\n")
    return path


def smaller(folder: Path) -> Path:
    """The case study, small enough for the fast suite."""
    (folder / "shift.csv").write_text((STRING.parent / "shift.csv").read_text())
    path = folder / "small.yaml"
    path.write_text(STRING.read_text().replace("units: 60, seconds: 120 s", "units: 4, seconds: 10 s"))
    return path


def test_the_whole_job_on_gains_in_service(tmp_path):
    out = tmp_path / "out"
    done = synth("run", smaller(tmp_path), "--gains", table(tmp_path), "--json", "--out", out)
    assert done.code == 0, done.err
    found = done.document
    assert found["proof"]["route"] == "hop"
    assert found["proof"]["proven"] is True
    assert "weaker than a proof that the whole stays calm" in found["proof"]["claim"]
    assert found["proof"]["radius"]["upper"] is None
    assert found["network"]["obstruction"] is not None
    gap = found["margin"]["smallest_gap"]
    assert gap["kind"] == "loaded"
    assert 1.76 < gap["breaks"] < gap["proven"] < 1.78
    assert found["margin"]["to_proof"]["least_share"] == 0.2
    assert found["simulation"]["violations"] == found["simulation"]["collisions"] == 0
    assert {run["name"] for run in found["simulation"]["measures"]} > {"hard brake", "recorded", "sine sweep"}
    assert found["handoff"]["proven"] is False
    for name in ("report.html", "hop_statement.json", "string.svg", "bundle/gains.csv", "bundle/README.txt"):
        assert (out / name).is_file(), name
    report = (out / "report.html").read_text()
    assert "weaker than a proof that the whole stays calm" in report
    assert "http://" not in report.replace("http://www.w3.org", "")
    assert "Cautions" in (out / "summary.txt").read_text()
    assert not (out / "certificate.json").exists()


def test_gains_that_amplify_are_not_proven_and_not_handed_off(tmp_path):
    hard = table(tmp_path, scale=4)
    done = synth("prove", smaller(tmp_path), "--gains", hard, "--json", "--quiet")
    assert done.code == 1
    assert done.document["proven"] is False
    assert done.document["reasons"]
    done = synth("handoff", smaller(tmp_path), "--gains", hard, "--out", tmp_path / "bundle", "--quiet")
    assert done.code == 1
    assert "does not stand" in done.err
    assert not (tmp_path / "bundle").exists()


def test_check_explains_and_says_what_is_asked_for():
    done = synth("check", STRING, "--json", "--quiet")
    assert done.code == 0
    assert done.document["hop"]["asked"]["notion"] == "peak"
    assert done.document["obstruction"]["cause"] == "not seen"
    assert done.document["hop"]["hops"] == [["loaded", "any kind"], ["empty", "any kind"], ["water", "any kind"]]
    assert synth("check", RADIO, "--quiet").code == 0


def test_options_of_proofs_of_calm_are_refused():
    for words, said in (
        (("prove", STRING, "--target", "0.9"), "no radius"),
        (("prove", STRING, "--route", "peak"), "its own route"),
        (("margin", STRING, "--redesign"), "smallest time gap instead"),
    ):
        done = synth(*words, "--quiet")
        assert done.code == 2
        assert said in " ".join(done.err.split())


@pytest.mark.long
@pytest.mark.parametrize(("path", "wanted"), [(STRING, None), (RADIO, "peak")])
def test_the_case_study_as_it_stands(path, wanted, tmp_path):
    done = synth("run", path, "--json", "--quiet", "--out", tmp_path / "out", timeout=1500)
    assert done.code == 0, done.err
    found = done.document
    assert found["design"]["reached"] is True
    assert found["proof"]["holds"] == "peak"
    assert found["simulation"]["violations"] == 0
    lost = found["handoff"]["radio_lost"]
    assert (None if lost is None else lost["hop_claim"]) == wanted
    json.dumps(found, allow_nan=False)

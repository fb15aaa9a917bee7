"""The main job on the convoy: the contract's keys, a proven certificate, no violations, honest refusals."""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from tests.across.conftest import CASES, CONVOY, GAP_ONLY, Done, synth

KEYS = {
    "network": {"title", "kinds", "units", "description", "obstruction"},
    "design": {"gains", "target", "radius", "reached", "blocking"},
    "proof": {
        "proven", "route", "claim", "radius", "constants", "peaks", "validity", "covers", "excludes", "certificate",
    },
    "margin": {"proven_factor", "class_limit", "exact", "route", "links", "bottleneck", "smallest_gap"},
    "simulation": {"units", "duration", "violations", "worst", "measures"},
    "as_flashed": {"proven", "reason", "longest_period", "proof", "timing"},
    "handoff": {"bundle", "files", "proven", "scaling"},
}  # fmt: skip

Run = tuple[Done, Path]


def test_run_is_proven_and_prints_the_contract(convoy_run: Run) -> None:
    done, _ = convoy_run
    assert done.code == 0, done.err
    document = done.document
    for stage, keys in KEYS.items():
        assert keys <= set(document[stage]), stage
    assert set(document["proof"]["constants"]) >= {"C", "alpha", "G", "norm"}
    assert set(document["proof"]["validity"]) >= {"X0", "w"}
    assert set(document["simulation"]["worst"]) >= {"G_ratio", "envelope_ratio"}
    assert document["network"]["units"] is None
    assert document["network"]["obstruction"] is None


def test_run_meets_the_target_with_margin_and_no_violation(convoy_run: Run) -> None:
    document = convoy_run[0].document
    proof = document["proof"]
    assert proof["proven"] is True
    assert 0 < proof["radius"]["lower"] <= proof["radius"]["upper"] <= document["design"]["target"]
    assert document["margin"]["proven_factor"] >= 1
    assert document["simulation"]["violations"] == 0
    assert 0.9 <= document["simulation"]["worst"]["G_ratio"] <= 1
    for peak in proof["peaks"].values():
        assert peak["value"] > 0
        assert peak["in"]


def test_margin_numbers_stand_in_order(convoy_run: Run) -> None:
    margin = convoy_run[0].document["margin"]
    limit = margin["class_limit"]
    exact = margin["exact"]["upper"]
    assert limit == "inf" or margin["proven_factor"] <= limit * (1 + 1e-9)
    assert limit == "inf" or exact == "inf" or limit <= exact * (1 + 1e-6)


def test_run_leaves_the_promised_files(convoy_run: Run) -> None:
    _, out = convoy_run
    for name in ("certificate.json", "report.html", "result.json", "bundle/gains.csv", "bundle/SHA256SUMS"):
        assert (out / name).is_file(), name
    for line in (out / "bundle" / "SHA256SUMS").read_text().splitlines():
        digest, name = line.split(maxsplit=1)
        assert hashlib.sha256((out / "bundle" / name.lstrip("*")).read_bytes()).hexdigest() == digest
    assert "http://" not in (out / "report.html").read_text().replace("http://www.w3.org", "")


def test_certificate_is_verified_alone_and_for_its_network_only(convoy_run: Run, tmp_path: Path) -> None:
    certificate = convoy_run[1] / "certificate.json"
    assert synth("verify", certificate, "--json").document["verified"] is True
    assert synth("verify", certificate, "--for", CONVOY).code == 0
    other = tmp_path / "other.yaml"
    other.write_text(CONVOY.read_text().replace("lag: 0.5 s", "lag: 0.45 s"))
    assert other.read_text() != CONVOY.read_text()
    refused = synth("verify", certificate, "--for", other, "--json")
    assert refused.code == 1
    assert refused.document["verified"] is False
    assert refused.document["reasons"]


def test_shipped_checker_needs_only_a_bare_python(convoy_run: Run) -> None:
    bundle = convoy_run[1] / "bundle"
    for command in (["check.py", "certificate_continuous.json"], ["check_firmware.py", "certificate.json"]):
        good = subprocess.run([sys.executable, "-S", *command], cwd=bundle, capture_output=True, text=True)
        assert good.returncode == 0, good.stdout + good.stderr


def test_run_proves_the_code_as_flashed_with_room_in_time(convoy_run: Run) -> None:
    document = convoy_run[0].document
    flashed, handed = document["as_flashed"], document["handoff"]
    assert flashed["proven"] is True and handed["proven"] is True and handed["proven_continuous"] is True
    assert document["proof"]["radius"]["upper"] <= flashed["proof"]["radius"]["upper"] <= document["design"]["target"]
    assert document["design"]["sampled"]["reached"] is True
    longest = {row["quantity"]: row["longest_proven_s"] for row in flashed["timing"]["rows"]}
    assert longest["sample period"] > 10 * 0.02
    assert (convoy_run[1] / "certificate_as_flashed.json").is_file()


def test_gains_in_service_can_be_proven_from_the_table(convoy_run: Run) -> None:
    table = convoy_run[1] / "bundle" / "gains.csv"
    done = synth("prove", CONVOY, "--gains", table, "--json", "--quiet")
    assert done.code == 0, done.err
    fresh = convoy_run[0].document["proof"]
    again = done.document
    assert again["proven"] is True
    assert again["radius"] == fresh["radius"]
    assert again["certificate"] is None


def test_a_table_with_a_turned_sign_is_not_proven(convoy_run: Run, tmp_path: Path) -> None:
    lines = (convoy_run[1] / "bundle" / "gains.csv").read_text().splitlines()
    fields = lines[1].split(",")
    fields[3] = fields[3].lstrip("-") if fields[3].startswith("-") else f"-{fields[3]}"
    table = tmp_path / "gains.csv"
    table.write_text("\n".join([lines[0], ",".join(fields), *lines[2:]]) + "\n")
    done = synth("prove", CONVOY, "--gains", table, "--json", "--quiet", "--out", tmp_path / "out")
    assert done.code == 1
    assert done.document["proven"] is False
    assert done.document["certificate"] is None
    assert not (tmp_path / "out" / "certificate.json").exists()
    whole = synth("run", CONVOY, "--gains", table, "--json", "--quiet", "--out", tmp_path / "whole")
    assert whole.code == 1
    document = whole.document
    assert document["proof"]["proven"] is False
    assert document["handoff"]["proven"] is False
    assert document["handoff"]["bundle"] is None
    assert (tmp_path / "whole" / "report.html").is_file()


@pytest.mark.parametrize("verb", ["check", "design"])
def test_gap_only_convoy_is_refused_with_advice_not_by_a_failed_solve(verb: str) -> None:
    done = synth(verb, GAP_ONLY, "--json", "--quiet")
    assert done.code == 1
    shown = done.out + done.err
    assert "slot" in shown
    if verb == "check":
        found = done.document["obstruction"]
        assert found["theta"] == [0]
        assert found["s"] == [0, 0]
        assert "hauler.slot" in json.dumps(found["direction"])
        assert "against something outside the line" in found["advice"]


def test_unreachable_target_says_what_blocks(tmp_path: Path) -> None:
    done = synth("design", CONVOY, "--target", "0.0001", "--json", "--quiet")
    assert done.code == 1
    document = done.document
    assert document["reached"] is False
    assert document["radius"]["lower"] > 0.0001
    assert document["blocking"]


def test_failed_run_leaves_the_earlier_folder_alone(convoy_run: Run, tmp_path: Path) -> None:
    out = tmp_path / "out"
    shutil.copytree(convoy_run[1], out)
    before = {p.name: p.read_bytes() for p in out.iterdir() if p.is_file()}
    done = synth("run", GAP_ONLY, "--out", out, "--quiet")
    assert done.code == 1
    assert {p.name: p.read_bytes() for p in out.iterdir() if p.is_file()} == before
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


def test_run_refuses_a_folder_that_is_not_its_own(tmp_path: Path) -> None:
    (tmp_path / "thesis.txt").write_text("years of work")
    done = synth("run", CONVOY, "--out", tmp_path)
    assert done.code == 2
    assert "not written by this tool" in done.err
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.txt"]


@pytest.mark.parametrize(
    ("words", "part"),
    [
        (["chek", CONVOY], "did you mean 'check'"),
        (["check", CASES / "nowhere.yaml"], "nowhere.yaml"),
        (["design", CONVOY, "--target", "1.5"], "between 0 and 1"),
        (["margin", CONVOY, "--class", "folow", "--gains", "x.csv"], "x.csv"),
        (["verify", CONVOY], "convoy.yaml"),
        (["run", CONVOY], "--out"),
    ],
)
def test_wrong_words_give_a_sentence_and_exit_code_2(words: list[object], part: str, tmp_path: Path) -> None:
    done = synth(*words, cwd=tmp_path)
    assert done.code == 2
    assert part in done.err
    assert list(tmp_path.iterdir()) == []


def test_json_errors_are_one_document(tmp_path: Path) -> None:
    done = synth("check", tmp_path / "none.yaml", "--json")
    assert done.code == 2
    assert done.document["exit_code"] == 2
    assert "none.yaml" in done.document["error"]


def test_shipped_checker_notices_a_table_that_is_not_the_proven_one(convoy_run: Run, tmp_path: Path) -> None:
    shutil.copytree(convoy_run[1] / "bundle", tmp_path / "bundle")
    table = tmp_path / "bundle" / "gains.csv"

    def checked() -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-S", "check_firmware.py", "certificate.json"],
            cwd=tmp_path / "bundle",
            capture_output=True,
            text=True,
        )

    assert checked().returncode == 0
    lines = table.read_text().splitlines()
    fields = lines[1].split(",")
    fields[3] += "1"
    table.write_text("\n".join([lines[0], ",".join(fields), *lines[2:]]) + "\n")
    done = checked()
    assert done.returncode == 1
    assert "NOT THE PROVEN GAINS" in done.stdout

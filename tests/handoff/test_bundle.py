"""The folder is complete, honest about what is proven, the same every time, and never half written."""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import pytest

from synth.base.caution import CAUTIONS
from synth.base.errors import InputError
from synth.base.exact import ExactMatrix
from synth.base.files import MARK
from synth.handoff import Bundle, UnprovenTable, bundle, hand_off
from synth.handoff.scaling import binary_range, exact_peaks, scaling, sensor_peak
from synth.handoff.table import gain_rows
from synth.network.gains import Gains
from tests.build import convoy, convoy_gains
from tests.handoff.standins import FakeCertificate

FILES = {
    "README.txt",
    "SHA256SUMS",
    "certificate.json",
    "check.py",
    "datapackage.json",
    "gains.csv",
    "gains.csv-metadata.json",
    "gains.json",
    "provenance.json",
}


@pytest.fixture(autouse=True)
def _accepting_checker(monkeypatch: pytest.MonkeyPatch) -> None:
    """These certificates are stand-ins, so the real checker would refuse them; test_real.py uses real ones."""
    monkeypatch.setattr(bundle, "_still_verified", lambda path, network: None)


def write(out: Path, gains: Gains | None = None) -> Bundle:
    gains = gains or convoy_gains()
    return hand_off(convoy(), gains, FakeCertificate(convoy(), gains), out)


def manifest_holds(folder: Path) -> bool:
    """What ``sha256sum -c`` does, in a few lines of our own."""
    for line in (folder / "SHA256SUMS").read_text().splitlines():
        digest, name = line.split("  ", 1)
        if hashlib.sha256((folder / name).read_bytes()).hexdigest() != digest:
            return False
    return True


def test_the_folder_holds_every_file_and_the_manifest_lists_them(tmp_path: Path) -> None:
    made = write(tmp_path / "out")
    assert {p.name for p in (tmp_path / "out").iterdir()} - {MARK} == FILES == set(made.files)
    listed = {line.split("  ", 1)[1] for line in (tmp_path / "out/SHA256SUMS").read_text().splitlines()}
    assert listed == FILES - {"SHA256SUMS"}
    assert manifest_holds(tmp_path / "out")


@pytest.mark.parametrize("name", sorted(FILES - {"SHA256SUMS"}))
def test_a_changed_file_breaks_the_manifest(tmp_path: Path, name: str) -> None:
    write(tmp_path / "out")
    path = tmp_path / "out" / name
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(bytes(data))
    assert not manifest_holds(tmp_path / "out")


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="the program sha256sum is not installed")
def test_the_program_named_in_the_readme_agrees(tmp_path: Path) -> None:
    write(tmp_path / "out")
    command = ["sha256sum", "-c", "SHA256SUMS"]
    assert subprocess.run(command, cwd=tmp_path / "out", capture_output=True, check=False).returncode == 0
    (tmp_path / "out/gains.csv").write_text("kind\r\n")
    assert subprocess.run(command, cwd=tmp_path / "out", capture_output=True, check=False).returncode != 0


def test_equal_inputs_give_equal_bytes(tmp_path: Path) -> None:
    write(tmp_path / "one")
    write(tmp_path / "elsewhere/two")
    for name in FILES:
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "elsewhere/two" / name).read_bytes(), name


def test_no_path_of_this_machine_is_inside(tmp_path: Path) -> None:
    write(tmp_path / "out")
    for name in FILES:
        assert str(tmp_path).encode() not in (tmp_path / "out" / name).read_bytes()


def test_as_flashed_is_not_proven_and_says_why(tmp_path: Path) -> None:
    made = write(tmp_path / "out")
    document = made.as_json()
    assert document["proven"] is False
    assert document["proven_continuous"] is True
    assert "rounding" in str(document["reason"])
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert {"bundle", "files", "proven", "scaling"} <= set(document)
    assert "as flashed: no" in made.as_text()


def test_an_unproven_certificate_is_refused_and_nothing_is_written(tmp_path: Path) -> None:
    certificate = replace(FakeCertificate(convoy(), convoy_gains()), proven=False, reasons=("the radius is 1.2",))
    with pytest.raises(UnprovenTable, match=r"the radius is 1\.2") as caught:
        hand_off(convoy(), convoy_gains(), certificate, tmp_path / "out")
    assert caught.value.exit_code == 1
    assert list(tmp_path.iterdir()) == []


def test_a_certificate_about_other_gains_is_refused(tmp_path: Path) -> None:
    certificate = FakeCertificate(convoy(), convoy_gains(("-6", "-5", "-1.5000001")))
    with pytest.raises(InputError, match="other gains of hauler"):
        hand_off(convoy(), convoy_gains(), certificate, tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


def test_a_certificate_about_another_network_is_refused(tmp_path: Path) -> None:
    certificate = FakeCertificate(convoy(strength="0.6"), convoy_gains())
    with pytest.raises(InputError, match="another network"):
        hand_off(convoy(), convoy_gains(), certificate, tmp_path / "out")


def test_gains_that_do_not_fit_the_network_are_refused(tmp_path: Path) -> None:
    wrong = convoy_gains().sets[0]
    for gains, words in (
        (Gains(()), "kind hauler has no gains"),
        (Gains((replace(wrong, signals=("slot", "drive", "speed")),)), "the network has"),
        (Gains((wrong, replace(wrong, kind="tug"))), "given for tug"),
    ):
        with pytest.raises(InputError, match=words):
            hand_off(convoy(), gains, FakeCertificate(convoy(), gains), tmp_path / "out")


def test_a_write_that_fails_in_the_middle_leaves_the_old_bundle(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    write(tmp_path / "out")
    before = {p.name: p.read_bytes() for p in (tmp_path / "out").iterdir()}
    plain = Path.write_bytes

    def failing(self: Path, data: bytes) -> int:
        if self.name == "gains.json":
            raise OSError("disk full, says the test")
        return plain(self, data)

    monkeypatch.setattr(Path, "write_bytes", failing)
    with pytest.raises(OSError, match="disk full"):
        write(tmp_path / "out", convoy_gains(("-7", "-5", "-1.5")))
    assert {p.name: p.read_bytes() for p in (tmp_path / "out").iterdir()} == before
    assert [p.name for p in tmp_path.iterdir()] == ["out"]


def test_a_new_bundle_takes_the_place_of_the_old_one(tmp_path: Path) -> None:
    write(tmp_path / "out")
    (tmp_path / "out/left_over.txt").write_text("old")
    write(tmp_path / "out", convoy_gains(("-7", "-5", "-1.5")))
    assert {p.name for p in (tmp_path / "out").iterdir()} - {MARK} == FILES
    assert "hauler,demand,slot,-7,1/s^2" in (tmp_path / "out/gains.csv").read_text()


def test_the_certificate_hash_in_the_rows_is_that_of_the_file(tmp_path: Path) -> None:
    made = write(tmp_path / "out")
    digest = hashlib.sha256((tmp_path / "out/certificate.json").read_bytes()).hexdigest()
    assert {row.certificate_sha256 for row in made.rows} == {digest}


def test_the_json_table_carries_definitions_cautions_and_the_same_rows(tmp_path: Path) -> None:
    made = write(tmp_path / "out")
    document = json.loads((tmp_path / "out/gains.json").read_text())
    assert document["table"] == "localgain gains"
    assert document["rows"] == [row.as_dict() for row in made.rows]
    assert document["sign_convention"] == "u = K y"
    assert document["cautions"] == list(CAUTIONS)
    assert document["signals"]["hauler"]["sensors"]["slot"] == {"unit": "m", "states": {"slot": "1"}, "taken": {}}
    assert document["proven_as_flashed"] is False


def test_the_readme_tells_the_firmware_team_what_it_needs(tmp_path: Path) -> None:
    write(tmp_path / "out")
    text = (tmp_path / "out/README.txt").read_text()
    flat = " ".join(text.split())
    for words in (
        "python3 check.py certificate.json",
        "sha256sum -c SHA256SUMS",
        "Sign convention: u = K y",
        "Declared sample period: 0.02 s",
        "(-6)*slot",
        "Links that are up to 0.1 s late.",
        "Sampling of the controllers.",
        "does not count as proven as flashed",
        "SPDX-License-Identifier: MIT",
        *CAUTIONS,
    ):
        assert words in flat, words
    assert max(len(line) for line in text.splitlines()) <= 88


def test_provenance_is_a_statement_about_the_files(tmp_path: Path) -> None:
    write(tmp_path / "out")
    statement = json.loads((tmp_path / "out/provenance.json").read_text())
    assert statement["_type"] == "https://in-toto.io/Statement/v1"
    assert {s["name"] for s in statement["subject"]} == FILES - {"SHA256SUMS", "provenance.json"}
    for subject in statement["subject"]:
        data = (tmp_path / "out" / subject["name"]).read_bytes()
        assert subject["digest"]["sha256"] == hashlib.sha256(data).hexdigest()
    assert statement["predicate"]["network_sha256"] == convoy().hash


@pytest.mark.parametrize("K", [("-6", "-5", "-1.5"), ("-6", "-16/3", "-1.5")])
def test_frictionless_accepts_the_table_and_refuses_a_broken_one(tmp_path: Path, K: tuple[str, str, str]) -> None:
    frictionless = pytest.importorskip("frictionless")
    write(tmp_path / "out", convoy_gains(K))
    good = frictionless.validate(str(tmp_path / "out/datapackage.json"))
    assert good.valid, good.flatten(["message"])
    path = tmp_path / "out/gains.csv"
    path.write_bytes(path.read_bytes().replace(b"u = K y", b"u =-K y", 1))
    assert not frictionless.validate(str(tmp_path / "out/datapackage.json")).valid


def test_csvw_names_every_column_in_order(tmp_path: Path) -> None:
    write(tmp_path / "out")
    document = json.loads((tmp_path / "out/gains.csv-metadata.json").read_text())
    header = (tmp_path / "out/gains.csv").read_text().splitlines()[0].split(",")
    assert [c["titles"] for c in document["tableSchema"]["columns"]] == header
    assert document["@context"][0] == "http://www.w3.org/ns/csvw"


def test_scaling_gives_peaks_and_ranges_in_declared_units() -> None:
    rows = gain_rows(convoy(), convoy_gains())
    facts = scaling(convoy(), rows, exact_peaks(FakeCertificate(convoy(), convoy_gains()).document))
    assert list(facts) == ["hauler.demand.slot", "hauler.demand.speed", "hauler.demand.drive"]
    slot = facts["hauler.demand.slot"]
    assert (slot["signal_peak"], slot["signal_range"], slot["signal_unit"]) == (0.4321, 0.5, "m")
    assert (slot["actuator_peak"], slot["actuator_limit"], slot["actuator_range"]) == (2.125, 2.5, 4.0)


def test_a_sensor_that_mixes_states_and_a_link_gets_the_triangle_inequality() -> None:
    network = convoy()
    kind = replace(
        network.kinds[0],
        C=ExactMatrix.of([["2", "-1", "0"], [0, 1, 0], [0, 0, 1]]),
        N=ExactMatrix.of([["3"], [0], [0]]),
    )
    network = replace(network, kinds=(kind,))
    known = {("hauler", "state", "slot"): Fraction(1), ("hauler", "state", "speed"): Fraction(5)}
    assert sensor_peak(network, kind, "slot", known) is None  # the offered signal's peak is missing
    known[("hauler", "offer", "place")] = Fraction(7)
    # 2*1 + 1*5 + 3*(0.5*7 from the neighbour + 0.5*7 of its own)
    assert sensor_peak(network, kind, "slot", known) == 28


@pytest.mark.parametrize(
    ("peak", "found"), [("1", 1.0), ("1.0001", 2.0), ("0.25", 0.25), ("0.26", 0.5), ("3", 4.0), ("1/3", 0.5)]
)
def test_the_range_is_the_next_power_of_two(peak: str, found: float) -> None:
    assert binary_range(Fraction(peak)) == found


def test_no_range_without_a_peak() -> None:
    assert binary_range(None) is None
    assert binary_range(Fraction(0)) is None

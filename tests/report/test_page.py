"""The page opens anywhere, says the numbers of the results it was given, and says what was not run."""

from __future__ import annotations

import hashlib
import re
import subprocess
import sys
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

from synth.base.caution import CAUTIONS
from synth.handoff import bundle, hand_off
from synth.network import read
from synth.network.model import Network
from synth.report import write_report
from synth.report.html import enclosure, exactly, lower, quantity, unit_text, upper
from synth.report.page import page
from synth.report.words import equations, link_sentence
from synth.simulate.trajectory import Worst
from tests.build import M, convoy, convoy_gains, scalar_kind
from tests.handoff.standins import FakeCertificate
from tests.network.files import CONVOY
from tests.report.standins import FakeDesign, margin, run, trajectory

EMPTY = {"meta", "br", "hr", "img", "input", "link"}
SECTIONS = (
    "asked",
    "gains",
    "radius",
    "margin",
    "peaks",
    "response",
    "constants",
    "scope",
    "flashed",
    "handoff",
    "cautions",
    "provenance",
)


class Reader(HTMLParser):
    """Collects ids, tags and text, and insists that every element is closed in order."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.ids: list[str] = []
        self.tags: list[str] = []
        self.references: list[str] = []
        self.words: dict[str, str] = {}
        self.section = ""
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        values = dict(attrs)
        if values.get("id"):
            self.ids.append(values["id"] or "")
        self.references += [values[key] or "" for key in ("src", "href", "xlink:href", "action") if key in values]
        if tag == "section":
            self.section = values["id"] or ""
        if tag not in EMPTY:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag
        if tag == "section":
            self.section = ""

    def handle_data(self, data: str) -> None:
        key = "style" if self.open[-1:] == ["style"] else self.section or "header"
        self.words[key] = self.words.get(key, "") + " " + data

    def said(self, key: str) -> str:
        return " ".join(self.words[key].replace("\u00a0", " ").split())


def flashed_certificate(network: Network) -> FakeCertificate:
    """Of the firmware route, with a larger peak than the loop's (invented)."""
    made = FakeCertificate(network, convoy_gains(), route="firmware", claim="As flashed, for any number of haulers.")
    peaks = tuple(replace(peak, value=peak.value * 1.125) for peak in made.peaks)
    return replace(made, peaks=peaks, hash="f" * 64, excludes=("Overrun periods.",))


def full(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, network: Network | None = None, **changes: Any) -> str:
    monkeypatch.setattr(bundle, "_still_verified", lambda path, network: None)
    network = network or convoy()
    certificate = FakeCertificate(network, convoy_gains())
    made = hand_off(network, convoy_gains(), certificate, tmp_path / "bundle")
    results: dict[str, Any] = {
        "flashed": flashed_certificate(network),
        "design": FakeDesign(convoy_gains()),
        "certificate": certificate,
        "margin": margin(),
        "trajectory": trajectory(),
        "bundle": made,
    }
    return page(network, **{**results, **changes})


def test_every_section_is_there_once_and_the_page_is_well_formed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for text in (full(tmp_path, monkeypatch), page(convoy())):
        reader = Reader(text)
        assert [name for name in reader.ids if name in SECTIONS] == list(SECTIONS)
        assert len(reader.ids) == len(set(reader.ids))
        assert {reference[1:] for reference in reader.references} == set(SECTIONS)


def test_nothing_is_fetched_and_nothing_runs(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    text = full(tmp_path, monkeypatch)
    reader = Reader(text)
    assert "script" not in reader.tags
    assert "link" not in reader.tags
    assert "img" not in reader.tags
    assert all(reference.startswith("#") for reference in reader.references)
    assert "http" not in text.replace("http://www.w3.org/2000/svg", "").replace("http-equiv", "")
    assert not re.search(r"url\((?!#)", text)
    assert "@import" not in text
    assert "default-src 'none'" in text


def test_the_numbers_are_those_of_the_results(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    reader = Reader(full(tmp_path, monkeypatch))
    expected = {
        "header": ["Invented ore convoy", "Proven.", "any number of units", "at most 0.6124", "target is 0.9"],
        "asked": ["drive' = −2 drive + 2 demand + 2 ahead", "limit ± 2.5 m/s²", "0.5 1/s²", "0.1 s old", "0.02 s"],
        "gains": ["u = K y", "slot −6 1/s²", "speed −5 1/s", "drive −1.5 1", "Target of the design 0.9: reached"],
        "radius": ["0.6123 to 0.6124", "target 0.9", "route peak", "follow 100 %"],
        "margin": [
            "Proven up to 1.625 times",
            "limit of the class: 1.633",
            "4.187 to 4.189",
            "kept up to 1.22",
            "unlimited",
        ],
        "peaks": ["0.4321 m 1.5 m 28.9 %", "2.125 m/s² 2.5 m/s² 85 %", "no bound declared"],
        "response": [
            "6 units, 3 runs",
            "81.25 % of its bound from rest",
            "0.4875 m 0.5 m 97.5 %",
            "0.6667 : 1",
            "7.25 s",
        ],
        "constants": ["C 12.5", "0.125 1/s", "G 3.75", "w allowed 0.3437", "maximum over states and units"],
        "scope": ["Links that are up to 0.1 s late.", "Sampling of the controllers.", "for any number of haulers"],
        "flashed": ["0.4862 m 1.5 m 32.5 %", "As flashed, for any number", "Overrun periods.", "0.02 s"],
        "handoff": ["3 gains in 9 files", "continuous loop: yes", "as flashed: no", "gains.csv"],
        "cautions": list(CAUTIONS),
        "provenance": [convoy().hash, "c" * 64, "python3 check.py certificate.json", "sha256sum -c SHA256SUMS"],
    }
    for key, phrases in expected.items():
        for phrase in phrases:
            assert phrase in reader.said(key), (key, phrase, reader.said(key))


def test_each_missing_part_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    words = {
        "design": ("gains", "No design was handed"),
        "certificate": ("peaks", "No proof was attempted"),
        "flashed": ("flashed", "Nothing was proven about the code as flashed"),
        "margin": ("margin", "The margin was not computed"),
        "trajectory": ("response", "Nothing was simulated"),
        "bundle": ("handoff", "No bundle was written"),
    }
    whole = Reader(full(tmp_path, monkeypatch))
    for part, (key, phrase) in words.items():
        assert phrase not in whole.said(key)
        reader = Reader(full(tmp_path, monkeypatch, **{part: None}))
        assert phrase in reader.said(key)
        assert "not run" in reader.said("provenance")
    assert "not run" not in whole.said("provenance")


def test_without_a_certificate_nothing_is_called_proven() -> None:
    reader = Reader(page(convoy(), FakeDesign(convoy_gains())))
    assert "Nothing proven." in reader.said("header")
    assert "There is no certificate" in reader.said("provenance")


def test_a_proof_that_failed_says_why(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    failed = replace(
        FakeCertificate(convoy(), convoy_gains()),
        proven=False,
        reasons=("The radius is not below 1",),
        radius=SimpleNamespace(lower=1.25, upper=float("inf")),
        constants=None,
        validity=None,
        peaks=(),
        claim="",
    )
    reader = Reader(full(tmp_path, monkeypatch, certificate=failed, bundle=None))
    assert "Not proven. The radius is not below 1. Radius: at least 1.25." in reader.said("header")
    assert "Claim:" not in reader.said("scope")
    assert "not proven" in reader.said("constants")


def test_a_target_that_was_not_reached_is_explained(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    design = replace(FakeDesign(convoy_gains()), reached=False)
    assert "3.1 m/s^2 would do" in Reader(full(tmp_path, monkeypatch, design=design)).said("gains")


def test_gains_in_service_need_no_design(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    reader = Reader(full(tmp_path, monkeypatch, design=convoy_gains()))
    assert "slot −6 1/s²" in reader.said("gains")
    assert "no design was run" in reader.said("gains")


def test_a_share_reads_100_percent_only_at_the_bound(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    close = trajectory(worst=Worst(0.9999999, 1.0000001))
    words = Reader(full(tmp_path, monkeypatch, trajectory=close)).said("response")
    assert "99.99 % of its bound from rest and 100.1 % of its bound from an initial offset" in words


def test_violations_are_said_loudly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    reader = Reader(full(tmp_path, monkeypatch, trajectory=trajectory(violations=17)))
    assert "Bound passed. 17 samples above a proven bound." in reader.said("response")
    unchecked = Reader(full(tmp_path, monkeypatch, trajectory=trajectory(checked=False)))
    assert "no proven certificate to check" in unchecked.said("response")
    assert "No sample above" not in unchecked.said("response")


def test_an_exceeded_bound_is_said_in_words(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    certificate = FakeCertificate(convoy(), convoy_gains())
    over = tuple(replace(p, limit=2.0) if p.role == "actuator" else p for p in certificate.peaks)
    reader = Reader(full(tmp_path, monkeypatch, certificate=replace(certificate, peaks=over)))
    assert "107 % exceeded" in reader.said("peaks")


def test_many_runs_are_cut_and_counted(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    runs = tuple(run(f"number {k}", (0.1, 0.1)) for k in range(25))
    reader = Reader(full(tmp_path, monkeypatch, trajectory=trajectory(runs=runs)))
    assert "13 more are not listed" in reader.said("response")


BAD = "<script>alert('x')</script> & \"co\""


def test_names_do_no_harm(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    network = replace(convoy(), title=BAD)
    kind = replace(network.kinds[0], equations={"slot'": f"speed {BAD}"})
    network = replace(network, kinds=(kind,), links=tuple(replace(link, name=BAD) for link in network.links))
    sly = trajectory(notes=(BAD,), runs=(run(BAD, (0.3, 0.1), words=BAD),))
    text = full(tmp_path, monkeypatch, network, trajectory=sly, margin=margin(notes=(BAD,), bottleneck=((BAD, 1.0),)))
    assert "<script" not in text
    assert '& "' not in text
    reader = Reader(text)
    assert "script" not in reader.tags
    assert BAD in reader.said("header")
    assert BAD in reader.said("asked")
    assert BAD in reader.said("margin")
    assert BAD in reader.said("response")


def test_equal_results_give_equal_bytes_and_the_hash_is_that_of_the_file(tmp_path: Path) -> None:
    results = (FakeDesign(convoy_gains()), FakeCertificate(convoy(), convoy_gains()), margin(), trajectory())
    one = write_report(tmp_path / "one.html", convoy(), *results)
    two = write_report(tmp_path / "deep/two.html", convoy(), *results)
    assert (tmp_path / "one.html").read_bytes() == (tmp_path / "deep/two.html").read_bytes()
    assert one.sha256 == two.sha256 == hashlib.sha256((tmp_path / "one.html").read_bytes()).hexdigest()
    assert one.as_json()["report"] == str(tmp_path / "one.html")
    assert str(tmp_path) not in (tmp_path / "one.html").read_text()


def test_the_page_can_be_printed_on_a4() -> None:
    style = Reader(page(convoy())).words["style"]
    assert "@media print" in style
    assert "size: A4" in style


@pytest.mark.parametrize(
    ("shown", "text"),
    [
        (quantity(0.12344, "m/s^2"), "0.1234\u00a0m/s²"),
        (upper(0.12341, "m"), "0.1235\u00a0m"),
        (lower(0.12349, "m"), "0.1234\u00a0m"),
        (quantity(-2.0, "1"), "−2"),
        (enclosure(0.5, 0.5), "0.5"),
        (enclosure(0.33331, 0.33339), "0.3333 to 0.3334"),
        (unit_text("kg*m^2/s^-1"), "kg·m²/s⁻¹"),
        (exactly(convoy().links[0].strength, "1/s^2"), "0.5\u00a01/s²"),
    ],
)
def test_numbers_as_a_person_reads_them(shown: str, text: str) -> None:
    assert shown == text


def test_equations_from_matrices_and_links_in_words() -> None:
    tank = replace(scalar_kind(3), H=M([["-0.5"]]))
    assert equations(tank) == ["x' = −3 x + push + inflow + rain", "offers level = −0.5 x", "reads x"]
    link = replace(convoy().links[0], at=(2,), own_strength=0, delay=0)
    assert link_sentence(convoy(), link) == (
        "hauler.ahead receives 0.5\u00a01/s² times hauler.place of the unit at i + 2; no delay declared"
    )


@pytest.mark.parametrize("stage", ["report", "handoff"])
def test_importing_the_stage_is_light(stage: str) -> None:
    heavy = "{'numpy', 'scipy', 'cvxpy', 'networkx', 'matplotlib', 'flint'} & set(sys.modules)"
    code = f"import sys, synth.{stage}; assert not {heavy}"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_commands_that_verify_are_those_of_the_bundle(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    made = SimpleNamespace(
        rows=(),
        files=("certificate.json", "certificate_continuous.json"),
        proven=True,
        proven_continuous=True,
        reason="",
    )
    words = Reader(full(tmp_path, monkeypatch, bundle=made)).said("provenance")
    assert "python3 check_firmware.py certificate.json" in words
    assert "python3 check.py certificate_continuous.json" in words
    assert "python3 check.py certificate.json" not in words
    assert "f" * 64 in words
    assert "check_firmware" not in Reader(full(tmp_path, monkeypatch)).said("provenance")


def test_the_verdict_names_the_loop_and_the_code_as_flashed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    both = Reader(full(tmp_path, monkeypatch)).said("header")
    assert "The continuous loop" in both and "Proven as flashed too (sampled every 0.02 s)" in both
    loop = Reader(full(tmp_path, monkeypatch, flashed=None)).said("header")
    assert "Nothing is proven about the code as flashed" in loop
    failed = replace(flashed_certificate(convoy()), proven=False, reasons=("The period is too long.",))
    reader = Reader(full(tmp_path, monkeypatch, flashed=failed))
    assert "Nothing is proven about the code" in reader.said("header")
    assert "Not proven. The period is too long." in reader.said("flashed")


def test_sizes_that_mix_units_are_explained(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    words = Reader(full(tmp_path, monkeypatch)).said("constants")
    assert "slot in m, speed in m/s, drive in m/s²" in words and "by their bare numbers" in words
    kind = convoy().kinds[0]
    same = replace(convoy(), kinds=(replace(kind, states=tuple(replace(s, unit="m") for s in kind.states)),))
    assert "All states are in m" in Reader(full(tmp_path, monkeypatch, same)).said("constants")


def test_what_tolerances_became_is_told_and_not_listed_as_signals() -> None:
    reader = Reader(page(read(CONVOY.parent / "uncertain.yaml")))
    words = reader.said("asked")
    assert "a link of the unit to itself, at most 0.20202" in words
    assert "− [tolerance of lag]" in words and "in declared units: −200/99 drive" in words
    assert "taken tolerance of lag" not in words and "receives 20/99" not in words


RULES = """synth: 1
title: Invented rooms
kinds:
  room:
    states: {temp: K}
    inputs: {heat: K/s}
    takes: {flow: K/s}
    offers: {warmth: temp}
    sensors: [temp]
    controller: {integrals: [temp]}
    equations: {temp': heat + flow}
network:
  rules:
    seep: {to: room.flow, from: [room.warmth], most: 3, strength: 0.1 1/s, relative: true, weakens: true}
"""


def test_rules_and_controllers_with_states_are_told(tmp_path: Path) -> None:
    (tmp_path / "p.yaml").write_text(RULES, encoding="utf-8")
    words = Reader(page(read(tmp_path / "p.yaml"))).said("asked")
    assert "wired in any way that obeys the rules" in words and "without end" not in words
    assert "of another unit, minus the same strength times its own fresh warmth, from at most 3 units" in words
    assert "may weaken to zero" in words and "receives 0.1 1/s times" in words
    assert "temp_integral adds up temp over time" in words and "controller state temp_integral K s" in words


def test_runs_without_samples_are_not_drawn_as_zero(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    kept = trajectory()
    empty = replace(
        kept.runs[0], name="nothing stored", worst_signal=0.999, time=kept.runs[0].time[:0],
        **{g: {k: v[:0] for k, v in getattr(kept.runs[0], g).items()} for g in ("states", "offers", "actuators")},
    )  # fmt: skip
    text = full(tmp_path, monkeypatch, trajectory=replace(kept, runs=(*kept.runs, empty)))
    words = Reader(text).said("response")
    assert "in the runs" in words and "nothing stored" not in words.split("in the runs")[1].split("Curves")[0]


def test_runs_as_written_are_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    runs = (*trajectory().runs, run("as written, step, low", (0.1, 0.1)))
    words = Reader(full(tmp_path, monkeypatch, trajectory=trajectory(runs=runs))).said("response")
    assert "1 run as written: the equations of the problem file themselves" in words
    assert "as written" not in Reader(full(tmp_path, monkeypatch)).said("response")


def test_a_single_copy_that_was_not_computed_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    links = tuple(replace(link, single=None) for link in margin().links)
    words = Reader(full(tmp_path, monkeypatch, margin=margin(links=links))).said("margin")
    assert "1.625 not computed" in words

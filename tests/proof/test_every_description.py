"""Certificates of every description: proven, verified by the joined checker alone, true by a second evaluation."""

from __future__ import annotations

import json
import random
import subprocess
import sys
from dataclasses import replace
from fractions import Fraction
from functools import cache
from pathlib import Path

import jsonschema
import pytest
from click.testing import CliRunner

from synth.base.exact import ExactMatrix
from synth.cli import verbs
from synth.gain import network_radius
from synth.handoff.table import csv_text, gain_rows
from synth.network import read
from synth.network.gains import Gains, gain_set
from synth.network.layout import Edge, Rule
from synth.network.model import Link, Network
from synth.proof import Certificate, check, prove, verify
from synth.proof.joined import checker_text
from tests.build import M, scalar_kind
from tests.proof.test_tamper import attack, attacks, changed, report
from tests.proof.truth import is_true, parts_of, peak_numbers, storage_numbers
from tests.proof.worlds import WORLDS, basin, line, members, rules, small_gains, tie

ROUTES = ("peak", "storage")
SCHEMA = Path(__file__).parents[2] / "docs" / "theory" / "certificate.schema.json"
EXAMPLES = Path(__file__).parents[1] / "network" / "examples"
SAMPLED = 9  # changes per certificate in the quick run


@cache
def proven(name: str, route: str) -> Certificate:
    network = WORLDS[name]()
    return prove(network, small_gains(network), route=route)


@pytest.mark.parametrize(
    ("name", "route"), [(name, route) for name in WORLDS for route in ROUTES if name != "half line" or route == "peak"]
)
def test_proven_verified_and_true(name: str, route: str, tmp_path: Path) -> None:
    certificate = proven(name, route)
    assert certificate.proven, certificate.reasons
    path = certificate.save(tmp_path / "certificate.json")
    assert verify(path, WORLDS[name]()).as_json() == {"verified": True, "reasons": []}
    assert is_true(certificate.document)


def test_the_documented_shape_is_that_of_the_file() -> None:
    schema = json.loads(SCHEMA.read_text(encoding="utf-8"))
    for name in WORLDS:
        document = proven(name, "storage").document
        jsonschema.validate(document, schema)
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate(document | {"more": 1}, schema)


def test_the_example_that_is_followed_by_hand() -> None:
    """docs/theory/certificate.md: the two-state unit with one link, and under a rule of two links that may weaken."""
    unit = replace(
        basin("unit"), A=M([[0, 1], [0, 0]]), B=M([[0], [1]]), D=M([[0], [1]]), E=M([[0], [1]]), H=M([[1, 0]]),
        inputs=(replace(basin().inputs[0], limit=None),),
        states=tuple(replace(s, band=None) for s in basin().states),
    )  # fmt: skip
    link = Link("tie", "unit", "level", (-1,), "unit", "inflow", Fraction(1))
    gains = Gains((gain_set(unit, M([[-2, -3]])),))
    found = prove(Network("Invented", (unit,), (link,)), gains, route="peak")
    assert found.radius.upper == pytest.approx(0.5, rel=1e-6) and found.proven
    assert max(p.value for p in found.peaks if p.signal == "depth") == pytest.approx(0.1, rel=1e-6)  # peak 0.1 declared
    g = Fraction(1, 2)
    shared = replace(link, at=(), strength=g, own_strength=g, weakens=True, choice="two")
    ruled = Network(
        "Invented", (unit,), (shared,), dimension=0, description="rules", rules=(Rule("two", "unit", "inflow", 2),)
    )
    found = prove(ruled, gains, route="peak")
    assert found.radius.upper == pytest.approx(0.20003, abs=1e-5) and found.proven


@pytest.mark.parametrize("name", WORLDS)
def test_the_joined_file_alone_gives_the_same_verdicts(name: str, tmp_path: Path) -> None:
    (tmp_path / "check.py").write_text(checker_text(), encoding="utf-8")
    document = proven(name, "storage").document
    wrong = changed(document, ("constants", "G"), "0.1")
    wrong["claim"], wrong["covers"], wrong["excludes"] = check.sentences(wrong)
    del wrong["hash"]
    wrong["hash"] = check.digest(wrong)
    for number, one in enumerate((document, wrong)):
        (tmp_path / "certificate.json").write_text(json.dumps(one), encoding="utf-8")
        command = [sys.executable, "-I", "-S", "check.py", "certificate.json"]
        run = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
        assert run.returncode == number, run.stdout + run.stderr
        reasons = check.check_document(one)
        assert bool(reasons) == bool(number)
        assert "\n".join(reasons) in run.stdout


@pytest.mark.parametrize("name", WORLDS)
def test_the_radius_is_that_of_the_operator_by_two_programs(name: str) -> None:
    """The enclosure of synth.gain and the certificate's must meet: both contain the radius of one operator."""
    network, certificate = WORLDS[name](), proven(name, "peak")
    known = network_radius(network, small_gains(network), width=1e-4)
    assert certificate.radius.lower <= known.upper * (1 + 1e-6)
    assert known.lower <= certificate.radius.upper * (1 + 1e-6)
    assert certificate.radius.upper <= max(known.upper, 1e-6) * 1.06
    exact = max(peak_numbers(certificate.document, 0.0, part)["radius"] for part in parts_of(certificate.document))
    assert exact <= certificate.radius.upper * (1 + 2e-4) + 1e-9


@pytest.mark.parametrize(
    ("name", "route"), [("rules", "peak"), ("members", "storage"), ("field", "storage"), ("two edges", "storage")]
)
def test_changed_leaves_are_refused_or_true(name: str, route: str) -> None:
    document = proven(name, route).document
    everything = attacks(document)
    for path, value in random.Random(1).sample(everything, 60):
        assert check.check_document(changed(document, path, value)), f"a changed {path} must not pass the hash"
    told = [a for a in everything if a[0][0] in ("radius", "constants", "peaks", "validity", "windows", "claim")]
    meant = [a for a in everything if a[0][0] == "model" and a[0][1] in ("links", "rules", "members", "edges", "cell")]
    count = 3 if name == "two edges" else SAMPLED
    sample = [x for part in (everything, told, meant) for x in random.Random(2).sample(part, min(count, len(part)))]
    refused, accepted = attack(document, sample)
    report(f"{name}, {route}", refused, accepted)
    assert refused > 0.6 * len(sample)


@pytest.mark.long
@pytest.mark.parametrize("route", ROUTES)
@pytest.mark.parametrize("name", WORLDS)
def test_every_changed_leaf_is_refused_or_true(name: str, route: str) -> None:
    document = proven(name, route).document
    everything = attacks(document)
    refused, accepted = attack(document, everything)
    report(f"{name}, {route}, every leaf", refused, accepted)
    assert refused > 0.75 * len(everything)


def alone(links: tuple[Link, ...], **more: object) -> Network:
    return Network("Invented", (scalar_kind(1),), links, **more)  # type: ignore[arg-type]


def nothing(network: Network) -> Gains:
    """No feedback at all."""
    return Gains(tuple(gain_set(k, ExactMatrix.zeros(len(k.inputs), len(k.sensors))) for k in network.kinds))


def test_trap_a_late_difference_is_not_folded() -> None:
    """x_i' = -x_i/10 + (x_{i-1} - x_i)(t - d) grows at d = 0.8; folding its own part would give the radius 0.909."""
    late = tie("tank", "tank", (-1,), "1", delay=Fraction(4, 5))
    own = replace(late, at=(0,), strength=Fraction(-1), own_part=True)
    network = replace(alone((late, own)), kinds=(scalar_kind("0.1"),))
    for route in ROUTES:
        found = prove(network, nothing(network), route=route)
        assert not found.proven and found.radius.upper >= 19.9


def test_trap_two_links_with_different_ages_add_up() -> None:
    """z' = -z + 5 z_j(t) - 4.5 z_j(t - d): 9.5, not 0.5."""
    links = (tie("tank", "tank", (-1,), "5"), tie("tank", "tank", (-1,), "-4.5", delay=Fraction(3, 10)))
    for route in ROUTES:
        found = prove(alone(links), nothing(alone(links)), route=route)
        assert not found.proven and 9.4 < found.radius.upper < 9.6


def swinging(m: str, damping: str = "0.1") -> Network:
    """Unit a: x'' + 0.1 x' + x = 0.5 m(t) (z_b - x), beside b: y' = -y + 0.05 z_a; ``m``: 'weakens', '0' or '1'."""
    a = replace(
        basin("swing"), A=M([[0, 1], [-1, -Fraction(damping)]]), B=ExactMatrix.zeros(2, 0), D=M([[0], [1]]),
        E=M([[0], [1]]), H=M([[1, 0]]), C=ExactMatrix.zeros(0, 2), N=ExactMatrix.zeros(0, 1), inputs=(), sensors=(),
        states=tuple(replace(s, band=None) for s in basin().states),
    )  # fmt: skip
    g = Fraction(1, 2) * (0 if m == "0" else 1)
    pull = replace(tie("tank", "swing", (0,), "0.5"), strength=g, own_strength=g, weakens=m == "weakens")
    return Network("Invented swing", (a, scalar_kind(1)), (pull, tie("swing", "tank", (0,), "0.05")))


def test_trap_freezing_a_link_that_weakens_proves_nothing() -> None:
    """Frozen at either end the unit is well inside; with m(t) free the row is the maximum, not either end."""
    found = prove(swinging("weakens"), nothing(swinging("weakens")), route="storage")
    assert not found.proven
    upper = {m: prove(swinging(m, "2"), nothing(swinging(m, "2")), route="peak").radius.upper for m in ("0", "1")}
    free = prove(swinging("weakens", "2"), nothing(swinging("weakens", "2")), route="peak")
    assert upper["0"] < 1e-5 and upper["1"] < 0.2 and free.radius.lower > 0.3 and is_true(free.document)


@pytest.mark.long
def test_trap_the_lightly_damped_swing_in_full() -> None:
    """Frozen at m = 0 or 1 it is proven; switched it grows 34-fold, and its row gives 5.2."""
    for m in ("0", "1"):
        assert prove(swinging(m), nothing(swinging(m)), route="peak").proven
    found = prove(swinging("weakens"), nothing(swinging("weakens")), route="peak")
    assert not found.proven and 5.1 < found.radius.upper < 5.3


def test_trap_sections_of_a_half_line_are_not_enough() -> None:
    """Forward 0.9, back 0.2: sections of radius 0.8485 and less, but the half line has 1.1."""
    links = (tie("tank", "tank", (-1,), "0.9"), tie("tank", "tank", (1,), "0.2"))
    network = alone(links, description="edge pattern", edges=(Edge("first", ()),), cell=("tank",))
    for route in ROUTES:
        found = prove(network, nothing(network), route=route)
        assert not found.proven and found.radius.lower > 1.099
    weaker = replace(network, links=(replace(links[0], strength=Fraction("0.7")), links[1]))
    found = prove(weaker, nothing(network), route="peak", target="0.95")
    assert found.proven and found.radius.upper == pytest.approx(0.9, rel=2e-3)


def test_trap_members_say_nothing_about_size() -> None:
    """A one-way string with links of gain 2 has radius 0; its certificate is about these units only."""

    def absolute(network: Network) -> Network:
        plain = (replace(x, own_strength=Fraction(0), weakens=False) for x in network.links)
        return replace(network, links=tuple(plain))

    network = absolute(members(5, "2"))
    certificate = prove(network, small_gains(network), route="peak")
    assert certificate.proven and certificate.radius.upper < 1e-5
    assert certificate.claim.startswith("For these 5 units with these links, and for no larger or other network:")
    assert not any("any number" in text for text in (certificate.claim, *certificate.covers))
    assert any("longer or larger" in text for text in certificate.excludes)
    ring = absolute(members(6, "2", ring=True))
    assert not prove(ring, small_gains(ring), route="peak").proven


def test_what_each_description_claims() -> None:
    begins = {
        "field": "For any number of units:",
        "rules": "For every wiring that the rules allow, with any number of units, rewired at any time:",
        "members": "For these 5 units with these links, and for no larger or other network:",
        "half line": "For the half line with this first edge, without end to the other side:",
        "two edges": "For every line of 6 or more cells between these two edges, and for both half lines:",
    }
    for name, text in begins.items():
        certificate = proven(name, "peak")
        assert certificate.claim.startswith(text), certificate.claim
    words = {name: " ".join((*proven(name, "peak").covers, *proven(name, "peak").excludes)) for name in begins}
    assert "starts inside the bound" in words["rules"] and "at most 2 links at a time" in words["rules"]
    assert "weakened, broken, restored" in words["field"] and "ring in any of its directions" in words["field"]
    assert "first basin (basin) stands at place 0 instead of tank" in words["half line"]
    assert "no corners" not in words["half line"]


def test_what_the_checker_refuses() -> None:
    """One valid certificate each, and one thing broken in it."""

    def refused(document: dict, *steps: tuple) -> list[str]:
        for path, value in steps:
            document = changed(document, path, value)
        document["network_hash"] = document["provenance"]["network_hash"] = check.digest(document["model"])
        document["claim"], document["covers"], document["excludes"] = check.sentences(document)
        document.pop("hash")
        document["hash"] = check.digest(document)
        return check.check_document(document)

    edges = proven("two edges", "storage").document
    assert refused(edges) == []
    assert "window" in refused(edges, (("windows", "first"), 3))[0]
    assert "least" in refused(edges, (("windows", "least"), 5))[0]
    assert "another unit" in refused(edges, (("model", "kinds", 1, "offers", 0, "in"), "cm"))[0]
    assert refused(edges, (("model", "cell"), ["tank", "basin"]))
    listed = proven("members", "storage").document
    assert refused(listed) == []
    assert "other kinds" in refused(listed, (("model", "members", "links", 0), [0, 0, 0]))[0]
    allowed = proven("rules", "storage").document
    assert refused(allowed) == []
    own = next(i for i, x in enumerate(allowed["model"]["links"]) if "weakens" not in x)
    assert refused(allowed, (("model", "links", own, "own_strength"), "1/10"))
    assert refused(allowed, (("model", "links", own, "choice"), "nowhere"))
    folded = next(i for i, e in enumerate(allowed["evidence"]) if e["own"])
    assert "own parts" in refused(allowed, (("evidence", folded, "own"), []))[0]


def test_rules_take_the_worst_of_their_sources() -> None:
    """Tanks that may hear themselves or a basin twice: absolute rows are n g max, whichever source is largest."""
    network = rules("0.5", relative=False)
    certificate = prove(network, small_gains(network), route="peak")
    rows = peak_numbers(certificate.document, 0.0)
    assert certificate.proven
    assert certificate.radius.upper == pytest.approx(rows["radius"], rel=1e-4)


def test_storage_numbers_agree_with_a_second_evaluation() -> None:
    for name in ("field", "rules", "members"):
        certificate = proven(name, "storage")
        found = storage_numbers(certificate.document)
        peaks = [float(v) for k in sorted(found["base"]) for v in found["base"][k]]
        assert [peak.value for peak in certificate.peaks] == pytest.approx(peaks, rel=1e-3)


def test_short_lines_are_covered_down_to_the_stated_length() -> None:
    network = line(("first", "last"))
    document = proven("two edges", "peak").document
    windows = document["windows"]
    assert windows["least"] == 6 and check.read_system(document).stations
    counted = {s.name.split(":")[0] for s in check.read_system(document).stations if s.name.startswith("line of ")}
    longest = windows["first"] + windows["last"] + 2
    assert counted == {f"line of {n}" for n in range(6, longest + 2 * (check_reach(network) - 1))}


def check_reach(network: Network) -> int:
    return max(abs(link.at[0]) for link in network.links)


@pytest.mark.parametrize("name", ["rules", "edge"])
def test_the_verbs_take_every_description(name: str, tmp_path: Path) -> None:
    """`synth prove` with gains in service, `synth verify`, and `--for` with this and another file."""
    file = EXAMPLES / f"{name}.yaml"
    network = read(file)
    rows = {kind.name: [["-0.5", *["0"] * (len(kind.sensors) - 1)]] * len(kind.inputs) for kind in network.kinds}
    gains = Gains(tuple(gain_set(kind, M(rows[kind.name])) for kind in network.kinds))
    (tmp_path / "gains.csv").write_text(csv_text(gain_rows(network, gains)), encoding="utf-8")
    out = tmp_path / "out"
    run = CliRunner().invoke(
        verbs, ["prove", str(file), "--gains", str(tmp_path / "gains.csv"), "--out", str(out), "--json", "--quiet"]
    )
    assert run.exit_code == 0, run.output
    document = json.loads(run.output)
    assert document["proven"] and set(document) >= {
        "proven", "route", "claim", "radius", "constants", "peaks", "validity", "covers", "excludes", "certificate",
    }  # fmt: skip
    path = str(out / "certificate.json")
    for more, code in (([], 0), (["--for", str(file)], 0), (["--for", str(EXAMPLES / "members.yaml")], 1)):
        again = CliRunner().invoke(verbs, ["verify", path, "--json", "--quiet", *more])
        assert again.exit_code == code, again.output
        assert json.loads(again.output)["verified"] == (not code)

"""Admitting a unit: closed forms of scalar tanks, the truth of a yes, reasons for a no, the verb (data invented)."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import pytest

from synth.base.errors import InputError
from synth.gain.assembly import assemble
from synth.local import Admission, admit
from synth.network.gains import Gains, GainSet, gain_set
from synth.network.model import Goal, Link, Network
from synth.proof import prove
from tests.build import M, convoy, convoy_gains, hauler, scalar_kind
from tests.local.thermal import grid, thermal


def tanks() -> tuple[Network, Gains]:
    """Tanks in a row, p = 1/(1 + 1) with K = -1; each hears the one before with strength 1: radius 1/2."""
    kind = scalar_kind(1)
    link = Link("flow", "tank", "level", (-1,), "tank", "inflow", Fraction(1))
    return Network("Invented tanks", (kind,), (link,), Goal(Fraction(9, 10))), Gains((gain_set(kind, M([[-1]])),))


def with_pond(there: str, back: str, a: str = "2", **changes: Any) -> Network:
    """A pond x' = -a x + ... that hears a tank with strength ``there`` and answers with strength ``back``."""
    base, _ = tanks()
    pond = replace(scalar_kind(a, "pond"), **changes)
    links = (
        Link("in", "tank", "level", (0,), "pond", "inflow", Fraction(there)),
        Link("out", "pond", "level", (0,), "tank", "inflow", Fraction(back)),
    )
    return replace(base, kinds=(*base.kinds, pond), links=(*base.links, *links))


def pond_gain(network: Network, value: str) -> GainSet:
    return gain_set(network.kind("pond"), M([[value]]))


@pytest.mark.parametrize(("there", "back", "gain"), [("1", "0.5", "-1"), ("0.3", "0.8", "0"), ("2", "0.9", "-3")])
def test_the_slack_is_the_closed_form(there: str, back: str, gain: str) -> None:
    """Rows q g1 s_t = mu s_p and 1/2 s_t + 1/2 g2 s_p = mu s_t: mu = (1/2 + sqrt(1/4 + 2 g2 q g1)) / 2."""
    base, gains = tanks()
    after = with_pond(there, back)
    found = admit(base, gains, after, candidate=pond_gain(after, gain))
    q = 1 / (2 - float(gain))
    mu = (0.5 + (0.25 + 2 * float(back) * q * float(there)) ** 0.5) / 2
    assert found.slack == pytest.approx(1 - mu / 0.9, abs=1e-5)
    assert found.admitted == (mu < 0.9) and found.rows == ("tank.level", "pond.level")
    everybody = Gains((gains["tank"], pond_gain(after, gain)))
    radius = assemble(after, everybody).radius()
    assert radius.upper <= 0.9 or not found.admitted


def test_a_no_names_the_listener_and_a_yes_is_true_of_the_whole() -> None:
    base, gains = tanks()
    after = with_pond("2", "3")
    refused = admit(base, gains, after, candidate=pond_gain(after, "-1"))
    assert not refused.admitted and refused.slack < 0
    assert any(reason.startswith("tank.level would be") for reason in refused.reasons)
    found = admit(base, gains, after)
    assert found.admitted and not found.in_service and found.gains is not None and found.unit == "pond"
    everybody = Gains((gains["tank"], found.gains))
    whole = assemble(after, everybody)
    sizes = [found.sizes[f"{kind}.level"] for kind in ("tank", "pond")]
    assert whole.upper.upper_bound(sizes) <= 0.9 and whole.radius().upper <= 0.9
    assert found.slack > 0 and not found.reasons


def test_promised_sizes_decide() -> None:
    """The same pond: admitted where tanks were promised generously against each other, and judged by those sizes."""
    base, gains = tanks()
    after = with_pond("1", "0.5")
    candidate = pond_gain(after, "-1")
    plain = admit(base, gains, after, candidate=candidate)
    scaled = admit(base, gains, after, promised={"tank.level": Fraction(7)}, candidate=candidate)
    assert scaled.slack == pytest.approx(plain.slack, abs=1e-9)  # sizes may be counted in any unit
    assert scaled.sizes["pond.level"] == pytest.approx(7 * plain.sizes["pond.level"], rel=1e-6)
    with pytest.raises(InputError, match=r"no size is promised for tank\.level"):
        admit(base, gains, after, promised={"pond.level": Fraction(1)}, candidate=candidate)
    with pytest.raises(InputError, match="above zero"):
        admit(base, gains, after, promised={"tank.level": Fraction(0)}, candidate=candidate)


def test_an_unstable_candidate_and_a_runaway_loop_are_refused() -> None:
    base, gains = tanks()
    after = with_pond("1", "0.5", a="-1")
    unstable = admit(base, gains, after, candidate=pond_gain(after, "0"))
    assert not unstable.admitted and "not" in unstable.reasons[0] and unstable.as_json()["slack"] == "-inf"
    itself = replace(
        with_pond("1", "0.1"),
        links=(*with_pond("1", "0.1").links, Link("own", "pond", "level", (1,), "pond", "inflow", Fraction(5))),
    )
    looped = admit(base, gains, itself, candidate=pond_gain(itself, "0"))
    assert not looped.admitted and looped.slack < 0


def test_a_changed_kind_keeps_its_gains_where_they_pass() -> None:
    base, gains = tanks()
    worn = replace(base, kinds=(scalar_kind("0.9"),))
    found = admit(base, gains, worn)
    assert found.admitted and found.in_service and found.gains == gains["tank"]
    assert found.slack == pytest.approx(1 - (1 / 1.9) / 0.9, abs=1e-5)
    broken = replace(base, kinds=(scalar_kind("-0.5"),))  # with K = -1 the radius would be 2
    again = admit(base, gains, broken)
    assert again.admitted and not again.in_service and again.gains is not None
    assert again.gains.K[0, 0] < -Fraction(3, 2)


def test_a_newcomer_of_a_group_carries_its_gains() -> None:
    base, gains = tanks()
    after = with_pond("1", "0.5", group="tank")
    found = admit(base, gains, after)
    assert found.admitted and found.in_service and found.gains is not None and found.gains.K == gains["tank"].K
    worse = with_pond("1", "0.5", a="-0.9", group="tank")  # its own gains would do, the group's do not
    refused = admit(base, gains, worse)
    assert not refused.admitted and refused.in_service and refused.gains is not None
    assert admit(base, gains, with_pond("1", "0.5", a="-0.9")).admitted


def test_only_links_change() -> None:
    base, gains = tanks()
    for strength, admitted in (("0.7", True), ("0.9", False)):
        link = Link("more", "tank", "level", (1,), "tank", "inflow", Fraction(strength))
        found = admit(base, gains, replace(base, links=(*base.links, link)))
        assert found.admitted == admitted and found.unit == "" and found.gains is None
        assert found.slack == pytest.approx(1 - (1 + float(strength)) / 2 / 0.9, abs=1e-5)


def test_limits_of_neighbours_and_gain_bounds_count() -> None:
    """The pond passes the rows, but what it sends asks a tank for more than its actuator has."""
    base, gains = tanks()
    limit = replace(base.kinds[0].inputs[0], limit=Fraction("1.1"))
    base = replace(base, kinds=(replace(base.kinds[0], inputs=(limit,)),))
    after = with_pond("0.1", "0.5")
    after = replace(after, kinds=(*base.kinds, after.kinds[1]))
    quiet = replace(after, links=after.links[:2])
    assert admit(base, gains, quiet, candidate=pond_gain(after, "-1")).admitted
    found = admit(base, gains, after, candidate=pond_gain(after, "-1"))
    assert not found.admitted and "tank.push may reach" in found.reasons[0] and found.slack > 0
    goal = replace(base.goal, gain_bounds={"pond": {"push": {"x": Fraction(1, 2)}}})
    bounded = admit(base, gains, replace(quiet, goal=goal), candidate=pond_gain(after, "-1"))
    assert not bounded.admitted and "exceeds its bound 0.5" in bounded.reasons[0]


def test_members_are_tested_where_they_change() -> None:
    """One more zone at the corner of a grid: only its own row and its neighbour's are looked at."""
    network = thermal(grid(3), 9, kinds=1)
    gains = Gains((gain_set(network.kinds[0], M([["-0.1", 0]])),))
    members = network.members
    assert members is not None
    import numpy as np

    number = np.array([9, 8], dtype=np.int32)
    grown = replace(
        members, names=(*members.names, "annex"), kind=np.append(members.kind, np.int32(0)),
        to=np.append(members.to, number), source=np.append(members.source, number[::-1]),
        form=np.append(members.form, np.zeros(2, dtype=np.int32)),
    )  # fmt: skip
    after = replace(network, members=grown)
    found = admit(network, gains, after)
    assert set(found.rows) == {"z8.warmth", "annex.warmth"}
    assert found.admitted and found.sizes["annex.warmth"] > 0
    whole = assemble(after, gains)
    sizes = [found.sizes[".".join(outlet)] for outlet in whole.outlets]
    assert whole.upper.upper_bound(sizes) <= 0.9


def test_networks_that_do_not_fit_are_refused() -> None:
    base, gains = tanks()
    two = replace(with_pond("1", "1"), kinds=(scalar_kind("3"), scalar_kind("2", "pond")))
    with pytest.raises(InputError, match="tank, pond are new or changed; admit one kind at a time"):
        admit(base, gains, two)
    with pytest.raises(InputError, match="tank is missing"):
        admit(base, gains, replace(base, kinds=(scalar_kind(2, "pond"),), links=()))
    with pytest.raises(InputError, match="given alike"):
        admit(base, gains, thermal(grid(2), 4))
    with pytest.raises(InputError, match="between 0 and 1"):
        admit(base, gains, base, target=1)
    found = admit(base, gains, with_pond("1", "1"), target="0.4")  # type: ignore[arg-type]
    assert not found.admitted and "in service does not keep the target" in found.reasons[0]


@pytest.mark.long
def test_a_heavy_hauler_joins_the_convoy() -> None:
    base, gains = convoy(), convoy_gains()
    heavy = replace(hauler("0.9", "1.6", "0.2"), name="heavy")
    g = Fraction(1, 2)
    links = (
        *base.links,
        Link("follow", "hauler", "place", (0,), "heavy", "ahead", g, g),
        Link("behind", "heavy", "place", (-1,), "hauler", "ahead", g / 5),
    )
    found: Admission = admit(base, gains, replace(base, kinds=(*base.kinds, heavy), links=links))
    assert found.admitted and found.gains is not None
    assert "Admitted" in found.as_text() and found.as_json()["cautions"]


def _tank(rate: str) -> dict[str, Any]:
    return {
        "states": {"x": "m"},
        "inputs": {"push": "m/s"},
        "disturbances": {"rain": {"in": "m/s", "peak": 1}},
        "takes": {"inflow": "m/s"},
        "offers": {"level": "x"},
        "sensors": ["x"],
        "parameters": {"rate": rate},
        "equations": {"x'": "push + inflow + rain - rate*x"},
    }


def _problem(back: str | None) -> dict[str, Any]:
    """Tanks in a row; with ``back`` a pond beside each, which hears its tank and answers with that strength."""
    links = [{"name": "flow", "from": "tank.level", "at": -1, "to": "tank.inflow", "strength": "1 1/s"}]
    kinds = {"tank": _tank("1 1/s")}
    if back is not None:
        kinds["pond"] = _tank("2 1/s")
        links += [
            {"name": "feed", "from": "tank.level", "at": 0, "to": "pond.inflow", "strength": "1 1/s"},
            {"name": "back", "from": "pond.level", "at": 0, "to": "tank.inflow", "strength": back},
        ]
    return {
        "synth": 1, "kinds": kinds, "network": {"pattern": {"dimension": 1, "links": links}},
        "design": {"target": 0.9, "fastest": "4 1/s"},
    }  # fmt: skip


def test_the_verb_answers_by_exit_code_and_writes_the_table(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """0 admitted, 1 not, 2 wrong input; --json prints the contract's keys."""
    from synth.cli import main
    from synth.handoff.table import csv_text, gain_rows
    from synth.network import read, read_gains

    def run(*words: object) -> tuple[int, str]:
        monkeypatch.setattr("sys.argv", ["synth", "admit", *map(str, words)])
        with pytest.raises(SystemExit) as left:
            main()
        return int(str(left.value.code)), capsys.readouterr().out

    files = {}
    for name, back in (("base", None), ("good", "0.5 1/s"), ("bad", "5000 1/s")):
        files[name] = tmp_path / f"{name}.yaml"
        files[name].write_text(json.dumps(_problem(back)), encoding="utf-8")
    network = read(files["base"])
    table = tmp_path / "service.csv"
    gains = Gains((gain_set(network.kind("tank"), M([[-1]])),))
    table.write_text(csv_text(gain_rows(network, gains)), encoding="utf-8")
    certificate = tmp_path / "certificate.json"
    proven = prove(network, gains)
    proven.save(certificate)
    out = tmp_path / "out"
    common = (files["base"], "--gains", table, "--quiet", "--joining")
    code, text = run(*common, files["good"], "--out", out, "--json", "--certificate", certificate)
    document = json.loads(text)
    assert code == 0, text
    assert document["admitted"] and document["reasons"] == [] and 0 < document["slack"] < 1
    assert document["gains"]["pond"]["actuators"] == ["push"] and document["cautions"]
    again = read_gains(out / "gains.csv", read(files["good"]))
    assert again["tank"] == gains["tank"] and (out / "admit.json").exists()
    code, text = run(*common, files["bad"])
    assert code == 1 and "Not admitted" in text and "Cautions" in text
    assert run(*common, tmp_path / "missing.yaml")[0] == 2
    assert run(*common, files["good"], "--certificate", table)[0] == 2

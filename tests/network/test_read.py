"""The reader: the convoy file, YAML 1.2 scalars, mappings, units inside, and every refusal that has its own rule."""

from __future__ import annotations

import os
from fractions import Fraction
from pathlib import Path

import pytest
import yaml

from synth.base.errors import InputError
from synth.network import read
from synth.network.model import Goal
from synth.network.yaml_map import DEEPEST, Problems, Scalar, Table, parse
from tests.build import convoy
from tests.network.files import CONVOY, GAP_ONLY, convoy_text, read_text, refusal


def test_the_convoy_file_is_the_convoy() -> None:
    """Two independent ways to the same network: the file, and the matrices written by hand in tests/build.py."""
    network = read(CONVOY)
    assert network.hash == convoy().hash
    assert network.goal == Goal(Fraction("0.6"), Fraction("0.4"), Fraction("1.3"), Fraction("0.02"))
    assert (network.simulation.units, network.simulation.seconds) == (50, 60)
    assert network.kinds[0].equations["drive'"] == "(demand + ahead - drive)/lag"
    assert read(GAP_ONLY).classes() == ("follow", "ranging")


def test_a_mapping_means_what_the_file_says() -> None:
    """Floats of a mapping count as decimals, so a loaded file gives the same network."""
    assert read(yaml.safe_load(CONVOY.read_text(encoding="utf-8"))).hash == convoy().hash


def test_names_of_a_mapping_that_is_wrong_are_said_without_lines() -> None:
    with pytest.raises(InputError, match=r"^kinds\.hauler: unknown key 'sensers' \(did you mean 'sensors'\?\)"):
        read(yaml.safe_load(convoy_text(("sensors:", "sensers:"))))
    looped: dict[str, object] = {"synth": 1}
    looped["kinds"] = looped
    for strange in (looped, {"synth": float("nan")}, {"synth": object()}, {1: {2: 3}}, {}):
        with pytest.raises(InputError):
            read(strange)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1e-3", Fraction(1, 1000)),
        ("yes", "yes"),
        ("no", "no"),
        ("on", "on"),
        ("off", "off"),
        ("12:30", "12:30"),
        ("0o17", Fraction(15)),
        ("017", Fraction(17)),
        ("0x1F", Fraction(31)),
        ("true", True),
        ("False", False),
        ("~", None),
        ("null", None),
        (".5", Fraction(1, 2)),
        ("+1.", Fraction(1)),
        ("1_000", "1_000"),
        ("0.1", Fraction(1, 10)),
        ("2026-01-01", "2026-01-01"),
        ("'1'", "1"),
        ('"true"', "true"),
        ("0b1", "0b1"),
        ("=", "="),
    ],
)
def test_scalars_of_the_core_schema(text: str, value: object) -> None:
    """YAML 1.2.2, section 10.3.2 (tag resolution of the core schema)."""
    problems = Problems()
    root = parse(f"key: {text}\n", "f", problems)
    assert isinstance(root, Table) and not problems.found
    node = root.entries["key"].value
    assert isinstance(node, Scalar) and node.value == value and type(node.value) is type(value)


def test_places_point_into_expressions_over_several_lines(tmp_path: Path) -> None:
    """The character of a wrong name is found in plain, quoted and block text, also after umlauts."""
    plain = refusal(convoy_text(("drive + slope", "drive\n        + slop")), tmp_path)
    assert "problem.yaml:18:11:" in plain
    quoted = refusal(convoy_text(("speed': drive + slope", "speed': 'drive +   slop'")), tmp_path)
    assert "problem.yaml:17:26:" in quoted
    block = refusal(convoy_text(("speed': drive + slope", "speed': >\n        drive +\n        slop")), tmp_path)
    assert "problem.yaml:19:9:" in block
    umlaut = refusal(convoy_text(("drive + slope", "ä + slope")), tmp_path)
    assert "problem.yaml:17:15:" in umlaut and "unknown name 'ä'" in umlaut


@pytest.mark.parametrize("before", ["\ufeff", "%YAML 1.2\n---\n", "---\n"])
def test_harmless_beginnings_are_accepted(before: str, tmp_path: Path) -> None:
    assert read_text(before + convoy_text(), tmp_path).hash == convoy().hash
    assert read_text((before + convoy_text()).replace("\n", "\r\n"), tmp_path).hash == convoy().hash


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("a: &x 1\nb: *x\n", "anchors"),
        ("a: *x\n", "anchors"),
        ("a: !!python/none x\n", "tag"),
        ("--- 1\n--- 2\n", "second document"),
        ("%YAML 1.1\n---\na: 1\n", "YAML 1.2"),
        ("[" * 60, "nesting"),
        ("a:\n" + "".join(" " * k + "- \n" for k in range(1, 60)), "nesting"),
        ("? [a]\n: b\n", "a key must be a name"),
        ("", "empty"),
        ("a: \x01\n", "not valid YAML"),
        ("- 1\n", "a mapping is expected"),
        ("a: b: c\n", "not valid YAML"),
        ("synth: 2\n", "not known"),
        ("{{a: 1}: 2}\n", "a key must be"),
        ("a: .nan\n", "not a finite"),
    ],
)
def test_forms_of_yaml_that_are_refused(text: str, said: str, tmp_path: Path) -> None:
    message = refusal(text, tmp_path)
    assert said in message and message.startswith("problem.yaml:")


def test_nesting_up_to_the_bound_is_read() -> None:
    problems = Problems()
    assert parse("[" * DEEPEST + "]" * DEEPEST, "f", problems) is not None
    assert not problems.found


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    large = tmp_path / "large.yaml"
    large.write_bytes(b"#" * 5_000_001)
    (tmp_path / "bytes.yaml").write_bytes(b"a: b\nt\xc3\xa4\xff\n")
    for path, said in [
        (tmp_path / "nowhere.yaml", "does not exist"),
        (tmp_path, "is a folder"),
        (large, "larger than 5 MB"),
        (tmp_path / "bytes.yaml", "bytes.yaml:2:3: the problem file is not UTF-8"),
        ("a\0b", "cannot be read"),
    ]:
        with pytest.raises(InputError, match=said):
            read(path)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="this system has no pipes by name")
def test_a_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(InputError, match="not a file"):
        read(tmp_path / "pipe")


def test_units_inside_are_converted_exactly(tmp_path: Path) -> None:
    """Slot in km and speed in km/h: slot' = speed/3600 (km/s), and the strength keeps its meaning."""
    text = convoy_text(("slot: m, speed: m/s,", "slot: km, speed: km/h,"))
    kind, link = read_text(text, tmp_path).kinds[0], read_text(text, tmp_path).links[0]
    assert kind.A[0, 1] == Fraction(1, 3600)
    assert kind.A[1, 2] == Fraction(36, 10)
    assert kind.E[1, 0] == Fraction(36, 10)
    assert kind.offers[0].unit == "km" and kind.offers[0].band == Fraction("0.0015")
    assert link.strength == 500 and link.own_strength == 500


def test_own_strength_follows_the_unit_of_the_own_signal(tmp_path: Path) -> None:
    """A relative link between kinds that offer the same quantity in different units."""
    text = convoy_text(("  hauler:\n", "  hauler:\n"))
    other = text[text.index("  hauler:\n") : text.index("\nnetwork:")]
    other = other.replace("  hauler:", "  loader:").replace("slot: m,", "slot: km,")
    text = text.replace("\nnetwork:", other + "\nnetwork:").replace("from: hauler.place", "from: loader.place")
    link = read_text(text, tmp_path).links[0]
    assert (link.strength, link.own_strength) == (500, Fraction(1, 2))


@pytest.mark.parametrize(
    ("before", "after", "said"),
    [
        ("relative: true,\n         late: neighbour", "late: neighbour", "'late' is about relative links"),
        ("at: -1", "at: 0", "always zero"),
        ("at: -1", "at: [-1, 0]", "one whole number"),
        ("at: -1", "at: 0.5", "whole number"),
        ("delay: 0.1 s", "delay: -0.1 s", "zero or more"),
        ("delay: 0.1 s", "delay: 0.1 m", "has the unit m, but s is needed"),
        ("strength: 0.5 1/s^2", "strength: 0.5 1/s", "has the unit 1/s, but 1/s^2 is needed"),
        ("relative: true", "relative: yes", "true or false"),
        ("{place: {is: slot, band: 1.5 m}}", "{place: {is: slot + ahead*gain}}", "a loop without memory"),
        ("{place: {is: slot, band: 1.5 m}}", "{place: demand}", "the input 'demand' cannot be used here"),
        ("sensors: [slot, speed, drive]", "sensors: [slot, slope]", "the disturbance 'slope' cannot be used here"),
        ("sensors: [slot, speed, drive]", "sensors: [slot, slot]", "stands twice"),
        ("    sensors: [slot, speed, drive]\n", "", "the key 'sensors' is missing"),
        ("limit: 2.5", "limit: 0", "above zero"),
        ("limit: 2.5", "limit: 2.5 m", "has the unit m"),
        ("peak: 0.3", "peak: -0.3", "zero or more"),
        ("takes: {ahead", "takes: {speed", "already the name of a state"),
        ("takes: {ahead", "takes: {lambda", "reserved word"),
        ("takes: {ahead", "takes: {a-b", "cannot be a name"),
        ("slowest: 0.4", "slowest: -1", "zero or more"),
        ("fastest: 1.3", "fastest: 0.4", "no mode fits"),
        ("period: 0.02 s", "period: 0 s", "above zero"),
        ("period: 0.02 s", "jitter: 1 ms", "not honoured by this version"),
        ("period: 0.02 s", "rounding: {}", "no sample period is declared"),
        ("period: 0.02 s", "computation_delay: 1 ms", "no sample period is declared"),
        ("period: 0.02 s", "period: 0.02 s, computation_delay: 30 ms", "zero to one period (0.02 s)"),
        ("period: 0.02 s", "period: 0.02 s, rounding: {gains: {word: 16}}", "the key 'fraction' is missing"),
        ("period: 0.02 s", "period: 0.02 s, rounding: {sensors: {hauler: {slot: 1 s}}}", "has the unit s, but m"),
        ("period: 0.02 s", "period: 0.02 s, rounding: {sensors: {hauler: {slot: -1 mm}}}", "zero or more"),
        ("period: 0.02 s", "period: 0.02 s, rounding: {form: double, stored: {hauler: {slot: 0}}}", "in fixed point"),
        ("target: 0.6", "target: 1", "above 0 and below 1"),
        ("units: 50", "units: 1", "from 2 to 100000"),
        ("seconds: 60 s", "seconds: 0 s", "above zero"),
        ("name: follow", "name: [a]", "the name of the link's class"),
        ("hauler.ahead", "hauler", "is not written 'kind.signal'"),
        ("period: 0.02 s", "uses: {hauler: {demand: [sped]}}", "did you mean 'speed'"),
        ("period: 0.02 s", "gain_bounds: {hauler: {demand: {speed: 6 1/s^2}}}", "has the unit 1/s^2"),
        ("period: 0.02 s", "gain_bounds: {hauler: {demnd: {speed: 6}}}", "did you mean 'demand'"),
        ("slot': speed", "slot: speed", 'is not the derivative of a state (did you mean "slot\'"?)'),
        ("dimension: 1", "dimension: 4", "from 1 to 3"),
        ("title: Ore convoy", 'title: "Ore\\tconvoy\\u0007"\n#', "printable"),
        ("target: 0.6", "target: 1e-200", "too large or too small"),
        ("slot: m,", "slot: {in: m, tolerance: 2},", "not honoured"),
    ],
)
def test_each_rule_refuses_with_its_sentence(before: str, after: str, said: str, tmp_path: Path) -> None:
    """Start from the valid convoy and break one thing."""
    parameters = ("{lag: 0.5 s}", "{lag: 0.5 s, gain: 1 s^2}")
    message = refusal(convoy_text(parameters, (before, after)), tmp_path)
    assert said in message, message
    assert all(line.startswith("problem.yaml:") and line.endswith(".") for line in message.splitlines())


def test_what_the_goal_may_say(tmp_path: Path) -> None:
    text = convoy_text(
        (
            "period: 0.02 s",
            "gain_bounds: {hauler: {demand: {speed: 360 1/min, slot: 5}}}, uses: {hauler: {demand: [slot, speed]}}",
        )
    )
    goal = read_text(text, tmp_path).goal
    assert goal.gain_bounds == {"hauler": {"demand": {"speed": 6, "slot": 5}}}
    assert goal.uses == {"hauler": {"demand": ("slot", "speed")}}
    assert goal.period is None


def test_how_the_code_is_timed_and_what_it_rounds(tmp_path: Path) -> None:
    rounding = (
        "rounding: {sensors: {hauler: {slot: 1 mm, speed: 0.01}}, commands: {hauler: {demand: 5 mm/s^2}}, "
        "gains: {word: 16, fraction: 12}}"
    )
    text = convoy_text(("period: 0.02 s", f"period: 20 ms, computation_delay: 5 ms, {rounding}"))
    goal = read_text(text, tmp_path).goal
    assert (goal.period, goal.computation_delay) == (Fraction(1, 50), Fraction(1, 200))
    assert goal.rounding.sensors == {"hauler.slot": Fraction(1, 1000), "hauler.speed": Fraction(1, 100)}
    assert goal.rounding.commands == {"hauler.demand": Fraction(1, 200)}
    assert (goal.rounding.form, goal.rounding.word, goal.rounding.fraction) == ("exact", 16, 12)


def test_signs_of_classes(tmp_path: Path) -> None:
    classes = "\n  classes: {follow: {sign: %s}}\ndesign:"
    for sign, strength, fine in [
        ("positive", "0.5", True),
        ("negative", "0.5", False),
        ("negative", "-0.5", True),
        ("any", "-0.5", True),
    ]:
        text = convoy_text(("strength: 0.5", f"strength: {strength}"), ("\ndesign:", classes % sign))
        if fine:
            assert read_text(text, tmp_path).links[0].strength == Fraction(strength)
        else:
            assert "is declared negative" in refusal(text, tmp_path)
    assert "no link has the class 'folow' (did you mean 'follow'?)" in refusal(
        convoy_text(("\ndesign:", "\n  classes: {folow: {sign: any}}\ndesign:")), tmp_path
    )

"""What `check` shows: the contract's keys, and words for a person."""

from __future__ import annotations

import json
from fractions import Fraction

import yaml

from synth.base.caution import CAUTIONS
from synth.network import describe, read
from tests.network.files import CONVOY, GAP_ONLY
from tests.network.fuzzing import EXAMPLES


def test_contract_keys() -> None:
    document = json.loads(json.dumps(describe(read(CONVOY)).as_json(), allow_nan=False))
    assert {"title", "kinds", "units", "description", "obstruction"} <= set(document)
    assert document["units"] is None and document["obstruction"] is None and document["description"] == "pattern"
    kind = document["kinds"][0]
    assert kind["name"] == "hauler" and kind["inputs"] == [{"name": "demand", "in": "m/s^2", "limit": 2.5}]
    assert kind["modes"] == [[0, 0], [0, 0], [-2, 0]]
    assert document["intake"] == {"hauler.ahead": 0.5}
    assert document["cautions"] == list(CAUTIONS)
    blocked = describe(read(GAP_ONLY)).as_json()["obstruction"]
    assert isinstance(blocked, dict) and {"theta", "s", "direction", "advice"} <= set(blocked)


def test_text_names_everything_with_its_unit() -> None:
    text = describe(read(CONVOY)).as_text()
    for words in (
        "demand (m/s^2, limit 2.5)",
        "slope (m/s^2, peak 0.3)",
        "place (m, band 1.5)",
        "0, 0, -2 (1/s",
        "1 place before (at -1)",
        "up to 0.1 s late",
        "0.5 m/s^2 per m",
        "No obstruction found",
        CAUTIONS[0],
    ):
        assert words in text, words
    assert "OBSTRUCTION (not seen)" in describe(read(GAP_ONLY)).as_text()


def test_every_description_of_a_network_is_explained() -> None:
    """What a person must find for each way to say which units there are."""
    wanted = {
        "field": ("in 2 dimensions without end", "at (-1, 0)", "may weaken to zero at any time"),
        "edge": (
            "with its first end",
            "minus the unit's own value, just as late, both up to 2 s late",
            "lake: a lake at place 0 instead of the basin",
            "into place 2, relief",
        ),
        "rules": ("wired in any way that obeys the rules", "at most 3 such into one unit", "strength 0.02 "),
        "members": (
            "5 units (5 basin) and 4 links",
            "3 sets of values; those beside the kind's own: area: ",
            "2 x basin",
        ),
        "curved": ("tolerance of lag: a link of the unit to itself, at most 0.20202 m/s^3 per m/s^2", "curve of speed"),
    }
    for name, parts in wanted.items():
        described = describe(read(EXAMPLES / f"{name}.yaml"))
        text = described.as_text()
        for words in parts:
            assert words in text, (name, words, text)
        assert described.tested in text
        json.dumps(described.as_json(), allow_nan=False)


def test_intake_counts_what_one_unit_may_receive() -> None:
    """By hand: three links of 0.02; the worst of five basins (two relative links of 0.05 into 'low')."""
    assert describe(read(EXAMPLES / "rules.yaml")).intake["basin.inflow"] == Fraction(6, 100)
    members = describe(read(EXAMPLES / "members.yaml")).intake
    assert max(members.values()) == Fraction(1, 10) and members["basin.inflow"] == Fraction(4, 100)
    assert describe(read(EXAMPLES / "edge.yaml")).intake["basin.inflow"] == Fraction(11, 100)


def test_internal_signals_do_not_pass_for_the_users_own() -> None:
    text = describe(read(EXAMPLES / "curved.yaml")).as_text()
    takes = next(line for line in text.splitlines() if line.strip().startswith("takes"))
    assert takes.split() == ["takes", "ahead", "(m/s^2)"]


def test_an_interval_and_a_late_difference_are_told_as_written() -> None:
    curved = describe(read(EXAMPLES / "curved.yaml")).as_text()
    assert "strength 0.4 to 0.5 (m/s^2 per m)" in curved and "left over by the interval counts 0.05 more" in curved
    problem = yaml.safe_load((EXAMPLES / "edge.yaml").read_text())
    late = {"relative": True, "late": "difference", "delay": "3 s"}
    problem["network"]["edge"]["links"][0] |= late
    text = describe(read(problem)).as_text()
    assert "minus the unit's own value, just as late, both up to 3 s late" in text
    del problem["network"]["edge"]["links"][0]["late"], problem["network"]["edge"]["links"][0]["delay"]
    assert "just as late, both up to 3 s late" not in describe(read(problem)).as_text()

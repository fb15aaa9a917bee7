"""What `check` shows: the contract's keys, and words for a person."""

from __future__ import annotations

import json

from synth.base.caution import CAUTIONS
from synth.network import describe, read
from tests.network.files import CONVOY, GAP_ONLY


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
        "0.5 (m/s^2)/(m)",
        "No obstruction found",
        CAUTIONS[0],
    ):
        assert words in text, words
    assert "OBSTRUCTION (not seen)" in describe(read(GAP_ONLY)).as_text()

"""Controllers with states of their own: the widened unit is the controller it is named for, exactly."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from synth.base.exact import ExactMatrix
from synth.gain.closed import close_unit
from synth.network import Network, obstruction
from synth.network.controller import Wanted, firmware_rows, with_controller
from synth.network.model import Kind, Signal
from tests.build import M, hauler
from tests.network.files import convoy_text, read_text, refusal

SENSORS = "sensors: [slot, speed, drive]"
LEAKY = (("{lag: 0.5 s}", "{lag: 0.5 s, leak: 10 s}"), ("slot': speed", "slot': speed - slot/leak"))


def written(controller: str, folder: Path, *changes: tuple[str, str]) -> Network:
    return read_text(convoy_text(("    equations:", f"    controller: {controller}\n    equations:"), *changes), folder)


def refused(controller: str, folder: Path, *changes: tuple[str, str]) -> str:
    return refusal(convoy_text(("    equations:", f"    controller: {controller}\n    equations:"), *changes), folder)


def dense(matrix: ExactMatrix) -> np.ndarray:
    return matrix.floats()


def gains(kind: Kind, entries: dict[tuple[str, str], str]) -> ExactMatrix:
    """K of a widened kind from single entries (input, sensor)."""
    K = [[Fraction(0)] * len(kind.sensors) for _ in kind.inputs]
    for (actuator, sensor), value in entries.items():
        K[kind.index("inputs", actuator)][kind.index("sensors", sensor)] = Fraction(value)
    return ExactMatrix.of(K, (len(kind.inputs), len(kind.sensors)))


def test_an_integral_leaves_no_lasting_error() -> None:
    """A constant disturbance moves the integrated sensor by exactly nothing in the long run; without it, it does."""
    kind = with_controller(hauler(), Wanted(integrals=("slot",)))
    K = gains(kind, {("demand", "slot"): "-6", ("demand", "speed"): "-5", ("demand", "drive"): "-1.5",
                     ("demand", "slot_integral"): "-2"})  # fmt: skip
    unit = close_unit(kind, (), K)
    assert np.linalg.eigvals(unit.A.floats()).real.max() < 0
    at_rest = -np.linalg.solve(unit.A.floats(), unit.E.floats())
    assert abs(at_rest[0, 0]) < 1e-12
    plain = close_unit(hauler(), (), M([["-6", "-5", "-1.5"]]))
    assert abs(np.linalg.solve(plain.A.floats(), plain.E.floats())[0, 0]) > 0.1
    assert kind.states[-1] == Signal("slot_integral", "m s")
    assert kind.controller is not None and kind.controller.states == ("slot_integral",)


def test_an_estimator_separates() -> None:
    """Modes of the whole are those of A + B K and of A - L C (separation), and the structure is exact zeros."""
    kind = with_controller(hauler(), Wanted(estimator=("slot", "speed")))
    feedback, correction = ("-6", "-5", "-1.5"), (("3", "1"), ("0", "4"), ("1", "2"))
    entries = {("demand", f"{s}_estimate"): v for s, v in zip(("slot", "speed", "drive"), feedback, strict=True)}
    for state, row in zip(("slot", "speed", "drive"), correction, strict=True):
        for sensor, value in zip(("slot", "speed"), row, strict=True):
            entries[f"{state}_correction", f"{sensor}_innovation"] = value
    unit = close_unit(kind, (), gains(kind, entries))
    base = hauler()
    A, B, C = base.A.floats(), base.B.floats(), base.C.floats()[:2]
    K, L = np.array([feedback], dtype=float), np.array(correction, dtype=float)
    expected = np.concatenate((np.linalg.eigvals(A + B @ K), np.linalg.eigvals(A - L @ C)))
    assert np.poly(unit.A.floats()) == pytest.approx(np.poly(expected).real, rel=1e-9)
    record = kind.controller
    assert record is not None
    for actuator, sensor in entries:
        assert sensor in record.structure[actuator]
    assert "slot" not in record.structure["demand"]


def test_memory_is_a_dynamic_compensator() -> None:
    """The closed matrix is the textbook one of u = Dc y + Cc m, m' = Bc y + Ac m."""
    one = replace(hauler(), sensors=hauler().sensors[:1], C=M([[1, 0, 0]]), N=ExactMatrix.zeros(1, 1))
    kind = with_controller(one, Wanted(memory=2))
    table = [["-3", "1", "2"], ["4", "-5", "6"], ["7", "-8", "-9"]]
    unit = close_unit(kind, (), M(table))
    A, B, C, T = one.A.floats(), one.B.floats(), one.C.floats(), np.array(table, dtype=float)
    expected = np.block([[A + B @ T[:1, :1] @ C, B @ T[:1, 1:]], [T[1:, :1] @ C, T[1:, 1:]]])
    assert np.array_equal(dense(unit.A), expected)
    assert kind.controller is not None and kind.controller.inputs == ("memory_1_rate", "memory_2_rate")


def test_an_estimator_uses_what_it_hears(tmp_path: Path) -> None:
    """A sensor that reads the link lets the estimator follow its push; a link that nobody hears it cannot know."""
    heard = written("{estimator: [slot]}", tmp_path, ("sensors: [slot, speed, drive]", "sensors: [slot, ahead]"))
    deaf = written("{estimator: [slot]}", tmp_path, ("sensors: [slot, speed, drive]", "sensors: [slot]"))
    at = heard.kinds[0].index("states", "drive_estimate")
    assert heard.kinds[0].D.rows[at] == (Fraction(2),)
    assert deaf.kinds[0].D.rows[at] == (Fraction(0),)
    assert heard.kinds[0].controller is not None and heard.kinds[0].controller.heard == ("ahead",)
    assert "ahead" in heard.goal.uses["hauler"]["demand"]


def test_the_reader_writes_the_structure_into_uses(tmp_path: Path) -> None:
    network = written("{estimator: [slot, speed], integrals: [slot]}", tmp_path)
    assert network.goal.uses["hauler"] == network.kinds[0].controller.structure  # type: ignore[union-attr]
    assert obstruction(network) is None
    uses = "uses: {hauler: {demand: [slot_estimate, speed_estimate]}}"
    narrower = written("{estimator: [slot, speed]}", tmp_path, ("design: {", f"design: {{{uses}, "))
    assert narrower.goal.uses["hauler"]["demand"] == ("slot_estimate", "speed_estimate")
    assert set(narrower.goal.uses["hauler"]) == {"demand", "slot_correction", "speed_correction", "drive_correction"}


def test_firmware_rows_are_the_fixed_part(tmp_path: Path) -> None:
    rows = dict(firmware_rows(written("{estimator: [slot], integrals: [speed]}", tmp_path,
                                      *LEAKY).kinds[0]))  # fmt: skip
    assert rows["slot_estimate"] == (("slot_estimate", Fraction(-1, 10)), ("speed_estimate", Fraction(1)),
                                     ("slot_correction", Fraction(1)))  # fmt: skip
    assert rows["speed_integral"] == (("speed", Fraction(1)),)
    assert firmware_rows(hauler()) == ()


def test_units_and_widths(tmp_path: Path) -> None:
    kind = written("{memory: 2, integrals: [slot]}", tmp_path).kinds[0]
    assert [s.name for s in kind.states] == ["slot", "speed", "drive", "slot_integral", "memory_1", "memory_2"]
    assert [s.unit for s in kind.sensors[3:]] == ["m s", "1", "1"]
    assert [a.limit for a in kind.inputs[1:]] == [None, None]
    assert kind.equations["slot_integral'"] == "slot"


@pytest.mark.parametrize(
    ("controller", "change", "words"),
    [
        ("{integrals: [speed]}", (), "cannot be steered"),
        ("{integrals: [drive]}", (SENSORS, "sensors: [slot, speed]"), "nobody measures 'drive'"),
        ("{integrals: [slop]}", (), "unknown sensor 'slop' of hauler (did you mean 'slot'?)"),
        ("{memory: 0}", (), "a whole number from 1 to 8"),
        ("{memory: -1}", (), "a whole number from 1 to 8"),
        ("{memory: 1.5}", (), "a whole number from 1 to 8"),
        ("{estimator: [speed]}", (), "the mode at 0 1/s of hauler (seen in slot) does not show in speed"),
        ("{estimator: [ahead]}", ("sensors: [slot, speed, drive]", "sensors: [slot, ahead]"), "reads no state"),
        ("{estimator: []}", (), "name at least one sensor"),
        ("{memory: 1, estimator: [slot]}", (), "two ways to the same end"),
        ("{order: 2}", (), "unknown key 'order'"),
        ("{}", (), "nothing is asked for"),
        ("{integrals: [slot]}", ("offers: {", "offers: {slot_integral: {is: speed}, "), "which hauler has already"),
        ("{estimator: [slot]}", ("design: {", "design: {uses: {hauler: {demand: [slot]}}, "), "cannot use slot;"),
    ],
)  # fmt: skip
def test_what_cannot_work_is_refused_where_it_stands(
    controller: str, change: tuple[str, str], words: str, tmp_path: Path
) -> None:
    said = refused(controller, tmp_path, *([change] if change else []))
    assert words in said, said
    assert said.startswith("problem.yaml:")


def test_a_hidden_mode_that_decays_is_accepted(tmp_path: Path) -> None:
    """The estimate of it decays too, so nothing is wrong with an estimator that does not see it."""
    network = written("{estimator: [speed]}", tmp_path, *LEAKY)
    assert len(network.kinds[0].states) == 6


@pytest.mark.parametrize(
    ("aim", "words"),
    [
        ("{least: power}", "unknown aim 'power'"),
        ("{least: peak}", "needs the signals it is about"),
        ("{least: effort, of: [hauler.place]}", "take 'of' out"),
        ("{least: peak, of: [hauler.plac]}", "no signal 'plac' (did you mean 'place'?)"),
        ("{least: peak, of: [lorry.place]}", "is not a signal of a kind"),
        ("{of: [hauler.place]}", "the key 'least' is missing"),
    ],
)
def test_aims_are_read_or_refused(aim: str, words: str, tmp_path: Path) -> None:
    assert words in refusal(convoy_text(("design: {", f"design: {{aim: {aim}, ")), tmp_path)
    good = read_text(
        convoy_text(("design: {", "design: {aim: {least: peak, of: [hauler.place, hauler.demand]}, ")), tmp_path
    )
    assert good.goal.aim == "peak" and good.goal.aim_of == (("hauler", "place"), ("hauler", "demand"))

"""What ``synth check`` and its messages say: one message for one mistake, matrices shown, units without brackets."""

from __future__ import annotations

from pathlib import Path

from synth.network import describe, read
from tests.network.files import read_text, refusal

TANK = """synth: 1
title: Invented tank
kinds:
  tank:
    states: {level: K, flow: m/s}
    inputs: {valve: K/s}
    sensors: [level, flow]
    parameters: {lag: 5 s}
    controller: CONTROLLER
    equations: {level': valve - level/lag, flow': -flow/lag}
network: {pattern: {links: []}}
"""


def test_a_word_where_a_list_is_needed_gives_one_message(tmp_path: Path) -> None:
    said = refusal(TANK.replace("CONTROLLER", "{estimator: water}"), tmp_path)
    assert said.count("estimator") == 1 and "a list is expected" in said
    empty = refusal(TANK.replace("CONTROLLER", "{estimator: []}"), tmp_path)
    assert "name at least one sensor" in empty


def test_units_of_controller_states_carry_no_needless_brackets(tmp_path: Path) -> None:
    text = describe(read_text(TANK.replace("CONTROLLER", "{integrals: [level]}"), tmp_path)).as_text()
    assert "level_integral (K s)" in text
    text = describe(read_text(TANK.replace("CONTROLLER", "{estimator: [level, flow]}"), tmp_path)).as_text()
    assert "level_correction (K/s, unlimited)" in text and "flow_correction (m/s^2, unlimited)" in text


def test_kinds_given_by_matrices_show_their_dynamics() -> None:
    network = read(Path(__file__).parent / "examples" / "matrices.yaml")
    kind = next(k for k in network.kinds if not k.equations)
    lines = describe(network).as_text().splitlines()
    shown = next(line for line in lines if line.startswith("  A  "))
    assert [float(v) for v in shown.split("[")[1].rstrip("]").replace(";", "").split()] == [
        float(f"{float(v):.6g}") for row in kind.A.rows for v in row
    ]

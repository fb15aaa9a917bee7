"""An error is a sentence with a place and an exit code."""

import pytest

from synth.base.errors import InputError, Place, Problem, SolverFailure, StorageFailure, UnstableLoop, nearest
from synth.base.provenance import canonical, sha256


def test_place_reads_as_a_link() -> None:
    error = InputError("'lagg' is not declared.", Place("convoy.yaml", 3, 7))
    assert str(error) == "convoy.yaml:3:7: 'lagg' is not declared."
    assert error.exit_code == 2


def test_several_problems_are_one_error_with_a_line_each() -> None:
    error = InputError([Problem("first."), Problem("second.", Place("f", 1, 2))])
    assert str(error).splitlines() == ["first.", "f:1:2: second."]
    with pytest.raises(ValueError, match="at least one"):
        InputError([])


def test_exit_codes_are_those_of_the_contract() -> None:
    assert (SolverFailure.exit_code, StorageFailure.exit_code, UnstableLoop.exit_code) == (3, 3, 1)


def test_nearest_names_only_close_names() -> None:
    assert nearest("strenght", ["strength", "delay"]) == " (did you mean 'strength'?)"
    assert nearest("zzz", ["strength", "delay"]) == ""


def test_canonical_text_does_not_depend_on_order() -> None:
    assert canonical({"b": 1, "a": [1, 2]}) == canonical({"a": [1, 2], "b": 1}) == '{"a":[1,2],"b":1}'
    with pytest.raises(ValueError, match="Out of range"):
        canonical(float("nan"))
    assert sha256("abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"  # FIPS 180-4 example

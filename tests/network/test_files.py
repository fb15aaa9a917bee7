"""Kinds whose matrices come from a StateSpace object, a MAT file or an NPZ file."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

import control
import numpy as np
import pytest
from scipy.io import savemat
from scipy.sparse import csc_matrix

from synth.base.errors import InputError
from synth.network import Network, read
from synth.network.mat_file import MatError, read_matrices
from tests.build import convoy
from tests.network.files import convoy_text, read_text, refusal

HAULER: dict[str, Any] = {
    "A": [[0, 1, 0], [0, 0, 1], [0, 0, -2]],
    "B": [[0], [0], [2]],
    "D": [[0], [0], [2]],
    "E": [[0], [1], [0]],
    "H": [[1, 0, 0]],
    "C": np.eye(3),
}
DECLARED = """    states: {slot: m, speed: m/s, drive: m/s^2}
    inputs: {demand: {in: m/s^2, limit: 2.5}}
    disturbances: {slope: {in: m/s^2, peak: 0.3}}
    takes: {ahead: m/s^2}
    offers: {place: {in: m, band: 1.5 m}}
    sensors: {slot: m, speed: m/s, drive: m/s^2}
    file: hauler.mat
"""


def file_text(*changes: tuple[str, str]) -> str:
    """The convoy with its hauler from a file."""
    text = convoy_text()
    start, end = text.index("    parameters:"), text.index("\nnetwork:")
    text = text[:start] + DECLARED + text[end:]
    for before, after in changes:
        assert before in text, before
        text = text.replace(before, after, 1)
    return text


def with_matrices(**changes: Any) -> dict[str, Any]:
    return {name: value for name, value in {**HAULER, **changes}.items() if value is not None}


def problem(plant: object, relative: bool = True, **changes: Any) -> dict[str, Any]:
    """The convoy as a Python mapping with a plant object."""
    kind = {
        "states": {"slot": "m", "speed": "m/s", "drive": "m/s^2"},
        "inputs": {"demand": {"in": "m/s^2", "limit": 2.5}},
        "disturbances": {"slope": {"in": "m/s^2", "peak": 0.3}},
        "takes": {"ahead": "m/s^2"},
        "offers": {"place": {"in": "m", "band": 1.5}},
        "sensors": ["slot", "speed", "drive"],
        "plant": plant,
        **changes,
    }
    link = {"name": "follow", "from": "hauler.place", "at": -1, "to": "hauler.ahead", "strength": "0.5 1/s^2"}
    if relative:
        link |= {"relative": True, "late": "neighbour", "delay": 0.1}
    return {
        "synth": 1,
        "kinds": {"hauler": {name: value for name, value in kind.items() if value is not None}},
        "network": {"pattern": {"links": [link]}},
    }


def hauler_plant(**changes: Any) -> control.StateSpace:
    """The hauler with its states, inputs and outputs in another order than the problem declares."""
    names = {"states": ["speed", "slot", "drive"], "inputs": ["slope", "demand", "ahead"], "outputs": ["gap", "place"]}
    A = np.array([[0, 0, 1], [1, 0, 0], [0, 0, -2]])
    B = np.array([[1, 0, 0], [0, 0, 0], [0, 2, 2]])
    C, D = np.array([[0, 7, 0], [0, 1, 0]]), changes.pop("D", np.zeros((2, 3)))
    return control.ss(A, B, C, D, **{**names, **changes})


def said(source: Mapping[str, Any]) -> str:
    with pytest.raises(InputError) as caught:
        read(source)
    return str(caught.value)


def same_model(network: Network) -> None:
    wanted, found = convoy().kinds[0], network.kinds[0]
    for name in ("A", "B", "D", "E", "C", "N", "H", "F", "Fw"):
        assert getattr(found, name) == getattr(wanted, name), name
    assert network.hash == convoy().hash


def test_a_plant_object_is_the_same_network_whatever_the_order_of_its_signals() -> None:
    same_model(read(problem(hauler_plant())))
    sensors = {"slot": "m", "speed": "m/s", "drive": "m/s^2"}
    same_model(read(problem(hauler_plant(), sensors=sensors)))
    unnamed = control.ss(
        HAULER["A"], np.hstack([HAULER["B"], HAULER["D"], HAULER["E"]]), HAULER["H"], 0,
        inputs=["demand", "ahead", "slope"], outputs=["place"],
    )  # fmt: skip
    same_model(read(problem(unnamed)))  # states without names count by their order


def test_feed_through_of_a_plant_goes_where_it_belongs() -> None:
    D = np.zeros((2, 3))
    D[1, 0], D[0, 2] = 3, 0.1
    outputs = {"offers": {"place": "m", "gap": "m"}, "sensors": {"gap": "m"}}
    kind = read(problem(hauler_plant(D=D), relative=False, **outputs)).kinds[0]
    assert kind.Fw.rows == ((Fraction(3),), (Fraction(0),)) and kind.F.rows == ((Fraction(0),), (Fraction(1, 10),))
    assert kind.N.rows == ((Fraction(1, 10),),) and kind.C.rows == ((Fraction(7), Fraction(0), Fraction(0)),)
    assert "straight through" in said(problem(hauler_plant(D=D), relative=False, sensors={"place": "m"}))


@pytest.mark.parametrize(
    ("plant", "changes", "words"),
    [
        (hauler_plant(inputs=["slope", "demnd", "ahead"]), {}, "no input named 'demand' (did you mean 'demnd'?)"),
        (hauler_plant(inputs=["slope", "demand", "wind"]), {"takes": None}, "input 'wind' is not declared"),
        (hauler_plant(states=["speed", "slot", "torque"]), {}, "no state named 'drive'"),
        (hauler_plant(), {"states": {"slot": "m", "speed": "m/s"}, "sensors": ["slot"]}, "'drive' is not declared"),
        (hauler_plant(), {"offers": {"plce": "m"}}, "no output named 'plce' (did you mean 'place'?)"),
        (hauler_plant(inputs=3), {}, "Name the signals where the plant is built"),
        (hauler_plant(dt=0.1), {}, "the plant is sampled (dt = 0.1)"),
        (control.tf([1], [1, 1]), {}, "TransferFunction is no state-space model"),
        ("zone", {}, "which only a program can hand over"),
        (hauler_plant(D=np.full((2, 3), np.nan)), {}, "the variable D is not finite (row 1, column 1: nan)"),
        (hauler_plant(), {"matrices": {"A": [[0]]}}, "give one of 'matrices' and 'plant', not more"),
        (hauler_plant(), {"parameters": {"lag": "1 s"}}, "parameters belong to equations"),
    ],
)
def test_what_does_not_fit_a_plant_is_said(plant: object, changes: dict[str, Any], words: str) -> None:
    assert words in said(problem(plant, **changes))


@pytest.mark.parametrize("form", ["mat", "compressed", "sparse", "npz"])
def test_files_give_the_same_network(form: str, tmp_path: Path) -> None:
    if form == "npz":
        np.savez(tmp_path / "hauler.npz", **with_matrices())
        same_model(read_text(file_text(("hauler.mat", "hauler.npz")), tmp_path))
        return
    matrices = with_matrices()
    if form == "sparse":
        matrices["A"] = csc_matrix(np.array(matrices["A"], dtype=float))
    savemat(tmp_path / "hauler.mat", matrices, do_compression=form == "compressed")
    same_model(read_text(file_text(), tmp_path))


def test_floats_in_a_file_count_as_the_decimals_they_print_as(tmp_path: Path) -> None:
    savemat(tmp_path / "hauler.mat", with_matrices(A=[[0, 1, 0], [0, 0, 1], [0, 0, -0.1]]))
    assert read_text(file_text(), tmp_path).kinds[0].A[2, 2] == Fraction(-1, 10)


@pytest.mark.parametrize("suffix", ["mat", "npz"])
@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"A": None}, "no variable 'A' (it holds B, D, E, H, C)"),
        ({"B": None}, "the matrix B (3 states x 1 inputs) is missing"),
        ({"A": [[0, 1, 0], [0, 0, 1]]}, "A is 2 x 3, but it must be square"),
        ({"D": [[1], [2]]}, "D is 2 x 1, but 3 x 1 is needed"),
        ({"A": np.eye(3) * (1 + 2j)}, "is complex (row 1, column 1: (1+2j))"),
        ({"E": [[0], [float("nan")], [0]]}, "is not finite (row 2, column 1: nan)"),
        ({"E": [[0], [float("inf")], [0]]}, "is not finite (row 2, column 1: inf)"),
        ({"B": np.zeros((3, 1, 2))}, "has 3 dimensions (3 x 1 x 2)"),
        ({"B": np.array(["a", "b"])}, "holds no numbers"),
        ({"Bw": [[1]]}, "a variable 'Bw' (did you mean 'B'?), which has no meaning here"),
        ({"A": np.zeros((400, 400))}, "more than 100000 entries"),
        ({"E": [[0], [1e200], [0]]}, "too large or too small"),
    ],
)
def test_what_is_wrong_with_a_file_is_said_at_its_name(
    suffix: str, change: dict[str, Any], words: str, tmp_path: Path
) -> None:
    matrices = with_matrices(**change)
    if suffix == "mat":
        savemat(tmp_path / "hauler.mat", matrices)
    else:
        np.savez(tmp_path / "hauler.npz", **matrices)
    message = refusal(file_text(("hauler.mat", f"hauler.{suffix}")), tmp_path)
    assert words in message and message.startswith("problem.yaml:14:11: kinds.hauler.file"), message


def test_pickled_objects_are_never_opened(tmp_path: Path) -> None:
    class Trap:
        def __reduce__(self) -> tuple[Any, ...]:
            return (Path.touch, (tmp_path / "opened",))

    np.savez(tmp_path / "hauler.npz", **with_matrices(B=np.array([Trap()], dtype=object)))
    assert "holds Python objects, which are never opened" in refusal(file_text(("r.mat", "r.npz")), tmp_path)
    assert not (tmp_path / "opened").exists()


def test_other_files_are_refused(tmp_path: Path) -> None:
    (tmp_path / "hauler.mat").write_bytes(b"MATLAB 7.3 MAT-file".ljust(124) + b"\x00\x02IM" + b"\x89HDF" * 50)
    assert "version 7.3" in refusal(file_text(), tmp_path)
    for name, data, words in [
        ("hauler.mat", b"no matrices here", "cannot be read as a MAT file"),
        ("hauler.mat", b"", "cannot be read as a MAT file"),
        ("hauler.npz", b"PK\x03\x04 cut off", "cannot be read as an NPZ file"),
        ("hauler.csv", b"1,2", "neither a MAT file nor an NPZ file"),
        ("hauler.mat", bytes(5_000_001), "larger than 5 MB"),
    ]:
        (tmp_path / name).write_bytes(data)
        message = refusal(file_text(("hauler.mat", name)), tmp_path)
        assert words in message and "\n" not in message  # nothing is said about what the file would have given
    assert "does not exist" in refusal(file_text(("hauler.mat", "nowhere.mat")), tmp_path)
    (tmp_path / "folder.npz").mkdir()
    assert "is not a file" in refusal(file_text(("hauler.mat", "folder.npz")), tmp_path)
    assert "does not exist" in refusal(file_text(("hauler.mat", '"a\\0.mat"')), tmp_path)
    assert "not more" in refusal(file_text(("    file:", "    matrices: {A: [[1]]}\n    file:")), tmp_path)
    with zipfile.ZipFile(tmp_path / "twice.npz", "w") as archive, pytest.warns(UserWarning, match="Duplicate"):
        stream = io.BytesIO()
        np.save(stream, np.eye(3))
        archive.writestr("A.npy", stream.getvalue())
        archive.writestr("A.npy", stream.getvalue())
    assert "more than once" in refusal(file_text(("hauler.mat", "twice.npz")), tmp_path)


def test_the_folder_of_the_problem_file_counts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "below").mkdir()
    savemat(tmp_path / "below" / "hauler.mat", with_matrices())
    (tmp_path / "below" / "problem.yaml").write_text(file_text(), encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    same_model(read("below/problem.yaml"))


@pytest.mark.filterwarnings("error")
def test_the_reader_of_mat_files_survives_any_bytes() -> None:
    """Four thousand damaged files with sparse, complex, text and structure variables, plain and compressed."""
    variables = {"A": csc_matrix(np.eye(3)), "B": np.eye(3) * 1j, "C": np.arange(3.0), "t": "text", "s": {"x": 1}}
    chance, refused = np.random.default_rng(4), 0
    for compressed in (False, True):
        stream = io.BytesIO()
        savemat(stream, variables, do_compression=compressed)
        good = stream.getvalue()
        assert [v.name for v in read_matrices(good, 100)] == list(variables)
        for k in range(2000):
            data = bytearray(good)
            for _ in range(1 + k % 4):
                data[int(chance.integers(100, len(data)))] = int(chance.integers(256))
            try:
                read_matrices(bytes(data[: len(data) if k % 5 else int(chance.integers(len(data)))]), 100)
            except MatError as error:
                refused += 1
                assert str(error) and not str(error).endswith(".")
    assert 1000 < refused < 4000


@pytest.mark.parametrize("suffix", ["mat", "npz"])
def test_damaged_files_are_refused_or_read(suffix: str, tmp_path: Path) -> None:
    """Two hundred damaged files: never another exception, whatever the library's own reader does."""
    stream = io.BytesIO()
    matrices = {name: np.array(value, dtype=float) for name, value in with_matrices().items()}
    if suffix == "mat":
        savemat(stream, matrices)
    else:
        np.savez(stream, **matrices)
    good, chance, refused = stream.getvalue(), np.random.default_rng(1), 0
    problem_file = tmp_path / "problem.yaml"
    problem_file.write_text(file_text(("hauler.mat", f"hauler.{suffix}")), encoding="utf-8")
    for k in range(200):
        data = bytearray(good)
        for _ in range(1 + k % 4):
            data[int(chance.integers(len(data)))] = int(chance.integers(256))
        end = len(data) if k % 3 else int(chance.integers(len(data)))
        (tmp_path / f"hauler.{suffix}").write_bytes(bytes(data[:end]))
        try:
            read(problem_file)
        except InputError as error:
            refused += 1
            assert all(problem.place is not None for problem in error.problems)
    assert 20 < refused <= 200

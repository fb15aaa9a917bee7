"""Law: at every instant a path holds what it held before or the complete new content."""

from pathlib import Path

import pytest

from synth.base.errors import InputError, StorageFailure
from synth.base.files import MARK, whole_folder, write_text


def listing(folder: Path) -> list[str]:
    return sorted(p.name for p in folder.iterdir())


def test_folder_appears_whole(tmp_path: Path) -> None:
    with whole_folder(tmp_path / "out") as work:
        (work / "a.txt").write_text("one")
        assert not (tmp_path / "out").exists()
    assert listing(tmp_path / "out") == [MARK, "a.txt"]
    assert listing(tmp_path) == ["out"]


@pytest.mark.parametrize("error", [RuntimeError, KeyboardInterrupt])
def test_failure_leaves_the_earlier_folder_alone(tmp_path: Path, error: type[BaseException]) -> None:
    with whole_folder(tmp_path / "out") as work:
        (work / "a.txt").write_text("one")
    with pytest.raises(error), whole_folder(tmp_path / "out") as work:
        (work / "b.txt").write_text("half")
        raise error
    assert listing(tmp_path / "out") == [MARK, "a.txt"]
    assert listing(tmp_path) == ["out"]


def test_success_replaces_what_was_written_before(tmp_path: Path) -> None:
    for name in ("a.txt", "b.txt"):
        with whole_folder(tmp_path / "out") as work:
            (work / name).write_text(name)
    assert listing(tmp_path / "out") == [MARK, "b.txt"]


def test_somebody_elses_folder_is_never_replaced(tmp_path: Path) -> None:
    mine = tmp_path / "thesis"
    mine.mkdir()
    (mine / "chapter.txt").write_text("years of work")
    with pytest.raises(InputError, match="not written by this tool"), whole_folder(mine):
        pass
    assert listing(mine) == ["chapter.txt"]


def test_a_file_in_the_way_is_named(tmp_path: Path) -> None:
    (tmp_path / "out").write_text("x")
    with pytest.raises(InputError, match="is a file"), whole_folder(tmp_path / "out"):
        pass


def test_empty_folder_is_accepted(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    with whole_folder(tmp_path / "out") as work:
        (work / "a.txt").write_text("one")
    assert (tmp_path / "out" / "a.txt").read_text() == "one"


def test_write_text_replaces_in_one_step_and_leaves_no_scraps(tmp_path: Path) -> None:
    path = tmp_path / "deep" / "note.txt"
    write_text(path, "old\n")
    write_text(path, "new\n")
    assert path.read_text() == "new\n"
    assert listing(path.parent) == ["note.txt"]


def test_write_text_under_a_file_is_a_storage_failure(tmp_path: Path) -> None:
    (tmp_path / "f").write_text("x")
    with pytest.raises(StorageFailure, match="cannot write"):
        write_text(tmp_path / "f" / "g.txt", "y")


def test_a_verb_does_not_replace_what_another_verb_wrote(tmp_path: Path) -> None:
    with whole_folder(tmp_path / "out", "run") as work:
        (work / "report.html").write_text("an hour of work")
    with pytest.raises(InputError, match="holds the results of `synth run`"), whole_folder(tmp_path / "out", "check"):
        pass
    assert (tmp_path / "out" / "report.html").read_text() == "an hour of work"
    with whole_folder(tmp_path / "out", "run") as work:
        (work / "report.html").write_text("newer")
    assert (tmp_path / "out" / "report.html").read_text() == "newer"

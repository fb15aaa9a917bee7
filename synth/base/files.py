"""Files and folders that appear whole or not at all.

Law: at every instant the path holds either what it held before or the complete new content.
"""

from __future__ import annotations

import contextlib
import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

from synth.base.errors import InputError, StorageFailure

# Present in every folder this package writes; without it an existing, non-empty folder is never replaced.
MARK = ".localgain"
_MADE_BY = "Written by: synth "
_MARK_TEXT = "This folder is written whole by localgain; the next run with the same output folder replaces it.\n"


def write_text(path: str | Path, text: str) -> Path:
    """Write ``text`` (UTF-8, newline as given) to ``path`` in one step; StorageFailure if the disk refuses."""
    target = Path(path)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
        try:
            with os.fdopen(handle, "w", encoding="utf-8", newline="") as stream:
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
            os.chmod(name, 0o644)
            os.replace(name, target)
        except BaseException:
            with contextlib.suppress(OSError):
                os.unlink(name)
            raise
    except OSError as error:
        raise StorageFailure(f"cannot write {target}: {error.strerror or error}; nothing was changed there.") from error
    return target


@contextlib.contextmanager
def whole_folder(path: str | Path, maker: str = "") -> Iterator[Path]:
    """Yield an empty working folder that takes the place of ``path`` when the block ends without an error.

    What stood at ``path`` before is kept until the new folder is complete, then removed. After an error or an
    interruption the old folder stands untouched and the working folder is gone. Raises InputError where ``path`` is a
    file, or a non-empty folder that this package did not write: somebody's other work is never replaced. ``maker``
    names the verb that writes; a folder that another verb wrote is not replaced either.
    """
    target = Path(os.path.abspath(path))
    refuse_foreign(target, maker)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        work = Path(tempfile.mkdtemp(dir=target.parent, prefix=f".{target.name}."))
        os.chmod(work, 0o755)
        (work / MARK).write_text(_MARK_TEXT + (f"{_MADE_BY}{maker}\n" if maker else ""), encoding="utf-8")
    except OSError as error:
        raise StorageFailure(f"cannot create {target}: {error.strerror or error}.") from error
    try:
        yield work
        _swap(work, target)
    except BaseException:
        shutil.rmtree(work, ignore_errors=True)
        raise


def refuse_foreign(path: str | Path, maker: str = "") -> None:
    """Raise InputError if writing a folder to ``path`` would replace something this package did not write."""
    target = Path(os.path.abspath(path))
    if target.exists() and not target.is_dir():
        raise InputError(f"{path} is a file; name a folder for the output.")
    try:
        foreign = target.is_dir() and any(target.iterdir()) and not (target / MARK).is_file()
    except OSError as error:
        raise StorageFailure(f"cannot look into {path}: {error.strerror or error}.") from error
    earlier = _maker_of(target / MARK)
    if maker and earlier and earlier != maker:
        raise InputError(f"{path} holds the results of `synth {earlier}`, which are left alone; name another folder.")
    if foreign:
        raise InputError(
            f"{path} is not empty and was not written by this tool, so it is left alone; name a new or empty folder."
        )


def _maker_of(mark: Path) -> str:
    """The verb that wrote the folder with this mark; empty where that is not known."""
    try:
        lines = mark.read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError):
        return ""
    return next((line.removeprefix(_MADE_BY) for line in lines if line.startswith(_MADE_BY)), "")


def _swap(work: Path, target: Path) -> None:
    """Put ``work`` where ``target`` is; the old folder is moved aside first and put back if the second move fails."""
    aside: Path | None = None
    try:
        if target.exists():
            aside = Path(tempfile.mkdtemp(dir=target.parent, prefix=f".{target.name}.old."))
            os.rmdir(aside)
            os.replace(target, aside)
        try:
            os.replace(work, target)
        except OSError:
            if aside is not None:
                os.replace(aside, target)
            raise
    except OSError as error:
        reason = error.strerror or error
        raise StorageFailure(f"cannot write {target}: {reason}; the earlier content stands.") from error
    if aside is not None:
        shutil.rmtree(aside, ignore_errors=True)

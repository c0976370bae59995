"""The folder of a run: it appears complete or not at all, and never over somebody's files.

Results are written into a hidden folder beside the wanted one and moved there in one
step at the end.  A run that fails or is interrupted leaves nothing behind and leaves
what was there before as it was.

A folder that is there already is replaced only if all that it holds is an earlier
run's: there is a run record, and every file is named in it and unchanged.  Anything
else in it (notes, an edited table, other work) and the folder is refused, before
any work is done.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from dosekit.errors import InputError, OutputError
from dosekit.outputs.record import changed_outputs, read_record

__all__ = ["RECORD_NAME", "files_at_risk", "output_folder"]

RECORD_NAME = "record.json"
"""Name of the run record in its folder."""
PASSED_OVER = frozenset({".DS_Store", "Thumbs.db", "desktop.ini"})
"""Files that file browsers leave in any folder."""
NAMES_SHOWN = 3


def files_at_risk(folder: str | os.PathLike[str], *, record_name: str = RECORD_NAME) -> list[str]:
    """Name the files in a folder that replacing it would lose.

    Parameters
    ----------
    folder : path
        Existing folder.
    record_name : str
        Name of the run record in it.

    Returns
    -------
    list of str
        Files that no run record names, and files that were changed since; sorted, relative to the folder.
        Empty if the folder is empty or holds nothing but an unchanged run.
    """
    base = Path(folder)
    present = {
        path.relative_to(base).as_posix()
        for path in base.rglob("*")
        if (path.is_symlink() or not path.is_dir()) and path.name not in PASSED_OVER
    }
    try:
        record = read_record(base / record_name)
    except InputError:
        return sorted(present)
    changed = set(changed_outputs(record, base)) & present
    return sorted((present - set(record.outputs) - {record_name}) | changed)


@contextmanager
def output_folder(path: str | os.PathLike[str], *, record_name: str = RECORD_NAME) -> Iterator[Path]:
    """Give a folder to write into that takes its place when all went well.

    Parameters
    ----------
    path : path
        Where the results shall be; parents are made.
    record_name : str
        Name of the run record that marks a folder as a run's.

    Yields
    ------
    pathlib.Path
        An empty folder to write into; gone after a failure.

    Raises
    ------
    InputError
        If the place is a file, the working folder, or a folder with other files in it.
    OutputError
        If the place cannot be written.

    Examples
    --------
    >>> import tempfile
    >>> place = Path(tempfile.mkdtemp()) / "run"
    >>> with output_folder(place) as folder:
    ...     _ = (folder / "dose.txt").write_text("1 Gy")
    ...     place.exists()
    False
    >>> (place / "dose.txt").read_text()
    '1 Gy'
    """
    target = Path(path).resolve()
    _check_place(target, record_name)
    made = _make_parents(target.parent)
    partial = _make_beside(target, "partial")
    done = False
    try:
        yield partial
        _check_place(target, record_name)  # somebody may have come in meanwhile
        _swap(partial, target)
        done = True
    finally:
        if not done:
            shutil.rmtree(partial, ignore_errors=True)
            for parent in made:
                with suppress(OSError):
                    parent.rmdir()


def _check_place(target: Path, record_name: str) -> None:
    """Refuse a place where something could be lost."""
    remedy = "name a folder that does not exist yet"
    if target.exists() and not target.is_dir():
        raise InputError(f"{target.name} is a file, not a folder", remedy=remedy)
    if target == Path.cwd() or target in Path.cwd().parents:
        raise InputError("results would replace the folder that you work in", remedy=remedy)
    if not target.is_dir():
        return
    try:
        at_risk = files_at_risk(target, record_name=record_name)
    except OSError as problem:
        raise OutputError(f"{target.name} could not be read ({problem.strerror})") from problem
    if at_risk:
        shown = ", ".join(at_risk[:NAMES_SHOWN]) + (" and others" if len(at_risk) > NAMES_SHOWN else "")
        raise InputError(
            f"{target.name} holds files that no run wrote or that were changed since: {shown}",
            allowed="a new folder, an empty one, or that of an earlier run as it was left",
            remedy=remedy + ", or move these files away",
        )


def _make_parents(folder: Path) -> list[Path]:
    """Make missing parents; return those made, innermost first."""
    missing = []
    parent = folder
    while not parent.exists():
        missing.append(parent)
        parent = parent.parent
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as problem:
        raise OutputError(f"folder {folder.name} could not be made ({problem.strerror})") from problem
    return missing


def _make_beside(target: Path, word: str) -> Path:
    """Make a new hidden folder beside the target."""
    for number in range(1000):
        beside = target.with_name(f".{target.name}.{word}-{os.getpid()}-{number}")
        try:
            beside.mkdir()
        except FileExistsError:
            continue
        except OSError as problem:
            raise OutputError(
                f"no folder can be made beside {target.name} ({problem.strerror})",
                remedy="choose a place that may be written",
            ) from problem
        return beside
    raise OutputError(f"too many unfinished folders beside {target.name}", remedy="remove them")


def _swap(partial: Path, target: Path) -> None:
    """Put the finished folder in its place; on failure what was there comes back."""
    try:
        if not target.exists():
            partial.rename(target)
            return
        aside = _make_beside(target, "earlier")
        kept = aside / target.name
        target.rename(kept)
        try:
            partial.rename(target)
        except OSError:
            kept.rename(target)
            aside.rmdir()
            raise
        shutil.rmtree(aside, ignore_errors=True)
    except OSError as problem:
        raise OutputError(f"{target.name} could not be put in place ({problem.strerror})") from problem

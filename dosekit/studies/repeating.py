"""Repeat a run from its record and say whether every output has the same bytes."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from dosekit.caution import BANNER
from dosekit.errors import StudyError

__all__ = ["Repetition", "repeat"]


@dataclass(frozen=True)
class Repetition:
    """What came of repeating a run.

    Attributes
    ----------
    same : tuple of str
        Outputs with the same bytes.
    different : tuple of str
        Outputs that differ or are absent.
    text : str
        The comparison in a line.
    """

    same: tuple[str, ...]
    different: tuple[str, ...]
    text: str


def repeat(
    record: str | Path,
    out: str | Path,
    *,
    beside: str | Path = ".",
    progress: Callable[[str, float], None] | None = None,
) -> Repetition:
    """Run the study of a record again and compare the outputs.

    Parameters
    ----------
    record : str or Path
        The record of a run.
    out : str or Path
        Folder for the repeated results.
    beside : str or Path
        Folder that paths in the study are relative to.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    Repetition
        Which outputs are the same.

    Raises
    ------
    StudyError
        If the record's study names inputs by a path that was removed from it.
    """
    from dosekit.outputs.record import read_record
    from dosekit.studies.pipeline import run

    before = read_record(record)
    if "path-removed" in before.study_text:
        raise StudyError(
            "the record's study named inputs by absolute paths, which records do not keep",
            remedy="copy the study text from the record, set the paths and use 'dosekit run'",
        )
    with tempfile.NamedTemporaryFile(
        "w", suffix=".toml", prefix=".repeat-", dir=beside, encoding="utf-8", delete=False
    ) as file:
        file.write(before.study_text)
    study = Path(file.name)
    try:
        run(study, out, anonymous=bool(before.results.get("anonymous", False)) or None, progress=progress)
    finally:
        study.unlink(missing_ok=True)
    after = read_record(Path(out) / "record.json")
    names = sorted(set(before.outputs) | set(after.outputs))
    same = tuple(name for name in names if before.outputs.get(name) == after.outputs.get(name))
    different = tuple(name for name in names if name not in same)
    versions = {
        name: (before.versions.get(name), after.versions.get(name))
        for name in sorted(set(before.versions) | set(after.versions))
        if before.versions.get(name) != after.versions.get(name)
    }
    text = f"{len(same)} of {len(names)} outputs have the same bytes"
    if versions:
        text += "; versions differ: " + ", ".join(f"{name} {old} -> {new}" for name, (old, new) in versions.items())
    return Repetition(same, different, f"{text}. {BANNER}")

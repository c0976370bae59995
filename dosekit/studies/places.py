"""Folders that small verbs write into."""

from __future__ import annotations

from pathlib import Path

from dosekit.errors import OutputError

__all__ = ["made_folder"]


def made_folder(folder: str | Path) -> Path:
    """Return a folder, made if it is not there.

    Parameters
    ----------
    folder : str or Path
        The folder.

    Returns
    -------
    Path
        The folder, which exists.

    Raises
    ------
    OutputError
        If it cannot be made.
    """
    where = Path(folder)
    try:
        where.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"folder {where.name} cannot be made ({error.strerror})", remedy="name another") from error
    return where

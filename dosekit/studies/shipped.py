"""Which studies ship with the package, and where does a new one start?

Studies live in ``dosekit/studies/examples`` and are found by name.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

from dosekit.errors import OutputError, UnknownNameError

__all__ = ["shipped_names", "study_path", "write_new_study"]

_TEMPLATE = "starting_point"


def _folder() -> Path:
    """Return the folder of the shipped studies."""
    return Path(str(files("dosekit"))) / "studies" / "examples"


def shipped_names() -> tuple[str, ...]:
    """Return the names of the shipped studies.

    Returns
    -------
    tuple of str
        Names, without the one that new studies start from.

    Examples
    --------
    >>> "two_fields_torso" in shipped_names()
    True
    """
    return tuple(sorted(path.stem for path in _folder().glob("*.toml") if path.stem != _TEMPLATE))


def study_path(study: str | Path) -> Path:
    """Return the path of a study: a file of the user's, or a shipped one by name.

    Parameters
    ----------
    study : str or Path
        A path, or a bare name of a shipped study.

    Returns
    -------
    Path
        Where it is.

    Raises
    ------
    UnknownNameError
        If it is a bare name that does not ship.
    """
    path = Path(study)
    if path.exists() or path.suffix or path.parent != Path():
        return path
    if str(study) in shipped_names():
        return _folder() / f"{study}.toml"
    raise UnknownNameError("study", study, shipped_names())


def write_new_study(path: str | Path) -> None:
    """Write a commented study to start from.

    Parameters
    ----------
    path : str or Path
        Where; must not exist yet.

    Raises
    ------
    OutputError
        If the file exists or cannot be written.
    """
    target = Path(path)
    try:
        with target.open("x", encoding="utf-8") as file:
            file.write((_folder() / f"{_TEMPLATE}.toml").read_text(encoding="utf-8"))
    except FileExistsError as error:
        raise OutputError(f"{target} exists", remedy="choose another name") from error
    except OSError as error:
        raise OutputError(f"{target} cannot be written ({error.strerror})", remedy="choose another folder") from error

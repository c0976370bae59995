"""The record of a run: what went in, what it rests on, what came out, and how to do it again.

The run's hash covers what decides the result and nothing else: the study, the inputs' contents
and the program's version. It knows no clock, machine, user or place, so the same study on
the same inputs has the same hash everywhere. The record adds what a reader needs to judge
a difference: versions of the libraries, sources used, warnings, the energy balance and the
hash of every output file. Inputs are named by what they are for, never by where they lie;
paths outside the study's own folder are taken out of the study text.
"""

from __future__ import annotations

import hashlib
import json
import platform
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, field
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from dosekit.caution import CAUTION
from dosekit.errors import InputError
from dosekit.outputs.files import sha256_of_file, write_text

__all__ = [
    "RECORD_FORMAT",
    "InputFile",
    "RunRecord",
    "canonical_json",
    "changed_outputs",
    "hash_inputs",
    "package_versions",
    "portable_text",
    "read_record",
    "run_hash",
    "write_record",
]

RECORD_FORMAT = 1
"""Layout of the record file; a reader refuses others."""

_PACKAGES = ("dosekit", "numpy", "scipy", "xarray", "numba", "h5netcdf", "h5py", "pydicom", "matplotlib")
_QUOTED_PATH = re.compile(r"""(["'])(?:~|/|\\\\|[A-Za-z]:[\\/]|file:)[^"'\n]*\1""")


@dataclass(frozen=True)
class InputFile:
    """One input, by what it is for.

    Parameters
    ----------
    role : str
        What it is for, e.g. ``"ct"`` or ``"structures"``.
    files : int
        Number of files.
    size_bytes : int
        Their total size.
    sha256 : str
        Hash of the contents: of the file, or of the sorted hashes of several files.
    """

    role: str
    files: int
    size_bytes: int
    sha256: str


@dataclass(frozen=True)
class RunRecord:
    """Everything needed to judge and repeat a run.

    Parameters
    ----------
    run_hash : str
        Hash of study, inputs and version.
    study_text : str
        The study file without paths that lead elsewhere.
    inputs : tuple of InputFile
        The inputs.
    versions : mapping of str to str
        Versions of the program, its libraries and the language.
    sources : tuple of str
        Published data and methods used.
    warnings : tuple of str
        What was warned of.
    energy_balance : mapping of str to float
        Where the energy went; the unit is in the name.
    results : mapping
        Numbers worth having without opening another file.
    outputs : mapping of str to str
        File name inside the run's folder to SHA-256.
    """

    run_hash: str
    study_text: str
    inputs: tuple[InputFile, ...] = ()
    versions: Mapping[str, str] = field(default_factory=dict)
    sources: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    energy_balance: Mapping[str, float] = field(default_factory=dict)
    results: Mapping[str, Any] = field(default_factory=dict)
    outputs: Mapping[str, str] = field(default_factory=dict)


def canonical_json(value: Any) -> str:
    """Return JSON with one spelling for each value: sorted keys, no spaces, ASCII, shortest floats.

    Parameters
    ----------
    value : object
        Plain values, mappings, sequences, NumPy scalars and arrays.

    Returns
    -------
    str
        The text.

    Raises
    ------
    InputError
        For a value that is not a number or has no plain form.

    Examples
    --------
    >>> canonical_json({"b": 1.0, "a": (1, None)})
    '{"a":[1,null],"b":1.0}'
    """
    try:
        return json.dumps(_plain(value), sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False)
    except ValueError as problem:
        raise InputError("a value that is not a number in a record", allowed="finite numbers") from problem


def run_hash(study: Any, *, inputs: Iterable[InputFile] = (), program_version: str | None = None) -> str:
    """Return the hash of a run from what decides its result.

    Parameters
    ----------
    study : object
        The validated study as plain values, or its text.
    inputs : iterable of InputFile
        The inputs; their order does not matter.
    program_version : str, optional
        Version of dosekit; the installed one without it.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    content = {
        "study": study,
        "inputs": sorted([entry.role, entry.sha256] for entry in inputs),
        "version": program_version or package_versions()["dosekit"],
        "format": RECORD_FORMAT,
    }
    return hashlib.sha256(canonical_json(content).encode("ascii")).hexdigest()


def hash_inputs(role: str, paths: Iterable[str | Path]) -> InputFile:
    """Hash the files of one input; order and names do not matter.

    Parameters
    ----------
    role : str
        What they are for.
    paths : iterable of path
        The files.

    Returns
    -------
    InputFile
        Count, size and hash.
    """
    files = [Path(path) for path in paths]
    if not files:
        raise InputError(f"no files for the input {role!r}", remedy="check the folder")
    hashes = sorted(sha256_of_file(path) for path in files)
    whole = hashes[0] if len(hashes) == 1 else hashlib.sha256("\n".join(hashes).encode("ascii")).hexdigest()
    return InputFile(role=role, files=len(files), size_bytes=sum(path.stat().st_size for path in files), sha256=whole)


def portable_text(study_text: str, *, replace: Mapping[str, str] | None = None) -> str:
    """Take paths that lead elsewhere out of a study text.

    Parameters
    ----------
    study_text : str
        The study as the user wrote it.
    replace : mapping of str to str, optional
        Texts to replace first, e.g. a CT folder's path by ``"ct"``.

    Returns
    -------
    str
        The text; any quoted absolute or home path left is replaced by ``"path-removed"``.

    Examples
    --------
    >>> portable_text('ct = "/home/somebody/scan"')
    'ct = "path-removed"'
    """
    text = study_text.replace("\r\n", "\n")
    for old in sorted(replace or {}, key=len, reverse=True):
        if old:
            text = text.replace(old, (replace or {})[old])
    return _QUOTED_PATH.sub(lambda match: f"{match[1]}path-removed{match[1]}", text)


def package_versions() -> dict[str, str]:
    """Return versions of the program, the libraries that decide numbers, and the language.

    Returns
    -------
    dict of str to str
        Name to version.
    """
    from dosekit import __version__

    versions = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            versions[name] = "not installed"
    versions["dosekit"] = __version__
    return versions


def write_record(record: RunRecord, path: str | Path) -> Path:
    """Write a record as readable JSON, complete or not at all.

    Parameters
    ----------
    record : RunRecord
        The record.
    path : str or Path
        Where to write.

    Returns
    -------
    Path
        The file.
    """
    content = {"caution": CAUTION, "format": RECORD_FORMAT, **_plain(asdict(record))}
    canonical_json(content)  # refuses values that are not numbers
    return write_text(path, json.dumps(content, indent=2, sort_keys=True, ensure_ascii=True, allow_nan=False) + "\n")


def read_record(path: str | Path) -> RunRecord:
    """Read a record back.

    Parameters
    ----------
    path : str or Path
        A file written by `write_record`.

    Returns
    -------
    RunRecord
        The record.

    Raises
    ------
    InputError
        If it is not such a file.
    """
    source = Path(path)
    remedy = "give the record of a run"
    try:
        content = json.loads(source.read_text(encoding="utf-8"))
    except OSError as problem:
        raise InputError(f"no readable file {source.name}", remedy=remedy) from problem
    except (ValueError, RecursionError) as problem:
        raise InputError(f"{source.name} is not JSON", remedy=remedy) from problem
    if not isinstance(content, dict) or content.get("format") != RECORD_FORMAT:
        raise InputError(f"{source.name} is not a run record", allowed=f"layout {RECORD_FORMAT}", remedy=remedy)
    try:
        return RunRecord(
            run_hash=str(content["run_hash"]),
            study_text=str(content["study_text"]),
            inputs=tuple(InputFile(**entry) for entry in content["inputs"]),
            versions=dict(content["versions"]),
            sources=tuple(content["sources"]),
            warnings=tuple(content["warnings"]),
            energy_balance=dict(content["energy_balance"]),
            results=dict(content["results"]),
            outputs=dict(content["outputs"]),
        )
    except (KeyError, TypeError, ValueError) as problem:
        raise InputError(f"{source.name} is a damaged run record", remedy=remedy) from problem


def changed_outputs(record: RunRecord, folder: str | Path) -> list[str]:
    """Name the outputs in a folder that are missing or differ from the record.

    Parameters
    ----------
    record : RunRecord
        The record.
    folder : str or Path
        Folder of a run.

    Returns
    -------
    list of str
        File names; empty if the folder holds bit for bit what the record says.
    """
    base = Path(folder)
    return [
        name
        for name, expected in sorted(record.outputs.items())
        if not (base / name).is_file() or sha256_of_file(base / name) != expected
    ]


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, np.generic):
        return _plain(value.item())
    if isinstance(value, Sequence) and not isinstance(value, (str, bytes)):
        return [_plain(entry) for entry in value]
    if value is None or isinstance(value, (str, bool, int, float)):
        return value
    raise InputError(f"a {type(value).__name__} in a record", allowed="text, numbers, lists and tables of them")

"""Dose maps and depth curves as NetCDF that others can open: units, sources and caution inside, same bytes each time.

Files are NetCDF-4 with attributes after the CF conventions (CF-1.11) as far as they fit: a
coordinate has ``units`` and ``long_name``, a variable ``units``; lengths are millimetres in
DICOM patient axes. Values are compressed without loss. The library writes no times, so
equal contents give equal bytes with the same library versions; `content_hash` does not
depend on the library at all.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.caution import CAUTION
from dosekit.errors import InputError
from dosekit.outputs.files import whole_file
from dosekit.outputs.record import canonical_json

if TYPE_CHECKING:
    from collections.abc import Sequence

    import xarray as xr

__all__ = ["content_hash", "read_dataset", "write_dataset"]

CONVENTIONS = "CF-1.11"
_COMPRESSION = 4
_CHUNK_VALUES = 1 << 18
_AXIS_ATTRS = {
    "x": {"units": "mm", "axis": "X", "long_name": "position towards the left of the patient (LPS)"},
    "y": {"units": "mm", "axis": "Y", "long_name": "position towards the back of the patient (LPS)"},
    "z": {"units": "mm", "axis": "Z", "long_name": "position towards the head of the patient (LPS)"},
    "depth": {"units": "mm", "long_name": "depth of the bin's centre", "positive": "down"},
    "component": {"long_name": "part of the dose"},
}
_TYPES = (str, int, float, bool, np.integer, np.floating, np.bool_)


def write_dataset(
    dataset: xr.Dataset,
    path: str | Path,
    *,
    run_hash: str,
    sources: Sequence[str] = (),
    title: str = "",
) -> Path:
    """Write a dataset as NetCDF, complete or not at all.

    Parameters
    ----------
    dataset : Dataset
        What to write; its variables must have ``units``.
    path : str or Path
        Where to write.
    run_hash : str
        Hash of the run that made it.
    sources : sequence of str
        What the numbers rest on.
    title : str
        What the file holds.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    InputError
        If a variable has no unit.
    OutputError
        If the place cannot be written.
    """
    prepared = _prepared(dataset, run_hash=run_hash, sources=sources, title=title)
    encoding = {name: _encoding(prepared[name]) for name in prepared.data_vars}
    with whole_file(path) as partial:
        prepared.to_netcdf(partial, engine="h5netcdf", format="NETCDF4", encoding=encoding)
    return Path(path)


def read_dataset(path: str | Path) -> xr.Dataset:
    """Read a dataset back into memory and close the file.

    Parameters
    ----------
    path : str or Path
        A file written by `write_dataset`.

    Returns
    -------
    Dataset
        The contents.

    Raises
    ------
    InputError
        If the file is not there or is not such a file.
    """
    import xarray as xr

    source = Path(path)
    if not source.is_file():
        raise InputError(f"no file {source.name}", remedy="check the name")
    try:
        with xr.open_dataset(source, engine="h5netcdf") as opened:
            return opened.load()
    except (OSError, ValueError, KeyError) as problem:
        raise InputError(
            f"{source.name} cannot be read as NetCDF", allowed="a NetCDF-4 file", remedy="write the file again"
        ) from problem


def content_hash(dataset: xr.Dataset) -> str:
    """Return a SHA-256 of names, shapes, types, values and attributes, whatever the file library does.

    Parameters
    ----------
    dataset : Dataset
        The contents.

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    for name in sorted(map(str, dataset.variables)):
        variable = dataset.variables[name]
        values = np.asarray(variable.values)
        text = values.dtype.kind in "OUS"
        head = {
            "name": name,
            "dims": [str(dim) for dim in variable.dims],
            "type": "text" if text else values.dtype.newbyteorder("<").str,
            "attrs": _plain_attrs(variable.attrs),
        }
        digest.update(canonical_json(head).encode())
        if text:
            digest.update(canonical_json([str(value) for value in values.ravel()]).encode())
        else:
            digest.update(np.ascontiguousarray(values, dtype=values.dtype.newbyteorder("<")).tobytes())
    digest.update(canonical_json(_plain_attrs(dataset.attrs)).encode())
    return digest.hexdigest()


def _prepared(dataset: xr.Dataset, *, run_hash: str, sources: Sequence[str], title: str) -> xr.Dataset:
    result = dataset.copy(deep=False)
    for name, variable in dataset.data_vars.items():
        if not str(variable.attrs.get("units", "")):
            raise InputError(f"variable {name!r} without a unit", allowed="an attribute 'units' on every variable")
        result[name] = variable.copy(deep=False)
        result[name].attrs = _plain_attrs(variable.attrs)
    for name in result.coords:
        plain = _plain_attrs(result[name].attrs)
        result[name].attrs = {**_AXIS_ATTRS.get(str(name), {}), **plain}
        # xarray would otherwise mark coordinates with a fill value, which CF forbids.
        result[name].encoding = {"_FillValue": None} if result[name].dtype.kind == "f" else {}
    inherited = _plain_attrs(dataset.attrs)
    own = {
        "Conventions": CONVENTIONS,
        "title": title or str(inherited.get("title", "dose calculated by dosekit")),
        "caution": CAUTION,
        "institution": "not stated",
        "source": "dosekit, model calculation",
        "references": "\n".join(sources) or str(inherited.get("sources", "see the run record")),
        "run_hash": run_hash,
    }
    result.attrs = dict(sorted({**inherited, **own}.items()))
    return result


def _encoding(variable: xr.DataArray) -> dict[str, Any]:
    if variable.dtype.kind not in "fiu" or variable.ndim == 0:
        return {}
    chunks = list(variable.shape)
    while int(np.prod(chunks)) > _CHUNK_VALUES and chunks[0] > 1:
        chunks[0] = -(-chunks[0] // 2)
    for axis in range(1, len(chunks)):
        while int(np.prod(chunks)) > _CHUNK_VALUES and chunks[axis] > 1:
            chunks[axis] = -(-chunks[axis] // 2)
    encoding: dict[str, Any] = {
        "zlib": True,
        "complevel": _COMPRESSION,
        "shuffle": True,
        "chunksizes": tuple(chunks),
    }
    if variable.dtype.kind == "f":
        encoding["_FillValue"] = None
    return encoding


def _plain_attrs(attrs: Any) -> dict[str, Any]:
    plain: dict[str, Any] = {}
    for key, value in sorted(dict(attrs).items(), key=lambda item: str(item[0])):
        if isinstance(value, np.generic):
            plain[str(key)] = value.item()
        elif isinstance(value, bool):
            plain[str(key)] = int(value)
        elif isinstance(value, _TYPES):
            plain[str(key)] = value
        elif isinstance(value, (list, tuple)) and all(isinstance(part, str) for part in value):
            plain[str(key)] = "\n".join(value)
        elif isinstance(value, (list, tuple, np.ndarray)) and np.asarray(value).dtype.kind in "fiu":
            plain[str(key)] = [float(part) for part in np.asarray(value).ravel()]
        elif value is None:
            plain[str(key)] = ""
        else:
            plain[str(key)] = canonical_json(value)
    return plain

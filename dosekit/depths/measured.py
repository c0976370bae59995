"""How does a measured depth-dose curve come in? A CSV file with a header, checked point by point."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import InputError

__all__ = ["check_points", "read_depth_dose"]


def read_depth_dose(path: str | Path) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Read depth and relative dose from a CSV file with a header.

    Parameters
    ----------
    path : str or Path
        File whose first line names the columns, one beginning with ``depth`` (mm) and one with ``dose``; lines that
        start with ``#`` are skipped.

    Returns
    -------
    depth_mm, dose : ndarray
        Points in the order of depth.

    Raises
    ------
    InputError
        If the file cannot be read, or its columns are absent, swapped or hold anything but finite numbers.
    """
    place = Path(path)
    try:
        text = place.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"{place.name} cannot be read ({error.__class__.__name__})", allowed="a CSV text file"
        ) from None
    lines = [(n, line) for n, line in enumerate(text.splitlines(), 1) if line.strip() and not line.startswith("#")]
    if len(lines) < 2:
        raise InputError(f"{place.name} holds no points", allowed="a header and at least six rows")
    names = [name.strip().lower() for name in next(csv.reader([lines[0][1]]))]
    found = {}
    for want in ("depth", "dose"):
        match = [i for i, name in enumerate(names) if name.startswith((want, f"relative_{want}"))]
        if len(match) != 1:
            raise InputError(
                f"{place.name}: columns {', '.join(names)}",
                allowed="one column that begins with 'depth' (mm) and one that begins with 'dose'",
                remedy="name the columns depth_mm,dose",
            )
        found[want] = match[0]
    rows = []
    for number, line in lines[1:]:
        cells = next(csv.reader([line]))
        try:
            rows.append([float(cells[found["depth"]]), float(cells[found["dose"]])])
        except (ValueError, IndexError):
            raise InputError(
                f"{place.name}, line {number}: {line.strip()!r}", allowed="two numbers", remedy="mend the row"
            ) from None
    table = np.array(rows)
    check_points(table[:, 0], table[:, 1], place.name)
    order = np.argsort(table[:, 0], kind="stable")
    return table[order, 0], table[order, 1]


def check_points(depth: NDArray[np.float64], dose: NDArray[np.float64], name: str) -> None:
    """Refuse points that cannot be a depth-dose curve, among them swapped columns.

    Parameters
    ----------
    depth : ndarray, shape (n,)
        Depths, mm.
    dose : ndarray, shape (n,)
        Relative doses.
    name : str
        What the points are called in the message.

    Raises
    ------
    InputError
        If there are too few, or one cannot be.
    """
    if depth.shape != dose.shape or depth.ndim != 1 or len(depth) < 6:
        raise InputError(f"{name}: {depth.shape} depths and {dose.shape} doses", allowed="at least six pairs")
    if not (np.all(np.isfinite(depth)) and np.all(np.isfinite(dose))):
        raise InputError(f"{name}: a value is missing or not finite", allowed="finite numbers", remedy="remove the row")
    if np.any(dose < 0.0) or np.max(dose) <= 0.0:
        raise InputError(f"{name}: negative dose, or none above zero", allowed="doses of 0 and more")
    if np.any(depth < -50.0) or np.max(depth) > 2000.0:
        raise InputError(f"{name}: depths from {np.min(depth):g} to {np.max(depth):g}", allowed="-50 to 2000 mm")
    turns = np.sum(np.diff(np.sign(np.diff(depth[np.diff(depth, prepend=depth[0] - 1.0) != 0.0]))) != 0.0)
    rising = np.all(np.diff(dose) > 0.0) or np.all(np.diff(dose) < 0.0)
    if len(np.unique(depth)) < len(depth) or (turns > 0 and rising):
        raise InputError(
            f"{name}: depths repeat or jump while doses run evenly; the columns look swapped",
            allowed="each depth (mm) once, in one column",
            remedy="check which column holds depth",
        )

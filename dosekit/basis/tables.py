"""Published numbers as tables: how are they read, and what must each say about itself?

Every table is a CSV file with a header of ``#`` lines. The header must say, each on its own line,
``source``, ``status``, ``units``, ``validity``, ``uncertainty`` and ``permission``. An empty cell means
missing (NaN in a number column). A damaged row stops the load with file and line.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import lru_cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import TableError

__all__ = ["REQUIRED_HEADER", "Table", "parse_table", "read_table"]

REQUIRED_HEADER: tuple[str, ...] = ("source", "status", "units", "validity", "uncertainty", "permission")
"""What the header of every data table must say."""


@dataclass(frozen=True)
class Table:
    """A read-only table with its header.

    Attributes
    ----------
    name : str
        File name without ending.
    header : dict of str to str
        What the table says about itself: source, status, units, validity, uncertainty, permission.
    columns : dict of str to ndarray
        Columns by name; numbers as float64 (NaN where a cell is empty), words as object arrays of str.
    """

    name: str
    header: dict[str, str]
    columns: dict[str, NDArray[Any]] = field(repr=False)

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(next(iter(self.columns.values())))

    def __getitem__(self, column: str) -> NDArray[Any]:
        """Return one column."""
        return self.columns[column]

    def rows(self) -> Iterator[dict[str, Any]]:
        """Yield the rows as dictionaries.

        Yields
        ------
        dict
            Column name to value.
        """
        names = list(self.columns)
        for values in zip(*self.columns.values(), strict=True):
            yield dict(zip(names, values, strict=True))

    def where(self, **equal: object) -> Table:
        """Return the rows in which columns equal the given values.

        Parameters
        ----------
        **equal : object
            Column name and the value wanted.

        Returns
        -------
        Table
            A table with fewer rows.
        """
        keep = np.ones(len(self), dtype=bool)
        for column, value in equal.items():
            keep &= self.columns[column] == value
        return Table(self.name, self.header, {key: _frozen(col[keep]) for key, col in self.columns.items()})


@lru_cache(maxsize=64)
def read_table(name: str, folder: str = "basis") -> Table:
    """Read a table that ships with the package.

    Parameters
    ----------
    name : str
        File name without ``.csv``.
    folder : str
        The room whose ``data`` folder holds it.

    Returns
    -------
    Table
        The table; read once, then kept.

    Raises
    ------
    TableError
        If the file is absent, its header incomplete or a row damaged.

    Examples
    --------
    >>> read_table("materials").header["units"]
    'density g/cm3; mean_excitation eV; mass fractions'
    """
    resource = files("dosekit") / folder / "data" / f"{name}.csv"
    if not resource.is_file():
        raise TableError(f"there is no table {folder}/data/{name}.csv", remedy="reinstall the package")
    return parse_table(resource.read_text(encoding="utf-8"), name=f"{folder}/data/{name}.csv")


def parse_table(text: str, *, name: str, required: tuple[str, ...] = REQUIRED_HEADER) -> Table:
    """Turn the text of a table into columns, checking header and rows.

    Parameters
    ----------
    text : str
        The whole file.
    name : str
        What to call it in messages.
    required : tuple of str
        Header keys that must be present.

    Returns
    -------
    Table
        The table.

    Raises
    ------
    TableError
        If the header is incomplete, or a row is damaged; file and line are named.
    """
    header: dict[str, str] = {}
    lines: list[tuple[int, str]] = []
    for number, line in enumerate(text.splitlines(), start=1):
        if line.startswith("#"):
            key, _, value = line[1:].strip().partition(":")
            if value.strip():
                header[key.strip()] = value.strip()
        elif line.strip():
            lines.append((number, line))
    absent = [key for key in required if key not in header]
    if absent:
        raise TableError(
            f"{name}: the header lacks {', '.join(absent)}",
            allowed="one '# key: text' line for each of " + ", ".join(required),
            remedy="complete the header",
        )
    if len(lines) < 2:
        raise TableError(f"{name}: no rows", remedy="restore the file")
    names = next(csv.reader([lines[0][1]]))
    if len(set(names)) != len(names) or not all(names):
        raise TableError(f"{name}, line {lines[0][0]}: column names are doubled or empty")
    cells: list[list[str]] = []
    for number, line in lines[1:]:
        row = next(csv.reader([line]))
        if len(row) != len(names):
            raise TableError(
                f"{name}, line {number}: {len(row)} cells",
                allowed=f"{len(names)} cells",
                remedy="mend the row",
            )
        cells.append([cell.strip() for cell in row])
    columns = {
        column: _column([row[index] for row in cells], name, column, [number for number, _ in lines[1:]])
        for index, column in enumerate(names)
    }
    return Table(Path(name).stem, header, columns)


def _column(cells: list[str], name: str, column: str, numbers: list[int]) -> NDArray[Any]:
    """Read a column as numbers when most of it is numeric, else as words."""
    values = np.full(len(cells), np.nan)
    bad: list[int] = []
    for index, cell in enumerate(cells):
        if cell:
            try:
                values[index] = float(cell)
            except ValueError:
                bad.append(index)
    filled = sum(bool(cell) for cell in cells)
    if not bad:
        infinite = [index for index, cell in enumerate(cells) if cell and not np.isfinite(values[index])]
        if infinite:
            raise TableError(f"{name}, line {numbers[infinite[0]]}: column {column} is not finite")
        return _frozen(values)
    if filled and 2 * len(bad) < filled:
        raise TableError(
            f"{name}, line {numbers[bad[0]]}: {cells[bad[0]]!r} in the number column {column}",
            allowed="a number or an empty cell",
            remedy="mend the row",
        )
    return _frozen(np.array(cells, dtype=object))


def _frozen(values: NDArray[Any]) -> NDArray[Any]:
    """Return the array made read-only."""
    values.setflags(write=False)
    return values

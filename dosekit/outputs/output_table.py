"""A table with its units and sources, as CSV with a full head and as aligned text.

Every CSV begins with comment lines (``#``): the research-only caution, what the table holds,
units, sources and the hash of the run. Numbers are written with a fixed count of digits and
plain points, so the bytes do not depend on the machine's language.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from dosekit.caution import caution_comment
from dosekit.errors import InputError
from dosekit.outputs.files import write_text

__all__ = ["Cell", "OutputTable", "spoken"]

_DIGITS = 7
_UNIT_ENDINGS = {
    "_per_mm": "1/mm",
    "_mev_mm": "MeV/mm",
    "_mm": "mm",
    "_gy": "Gy",
    "_mev": "MeV",
    "_percent": "%",
    "_cm3": "cm³",
    "_j": "J",
    "_1e9": "1e9",
    "_s": "s",
}
Cell = str | float | int


@dataclass(frozen=True)
class OutputTable:
    """A table with its units and sources.

    Parameters
    ----------
    what : str
        What it holds, in a sentence.
    columns : tuple of str
        Column names; they carry their unit.
    units : str
        What the columns are measured in, for a reader of the file alone.
    rows : tuple of tuples
        Cells; nan is written as an empty cell.
    sources : tuple of str
        What the numbers rest on.
    """

    what: str
    columns: tuple[str, ...]
    units: str
    rows: tuple[tuple[Cell, ...], ...]
    sources: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Refuse rows of another length than the head."""
        for number, row in enumerate(self.rows, start=1):
            if len(row) != len(self.columns):
                raise InputError(f"row {number} of {self.what!r} with {len(row)} cells for {len(self.columns)} columns")

    def csv(self, *, run_hash: str) -> str:
        """Return the table as CSV with its comment lines.

        Parameters
        ----------
        run_hash : str
            Hash of the run that made it.

        Returns
        -------
        str
            The text of the file.
        """
        head = io.StringIO()
        head.write(caution_comment())
        head.write(f"# what: {_one_line(self.what)}\n")
        head.write(f"# units: {_one_line(self.units)}\n")
        for source in self.sources or ("own calculation",):
            head.write(f"# source: {_one_line(source)}\n")
        head.write(f"# run: {_one_line(run_hash)}\n")
        writer = csv.writer(head, lineterminator="\n")
        writer.writerow(self.columns)
        writer.writerows([[_csv_cell(cell) for cell in row] for row in self.rows])
        return head.getvalue()

    def text(self, *, digits: int = 4) -> str:
        """Return the table as aligned text, numbers to the right.

        Parameters
        ----------
        digits : int
            Significant digits.

        Returns
        -------
        str
            Lines ending in a newline.
        """
        cells = [[_text_cell(cell, digits) for cell in row] for row in self.rows]
        widths = [max(len(line[i]) for line in [list(self.columns), *cells]) for i in range(len(self.columns))]
        numeric = [all(not isinstance(row[i], str) for row in self.rows) for i in range(len(self.columns))]

        def line(parts: Sequence[str]) -> str:
            padded = (
                part.rjust(width) if right else part.ljust(width)
                for part, width, right in zip(parts, widths, numeric, strict=True)
            )
            return "  ".join(padded).rstrip() + "\n"

        rule = "  ".join("-" * width for width in widths) + "\n"
        return line(self.columns) + rule + "".join(line(row) for row in cells)

    def write(self, path: str | Path, *, run_hash: str) -> Path:
        """Write the table as CSV, complete or not at all.

        Parameters
        ----------
        path : str or Path
            Where to write.
        run_hash : str
            Hash of the run that made it.

        Returns
        -------
        Path
            The file.
        """
        return write_text(path, self.csv(run_hash=run_hash))


def spoken(column: str) -> str:
    """Return a column's name as a reader would say it, with its unit in brackets.

    Parameters
    ----------
    column : str
        A name that carries its unit.

    Returns
    -------
    str
        The printed name.

    Examples
    --------
    >>> spoken("residual_range_mm")
    'residual range (mm)'
    >>> spoken("d95_gy")
    'D95 (Gy)'
    """
    column = re.sub(r"^d(?=\d)", "D", column)
    for ending, unit in _UNIT_ENDINGS.items():
        if column.endswith(ending):
            return f"{column.removesuffix(ending).replace('_', ' ')} ({unit})"
    return column.replace("_", " ")


def _one_line(text: str) -> str:
    return " ".join(text.split())


def _number(value: float, digits: int) -> str:
    if not np.isfinite(value):
        return ""
    return f"{value + 0.0:.{digits}g}"


def _csv_cell(cell: Cell) -> str:
    if isinstance(cell, str):
        # A name that a spreadsheet would take for a formula is kept as text.
        return "'" + cell if cell[:1] in {"=", "+", "-", "@"} else _one_line(cell)
    return str(cell) if isinstance(cell, int) else _number(cell, _DIGITS)


def _text_cell(cell: Cell, digits: int) -> str:
    if isinstance(cell, str):
        return _one_line(cell)
    return str(cell) if isinstance(cell, int) else _number(cell, digits) or "-"

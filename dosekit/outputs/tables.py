"""Tables that open anywhere: settings, volume histograms, components, depth curves.

A table is written as CSV and can be shown as aligned text. Every CSV begins with comment lines
(``#``): the research-only caution, what the table holds, units, sources and the hash of the run.
Numbers are written with a fixed count of digits and plain points, so the bytes do not depend
on the machine's language.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.caution import caution_comment
from dosekit.errors import InputError
from dosekit.outputs.files import write_text

if TYPE_CHECKING:
    from pathlib import Path

    import xarray as xr

    from dosekit.maps.fields import Field
    from dosekit.outputs.figures_histogram import Histogram

__all__ = [
    "OutputTable",
    "component_share_table",
    "component_table",
    "depth_curve_table",
    "histogram_table",
    "measures_table",
    "settings_table",
    "spoken",
    "spots_table",
]

PARTICLES_PER_UNIT = 1e9
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


def settings_table(
    fields: Sequence[Field],
    *,
    residual_range_mm: Mapping[str, Sequence[float]],
    particles_per_s: float,
    sources: Sequence[str] = (),
) -> OutputTable:
    """Tabulate what a machine would have to do: one row for each field and range step.

    Parameters
    ----------
    fields : sequence of Field
        The fields with their weights.
    residual_range_mm : mapping of field name to sequence of float
        Residual range in water behind the shifter for each step.
    particles_per_s : float
        Rate of the beam's main species.
    sources : sequence of str
        What the settings rest on.

    Returns
    -------
    OutputTable
        Field, step, water-equivalent thickness, residual range, spots in use, weight (1e9 particles),
        share of the field, particles, time.
    """
    if not (np.isfinite(particles_per_s) and particles_per_s > 0.0):
        raise InputError(f"a rate of {particles_per_s:g} particles per second", allowed="a rate above zero")
    rows: list[tuple[Cell, ...]] = []
    for field in fields:
        weights = np.atleast_2d(np.asarray(field.weights, dtype=np.float64))
        ranges = residual_range_mm[field.name]
        if len(ranges) != weights.shape[1]:
            raise InputError(f"{len(ranges)} residual ranges for the {weights.shape[1]} steps of field {field.name!r}")
        per_step = weights.sum(axis=0)
        whole = float(per_step.sum())
        for step, weight in enumerate(per_step):
            particles = float(weight) * PARTICLES_PER_UNIT
            rows.append(
                (
                    field.name,
                    step + 1,
                    float(field.shift_mm[step]),
                    float(ranges[step]),
                    int(np.count_nonzero(weights[:, step] > 0.0)),
                    float(weight),
                    100.0 * float(weight) / whole if whole > 0.0 else 0.0,
                    particles,
                    particles / particles_per_s,
                )
            )
    return OutputTable(
        what="settings of each field and range step",
        columns=(
            "field",
            "step",
            "water_equivalent_thickness_mm",
            "residual_range_mm",
            "spots",
            "weight_1e9",
            "share_percent",
            "particles",
            "time_s",
        ),
        units=(
            "thickness and range in mm of water; weight in 1e9 particles of the main species, summed over spots; "
            f"share in % of the field; time in s at {particles_per_s:g} particles per second"
        ),
        rows=tuple(rows),
        sources=tuple(sources),
    )


def spots_table(fields: Sequence[Field], *, sources: Sequence[str] = ()) -> OutputTable:
    """Tabulate every spot that gives something, in the plane of the isocentre.

    Parameters
    ----------
    fields : sequence of Field
        The fields with their weights.
    sources : sequence of str
        What the settings rest on.

    Returns
    -------
    OutputTable
        Field, step, spot, u, v, particles; spots without particles are left out.
    """
    rows: list[tuple[Cell, ...]] = []
    for field in fields:
        weights = np.atleast_2d(np.asarray(field.weights, dtype=np.float64))
        spots = np.asarray(field.spots_mm, dtype=np.float64)
        for step in range(weights.shape[1]):
            for spot in np.flatnonzero(weights[:, step] > 0.0):
                u, v = (float(value) for value in spots[spot])
                rows.append(
                    (field.name, step + 1, int(spot) + 1, u, v, float(weights[spot, step]) * PARTICLES_PER_UNIT)
                )
    return OutputTable(
        what="spots of each field and range step",
        columns=("field", "step", "spot", "u_mm", "v_mm", "particles"),
        units=(
            "u, v in mm in the plane of the isocentre along the beam's x and y axes (IEC 61217); "
            "particles of the main species"
        ),
        rows=tuple(rows),
        sources=tuple(sources),
    )


def histogram_table(
    histograms: Mapping[str, Histogram],
    *,
    volumes_cm3: Mapping[str, float] | None = None,
    unit: str = "Gy",
    sources: Sequence[str] = (),
) -> OutputTable:
    """Tabulate cumulative volume histograms in long form.

    Parameters
    ----------
    histograms : mapping of str to (dose_gy, volume_fraction)
        One pair for each structure.
    volumes_cm3 : mapping of str to float, optional
        Volume of each structure.
    unit : str
        Unit of the dose.
    sources : sequence of str
        What the dose rests on.

    Returns
    -------
    OutputTable
        Structure, dose, volume in % and in cm3 (empty where the volume is not known).
    """
    rows: list[tuple[Cell, ...]] = []
    for name, (dose_gy, fraction) in histograms.items():
        volume = (volumes_cm3 or {}).get(name, float("nan"))
        rows += [
            (name, float(dose), 100.0 * float(part), volume * float(part))
            for dose, part in zip(np.asarray(dose_gy), np.asarray(fraction), strict=True)
        ]
    return OutputTable(
        what="cumulative volume histograms: volume that receives at least the dose",
        columns=("structure", "dose_gy", "volume_percent", "volume_cm3"),
        units=f"dose in {unit}; volume in % of the structure and in cm3",
        rows=tuple(rows),
        sources=tuple(sources),
    )


def component_table(
    doses_gy: Mapping[str, Mapping[str, float]], *, unit: str = "Gy", sources: Sequence[str] = ()
) -> OutputTable:
    """Tabulate the mean dose of each component in each structure.

    Parameters
    ----------
    doses_gy : mapping of structure to mapping of component to float
        Mean doses.
    unit : str
        Unit of the dose.
    sources : sequence of str
        What the doses rest on.

    Returns
    -------
    OutputTable
        Structure, component, mean dose, share of the structure's dose.
    """
    rows: list[tuple[Cell, ...]] = []
    for structure, parts in doses_gy.items():
        whole = float(sum(parts.values()))
        for component, dose in parts.items():
            rows.append((structure, component, float(dose), 100.0 * float(dose) / whole if whole > 0.0 else 0.0))
        rows.append((structure, "total", whole, 100.0 if whole > 0.0 else 0.0))
    return OutputTable(
        what="mean dose by component in each structure",
        columns=("structure", "component", "mean_dose_gy", "share_percent"),
        units=f"dose in {unit}; share in % of the structure's mean dose",
        rows=tuple(rows),
        sources=tuple(sources),
    )


def component_share_table(
    doses_gy: Mapping[str, Mapping[str, float]], *, unit: str = "Gy", sources: Sequence[str] = ()
) -> OutputTable:
    """Tabulate the mean dose of each structure and how its components share it, one row for each structure.

    Parameters
    ----------
    doses_gy : mapping of structure to mapping of component to float
        Mean doses.
    unit : str
        Unit of the dose.
    sources : sequence of str
        What the doses rest on.

    Returns
    -------
    OutputTable
        Structure, mean dose, share of each component in %.
    """
    names = list(dict.fromkeys(name for parts in doses_gy.values() for name in parts))
    rows: list[tuple[Cell, ...]] = []
    for structure, parts in doses_gy.items():
        whole = float(sum(parts.values()))
        shares = (100.0 * float(parts.get(name, 0.0)) / whole if whole > 0.0 else float("nan") for name in names)
        rows.append((structure, whole, *shares))
    return OutputTable(
        what="mean dose of each structure and the share of each component",
        columns=("structure", "mean_dose_gy", *(f"{name}_percent" for name in names)),
        units=f"dose in {unit}; shares in % of the structure's mean dose",
        rows=tuple(rows),
        sources=tuple(sources),
    )


def depth_curve_table(curve: xr.Dataset, *, sources: Sequence[str] = ()) -> OutputTable:
    """Tabulate a depth curve: depth, every component, the sum, stops.

    Parameters
    ----------
    curve : Dataset
        ``energy(component, depth)`` and, if there, ``stops(depth)``.
    sources : sequence of str
        What the curve rests on.

    Returns
    -------
    OutputTable
        One row for each depth bin.
    """
    energy = curve["energy"].transpose("component", "depth")
    names = [str(name) for name in energy["component"].values]
    values = np.asarray(energy.values, dtype=np.float64)
    depth_mm = np.asarray(curve["depth"].values, dtype=np.float64)
    columns = ["depth_mm", *(f"{name}_mev_mm" for name in names), "total_mev_mm"]
    block = [depth_mm, *values, values.sum(axis=0)]
    if "stops" in curve and curve["stops"].dims == ("depth",):
        columns.append("stops_per_mm")
        block.append(np.asarray(curve["stops"].values, dtype=np.float64))
    return OutputTable(
        what="depth curve by component",
        columns=tuple(columns),
        units=(
            "depth of the bin's centre in mm; energy in MeV/mm and stops in 1/mm, "
            "per incident particle of the main species"
        ),
        rows=tuple(tuple(float(cell) for cell in row) for row in np.stack(block, axis=1)),
        sources=tuple(sources),
    )


def measures_table(
    measures: Mapping[str, Mapping[str, float]], *, units: str, first: str = "structure", sources: Sequence[str] = ()
) -> OutputTable:
    """Tabulate named measures, one row for each structure or particle.

    Parameters
    ----------
    measures : mapping of str to mapping of str to float
        Row name to measures by name.
    units : str
        What they are measured in.
    first : str
        Name of the first column.
    sources : sequence of str
        What the numbers rest on.

    Returns
    -------
    OutputTable
        Missing measures are empty cells.
    """
    names = list(dict.fromkeys(name for row in measures.values() for name in row))
    return OutputTable(
        what=f"measures by {first}",
        columns=(first, *names),
        units=units,
        rows=tuple((key, *(float(row.get(name, float("nan"))) for name in names)) for key, row in measures.items()),
        sources=tuple(sources),
    )


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
    """
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

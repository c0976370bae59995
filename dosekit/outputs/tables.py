"""The tables of a run: settings, spots, volume histograms, components, measures, depth curves."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError
from dosekit.outputs.output_table import Cell, OutputTable, spoken

if TYPE_CHECKING:
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

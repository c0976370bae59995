"""Write a finished run into its folder: maps, tables, figures, DICOM, report, record."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.studies.drawing import write_figures
from dosekit.studies.model import file_name
from dosekit.studies.result import Result

if TYPE_CHECKING:
    import xarray as xr
    from numpy.typing import NDArray

    from dosekit.outputs.report import ReportFigure
    from dosekit.outputs.tables import OutputTable

__all__ = ["write_results"]

Progress = Callable[[str, float], None]


def write_results(result: Result, folder: Path, *, study_text: str, progress: Progress | None = None) -> None:
    """Write all outputs that the study asks for.

    Parameters
    ----------
    result : Result
        The finished run.
    folder : Path
        An existing, empty folder.
    study_text : str
        The study file as the user wrote it.
    progress : callable, optional
        Told what is being done.
    """
    from dosekit.outputs.record import RunRecord, package_versions, portable_text, write_record
    from dosekit.outputs.report import report_html, write_report

    tell = progress or (lambda what, fraction: None)  # noqa: ARG005
    outputs = result.study.outputs
    tell("tables", 0.0)
    tables = _write_tables(result, folder)
    _write_maps(result, folder)
    tell("tables", 1.0)
    figures: list[ReportFigure] = []
    if outputs.figures:
        figures = write_figures(result, folder / "figures", tell)
    if outputs.dicom:
        tell("DICOM", 0.0)
        _write_dicom(result, folder / "dicom", figures_folder=folder / "figures")
        tell("DICOM", 1.0)
    record = RunRecord(
        run_hash=result.run_hash,
        study_text=portable_text(study_text),
        inputs=result.inputs,
        versions=package_versions(),
        sources=result.summary.sources,
        warnings=result.warnings,
        energy_balance=result.summary.energy_balance,
        results=_numbers(result),
        outputs=_hashes(folder),
    )
    if outputs.report:
        html = report_html(result.summary, record, figures=figures, tables=tables)
        write_report(folder / "report.html", html)
        record = RunRecord(**{**record.__dict__, "outputs": _hashes(folder)})
    write_record(record, folder / "record.json")


def _hashes(folder: Path) -> dict[str, str]:
    """Return the hash of every file in the folder."""
    from dosekit.outputs.files import sha256_of_file

    return {
        path.relative_to(folder).as_posix(): sha256_of_file(path)
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name != "record.json"
    }


def _numbers(result: Result) -> dict[str, Any]:
    """Return the numbers worth having without opening another file."""
    summary = result.summary
    return {
        "line": result.line,
        "flatness_percent": summary.flatness_percent,
        "peak_depth_mm": summary.peak_depth_mm,
        "star_share": summary.star_share,
        "mean_dose_gy": summary.mean_dose_gy,
        "beam_time_s": summary.beam_time_s,
        "weight_scale": result.scale,
        "momentum_mev_c": {plan.field.name: plan.field.beam.momentum_mev_c for plan in result.planned},
        "anonymous": result.study.outputs.anonymous,
    }


def _write_tables(result: Result, folder: Path) -> list[tuple[str, OutputTable]]:
    """Write the tables and return those that the report shows."""
    from dosekit.outputs.files import write_text
    from dosekit.outputs.summary import summary_text
    from dosekit.outputs.tables import (
        component_share_table,
        component_table,
        histogram_table,
        measures_table,
        settings_table,
        spots_table,
    )

    sources = result.summary.sources
    fields = [plan.field for plan in result.planned]
    settings = settings_table(
        fields,
        residual_range_mm={plan.field.name: plan.residual_range_mm.tolist() for plan in result.planned},
        particles_per_s=result.study.machine.particles_per_s,
        sources=sources,
    )
    measures = measures_table(result.summary.measures, units="doses Gy, volumes cm3", sources=sources)
    effect_measures = measures_table(
        result.summary.effect_measures, units="effect-weighted doses Gy, volumes cm3", sources=sources
    )
    energy = measures_table(result.summary.energy_by_component, units="J", first="component", sources=sources)
    doses = _doses_by_structure(result)
    components = component_table(doses, sources=sources)
    histograms = histogram_table(
        {name: histogram.curve() for name, histogram in result.histograms.items()},
        volumes_cm3={name: histogram.total_volume_cm3 for name, histogram in result.histograms.items()},
        sources=sources,
    )
    tables = {
        "settings": settings,
        "spots": spots_table(fields, sources=sources),
        "measures": measures,
        "components": components,
        "histograms": histograms,
        "energy": energy,
    }
    if result.summary.effect_measures:
        tables["measures_effect"] = effect_measures
        tables["histograms_effect"] = histogram_table(
            {name: histogram.curve() for name, histogram in result.effect_histograms.items()},
            volumes_cm3={name: histogram.total_volume_cm3 for name, histogram in result.effect_histograms.items()},
            unit="Gy (effect-weighted)",
            sources=sources,
        )
    if result.others:
        from dosekit.studies.comparing import comparison_rows

        rows = {one.planned[0].field.beam.particle: comparison_rows(one) for one in (result, *result.others)}
        tables["comparison"] = measures_table(
            rows,
            units="Gy, J, s, MeV/c, keV/um, shares as fractions; as the names say",
            first="particle",
            sources=sources,
        )
    for name, table in tables.items():
        table.write(folder / f"{name}.csv", run_hash=result.run_hash)
    write_text(folder / "summary.txt", summary_text(result.summary, settings=settings))
    return [
        ("Settings of each field and range step", settings),
        ("Dose measures by structure", measures),
        *([("The same of effect-weighted dose", effect_measures)] if result.summary.effect_measures else []),
        ("Mean dose by structure and shares of the components", component_share_table(doses, sources=sources)),
        ("Energy by component: deposited in the volume; of stars also emitted, bound, escaped", energy),
    ]


def _doses_by_structure(result: Result) -> dict[str, dict[str, float]]:
    """Return the mean dose of each component in each structure reported on."""
    from dosekit.outputs.summary import mean_doses_gy

    return {name: mean_doses_gy(result.dose, result.grid.structure(name)) for name in result.histograms}


def _write_maps(result: Result, folder: Path) -> None:
    """Write the dose maps, components apart, on the lattice that the study asks for."""
    from dosekit.outputs.netcdf import write_dataset

    dataset = _on_output_lattice(result, result.maps())
    write_dataset(
        dataset, folder / "dose.nc", run_hash=result.run_hash, sources=result.summary.sources, title=result.study.title
    )


def _on_output_lattice(result: Result, dataset: xr.Dataset) -> xr.Dataset:
    """Return maps on the output lattice: the volume's own, or that of the spacing asked for."""
    spacing = result.study.outputs.dose_spacing_mm
    if spacing is None:
        return dataset
    from dosekit.maps.lattices import on_lattice
    from dosekit.studies.model import axis_triple

    return on_lattice(dataset, result.grid, axis_triple(spacing), dose_to=result.study.outputs.dose_to)


def _write_dicom(result: Result, folder: Path, *, figures_folder: Path) -> None:
    """Write RT Dose, RT Ion Plan and what they refer to where it is not there yet: structures, a phantom's CT."""
    from dosekit.outputs.dicom_ct import write_ct_series
    from dosekit.outputs.dicom_dose import write_rt_dose
    from dosekit.outputs.dicom_figures import write_secondary_capture
    from dosekit.outputs.dicom_plan import write_ion_plan
    from dosekit.outputs.dicom_reference import plan_uid, reference_of, structure_set_uid
    from dosekit.outputs.dicom_structures import write_structure_set

    folder.mkdir()
    outputs = result.study.outputs
    reference = reference_of(result.grid, run_hash=result.run_hash, anonymous=outputs.anonymous)
    if result.study.volume.phantom is not None and outputs.dicom_volume:
        volume = folder / "volume"
        volume.mkdir()
        write_ct_series(volume, result.grid, run_hash=result.run_hash, reference=reference)
    if reference.structure_set_instance_uid is None:
        write_structure_set(folder / "rt_structure_set.dcm", result.grid, reference=reference, run_hash=result.run_hash)
        reference = reference.with_structure_set(structure_set_uid(result.run_hash))
    fields = [plan.field for plan in result.planned]
    write_ion_plan(
        folder / "rt_ion_plan.dcm",
        fields,
        reference=reference,
        run_hash=result.run_hash,
        description=result.study.title,
        fractions=result.study.goal.fractions,
    )
    plan = plan_uid(result.run_hash)
    maps = _on_output_lattice(result, result.maps())
    axes = {f"{axis}_mm": maps[axis].values for axis in "xyz"}
    common: dict[str, Any] = {"reference": reference, "run_hash": result.run_hash, "plan_instance_uid": plan, **axes}
    total = _summed(maps)
    write_rt_dose(folder / "rt_dose_total.dcm", total, comment="dose per fraction", **common)
    write_rt_dose(
        folder / "rt_dose_effective.dcm",
        np.maximum(maps["effect_dose"].values, 0.0),
        dose_type="EFFECTIVE",
        label="effect",
        comment=f"effect-weighted dose per fraction, model {result.study.effect.model}",
        instance_number=2,
        **common,
    )
    for number, field in enumerate(fields, start=1):
        own = _on_output_lattice(result, result.per_field[field.name])
        write_rt_dose(
            folder / f"rt_dose_field_{file_name(field.name)}.dcm",
            _summed(own),
            summation="BEAM",
            label=field.name,
            comment=f"field {field.name}, dose per fraction",
            beam_number=number,
            instance_number=2 + number,
            **common,
        )
    if outputs.secondary_capture:
        for number, picture in enumerate(sorted(figures_folder.glob("*.png")), start=1):
            write_secondary_capture(
                folder / f"figure_{picture.stem}.dcm",
                picture,
                reference=reference,
                run_hash=result.run_hash,
                label=picture.stem,
                instance_number=number,
            )


def _summed(maps: xr.Dataset) -> NDArray[np.float64]:
    """Return the sum of the components; what interpolation leaves below zero (parts per million) becomes zero."""
    return np.asarray(np.maximum(maps["dose"].sum("component", dtype=np.float64).values, 0.0))

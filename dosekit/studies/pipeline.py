"""Run a whole study: volume, fields, range steps, weights, fold, effect, measures, outputs.

:func:`compute` does everything in memory; :func:`run` writes the folder as well.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS
from dosekit.errors import DosekitWarning, ReachError
from dosekit.studies.balance import energy_by_component, energy_totals
from dosekit.studies.comparing import study_for
from dosekit.studies.folding import fold_fields, scaled_dose, scaled_plan, summed
from dosekit.studies.measures import reported_structures, structure_histograms, structure_measures
from dosekit.studies.model import Study, read_study
from dosekit.studies.planning import PlannedField, effect_model_of, plan_field
from dosekit.studies.quality import let_maps
from dosekit.studies.result import Result
from dosekit.studies.shipped import study_path
from dosekit.studies.volume import existing, input_files, load_volume
from dosekit.studies.weighing import search_weights

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.effects.histograms import VolumeHistogram
    from dosekit.effects.mixed_field import EffectModel
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.outputs.record import InputFile
    from dosekit.outputs.summary import RunSummary

__all__ = ["SOURCES", "compute", "run"]

Progress = Callable[[str, float], None]

SOURCES: tuple[str, ...] = (
    "ICRU Report 90 (2016) and ICRU Report 49 (1993): mean excitation energies and stopping",
    "Bohr 1915 with relativistic correction: straggling",
    "Gottschalk, Med. Phys. 37 (2010) 352: scattering power",
    "Barashenkov, JINR P2-90-158 (1990): pion cross sections",
    "Madey et al., Phys. Rev. C 25 (1982) 3050: neutrons from stopped pions",
    "evaluated star set, closed to 139.57 MeV; not a measurement (see its table)",
    "Ahnesjo, Med. Phys. 16 (1989) 577: collapsed cones",
    "IEC 61217 (2011): angles",
    "ICRU Report 83 (2010): volume measures",
)


def run(
    study: str | Path,
    out: str | Path,
    *,
    anonymous: bool | None = None,
    progress: Progress | None = None,
) -> Result:
    """Run a study and write its folder of results, complete or not at all.

    Parameters
    ----------
    study : str or Path
        The study file, or the name of a shipped study.
    out : str or Path
        Folder for the results; must not exist, be empty, or hold an earlier run as it was left.
    anonymous : bool, optional
        Replace patient identifiers in DICOM objects; as the study says if not given.
    progress : callable, optional
        Told what is being done and how far it is, 0 to 1.

    Returns
    -------
    Result
        All that was found.

    Raises
    ------
    InputError
        If the study or what it names cannot be used.
    OutputError
        If the results cannot be written.
    """
    from dosekit.outputs.folder import output_folder
    from dosekit.studies.writing import write_results

    path = study_path(study)
    said, text = read_study(path)
    if anonymous is not None:
        said = said.model_copy(update={"outputs": said.outputs.model_copy(update={"anonymous": anonymous})})
    with output_folder(out) as folder:
        result = compute(said, base=path.resolve().parent, progress=progress)
        write_results(result, folder, study_text=text, progress=progress)
    return result


def compute(study: Study, *, base: str | Path = ".", progress: Progress | None = None) -> Result:
    """Do everything a study asks for, in memory.

    Parameters
    ----------
    study : Study
        The validated study.
    base : str or Path
        Folder that paths in the study are relative to.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    Result
        All that was found.
    """
    tell = progress or (lambda what, fraction: None)  # noqa: ARG005
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("ignore")
        warnings.simplefilter("always", DosekitWarning)
        result = replace(_compute(study, Path(base), tell), base=Path(base))
        others = tuple(
            _compute(study_for(study, particle), Path(base), _prefixed(tell, particle))
            for particle in study.comparison.particles
        )
    told = tuple(dict.fromkeys(str(item.message) for item in caught if issubclass(item.category, DosekitWarning)))
    for item in caught:
        warnings.warn_explicit(item.message, item.category, item.filename, item.lineno)
    return replace(result, warnings=told, summary=replace(result.summary, warnings=told), others=others)


def _prefixed(tell: Progress, particle: str) -> Progress:
    """Return a progress function that names the particle."""
    return lambda what, fraction: tell(f"{particle}: {what}", fraction)


def _compute(study: Study, base: Path, tell: Progress) -> Result:
    """Compute, with warnings being collected outside."""
    from dosekit.outputs.summary import console_line

    tell("volume", 0.0)
    grid, target = load_volume(study, base, progress=tell)
    inputs = _hashed_inputs(study, base)
    tell("volume", 1.0)
    planned = [plan_field(study, section, grid, target, progress=tell) for section in study.field]
    shares = 1.0 / len(planned)
    planned = [scaled_plan(plan, shares) for plan in planned]
    known: dict[str, xr.Dataset] = {}
    searches: tuple[Any, ...] = ()
    model = effect_model_of(study, planned[0].field.beam.particle)
    if study.goal.weights != "range_steps":
        let = None
        if study.goal.quantity == "effect" and model.needs_let:
            first = summed(fold_fields(study, grid, planned, progress=tell))
            let = _let(study, grid, planned, first, tell)
        found = search_weights(study, grid, target, planned, let=let, progress=tell)
        planned, searches, known = found.planned, found.searches, found.folded
    per_field = fold_fields(study, grid, planned, known=known, progress=tell)
    total = summed(per_field)
    let = _let(study, grid, planned, total, tell)
    constants = model.constants(let)
    coverage = grid.structure(target)
    scale = _prescription_scale(study, total, coverage, model, constants)
    planned = [scaled_plan(plan, scale) for plan in planned]
    per_field = {name: scaled_dose(dataset, scale) for name, dataset in per_field.items()}
    total = scaled_dose(total, scale)
    tell("effect and measures", 0.0)
    effect = _effect_dose(study, total, model, constants)
    physical = np.asarray(total["dose"].sum("component", dtype=np.float64), dtype=np.float32)
    total["let"] = _total_let(total, let)
    if study.outputs.let_by_component:
        total["let_by_component"] = _let_by_component(let)
    names = reported_structures(study, grid, target)
    histograms = structure_histograms(grid, physical, names)
    effect_histograms = structure_histograms(grid, effect, names)
    tell("effect and measures", 1.0)
    run_hash = _run_hash(study, inputs)
    level = 0.95 * study.goal.dose_gy
    effective = study.goal.quantity == "effect"
    measures = structure_measures(grid, target, histograms, physical, level_gy=None if effective else level)
    effect_measures = {}
    if study.effect.model != "physical":
        effect_measures = structure_measures(
            grid, target, effect_histograms, effect, level_gy=level if effective else None
        )
    energy = energy_by_component(
        total, grid, yields=study.stars.yields, star_scale=study.stars.scale, dose_to=study.outputs.dose_to
    )
    summary = replace(
        _summary(study, grid, target, planned, total, effect_histograms if effective else histograms),
        measures=measures,
        effect_measures=effect_measures,
        energy_balance=energy_totals(energy, planned),
        energy_by_component=energy,
        run_hash=run_hash,
    )
    return Result(
        study=study,
        grid=grid,
        target=target,
        planned=tuple(planned),
        per_field=per_field,
        dose=total,
        effect_dose_gy=effect,
        histograms=histograms,
        effect_histograms=effect_histograms,
        summary=summary,
        inputs=inputs,
        run_hash=run_hash,
        line=console_line(summary),
        scale=scale,
        searches=searches,
    )


def _let(
    study: Study, grid: VoxelGrid, planned: Sequence[PlannedField], total: xr.Dataset, tell: Progress
) -> dict[str, NDArray[np.float32]]:
    """Return the LET of each component in every voxel."""
    tell("LET", 0.0)
    found = let_maps(planned, grid, total, yields=study.stars.yields, dose_to=study.outputs.dose_to)
    tell("LET", 1.0)
    return found


def _total_let(total: xr.Dataset, let: Mapping[str, NDArray[np.float32]]) -> Any:
    """Return the LET averaged over the dose of all components, as a labelled map."""
    from dosekit.effects.radiation_quality import total_let

    dose = {name: total["dose"].values[row] for row, name in enumerate(COMPONENTS)}
    values = total_let(dose, let).astype(np.float32)
    return (("z", "y", "x"), values, {"units": "keV/um", "long_name": "dose-averaged LET of all components"})


def _let_by_component(let: Mapping[str, NDArray[np.float32]]) -> Any:
    """Return the LET of each component as one labelled map."""
    values = np.stack([np.asarray(let[name], dtype=np.float32) for name in COMPONENTS])
    attrs = {"units": "keV/um", "long_name": "dose-averaged LET of each component; 0 where it gives next to no dose"}
    return (("component", "z", "y", "x"), values, attrs)


def _weighted(
    study: Study, parts: Mapping[str, NDArray[Any]], model: EffectModel, constants: Mapping[str, tuple[Any, Any]]
) -> NDArray[np.float64]:
    """Return effect-weighted dose from the dose of the components."""
    from dosekit.effects.mixed_field import effect_sums, weighted_dose_gy

    linear, root = effect_sums(parts, dict(constants))
    return weighted_dose_gy(linear, root, tissue=model.tissue, fractions=study.goal.fractions)


def _prescription_scale(
    study: Study,
    total: xr.Dataset,
    coverage: NDArray[Any],
    model: EffectModel,
    constants: Mapping[str, tuple[Any, Any]],
) -> float:
    """Return the factor that brings the mean target dose to the prescription."""
    inside = coverage > 0.0
    weights = coverage[inside].astype(np.float64)
    parts = {name: total["dose"].values[row][inside].astype(np.float64) for row, name in enumerate(COMPONENTS)}
    local = {name: tuple(_at(value, inside) for value in pair) for name, pair in constants.items()}
    factor = 1.0
    for _ in range(40):
        scaled = {name: factor * part for name, part in parts.items()}
        if study.goal.quantity == "effect":
            values = _weighted(study, scaled, model, local)
        else:
            values = np.sum(list(scaled.values()), axis=0)
        mean = float(np.average(values, weights=weights))
        if not mean > 0.0:
            raise ReachError("the fields give no dose in the target", remedy="check angles, isocentre and momentum")
        if abs(mean / study.goal.dose_gy - 1.0) < 1e-9:
            break
        factor *= study.goal.dose_gy / mean
    return factor


def _at(value: Any, inside: NDArray[np.bool_]) -> Any:
    """Return a constant, or a map's values inside a structure."""
    array = np.asarray(value)
    return array[inside] if array.shape == inside.shape else array


def _effect_dose(
    study: Study, total: xr.Dataset, model: EffectModel, constants: Mapping[str, tuple[Any, Any]]
) -> NDArray[np.float32]:
    """Return the effect-weighted dose per fraction."""
    parts = {name: total["dose"].values[row].astype(np.float64) for row, name in enumerate(COMPONENTS)}
    return np.asarray(_weighted(study, parts, model, constants), dtype=np.float32)


def _hashed_inputs(study: Study, base: Path) -> tuple[InputFile, ...]:
    """Hash what the study reads."""
    from dosekit.outputs.record import hash_inputs

    said = study.volume
    roles: list[tuple[str, list[Path]]] = []
    for role, key in (
        ("phantom", "phantom"),
        ("ct", "ct"),
        ("structures", "structures"),
        ("calibration", "calibration"),
    ):
        if getattr(said, key) is not None:
            only = said.model_copy(
                update={other: None for other in ("phantom", "ct", "structures", "calibration") if other != key}
            )
            roles.append((role, input_files(study.model_copy(update={"volume": only}), base)))
    if study.comparison.curve:
        roles.append(
            ("curves", [existing(base, said.file, "comparison.curve.file") for said in study.comparison.curve])
        )
    return tuple(hash_inputs(role, files) for role, files in roles)


def _run_hash(study: Study, inputs: Sequence[InputFile]) -> str:
    """Hash the study without paths, its inputs and the version."""
    from dosekit.outputs.record import run_hash

    plain = study.model_dump(mode="json")
    for key in ("phantom", "ct", "structures", "calibration"):
        plain["volume"][key] = plain["volume"][key] is not None
    return run_hash(plain, inputs=inputs)


def _summary(
    study: Study,
    grid: VoxelGrid,
    target: str,
    planned: Sequence[PlannedField],
    total: xr.Dataset,
    histograms: Mapping[str, VolumeHistogram],
) -> RunSummary:
    """Say what a reader wants to know first; the histograms are of the quantity that the goal speaks of."""
    from dosekit.outputs.marks import curve_marks
    from dosekit.outputs.summary import RunSummary, mean_doses_gy, star_share

    parts = mean_doses_gy(total, grid.structure(target))
    first = planned[0]
    deepest = curve_marks(first.library.depth_mm, first.curves_gy[int(np.argmax(first.residual_range_mm))])
    worst = max(planned, key=lambda plan: plan.settings.flatness)
    chosen = histograms[target]
    d98, d2 = chosen.dose_at_volume_gy(98.0), chosen.dose_at_volume_gy(2.0)
    flat = {
        "flatness_percent": 100.0 * worst.settings.flatness,
        "flat_from_mm": worst.settings.measures.judged_mm[0],
        "flat_to_mm": worst.settings.measures.judged_mm[1],
        "flat_field": worst.field.name,
    }
    if study.goal.weights != "range_steps":
        flat = {"flatness_percent": 100.0 * max(d2 - chosen.mean_gy, chosen.mean_gy - d98) / chosen.mean_gy}
    return RunSummary(
        title=study.title,
        target=target,
        quantity="effect-weighted dose" if study.goal.quantity == "effect" else "physical dose",
        **flat,  # type: ignore[arg-type]
        target_d98_percent=100.0 * d98 / study.goal.dose_gy,
        target_d2_percent=100.0 * d2 / study.goal.dose_gy,
        peak_depth_mm=deepest.peak_depth_mm,
        peak_to_entrance=first.settings.measures.peak_to_entrance,
        star_share=star_share(parts),
        mean_dose_gy=chosen.mean_gy,
        beam_time_s=sum(plan.field.particles for plan in planned) / study.machine.particles_per_s,
        component_doses_gy=parts,
        sources=SOURCES,
    )

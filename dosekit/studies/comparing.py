"""Other particles on the same anatomy and goals, each with its own momentum, range steps, weights and effect."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS
from dosekit.studies.model import BeamSection, Study
from dosekit.studies.result import Result

if TYPE_CHECKING:
    from dosekit.outputs.figures_comparison import ParticleResult

__all__ = ["comparison_rows", "particle_results", "study_for", "target_on_axis_mm"]

_STEP_MM = 1.0
_SHORT_MM = 10.0
_BEHIND_MM = 25.0
_MOST_ORGANS = 4


def study_for(study: Study, particle: str) -> Study:
    """Return the study with another beam particle; contaminants follow the charge, protons have none.

    Parameters
    ----------
    study : Study
        The study.
    particle : str
        The other particle.

    Returns
    -------
    Study
        The same volume, fields and goals; the momentum is chosen anew.
    """

    def other(section: BeamSection) -> BeamSection:
        sign = {"pi-": "-", "mu-": "-"}.get(particle, "+")
        kept = {f"{name[:-1]}{sign}": value for name, value in section.contaminants.items()}
        kept.pop(particle, None)
        return section.model_copy(
            update={
                "particle": particle,
                "momentum_mev_c": None,
                "kinetic_energy_mev": None,
                "contaminants": {} if particle == "proton" else kept,
            }
        )

    fields = tuple(
        section if section.beam is None else section.model_copy(update={"beam": other(section.beam)})
        for section in study.field
    )
    nothing = study.comparison.model_copy(update={"particles": (), "curve": ()})
    return study.model_copy(update={"beam": other(study.beam), "field": fields, "comparison": nothing})


def particle_results(results: Sequence[Result], base: Path) -> list[ParticleResult]:
    """Return what each particle gives, for the comparison page.

    Parameters
    ----------
    results : sequence of Result
        The study's own particle first, then the others.
    base : Path
        Folder that imported curves are relative to.

    Returns
    -------
    list of ParticleResult
        Depth dose and LET along the axis of the first field, map, histograms and measures; imported curves last,
        put at the depth of the target's far end.
    """
    from dosekit.modulation.imported import read_curve
    from dosekit.outputs.figures_comparison import ParticleResult

    main = results[0]
    organs = [main.grid.structure_name(organ.structure) for organ in main.study.organ]
    others = [] if organs else [name for name in main.histograms if main.grid.role(name) == "organ_at_risk"]
    names = list(dict.fromkeys([main.target, *organs, *others[:_MOST_ORGANS]]))
    found = []
    for result in results:
        dose = result.study.goal.dose_gy
        depth, total, let = _along_axis(result)
        effective = result.study.goal.quantity == "effect"
        maps = result.dose if not effective else _as_dose(result)
        histograms = result.effect_histograms if effective else result.histograms
        found.append(
            ParticleResult(
                particle=result.planned[0].field.beam.particle,
                depth_mm=depth,
                dose_percent=100.0 * total / dose,
                let_kev_um=let,
                dose=maps,
                histograms={name: histograms[name].curve() for name in names if name in histograms},
                measures=_shown(comparison_rows(result), names[1:]),
            )
        )
    far = float(np.max(main.planned[0].aimed.far_mm))
    for said in main.study.comparison.curve:
        curve = read_curve(base / said.file, name=said.name)
        moved = np.maximum(curve.depth_mm + far - curve.peak_mm, 0.0)
        found.append(
            ParticleResult(
                particle=curve.name,
                depth_mm=moved,
                dose_percent=100.0 * curve.dose / float(curve.dose.max()),
                let_kev_um=curve.let_kev_um,
                source=curve.source,
            )
        )
    return found


def target_on_axis_mm(result: Result) -> tuple[float, float]:
    """Return where the axis of the first field enters and leaves the target.

    Parameters
    ----------
    result : Result
        A finished run.

    Returns
    -------
    near_mm, far_mm : float
        Distance from the surface, mm; no numbers where the axis misses the target.
    """
    from scipy.ndimage import map_coordinates

    depth, index = _axis_points(result)
    cover = map_coordinates(result.grid.structure(result.target).astype(np.float64), index, order=1, mode="nearest")
    inside = np.flatnonzero(cover >= 0.5)
    if not len(inside):
        return float("nan"), float("nan")
    return float(depth[inside[0]]), float(depth[inside[-1]])


def comparison_rows(result: Result) -> dict[str, float]:
    """Return the numbers by which particles are compared.

    Parameters
    ----------
    result : Result
        A finished run.

    Returns
    -------
    dict of str to float
        Momentum, target and organ doses, integral dose, neutron dose outside the fields, LET, RBE, beam time.
    """
    from dosekit.modulation.comparison import map_row

    grid = result.grid
    structures = {name: grid.structure(name) for name in result.histograms if grid.role(name) != "body"}
    row = map_row(
        result.planned[0].field.beam.particle,
        dose_gy={name: result.dose["dose"].values[place] for place, name in enumerate(COMPONENTS)},
        effect_gy=result.effect_dose_gy,
        goal_gy=_goal_dose(result),
        structures=structures,
        target=result.target,
        body=grid.body().astype(np.float32),
        density_g_cm3=grid.density_g_cm3,
        voxel_cm3=float(np.prod(grid.spacing_mm)) * 1e-3,
        prescription_gy=result.study.goal.dose_gy,
        time_s=result.summary.beam_time_s,
    )
    numbers = {name: float(value) for name, value in row.items() if not isinstance(value, str)}
    coverage = grid.structure(result.target).astype(np.float64)
    dose = result.dose["dose"].sum("component").values.astype(np.float64) * coverage
    numbers["target_let_kev_um"] = float(np.sum(dose * result.dose["let"].values) / np.sum(dose))
    for plan in result.planned:
        numbers[f"momentum_{plan.field.name}_mev_c"] = plan.field.beam.momentum_mev_c
    numbers["entrance_share"], numbers["exit_share"] = _ends_of_axis(result)
    numbers["star_share"] = result.summary.star_share
    return numbers


def _shown(numbers: dict[str, float], organs: Sequence[str]) -> dict[str, float]:
    """Return the numbers that the page has room for, named for a reader."""
    names = {
        "target_d95_share": ("target D95 (% of prescription)", 100.0),
        "target_d2_share": ("target D2 (% of prescription)", 100.0),
        "target_rbe": ("mean RBE in the target", 1.0),
        "target_let_kev_um": ("mean LET in the target (keV/µm)", 1.0),
        "entrance_share": ("absorbed dose over the first 10 mm, first field (% of target mean)", 100.0),
        "exit_share": (f"absorbed dose {_BEHIND_MM:.0f} mm behind the target, first field (% of target mean)", 100.0),
        "integral_dose_j": ("energy left in the body (J)", 1.0),
        "outside_mean_gy": ("mean absorbed dose outside the fields (mGy)", 1000.0),
        "outside_neutron_mean_gy": ("of this, star neutrons (mGy)", 1000.0),
        "star_share": ("share of absorbed target dose from stars (%)", 100.0),
        "time_s": ("beam time (s)", 1.0),
    }
    shown = {
        label: factor * numbers[name]
        for name, (label, factor) in names.items()
        if np.isfinite(numbers.get(name, np.nan))
    }
    for organ in organs[:_MOST_ORGANS]:
        if f"{organ}_mean_gy" in numbers:
            shown[f"{organ}, mean (Gy)"] = numbers[f"{organ}_mean_gy"]
    return shown


def _goal_dose(result: Result) -> NDArray[np.float64]:
    """Return the dose that the prescription is of, [z, y, x]."""
    if result.study.goal.quantity == "effect":
        return np.asarray(result.effect_dose_gy, dtype=np.float64)
    return np.asarray(result.dose["dose"].sum("component").values, dtype=np.float64)


def _as_dose(result: Result) -> Any:
    """Return the effect-weighted dose as a map with a single component."""
    import xarray as xr

    axes = ("z", "y", "x")
    return xr.Dataset(
        {"dose": (axes, result.effect_dose_gy, {"units": "Gy"})},
        coords={axis: result.dose[axis] for axis in axes},
    )


def _axis_points(result: Result) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return distances from the surface and points along the axis of the first field."""
    from scipy.ndimage import map_coordinates

    grid = result.grid
    frame = result.planned[0].field.frame(grid.patient_position)
    reach = float(np.linalg.norm(np.array(grid.upper_mm) - np.array(grid.lower_mm)))
    along = np.arange(-reach, reach, _STEP_MM)
    beam = np.zeros((len(along), 3))
    beam[:, 2] = along
    index = ((frame.to_patient(beam) - np.array(grid.origin_mm)) / np.array(grid.spacing_mm)).T[::-1]
    inside = map_coordinates(grid.body().astype(np.float32), index, order=1, mode="constant", cval=0.0) >= 0.5
    places = np.flatnonzero(inside)
    chosen = slice(int(places[0]), int(places[-1]) + 1)
    return along[chosen] - along[chosen][0], index[:, chosen]


def _along_axis(result: Result) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return depth, dose (of what the goal asks for) and LET along the axis of the first field."""
    from scipy.ndimage import map_coordinates

    depth, index = _axis_points(result)
    dose = map_coordinates(_goal_dose(result), index, order=1, mode="nearest")
    let = map_coordinates(result.dose["let"].values.astype(np.float64), index, order=1, mode="nearest")
    return depth, dose, let


def _ends_of_axis(result: Result) -> tuple[float, float]:
    """Return the first field's own absorbed dose at both ends of its axis, over the target mean.

    At the entrance it is the mean over the first 10 mm; behind the target that of 10 mm about `_BEHIND_MM` (no number
    where the body ends before).
    """
    from scipy.ndimage import map_coordinates

    depth, index = _axis_points(result)
    own = result.per_field[result.planned[0].field.name]["dose"].sum("component").values.astype(np.float64)
    dose = map_coordinates(own, index, order=1, mode="nearest") / result.histograms[result.target].mean_gy
    _, far = target_on_axis_mm(result)
    behind = np.abs(depth - far - _BEHIND_MM) <= _SHORT_MM / 2.0
    return float(dose[depth <= _SHORT_MM].mean()), float(dose[behind].mean()) if behind.any() else float("nan")

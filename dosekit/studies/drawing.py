"""Draw a finished run: slices, histograms, depth curves, range steps, components, quality, search, comparison."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from dosekit.studies.model import file_name
from dosekit.studies.result import Result

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.outputs.report import ReportFigure
    from dosekit.outputs.style import FigureFiles

__all__ = ["write_figures"]

Progress = Callable[[str, float], None]


def write_figures(result: Result, folder: Path, tell: Progress) -> list[ReportFigure]:
    """Draw the figures of a run and return them for the report.

    Parameters
    ----------
    result : Result
        The finished run.
    folder : Path
        Where they go.
    tell : callable
        Told what is being done.

    Returns
    -------
    list of ReportFigure
        In the order of the report.
    """
    from dosekit.outputs.figures_depth import depth_curve_figure
    from dosekit.outputs.figures_histogram import histogram_figure
    from dosekit.outputs.figures_modulation import convergence_figure, range_steps_figure
    from dosekit.outputs.figures_quality import quality_slices_figure
    from dosekit.outputs.figures_slices import component_slices_figure, slices_figure
    from dosekit.outputs.report import report_figure
    from dosekit.outputs.style import particle_label, write_figure

    effective = result.study.goal.quantity == "effect"
    quantity = "effect-weighted dose" if effective else "dose"
    shown: list[ReportFigure] = []
    count = 5 + 2 * len(result.planned)

    def add(figure: Any, name: str, caption: str) -> None:
        tell("figures", len(shown) / count)
        files: FigureFiles = write_figure(figure, folder / name)
        shown.append(report_figure(files, caption=caption))

    add(
        slices_figure(
            result.maps(),
            result.grid,
            target=result.target,
            reference_gy=result.study.goal.dose_gy,
            variable="effect_dose" if effective else "dose",
            quantity=quantity,
        ),
        "slices",
        f"The {quantity} over the anatomy in three planes through the target, per fraction.",
    )
    if not effective:
        histograms = {name: histogram.curve() for name, histogram in result.histograms.items()}
    else:
        histograms = {name: histogram.curve() for name, histogram in result.effect_histograms.items()}
    add(
        histogram_figure(
            histograms,
            target=result.target,
            order=list(result.grid.structures),
            prescribed_gy=result.study.goal.dose_gy,
            quantity=quantity,
        ),
        "histograms",
        f"Volume histograms of {quantity} per fraction.",
    )
    for plan in result.planned:
        beam = plan.field.beam
        words = f"{particle_label(beam.particle)} {beam.momentum_mev_c:.1f} MeV/c"
        add(
            depth_curve_figure(_beam_curve(result, beam), title=words),
            f"depth_{file_name(plan.field.name)}",
            f"Depth dose in water of the unmodulated beam of field '{plan.field.name}', every component apart.",
        )
        settings = plan.settings
        add(
            range_steps_figure(
                settings.depth_mm,
                plan.curves_gy[settings.index],
                interval_mm=settings.interval_mm,
                residual_range_mm=settings.residual_range_mm,
                weights=settings.weights,
                flatness=settings.flatness,
                flat_interval_mm=settings.measures.judged_mm,
                flat_dose=settings.effect_dose,
                quantity="dose" if settings.effect_dose is None else "effect-weighted dose",
                title=f"{plan.field.name}, {words}",
            ),
            f"range_steps_{file_name(plan.field.name)}",
            f"Range steps of field '{plan.field.name}' over its widest interval of the target, broad field in water.",
        )
    add(
        component_slices_figure(result.dose, result.grid, target=result.target, reference_gy=result.study.goal.dose_gy),
        "components",
        "Components of the dose in the transverse plane through the target.",
    )
    maps = result.maps()
    add(
        quality_slices_figure(
            maps if result.study.effect.model != "physical" else maps.drop_vars("effect_dose"),
            result.grid,
            target=result.target,
            reference_gy=result.study.goal.dose_gy,
        ),
        "quality",
        "Radiation quality in the transverse plane through the target, where the dose is at least 2 % of the goal: "
        "dose-averaged LET of all components and, with an effect model, effect-weighted over physical dose.",
    )
    for number, search in enumerate(result.searches, start=1):
        add(
            convergence_figure(search.history, parts=search.parts, stopped_because=search.stopped_because),
            f"convergence_{number}",
            "Cost of the goals against the steps of the search for weights.",
        )
    if result.others or result.study.comparison.curve:
        _add_comparison(result, add)
    _add_calibration(result, add)
    tell("figures", 1.0)
    return shown


def _beam_curve(result: Result, beam: Any) -> xr.Dataset:
    """Return the depth curve in water of a field's own beam."""
    from dosekit.depths.curves import depth_curve

    return depth_curve(beam, "water", yields=result.study.stars.yields, star_scale=result.study.stars.scale)


def _add_comparison(result: Result, add: Callable[[Any, str, str], None]) -> None:
    """Draw the page that sets particles side by side."""
    from dosekit.outputs.figures_comparison import comparison_figure
    from dosekit.studies.comparing import particle_results, target_on_axis_mm

    effective = result.study.goal.quantity == "effect"
    results = [result, *result.others]
    page = comparison_figure(
        particle_results(results, result.base),
        result.grid,
        target=result.target,
        prescribed_gy=result.study.goal.dose_gy,
        target_interval_mm=target_on_axis_mm(result),
        quantity="effect-weighted dose" if effective else "absorbed dose",
    )
    add(
        page,
        "comparison",
        "Particles on the same anatomy with the same goals; momentum, range steps and weights found anew for each. "
        "A calculation with the models named in the sources; it does not show which particle treats a patient better.",
    )


def _add_calibration(result: Result, add: Callable[[Any, str, str], None]) -> None:
    """Draw the HU calibration, where the volume comes from a CT."""
    if result.study.volume.ct is None:
        return
    from dosekit.grids.calibration import Calibration, read_calibration, stoichiometric_calibration
    from dosekit.outputs.figures_calibration import calibration_figure

    known = result.grid.source.get("calibration")
    calibration: Calibration
    if isinstance(known, Calibration):
        calibration = known
    elif result.study.volume.calibration is not None:
        calibration = read_calibration(result.base / result.study.volume.calibration)
    else:
        calibration = stoichiometric_calibration()
    curve = calibration.curve(yields=result.study.stars.yields)
    add(
        calibration_figure(
            curve.hu,
            density_g_cm3=curve.density_g_cm3,
            relative_stopping_power=curve.relative_stopping_power,
            star_energy_mev=curve.star_energy_mev,
            tissues=curve.tissues,
        ),
        "calibration",
        "From HU to density, relative stopping power and charged star energy per stop.",
    )

"""The small verb about range steps: flat dose over an interval in water."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.studies.places import made_folder

if TYPE_CHECKING:
    from dosekit.modulation.stacks import BeamSteps

__all__ = ["FoundSteps", "range_steps_of", "steps_summary", "write_steps"]

_HASH_OF_NO_RUN = "not part of a run"


@dataclass(frozen=True)
class FoundSteps:
    """Range steps for an interval in water, and the rate that times rest on.

    Attributes
    ----------
    steps : BeamSteps
        Beam, settings, dose and LET by component; weights in 1e9 particles per cm2 for 1 Gy.
    particles_per_s : float
        Particles of the main species per second.
    """

    steps: BeamSteps
    particles_per_s: float


def range_steps_of(
    *,
    near_mm: float,
    far_mm: float,
    particle: str = "pi-",
    momentum: float | None = None,
    spread: float = 0.02,
    step_mm: float = 5.0,
    flatten: str = "physical",
    rate: float = 1.0e8,
) -> FoundSteps:
    """Find range steps that make 1 Gy flat over an interval in water.

    Parameters
    ----------
    near_mm, far_mm : float
        The interval, mm of water.
    particle : str
        Main species.
    momentum : float, optional
        Mean momentum, MeV/c; just enough to reach the far end if not given.
    spread : float
        Standard deviation of momentum over its mean.
    step_mm : float
        Range step, mm.
    flatten : str
        ``"physical"`` or ``"effect"`` (constant factors per component).
    rate : float
        Particles per second.

    Returns
    -------
    FoundSteps
        The steps.
    """
    from dosekit.beams.beam import Beam
    from dosekit.effects.mixed_field import EffectModel
    from dosekit.modulation.stacks import beam_for_depth, steps_for_beam

    if not (np.isfinite(rate) and rate > 0.0):
        raise InputError(f"a rate of {rate:g} particles per second", allowed="above 0")
    if not 0.0 <= near_mm < far_mm:
        raise InputError(f"an interval from {near_mm:g} to {far_mm:g} mm", allowed="0 <= near < far")
    beam = Beam(particle, momentum_mev_c=momentum or 200.0 + 600.0 * (particle == "proton"), momentum_sigma=spread)
    if momentum is None:
        beam = beam_for_depth(beam, far_mm)
    effect = EffectModel("constant", beam_particle=particle) if flatten == "effect" else None
    return FoundSteps(steps_for_beam(beam, (near_mm, far_mm), step_mm=step_mm, dose_gy=1.0, effect=effect), rate)


def steps_summary(found: FoundSteps) -> str:
    """Say what range steps do.

    Parameters
    ----------
    found : FoundSteps
        The steps.

    Returns
    -------
    str
        A line on flatness and a table, the research-only words at the end.
    """
    settings = found.steps.settings
    measures = settings.measures
    low, high = measures.judged_mm
    beam = f"{found.steps.beam.particle} {found.steps.beam.momentum_mev_c:.1f} MeV/c"
    flat = f"{settings.quantity} dose flat to ±{100 * settings.flatness:.1f} % from {low:.0f} to {high:.0f} mm water"
    shape = f"peak to entrance {measures.peak_to_entrance:.2f}, 80 to 20 % in {measures.distal_fall_mm:.1f} mm"
    lines = [
        f"{beam}: {flat}; {shape}",
        "  step  thickness_mm  residual_range_mm  weight_1e9_per_cm2  share_percent  time_s_per_cm2",
    ]
    dwell = found.steps.dwell(area_cm2=1.0, particles_per_s=found.particles_per_s)
    for number, (shift, left, weight, share, seconds) in enumerate(
        zip(settings.shift_mm, settings.residual_range_mm, settings.weights, settings.share, dwell.time_s, strict=True),
        start=1,
    ):
        lines.append(
            f"  {number:4d}  {shift:12.1f}  {left:17.1f}  {weight:18.4f}  {100 * share:13.1f}  {seconds:14.2f}"
        )
    lines.append(f"weights give 1 Gy in the interval of a broad field. {BANNER}")
    return "\n".join(lines)


def write_steps(found: FoundSteps, folder: str | Path) -> list[Path]:
    """Write range steps as a table, with figures of the steps and of a ridge filter that gives them.

    Parameters
    ----------
    found : FoundSteps
        The steps.
    folder : str or Path
        Where.

    Returns
    -------
    list of Path
        The files.
    """
    from dosekit.modulation.devices import ridge_profile
    from dosekit.outputs.figures_modulation import range_steps_figure, ridge_profile_figure
    from dosekit.outputs.output_table import OutputTable
    from dosekit.outputs.style import write_figure

    where = made_folder(folder)
    steps, settings = found.steps, found.steps.settings
    dwell = steps.dwell(area_cm2=1.0, particles_per_s=found.particles_per_s)
    ridge = ridge_profile(settings.shift_mm, settings.weights)
    widths = dict(zip(np.round(ridge.thickness_mm, 6).tolist(), ridge.width_mm.tolist(), strict=True))
    rows = tuple(
        (number, float(shift), float(left), float(weight), 100.0 * float(share), float(seconds),
         widths.get(round(float(shift), 6), float("nan")))
        for number, (shift, left, weight, share, seconds) in enumerate(
            zip(
                settings.shift_mm, settings.residual_range_mm, settings.weights, settings.share, dwell.time_s,
                strict=True,
            ),
            start=1,
        )
    )  # fmt: skip
    table = OutputTable(
        f"range steps of {steps.beam.particle} {steps.beam.momentum_mev_c:.1f} MeV/c in water",
        (
            "step",
            "water_equivalent_thickness_mm",
            "residual_range_mm",
            "weight_1e9_per_cm2",
            "share_percent",
            "time_s_per_cm2",
            "ridge_width_mm",
        ),
        f"mm of water; 1e9 particles per cm2 for 1 Gy; %; s per cm2 at {found.particles_per_s:g} particles per second; "
        f"width of a ridge filter's step, mm, at a pitch of {ridge.pitch_mm:g} mm",
        rows,
    ).write(where / "range_steps.csv", run_hash=_HASH_OF_NO_RUN)
    figure = range_steps_figure(
        settings.depth_mm,
        _step_curves(found),
        interval_mm=settings.interval_mm,
        residual_range_mm=settings.residual_range_mm,
        weights=settings.weights,
        flatness=settings.flatness,
        flat_interval_mm=settings.measures.judged_mm,
        title=f"{steps.beam.particle} {steps.beam.momentum_mev_c:.1f} MeV/c",
    )
    files = write_figure(figure, where / "range_steps")
    profile = write_figure(
        ridge_profile_figure(ridge.width_mm, ridge.thickness_mm, material="water", pitch_mm=ridge.pitch_mm),
        where / "ridge_profile",
    )
    return [table, files.pdf, files.png, profile.pdf, profile.png]


def _step_curves(found: FoundSteps) -> np.ndarray:
    """Return the depth dose of each step in use for one unit of weight, shape (k, n), Gy."""
    from dosekit.depths.library import depth_library
    from dosekit.modulation.stacks import library_curves

    settings = found.steps.settings
    library = depth_library(
        found.steps.beam, settings.residual_range_mm, depth_mm=float(settings.depth_mm[-1] + settings.depth_mm[0])
    )
    dose, _ = library_curves(library)
    return np.asarray(sum(dose.values(), np.zeros_like(dose["primary"])))

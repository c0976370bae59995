"""The small verb about range steps: flat dose over an interval in water."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.studies.places import made_folder

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.beams.beam import Beam
    from dosekit.modulation.steps import StepSettings

__all__ = [
    "FoundSteps",
    "range_steps_of",
    "steps_summary",
    "write_steps",
]

_HASH_OF_NO_RUN = "not part of a run"


@dataclass(frozen=True)
class FoundSteps:
    """Range steps for an interval in water, with the curves they were found from.

    Attributes
    ----------
    beam : Beam
        The beam.
    settings : StepSettings
        Ranges, weights and measures.
    curves_gy : ndarray
        Depth dose of every candidate for 1e9 particles on 1 cm2, shape (K, N), Gy.
    particles_per_s : float
        Rate that times rest on.
    """

    beam: Beam
    settings: StepSettings
    curves_gy: NDArray[np.float64]
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
        The steps; weights in 1e9 particles per cm2.
    """
    from dosekit.depths.library import depth_library
    from dosekit.effects.mixed_field import EffectModel
    from dosekit.modulation.flattening import EffectCurves
    from dosekit.modulation.steps import candidate_ranges_mm, range_steps
    from dosekit.studies.model import BeamSection
    from dosekit.studies.planning import GRAY_PER_UNIT, chosen_momentum, make_beam, reach_mm

    if not rate > 0.0:
        raise InputError(f"a rate of {rate:g} particles per second", allowed="above 0")
    section = BeamSection.model_validate({"particle": particle, "momentum_sigma": spread})
    beam = make_beam(section, momentum_mev_c=chosen_momentum(section, far_mm) if momentum is None else momentum)
    full = reach_mm(beam)
    offset = min(max(full - far_mm, 0.0), 5.0)
    ranges = candidate_ranges_mm((near_mm, far_mm), full_range_mm=full, step_mm=step_mm, peak_offset_mm=offset)
    library = depth_library(beam, ranges, mode="shifter")
    parts = library.depth_dose() * GRAY_PER_UNIT / 100.0
    effect = None
    if flatten == "effect":
        model = EffectModel("constant", beam_particle=particle)
        pairs = model.constants()
        linear = sum(np.asarray(pairs[name][0]) * parts[:, row] for row, name in enumerate(COMPONENTS))
        root = sum(np.asarray(pairs[name][1]) * parts[:, row] for row, name in enumerate(COMPONENTS))
        effect = EffectCurves(np.asarray(linear), np.asarray(root), model.tissue)  # type: ignore[arg-type]
    curves = np.maximum(parts.sum(axis=1), 0.0)
    settings = range_steps(
        curves,
        library.depth_mm,
        (near_mm, far_mm),
        residual_range_mm=ranges,
        shift_mm=library.shift_mm,
        effect=effect,
    )
    return FoundSteps(beam, settings, curves, rate)


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
    settings = found.settings
    measures = settings.measures
    low, high = measures.judged_mm
    beam = f"{found.beam.particle} {found.beam.momentum_mev_c:.1f} MeV/c"
    flat = f"{settings.quantity} dose flat to ±{100 * settings.flatness:.1f} % from {low:.0f} to {high:.0f} mm water"
    shape = f"peak to entrance {measures.peak_to_entrance:.2f}, 80 to 20 % in {measures.distal_fall_mm:.1f} mm"
    lines = [
        f"{beam}: {flat}; {shape}",
        "  step  thickness_mm  residual_range_mm  weight_1e9_per_cm2  share_percent  time_s_per_cm2",
    ]
    for number, (shift, left, weight, share) in enumerate(
        zip(settings.shift_mm, settings.residual_range_mm, settings.weights, settings.share, strict=True), start=1
    ):
        seconds = weight * 1e9 / found.particles_per_s
        lines.append(
            f"  {number:4d}  {shift:12.1f}  {left:17.1f}  {weight:18.4f}  {100 * share:13.1f}  {seconds:14.2f}"
        )
    lines.append(f"weights give 1 Gy in the interval of a broad field. {BANNER}")
    return "\n".join(lines)


def write_steps(found: FoundSteps, folder: str | Path) -> list[Path]:
    """Write range steps as a table and a figure.

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
    from dosekit.outputs.figures_modulation import range_steps_figure
    from dosekit.outputs.style import write_figure
    from dosekit.outputs.tables import OutputTable

    where = made_folder(folder)
    settings = found.settings
    rows = tuple(
        (number, float(shift), float(left), float(weight), 100.0 * float(share))
        for number, (shift, left, weight, share) in enumerate(
            zip(settings.shift_mm, settings.residual_range_mm, settings.weights, settings.share, strict=True), start=1
        )
    )
    table = OutputTable(
        f"range steps of {found.beam.particle} {found.beam.momentum_mev_c:.1f} MeV/c in water",
        ("step", "water_equivalent_thickness_mm", "residual_range_mm", "weight_1e9_per_cm2", "share_percent"),
        "mm of water; 1e9 particles per cm2 for 1 Gy; %",
        rows,
    ).write(where / "range_steps.csv", run_hash=_HASH_OF_NO_RUN)
    figure = range_steps_figure(
        settings.depth_mm,
        found.curves_gy[settings.index],
        interval_mm=settings.interval_mm,
        residual_range_mm=settings.residual_range_mm,
        weights=settings.weights,
        flatness=settings.flatness,
        flat_interval_mm=settings.measures.judged_mm,
        title=f"{found.beam.particle} {found.beam.momentum_mev_c:.1f} MeV/c",
    )
    files = write_figure(figure, where / "range_steps")
    return [table, files.pdf, files.png]

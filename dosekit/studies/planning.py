"""From target to settings: momentum, spots, range steps and first weights of each field.

Each spot gets the range steps that make dose (or effect) flat over its own interval of the target, found for a broad
field in water with the method of :mod:`dosekit.modulation.steps`. Intervals are rounded outwards to whole bins, so
that spots with the same interval share one solution.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import ReachError, SettingsWarning
from dosekit.studies.aiming import AimedSpots, aim

if TYPE_CHECKING:
    from dosekit.beams.beam import Beam
    from dosekit.depths.library import DepthLibrary
    from dosekit.effects.mixed_field import EffectModel
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field
    from dosekit.modulation.flattening import EffectCurves
    from dosekit.modulation.steps import StepSettings
    from dosekit.studies.model import BeamSection, FieldSection, Study

__all__ = ["GRAY_PER_UNIT", "PlannedField", "chosen_momentum", "effect_model_of", "make_beam", "plan_field"]

GRAY_PER_UNIT = 1.602176634e-10 * 1e3 * 1e9
"""Dose in water (Gy) of 1e9 particles per mm2 that leave 1 MeV/mm each: 1e9 x 1e3 mm3/g x 1.602e-10 Gy g/MeV."""

PROTON_FACTOR = 1.1
"""Constant effectiveness of a proton beam (ICRU Report 78 (2007); common practice)."""

_REACH_SIGMAS = 0.6
_BIN_MM = 1.0
_EDGE_BINS = 2.0


@dataclass(frozen=True)
class PlannedField:
    """A field with its first weights and what they were found from.

    Attributes
    ----------
    field : Field
        Spots, steps and weights.
    aimed : AimedSpots
        Where each spot has to stop the beam.
    library : DepthLibrary
        Depth curves of the steps in water.
    residual_range_mm : ndarray
        Residual range of each step, shape (K,), mm.
    curves_gy : ndarray
        Broad-field depth dose of each step for one unit of weight per spot, shape (K, N), Gy.
    settings : StepSettings
        The solution for the field's widest interval.
    """

    field: Field
    aimed: AimedSpots
    library: DepthLibrary
    residual_range_mm: NDArray[np.float64]
    curves_gy: NDArray[np.float64]
    settings: StepSettings


def make_beam(section: BeamSection, *, momentum_mev_c: float | None = None) -> Beam:
    """Make the beam that a study describes.

    Parameters
    ----------
    section : BeamSection
        The description.
    momentum_mev_c : float, optional
        Momentum, where the study leaves it open.

    Returns
    -------
    Beam
        The beam.
    """
    from dosekit.beams.beam import Beam

    momentum = section.momentum_mev_c if momentum_mev_c is None else momentum_mev_c
    return Beam(
        section.particle,
        momentum_mev_c=None if section.kinetic_energy_mev is not None else momentum,  # type: ignore[arg-type]
        kinetic_energy_mev=section.kinetic_energy_mev,  # type: ignore[arg-type]
        momentum_sigma=section.momentum_sigma,
        momentum_fwhm=section.momentum_fwhm,
        spot_sigma_mm=section.spot_sigma_mm,
        divergence_sigma_mrad=section.divergence_sigma_mrad,
        correlation=section.correlation,
        contaminants=section.contaminants,
        range_shifter=section.range_shifter,
        range_shifter_gap_mm=section.range_shifter_gap_mm,
    )


def reach_mm(beam: Beam) -> float:
    """Return the mean range in water that a beam has left behind its fixed range shifter.

    Parameters
    ----------
    beam : Beam
        The beam.

    Returns
    -------
    float
        Range, mm of water.
    """
    from dosekit.beams.stopping import relative_stopping_power
    from dosekit.depths.library import mean_projected_range_mm

    stuff = beam.shifter_material
    fixed = 0.0 if stuff is None else beam.fixed_shifter_mm * relative_stopping_power(stuff, beam.particle)
    return mean_projected_range_mm(beam.particle, beam.momentum_mev_c) - fixed


def _range_spread_mm(beam: Beam) -> float:
    """Return the standard deviation of range from straggling and momentum spread, mm."""
    from dosekit.beams.ranges import csda_range_mm
    from dosekit.beams.straggling import range_sigma_mm

    straggling = float(range_sigma_mm(beam.particle, "water", beam.kinetic_energy_mev))
    step = 1e-3 * beam.momentum_mev_c
    higher = beam.replace(kinetic_energy_mev=None, momentum_mev_c=beam.momentum_mev_c + step).kinetic_energy_mev
    slope = (
        float(csda_range_mm(beam.particle, "water", higher))
        - float(csda_range_mm(beam.particle, "water", beam.kinetic_energy_mev))
    ) / step
    return float(np.hypot(straggling, slope * beam.momentum_spread * beam.momentum_mev_c))


def chosen_momentum(section: BeamSection, far_mm: float) -> float:
    """Choose the momentum that just reaches a water-equivalent depth, to 0.1 MeV/c.

    The mean range is put 0.6 standard deviations of range beyond the depth, so that the last step peaks there.

    Parameters
    ----------
    section : BeamSection
        Particle, spread and shifter.
    far_mm : float
        Depth to be reached, water-equivalent mm.

    Returns
    -------
    float
        Momentum, MeV/c.

    Raises
    ------
    ReachError
        If no momentum up to 1500 MeV/c does.
    """
    low, high = 40.0 if section.particle != "proton" else 150.0, 1500.0

    def beyond(momentum: float) -> float:
        beam = make_beam(section, momentum_mev_c=momentum)
        return reach_mm(beam) - _REACH_SIGMAS * _range_spread_mm(beam) - far_mm

    if beyond(high) < 0.0:
        raise ReachError(
            f"the far side of the target lies {far_mm:.0f} mm of water deep",
            allowed=f"a depth that {section.particle} of at most {high:g} MeV/c reach",
            remedy="check target and volume",
        )
    while high - low > 0.01:
        middle = 0.5 * (low + high)
        low, high = (low, middle) if beyond(middle) > 0.0 else (middle, high)
    return float(np.ceil(10.0 * high) / 10.0)


def effect_model_of(study: Study, particle: str) -> EffectModel:
    """Return the effect model of a study for a beam particle.

    Parameters
    ----------
    study : Study
        The study.
    particle : str
        Main species of the beam.

    Returns
    -------
    EffectModel
        The model.
    """
    from dosekit.effects.mixed_field import EffectModel
    from dosekit.effects.tissues import Tissue

    said = study.effect
    tissue = Tissue("study", said.alpha_per_gy, said.alpha_beta_gy)
    factors = dict(said.factors)
    if particle == "proton" and said.model == "constant":
        factors = {"primary": PROTON_FACTOR, "in_flight": PROTON_FACTOR, **factors}
    return EffectModel(said.model, tissue=tissue, factors=factors, beam_particle=particle)


def plan_field(
    study: Study,
    section: FieldSection,
    grid: VoxelGrid,
    target: str,
    *,
    progress: Callable[[str, float], None] | None = None,
) -> PlannedField:
    """Find momentum, spots, range steps and weights of one field.

    Parameters
    ----------
    study : Study
        The study.
    section : FieldSection
        The field.
    grid : VoxelGrid
        The volume.
    target : str
        Structure to be covered.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    PlannedField
        The field, ready to fold.

    Raises
    ------
    ReachError
        If the beam does not reach the far side of the target.
    """
    from dosekit.depths.library import depth_library
    from dosekit.maps.fields import Field
    from dosekit.maps.frames import beam_frame
    from dosekit.modulation.steps import candidate_ranges_mm, range_steps

    what = f"range steps of field {section.name!r}"
    if progress is not None:
        progress(what, 0.0)
    isocentre = section.isocentre_mm or grid.centroid_mm(target)
    frame = beam_frame(
        isocentre,
        gantry_deg=section.gantry_deg,
        couch_deg=section.couch_deg,
        source_distance_mm=section.source_distance_mm,
        patient_position=grid.patient_position,
    )
    aimed = aim(frame, grid, target, spacing_mm=section.spot_spacing_mm, margin_mm=section.margin_mm)
    near, far = _whole_bins(aimed.near_mm, np.floor), _whole_bins(aimed.far_mm, np.ceil)
    beam = _beam_for(study.beam_of(section), float(far.max()), section.name)
    full = reach_mm(beam)
    offset = min(full - float(far.max()), _REACH_SIGMAS * _range_spread_mm(beam))
    interval = (float(near.min()), float(far.max()))
    ranges = candidate_ranges_mm(interval, full_range_mm=full, step_mm=section.step_mm, peak_offset_mm=offset)
    shift = np.maximum(full - ranges, 0.0)
    library = depth_library(beam, ranges, mode="shifter", yields=study.stars.yields, bin_mm=_BIN_MM)
    parts = library.depth_dose(star_scale=study.stars.scale)
    gray = GRAY_PER_UNIT / section.spot_spacing_mm**2
    curves = np.maximum(parts.sum(axis=1), 0.0) * gray
    effect = _effect_curves(study, beam.particle, library, gray) if study.goal.quantity == "effect" else None
    weights = np.zeros((len(aimed.spots_mm), len(ranges)))
    pairs = sorted(set(zip(near.tolist(), far.tolist(), strict=True)))
    for count, (start, stop) in enumerate(pairs):
        if progress is not None:
            progress(what, (count + 0.5) / len(pairs))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", SettingsWarning)
            found = _solve(
                range_steps, curves, library.depth_mm, (start, stop), ranges, shift, effect, study.goal.dose_gy, offset
            )
        chosen = (near == start) & (far == stop)
        weights[np.ix_(chosen, found.index)] = found.weights
    settings = range_steps(
        curves,
        library.depth_mm,
        interval,
        residual_range_mm=ranges,
        shift_mm=shift,
        effect=effect,
        dose_gy=study.goal.dose_gy,
    )
    field = Field(
        section.name,
        beam,
        isocentre_mm=isocentre,
        gantry_deg=section.gantry_deg,
        couch_deg=section.couch_deg,
        spots_mm=aimed.spots_mm,
        shift_mm=shift,
        weights=weights,
        source_distance_mm=section.source_distance_mm,
    )
    if progress is not None:
        progress(what, 1.0)
    return PlannedField(field, aimed, library, ranges, curves, settings)


def _solve(
    range_steps: Callable[..., StepSettings],
    curves: NDArray[np.float64],
    depth_mm: NDArray[np.float64],
    interval: tuple[float, float],
    ranges: NDArray[np.float64],
    shift: NDArray[np.float64],
    effect: EffectCurves | None,
    dose_gy: float,
    offset: float,
) -> StepSettings:
    """Solve one spot's interval with the steps that stop in it; the others would only add to its entrance."""
    from dataclasses import replace

    step = float(np.median(-np.diff(ranges))) if len(ranges) > 1 else interval[1] - interval[0]
    inside = (ranges >= interval[0] - step) & (ranges <= interval[1] + offset + 0.5 * step)
    if not inside.any():
        inside[np.argmin(np.abs(ranges - interval[1]))] = True
    rows = np.flatnonzero(inside)
    own = None
    if effect is not None:
        own = replace(effect, linear=effect.linear[rows], root=effect.root[rows])
    found = range_steps(
        curves[rows],
        depth_mm,
        interval,
        residual_range_mm=ranges[rows],
        shift_mm=shift[rows],
        effect=own,
        dose_gy=dose_gy,
    )
    return replace(found, index=rows[found.index])


def _whole_bins(depth_mm: NDArray[np.float64], rounded: np.ufunc) -> NDArray[np.float64]:
    """Round depths outwards to whole pairs of bins."""
    size = _EDGE_BINS * _BIN_MM
    return np.asarray(np.maximum(rounded(depth_mm / size), 0.0) * size)


def _beam_for(section: BeamSection, far_mm: float, name: str) -> Beam:
    """Return a field's beam, its momentum chosen or checked."""
    if section.momentum_mev_c is None and section.kinetic_energy_mev is None:
        return make_beam(section, momentum_mev_c=chosen_momentum(section, far_mm))
    beam = make_beam(section)
    if reach_mm(beam) < far_mm:
        raise ReachError(
            f"field {name!r}: the beam reaches {reach_mm(beam):.0f} mm of water, the target's far side lies at "
            f"{far_mm:.0f} mm",
            allowed=f"at least {chosen_momentum(section, far_mm):.1f} MeV/c for this target",
            remedy="raise the momentum, or leave it out to have it chosen",
        )
    return beam


def _effect_curves(study: Study, particle: str, library: DepthLibrary, gray: float) -> EffectCurves:
    """Return the sums of alpha times dose and of root beta times dose for each step."""
    from dosekit.modulation.flattening import EffectCurves
    from dosekit.modulation.stacks import GRAY_PER_MEV_MM, library_curves

    dose, let = library_curves(library, star_scale=study.stars.scale)
    scaled = {name: values * (gray / GRAY_PER_MEV_MM) for name, values in dose.items()}
    return EffectCurves.from_components(scaled, effect_model_of(study, particle), let)

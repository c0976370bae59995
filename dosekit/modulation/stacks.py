"""Which range steps does a beam need to fill an interval of depth?  From beam and interval to settings, in one call.

A depth library gives the curves of candidate residual ranges, `dosekit.modulation.steps` their weights.
The deepest candidate is chosen so that its peak lies at the far end.  Weights are broad-field fluences in
1e9 particles of the main species per cm2; one MeV/mm per particle then means 1.602 Gy in water.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.errors import ReachError
from dosekit.modulation.devices import DeviceLimits, DwellProgram, dwell_program, flight_survival
from dosekit.modulation.flattening import EffectCurves
from dosekit.modulation.steps import StepSettings, candidate_ranges_mm, range_steps

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.beams.beam import Beam
    from dosekit.depths.library import DepthLibrary
    from dosekit.effects.mixed_field import EffectModel

__all__ = ["GRAY_PER_MEV_MM", "BeamSteps", "beam_for_depth", "library_curves", "peak_offset_mm", "steps_for_beam"]

#: Dose in water (Gy) of 1e9 particles per cm2 that leave 1 MeV/mm each: 1e7 per mm2, 1e-3 g/mm3.
GRAY_PER_MEV_MM = 1e7 * GRAY_PER_MEV_PER_GRAM / 1e-3


@dataclass(frozen=True, eq=False)
class BeamSteps:
    """Range steps of a beam with what they make.

    Parameters
    ----------
    beam : Beam
        The beam.
    settings : StepSettings
        Steps in use; weights in 1e9 particles per cm2.
    momentum_mev_c : ndarray, shape (k,)
        Momentum of each step in front of the shifter, MeV/c.
    dose_gy, let_kev_um : dict of str to ndarray, shape (n,)
        Physical dose and dose-averaged LET of all steps together, by component.
    """

    beam: Beam
    settings: StepSettings
    momentum_mev_c: NDArray[np.float64]
    dose_gy: dict[str, NDArray[np.float64]]
    let_kev_um: dict[str, NDArray[np.float64]]

    def dwell(self, *, area_cm2: float, particles_per_s: float, path_m: float = 0.0) -> DwellProgram:
        """Turn the weights into times for a field of an area.

        Parameters
        ----------
        area_cm2 : float
            Area over which the particles are spread evenly, cm2.
        particles_per_s : float
            Rate where it is counted.
        path_m : float
            Flight path from counter to surface, m; decays on it lengthen the time.

        Returns
        -------
        DwellProgram
            Particles and time of each step.
        """
        from dosekit.basis.particles import kinetic_energy_mev

        energy = kinetic_energy_mev(self.beam.particle, self.momentum_mev_c)
        alive = flight_survival(self.beam.particle, energy, path_m=path_m)
        return dwell_program(1e9 * area_cm2 * self.settings.weights, particles_per_s=particles_per_s, survival=alive)


def peak_offset_mm(library: DepthLibrary, *, star_scale: float = 1.0) -> float:
    """Say how far the peak of the deepest curve of a library lies before its residual range.

    Parameters
    ----------
    library : DepthLibrary
        Any library.
    star_scale : float
        Factor on the charged energy of stars.

    Returns
    -------
    float
        mm; above 0 when the peak is shallower than the mean depth of stopping.
    """
    deepest = int(np.argmax(library.residual_range_mm))
    total = library.depth_dose(components=False, star_scale=star_scale)[deepest]
    reach = library.residual_range_mm[deepest]
    near = library.depth_mm > 0.5 * reach  # the surface of a broad beam is no peak
    return float(reach - library.depth_mm[near][int(np.argmax(total[near]))])


def library_curves(
    library: DepthLibrary, *, star_scale: float = 1.0
) -> tuple[dict[str, NDArray[np.float64]], dict[str, NDArray[np.float64]]]:
    """Give dose and LET of a library by component, per 1e9 particles per cm2.

    Parameters
    ----------
    library : DepthLibrary
        Any library.
    star_scale : float
        Factor on the charged energy of stars.

    Returns
    -------
    dose_gy, let_kev_um : dict of str to ndarray, shape (K, N)
        Gy and keV/um.
    """
    table = library.depth_dose(star_scale=star_scale) * GRAY_PER_MEV_MM
    let = library.component_let()
    return (
        {name: np.maximum(table[:, place], 0.0) for place, name in enumerate(COMPONENTS)},
        {name: let[:, place] for place, name in enumerate(COMPONENTS)},
    )


def steps_for_beam(
    beam: Beam,
    interval_mm: tuple[float, float],
    *,
    step_mm: float = 5.0,
    dose_gy: float = 2.0,
    effect: EffectModel | None = None,
    limits: DeviceLimits | None = None,
    mode: str = "shifter",
    yields: str = "evaluated",
    star_scale: float = 1.0,
    bin_mm: float = 1.0,
    flatness_goal: float = 0.02,
) -> BeamSteps:
    """Find the range steps of a beam for an interval of depth in water.

    Parameters
    ----------
    beam : Beam
        The beam in front of its shifter; in mode ``momentum`` its own momentum is not used.
    interval_mm : (float, float)
        Near and far end behind the surface, water-equivalent mm.
    step_mm : float
        Distance wanted between steps, mm.
    dose_gy : float
        Wanted dose (per fraction) in the interval, physical or effect-weighted, Gy.
    effect : EffectModel, optional
        Flatten the effect-weighted dose of this model instead of the physical dose.
    limits : DeviceLimits, optional
        What the device can set.
    mode : str
        ``shifter`` or ``momentum``.
    yields, star_scale, bin_mm
        As for the depth library.
    flatness_goal : float
        A flatness above this warns.

    Returns
    -------
    BeamSteps
        Settings, and dose and LET by component.

    Raises
    ------
    ReachError
        If the beam does not reach the far end.
    """
    from dosekit.depths.library import depth_library

    near, far = (float(end) for end in interval_mm)
    probe = depth_library(beam, [max(far, 2.0)], mode=mode, yields=yields, bin_mm=bin_mm)
    offset = peak_offset_mm(probe, star_scale=star_scale)
    if mode == "shifter":
        full = float(probe.residual_range_mm[0] + probe.shift_mm[0])
    else:
        full = far + max(offset, 0.0)
    if full < far + offset and full >= far:
        # the peak itself does not come quite to the far end; go as deep as the beam does
        offset = full - far
    ranges = candidate_ranges_mm((near, far), full_range_mm=full, step_mm=step_mm, peak_offset_mm=offset, limits=limits)
    ranges = ranges[ranges > 1.5]
    if len(ranges) == 0:
        raise ReachError(f"no residual range over 1.5 mm for {near:g} to {far:g} mm", remedy="choose a deeper interval")
    library = depth_library(beam, ranges, mode=mode, yields=yields, bin_mm=bin_mm)
    dose, let = library_curves(library, star_scale=star_scale)
    settings = range_steps(
        sum(dose.values(), np.zeros_like(dose["primary"])),
        library.depth_mm,
        (near, far),
        residual_range_mm=library.residual_range_mm,
        shift_mm=full - ranges if mode == "shifter" else None,
        effect=None if effect is None else EffectCurves.from_components(dose, effect, let),
        dose_gy=dose_gy,
        limits=limits,
        flatness_goal=flatness_goal,
    )
    used, weights = settings.index, settings.weights
    total = {name: weights @ values[used] for name, values in dose.items()}
    quality = {
        name: (weights @ (dose[name][used] * let[name][used])) / np.where(total[name] > 1e-12, total[name], 1.0)
        for name in dose
    }
    return BeamSteps(
        beam=beam,
        settings=settings,
        momentum_mev_c=library.momentum_mev_c[used],
        dose_gy=total,
        let_kev_um=quality,
    )


def beam_for_depth(beam: Beam, depth_mm: float, *, spare: float = 0.02) -> Beam:
    """Give the same beam with the momentum that just reaches a depth in water.

    Parameters
    ----------
    beam : Beam
        Particle, spread, spot, contaminants; its momentum is replaced.
    depth_mm : float
        Depth to be reached, mm water behind the surface and any fixed range shifter.
    spare : float
        Share of the range added for safety.

    Returns
    -------
    Beam
        Beam with a mean range of ``depth_mm`` times ``1 + spare`` plus the fixed shifter.

    Raises
    ------
    ReachError
        If no momentum up to 3000 MeV/c does.
    """
    from dosekit.basis.particles import momentum_mev_c
    from dosekit.beams.ranges import range_table
    from dosekit.beams.stopping import relative_stopping_power
    from dosekit.depths.library import mean_projected_range_mm

    stuff = beam.shifter_material
    fixed = 0.0 if stuff is None else beam.fixed_shifter_mm * relative_stopping_power(stuff, beam.particle)
    wanted = depth_mm * (1.0 + spare) + float(fixed)
    if not wanted > 1.0:
        raise ReachError(f"a depth of {depth_mm} mm", allowed="more than 1 mm", remedy="choose a deeper target")
    table = range_table(beam.particle, "water")
    reach = wanted
    for _ in range(6):
        momentum = float(momentum_mev_c(beam.particle, float(table.energy_mev(reach))))
        reach += wanted - mean_projected_range_mm(beam.particle, momentum)
    if momentum > 3000.0:
        raise ReachError(f"a depth of {depth_mm:g} mm", allowed="up to 3000 MeV/c", remedy="choose a shallower target")
    return beam.replace(momentum_mev_c=momentum, kinetic_energy_mev=None)

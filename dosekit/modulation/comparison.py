"""How do particles compare when each has to reach the same goal?

In depth: for every particle the momentum that reaches the far end, range steps and weights are found anew,
so that the same interval receives the same (effect-weighted) dose; what each spends in front, behind and
beside it is put in one row.  In three dimensions: `map_row` makes a row from a finished dose map, with the
same names for every particle.

What the comparison does not show: cost, availability and dose rate of beams, uncertainty of effect models
(the same model serves all particles, within or outside its validity), and what fractionation or volume
effects do in people.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.effects.histograms import volume_histogram
from dosekit.effects.mixed_field import EffectModel
from dosekit.effects.plan_measures import conformity, integral_dose_j, outside_field_dose
from dosekit.errors import InputError, ReachError
from dosekit.modulation.flattening import EffectCurves
from dosekit.modulation.profiles import profile_measures
from dosekit.modulation.stacks import beam_for_depth, steps_for_beam
from dosekit.modulation.steps import candidate_ranges_mm, range_steps

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import ArrayLike, NDArray

    from dosekit.beams.beam import Beam
    from dosekit.effects.tissues import Tissue
    from dosekit.modulation.imported import ImportedCurve

__all__ = ["ParticleInDepth", "compare_in_depth", "depth_row", "map_row"]

#: Depths behind the far end at which the exit dose is quoted, mm.
EXIT_DEPTHS_MM = (20.0, 50.0)


@dataclass(frozen=True, eq=False)
class ParticleInDepth:
    """One particle's flattened depth curves.

    Parameters
    ----------
    name, source : str
        Name, and where the curve comes from.
    depth_mm : ndarray, shape (n,)
        Depth in water, mm.
    dose_gy, effect_gy, let_kev_um : ndarray, shape (n,)
        Physical dose, effect-weighted dose, and LET averaged over the dose of all components (NaN where
        unknown).
    interval_mm : (float, float)
        The interval.
    momentum_mev_c : float
        Momentum; NaN for imported curves.
    steps : int
        Range steps in use.
    particles_per_cm2 : float
        Particles of the main species for the stated dose; NaN for imported curves.
    """

    name: str
    source: str
    depth_mm: NDArray[np.float64]
    dose_gy: NDArray[np.float64]
    effect_gy: NDArray[np.float64]
    let_kev_um: NDArray[np.float64]
    interval_mm: tuple[float, float]
    momentum_mev_c: float
    steps: int
    particles_per_cm2: float


def compare_in_depth(
    beams: Mapping[str, Beam],
    interval_mm: tuple[float, float],
    *,
    effect: str = "constant",
    tissue: Tissue,
    factors: Mapping[str, Mapping[str, float]] | None = None,
    dose_gy: float = 2.0,
    step_mm: float = 5.0,
    flatten_effect: bool = True,
    yields: str = "evaluated",
    imported: Sequence[ImportedCurve] = (),
) -> list[ParticleInDepth]:
    """Flatten the same interval with several particles.

    Parameters
    ----------
    beams : mapping of str to Beam
        Name to beam; its momentum is replaced by the one that reaches the far end.
    interval_mm : (float, float)
        Near and far end, mm water.
    effect : str
        Effect model for all.
    tissue : Tissue
        Photon constants.
    factors : mapping of str to mapping, optional
        Changes to the constant factors by name of the beam (a proton's `primary` is not a pion's).
    dose_gy : float
        Wanted dose per fraction, Gy.
    step_mm : float
        Distance between steps, mm.
    flatten_effect : bool
        Flatten the effect-weighted dose, else the physical one.
    yields : str
        Star yields.
    imported : sequence of ImportedCurve
        Curves from elsewhere.

    Returns
    -------
    list of ParticleInDepth
        In the order given, imported curves last.

    Raises
    ------
    InputError
        If there is nothing to compare.
    """
    if not beams and not imported:
        raise InputError("nothing to compare", allowed="at least one beam or curve", remedy="name the particles")
    found = []
    for name, beam in beams.items():
        changes = dict((factors or {}).get(name, {}))
        model = EffectModel(effect, tissue, factors=changes, beam_particle=beam.particle)
        # a wide momentum spread puts the peak well before the mean range: leave room for it
        reaching = beam_for_depth(
            beam, interval_mm[1], spare=0.05 + 3.0 * beam.momentum_spread**2 + beam.momentum_spread
        )
        steps = steps_for_beam(
            reaching,
            interval_mm,
            step_mm=step_mm,
            dose_gy=dose_gy,
            effect=model if flatten_effect else None,
            yields=yields,
        )
        total = np.sum(list(steps.dose_gy.values()), axis=0)
        weighted_let = np.sum([steps.dose_gy[part] * steps.let_kev_um[part] for part in steps.dose_gy], axis=0)
        found.append(
            ParticleInDepth(
                name=name,
                source="computed here",
                depth_mm=steps.settings.depth_mm,
                dose_gy=total,
                effect_gy=model.weighted_dose_gy(steps.dose_gy, steps.let_kev_um),
                let_kev_um=weighted_let / np.where(total > 1e-9, total, np.nan),
                interval_mm=(float(interval_mm[0]), float(interval_mm[1])),
                momentum_mev_c=reaching.momentum_mev_c,
                steps=len(steps.settings.weights),
                particles_per_cm2=1e9 * float(np.sum(steps.settings.weights)),
            )
        )
    found += [
        _flatten_imported(
            curve,
            interval_mm,
            EffectModel(
                effect,
                tissue,
                factors=dict((factors or {}).get(curve.name, {})),
                beam_particle="proton",
                spread_let=False,
            ),
            dose_gy=dose_gy,
            step_mm=step_mm,
            flatten_effect=flatten_effect,
        )
        for curve in imported
    ]
    return found


def _flatten_imported(
    curve: ImportedCurve,
    interval_mm: tuple[float, float],
    model: EffectModel,
    *,
    dose_gy: float,
    step_mm: float,
    flatten_effect: bool,
) -> ParticleInDepth:
    """Flatten an interval with shifted copies of a curve from elsewhere."""
    near, far = (float(end) for end in interval_mm)
    if curve.peak_mm < far:
        raise ReachError(
            f"curve {curve.name!r} peaks at {curve.peak_mm:g} mm, before the far end at {far:g} mm",
            allowed="a curve that peaks at or behind the far end",
            remedy="bring in the curve of a higher energy",
        )
    ranges = candidate_ranges_mm((near, far), full_range_mm=curve.peak_mm, step_mm=step_mm)
    depth = np.arange(0.5, float(curve.depth_mm[-1]) - (curve.peak_mm - far), 1.0)
    dose, let = curve.shifted(curve.peak_mm - ranges, depth_mm=depth)
    if model.needs_let and let is None:
        raise InputError(
            f"curve {curve.name!r} has no LET, which the effect model {model.name!r} needs",
            allowed="a column let_kev_um",
            remedy="add the LET or use 'constant'",
        )
    qualities = {} if let is None else {curve.treat_as: let}
    settings = range_steps(
        dose,
        depth,
        (near, far),
        residual_range_mm=ranges,
        effect=EffectCurves.from_components({curve.treat_as: dose}, model, qualities) if flatten_effect else None,
        dose_gy=dose_gy,
    )
    used, weights = settings.index, settings.weights
    total = weights @ dose[used]
    mean_let = np.full(len(depth), np.nan)
    if let is not None:
        mean_let = (weights @ (dose[used] * let[used])) / np.where(total > 1e-9, total, np.nan)
    return ParticleInDepth(
        name=curve.name,
        source=curve.source,
        depth_mm=depth,
        dose_gy=total,
        effect_gy=model.weighted_dose_gy(
            {curve.treat_as: total}, {curve.treat_as: np.nan_to_num(mean_let)} if let is not None else None
        ),
        let_kev_um=mean_let,
        interval_mm=(near, far),
        momentum_mev_c=float("nan"),
        steps=len(weights),
        particles_per_cm2=float("nan"),
    )


def depth_row(entry: ParticleInDepth, *, step_mm: float = 5.0) -> dict[str, float | str]:
    """Make a row of the comparison from flattened depth curves.

    Parameters
    ----------
    entry : ParticleInDepth
        One particle.
    step_mm : float
        Flatness is judged this far inside the interval, mm.

    Returns
    -------
    dict
        Name, source, momentum, steps, flatness of the effect-weighted dose, entrance and exit as shares of
        the interval's mean, distal fall, RBE and LET, particles per cm2.
    """
    near, far = entry.interval_mm
    depth = entry.depth_mm
    inside = (depth >= near + step_mm) & (depth <= far - step_mm)
    measures = profile_measures(depth, entry.effect_gy, judged_mm=(near + step_mm, far - step_mm))
    front = depth <= min(20.0, near)
    row: dict[str, float | str] = {
        "name": entry.name,
        "source": entry.source,
        "momentum_mev_c": entry.momentum_mev_c,
        "steps": entry.steps,
        "mean_effect_gy": measures.mean,
        "mean_dose_gy": float(np.mean(entry.dose_gy[inside])),
        "flatness": measures.flatness,
        "distal_fall_mm": measures.distal_fall_mm,
        "entrance_effect_share": float(np.mean(entry.effect_gy[front])) / measures.mean,
        "rbe_interval": float(np.sum(entry.effect_gy[inside]) / np.sum(entry.dose_gy[inside])),
        "rbe_entrance": float(np.sum(entry.effect_gy[front]) / np.sum(entry.dose_gy[front])),
        "let_interval_kev_um": float(np.mean(entry.let_kev_um[inside])),
        "let_entrance_kev_um": float(np.mean(entry.let_kev_um[front])),
        "particles_per_cm2": entry.particles_per_cm2,
    }
    for behind in EXIT_DEPTHS_MM:
        value = float(np.interp(far + behind, depth, entry.effect_gy, right=0.0))
        row[f"exit_{behind:.0f}_mm_effect_share"] = value / measures.mean
    outside = (depth < near) | (depth > far)
    row["outside_over_inside"] = float(np.sum(entry.effect_gy[outside]) / np.sum(entry.effect_gy[~outside]))
    return row


def map_row(
    name: str,
    *,
    dose_gy: Mapping[str, ArrayLike],
    effect_gy: ArrayLike,
    goal_gy: ArrayLike | None = None,
    structures: Mapping[str, ArrayLike],
    target: str,
    body: ArrayLike,
    density_g_cm3: ArrayLike,
    voxel_cm3: float,
    prescription_gy: float,
    let_kev_um: Mapping[str, ArrayLike] | None = None,
    time_s: float = float("nan"),
    outside_level: float = 0.02,
) -> dict[str, float | str]:
    """Make a row of the comparison from a dose map.

    Parameters
    ----------
    name : str
        What the row is called.
    dose_gy : mapping of str to array_like
        Physical dose by component, Gy.
    effect_gy : array_like
        Effect-weighted dose, Gy.
    goal_gy : array_like, optional
        The dose that the prescription is of; effect-weighted when absent.
    structures : mapping of str to array_like
        Coverage of every structure by name, the target's among them.
    target : str
        Name of the target.
    body, density_g_cm3 : array_like
        Coverage of the body; density, g/cm3.
    voxel_cm3 : float
        Volume of a voxel, cm3.
    prescription_gy : float
        Prescription, Gy.
    let_kev_um : mapping of str to array_like, optional
        Dose-averaged LET by component.
    time_s : float
        Beam time, s.
    outside_level : float
        Share of the prescription below which the charged dose counts as outside the fields.

    Returns
    -------
    dict
        Target D2, D50, D95, D98, homogeneity, conformity at 95 %, mean and D2 of each other structure,
        integral dose of the body, dose and star-neutron dose outside the fields (where all but star neutrons give
        less than the level), LET and RBE in the target, beam time.
    """
    if target not in structures:
        raise InputError(f"no structure {target!r}", allowed=", ".join(structures), remedy="name the target")
    effect = np.asarray(effect_gy, dtype=np.float64)
    judged = effect if goal_gy is None else np.asarray(goal_gy, dtype=np.float64)
    parts = {part: np.asarray(values, dtype=np.float64) for part, values in dose_gy.items()}
    total = np.sum(list(parts.values()), axis=0)
    row: dict[str, float | str] = {"name": name, "time_s": float(time_s)}
    histogram = volume_histogram(judged, structures[target], voxel_cm3=voxel_cm3)
    for percent in (2, 50, 95, 98):
        row[f"target_d{percent}_share"] = histogram.dose_at_volume_gy(percent) / prescription_gy
    row["target_homogeneity"] = histogram.homogeneity
    fit = conformity(judged, structures[target], body=body, level_gy=0.95 * prescription_gy, voxel_cm3=voxel_cm3)
    row["conformity"], row["conformation_number"] = fit["conformity"], fit["conformation_number"]
    share = np.asarray(structures[target], dtype=np.float64)
    row["target_rbe"] = float(np.sum(effect * share) / np.sum(total * share))
    if let_kev_um is not None:
        weighted = np.sum(
            [
                np.asarray(let_kev_um[part], dtype=np.float64) * values
                for part, values in parts.items()
                if part in let_kev_um
            ],
            axis=0,
        )
        row["target_let_kev_um"] = float(np.sum(weighted * share) / np.sum(total * share))
    for structure, coverage in structures.items():
        if structure == target or not np.any(np.asarray(coverage) > 0.0):
            continue
        organ = volume_histogram(judged, coverage, voxel_cm3=voxel_cm3)
        row[f"{structure}_mean_gy"] = organ.mean_gy
        row[f"{structure}_d2_gy"] = organ.dose_at_volume_gy(2.0)
    row["integral_dose_j"] = integral_dose_j(total, density_g_cm3, coverage=body, voxel_cm3=voxel_cm3)
    neutron = parts.get("star_neutron", np.zeros_like(total))
    outside = outside_field_dose(
        total - neutron, neutron, body=body, level_gy=outside_level * prescription_gy, voxel_cm3=voxel_cm3
    )
    everything = outside_field_dose(
        total - neutron, total, body=body, level_gy=outside_level * prescription_gy, voxel_cm3=voxel_cm3
    )
    row["outside_mean_gy"], row["outside_neutron_mean_gy"] = everything["mean_gy"], outside["mean_gy"]
    row["outside_volume_cm3"] = outside["volume_cm3"]
    return row

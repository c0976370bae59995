"""From first weights to final ones: a search in three dimensions where the study asks for it, and the prescription.

The search is that of :mod:`dosekit.modulation.weights` on the fold's operator: uniform dose in the target, limits in
organs, and no more than the prescription in a shell around the target. Then all weights are multiplied by one number
so that the mean target dose (physical or effect-weighted, as the goal says) is the prescribed one.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.studies.planning import PlannedField, effect_model_of

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field
    from dosekit.modulation.goals import Goal
    from dosekit.modulation.responses import Response
    from dosekit.modulation.weights import FoundWeights
    from dosekit.studies.model import Study

__all__ = ["search_weights"]


def search_weights(
    study: Study,
    grid: VoxelGrid,
    target: str,
    planned: Sequence[PlannedField],
    *,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[list[PlannedField], tuple[FoundWeights, ...]]:
    """Find the weights of all spots and steps in three dimensions.

    Parameters
    ----------
    study : Study
        The study; ``goal.weights`` must be ``each_field`` or ``all_fields``.
    grid : VoxelGrid
        The volume.
    target : str
        The target's structure.
    planned : sequence of PlannedField
        Fields with first weights.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    planned : list of PlannedField
        Fields with the weights found.
    searches : tuple of FoundWeights
        One search, or one for each field.
    """
    from dosekit.modulation.weights import find_weights, find_weights_each_field

    goal = study.goal
    goals, voxels = _goals(study, grid, target)
    fields = [plan.field for plan in planned]

    def tell(step: int, cost: float) -> None:
        del cost
        if progress is not None:
            progress("weights in three dimensions", min(step / goal.iterations, 1.0))

    tell(0, 0.0)
    if goal.weights == "each_field":
        responses = [_response(study, [plan], grid, voxels) for plan in planned]
        found = find_weights_each_field(
            responses, goals, scale_gy=goal.dose_gy, largest_steps=goal.iterations, progress=tell
        )
        parts = [one.weights.reshape(field.shape) for one, field in zip(found, fields, strict=True)]
    else:
        start = np.concatenate([np.asarray(field.weights).ravel() for field in fields]) / len(fields)
        one = find_weights(
            _response(study, planned, grid, voxels),
            goals,
            scale_gy=goal.dose_gy,
            start=start,
            scenarios=_scenarios(study, planned, grid, voxels),
            robust="worst" if goal.robust is None else goal.robust.join,
            largest_steps=goal.iterations,
            progress=tell,
        )
        found = [one]
        sizes = np.cumsum([int(np.prod(field.shape)) for field in fields])[:-1]
        parts = [part.reshape(field.shape) for part, field in zip(np.split(one.weights, sizes), fields, strict=True)]
    if progress is not None:
        progress("weights in three dimensions", 1.0)
    changed = [
        replace(plan, field=plan.field.replace(weights=weights)) for plan, weights in zip(planned, parts, strict=True)
    ]
    return changed, tuple(found)


def _goals(study: Study, grid: VoxelGrid, target: str) -> tuple[list[Goal], NDArray[np.int64]]:
    """Return the goals and the flat indices of the voxels that they look at."""
    from scipy.ndimage import distance_transform_edt

    from dosekit.modulation.goals import Goal

    said = study.goal
    wanted = grid.structure(target)
    limited = [organ for organ in study.organ if organ.maximum_gy is not None or organ.mean_gy is not None]
    masks = {organ.structure: grid.structure(organ.structure) for organ in limited}
    sampling = grid.spacing_mm[::-1]
    away = distance_transform_edt(wanted < 0.5, sampling=sampling)
    shell = (away > max(sampling)) & (away <= said.surround_mm) & grid.body() & (wanted <= 0.0)
    asked = (wanted > 0.0) | shell
    for mask in masks.values():
        asked |= mask > 0.0
    voxels = np.flatnonzero(asked)
    place = np.full(asked.size, -1, dtype=np.int64)
    place[voxels] = np.arange(len(voxels))

    def goal(name: str, kind: str, mask: NDArray[np.float32], level: float, weight: float) -> Goal:
        flat = np.flatnonzero(mask > 0.0)
        cover = mask.reshape(-1)[flat].astype(np.float64)
        return Goal(name, kind, place[flat], level, coverage=cover, weight=weight)

    goals = [goal(target, "uniform", wanted, said.dose_gy, 1.0)]
    if said.surround_weight > 0.0 and shell.any():
        share = shell.astype(np.float32)
        goals.append(goal("shell around the target", "maximum", share, said.dose_gy, said.surround_weight))
    for organ in limited:
        mask = masks[organ.structure]
        if organ.maximum_gy is not None:
            goals.append(goal(f"{organ.structure}, maximum", "maximum", mask, organ.maximum_gy, organ.weight))
        if organ.mean_gy is not None:
            goals.append(goal(f"{organ.structure}, mean", "mean", mask, organ.mean_gy, organ.weight))
    return goals, voxels


def _response(
    study: Study,
    planned: Sequence[PlannedField],
    grid: VoxelGrid,
    voxels: NDArray[np.int64],
    *,
    moved_mm: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Response:
    """Return dose, or effect-weighted dose, in the chosen voxels as a function of the weights."""
    from dosekit.maps.operator import FoldOperator
    from dosekit.modulation.responses import FoldEffectResponse, LinearResponse

    fields = [_moved(plan.field, moved_mm) for plan in planned]
    operator = FoldOperator(
        fields,
        grid,
        voxels=voxels,
        yields=study.stars.yields,
        star_scale=study.stars.scale,
        dose_to=study.outputs.dose_to,
        libraries={plan.field.name: plan.library for plan in planned},
    )
    if study.goal.quantity == "physical":
        return LinearResponse(operator)
    model = effect_model_of(study, fields[0].beam.particle)
    return FoldEffectResponse(operator, model.constants(), model.tissue, study.goal.fractions)


def _scenarios(
    study: Study, planned: Sequence[PlannedField], grid: VoxelGrid, voxels: NDArray[np.int64]
) -> list[Response]:
    """Return the responses with an error of range or position, none where the study does not ask for them."""
    said = study.goal.robust
    if said is None:
        return []
    found: list[Response] = []
    if said.range_percent > 0.0:
        for sign in (-1.0, 1.0):
            factor = np.float32(1.0 + sign * said.range_percent / 100.0)
            denser = grid.replace(density_g_cm3=grid.density_g_cm3 * factor)
            found.append(_response(study, planned, denser, voxels))
    if said.position_mm > 0.0:
        for axis in range(3):
            for sign in (-1.0, 1.0):
                moved = [0.0, 0.0, 0.0]
                moved[axis] = sign * said.position_mm
                found.append(_response(study, planned, grid, voxels, moved_mm=(moved[0], moved[1], moved[2])))
    return found


def _moved(field: Field, by_mm: tuple[float, float, float]) -> Field:
    """Return a field with its isocentre moved."""
    if not any(by_mm):
        return field
    x, y, z = (old + step for old, step in zip(field.isocentre_mm, by_mm, strict=True))
    return field.replace(isocentre_mm=(x, y, z))

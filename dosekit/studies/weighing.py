"""From first weights to final ones: a search in three dimensions where the study asks for it, and the prescription.

The search is that of :mod:`dosekit.modulation.corrections` (a quick stand-in set right by the fold), or with errors
to stand that of :mod:`dosekit.modulation.weights` on the fold itself: uniform dose in the target, limits in organs, and
no more than the prescription in a shell around the target. Then all weights are multiplied by one number
so that the mean target dose (physical or effect-weighted, as the goal says) is the prescribed one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS
from dosekit.effects.tissues import Tissue
from dosekit.studies.planning import PlannedField, effect_model_of

if TYPE_CHECKING:
    from dosekit.effects.mixed_field import EffectModel
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
    let: Mapping[str, NDArray[np.float32]] | None = None,
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
    let : mapping of str to ndarray, optional
        LET of each component in every voxel with the first weights, for effect models that need it.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    planned : list of PlannedField
        Fields with the weights found.
    searches : tuple of FoundWeights
        One search, or one for each field.
    """
    goal = study.goal
    goals, voxels = _goals(study, grid, target)
    local = None if let is None else {name: values.reshape(-1)[voxels] for name, values in let.items()}
    constants: Mapping[str, tuple[Any, Any]] = {}
    if goal.quantity == "effect":
        constants = effect_model_of(study, planned[0].field.beam.particle).constants(local)
    groups = [[plan] for plan in planned] if goal.weights == "each_field" else [list(planned)]
    what = "weights in three dimensions"
    found: list[FoundWeights] = []
    changed: list[PlannedField] = []
    for count, group in enumerate(groups):
        share = len(group) / len(planned)

        def tell(step: int, cost: float, *, count: int = count) -> None:
            del cost
            if progress is not None:
                progress(what, (count + min(step / (1.0 + step), 0.95)) / len(groups))

        tell(0, 0.0)
        one = _search(_Task(study, grid, voxels, constants), group, _scaled_goals(goals, share), share, tell)
        found.append(one)
        sizes = np.cumsum([int(np.prod(plan.field.shape)) for plan in group])[:-1]
        changed += [
            replace(plan, field=plan.field.replace(weights=part.reshape(plan.field.shape)))
            for plan, part in zip(group, np.split(one.weights, sizes), strict=True)
        ]
    if progress is not None:
        progress(what, 1.0)
    return changed, tuple(found)


@dataclass(frozen=True)
class _Task:
    """What all responses of a search share."""

    study: Study
    grid: VoxelGrid
    voxels: NDArray[np.int64]
    constants: Mapping[str, tuple[Any, Any]]

    def plain_factors(self, model: EffectModel) -> dict[str, float] | None:
        """Return one factor for each component where the dose asked for is a plain sum, else None.

        Physical dose is one; so is effect-weighted dose when a model multiplies alpha and the root of beta of a
        component by the same number everywhere.
        """
        if self.study.goal.quantity == "physical":
            return dict.fromkeys(COMPONENTS, 1.0)
        tissue = model.tissue
        if not isinstance(tissue, Tissue):
            return None
        factors = {}
        for name, (alpha, root) in self.constants.items():
            by_alpha = np.asarray(alpha) / tissue.alpha_per_gy
            by_root = np.asarray(root) / np.sqrt(tissue.beta_per_gy2)
            if by_alpha.ndim or by_root.ndim or abs(float(by_alpha - by_root)) > 1e-9:
                return None
            factors[name] = float(by_alpha)
        return factors


def _search(
    task: _Task,
    group: Sequence[PlannedField],
    goals: Sequence[Goal],
    share: float,
    tell: Callable[[int, float], None],
) -> FoundWeights:
    """Search with the quick stand-in corrected by the fold; with errors to stand, with the fold itself."""
    from dosekit.modulation.corrections import find_weights_corrected
    from dosekit.modulation.weights import find_weights

    goal = task.study.goal
    start = np.concatenate([np.asarray(plan.field.weights).ravel() for plan in group])
    exact = _response(task, group)
    scale = goal.dose_gy * share
    if goal.robust is not None:
        return find_weights(
            exact,
            goals,
            scale_gy=scale,
            start=start,
            scenarios=_scenarios(task, group),
            robust=goal.robust.join,
            largest_steps=goal.iterations,
            progress=tell,
        )
    return find_weights_corrected(
        exact,
        _stand_in(task, group),
        goals,
        scale_gy=scale,
        start=start,
        largest_steps=goal.iterations,
        progress=tell,
    )


def _scaled_goals(goals: Sequence[Goal], share: float) -> list[Goal]:
    """Return the goals for a share of the dose."""
    return [replace(goal, level_gy=goal.level_gy * share) for goal in goals]


def _stand_in(task: _Task, group: Sequence[PlannedField]) -> Response:
    """Return the quick stand-in for the dose of some fields, as sparse matrices."""
    from scipy.sparse import hstack

    from dosekit.modulation.responses import EffectResponse, LinearResponse
    from dosekit.modulation.surrogates import pencil_matrices

    study = task.study
    model = effect_model_of(study, group[0].field.beam.particle)
    plain = task.plain_factors(model)
    if plain is not None:
        factors: list[dict[str, Any]] = [dict(plain)]
    else:
        factors = [{name: task.constants[name][place] for name in COMPONENTS} for place in (0, 1)]
    columns = [
        pencil_matrices(plan.field, plan.library, task.grid, task.voxels, factors=factors, star_scale=study.stars.scale)
        for plan in group
    ]
    joined = [hstack([matrices[place] for matrices in columns], format="csr") for place in range(len(factors))]
    if plain is None:
        return EffectResponse(joined[0], joined[1], model.tissue, study.goal.fractions)
    return LinearResponse(joined[0])


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
    task: _Task,
    planned: Sequence[PlannedField],
    *,
    grid: VoxelGrid | None = None,
    moved_mm: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Response:
    """Return dose, or effect-weighted dose, in the chosen voxels as a function of the weights."""
    from dosekit.maps.operator import FoldOperator
    from dosekit.modulation.responses import FoldEffectResponse, LinearResponse

    study = task.study
    fields = [_moved(plan.field, moved_mm) for plan in planned]
    operator = FoldOperator(
        fields,
        grid or task.grid,
        voxels=task.voxels,
        yields=study.stars.yields,
        star_scale=study.stars.scale,
        dose_to=study.outputs.dose_to,
        libraries={plan.field.name: plan.library for plan in planned},
    )
    model = effect_model_of(study, fields[0].beam.particle)
    plain = task.plain_factors(model)
    if plain is not None:
        return LinearResponse(operator.with_factors(plain))
    return FoldEffectResponse(operator, task.constants, model.tissue, study.goal.fractions)


def _scenarios(task: _Task, planned: Sequence[PlannedField]) -> list[Response]:
    """Return the responses with an error of range or position, none where the study does not ask for them."""
    said = task.study.goal.robust
    if said is None:
        return []
    found: list[Response] = []
    if said.range_percent > 0.0:
        for sign in (-1.0, 1.0):
            factor = np.float32(1.0 + sign * said.range_percent / 100.0)
            denser = task.grid.replace(density_g_cm3=task.grid.density_g_cm3 * factor)
            found.append(_response(task, planned, grid=denser))
    if said.position_mm > 0.0:
        for axis in range(3):
            for sign in (-1.0, 1.0):
                moved = [0.0, 0.0, 0.0]
                moved[axis] = sign * said.position_mm
                found.append(_response(task, planned, moved_mm=(moved[0], moved[1], moved[2])))
    return found


def _moved(field: Field, by_mm: tuple[float, float, float]) -> Field:
    """Return a field with its isocentre moved."""
    if not any(by_mm):
        return field
    x, y, z = (old + step for old, step in zip(field.isocentre_mm, by_mm, strict=True))
    return field.replace(isocentre_mm=(x, y, z))

"""From first weights to final ones: a search in three dimensions where the study asks for it, and the prescription.

The search is that of :mod:`dosekit.modulation.corrections`: a quick stand-in set right by the fold, with one of each
for every error that the weights should stand. Goals: uniform dose in the target, limits in organs, and no more than the
prescription in a shell around the target. Then all weights are multiplied by one number
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
from dosekit.studies.folding import JudgingFold, weights_given
from dosekit.studies.goal_voxels import goals_of
from dosekit.studies.planning import PlannedField, effect_model_of

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.effects.mixed_field import EffectModel
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field
    from dosekit.modulation.goals import Goal
    from dosekit.modulation.responses import Response
    from dosekit.modulation.surrogates import Pencils
    from dosekit.modulation.weights import FoundWeights
    from dosekit.studies.model import Study

__all__ = ["FieldWeights", "search_weights"]


@dataclass(frozen=True)
class FieldWeights:
    """Outcome of a search.

    Attributes
    ----------
    planned : list of PlannedField
        Fields with the weights found.
    searches : tuple of FoundWeights
        One search, or one for each field.
    folded : dict of str to Dataset
        Dose of those fields whose last judgement was of the weights found.
    """

    planned: list[PlannedField]
    searches: tuple[FoundWeights, ...]
    folded: dict[str, xr.Dataset]


def search_weights(
    study: Study,
    grid: VoxelGrid,
    target: str,
    planned: Sequence[PlannedField],
    *,
    let: Mapping[str, NDArray[np.float32]] | None = None,
    progress: Callable[[str, float], None] | None = None,
) -> FieldWeights:
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
    FieldWeights
        Fields with the weights found, the searches, and the folds that judged them last.
    """
    goal = study.goal
    goals, voxels = goals_of(study, grid, target)
    local = None if let is None else {name: values.reshape(-1)[voxels] for name, values in let.items()}
    constants: Mapping[str, tuple[Any, Any]] = {}
    if goal.quantity == "effect":
        constants = effect_model_of(study, planned[0].field.beam.particle).constants(local)
    groups = [[plan] for plan in planned] if goal.weights == "each_field" else [list(planned)]
    what = "weights in three dimensions"
    found: list[FoundWeights] = []
    changed: list[PlannedField] = []
    folded: dict[str, xr.Dataset] = {}
    for count, group in enumerate(groups):
        share = len(group) / len(planned)

        def tell(step: int, cost: float, *, count: int = count) -> None:
            del cost
            if progress is not None:
                progress(what, (count + min(step / (1.0 + step), 0.95)) / len(groups))

        tell(0, 0.0)
        scaled = [replace(goal, level_gy=goal.level_gy * share) for goal in goals]
        one, known = _search(_Task(study, grid, voxels, constants), group, scaled, share, tell)
        found.append(one)
        changed += weights_given(group, one.weights)
        folded |= known
    if progress is not None:
        progress(what, 1.0)
    return FieldWeights(changed, tuple(found), folded)


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
) -> tuple[FoundWeights, dict[str, xr.Dataset]]:
    """Search with the quick stand-in corrected by the fold, in every scenario."""
    from dosekit.modulation.corrections import find_weights_corrected
    from dosekit.modulation.surrogates import Pencils, water_depth_mm

    said = task.study.goal
    pencils = [Pencils(plan.field, plan.library, water_depth_mm(plan.field, task.grid, task.voxels)) for plan in group]
    model = effect_model_of(task.study, group[0].field.beam.particle)
    first = _Erring(task, group, _Error())
    judging = JudgingFold(task.study, task.grid, group, task.voxels, model, task.constants, first)
    errors = _errors(task.study)
    found = find_weights_corrected(
        judging,
        _stand_in(task, pencils, model, _Error()),
        goals,
        scale_gy=said.dose_gy * share,
        start=np.concatenate([np.asarray(plan.field.weights).ravel() for plan in group]),
        scenarios=[(_Erring(task, group, error), _stand_in(task, pencils, model, error)) for error in errors],
        robust=said.robust.join if said.robust is not None else "worst",
        largest_steps=said.iterations,
        progress=tell,
    )
    return found, judging.folded(found.weights)


@dataclass(frozen=True)
class _Error:
    """An error of range (a factor on all depths) or of position (of the isocentre, mm)."""

    range_factor: float = 1.0
    moved_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)


def _errors(study: Study) -> list[_Error]:
    """Return the errors that the weights should stand, none where the study does not ask for them."""
    said = study.goal.robust
    if said is None:
        return []
    found = []
    if said.range_percent > 0.0:
        found += [_Error(range_factor=1.0 + sign * said.range_percent / 100.0) for sign in (-1.0, 1.0)]
    if said.position_mm > 0.0:
        for axis in range(3):
            for sign in (-1.0, 1.0):
                x, y, z = (sign * said.position_mm if axis == place else 0.0 for place in range(3))
                found.append(_Error(moved_mm=(x, y, z)))
    return found


def _stand_in(task: _Task, pencils: Sequence[Pencils], model: EffectModel, error: _Error) -> Response:
    """Return the quick stand-in for the dose of some fields, as sparse matrices."""
    from dosekit.modulation.responses import EffectResponse, LinearResponse
    from dosekit.modulation.surrogates import pencil_matrices

    study = task.study
    plain = task.plain_factors(model)
    factors: list[dict[str, Any]] = [dict(plain)] if plain is not None else []
    if plain is None:
        factors = [{name: task.constants[name][place] for name in COMPONENTS} for place in (0, 1)]
    matrices = pencil_matrices(
        pencils,
        task.grid,
        task.voxels,
        factors=factors,
        star_scale=study.stars.scale,
        range_factor=error.range_factor,
        moved_mm=error.moved_mm,
    )
    if plain is None:
        return EffectResponse(matrices[0], matrices[1], model.tissue, study.goal.fractions)
    return LinearResponse(matrices[0])


@dataclass(frozen=True, eq=False)
class _Erring:
    """The exact dose with an error of range or position (or none), made anew each time it is asked for."""

    task: _Task
    planned: Sequence[PlannedField]
    error: _Error

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the dose that the goal asks for, Gy."""
        from dosekit.maps.operator import FoldOperator
        from dosekit.modulation.responses import FoldEffectResponse, LinearResponse

        study, grid = self.task.study, self.task.grid
        if self.error.range_factor != 1.0:
            grid = grid.replace(density_g_cm3=grid.density_g_cm3 * np.float32(self.error.range_factor))
        fields = [_moved(plan.field, self.error.moved_mm) for plan in self.planned]
        operator = FoldOperator(
            fields,
            grid,
            voxels=self.task.voxels,
            yields=study.stars.yields,
            star_scale=study.stars.scale,
            dose_to=study.outputs.dose_to,
            libraries={plan.field.name: plan.library for plan in self.planned},
        )
        model = effect_model_of(study, fields[0].beam.particle)
        plain = self.task.plain_factors(model)
        if plain is not None:
            return LinearResponse(operator.with_factors(plain)).dose(weights)
        return FoldEffectResponse(operator, self.task.constants, model.tissue, study.goal.fractions).dose(weights)


def _moved(field: Field, by_mm: tuple[float, float, float]) -> Field:
    """Return a field with its isocentre moved."""
    if not any(by_mm):
        return field
    x, y, z = (old + step for old, step in zip(field.isocentre_mm, by_mm, strict=True))
    return field.replace(isocentre_mm=(x, y, z))

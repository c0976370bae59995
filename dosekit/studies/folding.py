"""Fold the fields of a study one by one, and use a fold twice where it is asked for twice."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.effects.mixed_field import EffectModel
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.modulation.responses import Judge
    from dosekit.studies.model import Study
    from dosekit.studies.planning import PlannedField

__all__ = ["JudgingFold", "fold_fields", "scaled_dose", "scaled_plan", "summed", "weights_given"]

Progress = Callable[[str, float], None]


def fold_fields(
    study: Study,
    grid: VoxelGrid,
    planned: Sequence[PlannedField],
    *,
    known: Mapping[str, xr.Dataset] | None = None,
    progress: Progress | None = None,
) -> dict[str, xr.Dataset]:
    """Return the dose of each field.

    Parameters
    ----------
    study : Study
        The study.
    grid : VoxelGrid
        The volume.
    planned : sequence of PlannedField
        Fields with their weights.
    known : mapping of str to Dataset, optional
        Dose of fields that have been folded with these weights already.
    progress : callable, optional
        Told what is being done.

    Returns
    -------
    dict of str to Dataset
        Name of the field to ``dose(component, z, y, x)``, Gy, and ``stops(z, y, x)``.
    """
    from dosekit.maps.fold import fold

    tell = progress or (lambda what, fraction: None)  # noqa: ARG005
    given = known or {}
    per_field: dict[str, xr.Dataset] = {}
    for count, plan in enumerate(planned):
        tell("fold", count / len(planned))
        name = plan.field.name
        per_field[name] = (
            given[name]
            if name in given
            else fold(
                plan.field,
                grid,
                yields=study.stars.yields,
                star_scale=study.stars.scale,
                dose_to=study.outputs.dose_to,
                libraries={name: plan.library},
            )
        )
    tell("fold", 1.0)
    return per_field


def summed(per_field: Mapping[str, xr.Dataset]) -> xr.Dataset:
    """Return the dose of all fields together.

    Parameters
    ----------
    per_field : mapping of str to Dataset
        Dose of each field.

    Returns
    -------
    Dataset
        The sum.
    """
    first, *rest = per_field.values()
    total = first.copy(deep=True)
    for dataset in rest:
        for name in total.data_vars:
            total[name].values += dataset[name].values
    total.attrs["fields"] = ", ".join(per_field)
    total.attrs["particles"] = float(sum(dataset.attrs["particles"] for dataset in per_field.values()))
    return total


def scaled_plan(plan: PlannedField, factor: float) -> PlannedField:
    """Return a planned field with its weights multiplied.

    Parameters
    ----------
    plan : PlannedField
        The field.
    factor : float
        What to multiply with.

    Returns
    -------
    PlannedField
        The same with other weights.
    """
    return replace(plan, field=plan.field.replace(weights=np.asarray(plan.field.weights) * factor))


def scaled_dose(dataset: xr.Dataset, factor: float) -> xr.Dataset:
    """Return dose and stops multiplied by one number.

    Parameters
    ----------
    dataset : Dataset
        Dose and stops.
    factor : float
        What to multiply with.

    Returns
    -------
    Dataset
        A copy.
    """
    changed = dataset.copy(deep=True)
    for name in changed.data_vars:
        changed[name].values *= np.float32(factor)
    changed.attrs["particles"] = float(dataset.attrs.get("particles", 0.0)) * factor
    return changed


def weights_given(planned: Sequence[PlannedField], vector: NDArray[np.float64]) -> list[PlannedField]:
    """Return fields with the weights of one long vector.

    Parameters
    ----------
    planned : sequence of PlannedField
        The fields.
    vector : ndarray
        Weights, field by field, spot by spot, step by step.

    Returns
    -------
    list of PlannedField
        The fields.
    """
    sizes = np.cumsum([int(np.prod(plan.field.shape)) for plan in planned])[:-1]
    return [
        replace(plan, field=plan.field.replace(weights=part.reshape(plan.field.shape)))
        for plan, part in zip(planned, np.split(np.asarray(vector, dtype=np.float64), sizes), strict=True)
    ]


@dataclass(eq=False)
class JudgingFold:
    """The exact dose in some voxels, from folds of the whole volume that a run can use again.

    Parameters
    ----------
    study : Study
        The study.
    grid : VoxelGrid
        The volume.
    planned : sequence of PlannedField
        The fields, in the order of the weights.
    voxels : ndarray of int
        Flat indices of the voxels.
    model : EffectModel
        The effect model, for a goal of effect-weighted dose.
    constants : mapping of str to (alpha, root of beta)
        Its constants in these voxels.
    first : Judge, optional
        The same dose in these voxels alone, used for the first judgement, whose weights are seldom the last.
    """

    study: Study
    grid: VoxelGrid
    planned: Sequence[PlannedField]
    voxels: NDArray[np.int64]
    model: EffectModel
    constants: Mapping[str, tuple[Any, Any]]
    first: Judge | None = None
    _last: tuple[bytes, dict[str, xr.Dataset]] | None = field(default=None, init=False)

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], None]:
        """Give the dose that the goal asks for.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dose_gy : ndarray, shape (n,)
            Gy.
        kept : None
            There is no way back, hence nothing to keep.
        """
        from dosekit.effects.mixed_field import effect_sums, weighted_dose_gy

        self._last = None
        if self.first is not None:
            early, self.first = self.first, None
            return early.dose(weights)[0], None
        folded = fold_fields(self.study, self.grid, weights_given(self.planned, weights))
        self._last = (np.asarray(weights, dtype=np.float64).tobytes(), folded)
        parts = {
            name: sum(one["dose"].values[row].reshape(-1)[self.voxels].astype(np.float64) for one in folded.values())
            for row, name in enumerate(COMPONENTS)
        }
        if self.study.goal.quantity == "physical":
            return np.asarray(np.sum(list(parts.values()), axis=0)), None
        linear, root = effect_sums(parts, dict(self.constants))
        return weighted_dose_gy(linear, root, tissue=self.model.tissue, fractions=self.study.goal.fractions), None

    def folded(self, weights: NDArray[np.float64]) -> dict[str, xr.Dataset]:
        """Return the folds of the last judgement, if it was of these weights.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dict of str to Dataset
            Dose of each field, or nothing.
        """
        if self._last is None or self._last[0] != np.asarray(weights, dtype=np.float64).tobytes():
            return {}
        return self._last[1]

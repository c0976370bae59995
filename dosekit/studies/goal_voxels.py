"""Which goals does a study set, and in which voxels are they looked at?

Uniform dose in the target, limits in organs, and no more than the prescription in a shell around the target.  Of all
their voxels some stand for the rest (:mod:`dosekit.modulation.sampling`); what a run reports is measured in all.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.modulation.goals import Goal
    from dosekit.studies.model import Study

__all__ = ["goals_of"]


def goals_of(study: Study, grid: VoxelGrid, target: str) -> tuple[list[Goal], NDArray[np.int64]]:
    """Return the goals and the flat indices of the voxels that they look at.

    Parameters
    ----------
    study : Study
        The study.
    grid : VoxelGrid
        The volume.
    target : str
        The target's structure.

    Returns
    -------
    goals : list of Goal
        The target's first.
    voxels : ndarray of int, shape (n,)
        Flat indices in rising order; the goals' places are among these.
    """
    from scipy.ndimage import distance_transform_edt

    from dosekit.modulation.goals import Goal
    from dosekit.modulation.sampling import thinned_coverage

    said = study.goal
    wanted = grid.structure(target)
    away = distance_transform_edt(wanted < 0.5, sampling=grid.spacing_mm[::-1])
    shell = (away > max(grid.spacing_mm)) & (away <= said.surround_mm) & grid.body() & (wanted <= 0.0)
    asked: list[tuple[str, str, NDArray[np.float32], float, float]] = []

    def ask(name: str, kind: str, coverage: NDArray[np.float32], level_gy: float, weight: float) -> None:
        kept = thinned_coverage(coverage, spacing_mm=grid.spacing_mm, edges=kind == "uniform")
        asked.append((name, kind, kept.reshape(-1), level_gy, weight))

    ask(target, "uniform", wanted, said.dose_gy, 1.0)
    if said.surround_weight > 0.0 and shell.any():
        ask("shell around the target", "maximum", shell.astype(np.float32), said.dose_gy, said.surround_weight)
    for organ in study.organ:
        if organ.maximum_gy is not None:
            mask = grid.structure(organ.structure)
            ask(f"{organ.structure}, maximum", "maximum", mask, organ.maximum_gy, organ.weight)
        if organ.mean_gy is not None:
            mask = grid.structure(organ.structure)
            ask(f"{organ.structure}, mean", "mean", mask, organ.mean_gy, organ.weight)
    voxels = np.flatnonzero(np.any([kept > 0.0 for _, _, kept, _, _ in asked], axis=0))
    goals = []
    for name, kind, kept, level, weight in asked:
        flat = np.flatnonzero(kept)
        share = kept[flat].astype(np.float64)
        goals.append(Goal(name, kind, np.searchsorted(voxels, flat), level, coverage=share, weight=weight))
    return goals, voxels

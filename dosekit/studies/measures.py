"""What a run says about each structure: volume histograms and the usual measures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from dosekit.effects.histograms import VolumeHistogram
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.studies.model import Study

__all__ = ["reported_structures", "structure_histograms", "structure_measures"]


def reported_structures(study: Study, grid: VoxelGrid, target: str) -> list[str]:
    """Return the structures to report on: target, organs of the study, then the phantom's or CT's own.

    Parameters
    ----------
    study : Study
        The study.
    grid : VoxelGrid
        The volume.
    target : str
        Name of the target in the volume.

    Returns
    -------
    list of str
        Names, each once.
    """
    named = [target, *(grid.structure_name(organ.structure) for organ in study.organ)]
    others = [name for name in grid.structures if grid.role(name) in ("organ_at_risk", "body")]
    return list(dict.fromkeys([*named, *others]))


def structure_histograms(grid: VoxelGrid, dose_gy: NDArray[Any], names: Sequence[str]) -> dict[str, VolumeHistogram]:
    """Return volume histograms of structures that have a volume in the grid.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    dose_gy : ndarray [z, y, x]
        Dose, Gy.
    names : sequence of str
        Structures.

    Returns
    -------
    dict of str to VolumeHistogram
        By name, in the same order.
    """
    from dosekit.effects.histograms import volume_histogram

    found: dict[str, VolumeHistogram] = {}
    for name in names:
        coverage = grid.structure(name)
        if coverage.any():
            found[name] = volume_histogram(dose_gy, coverage, voxel_cm3=_voxel_cm3(grid))
    return found


def structure_measures(
    grid: VoxelGrid,
    target: str,
    histograms: Mapping[str, VolumeHistogram],
    dose_gy: NDArray[Any],
    *,
    level_gy: float | None,
) -> dict[str, dict[str, float]]:
    """Return measures of each structure; those that only mean something for a target stand with the target alone.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    target : str
        Name of the target.
    histograms : mapping of str to VolumeHistogram
        From `structure_histograms`, of the same dose.
    dose_gy : ndarray [z, y, x]
        Dose, Gy.
    level_gy : float, optional
        Isodose for the conformity of the target (95 % of the prescription); None leaves it out.

    Returns
    -------
    dict of str to dict
        Name to measures by name.
    """
    from dosekit.effects.plan_measures import conformity

    rows = {name: histogram.measures() for name, histogram in histograms.items()}
    for name, row in rows.items():
        if name != target and grid.role(name) != "target":
            row.pop("homogeneity", None)
    if level_gy is not None:
        fit = conformity(
            dose_gy, grid.structure(target), body=grid.body(), level_gy=level_gy, voxel_cm3=_voxel_cm3(grid)
        )
        rows[target] |= {"conformity": fit["conformity"], "conformation_number": fit["conformation_number"]}
    return rows


def _voxel_cm3(grid: VoxelGrid) -> float:
    return float(np.prod(grid.spacing_mm)) * 1e-3

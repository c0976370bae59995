"""A volume on another lattice: averages by overlap, so that mass and volumes are kept."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from dosekit.grids.coverages import Coverages
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["overlap_shares", "resample_grid"]


def overlap_shares(
    count: int, spacing_mm: float, new_spacing_mm: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return how new voxels along one axis overlap the old ones; both lattices begin at the same edge.

    Parameters
    ----------
    count : int
        Number of old voxels.
    spacing_mm, new_spacing_mm : float
        Old and new spacing, mm.

    Returns
    -------
    tuple of ndarray
        First old voxel under each new one; and [new, k], the share of the new voxel's length covered by the k-th
        old voxel from there on.

    Examples
    --------
    >>> first, shares = overlap_shares(4, 1.0, 2.0)
    >>> first.tolist(), shares.tolist()
    ([0, 2], [[0.5, 0.5], [0.5, 0.5]])
    """
    new_count = max(1, int(np.ceil(count * spacing_mm / new_spacing_mm - 1e-6)))
    old_edges = spacing_mm * np.arange(count + 1, dtype=float)
    low = new_spacing_mm * np.arange(new_count, dtype=float)
    high = low + new_spacing_mm
    first = np.clip(np.floor(low / spacing_mm + 1e-9).astype(np.int64), 0, count - 1)
    last = np.clip(np.ceil(high / spacing_mm - 1e-9).astype(np.int64), 1, count)
    width = int((last - first).max())
    shares = np.zeros((new_count, width))
    for k in range(width):
        which = np.minimum(first + k, count - 1)
        overlap = np.minimum(high, old_edges[which + 1]) - np.maximum(low, old_edges[which])
        shares[:, k] = np.where(first + k < last, np.maximum(overlap, 0.0) / new_spacing_mm, 0.0)
    return first, shares


def resample_grid(grid: VoxelGrid, spacing_mm: tuple[float, float, float]) -> VoxelGrid:
    """Return a volume on a lattice of another spacing with the same lower corner.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    spacing_mm : tuple of float
        New spacing (x, y, z), mm.

    Returns
    -------
    VoxelGrid
        The resampled volume; see `VoxelGrid.resample`.
    """
    from dosekit.grids.kernels import overlap_material

    counts = [grid.shape[2 - a] * grid.spacing_mm[a] / spacing_mm[a] for a in range(3)]
    wanted = math.prod(max(1.0, float(np.ceil(n - 1e-6))) for n in counts)
    check_memory(wanted * 12.0, what=f"a volume of {wanted:.3g} voxels")
    axes = [overlap_shares(grid.shape[2 - a], grid.spacing_mm[a], spacing_mm[a]) for a in (2, 1, 0)]
    first = (axes[0][0], axes[1][0], axes[2][0])
    shares = (axes[0][1], axes[1][1], axes[2][1])
    shape = (len(first[0]), len(first[1]), len(first[2]))
    density = _averaged(grid.density_g_cm3, axes)
    index = np.empty(shape, dtype=np.uint16)
    overlap_material(grid.material_index, first, shares, np.zeros(len(grid.materials)), index)
    structures = {}
    for name in grid.structures:
        structures[name] = np.minimum(_averaged(grid.structures[name], axes), np.float32(1.0))
    x, y, z = (corner + 0.5 * step for corner, step in zip(grid.lower_mm, spacing_mm, strict=True))
    return replace(
        grid,
        origin_mm=(x, y, z),
        spacing_mm=spacing_mm,
        density_g_cm3=density,
        material_index=index,
        structures=Coverages(shape, structures),
        hu=None,
    )


def _averaged(
    values: NDArray[np.float32], axes: list[tuple[NDArray[np.int64], NDArray[np.float64]]]
) -> NDArray[np.float32]:
    """Average values over new voxels, one axis after the other."""
    result: NDArray[np.float32] = values
    for axis, (first, shares) in enumerate(axes):
        count = result.shape[axis]
        along = [1, 1, 1]
        along[axis] = len(first)
        summed = np.zeros(tuple(len(first) if a == axis else n for a, n in enumerate(result.shape)), dtype=np.float32)
        for k in range(shares.shape[1]):
            weights = shares[:, k].astype(np.float32).reshape(along)
            summed += weights * np.take(result, np.minimum(first + k, count - 1), axis=axis)
        result = summed
    return result

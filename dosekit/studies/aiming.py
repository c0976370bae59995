"""Where must each spot of a field stop its beam, in water-equivalent depth?

Rays are followed through the volume; along each, the water-equivalent depth at which it enters and leaves the target
is noted. A spot in the margin around the target takes the geometric interval of the nearest ray that meets it, and
its own water-equivalent depth there.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import GridError
from dosekit.modulation.spots import spots_over_shadow
from dosekit.modulation.surrogates import voxel_centres_mm

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.frames import BeamFrame

__all__ = ["AimedSpots", "aim"]

_STEP_MM = 1.0
_EDGE = 0.5
_CHUNK = 256


@dataclass(frozen=True)
class AimedSpots:
    """Spots of a field and the water-equivalent interval that each has to fill.

    Attributes
    ----------
    spots_mm : ndarray
        (u, v) in the plane of the isocentre, shape (n, 2), mm.
    near_mm, far_mm : ndarray
        Water-equivalent depth behind the surface where the target begins and ends, shape (n,), mm.
    inside : ndarray of bool
        True where the spot's own ray meets the target, shape (n,).
    """

    spots_mm: NDArray[np.float64]
    near_mm: NDArray[np.float64]
    far_mm: NDArray[np.float64]
    inside: NDArray[np.bool_]


def aim(frame: BeamFrame, grid: VoxelGrid, target: str, *, spacing_mm: float, margin_mm: float) -> AimedSpots:
    """Lay spots over the target as a field sees it and find how deep each must reach.

    Parameters
    ----------
    frame : BeamFrame
        The field's axes.
    grid : VoxelGrid
        The volume.
    target : str
        Structure to be covered.
    spacing_mm : float
        Distance between neighbouring spots, mm.
    margin_mm : float
        How far spots may lie outside the target's shadow, mm.

    Returns
    -------
    AimedSpots
        Spots and intervals.

    Raises
    ------
    GridError
        If no spot meets the target.
    """
    coverage = grid.structure(target)
    shadow = frame.to_beam(voxel_centres_mm(grid, np.flatnonzero(coverage >= _EDGE)))
    if not len(shadow):
        raise GridError(f"target {target!r} covers no voxel by half or more", remedy="use a finer grid")
    spots = spots_over_shadow(
        shadow[:, :2], spacing_mm=spacing_mm, margin_mm=margin_mm, point_mm=float(min(grid.spacing_mm))
    )
    reach = float(np.linalg.norm(np.array(grid.upper_mm) - np.array(grid.lower_mm)))
    middle = frame.to_beam(0.5 * (np.array(grid.upper_mm) + np.array(grid.lower_mm)))[2]
    along = np.arange(middle - 0.5 * reach, middle + 0.5 * reach, _STEP_MM) + 0.5 * _STEP_MM
    depth, first, last = _trace(frame, grid, coverage, spots, along)
    inside = first >= 0
    if not inside.any():
        raise GridError(f"no spot of the field meets target {target!r}", remedy="use a smaller spot spacing")
    nearest = _nearest(spots, spots[inside])
    first = np.where(inside, first, first[inside][nearest])
    last = np.where(inside, last, last[inside][nearest])
    rows = np.arange(len(spots))
    near = np.where(first > 0, depth[rows, first - 1], 0.0)
    far = depth[rows, last]
    return AimedSpots(spots, near, far, inside)


def _nearest(points: NDArray[np.float64], among: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return for each point the index of the nearest of some others."""
    from scipy.spatial import cKDTree

    return np.asarray(cKDTree(among).query(points)[1], dtype=np.int64)


def _trace(
    frame: BeamFrame,
    grid: VoxelGrid,
    coverage: NDArray[np.float32],
    spots: NDArray[np.float64],
    along: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.int64]]:
    """Return water-equivalent depth behind each sample, and the first and last sample in the target (-1: none)."""
    from scipy.ndimage import map_coordinates

    power = grid.relative_stopping_power()
    origin = np.array(grid.origin_mm)
    spacing = np.array(grid.spacing_mm)
    depth = np.empty((len(spots), len(along)))
    first = np.empty(len(spots), dtype=np.int64)
    last = np.empty(len(spots), dtype=np.int64)
    for start in range(0, len(spots), _CHUNK):
        part = spots[start : start + _CHUNK]
        beam = np.empty((len(part), len(along), 3))
        beam[..., :2] = part[:, None, :]
        beam[..., 2] = along
        points = frame.to_patient(beam)
        index = np.moveaxis((points - origin) / spacing, -1, 0)[::-1]
        local = map_coordinates(power, index, order=1, mode="grid-constant", cval=0.0, prefilter=False)
        step = np.linalg.norm(np.diff(points, axis=1), axis=2)
        step = np.concatenate([step[:, :1], step], axis=1)
        depth[start : start + len(part)] = np.cumsum(local * step, axis=1)
        hit = map_coordinates(coverage, index, order=1, mode="grid-constant", cval=0.0, prefilter=False) >= _EDGE
        first[start : start + len(part)] = np.where(hit.any(axis=1), hit.argmax(axis=1), -1)
        last[start : start + len(part)] = np.where(hit.any(axis=1), hit.shape[1] - 1 - hit[:, ::-1].argmax(axis=1), -1)
    return depth, first, last

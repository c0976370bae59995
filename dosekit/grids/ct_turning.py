"""From image axes to patient axes: turning a volume exactly, or resampling a tilted or uneven one."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import GeometryError
from dosekit.grids.calibration import AIR_HU
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.grids.ct_geometry import Stack

__all__ = ["resampled_volume", "turned_volume"]

_MOST_GROWTH = 20


def turned_volume(
    stack: Stack, values: NDArray[Any], padding: NDArray[np.bool_] | None
) -> tuple[NDArray[Any], tuple[float, float, float], tuple[float, float, float], NDArray[np.bool_] | None]:
    """Turn a volume to increasing patient axes without touching a value.

    Parameters
    ----------
    stack : Stack
        The slices.
    values : ndarray
        HU [slice, row, column].
    padding : ndarray of bool, optional
        Padding, likewise.

    Returns
    -------
    tuple
        HU [z, y, x]; origin and spacing (x, y, z), mm; padding [z, y, x] or None.
    """
    matrix, start = stack.affine()
    which = [int(np.abs(matrix[:, index]).argmax()) for index in range(3)]  # patient axis of each image index
    if sorted(which) != [0, 1, 2]:
        raise GeometryError("image axes that do not span the volume", remedy="the file is damaged; get it again")
    of_axis = [which.index(axis) for axis in range(3)]
    order = tuple(2 - of_axis[axis] for axis in (2, 1, 0))
    flips = tuple(slice(None, None, -1) if matrix[axis, of_axis[axis]] < 0 else slice(None) for axis in (2, 1, 0))
    counts = (stack.columns, stack.rows, stack.count)
    spacing = [float(np.linalg.norm(matrix[:, of_axis[axis]])) for axis in range(3)]
    origin = [
        float(start[axis] + min(0.0, matrix[axis, of_axis[axis]] * (counts[of_axis[axis]] - 1))) for axis in range(3)
    ]
    turned = np.ascontiguousarray(values.transpose(order)[flips])
    marked = None if padding is None else np.ascontiguousarray(padding.transpose(order)[flips])
    return turned, (origin[0], origin[1], origin[2]), (spacing[0], spacing[1], spacing[2]), marked


def resampled_volume(
    stack: Stack, values: NDArray[Any], padding: NDArray[np.bool_] | None
) -> tuple[NDArray[Any], tuple[float, float, float], tuple[float, float, float], NDArray[np.bool_] | None]:
    """Interpolate a volume linearly on a lattice along the patient axes that holds all of it.

    A point p has the image indices (i, j, t) with p = start + i a + j b + t n, where a and b are the steps along a row
    and a column, n the unit vector along the line of slices and t in mm; t becomes a slice index between the real
    positions of the slices. Points outside the scanned volume are air.

    Parameters
    ----------
    stack : Stack
        The slices.
    values : ndarray
        HU [slice, row, column].
    padding : ndarray of bool, optional
        Padding, likewise.

    Returns
    -------
    tuple
        HU [z, y, x], float32; origin and spacing (x, y, z), mm; padding [z, y, x] or None.

    Raises
    ------
    GeometryError
        When most of the volume would be invented.
    SizeError
        When it would not fit into memory.
    """
    from scipy import ndimage

    matrix, start = stack.affine()
    counts = np.array([stack.columns, stack.rows, stack.count])
    corners = np.array(np.meshgrid(*[[0.0, n - 1.0] for n in counts])).reshape(3, -1)
    points = matrix @ corners + start[:, None]
    low, high = points.min(axis=1), points.max(axis=1)
    which = [int(np.abs(matrix[:, index]).argmax()) for index in range(3)]
    if sorted(which) != [0, 1, 2]:
        raise GeometryError("slices too oblique to be resampled", allowed="angles below 45 degrees",
                            remedy="reformat the series first")  # fmt: skip
    steps = np.linalg.norm(matrix, axis=0)
    spacing = np.array([steps[which.index(axis)] for axis in range(3)])
    if stack.unevenness():
        spacing[which[2]] = float(np.median(np.diff(stack.offsets_mm)))
    sizes = np.floor((high - low) / spacing + 1e-6).astype(int) + 1
    check_memory(
        float(np.prod(sizes.astype(float))) * 28.0, what=f"a resampled CT of {' x '.join(map(str, sizes))} voxels"
    )
    if float(np.prod(sizes.astype(float))) > _MOST_GROWTH * max(values.size, 1000):
        raise GeometryError(
            f"{values.size} voxels would become {' x '.join(map(str, sizes))}, mostly invented",
            allowed=f"up to {_MOST_GROWTH} times the voxels that were scanned",
            remedy="get the missing slices or reformat the series",
        )
    nx, ny, nz = (int(n) for n in sizes)
    inverse = np.linalg.inv(np.stack([matrix[:, 0], matrix[:, 1], stack.along], axis=1))
    x = low[0] + spacing[0] * np.arange(nx)
    y = low[1] + spacing[1] * np.arange(ny)
    out = np.empty((nz, ny, nx), dtype=np.float32)
    marked = None if padding is None else np.zeros(out.shape, dtype=bool)
    slices = np.arange(stack.count, dtype=float)
    floats = values.astype(np.float32)
    for plane in range(nz):
        z = low[2] + spacing[2] * plane - start[2]
        i, j, t = (row[0] * (x - start[0])[None, :] + row[1] * (y - start[1])[:, None] + row[2] * z for row in inverse)
        offsets = stack.offsets_mm
        k = np.interp(t, offsets, slices)
        first, last = offsets[1] - offsets[0], offsets[-1] - offsets[-2]
        inside = (np.abs(i - (stack.columns - 1) / 2) <= stack.columns / 2) & (
            np.abs(j - (stack.rows - 1) / 2) <= stack.rows / 2
        )
        inside &= (t >= -first / 2) & (t <= offsets[-1] + last / 2)
        out[plane] = ndimage.map_coordinates(floats, [k, j, i], order=1, mode="nearest", output=np.float32)
        out[plane][~inside] = AIR_HU
        if marked is not None and padding is not None:
            marked[plane] = ndimage.map_coordinates(padding, [k, j, i], order=0, mode="nearest") & inside
    return (
        out,
        (float(low[0]), float(low[1]), float(low[2])),
        (float(spacing[0]), float(spacing[1]), float(spacing[2])),
        marked,
    )

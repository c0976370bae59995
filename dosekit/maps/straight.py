"""Which nodes each voxel reads when a field runs along the axes of the volume.

For a parallel field whose axes are those of the voxels, what a voxel reads of a map is a product of three sums, one
along each axis. Here they are made, for the points that sample a voxel, as a first node and shares.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.loops import Lattice
from dosekit.maps.rays import Matter, Planes
from dosekit.maps.sampling import places_of_points

__all__ = ["runs_straight", "straight_reading"]

_PARALLEL = 1.0 - 1e-12


def runs_straight(planes: Planes) -> bool:
    """Return whether a field is parallel and its axes are those of the voxels.

    Parameters
    ----------
    planes : Planes
        Planes of the field.

    Returns
    -------
    bool
        Whether it is.
    """
    frame = planes.frame
    return frame.source_distance_mm is None and bool(np.all(np.abs(frame.rotation).max(axis=1) > _PARALLEL))


def straight_reading(
    matter: Matter, planes: Planes, fine: Lattice, lattice: Lattice, array: NDArray[np.float64]
) -> tuple[NDArray[Any], ...]:
    """Return what the straight kernel needs to know of the nodes of a map that voxels read.

    Parameters
    ----------
    matter : Matter
        The volume.
    planes : Planes
        Planes of the field.
    fine, lattice : Lattice
        The fine lattice of the field, and the one of the map; if it is the same, it is read by splines.
    array : ndarray
        The map, shape (w, v, u, parts).

    Returns
    -------
    stride, count, first, share : ndarray
        See :func:`dosekit.maps.kernels_straight.deposit_straight`.
    """
    start, turn, _, sub, (first_plane, per_mm), nodes = places_of_points(matter, planes, fine)
    matrices = []
    stride, count = np.zeros(3, dtype=np.int64), np.zeros(3, dtype=np.int64)
    for axis in range(3):  # z, y, x
        a = 2 - axis
        b = int(np.argmax(np.abs(turn[:, a])))  # u, v or w of the beam
        points = np.arange(matter.shape[axis])[:, None] + (np.arange(sub[a]) + 0.5) / sub[a] - 0.5
        position = start[b] + turn[b, a] * points
        along = 2 - b  # axis of the map
        stride[axis] = int(np.prod(array.shape[along + 1 :]))
        count[axis] = array.shape[along]
        if b == 2:
            matrix = _linear((position - first_plane) * per_mm, count[axis])
            if lattice is fine:  # the core ends somewhere
                lit = array.max(axis=(1, 2, 3)) > array.min(axis=(1, 2, 3))
                matrix[~(matrix[:, lit] > 0.0).any(axis=1)] = 0.0
        else:
            place = (position - (lattice.u_mm, lattice.v_mm)[b][0]) / lattice.spacing_mm
            matrix = _spline(place, count[axis], nodes) if lattice is fine else _linear(place, count[axis])
        matrices.append(matrix)
    widest = max(_width(matrix) for matrix in matrices)
    first = np.zeros((3, max(matter.shape)), dtype=np.int64)
    share = np.zeros((3, widest, first.shape[1]))
    for axis, matrix in enumerate(matrices):
        begin = (matrix != 0.0).argmax(axis=1)
        places = begin[:, None] + np.arange(widest)
        first[axis, : len(begin)] = begin
        inside = np.minimum(places, count[axis] - 1)
        shares = np.where(places < count[axis], np.take_along_axis(matrix, inside, axis=1), 0.0)
        share[axis, :, : len(begin)] = shares.T
    return stride, count, first, share


def _width(matrix: NDArray[np.float64]) -> int:
    """Return how many nodes a voxel reads at most, from the first to the last."""
    some = matrix != 0.0
    last = np.where(some, np.arange(1, matrix.shape[1] + 1), 0).max(axis=1)
    return max(int((last - some.argmax(axis=1)).max()), 1)


def _linear(place: NDArray[np.float64], count: int) -> NDArray[np.float64]:
    """Return shares of linear interpolation, voxels by nodes, from places of points (voxels, points)."""
    low = np.floor(place).astype(np.int64)
    inside = (low >= 0) & (low + 1 < count)
    out = np.zeros((len(place), count))
    row = np.broadcast_to(np.arange(len(place))[:, None], place.shape)
    upper = place - low
    np.add.at(out, (row[inside], low[inside]), 1.0 - upper[inside])
    np.add.at(out, (row[inside], low[inside] + 1), upper[inside])
    out /= place.shape[1]
    return out


def _spline(place: NDArray[np.float64], count: int, nodes: int) -> NDArray[np.float64]:
    """Return shares of the quadratic B-spline, or of the nearest node, in the same way."""
    near = np.floor(place + 0.5).astype(np.int64)
    t = place - near
    weights = [np.ones_like(t)] if nodes == 1 else [0.5 * (0.5 - t) ** 2, 0.75 - t * t, 0.5 * (0.5 + t) ** 2]
    first = near - nodes // 2
    inside = (first >= 0) & (first + nodes <= count)
    out = np.zeros((len(place), count))
    row = np.broadcast_to(np.arange(len(place))[:, None], place.shape)
    for m, weight in enumerate(weights):
        np.add.at(out, (row[inside], first[inside] + m), weight[inside])
    out /= place.shape[1]
    return out

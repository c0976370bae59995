"""Where voxels read a field's maps: runs of voxels, and the points that sample each of them.

Voxels are handled in runs along x, so that a box of voxels and a short list of chosen ones go the same way. A voxel is
sampled at points no further apart than the maps can resolve; where every point lies on a node of the fine lattice
the node is read as it is, elsewhere a quadratic B-spline is (see :mod:`dosekit.maps.kernels_voxels`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.loops import Lattice
from dosekit.maps.rays import Matter, Planes

__all__ = ["Runs", "box_of_voxels", "places_of_points", "slabs_apart"]


@dataclass(frozen=True, eq=False)
class Runs:
    """Voxels in runs along x.

    Attributes
    ----------
    first : ndarray
        Flat index of the first voxel of each run, rising.
    column : ndarray
        Which column of a result the first voxel belongs to; those behind it follow.
    count : ndarray
        Voxels in each run; a run never leaves its row of the volume.
    """

    first: NDArray[np.int64]
    column: NDArray[np.int64]
    count: NDArray[np.int64]

    def places(self, shape: tuple[int, int, int]) -> NDArray[np.int64]:
        """Return the index (x, y, z) of the first voxel of each run.

        Parameters
        ----------
        shape : tuple of int
            Voxels of the volume along z, y and x.

        Returns
        -------
        ndarray
            Shape (runs, 3).
        """
        _, ny, nx = shape
        return np.stack([self.first % nx, (self.first // nx) % ny, self.first // (nx * ny)], axis=1)

    @staticmethod
    def of_box(low: NDArray[np.int64], high: NDArray[np.int64], shape: tuple[int, int, int]) -> Runs:
        """Return the rows of a box; their columns are their flat indices.

        Parameters
        ----------
        low, high : ndarray
            First voxel and the one after the last along x, y and z.
        shape : tuple of int
            Voxels of the volume along z, y and x.

        Returns
        -------
        Runs
            One run for each row.
        """
        _, ny, nx = shape
        z, y = (np.arange(low[a], max(low[a], high[a]), dtype=np.int64) for a in (2, 1))
        first = ((z[:, None] * ny + y) * nx + low[0]).reshape(-1)
        count = np.full(len(first), max(int(high[0] - low[0]), 0), dtype=np.int64)
        return Runs(first=first, column=first, count=count)

    @staticmethod
    def of_voxels(voxels: NDArray[np.int64], columns: NDArray[np.int64], shape: tuple[int, int, int]) -> Runs:
        """Return the runs of a list of voxels.

        Parameters
        ----------
        voxels : ndarray
            Flat indices.
        columns : ndarray
            Column of a result for each.
        shape : tuple of int
            Voxels of the volume along z, y and x.

        Returns
        -------
        Runs
            As few as there are.

        Examples
        --------
        >>> runs = Runs.of_voxels(np.array([1, 2, 3, 4, 7]), np.arange(5), (2, 2, 4))
        >>> runs.first.tolist(), runs.column.tolist(), runs.count.tolist()
        ([1, 4, 7], [0, 3, 4], [3, 1, 1])
        """
        if not len(voxels):
            nothing = np.zeros(0, dtype=np.int64)
            return Runs(first=nothing, column=nothing, count=nothing)
        begins = np.ones(len(voxels), dtype=np.bool_)
        begins[1:] = (np.diff(voxels) != 1) | (np.diff(columns) != 1) | (voxels[1:] % shape[2] == 0)
        at = np.flatnonzero(begins)
        return Runs(
            first=np.ascontiguousarray(voxels[at], dtype=np.int64),
            column=np.ascontiguousarray(columns[at], dtype=np.int64),
            count=np.diff(np.append(at, len(voxels))).astype(np.int64),
        )


def box_of_voxels(
    matter: Matter, planes: Planes, fine: Lattice, coarse: Lattice
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return the box of voxels that a field's lattices can reach.

    Parameters
    ----------
    matter : Matter
        The volume.
    planes : Planes
        Planes of the field.
    fine, coarse : Lattice
        Its lattices.

    Returns
    -------
    low, high : ndarray
        First voxel and the one after the last along x, y and z.
    """
    edges_u, edges_v = (
        (min(a[0], b[0]), max(a[-1], b[-1])) for a, b in ((coarse.u_mm, fine.u_mm), (coarse.v_mm, fine.v_mm))
    )
    ends = (planes.w_mm[0], planes.w_mm[-1])
    corners = planes.frame.to_patient([[u, v, w] for u in edges_u for v in edges_v for w in ends])
    first = (corners.min(axis=0) - matter.origin_mm) / matter.spacing_mm
    last = (corners.max(axis=0) - matter.origin_mm) / matter.spacing_mm
    size = np.array(matter.shape[::-1])
    low = np.clip(np.floor(first).astype(np.int64), 0, size)
    return low, np.clip(np.ceil(last).astype(np.int64) + 1, 0, size)


def places_of_points(matter: Matter, planes: Planes, fine: Lattice) -> tuple[Any, ...]:
    """Return what the voxel kernels need to know of where points lie.

    Parameters
    ----------
    matter : Matter
        The volume.
    planes : Planes
        Planes of the field.
    fine : Lattice
        Its fine lattice.

    Returns
    -------
    tuple
        Beam position (mm) of index 0, 0, 0 and the matrix from index units to it; one over the source distance;
        points along x, y and z; first plane and planes per mm; nodes that the spline reads each way.
    """
    frame = planes.frame
    step = float(planes.w_mm[1] - planes.w_mm[0])
    apart = fine.spacing_mm if planes.on_nodes else 1.25 * fine.spacing_mm
    sub = np.maximum(np.ceil(matter.spacing_mm / apart - 1e-9), 1).astype(np.int64)
    if planes.on_nodes:  # along the beam, planes lie so as well
        along = int(np.argmax(np.abs(frame.rotation[2])))
        sub[along] = max(1, round(float(matter.spacing_mm[along]) / step))
    return (
        frame.rotation @ (matter.origin_mm - np.array(frame.isocentre_mm)),
        np.ascontiguousarray(frame.rotation * matter.spacing_mm),
        0.0 if frame.source_distance_mm is None else 1.0 / frame.source_distance_mm,
        sub,
        np.array([planes.w_mm[0], 1.0 / step]),
        1 if planes.on_nodes else 3,
    )


def slabs_apart(runs: Runs, matter: Matter, planes: Planes, fine: Lattice, coarse: Lattice) -> NDArray[np.int64]:
    """Divide runs into slabs of layers so thick that no node is reached from two slabs that are not neighbours.

    Parameters
    ----------
    runs : Runs
        Runs of voxels in rising order.
    matter : Matter
        The volume.
    planes : Planes
        Planes of the field.
    fine, coarse : Lattice
        Its lattices.

    Returns
    -------
    ndarray
        First run of each slab, and the number of runs.
    """
    largest = float(np.max(planes.frame.magnification(planes.w_mm)))
    across = max(1.5 * fine.spacing_mm, coarse.spacing_mm) * largest  # how far a point reaches along u and along v
    reach = float(np.hypot(np.sqrt(2.0) * across, planes.w_mm[1] - planes.w_mm[0]))
    nz, ny, nx = matter.shape
    thickness = 2.0 * reach + float(matter.spacing_mm[2])
    layers = max(int(np.ceil(thickness / matter.spacing_mm[2])), 1)
    starts = np.arange(0, nz + layers, layers, dtype=np.int64) * (ny * nx)
    return np.searchsorted(runs.first, starts).astype(np.int64)

"""Dose on another lattice: what overlaps is shared by volume, so that energy is kept.

A box of the new lattice takes from every voxel the part of it that lies inside. Energy, mass and stops are added this
way and the dose is energy over mass; dose to water, which belongs to no mass, is averaged over volume.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import GridError
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["DoseGrid", "dose_grid_of", "overlap_matrices", "share_by_overlap"]


@dataclass(frozen=True)
class DoseGrid:
    """Where dose is asked for: a lattice in patient axes.

    Attributes
    ----------
    origin_mm : tuple of float
        Centre of the first voxel (x, y, z), mm.
    spacing_mm : tuple of float
        Distances (x, y, z), mm.
    shape : tuple of int
        Voxels along z, y and x.

    Examples
    --------
    >>> DoseGrid((0, 0, 0), (3, 3, 3), (4, 5, 6)).edges_mm("x").tolist()[:3]
    [-1.5, 1.5, 4.5]
    """

    origin_mm: tuple[float, float, float]
    spacing_mm: tuple[float, float, float]
    shape: tuple[int, int, int]

    def __post_init__(self) -> None:
        """Refuse a lattice that makes no sense."""
        fine = len(self.origin_mm) == len(self.spacing_mm) == len(self.shape) == 3
        fine = fine and bool(np.all(np.isfinite([*self.origin_mm, *self.spacing_mm])))
        if not fine or min(self.spacing_mm) <= 0.0 or min(self.shape) < 1:
            raise GridError(
                f"a dose grid with origin {self.origin_mm}, spacing {self.spacing_mm} mm and shape {self.shape}",
                allowed="three finite numbers, three spacings above 0 and at least one voxel along each axis",
                remedy="correct the dose grid",
            )
        check_memory(48.0 * float(np.prod(np.array(self.shape, dtype=np.float64))), what="the dose grid")

    def centres_mm(self, axis: str) -> NDArray[np.float64]:
        """Return the centres of the voxels along an axis.

        Parameters
        ----------
        axis : str
            x, y or z.

        Returns
        -------
        ndarray
            Positions, mm.
        """
        a = "xyz".index(axis)
        return np.asarray(self.origin_mm[a] + self.spacing_mm[a] * np.arange(self.shape[2 - a]), dtype=np.float64)

    def edges_mm(self, axis: str) -> NDArray[np.float64]:
        """Return the edges of the voxels along an axis.

        Parameters
        ----------
        axis : str
            x, y or z.

        Returns
        -------
        ndarray
            Positions, one more than voxels, mm.
        """
        a = "xyz".index(axis)
        edges = self.origin_mm[a] + self.spacing_mm[a] * (np.arange(self.shape[2 - a] + 1) - 0.5)
        return np.asarray(edges, dtype=np.float64)


def dose_grid_of(wanted: DoseGrid | VoxelGrid | float | tuple[float, float, float], grid: VoxelGrid) -> DoseGrid:
    """Return the lattice somebody asks for.

    Parameters
    ----------
    wanted : DoseGrid, VoxelGrid, float or tuple of float
        A lattice, or a spacing that fills the volume from its lower corner.
    grid : VoxelGrid
        The volume the dose is computed in.

    Returns
    -------
    DoseGrid
        The lattice.
    """
    if isinstance(wanted, DoseGrid):
        return wanted
    if isinstance(wanted, int | float | tuple | list):
        spacing = np.broadcast_to(np.asarray(wanted, dtype=np.float64), (3,))
        if not (np.all(np.isfinite(spacing)) and spacing.min() > 0.0):
            raise GridError(f"a dose grid spacing of {wanted} mm", allowed="positive distances", remedy="correct it")
        low = np.array([grid.edges_mm(axis)[0] for axis in "xyz"])
        high = np.array([grid.edges_mm(axis)[-1] for axis in "xyz"])
        counts = np.maximum(np.ceil((high - low) / spacing - 1e-6), 1).astype(int)
        x, y, z = (float(value) for value in low + 0.5 * spacing)
        sx, sy, sz = (float(value) for value in spacing)
        return DoseGrid((x, y, z), (sx, sy, sz), (int(counts[2]), int(counts[1]), int(counts[0])))
    return DoseGrid(wanted.origin_mm, wanted.spacing_mm, wanted.shape)


def overlap_matrices(new: DoseGrid, old: DoseGrid | VoxelGrid) -> list[Any]:
    """Return, for each axis, which part of each old voxel lies in each new one.

    Parameters
    ----------
    new, old : DoseGrid or VoxelGrid
        The two lattices.

    Returns
    -------
    list of scipy.sparse.csr_array
        For z, y and x, shape (new, old); columns add to one where the new lattice covers the old voxel.
    """
    from scipy.sparse import csr_array

    matrices = []
    for axis in "zyx":
        edges, target = old.edges_mm(axis), new.edges_mm(axis)
        low = np.maximum(target[:-1, None], edges[None, :-1])
        high = np.minimum(target[1:, None], edges[None, 1:])
        part = np.clip((high - low) / np.diff(edges)[None, :], 0.0, 1.0)
        part[part < 1e-12] = 0.0
        matrices.append(csr_array(part))
    return matrices


def share_by_overlap(volume: NDArray[Any], matrices: list[Any]) -> NDArray[np.float64]:
    """Add the contents of old voxels into new ones.

    Parameters
    ----------
    volume : ndarray
        Amounts per voxel [z, y, x].
    matrices : list
        From `overlap_matrices`.

    Returns
    -------
    ndarray
        Amounts per new voxel [z, y, x].
    """
    out = np.asarray(volume, dtype=np.float64)
    for axis, matrix in enumerate(matrices):
        moved = np.moveaxis(out, axis, 0)
        shape = moved.shape
        out = np.moveaxis((matrix @ moved.reshape(shape[0], -1)).reshape(-1, *shape[1:]), 0, axis)
    return np.ascontiguousarray(out)

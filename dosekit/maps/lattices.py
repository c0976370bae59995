"""Maps on another lattice: energy, mass and stops are conserved, dose is what follows from them.

Dose to the medium is averaged with the mass in each overlap of old and new voxels, dose to water with the volume;
stops per mm3 are shared by volume; LET is averaged with the dose that it belongs to.
"""

from __future__ import annotations

from collections.abc import Hashable
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.maps.regrid import dose_grid_of, overlap_matrices, share_by_overlap

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["on_lattice"]


def on_lattice(
    dataset: xr.Dataset, grid: VoxelGrid, spacing_mm: float | tuple[float, float, float], *, dose_to: str = "medium"
) -> xr.Dataset:
    """Bring maps of a volume onto a lattice of another spacing.

    Parameters
    ----------
    dataset : Dataset
        Maps on the volume's own lattice: ``dose``, and what goes with it. Names that end in ``stops`` are densities,
        ``let`` and ``let_by_component`` are averaged over dose, everything else is averaged as dose.
    grid : VoxelGrid
        The volume.
    spacing_mm : float or (float, float, float)
        New spacing (x, y, z), mm.
    dose_to : str
        ``"medium"`` (averaged by mass) or ``"water"`` (averaged by volume).

    Returns
    -------
    Dataset
        The same variables on the new lattice.
    """
    import xarray as xr

    target = dose_grid_of(spacing_mm, grid)
    matrices = overlap_matrices(target, grid)
    weight = grid.density_g_cm3 if dose_to == "medium" else np.ones(grid.shape, dtype=np.float32)
    whole = share_by_overlap(weight, matrices)
    axes = ("z", "y", "x")
    ratio = float(np.prod(grid.spacing_mm) / np.prod(target.spacing_mm))
    variables = {}
    dose = dataset["dose"].transpose(..., *axes).values.reshape(-1, *grid.shape) if "dose" in dataset else None
    for name, array in dataset.data_vars.items():
        values = array.transpose(..., *axes).values.reshape(-1, *grid.shape)
        new = np.zeros((len(values), *target.shape), dtype=np.float32)
        for row, volume in enumerate(values):
            if str(name).endswith("stops"):
                new[row] = share_by_overlap(volume, matrices) * ratio
                continue
            share, over = weight, whole
            if dose is not None and name in ("let", "let_by_component"):
                part = dose[row] if name == "let_by_component" else dose.sum(axis=0)
                share = weight * np.maximum(part, 0.0)
                over = share_by_overlap(share, matrices)
            amount = share_by_overlap(volume * share, matrices)
            np.divide(amount, over, out=new[row], where=over > 0.0, casting="same_kind")
        dims = array.transpose(..., *axes).dims
        shape = tuple(array.sizes[dim] for dim in dims[:-3]) + target.shape
        variables[name] = (dims, new.reshape(shape), dict(array.attrs))
    coords: dict[Hashable, Any] = {name: dataset[name] for name in dataset.coords if name not in axes}
    coords |= {axis: (axis, target.centres_mm(axis), dict(dataset[axis].attrs)) for axis in axes}
    return xr.Dataset(variables, coords=coords, attrs=dict(dataset.attrs))

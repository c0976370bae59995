"""How does a finished run look with other stars? No folding again.

Star components are linear in the stops, and the stops are kept with the dose. Another ``star_scale`` multiplies the
charged components; another yield set carries the stored stops again through the same volume (a second or two),
while all other components stay untouched.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import STAR_COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.errors import InputError
from dosekit.maps.stars import carry_stars

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["reweight"]


def reweight(
    dataset: xr.Dataset, grid: VoxelGrid | None = None, *, yields: str | None = None, star_scale: float | None = None
) -> xr.Dataset:
    """Return a finished dose map with other star yields.

    Parameters
    ----------
    dataset : xarray.Dataset
        Result of ``fold`` with its components apart: ``dose(component, z, y, x)`` in Gy, ``stops(z, y, x)`` per mm3.
    grid : VoxelGrid, optional
        The volume of the run; needed when the yield set changes. The dose must lie on its lattice and all beams be
        negative pions (or the dataset hold ``star_stops``, the stops of those that make stars).
    yields : {"evaluated", "cascade"}, optional
        Another yield set.
    star_scale : float, optional
        Another factor on the charged energy.

    Returns
    -------
    xarray.Dataset
        A new dataset; attributes say what was changed.

    Raises
    ------
    InputError
        If components are missing, the scale is not allowed, or the volume does not fit.
    """
    names = [str(name) for name in dataset["component"].values] if "component" in dataset.coords else []
    if not set(STAR_COMPONENTS) <= set(names):
        raise InputError(
            f"a dose map with components {names}",
            allowed="a map that keeps the star components apart",
            remedy="fold with components=True",
        )
    old_yields = str(dataset.attrs.get("yields", "evaluated"))
    old_scale = float(dataset.attrs.get("star_scale", 1.0))
    new_yields = old_yields if yields is None else yields
    new_scale = old_scale if star_scale is None else float(star_scale)
    if not (np.isfinite(new_scale) and new_scale >= 0.0):
        raise InputError(f"star_scale {star_scale!r}", allowed="a finite factor, 0 or more")
    dose = np.array(dataset["dose"].values)
    if new_yields == old_yields and old_scale > 0.0:
        for name in ("star_light", "star_heavy"):
            dose[names.index(name)] *= np.float32(new_scale / old_scale)
    else:
        if grid is None or dataset["dose"].shape[1:] != grid.shape:
            raise InputError(
                "another yield set without the volume of the run",
                allowed="the volume on whose lattice the dose lies",
                remedy="give grid=",
            )
        stops = dataset["star_stops" if "star_stops" in dataset else "stops"].values
        voxel_mm3 = float(np.prod(grid.spacing_mm))
        mass_g = grid.density_g_cm3.astype(np.float64) * voxel_mm3 * 1e-3
        per_energy = np.divide(GRAY_PER_MEV_PER_GRAM, mass_g, out=np.zeros(grid.shape), where=mass_g > 0.0)
        if str(dataset.attrs.get("dose_to", "medium")) == "water":
            rsp = grid.relative_stopping_power()
            per_energy *= np.divide(grid.density_g_cm3, rsp, out=np.zeros(grid.shape), where=rsp > 0.0)
        for name, energy in carry_stars(
            np.maximum(stops, 0.0) * voxel_mm3, grid, yields=new_yields, star_scale=new_scale
        ).items():
            dose[names.index(name)] = energy * per_energy
    changed = dataset.copy()
    changed["dose"] = (dataset["dose"].dims, dose, dict(dataset["dose"].attrs))
    changed.attrs.update(
        yields=new_yields, star_scale=new_scale, reweighted=f"from {old_yields}, star_scale {old_scale:g}"
    )
    return changed

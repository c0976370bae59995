"""Matter that a CT cannot tell: an implant, a cavity, a plug, given by structure."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.materials import Material, material
from dosekit.errors import GridError

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["override_structures"]


def override_structures(
    grid: VoxelGrid, overrides: Mapping[str, str | Material | tuple[str | Material, float]]
) -> VoxelGrid:
    """Return a volume with the matter of some structures replaced (an implant, a cavity).

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    overrides : mapping
        Name of a structure to a material by name, a material, or a pair of either and a density in g/cm3. Voxels
        covered by half or more are replaced; later entries win.

    Returns
    -------
    VoxelGrid
        The changed volume.

    Raises
    ------
    UnknownNameError
        When there is no such structure or material.
    GridError
        When an override is neither of the above.
    """
    density = np.array(grid.density_g_cm3)
    index = np.array(grid.material_index)
    materials = list(grid.materials)
    for name, wanted in overrides.items():
        if isinstance(wanted, tuple) and len(wanted) == 2:
            stuff = material(wanted[0], density_g_cm3=float(wanted[1]))
        elif isinstance(wanted, str | Material):
            stuff = material(wanted)
        else:
            raise GridError(
                f"override {name!r} = {wanted!r}", allowed="a material, or a pair of material and density",
                remedy="correct it",
            )  # fmt: skip
        inside = grid.structure(name) >= 0.5
        if stuff not in materials:
            materials.append(stuff)
        density[inside] = stuff.density_g_cm3
        index[inside] = materials.index(stuff)
    said = {name: str(getattr(wanted, "name", wanted)) for name, wanted in overrides.items()}
    return replace(
        grid,
        density_g_cm3=density,
        material_index=index,
        materials=tuple(materials),
        source={**grid.source, "overrides": said},
    )

"""LET of each component in every voxel of a run, from a second fold with LET-weighted depth curves.

The second fold carries no stars: their products have the LET of their slowing-down spectra in water
(:mod:`dosekit.depths.quality`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.depths.library import DepthLibrary
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.studies.planning import PlannedField

__all__ = ["let_maps"]


def let_maps(
    planned: Sequence[PlannedField], grid: VoxelGrid, total: xr.Dataset, *, yields: str, dose_to: str
) -> dict[str, NDArray[np.float32]]:
    """Return the dose-averaged LET of each component in every voxel.

    Parameters
    ----------
    planned : sequence of PlannedField
        Fields with their final weights.
    grid : VoxelGrid
        The volume.
    total : Dataset
        Dose of all fields together, ``dose(component, z, y, x)``.
    yields, dose_to : str
        As the dose was made.

    Returns
    -------
    dict of str to ndarray
        Component to LET [z, y, x], keV/um; 0 where a component has next to no dose.
    """
    from dosekit.effects.radiation_quality import let_from_folds, let_weighted
    from dosekit.maps.fold import fold

    weighted = np.zeros((len(COMPONENTS), *grid.shape), dtype=np.float32)
    for plan in planned:
        library = _without_stops(let_weighted(plan.library))
        part = fold(plan.field, grid, yields=yields, dose_to=dose_to, libraries={plan.field.name: library})
        weighted += part["dose"].values
    dose: Mapping[str, NDArray[np.float32]] = {name: total["dose"].values[row] for row, name in enumerate(COMPONENTS)}
    found = let_from_folds(dose, {name: weighted[row] for row, name in enumerate(COMPONENTS)}, yields=yields)
    return {name: values.astype(np.float32) for name, values in found.items()}


def _without_stops(library: DepthLibrary) -> DepthLibrary:
    """Return a library whose particles stop nowhere, so that no stars are carried."""
    quantities = {
        name: np.zeros_like(values) if "stops" in name else values for name, values in library.quantities.items()
    }
    return replace(library, quantities=quantities)

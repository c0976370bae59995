"""Where the energy of a run went: what the beams brought, what each component left inside, what escaped.

Deposited energy is dose times mass. For stars the whole ledger is known (:func:`dosekit.maps.stars.star_balance`):
emitted, deposited, bound in nuclei that neutrons broke, escaped from the volume, kept by the capturing nuclei.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.beams.beam import Beam
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.studies.planning import PlannedField

__all__ = ["energy_by_component", "energy_totals"]

_JOULE_PER_MEV = GRAY_PER_MEV_PER_GRAM * 1e-3


def energy_by_component(
    total: xr.Dataset, grid: VoxelGrid, *, yields: str, star_scale: float, dose_to: str
) -> dict[str, dict[str, float]]:
    """Return the energy of each component, J.

    Parameters
    ----------
    total : Dataset
        ``dose(component, z, y, x)`` in Gy and ``stops(z, y, x)`` per mm3 on the lattice of the volume.
    grid : VoxelGrid
        The volume.
    yields, star_scale, dose_to
        As the dose was made.

    Returns
    -------
    dict of str to dict
        For each component ``deposited_j``; for those of stars ``emitted_j``, ``bound_j`` (separation energy of nuclei
        that neutrons broke) and ``escaped_j`` too; ``binding`` has the ``emitted_j`` that capturing nuclei kept.
    """
    from dosekit.maps.stars import star_balance

    voxel_mm3 = float(np.prod(grid.spacing_mm))
    # dose to water is dose to the medium times density over relative stopping power
    weight = grid.density_g_cm3 if dose_to == "medium" else grid.relative_stopping_power()
    grams = weight.astype(np.float64) * voxel_mm3 * 1e-3
    deposited = {
        name: float(np.sum(total["dose"].values[row] * grams, dtype=np.float64)) / GRAY_PER_MEV_PER_GRAM
        for row, name in enumerate(COMPONENTS)
    }
    rows = {name: {"deposited_j": value * _JOULE_PER_MEV} for name, value in deposited.items()}
    stops = total["star_stops" if "star_stops" in total else "stops"].values
    if not (set(STAR_COMPONENTS) & {name for name, value in deposited.items() if value > 0.0}):
        return rows
    ledger = star_balance(
        np.maximum(stops.astype(np.float64), 0.0) * voxel_mm3,
        grid,
        {name: np.array(deposited[name]) for name in STAR_COMPONENTS},
        yields=yields,
        star_scale=star_scale,
    )
    for name, parts in ledger.items():
        rows[name] = {f"{part}_j": value * _JOULE_PER_MEV for part, value in parts.items()}
    return rows


def energy_totals(rows: dict[str, dict[str, float]], planned: Sequence[PlannedField]) -> dict[str, float]:
    """Return the same as one list of numbers, with the kinetic energy that the beams brought.

    Parameters
    ----------
    rows : dict
        From `energy_by_component`.
    planned : sequence of PlannedField
        Fields with their final weights.

    Returns
    -------
    dict of str to float
        Energies by name, J.
    """
    brought = sum(plan.field.particles * _kinetic_energy_mev(plan.field.beam) for plan in planned)
    totals = {"beams_kinetic_j": brought * _JOULE_PER_MEV}
    totals |= {f"{name}_inside_j": parts["deposited_j"] for name, parts in rows.items() if "deposited_j" in parts}
    totals["total_inside_j"] = sum(parts.get("deposited_j", 0.0) for parts in rows.values())
    if "binding" in rows:
        stars = [rows[name] for name in STAR_COMPONENTS]
        for part in ("emitted", "deposited", "bound", "escaped"):
            totals[f"stars_{part}_j"] = sum(row[f"{part}_j"] for row in stars)
        totals["stars_binding_j"] = rows["binding"]["emitted_j"]
    return totals


def _kinetic_energy_mev(beam: Beam) -> float:
    """Return the kinetic energy per beam particle with its contaminants of the same momentum."""
    from dosekit.basis.particles import kinetic_energy_mev, particle

    others = beam.contaminants or {}
    return float(beam.kinetic_energy_mev) + sum(
        share * float(kinetic_energy_mev(particle(name), beam.momentum_mev_c)) for name, share in dict(others).items()
    )

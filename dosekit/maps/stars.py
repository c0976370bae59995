"""Where do capture stars leave their energy in a body?

Each stopped pion becomes a star of the element that captures it there; shares and yields follow from the local
composition (`dosekit.capture`). Its products travel along a fixed set of directions (`dosekit.maps.cones`):

* p, d, t in distance scaled by the local relative stopping power, the smooth far part of their kernel on blocks of
  about 4 mm and the rest on the voxels (`dosekit.maps.stars_modes`);
* helium ions and recoils stay in the voxel (they travel 0.1 mm in tissue);
* neutrons, scaled by density and composition, and photons, scaled by electron density, on blocks of about 8 mm
  (`dosekit.maps.stars_coarse`).

Energy that reaches the edge of the volume has escaped; neutron energy that goes into separation of nucleons is
bound. `star_balance` reports both. All steps are linear in the stops; `carry_stars_transposed` is the exact
transpose of `carry_stars`. `reweight` changes the yield set or the scale of a finished run from its stops, without
folding again.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import STAR_COMPONENTS
from dosekit.beams.stopping import relative_stopping_power
from dosekit.capture.exponentials import RATES_PER_MM, ConeKernel, material_kernel, neutron_scale
from dosekit.capture.stars import star_energy_mev
from dosekit.errors import GridError, InputError, UnknownNameError
from dosekit.maps.stars_modes import Travel

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["DIRECTIONS", "carry_stars", "carry_stars_transposed", "scale_per_density", "star_balance", "star_scales"]

DIRECTIONS: dict[str, int] = {"star_light": 110, "star_neutron": 194, "star_photon": 110}
"""Directions for each component that travels; see docs/explanation/star_transport.md for the study."""

BLOCK_MM = 8.0
"""Size of the blocks that carry neutrons and photons, mm."""

_CHARGED = ("star_light", "star_heavy")


def carry_stars(
    stops_per_voxel: NDArray[Any],
    grid: VoxelGrid,
    *,
    yields: str = "evaluated",
    star_scale: float = 1.0,
    components: Iterable[str] | None = None,
    directions: Mapping[str, int] | None = None,
    block_mm: float = BLOCK_MM,
) -> dict[str, NDArray[np.float64]]:
    """Carry the energy of capture stars through a volume.

    Parameters
    ----------
    stops_per_voxel : ndarray [z, y, x]
        Stopped negative pions in each voxel.
    grid : VoxelGrid
        The volume, on the same lattice.
    yields : {"evaluated", "cascade"}
        Yield set.
    star_scale : float
        Factor on the charged energy.
    components : iterable of str, optional
        Star components wanted; all by default.
    directions : mapping of str to int, optional
        Number of directions by component, instead of `DIRECTIONS`.
    block_mm : float
        Size of the blocks for neutrons and photons, mm; 0 carries everything on the voxels.

    Returns
    -------
    dict of str to ndarray [z, y, x]
        Energy left in each voxel by component, MeV.

    Raises
    ------
    GridError
        If the stops do not fit the volume.
    InputError
        If stops are negative or not finite.
    """
    stops = _checked(stops_per_voxel, grid)
    result: dict[str, NDArray[np.float64]] = {}
    for component in _wanted(components):
        kernels = [material_kernel(component, yields, medium) for medium in grid.materials]
        factor = star_scale if component in _CHARGED else 1.0
        local = np.array([kernel.local_mev for kernel in kernels]) * factor
        if RATES_PER_MM[component] and stops.any():
            count = (directions or DIRECTIONS).get(component, DIRECTIONS[component])
            travel = Travel(component, grid, scale_per_density(grid, component), count, block_mm)
            energy = travel.carry(stops, grid.material_index, _table(kernels) * factor)
        else:
            energy = np.zeros(grid.shape)
        for k, here in enumerate(stops if local.any() else ()):
            if here.any():
                energy[k] += here * local[grid.material_index[k]]
        result[component] = energy
    return result


def carry_stars_transposed(
    wanted: Mapping[str, NDArray[Any]],
    grid: VoxelGrid,
    *,
    yields: str = "evaluated",
    star_scale: float = 1.0,
    directions: Mapping[str, int] | None = None,
    block_mm: float = BLOCK_MM,
) -> NDArray[np.float64]:
    """Return what a stop in each voxel counts, when energy in each voxel counts as wanted.

    Parameters
    ----------
    wanted : mapping of str to ndarray [z, y, x]
        For each star component, what 1 MeV in each voxel counts.
    grid : VoxelGrid
        The volume.
    yields, star_scale, directions, block_mm
        As in `carry_stars`.

    Returns
    -------
    ndarray [z, y, x]
        The exact transpose of `carry_stars`, summed over components.
    """
    total = np.zeros(grid.shape)
    for component, given in wanted.items():
        if component not in STAR_COMPONENTS:
            raise UnknownNameError("star component", component, STAR_COMPONENTS)
        value = np.asarray(given, dtype=np.float64)
        if value.shape != grid.shape:
            raise GridError(f"values of shape {value.shape}", allowed=f"the volume's shape {grid.shape}")
        if not value.any():
            continue
        kernels = [material_kernel(component, yields, medium) for medium in grid.materials]
        factor = star_scale if component in _CHARGED else 1.0
        local = np.array([kernel.local_mev for kernel in kernels]) * factor
        for k, here in enumerate(value if local.any() else ()):
            total[k] += here * local[grid.material_index[k]]
        if not RATES_PER_MM[component]:
            continue
        table = _table(kernels) * factor
        count = (directions or DIRECTIONS).get(component, DIRECTIONS[component])
        travel = Travel(component, grid, scale_per_density(grid, component), count, block_mm)
        travel.gather(value, grid.material_index, table, total)
    return total


def star_scales(grid: VoxelGrid, component: str) -> NDArray[np.float32]:
    """Return scaled distance per mm of path for one component.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    component : str
        Star component.

    Returns
    -------
    ndarray [z, y, x]
        Relative stopping power (of a 20 MeV proton) for light products, density times `neutron_scale` for neutrons,
        relative electron density for photons.
    """
    return scale_per_density(grid, component).astype(np.float32)[grid.material_index] * grid.density_g_cm3


def star_balance(
    stops_per_voxel: NDArray[Any],
    grid: VoxelGrid,
    deposited_mev: Mapping[str, NDArray[Any]],
    *,
    yields: str = "evaluated",
    star_scale: float = 1.0,
) -> dict[str, dict[str, float]]:
    """Return where the rest energy of the stopped pions went, by component.

    Parameters
    ----------
    stops_per_voxel : ndarray [z, y, x]
        Stopped negative pions in each voxel.
    grid : VoxelGrid
        The volume.
    deposited_mev : mapping of str to ndarray
        Result of `carry_stars` with the same settings.
    yields, star_scale
        As in `carry_stars`.

    Returns
    -------
    dict of str to dict
        For each component: ``emitted``, ``deposited``, ``bound`` (neutron energy lost to separation of nucleons if
        all were stopped in matter) and
        ``escaped``, MeV. One more entry, ``binding``, holds what the capturing nuclei keep. All emitted and binding
        energy sums to 139.57 MeV per stop.
    """
    stops = _checked(stops_per_voxel, grid)
    per_material = np.array([float(stops[grid.material_index == n].sum()) for n in range(len(grid.materials))])
    energies = [star_energy_mev(medium, yields, star_scale=star_scale) for medium in grid.materials]
    report: dict[str, dict[str, float]] = {}
    for component, deposited in deposited_mev.items():
        kernels = [material_kernel(component, yields, medium) for medium in grid.materials]
        factor = star_scale if component in _CHARGED else 1.0
        emitted = float(sum(n * e[component] for n, e in zip(per_material, energies, strict=True)))
        reachable = float(sum(n * k.energy_mev * factor for n, k in zip(per_material, kernels, strict=True)))
        inside = float(np.sum(deposited))
        report[component] = {
            "emitted": emitted,
            "deposited": inside,
            "bound": emitted - reachable,
            "escaped": reachable - inside,
        }
    report["binding"] = {"emitted": float(sum(n * e["binding"] for n, e in zip(per_material, energies, strict=True)))}
    return report


# ---------------------------------------------------------------- parts


def _wanted(components: Iterable[str] | None) -> tuple[str, ...]:
    """Check names of components."""
    chosen = STAR_COMPONENTS if components is None else tuple(components)
    for name in chosen:
        if name not in STAR_COMPONENTS:
            raise UnknownNameError("star component", name, STAR_COMPONENTS)
    return chosen


def _checked(stops_per_voxel: NDArray[Any], grid: VoxelGrid) -> NDArray[np.float64]:
    """Check stops against the volume."""
    stops = np.asarray(stops_per_voxel, dtype=np.float64)
    if stops.shape != grid.shape:
        raise GridError(f"stops of shape {stops.shape}", allowed=f"the volume's shape {grid.shape}")
    lowest = float(stops.min())
    if not np.isfinite(float(stops.sum())) or lowest < 0.0:
        raise InputError("stops that are negative or not finite", allowed="0 or more in every voxel")
    return stops


def scale_per_density(grid: VoxelGrid, component: str) -> NDArray[np.float64]:
    """Return scaled distance per mm of path for each material at 1 g/cm3.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    component : str
        Star component.

    Returns
    -------
    ndarray, shape (n,)
        See `star_scales`.
    """
    if component in _CHARGED:
        return np.array(
            [
                relative_stopping_power(medium, "proton", kinetic_energy_mev=20.0) / medium.density_g_cm3
                for medium in grid.materials
            ]
        )
    if component == "star_neutron":
        return np.array([neutron_scale(medium) for medium in grid.materials])
    return np.array([medium.relative_electron_density / medium.density_g_cm3 for medium in grid.materials])


def _table(kernels: list[ConeKernel]) -> NDArray[np.float64]:
    """Return mode energies by material."""
    return np.array([kernel.energies_mev for kernel in kernels])

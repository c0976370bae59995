"""Dose of fields in a volume, every part of it apart.

Each field is followed on its own lattice (:mod:`dosekit.maps.pencils`), which gives the dose of the beam particles
and of what they make in flight, and where they stop. The stops of negative pions are then carried through the anatomy
as stars (:mod:`dosekit.maps.stars`). Other particles that stop make no stars.

Dose to the medium is the energy in a voxel over its mass. Dose to water is what a small piece of water there would
receive: the medium's dose times the ratio of mass stopping powers, water to medium, at one energy.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.caution import CAUTION
from dosekit.errors import InputError, UnknownNameError
from dosekit.grids.memory import check_memory
from dosekit.maps.fields import Field
from dosekit.maps.pencils import FieldPencils, field_pencils
from dosekit.maps.rays import Matter, matter_of
from dosekit.maps.regrid import DoseGrid, dose_grid_of, overlap_matrices, share_by_overlap
from dosekit.maps.tables import TARGETS, StepTables, step_tables

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.beams.beam import Beam
    from dosekit.depths.library import DepthLibrary
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["DOSE_TO", "dose_per_energy", "fields_of", "fold", "library_of", "pencils_of"]

DOSE_TO: tuple[str, ...] = ("medium", "water")
"""What dose is absorbed in."""

STAR_MAKER = "pi-"
GRAY_PER_MEV_PER_MM3 = GRAY_PER_MEV_PER_GRAM * 1e3  # in a medium of 1 g/cm3


def fold(
    fields: Field | Iterable[Field],
    grid: VoxelGrid,
    *,
    yields: str = "evaluated",
    star_scale: float = 1.0,
    dose_grid: DoseGrid | VoxelGrid | float | tuple[float, float, float] | None = None,
    dose_to: str = "medium",
    components: bool = True,
    libraries: Mapping[str, DepthLibrary] | None = None,
) -> xr.Dataset:
    """Return the dose of fields in a volume.

    Parameters
    ----------
    fields : Field or iterable of Field
        The fields; their doses are added.
    grid : VoxelGrid
        The volume.
    yields : str
        Star yields, ``"evaluated"`` or ``"cascade"``.
    star_scale : float
        Factor on the charged energy of stars.
    dose_grid : DoseGrid, VoxelGrid, float or tuple of float, optional
        Another lattice, or a spacing (mm), for the result; the volume's own by default.
    dose_to : str
        ``"medium"`` or ``"water"``.
    components : bool
        Keep the components apart; otherwise the only component is ``"total"``.
    libraries : mapping of str to DepthLibrary, optional
        Depth libraries by name of the field, when they are known already.

    Returns
    -------
    xarray.Dataset
        ``dose(component, z, y, x)``, Gy, and ``stops(z, y, x)``, 1/mm3.

    Raises
    ------
    InputError
        When an argument makes no sense.
    SizeError
        When the work would take too much memory.

    Warns
    -----
    GeometryWarning
        When a field misses the volume or starts inside it.
    """
    several = fields_of(fields)
    for field in several:
        if field.weights.min(initial=0.0) < 0.0:
            raise InputError(
                f"field {field.name!r}: a weight of {field.weights.min():.6g}",
                allowed="weights of 0 or more",
                remedy="correct the field's weights; the operator takes weights of any sign",
            )
    if dose_to not in DOSE_TO:
        raise UnknownNameError("dose_to", dose_to, DOSE_TO)
    voxels = int(np.prod(grid.shape))
    check_memory(
        voxels * 4.0 * (2.0 + len(COMPONENTS) + 2.0 + 2.0 + 2.0 * len(STAR_COMPONENTS)),
        what=f"dose in {' x '.join(str(n) for n in grid.shape)} voxels",
    )
    target = None if dose_grid is None else dose_grid_of(dose_grid, grid)
    # rows: the components, stops of star makers and, where there are any, stops of others
    others = any(field.beam.particle != STAR_MAKER for field in several)
    sums = np.zeros((len(COMPONENTS) + 1 + others, voxels), dtype=np.float32)
    for field in several:
        pencils = pencils_of(field, grid, yields=yields, library=(libraries or {}).get(field.name))
        if pencils.misses or not np.any(field.weights):
            continue
        fine, coarse = pencils.maps(field.weights)
        rows = np.array([_row_of(name, field) for name in TARGETS])
        factor = _factors(pencils.matter, dose_to=dose_to)
        pencils.deposit(fine, coarse, pencils.reach(), factor=factor, rows=rows, out=sums)
    volumes = sums.reshape(-1, *grid.shape)
    dose, star_stops = volumes[: len(COMPONENTS)], volumes[len(COMPONENTS)]
    if star_stops.any():
        from dosekit.maps.stars import carry_stars

        voxel_mm3 = float(np.prod(grid.spacing_mm))
        energies = carry_stars(star_stops * voxel_mm3, grid, yields=yields, star_scale=star_scale)
        per_energy = dose_per_energy(grid, matter_of(grid, several[0].beam.particle), dose_to=dose_to)
        for name, energy in energies.items():
            np.multiply(energy, per_energy, out=dose[COMPONENTS.index(name)], casting="same_kind")
    stops = star_stops + volumes[-1] if others else star_stops
    lattice: DoseGrid | VoxelGrid = grid
    if target is not None:
        lattice = target
        dose, stops = _onto(target, grid, dose, stops, dose_to=dose_to)
    return _dataset(
        lattice,
        dose,
        stops,
        several,
        components=components,
        attributes={"yields": yields, "star_scale": star_scale, "dose_to": dose_to},
    )


def library_of(field: Field, yields: str) -> DepthLibrary:
    """Return the depth library of a field's range steps.

    Parameters
    ----------
    field : Field
        The field.
    yields : str
        Star yields.

    Returns
    -------
    DepthLibrary
        Depth curves in water, kept for the beams asked for last.
    """
    return _library(field.beam, _steps(field), yields)


def pencils_of(
    field: Field, grid: VoxelGrid, *, yields: str = "evaluated", library: DepthLibrary | None = None
) -> FieldPencils:
    """Make a field ready for folding in a volume.

    Parameters
    ----------
    field : Field
        The field.
    grid : VoxelGrid
        The volume.
    yields : str
        Star yields.
    library : DepthLibrary, optional
        The depth library, when it is known already.

    Returns
    -------
    FieldPencils
        The field on its lattices.
    """
    return field_pencils(
        field,
        matter_of(grid, field.beam.particle),
        library_of(field, yields) if library is None else library,
        patient_position=grid.patient_position,
        tables=_tables(field.beam, _steps(field), yields) if library is None else None,
    )


@lru_cache(maxsize=16)
def _library(beam: Beam, shift_mm: tuple[float, ...], yields: str) -> DepthLibrary:
    from dosekit.beams.stopping import relative_stopping_power
    from dosekit.depths.library import depth_library, mean_projected_range_mm

    reach = mean_projected_range_mm(beam.particle, beam.momentum_mev_c)
    if beam.fixed_shifter_mm and beam.shifter_material is not None:
        reach -= beam.fixed_shifter_mm * float(relative_stopping_power(beam.shifter_material, beam.particle))
    return depth_library(beam, reach - np.array(shift_mm), mode="shifter", yields=yields)


@lru_cache(maxsize=16)
def _tables(beam: Beam, shift_mm: tuple[float, ...], yields: str) -> StepTables:
    return step_tables(_library(beam, shift_mm, yields), beam)


def _steps(field: Field) -> tuple[float, ...]:
    """Return the range steps of a field, to know its library by."""
    return tuple(float(value) for value in field.shift_mm)


def fields_of(fields: Field | Iterable[Field]) -> Sequence[Field]:
    """Return a list of fields with different names."""
    several = [fields] if isinstance(fields, Field) else list(fields)
    if not several or not all(isinstance(field, Field) for field in several):
        raise InputError("no fields to fold", allowed="one Field or several", remedy="give at least one field")
    return several


def _row_of(name: str, field: Field) -> int:
    """Return where a target of a field is added up."""
    if name == "stops":
        return len(COMPONENTS) + (0 if field.beam.particle == STAR_MAKER else 1)
    return COMPONENTS.index(name)


def _factors(matter: Matter, *, dose_to: str) -> NDArray[np.float64]:
    """Return what turns a map into dose (Gy) or stops per mm3, for each row of the sums and material."""
    per_density = matter.rsp_per_density if dose_to == "medium" else np.ones_like(matter.rsp_per_density)
    factor = np.tile(per_density * GRAY_PER_MEV_PER_MM3, (len(COMPONENTS) + 2, 1))
    factor[len(COMPONENTS) :] = -1.0  # stops per mm: times the voxel's own stopping power
    return factor


def dose_per_energy(grid: VoxelGrid, matter: Matter, *, dose_to: str) -> NDArray[np.float32]:
    """Return the dose that 1 MeV gives in each voxel, Gy."""
    mass_g = grid.density_g_cm3 * np.float32(np.prod(grid.spacing_mm) * 1e-3)
    out = np.zeros(grid.shape, dtype=np.float32)
    np.divide(np.float32(GRAY_PER_MEV_PER_GRAM), mass_g, out=out, where=mass_g > 0.0)
    if dose_to == "water":
        out /= matter.rsp_per_density.astype(np.float32)[grid.material_index]
    return out


def _onto(
    target: DoseGrid, grid: VoxelGrid, dose: NDArray[Any], stops: NDArray[Any], *, dose_to: str
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Return dose and stops on another lattice."""
    matrices = overlap_matrices(target, grid)
    weight = grid.density_g_cm3 if dose_to == "medium" else np.ones(grid.shape, dtype=np.float32)
    total = share_by_overlap(weight, matrices)
    new = np.zeros((len(dose), *target.shape), dtype=np.float32)
    for n, volume in enumerate(dose):
        amount = share_by_overlap(volume * weight, matrices)
        np.divide(amount, total, out=amount, where=total > 0.0)
        new[n] = np.where(total > 0.0, amount, 0.0)
    ratio = float(np.prod(grid.spacing_mm) / np.prod(target.spacing_mm))
    return new, (share_by_overlap(stops, matrices) * ratio).astype(np.float32)


def _dataset(
    lattice: DoseGrid | VoxelGrid,
    dose: NDArray[np.float32],
    stops: NDArray[np.float32],
    fields: Sequence[Field],
    *,
    components: bool,
    attributes: dict[str, Any],
) -> xr.Dataset:
    """Label the result."""
    import xarray as xr

    names: tuple[str, ...] = COMPONENTS
    if not components:
        dose, names = dose.sum(axis=0, keepdims=True, dtype=np.float32), ("total",)
    axes = ("z", "y", "x")
    return xr.Dataset(
        {
            "dose": (
                ("component", *axes),
                dose,
                {"units": "Gy", "long_name": f"absorbed dose to {attributes['dose_to']}"},
            ),
            "stops": (axes, stops, {"units": "1/mm3", "long_name": "stopped beam particles"}),
        },
        coords={
            "component": ("component", list(names)),
            **{
                axis: (axis, lattice.centres_mm(axis), {"units": "mm", "long_name": f"patient axis {axis} (LPS)"})
                for axis in axes
            },
        },
        attrs={
            "title": "dose by component",
            "caution": CAUTION,
            "fields": ", ".join(field.name for field in fields),
            "particles": float(sum(field.particles for field in fields)),
            "sources": "Fermi-Eyges (Eyges, Phys. Rev. 74 (1948) 1534); differential Moliere scattering power "
            "(Gottschalk, Med. Phys. 37 (2010) 352); collapsed cones (Ahnesjo, Med. Phys. 16 (1989) 577)",
            **attributes,
        },
    )

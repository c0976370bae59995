"""Phantoms by name: invented bodies and stacks that ship with the package, or a file of one's own.

A phantom is drawn solid by solid. Where a solid covers a share *c* of a voxel, the density becomes
``(1 - c) * old + c * new`` and the composition that of the solid once *c* reaches one half; a structure takes the
largest coverage among its solids and is cut only by later ones that say so. Slabs and boxes on voxel edges are
therefore exact.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import GridError, UnknownNameError
from dosekit.grids.coverages import BoxedCoverage
from dosekit.grids.phantom_file import PhantomFile, load_phantom_file
from dosekit.grids.shapes import coverage_of
from dosekit.grids.voxels import VoxelGrid, check_volume

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dosekit.basis.materials import Material

__all__ = ["build_phantom", "phantom", "phantom_folder", "phantom_names"]


def phantom_folder() -> Path:
    """Return the folder of the phantoms that ship with the package.

    Returns
    -------
    Path
        Inside the installed package, or beside it in a checkout.

    Raises
    ------
    GridError
        When neither is there.
    """
    package = Path(str(files("dosekit")))
    for folder in (package / "phantoms", package.parent / "phantoms"):
        if any(folder.glob("*.toml")):
            return folder
    raise GridError("the folder of phantoms is missing", allowed="a complete installation", remedy="install again")


def phantom_names() -> tuple[str, ...]:
    """Return the names of the phantoms that ship with the package.

    Returns
    -------
    tuple of str
        Names, sorted.

    Examples
    --------
    >>> "water_tank" in phantom_names()
    True
    """
    return tuple(sorted(file.stem for file in phantom_folder().glob("*.toml")))


def phantom(name_or_path: str | Path, spacing_mm: float | Sequence[float] | None = None) -> VoxelGrid:
    """Return a phantom as a volume of voxels.

    Parameters
    ----------
    name_or_path : str or Path
        A name of `phantom_names`, or the path of a TOML file.
    spacing_mm : float or sequence of float, optional
        Voxel spacing (x, y, z) or one for all, mm; the file's own by default.

    Returns
    -------
    VoxelGrid
        The volume, with its structures.

    Raises
    ------
    UnknownNameError
        When there is no phantom of that name; the nearest is named.
    GridError
        When the file is at fault.
    SizeError
        When the volume would not fit into memory.

    Examples
    --------
    >>> grid = phantom("water_tank", spacing_mm=20)
    >>> grid.materials[int(grid.material_index[5, 5, 5])].name
    'water'
    """
    given = Path(name_or_path)
    if given.suffix.lower() == ".toml" or given.is_file():
        return build_phantom(load_phantom_file(given), spacing_mm=spacing_mm)
    names = phantom_names()
    if str(name_or_path) not in names:
        raise UnknownNameError("phantom", name_or_path, names)
    return build_phantom(load_phantom_file(phantom_folder() / f"{name_or_path}.toml"), spacing_mm=spacing_mm)


def build_phantom(said: PhantomFile, *, spacing_mm: float | Sequence[float] | None = None) -> VoxelGrid:
    """Draw a phantom.

    Parameters
    ----------
    said : PhantomFile
        The description.
    spacing_mm : float or sequence of float, optional
        Voxel spacing, mm; the description's own by default.

    Returns
    -------
    VoxelGrid
        The volume. Where the spacing does not divide the size, the last voxel reaches beyond it.

    Raises
    ------
    GridError
        When a structure covers no voxel, or the spacing is not usable.
    SizeError
        When the volume would not fit into memory.
    """
    spacing = _spacing(said, spacing_mm)
    wanted = [np.ceil(size / step - 1e-6) for size, step in zip(said.size_mm, spacing, strict=True)]
    check_volume([int(n) for n in wanted], what=f"phantom {said.name!r}", bytes_per_voxel=32.0)
    nx, ny, nz = (max(1, int(n)) for n in wanted)
    shape = (nz, ny, nx)
    x, y, z = (low + step / 2 for low, step in zip(said.lower_mm, spacing, strict=True))
    origin = (x, y, z)
    materials: list[Material] = []
    density = np.full(shape, said.background.density_g_cm3, dtype=np.float32)
    index = np.full(shape, _index_of(said.background, materials), dtype=np.uint16)
    structures: dict[str, Any] = {}
    roles: dict[str, str] = {}
    for solid in said.solids:
        drawn = coverage_of(solid.shape, origin_mm=origin, spacing_mm=spacing, shape=shape)
        if solid.material is not None and drawn.values.size:
            part = density[drawn.slices]
            new = np.float32(solid.material.density_g_cm3)
            part[...] = np.where(drawn.values >= 1.0, new, part + drawn.values * (new - part))
            index[drawn.slices][drawn.values >= 0.5] = _index_of(solid.material, materials)
        for name in solid.cut_from:
            structures[name] = _without(structures[name], drawn, shape)
        if solid.structure is not None:
            structures[solid.structure] = _joined(structures.get(solid.structure), drawn, shape)
            if solid.role is not None:
                roles[solid.structure] = solid.role
    for name, covered in structures.items():
        if not covered.values.size:
            raise GridError(
                f"structure {name!r} of phantom {said.name!r} lies outside the volume",
                allowed="structures that cover at least part of a voxel",
                remedy="move the solid, or enlarge the volume",
            )
    return VoxelGrid(
        origin_mm=origin,
        spacing_mm=spacing,
        density_g_cm3=density,
        material_index=index,
        materials=tuple(materials),
        structures=structures,
        roles=roles,
        name=said.name,
        patient_position=said.patient_position,
        source={"kind": "phantom", "description": said.description, **said.source},
    )


def _spacing(said: PhantomFile, spacing_mm: float | Sequence[float] | None) -> tuple[float, float, float]:
    """Return the spacing to draw with."""
    if spacing_mm is None:
        return said.spacing_mm
    wanted = [spacing_mm] * 3 if isinstance(spacing_mm, int | float) else list(spacing_mm)
    if len(wanted) != 3 or not all(np.isfinite(v) and 0.01 <= v <= 1000.0 for v in wanted):
        raise GridError(
            f"voxel spacing {spacing_mm!r} mm", allowed="one number or three, 0.01 to 1000 mm", remedy="correct it"
        )
    return float(wanted[0]), float(wanted[1]), float(wanted[2])


def _index_of(matter: Material, materials: list[Material]) -> int:
    """Return the index of a composition, adding it when new; density is kept per voxel, not here."""
    for number, known in enumerate(materials):
        if known.mass_fractions == matter.mass_fractions and known.mean_excitation_ev == matter.mean_excitation_ev:
            return number
    materials.append(matter)
    return len(materials) - 1


def _joined(before: BoxedCoverage | None, drawn: BoxedCoverage, shape: tuple[int, int, int]) -> BoxedCoverage:
    """Return the union of two coverages: the larger of the two in each voxel."""
    if before is None or not before.values.size:
        return drawn
    if not drawn.values.size:
        return before
    return BoxedCoverage.from_dense(np.maximum(before.dense(shape), drawn.dense(shape)))


def _without(before: BoxedCoverage, drawn: BoxedCoverage, shape: tuple[int, int, int]) -> BoxedCoverage:
    """Return a coverage with a solid taken out of it."""
    if not before.values.size or not drawn.values.size:
        return before
    return BoxedCoverage.from_dense(np.maximum(before.dense(shape) - drawn.dense(shape), 0.0))

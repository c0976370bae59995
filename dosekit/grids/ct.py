"""A CT series as a volume of voxels.

Files are sorted out and checked (`dicom_files`, `ct_geometry`), their CT numbers read (`ct_pixels`), turned to
increasing patient axes, and made into matter (`calibration`). A structure set adds its structures (`structure_sets`).

Nothing is repaired silently: a tilted gantry, an orientation oblique to the patient axes, missing slices and uneven
spacing are refused unless resampling is asked for; then the volume is interpolated linearly on a lattice along the
patient axes, with the shear that the positions say, and a warning says so.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any
from warnings import warn

import numpy as np

from dosekit.errors import GeometryError, GeometryWarning, SeriesError
from dosekit.grids.calibration import (
    AIR_HU,
    Calibration,
    stoichiometric_calibration,
)
from dosekit.grids.ct_geometry import JITTER_SHARE, SKEW_LIMIT_MM, Stack, choose_series, sort_stack
from dosekit.grids.ct_pixels import read_pixels
from dosekit.grids.dicom_files import DicomHeaders, list_files, quiet_decoder, read_headers, text_of
from dosekit.grids.memory import check_memory
from dosekit.grids.overrides import override_structures
from dosekit.grids.voxels import VoxelGrid

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.basis.materials import Material

__all__ = ["CtVolume", "read_ct", "read_hu"]

_TILT_SEEN_DEG = 0.1
_MOST_GROWTH = 20

Source = str | Path | Iterable[str | Path]
Progress = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class CtVolume:
    """CT numbers on a lattice along the patient axes.

    Parameters
    ----------
    hu : ndarray
        HU [z, y, x] as the files say, nothing clamped.
    origin_mm, spacing_mm : tuple of float
        Centre of voxel [0, 0, 0] and spacing (x, y, z), mm, LPS.
    padding : ndarray of bool, optional
        Padding that is not told by its HU.
    frame_of_reference_uid : str, optional
        Frame of reference.
    patient_position : str
        DICOM patient position.
    headers : DicomHeaders
        What DICOM outputs refer to.
    source : dict
        How it was read; nothing that names a patient.
    """

    hu: NDArray[Any] = field(repr=False)
    origin_mm: tuple[float, float, float]
    spacing_mm: tuple[float, float, float]
    padding: NDArray[np.bool_] | None = field(default=None, repr=False)
    frame_of_reference_uid: str | None = field(default=None, repr=False)
    patient_position: str = "HFS"
    headers: DicomHeaders | None = field(default=None, repr=False)
    source: dict[str, Any] = field(default_factory=dict, repr=False)


def read_ct(
    source: Source,
    structures: str | Path | None = None,
    *,
    series: str | int | None = None,
    calibration: Calibration | None = None,
    overrides: Mapping[str, str | Material | tuple[str | Material, float]] | None = None,
    resample: bool | str = False,
    remove_couch: bool = False,
    only: Sequence[str] | None = None,
    name: str = "CT",
    progress: Progress | None = None,
) -> VoxelGrid:
    """Read a CT series, and its structures, as a volume of voxels.

    Parameters
    ----------
    source : str, Path or iterable of them
        A folder (with its subfolders) or a list of files.
    structures : str or Path, optional
        A structure set (RT Structure Set file).
    series : str or int, optional
        Which series, when there are several: its number or its UID.
    calibration : Calibration, optional
        From HU to matter; the stoichiometric one with default coefficients if not given.
    overrides : mapping, optional
        Matter of structures, see `override_structures`.
    resample : bool or {"tilt", "spacing"}
        What may be resampled: nothing, a tilted or oblique volume, missing slices and uneven spacing, or (True) both.
    remove_couch : bool
        Make everything outside the body air.
    only : sequence of str, optional
        Read these structures only.
    name : str
        Name of the volume; never a patient's.
    progress : callable, optional
        Told how many files of how many are done.

    Returns
    -------
    VoxelGrid
        The volume. Its `body` is found from density when the structure set has no outline.

    Raises
    ------
    DicomError
        When the files cannot be used; the message says which and why.
    SizeError
        When the volume would not fit into memory.
    UnknownNameError
        When a structure is not there.

    Warns
    -----
    CalibrationWarning
        When HU lie beyond the calibration.
    GeometryWarning
        When the volume was resampled, or contours leave it.
    """
    from dosekit.grids.structure_sets import read_structures

    volume = read_hu(source, series=series, resample=resample, progress=progress)
    rules = stoichiometric_calibration() if calibration is None else calibration
    check_memory(volume.hu.size * 16.0, what=f"a CT of {volume.hu.size:.3g} voxels")
    density, index, materials, clamped = rules.matter(volume.hu, padding=volume.padding)
    found = None
    if structures is not None:
        found = read_structures(structures, volume, only=only)
    boxes: dict[str, Any] = {} if found is None else dict(found.boxes)
    roles: dict[str, str] = {} if found is None else dict(found.roles)
    headers = volume.headers
    if found is not None and headers is not None:
        headers = DicomHeaders(headers.images, found.header)
    grid = VoxelGrid(
        origin_mm=volume.origin_mm,
        spacing_mm=volume.spacing_mm,
        density_g_cm3=density,
        material_index=index,
        materials=materials,
        structures=boxes,
        roles=roles,
        name=name,
        frame_of_reference_uid=volume.frame_of_reference_uid,
        patient_position=volume.patient_position,
        source={
            **volume.source,
            "calibration": {"name": rules.name, **rules.source},
            "voxels beyond the calibration": clamped,
            "couch removed": remove_couch,
            **({} if found is None else {"structures": found.notes}),
        },
        dicom_reference=headers,
        hu=_whole(volume.hu),
    )
    if remove_couch:
        grid = _without_couch(grid, rules)
    return override_structures(grid, overrides) if overrides else grid


def _without_couch(grid: VoxelGrid, rules: Calibration) -> VoxelGrid:
    """Return the volume with air outside the body; structures are kept as they are."""
    outside = ~grid.body()
    density, index = np.array(grid.density_g_cm3), np.array(grid.material_index)
    air = rules.tissue(float(AIR_HU))
    materials = grid.materials if air in grid.materials else (*grid.materials, air)
    density[outside] = air.density_g_cm3
    index[outside] = materials.index(air)
    return grid.replace(density_g_cm3=density, material_index=index, materials=materials)


def read_hu(
    source: Source,
    *,
    series: str | int | None = None,
    resample: bool | str = False,
    progress: Progress | None = None,
) -> CtVolume:
    """Read the CT numbers of a series.

    Parameters
    ----------
    source : str, Path or iterable of them
        A folder (with its subfolders) or a list of files.
    series : str or int, optional
        Which series, when there are several.
    resample : bool or {"tilt", "spacing"}
        What may be resampled, see `read_ct`.
    progress : callable, optional
        Told how many steps of how many are done.

    Returns
    -------
    CtVolume
        HU along the patient axes, each axis increasing.

    Raises
    ------
    DicomError
        When the files cannot be used.
    """
    if resample not in {True, False, "tilt", "spacing"}:
        raise GeometryError(f"resample = {resample!r}", allowed='True, False, "tilt" or "spacing"', remedy="choose one")
    files = list_files(source)
    headers, strange = read_headers(files, progress=_share(progress, 0, 1))
    with quiet_decoder():
        stack = sort_stack(choose_series(headers, series))
        first = stack.headers[0]
        tilt_said = text_of(first.dataset, "GantryDetectorTilt", name=first.name)
    _refuse_lookalikes(stack, strange)
    tilted, uneven = _judge(stack, resample, tilt_said)
    values, padding = read_pixels(stack, progress=_share(progress, 1, 2))
    with quiet_decoder():
        names = DicomHeaders.from_headers(stack.headers)
    if tilted or uneven:
        values, origin, spacing, padding = _resampled(stack, values, padding)
    else:
        values, origin, spacing, padding = _turned(stack, values, padding)
    return CtVolume(
        hu=values,
        origin_mm=origin,
        spacing_mm=spacing,
        padding=padding,
        frame_of_reference_uid=stack.frame_of_reference_uid or None,
        patient_position=stack.patient_position or "HFS",
        headers=names,
        source={
            "kind": "CT",
            "slices": stack.count,
            "lowest and highest HU": [float(values.min()), float(values.max())],
            "tilt_deg": round(stack.tilt_deg, 3),
            "resampled": [reason for reason, on in (("tilt", tilted), ("spacing", uneven)) if on],
            "files that are not DICOM": len(strange),
        },
    )


def _refuse_lookalikes(stack: Stack, strange: Sequence[Path]) -> None:
    """Refuse files that are no DICOM but look like a slice of this series: the volume would end early unseen."""
    sizes = sorted(header.path.stat().st_size for header in stack.headers)
    usual = sizes[len(sizes) // 2]
    endings = {header.path.suffix.lower() for header in stack.headers}
    for path in strange:
        if path.suffix.lower() in endings and (path.stat().st_size == 0 or 0.5 < path.stat().st_size / usual < 2.0):
            raise SeriesError(
                f"{path.name} is no DICOM file but has the ending and size of a slice of this series (or is empty)",
                allowed="undamaged slices",
                remedy="get the file again, or move it elsewhere if it is something else",
            )


def _share(progress: Progress | None, part: int, parts: int) -> Progress | None:
    """Return a progress report for one of several equal parts."""
    if progress is None:
        return None

    def tell(done: int, total: int) -> None:
        progress(part * total + done, parts * total)

    return tell


def _judge(stack: Stack, resample: bool | str, tilt_said: str) -> tuple[bool, bool]:
    """Refuse geometry that cannot be used as it is, or say what is to be resampled."""
    skewed = stack.skew_mm() > SKEW_LIMIT_MM
    if skewed and resample not in {True, "tilt"}:
        if stack.tilt_deg > _TILT_SEEN_DEG:
            what = f"a gantry tilted by {stack.tilt_deg:.1f} degrees (slices are not at right angles to their line)"
        else:
            what = f"slices rotated by {stack.rotation_deg:.1f} degrees against the patient axes"
        raise GeometryError(
            what,
            allowed=f"slices along the patient axes (corners within {SKEW_LIMIT_MM} mm)",
            remedy='ask for resampling with resample=True (or "tilt")',
        )
    unevenness = stack.unevenness()
    if unevenness and resample not in {True, "spacing"}:
        raise GeometryError(
            unevenness,
            allowed=f"slices within {100 * JITTER_SHARE:g} % of an even spacing",
            remedy='get the missing slices, or ask for resampling with resample=True (or "spacing")',
        )
    for reason in [f"tilt of {stack.tilt_deg:.1f} degrees"] * skewed + [unevenness] * bool(unevenness):
        warn(f"the CT was resampled linearly: {reason}", GeometryWarning, stacklevel=4)
    try:
        tilt = abs(float(tilt_said or 0.0))
    except ValueError:
        tilt = 0.0
    if 0.5 < tilt < 45.0 and stack.tilt_deg <= _TILT_SEEN_DEG and not skewed:
        warn(
            f"the header names a gantry tilt of {tilt:.1f} degrees, the positions of the slices show none; "
            "the positions are used",
            GeometryWarning,
            stacklevel=4,
        )
    return skewed, bool(unevenness)


def _turned(
    stack: Stack, values: NDArray[Any], padding: NDArray[np.bool_] | None
) -> tuple[NDArray[Any], tuple[float, float, float], tuple[float, float, float], NDArray[np.bool_] | None]:
    """Turn a volume to increasing patient axes without touching a value."""
    matrix, start = stack.affine()
    which = [int(np.abs(matrix[:, index]).argmax()) for index in range(3)]  # patient axis of each image index
    if sorted(which) != [0, 1, 2]:
        raise GeometryError("image axes that do not span the volume", remedy="the file is damaged; get it again")
    of_axis = [which.index(axis) for axis in range(3)]
    order = tuple(2 - of_axis[axis] for axis in (2, 1, 0))
    flips = tuple(slice(None, None, -1) if matrix[axis, of_axis[axis]] < 0 else slice(None) for axis in (2, 1, 0))
    counts = (stack.columns, stack.rows, stack.count)
    spacing = [float(np.linalg.norm(matrix[:, of_axis[axis]])) for axis in range(3)]
    origin = [
        float(start[axis] + min(0.0, matrix[axis, of_axis[axis]] * (counts[of_axis[axis]] - 1))) for axis in range(3)
    ]
    turned = np.ascontiguousarray(values.transpose(order)[flips])
    marked = None if padding is None else np.ascontiguousarray(padding.transpose(order)[flips])
    return turned, (origin[0], origin[1], origin[2]), (spacing[0], spacing[1], spacing[2]), marked


def _resampled(
    stack: Stack, values: NDArray[Any], padding: NDArray[np.bool_] | None
) -> tuple[NDArray[Any], tuple[float, float, float], tuple[float, float, float], NDArray[np.bool_] | None]:
    """Interpolate a volume linearly on a lattice along the patient axes that holds all of it.

    A point p has the image indices (i, j, t) with p = start + i a + j b + t n, where a and b are the steps along a row
    and a column, n the unit vector along the line of slices and t in mm; t becomes a slice index between the real
    positions of the slices. Points outside the scanned volume are air.
    """
    from scipy import ndimage

    matrix, start = stack.affine()
    counts = np.array([stack.columns, stack.rows, stack.count])
    corners = np.array(np.meshgrid(*[[0.0, n - 1.0] for n in counts])).reshape(3, -1)
    points = matrix @ corners + start[:, None]
    low, high = points.min(axis=1), points.max(axis=1)
    which = [int(np.abs(matrix[:, index]).argmax()) for index in range(3)]
    if sorted(which) != [0, 1, 2]:
        raise GeometryError("slices too oblique to be resampled", allowed="angles below 45 degrees",
                            remedy="reformat the series first")  # fmt: skip
    steps = np.linalg.norm(matrix, axis=0)
    spacing = np.array([steps[which.index(axis)] for axis in range(3)])
    if stack.unevenness():
        spacing[which[2]] = float(np.median(np.diff(stack.offsets_mm)))
    sizes = np.floor((high - low) / spacing + 1e-6).astype(int) + 1
    check_memory(
        float(np.prod(sizes.astype(float))) * 28.0, what=f"a resampled CT of {' x '.join(map(str, sizes))} voxels"
    )
    if float(np.prod(sizes.astype(float))) > _MOST_GROWTH * max(values.size, 1000):
        raise GeometryError(
            f"{values.size} voxels would become {' x '.join(map(str, sizes))}, mostly invented",
            allowed=f"up to {_MOST_GROWTH} times the voxels that were scanned",
            remedy="get the missing slices or reformat the series",
        )
    nx, ny, nz = (int(n) for n in sizes)
    inverse = np.linalg.inv(np.stack([matrix[:, 0], matrix[:, 1], stack.along], axis=1))
    x = low[0] + spacing[0] * np.arange(nx)
    y = low[1] + spacing[1] * np.arange(ny)
    out = np.empty((nz, ny, nx), dtype=np.float32)
    marked = None if padding is None else np.zeros(out.shape, dtype=bool)
    slices = np.arange(stack.count, dtype=float)
    floats = values.astype(np.float32)
    for plane in range(nz):
        z = low[2] + spacing[2] * plane - start[2]
        i, j, t = (row[0] * (x - start[0])[None, :] + row[1] * (y - start[1])[:, None] + row[2] * z for row in inverse)
        offsets = stack.offsets_mm
        k = np.interp(t, offsets, slices)
        first, last = offsets[1] - offsets[0], offsets[-1] - offsets[-2]
        inside = (np.abs(i - (stack.columns - 1) / 2) <= stack.columns / 2) & (
            np.abs(j - (stack.rows - 1) / 2) <= stack.rows / 2
        )
        inside &= (t >= -first / 2) & (t <= offsets[-1] + last / 2)
        out[plane] = ndimage.map_coordinates(floats, [k, j, i], order=1, mode="nearest", output=np.float32)
        out[plane][~inside] = AIR_HU
        if marked is not None and padding is not None:
            marked[plane] = ndimage.map_coordinates(padding, [k, j, i], order=0, mode="nearest") & inside
    return (
        out,
        (float(low[0]), float(low[1]), float(low[2])),
        (float(spacing[0]), float(spacing[1]), float(spacing[2])),
        marked,
    )


def _whole(hu: NDArray[Any]) -> NDArray[np.int16]:
    """Return HU as int16 for the volume, rounded and held to its range."""
    if hu.dtype == np.int16:
        return hu
    limits = np.iinfo(np.int16)
    rounded = hu if hu.dtype.kind == "i" else np.rint(hu)
    return np.asarray(np.clip(rounded, limits.min, limits.max), dtype=np.int16)

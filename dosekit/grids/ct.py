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
from dosekit.grids.ct_turning import resampled_volume, turned_volume
from dosekit.grids.dicom_files import DicomHeaders, list_files, quiet_decoder, read_headers, text_of
from dosekit.grids.memory import check_memory
from dosekit.grids.overrides import override_structures
from dosekit.grids.voxels import VoxelGrid

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.basis.materials import Material

__all__ = ["CtVolume", "read_ct", "read_hu"]

_TILT_SEEN_DEG = 0.1
_SAID = ("GantryDetectorTilt", "SpacingBetweenSlices", "SliceThickness")

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
        said = {key: text_of(first.dataset, key, name=first.name) for key in _SAID}
    _refuse_lookalikes(stack, strange)
    tilted, uneven = _judge(stack, resample)
    _compare(stack, said, resampled=tilted or uneven)
    values, padding = read_pixels(stack, progress=_share(progress, 1, 2))
    with quiet_decoder():
        names = DicomHeaders.from_headers(stack.headers)
    if tilted or uneven:
        values, origin, spacing, padding = resampled_volume(stack, values, padding)
    else:
        values, origin, spacing, padding = turned_volume(stack, values, padding)
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


def _judge(stack: Stack, resample: bool | str) -> tuple[bool, bool]:
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
    return skewed, bool(unevenness)


def _compare(stack: Stack, said: dict[str, str], *, resampled: bool) -> None:
    """Warn where the header contradicts the positions of the slices, which are what is used."""
    numbers: dict[str, float] = {}
    for key, text in said.items():
        try:
            numbers[key] = abs(float(text or 0.0))
        except ValueError:
            numbers[key] = 0.0
    tilt, between, thickness = (numbers[key] for key in _SAID)
    doubts = []
    if 0.5 < tilt < 45.0 and stack.tilt_deg <= _TILT_SEEN_DEG and not resampled:
        doubts.append(f"the header names a gantry tilt of {tilt:.1f} degrees, the positions of the slices show none")
    if between > 0.0 and not resampled and abs(stack.spacing_mm / between - 1.0) > 2 * JITTER_SHARE:
        doubts.append(f"the header names {between:g} mm between slices, the positions say {stack.spacing_mm:.4g} mm")
    elif 0.0 < 1.5 * thickness < stack.spacing_mm and not resampled:
        doubts.append(f"slices of {thickness:g} mm lie {stack.spacing_mm:.4g} mm apart; what lies between is not seen")
    for doubt in doubts:
        warn(f"{doubt}; the positions are used", GeometryWarning, stacklevel=4)


def _whole(hu: NDArray[Any]) -> NDArray[np.int16]:
    """Return HU as int16 for the volume, rounded and held to its range."""
    if hu.dtype == np.int16:
        return hu
    limits = np.iinfo(np.int16)
    rounded = hu if hu.dtype.kind == "i" else np.rint(hu)
    return np.asarray(np.clip(rounded, limits.min, limits.max), dtype=np.int16)

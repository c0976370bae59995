"""A voxel volume as a DICOM CT series, so that any phantom can be read as if it had been scanned.

CT numbers come from density and composition by the formula of
:mod:`dosekit.grids.attenuation` (Schneider, Pedroni and Lomax, Phys. Med. Biol. 41
(1996) 111)::

    HU = 1000 (mu / mu_water - 1)

It is the one that the calibration of :func:`dosekit.read_ct` rests on: with the same
scanner coefficients a material that the calibration knows comes back as it was;
another one (a plastic, a metal) comes back as the tissue with its CT number.
Beam hardening, noise and blur are not modelled.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Any
from warnings import warn

import numpy as np
from pydicom.uid import CTImageStorage

from dosekit.errors import CalibrationWarning, DicomError, InputError
from dosekit.grids.attenuation import KAPPA_COHERENT, KAPPA_PHOTO, attenuation_per_density
from dosekit.outputs.dicom_objects import (
    add_frame_of_reference,
    caution_text,
    clip_text,
    number_text,
    object_start,
    save_object,
)
from dosekit.outputs.dicom_reference import reference_of

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from dosekit.grids.voxels import VoxelGrid
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["ct_numbers", "write_ct_series"]

LOWEST_HU, HIGHEST_HU = -1024, 32767


def ct_numbers(
    grid: VoxelGrid, *, kappa_coherent: float = KAPPA_COHERENT, kappa_photo: float = KAPPA_PHOTO
) -> NDArray[np.int16]:
    """Return the CT numbers a scanner would show for a volume.

    Parameters
    ----------
    grid : VoxelGrid
        Density and composition; the CT numbers it may carry are not used.
    kappa_coherent, kappa_photo : float
        The scanner; see `attenuation_per_density`.

    Returns
    -------
    ndarray of int16, shape (z, y, x)
        HU, rounded, within -1024 and 32767.

    Warns
    -----
    CalibrationWarning
        When voxels are clamped.
    """
    slopes = np.array(
        [
            attenuation_per_density(matter, kappa_coherent=kappa_coherent, kappa_photo=kappa_photo)
            for matter in grid.materials
        ]
    )
    numbers = np.empty(grid.shape, dtype=np.int16)
    clamped = 0
    for k in range(grid.shape[0]):
        plane = slopes[grid.material_index[k]] * grid.density_g_cm3[k].astype(np.float64)
        hu = np.rint(1000.0 * (plane - 1.0))
        clamped += int(np.count_nonzero((hu < LOWEST_HU) | (hu > HIGHEST_HU)))
        numbers[k] = np.clip(hu, LOWEST_HU, HIGHEST_HU)
    if clamped:
        warn(
            f"{clamped} voxels lie outside {LOWEST_HU} to {HIGHEST_HU} HU and were clamped",
            CalibrationWarning,
            stacklevel=2,
        )
    return numbers


def write_ct_series(
    folder: str | os.PathLike[str],
    grid: VoxelGrid,
    *,
    run_hash: str,
    reference: DicomReference | None = None,
    hu: NDArray[Any] | None = None,
    created: str = "",
) -> tuple[Path, ...]:
    """Write a volume as a CT series, one file for each slice.

    Parameters
    ----------
    folder : path
        Existing folder for the files ``ct_0001.dcm`` and so on, by increasing z.
    grid : VoxelGrid
        The volume.
    run_hash : str
        Hash of the run record.
    reference : DicomReference, optional
        Identity and identifiers; invented from the volume's name when not given. A reference to
        images that exist already is refused, since their identifiers would be used twice.
    hu : ndarray, shape (z, y, x), optional
        CT numbers to write instead of those of `ct_numbers`.
    created : str
        ISO moment from the run record, or empty.

    Returns
    -------
    tuple of pathlib.Path
        The files by increasing z.

    Raises
    ------
    DicomError
        If the reference does not fit.
    OutputError
        If a file cannot be written.
    """
    z_mm = grid.centres_mm("z")
    if reference is None:
        reference = reference_of(grid.replace(dicom_reference=None), run_hash=run_hash)
    _check_reference(reference, z_mm)
    numbers = ct_numbers(grid) if hu is None else np.asarray(hu)
    if numbers.shape != grid.shape or numbers.min() < -32768 or numbers.max() > HIGHEST_HU:
        raise InputError(f"CT numbers of shape {numbers.shape}", allowed=f"16 bit numbers of shape {grid.shape}")
    paths = []
    for k, (z, plane) in enumerate(zip(z_mm, numbers, strict=True)):
        head = object_start(
            CTImageStorage,
            reference.image_instance_uids[k],
            modality="CT",
            reference=reference,
            run_hash=run_hash,
            created=created,
            series_role="CT",
            series_number=1,
            instance_number=k + 1,
            description="computed CT",
        )
        head.SeriesInstanceUID = reference.series_instance_uid
        _add_plane(head, reference, grid, float(z), np.asarray(plane, dtype="<i2"))
        paths.append(save_object(head, Path(folder) / f"ct_{k + 1:04d}.dcm"))
    return tuple(paths)


def _add_plane(
    head: Dataset, reference: DicomReference, grid: VoxelGrid, z_mm: float, plane: NDArray[np.int16]
) -> None:
    """Add the modules of one CT image."""
    x_step_mm, y_step_mm, z_step_mm = grid.spacing_mm
    add_frame_of_reference(head, reference)
    head.PatientPosition = reference.patient_position
    head.BodyPartExamined = "WHOLEBODY"
    head.ImageType = ["DERIVED", "SECONDARY", "AXIAL"]
    head.ImageComments = clip_text(caution_text("CT numbers computed from density and composition"), "LT")
    head.AcquisitionNumber = "1"
    head.KVP = ""
    head.SliceThickness = number_text(z_step_mm)
    head.SliceLocation = number_text(z_mm)
    head.ImagePositionPatient = [number_text(value) for value in (*grid.origin_mm[:2], z_mm)]
    head.ImageOrientationPatient = ["1", "0", "0", "0", "1", "0"]
    head.PixelSpacing = [number_text(y_step_mm), number_text(x_step_mm)]
    head.SamplesPerPixel = 1
    head.PhotometricInterpretation = "MONOCHROME2"
    head.Rows, head.Columns = plane.shape
    head.BitsAllocated, head.BitsStored, head.HighBit = 16, 16, 15
    head.PixelRepresentation = 1
    head.RescaleIntercept, head.RescaleSlope, head.RescaleType = "0", "1", "HU"
    head.WindowCenter, head.WindowWidth = "40", "400"
    head.add_new("PixelData", "OW", plane.tobytes())


def _check_reference(reference: DicomReference, z_mm: NDArray[np.float64]) -> None:
    if not reference.made_by_run:
        raise DicomError(
            "a reference to images that exist already",
            allowed="a reference made by this run",
            remedy="leave the reference out, or anonymise it",
        )
    if len(reference.image_z_mm) != len(z_mm) or np.abs(np.array(reference.image_z_mm) - z_mm).max() > 1e-3:
        raise DicomError(
            f"a reference to {len(reference.image_z_mm)} images for a volume of {len(z_mm)} slices",
            allowed="one image at the position of each slice",
            remedy="leave the reference out, or give the volume as it was read",
        )

"""A voxel volume as a DICOM CT series, so that any phantom can be read as if it had been scanned.

CT numbers come from density and composition by the parametrisation of the
linear attenuation coefficient of Schneider, Pedroni and Lomax, Phys. Med. Biol.
41 (1996) 111, in the form per mass fraction of Schneider, Bortfeld and Schlegel,
Phys. Med. Biol. 45 (2000) 459, eq. 8::

    HU = 1000 (mu / mu_water - 1)
    mu / mu_water = rho sum_i (w_i / A_i) (Z_i + k1 Z_i^2.86 + k2 Z_i^4.62) / [the same for water at 1 g/cm3]

with k1 = 1.24e-3 and k2 = 3.06e-5 for one 120 kV scanner (values from memory of
the 2000 paper).  The same kappas should be given to the calibration that reads
the series back.  Beam hardening, noise and blur are not modelled.

Validity: tissues and plastics.  Above iron the fit of the photo-electric term
has no support; such voxels are written with what the formula says.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Any
from warnings import warn

import numpy as np
from pydicom.uid import CTImageStorage

from dosekit.basis.materials import element, material
from dosekit.errors import CalibrationWarning, DicomError, InputError
from dosekit.outputs.dicom_objects import (
    add_frame_of_reference,
    caution_text,
    clip_text,
    number_text,
    object_start,
    save_object,
)
from dosekit.outputs.dicom_reference import invented_reference

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from dosekit.basis.materials import Material
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["attenuation_per_density", "ct_numbers", "write_ct_series"]

KAPPA_COHERENT = 1.24e-3
"""K_coh / K_KN of the scanner; Schneider et al. 2000 (memory)."""
KAPPA_PHOTO = 3.06e-5
"""K_ph / K_KN of the scanner; Schneider et al. 2000 (memory)."""
LOWEST_HU, HIGHEST_HU = -1024, 32767


def attenuation_per_density(
    matter: Material, *, kappa_coherent: float = KAPPA_COHERENT, kappa_photo: float = KAPPA_PHOTO
) -> float:
    """Return the photon attenuation per density relative to that of water.

    Parameters
    ----------
    matter : Material
        Composition; its density is not used.
    kappa_coherent, kappa_photo : float
        Ratios of coherent and photo-electric to Klein-Nishina coefficients of the scanner.

    Returns
    -------
    float
        (mu / rho) / (mu / rho)_water, dimensionless.

    Examples
    --------
    >>> attenuation_per_density(material("water"))
    1.0
    """

    def per_gram(substance: Material) -> float:
        total = 0.0
        for symbol, fraction in substance.mass_fractions:
            z, a = element(symbol).atomic_number, element(symbol).atomic_weight
            total += fraction / a * (z + kappa_coherent * z**2.86 + kappa_photo * z**4.62)
        return total

    return per_gram(matter) / per_gram(material("water"))


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
        reference = invented_reference(
            run_hash,
            name=grid.name or "phantom",
            image_z_mm=z_mm.tolist(),
            patient_position=grid.patient_position,
            frame_of_reference_uid=grid.frame_of_reference_uid,
        )
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

"""Dose maps as DICOM RT Dose.

One object holds one map on a grid along the patient axes, 16 bit unsigned, in
gray.  Stored integer n means n x DoseGridScaling.  The scaling is the smallest
decimal string, rounded up to ten digits, for which the maximum still fits
65535; integers are computed from the number that the string says, so a reader
gets the dose back to half a scaling step (1 part in 131070 of the maximum).

The grid runs along increasing x, y and z of the patient system (L, P, S)
whatever the patient position, so ImageOrientationPatient is always
1, 0, 0, 0, 1, 0, ImagePositionPatient is the centre of voxel [0, 0, 0], and
GridFrameOffsetVector starts at 0 and increases (DICOM PS3.3 C.8.8.3.2, first
way of saying it).

An effect-weighted map has DoseType EFFECTIVE and says in DoseComment which
model weighted it.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from pydicom.dataset import Dataset
from pydicom.tag import Tag
from pydicom.uid import RTDoseStorage, RTIonPlanStorage

from dosekit.caution import BANNER
from dosekit.errors import InputError, SizeError
from dosekit.outputs.dicom_histograms import add_histograms
from dosekit.outputs.dicom_objects import (
    add_frame_of_reference,
    caution_text,
    clip_text,
    number_text,
    number_text_not_below,
    object_start,
    reference_item,
    save_object,
)
from dosekit.outputs.dicom_reference import derived_uid, plan_uid

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from dosekit.effects.histograms import VolumeHistogram
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["dose_integers", "dose_uid", "write_rt_dose"]

LARGEST_INTEGER = 65535
SMALLEST_SCALING_GY = 1e-300
"""Below this a decimal string and a double disagree; no dose of interest is near it."""
LARGEST_OBJECT_BYTES = 2**32 - 2
"""A pixel element has a 32 bit length."""


def dose_uid(run_hash: str, *, label: str, dose_type: str) -> str:
    """Return the identifier of one dose map of a run."""
    return derived_uid(run_hash, "instance", "RT Dose", label, dose_type)


def dose_integers(dose_gy: ArrayLike) -> tuple[NDArray[np.uint16], str]:
    """Return the stored integers of a dose map and the decimal string of their unit.

    Parameters
    ----------
    dose_gy : array_like
        Dose (Gy), any shape, finite and not negative.

    Returns
    -------
    integers : ndarray of uint16
        Same shape.
    scaling : str
        DoseGridScaling (Gy per unit), at most 16 characters.

    Raises
    ------
    InputError
        If a dose is negative, infinite or not a number.

    Examples
    --------
    >>> dose_integers([0.0, 1.0, 2.0])
    (array([    0, 32767, 65535], dtype=uint16), '3.051804380e-5')
    """
    dose = np.asarray(dose_gy)
    if dose.size == 0:
        raise InputError("an empty dose map", allowed="one voxel or more")
    lowest, highest = float(dose.min()), float(dose.max())  # both nan when any voxel is nan
    if not (np.isfinite(lowest) and np.isfinite(highest)):
        raise InputError("a dose that is infinite or not a number", allowed="finite doses")
    if lowest < 0.0:
        raise InputError(
            f"a negative dose ({lowest:g} Gy)",
            allowed="doses from 0 Gy upwards",
            remedy="write a difference of two maps to NetCDF, which has no such limit",
        )
    if highest == 0.0:
        return np.zeros(dose.shape, dtype=np.uint16), "1"
    scaling = number_text_not_below(max(highest / LARGEST_INTEGER, SMALLEST_SCALING_GY))
    unit_gy = float(scaling)
    integers = np.empty(dose.shape, dtype=np.uint16)
    planes = dose if dose.ndim > 1 else dose[np.newaxis]
    stored = integers if dose.ndim > 1 else integers[np.newaxis]
    for plane, store in zip(planes, stored, strict=True):  # plane by plane keeps the memory small
        store[...] = np.rint(plane.astype(np.float64) / unit_gy)
    return integers, scaling


def write_rt_dose(
    path: str | os.PathLike[str],
    dose_gy: ArrayLike,
    *,
    x_mm: ArrayLike,
    y_mm: ArrayLike,
    z_mm: ArrayLike,
    reference: DicomReference,
    run_hash: str,
    dose_type: str = "PHYSICAL",
    summation: str = "PLAN",
    label: str = "total",
    comment: str = "",
    beam_number: int | None = None,
    plan_instance_uid: str | None = None,
    histograms: Mapping[int, VolumeHistogram] | None = None,
    instance_number: int = 1,
    created: str = "",
) -> Path:
    """Write a dose map as an RT Dose object.

    Parameters
    ----------
    path : path
        File to write.
    dose_gy : array_like, shape (z, y, x)
        Dose (Gy), finite and not negative.
    x_mm, y_mm, z_mm : array_like
        Voxel centres along the patient axes (mm), increasing at equal steps.
    reference : DicomReference
        Patient, study, frame of reference, structure set.
    run_hash : str
        Hash of the run record; identifiers derive from it.
    dose_type : {"PHYSICAL", "EFFECTIVE"}
        Whether an effect model weighted the dose.
    summation : {"PLAN", "BEAM"}
        Whether the map is the whole run or one field.
    label : str
        Name of the map; maps of one run with equal type need different labels.
    comment : str
        What the map is; kept after the research-only wording.
    beam_number : int, optional
        Number of the field in the RT Ion Plan; needed for ``summation="BEAM"``.
    plan_instance_uid : str, optional
        RT Ion Plan to refer to; that of the run when not given.
    histograms : mapping of int to VolumeHistogram, optional
        Dose-volume histograms by number of the structure in the structure set.
    instance_number : int
        Instance number in the series.
    created : str
        ISO moment from the run record, or empty.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    InputError
        If dose or grid cannot be stored.
    SizeError
        If the map is too large for one object.
    OutputError
        If the file cannot be written.
    """
    dose = np.asarray(dose_gy)
    axes = [_axis(name, axis) for name, axis in (("x", x_mm), ("y", y_mm), ("z", z_mm))]
    _check_choices(dose_type, summation, beam_number)
    shape = tuple(len(axis) for axis in reversed(axes))
    if dose.shape != shape:
        raise InputError(f"a dose map of shape {dose.shape}", allowed=f"{shape}, the lengths of z, y and x")
    if 2 * dose.size > LARGEST_OBJECT_BYTES or max(shape[1:]) > LARGEST_INTEGER:
        raise SizeError(
            f"a dose map of {shape} voxels",
            allowed="4 GiB and 65535 rows and columns in one object",
            remedy="ask for a coarser dose grid",
        )
    integers, scaling = dose_integers(dose)
    head = object_start(
        RTDoseStorage,
        dose_uid(run_hash, label=label, dose_type=dose_type),
        modality="RTDOSE",
        reference=reference,
        run_hash=run_hash,
        created=created,
        series_role="RTDOSE",
        series_number=3,
        instance_number=instance_number,
        description="RT dose",
    )
    head.OperatorsName = ""
    add_frame_of_reference(head, reference)
    _add_grid(head, axes)
    _add_pixels(head, integers)
    head.DoseUnits = "GY"
    head.DoseType = dose_type
    head.DoseComment = clip_text(f"{BANNER}. {comment or label}", "LO")
    head.ImageComments = clip_text(caution_text(f"{label}: {comment}" if comment else label), "LT")
    head.DoseSummationType = summation
    head.TissueHeterogeneityCorrection = "IMAGE"
    head.DoseGridScaling = scaling
    plan = reference_item(RTIonPlanStorage, plan_instance_uid or plan_uid(run_hash))
    if summation == "BEAM":
        plan.ReferencedFractionGroupSequence = [_beam_item(beam_number)]
    head.ReferencedRTPlanSequence = [plan]
    if reference.image_instance_uids:
        head.ReferencedImageSequence = [
            reference_item(reference.image_class_uid, uid) for uid in reference.image_instance_uids
        ]
    add_histograms(head, histograms or {}, reference=reference, dose_type=dose_type)
    return save_object(head, path)


def _add_grid(head: Dataset, axes: list[NDArray[np.float64]]) -> None:
    x_mm, y_mm, z_mm = axes
    steps_mm = [(axis[-1] - axis[0]) / (len(axis) - 1) if len(axis) > 1 else 1.0 for axis in axes]
    head.ImagePositionPatient = [number_text(axis[0]) for axis in (x_mm, y_mm, z_mm)]
    head.ImageOrientationPatient = ["1", "0", "0", "0", "1", "0"]
    head.PixelSpacing = [number_text(steps_mm[1]), number_text(steps_mm[0])]  # between rows, between columns
    head.SliceThickness = number_text(steps_mm[2]) if len(z_mm) > 1 else ""
    if len(z_mm) > 1:
        head.GridFrameOffsetVector = [number_text(round(step, 9)) for step in z_mm - z_mm[0]]


def _add_pixels(head: Any, integers: NDArray[np.uint16]) -> None:
    frames, rows, columns = integers.shape
    head.SamplesPerPixel = 1
    head.PhotometricInterpretation = "MONOCHROME2"
    if frames > 1:
        head.NumberOfFrames = str(frames)
        head.FrameIncrementPointer = Tag("GridFrameOffsetVector")
    head.Rows, head.Columns = rows, columns
    head.BitsAllocated, head.BitsStored, head.HighBit = 16, 16, 15
    head.PixelRepresentation = 0
    data = integers.astype("<u2", copy=False).tobytes()
    head.add_new("PixelData", "OW", data)


def _beam_item(beam_number: int | None) -> Dataset:
    beam = Dataset()
    beam.ReferencedBeamNumber = str(beam_number)
    group = Dataset()
    group.ReferencedFractionGroupNumber = "1"
    group.ReferencedBeamSequence = [beam]
    return group


def _axis(name: str, centres_mm: ArrayLike) -> NDArray[np.float64]:
    axis = np.asarray(centres_mm, dtype=np.float64)
    if axis.ndim != 1 or axis.size == 0 or not np.all(np.isfinite(axis)):
        raise InputError(f"the {name} axis of a dose map", allowed="one or more finite positions in mm")
    steps_mm = np.diff(axis)
    if steps_mm.size and (steps_mm.min() <= 0.0 or np.ptp(steps_mm) > 1e-3 + 1e-6 * steps_mm.mean()):
        raise InputError(
            f"the {name} axis of a dose map has steps from {steps_mm.min():g} to {steps_mm.max():g} mm",
            allowed="positions that increase at equal steps",
            remedy="resample the dose map",
        )
    return axis


def _check_choices(dose_type: str, summation: str, beam_number: int | None) -> None:
    if dose_type not in {"PHYSICAL", "EFFECTIVE"}:
        raise InputError(f"dose type {dose_type!r}", allowed="PHYSICAL, EFFECTIVE")
    if summation not in {"PLAN", "BEAM"}:
        raise InputError(f"dose summation {summation!r}", allowed="PLAN, BEAM")
    if summation == "BEAM" and (beam_number is None or beam_number < 1):
        raise InputError("the dose of one field without its number", allowed="a beam number from 1 upwards")

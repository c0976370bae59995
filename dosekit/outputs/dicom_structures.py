"""Structures of a voxel volume as a DICOM RT Structure Set.

Outlines come slice by slice from :mod:`dosekit.outputs.dicom_outlines`.  Holes
become contours of their own inside the outer one; readers that count crossings
(even-odd rule) see them as holes.

Coordinates are rounded to 0.01 mm.  A contour whose text would not fit into its
element is thinned to the smallest tolerance with which it does.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from pydicom.dataelem import RawDataElement
from pydicom.dataset import Dataset
from pydicom.tag import Tag
from pydicom.uid import UID, RTStructureSetStorage

from dosekit.caution import BANNER
from dosekit.errors import StructureError
from dosekit.outputs.dicom_objects import (
    add_frame_of_reference,
    caution_text,
    clip_text,
    decimal_text,
    number_text,
    object_start,
    reference_item,
    save_object,
    split_moment,
)
from dosekit.outputs.dicom_outlines import slice_outlines, thinned
from dosekit.outputs.dicom_reference import structure_set_uid

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from dosekit.grids.voxels import VoxelGrid
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["write_structure_set"]

DETACHED_STUDY_CLASS_UID = "1.2.840.10008.3.1.2.3.1"
"""Class customarily named in RT Referenced Study Sequence (retired, common practice)."""
LONGEST_CONTOUR_BYTES = 65534
"""An element with an explicit representation DS has a 16 bit length (DICOM PS3.5, 7.1.2)."""
IMAGE_TOLERANCE_MM = 0.01
COLOURS = (
    (213, 94, 0),
    (0, 114, 178),
    (0, 158, 115),
    (204, 121, 167),
    (230, 159, 0),
    (86, 180, 233),
    (240, 228, 66),
)
"""Colours told apart by all kinds of colour vision; Okabe and Ito, Color Universal Design, 2008 (memory)."""
INTERPRETED_TYPES = {"target": "PTV", "organ_at_risk": "ORGAN", "body": "EXTERNAL"}


def write_structure_set(
    path: str | os.PathLike[str],
    grid: VoxelGrid,
    *,
    reference: DicomReference,
    run_hash: str,
    names: Sequence[str] | None = None,
    created: str = "",
) -> Path:
    """Write structures of a volume as an RT Structure Set.

    Parameters
    ----------
    path : path
        File to write.
    grid : VoxelGrid
        The volume with its structures and their roles.
    reference : DicomReference
        Images the contours lie on; there must be one or more.
    run_hash : str
        Hash of the run record; the object's identifier is ``structure_set_uid(run_hash)``.
    names : sequence of str, optional
        Which structures, in which order; all when not given.
    created : str
        ISO moment from the run record, or empty.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    StructureError
        If there is no structure or no image to refer to.
    OutputError
        If the file cannot be written.
    """
    chosen = [grid.structure_name(name) for name in (grid.structures if names is None else names)]
    if not chosen or not reference.image_instance_uids:
        raise StructureError(
            f"{len(chosen)} structures on {len(reference.image_instance_uids)} images",
            allowed="one structure or more on one image or more",
        )
    head = object_start(
        RTStructureSetStorage,
        structure_set_uid(run_hash),
        modality="RTSTRUCT",
        reference=reference,
        run_hash=run_hash,
        created=created,
        series_role="RTSTRUCT",
        series_number=2,
        instance_number=1,
        description="structures",
    )
    head.OperatorsName = ""
    add_frame_of_reference(head, reference)
    head.StructureSetLabel = "RESEARCH ONLY"
    head.StructureSetName = BANNER
    head.StructureSetDescription = clip_text(caution_text(), "ST")
    head.StructureSetDate, head.StructureSetTime = split_moment(created)
    head.ApprovalStatus = "UNAPPROVED"
    head.ReferencedFrameOfReferenceSequence = [_frame_item(reference)]
    head.StructureSetROISequence = []
    head.ROIContourSequence = []
    head.RTROIObservationsSequence = []
    for number, name in enumerate(chosen, start=1):
        head.StructureSetROISequence.append(_roi_item(number, name, reference))
        head.ROIContourSequence.append(_contours_item(number, grid, name, reference))
        head.RTROIObservationsSequence.append(_observation_item(number, name, grid.role(name)))
    return save_object(head, path)


def _frame_item(reference: DicomReference) -> Dataset:
    series = Dataset()
    series.SeriesInstanceUID = UID(reference.series_instance_uid)
    series.ContourImageSequence = [
        reference_item(reference.image_class_uid, uid) for uid in reference.image_instance_uids
    ]
    study = reference_item(DETACHED_STUDY_CLASS_UID, reference.study_instance_uid)
    study.RTReferencedSeriesSequence = [series]
    frame = Dataset()
    frame.FrameOfReferenceUID = UID(reference.frame_of_reference_uid)
    frame.RTReferencedStudySequence = [study]
    return frame


def _roi_item(number: int, name: str, reference: DicomReference) -> Dataset:
    item = Dataset()
    item.ROINumber = str(number)
    item.ReferencedFrameOfReferenceUID = UID(reference.frame_of_reference_uid)
    item.ROIName = clip_text(name, "LO")
    item.ROIGenerationAlgorithm = "AUTOMATIC"
    return item


def _observation_item(number: int, name: str, role: str) -> Dataset:
    item = Dataset()
    item.ObservationNumber = str(number)
    item.ReferencedROINumber = str(number)
    prefix = name.strip()[:3].upper()
    item.RTROIInterpretedType = prefix if prefix in {"GTV", "CTV", "PTV"} else INTERPRETED_TYPES.get(role, "")
    item.ROIInterpreter = ""
    return item


def _contours_item(number: int, grid: VoxelGrid, name: str, reference: DicomReference) -> Dataset:
    """Return the contours of one structure on all slices."""
    item = Dataset()
    item.ReferencedROINumber = str(number)
    item.ROIDisplayColor = list(COLOURS[(number - 1) % len(COLOURS)])
    contours: list[Dataset] = []
    x_mm, y_mm = grid.centres_mm("x"), grid.centres_mm("y")
    images = np.array(reference.image_z_mm)
    for z_mm, plane in zip(grid.centres_mm("z"), grid.structure(name), strict=True):
        nearest = int(np.abs(images - z_mm).argmin())
        for outline in slice_outlines(plane, x_mm=x_mm, y_mm=y_mm):
            contour = _contour_item(outline, float(z_mm))
            contour.ContourNumber = str(len(contours) + 1)
            if abs(images[nearest] - z_mm) <= IMAGE_TOLERANCE_MM:
                contour.ContourImageSequence = [
                    reference_item(reference.image_class_uid, reference.image_instance_uids[nearest])
                ]
            contours.append(contour)
    if contours:
        item.ContourSequence = contours
    return item


def _contour_item(outline: NDArray[np.float64], z_mm: float) -> Dataset:
    z_text = number_text(z_mm)
    tolerance_mm = 0.01
    while True:
        texts = [
            text for x, y in outline for text in (decimal_text(x, decimals=2), decimal_text(y, decimals=2), z_text)
        ]
        if sum(map(len, texts)) + len(texts) <= LONGEST_CONTOUR_BYTES:
            break
        outline = thinned(outline, tolerance_mm=tolerance_mm)
        tolerance_mm *= 2.0
    item = Dataset()
    item.ContourGeometricType = "CLOSED_PLANAR"
    item.NumberOfContourPoints = str(len(outline))
    data = "\\".join(texts).encode("ascii")
    data += b" " * (len(data) % 2)
    tag = Tag("ContourData")  # encoded here, which saves an object for each number
    item[tag] = RawDataElement(tag, "DS", len(data), data, 0, is_implicit_VR=False, is_little_endian=True)
    item.set_original_encoding(False, True, "iso8859")
    return item

"""Whose anatomy a DICOM object speaks of, and which images it refers to.

A dose, plan or structure set has to name the study, the frame of reference and
the images it was computed on.  :class:`DicomReference` carries these names from
a CT series (:meth:`DicomReference.from_headers`), invents them for a phantom
(:func:`invented_reference`), or replaces all of them consistently
(:meth:`DicomReference.anonymized`).

Unique identifiers have the form ``2.25.<128 bit integer>`` (DICOM PS3.5 B.2).
The integer is a name-based UUID of version 8 (RFC 9562) made from SHA-256 of
the run's hash and the role of the object, so a repeated run writes the same
bytes.  No identifier is taken from the clock or from a random source.

The identity of a patient is kept out of ``repr`` so that it does not reach a
log, a message or a report by accident.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any
from uuid import UUID
from warnings import catch_warnings, simplefilter, warn

from dosekit.errors import DicomError, DosekitWarning

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

    from dosekit.grids.voxels import VoxelGrid

__all__ = [
    "CT_IMAGE_CLASS_UID",
    "DicomReference",
    "derived_uid",
    "invented_reference",
    "plan_uid",
    "reference_of",
    "structure_set_uid",
]

CT_IMAGE_CLASS_UID = "1.2.840.10008.5.1.4.1.1.2"
"""CT Image Storage (DICOM PS3.6, table A-1)."""

PATIENT_POSITIONS = ("HFS", "HFP", "FFS", "FFP", "HFDR", "HFDL", "FFDR", "FFDL")
"""Defined terms of Patient Position (DICOM PS3.3 C.7.3.1.1.2)."""


def derived_uid(run_hash: str, *roles: object) -> str:
    """Return the unique identifier that a run gives to one role.

    Parameters
    ----------
    run_hash : str
        Hash of the run record; any non-empty text.
    *roles : object
        What the identifier is for; the same roles give the same identifier.

    Returns
    -------
    str
        ``2.25.`` and a decimal integer, at most 44 characters.

    Examples
    --------
    >>> derived_uid("a run", "dose") == derived_uid("a run", "dose")
    True
    >>> derived_uid("a run", "dose") == derived_uid("a run", "plan")
    False
    """
    if not run_hash:
        raise DicomError("an empty run hash", remedy="give the hash of the run record")
    text = "\x1f".join([run_hash, *map(str, roles)])
    number = int.from_bytes(hashlib.sha256(text.encode()).digest()[:16], "big")
    number = number & ~(0xF << 76) | (8 << 76)  # version 8: made from a name by a rule of our own
    number = number & ~(0b11 << 62) | (0b10 << 62)  # the variant of RFC 9562
    return f"2.25.{UUID(int=number).int}"


def plan_uid(run_hash: str) -> str:
    """Return the identifier of the RT Ion Plan that a run writes."""
    return derived_uid(run_hash, "instance", "RT Ion Plan")


def structure_set_uid(run_hash: str) -> str:
    """Return the identifier of the structure set that a run writes."""
    return derived_uid(run_hash, "instance", "RT Structure Set")


@dataclass(frozen=True, kw_only=True, repr=False)
class DicomReference:
    """What DICOM objects written by a run refer to.

    Parameters
    ----------
    study_instance_uid, series_instance_uid, frame_of_reference_uid : str
        Study, image series and frame of reference.
    image_instance_uids : tuple of str
        Images of the series by increasing position along z.
    image_z_mm : tuple of float
        Positions of these images (patient z, mm); same length.
    image_class_uid : str
        Storage class of the images.
    structure_set_instance_uid : str or None
        Structure set that goes with the images.
    patient_name, patient_id, patient_birth_date, patient_sex : str
        Identity tags, copied into every object.
    study_id, study_date, study_time, accession_number, referring_physician_name : str
        Study tags, copied into every object.
    patient_position : str
        One of HFS, HFP, FFS, FFP and the decubitus terms.
    position_reference_indicator : str
        Anatomical landmark, or empty.
    identity_removed : bool
        True when the identity was replaced, here or by whoever gave the images away.
    made_by_run : bool
        True when the identifiers were made here, so that objects may be written under them.
    """

    study_instance_uid: str
    series_instance_uid: str
    frame_of_reference_uid: str
    image_instance_uids: tuple[str, ...] = ()
    image_z_mm: tuple[float, ...] = ()
    image_class_uid: str = CT_IMAGE_CLASS_UID
    structure_set_instance_uid: str | None = None
    patient_name: str = ""
    patient_id: str = ""
    patient_birth_date: str = ""
    patient_sex: str = ""
    study_id: str = ""
    study_date: str = ""
    study_time: str = ""
    accession_number: str = ""
    referring_physician_name: str = ""
    patient_position: str = "HFS"
    position_reference_indicator: str = ""
    identity_removed: bool = False
    made_by_run: bool = False

    def __post_init__(self) -> None:
        """Check what later objects rely on."""
        if len(self.image_instance_uids) != len(self.image_z_mm):
            raise DicomError(
                f"{len(self.image_instance_uids)} image identifiers for {len(self.image_z_mm)} positions",
                allowed="one position for each image",
            )
        if self.patient_position not in PATIENT_POSITIONS:
            raise DicomError(f"patient position {self.patient_position!r}", allowed=", ".join(PATIENT_POSITIONS))

    def __repr__(self) -> str:
        """Tell what is referred to without naming the patient."""
        removed = ", identity removed" if self.identity_removed else ""
        return f"DicomReference({len(self.image_instance_uids)} images, {self.patient_position}{removed})"

    @classmethod
    def from_headers(cls, images: Iterable[Dataset], *, structure_set: Dataset | None = None) -> DicomReference:
        """Take the names from the headers of one image series.

        Parameters
        ----------
        images : iterable of pydicom.Dataset
            Headers of the images (pixels are not looked at), in any order.
        structure_set : pydicom.Dataset, optional
            Structure set that goes with them.

        Returns
        -------
        DicomReference

        Raises
        ------
        DicomError
            If there is no image, or an image has no identifier or position.

        Warns
        -----
        DosekitWarning
            When an identifier breaks the rules of the standard: no valid object can hold it, so
            the reference has a hash of it instead.
        """
        headers = list(images)
        if not headers:
            raise DicomError("no image to refer to", allowed="one image or more")
        try:
            placed = sorted((float(head.ImagePositionPatient[2]), str(head.SOPInstanceUID)) for head in headers)
        except (AttributeError, TypeError, IndexError, ValueError) as error:
            raise DicomError("an image without identifier or position", allowed="CT images") from error
        first = headers[0]
        position = _tag(first, "PatientPosition")
        series = _valid_uid(_tag(first, "SeriesInstanceUID"), "series")
        structures = "" if structure_set is None else _tag(structure_set, "SOPInstanceUID")
        return cls(
            study_instance_uid=_valid_uid(_tag(first, "StudyInstanceUID"), "study", series),
            series_instance_uid=series,
            frame_of_reference_uid=_valid_uid(_tag(first, "FrameOfReferenceUID"), "frame", series),
            image_instance_uids=tuple(_valid_uid(uid, "image") for _, uid in placed),
            image_z_mm=tuple(z_mm for z_mm, _ in placed),
            image_class_uid=_tag(first, "SOPClassUID") or CT_IMAGE_CLASS_UID,
            structure_set_instance_uid=_valid_uid(structures, "structures") if structures else None,
            patient_name=_tag(first, "PatientName"),
            patient_id=_tag(first, "PatientID"),
            patient_birth_date=_tag(first, "PatientBirthDate"),
            patient_sex=_tag(first, "PatientSex"),
            study_id=_tag(first, "StudyID"),
            study_date=_tag(first, "StudyDate"),
            study_time=_tag(first, "StudyTime"),
            accession_number=_tag(first, "AccessionNumber"),
            referring_physician_name=_tag(first, "ReferringPhysicianName"),
            patient_position=position if position in PATIENT_POSITIONS else "HFS",
            position_reference_indicator=_tag(first, "PositionReferenceIndicator"),
            identity_removed=_tag(first, "PatientIdentityRemoved").upper() == "YES",
        )

    def with_structure_set(self, instance_uid: str | None) -> DicomReference:
        """Return a copy that refers to another structure set, or to none."""
        return replace(self, structure_set_instance_uid=instance_uid)

    def anonymized(self, run_hash: str) -> DicomReference:
        """Replace every identifier and drop every date, the same way for all objects of a run.

        Parameters
        ----------
        run_hash : str
            Hash of the run record.

        Returns
        -------
        DicomReference
            A reference whose identifiers are hashes of the old ones with the run's hash.
        """

        def other(uid: str) -> str:
            return derived_uid(run_hash, "replaces", uid)

        number = int(derived_uid(run_hash, "patient", self.patient_id, self.patient_name).split(".")[-1])
        pseudonym = f"ANON-{number % 10**10:010d}"
        structure_uid = self.structure_set_instance_uid
        return replace(
            self,
            study_instance_uid=other(self.study_instance_uid),
            series_instance_uid=other(self.series_instance_uid),
            frame_of_reference_uid=other(self.frame_of_reference_uid),
            image_instance_uids=tuple(map(other, self.image_instance_uids)),
            structure_set_instance_uid=None if structure_uid is None else other(structure_uid),
            patient_name=pseudonym,
            patient_id=pseudonym,
            patient_birth_date="",
            patient_sex="",
            study_id="",
            study_date="",
            study_time="",
            accession_number="",
            referring_physician_name="",
            position_reference_indicator="",
            identity_removed=True,
            made_by_run=True,
        )


def invented_reference(
    run_hash: str,
    *,
    name: str = "phantom",
    image_z_mm: Sequence[float] = (),
    patient_position: str = "HFS",
    frame_of_reference_uid: str | None = None,
) -> DicomReference:
    """Invent what the objects of a phantom refer to.

    Parameters
    ----------
    run_hash : str
        Hash of the run record.
    name : str
        Name of the phantom; becomes the patient's name and identifier.
    image_z_mm : sequence of float
        Positions of the images that stand for the phantom (mm).
    patient_position : str
        Patient position of the phantom.
    frame_of_reference_uid : str, optional
        Frame of reference if the phantom already has one.

    Returns
    -------
    DicomReference

    Examples
    --------
    >>> invented_reference("a run", image_z_mm=[0.0, 2.0])
    DicomReference(2 images, HFS, identity removed)
    """
    label = re.sub(r"[^A-Z0-9]+", "-", name.upper()).strip("-") or "PHANTOM"
    positions = tuple(float(z_mm) for z_mm in sorted(image_z_mm))
    return DicomReference(
        study_instance_uid=derived_uid(run_hash, "study"),
        series_instance_uid=derived_uid(run_hash, "series", "CT"),
        frame_of_reference_uid=frame_of_reference_uid or derived_uid(run_hash, "frame"),
        image_instance_uids=tuple(derived_uid(run_hash, "image", index) for index in range(len(positions))),
        image_z_mm=positions,
        patient_name=f"PHANTOM^{label}"[:64],
        patient_id=f"PHANTOM-{label}"[:64],
        patient_sex="O",
        patient_position=patient_position,
        identity_removed=True,
        made_by_run=True,
    )


def reference_of(grid: VoxelGrid, *, run_hash: str, anonymous: bool = False) -> DicomReference:
    """Return what the objects of a run on a volume refer to.

    Parameters
    ----------
    grid : VoxelGrid
        The volume: read from a CT series, or a phantom.
    run_hash : str
        Hash of the run record.
    anonymous : bool
        Replace the identifiers of a patient.

    Returns
    -------
    DicomReference
        The CT's; invented from the volume's name and slices for a phantom.
    """
    found: Any = grid.dicom_reference
    if found is None:
        return invented_reference(
            run_hash,
            name=grid.name or "phantom",
            image_z_mm=grid.centres_mm("z").tolist(),
            patient_position=grid.patient_position,
            frame_of_reference_uid=grid.frame_of_reference_uid,
        )
    reference = (
        found
        if isinstance(found, DicomReference)
        else DicomReference.from_headers(found.images, structure_set=found.structure_set)
    )
    return reference.anonymized(run_hash) if anonymous else reference


def _valid_uid(uid: str, *roles: str) -> str:
    """Return an identifier, or a hash of it when it breaks DICOM PS3.5 section 9."""
    if len(uid) <= 64 and re.fullmatch(r"(0|[1-9]\d*)(\.(0|[1-9]\d*))*", uid):
        return uid
    if uid:
        warn(
            f"a {roles[0]} identifier of the CT breaks the rules of DICOM; outputs refer to a replacement",
            DosekitWarning,
            stacklevel=3,
        )
    return derived_uid("replaces", uid, *roles)


def _tag(header: Dataset, keyword: str) -> str:
    """Return a header value as plain text, empty when absent or damaged."""
    from pydicom import config

    with catch_warnings(), config.disable_value_validation():
        simplefilter("ignore")  # such a warning would show the value
        try:
            value = header.get(keyword, None)
        except (ValueError, TypeError, LookupError, AttributeError, NotImplementedError):
            return ""
        return "" if value is None else str(value).strip()

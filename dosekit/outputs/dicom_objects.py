"""What all DICOM objects have in common: general modules, number texts, writing at one stroke.

Every object is written in Explicit VR Little Endian, in UTF-8, without private
tags, says who made it (Manufacturer and SoftwareVersions) and carries the
research-only wording.  A file appears complete or not at all.

Source of modules and lengths: DICOM PS3.3 and PS3.5.
"""

from __future__ import annotations

import os
import re
from decimal import ROUND_CEILING, Decimal
from io import BytesIO
from pathlib import Path
from typing import TYPE_CHECKING

from pydicom.dataset import Dataset, FileDataset, FileMetaDataset
from pydicom.uid import UID, ExplicitVRLittleEndian
from pydicom.valuerep import format_number_as_ds

from dosekit import __version__
from dosekit.caution import BANNER, CAUTION
from dosekit.errors import DicomError
from dosekit.outputs.dicom_reference import derived_uid
from dosekit.outputs.files import write_bytes

if TYPE_CHECKING:
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = [
    "add_frame_of_reference",
    "caution_text",
    "clip_text",
    "decimal_text",
    "number_text",
    "number_text_not_below",
    "object_start",
    "reference_item",
    "save_object",
    "split_moment",
]

TEXT_LENGTHS = {"SH": 16, "LO": 64, "ST": 1024, "LT": 10240, "PN": 64}
"""Longest value of text representations (DICOM PS3.5 table 6.2-1)."""

IMPLEMENTATION_CLASS_UID = derived_uid("dosekit", "implementation class")


def clip_text(text: str, representation: str) -> str:
    r"""Make a text fit a value representation: no control characters, no backslash, not too long.

    Parameters
    ----------
    text : str
        Any text.
    representation : str
        SH, LO, ST, LT or PN.

    Returns
    -------
    str

    Examples
    --------
    >>> clip_text("a\\b", "SH")
    'a/b'
    """
    single_line = representation not in {"ST", "LT"}
    cleaned = re.sub(r"[\x00-\x1f\x7f]" if single_line else r"[\x00-\x09\x0b-\x1f\x7f]", " ", text)
    cleaned = cleaned.replace("\\", "/") if single_line else cleaned
    return cleaned.strip()[: TEXT_LENGTHS[representation]].rstrip()


def number_text(value: float) -> str:
    """Return a number as a decimal string of at most 16 characters, as exact as these allow.

    Examples
    --------
    >>> number_text(2 / 3)
    '0.66666666666667'
    >>> number_text(-2.0)
    '-2'
    """
    text = format_number_as_ds(float(value))
    return text.removesuffix(".0")


def decimal_text(value: float, *, decimals: int) -> str:
    """Return a number with a fixed count of decimals, trailing zeros removed.

    Examples
    --------
    >>> decimal_text(-0.001, decimals=2), decimal_text(12.5, decimals=3)
    ('0', '12.5')
    """
    text = f"{value:.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text in {"-0", ""} else text


def number_text_not_below(value: float) -> str:
    """Return the smallest number of ten significant digits that is not below ``value``, as a decimal string.

    Used where rounding down would overflow an integer range.

    Parameters
    ----------
    value : float
        Positive number.

    Returns
    -------
    str
        At most 16 characters.

    Examples
    --------
    >>> number_text_not_below(1 / 3)
    '3.333333334e-1'
    """
    exact = Decimal(value)
    step = Decimal(1).scaleb(exact.adjusted() - 9)
    return f"{exact.quantize(step, rounding=ROUND_CEILING):.9e}".replace("E", "e")


def object_start(
    class_uid: str,
    instance_uid: str,
    *,
    modality: str,
    reference: DicomReference,
    run_hash: str,
    created: str,
    series_role: str,
    series_number: int,
    instance_number: int | None,
    description: str,
) -> FileDataset:
    """Begin a DICOM object with the modules that all objects share.

    Parameters
    ----------
    class_uid, instance_uid : str
        Storage class and identifier of the object.
    modality : str
        CT, RTSTRUCT, RTPLAN, RTDOSE or OT.
    reference : DicomReference
        Patient, study and frame of reference.
    run_hash : str
        Hash of the run record.
    created : str
        Moment of the run as ``YYYY-MM-DD`` or ``YYYY-MM-DDTHH:MM:SS``, or empty for none.
    series_role : str
        What tells this series from the others of the run.
    series_number : int
        Series number.
    instance_number : int or None
        Instance number; None leaves the tag out.
    description : str
        What the series holds; written after the research-only wording.

    Returns
    -------
    pydicom.FileDataset
        Without a frame of reference and without content.
    """
    date, time = split_moment(created)
    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = UID(class_uid)
    meta.MediaStorageSOPInstanceUID = UID(instance_uid)
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    meta.ImplementationClassUID = UID(IMPLEMENTATION_CLASS_UID)
    meta.ImplementationVersionName = clip_text(f"DOSEKIT_{__version__}", "SH")
    head = FileDataset("", {}, file_meta=meta, preamble=b"\0" * 128)
    head.SpecificCharacterSet = "ISO_IR 192"
    head.SOPClassUID = UID(class_uid)
    head.SOPInstanceUID = UID(instance_uid)
    if date:
        head.InstanceCreationDate, head.InstanceCreationTime = date, time
    head.Modality = modality
    head.Manufacturer = "dosekit"
    head.ManufacturerModelName = "dosekit"
    head.SoftwareVersions = __version__
    head.InstitutionName = ""
    head.SeriesDescription = clip_text(f"{BANNER}: {description}", "LO")
    head.SeriesInstanceUID = UID(derived_uid(run_hash, "series", series_role))
    head.SeriesNumber = str(series_number)
    if instance_number is not None:
        head.InstanceNumber = str(instance_number)
    _add_patient_and_study(head, reference)
    return head


def _add_patient_and_study(head: Dataset, reference: DicomReference) -> None:
    """Copy identity and study tags, repaired where a source file broke the rules."""
    head.PatientName = clip_text(reference.patient_name, "PN")
    head.PatientID = clip_text(reference.patient_id, "LO")
    head.PatientBirthDate = _date_or_empty(reference.patient_birth_date)
    head.PatientSex = reference.patient_sex if reference.patient_sex in {"M", "F", "O"} else ""
    head.StudyInstanceUID = UID(reference.study_instance_uid)
    head.StudyDate = _date_or_empty(reference.study_date)
    head.StudyTime = _time_or_empty(reference.study_time)
    head.StudyID = clip_text(reference.study_id, "SH")
    head.AccessionNumber = clip_text(reference.accession_number, "SH")
    head.ReferringPhysicianName = clip_text(reference.referring_physician_name, "PN")
    if reference.identity_removed:
        head.PatientIdentityRemoved = "YES"
        head.DeidentificationMethod = (
            "identifiers invented or replaced by hashes; dates removed"
            if reference.made_by_run
            else "as the images that are referred to say"
        )


def add_frame_of_reference(head: Dataset, reference: DicomReference) -> None:
    """Add the frame of reference."""
    head.FrameOfReferenceUID = UID(reference.frame_of_reference_uid)
    head.PositionReferenceIndicator = clip_text(reference.position_reference_indicator, "LO")


def caution_text(text: str = "") -> str:
    """Return the full research-only wording followed by a text of the object's own."""
    return f"{CAUTION}\n{text}" if text else CAUTION


def reference_item(class_uid: str, instance_uid: str) -> Dataset:
    """Return a sequence item that refers to one object."""
    item = Dataset()
    item.ReferencedSOPClassUID = UID(class_uid)
    item.ReferencedSOPInstanceUID = UID(instance_uid)
    return item


def split_moment(created: str) -> tuple[str, str]:
    """Split an ISO moment into DICOM date and time; both empty when there is none.

    Examples
    --------
    >>> split_moment("2026-02-03T04:05:06")
    ('20260203', '040506')
    """
    if not created:
        return "", ""
    found = re.match(r"^(\d{4})-(\d\d)-(\d\d)(?:[T ](\d\d):(\d\d):(\d\d))?", created)
    if found is None:
        raise DicomError(f"moment {created!r}", allowed="YYYY-MM-DD or YYYY-MM-DDTHH:MM:SS, or empty")
    parts = found.groups()
    return "".join(parts[:3]), "".join(part or "00" for part in parts[3:])


def save_object(head: FileDataset, path: str | os.PathLike[str]) -> Path:
    """Write an object so that it appears complete or not at all.

    Parameters
    ----------
    head : pydicom.FileDataset
        The object.
    path : path
        Where it goes; an existing file of that name is replaced.

    Returns
    -------
    pathlib.Path
        The path that was written.

    Raises
    ------
    OutputError
        If the file cannot be written; nothing is left behind then.
    """
    stream = BytesIO()
    head.save_as(stream, enforce_file_format=True)
    return write_bytes(Path(path), stream.getvalue())


def _date_or_empty(text: str) -> str:
    return text if re.fullmatch(r"\d{8}", text) else ""


def _time_or_empty(text: str) -> str:
    return text if re.fullmatch(r"\d{2}(\d{2}(\d{2}(\.\d{1,6})?)?)?", text) else ""

"""Figure pages as DICOM Secondary Capture, for archives that hold nothing but images.

The picture is stored as 8 bit red, green, blue without compression.  Figures of a
run carry no identity, so nothing is burned in; the object itself belongs to
the study it refers to.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from pydicom.uid import SecondaryCaptureImageStorage

from dosekit.errors import InputError
from dosekit.outputs.dicom_objects import caution_text, clip_text, object_start, save_object
from dosekit.outputs.dicom_reference import derived_uid

if TYPE_CHECKING:
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["write_secondary_capture"]


def write_secondary_capture(
    path: str | os.PathLike[str],
    png: str | os.PathLike[str],
    *,
    reference: DicomReference,
    run_hash: str,
    label: str = "",
    instance_number: int = 1,
    created: str = "",
) -> Path:
    """Write a picture as a Secondary Capture object.

    Parameters
    ----------
    path : path
        File to write.
    png : path
        The picture; what is transparent becomes white.
    reference : DicomReference
        Study it belongs to.
    run_hash : str
        Hash of the run record.
    label : str
        What the picture shows; the name of its file when not given. Pictures of one run need different labels.
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
        If the picture cannot be read.
    OutputError
        If the file cannot be written.
    """
    from PIL import Image, UnidentifiedImageError

    try:
        with Image.open(png) as picture:
            painted = picture.convert("RGBA")
            page = Image.new("RGBA", painted.size, "white")
            page.alpha_composite(painted)
            pixels = np.asarray(page.convert("RGB"), dtype=np.uint8)
    except (OSError, UnidentifiedImageError) as error:
        raise InputError(f"{Path(png).name} is not a picture that can be read", allowed="PNG files") from error
    label = label or Path(png).stem
    head = object_start(
        SecondaryCaptureImageStorage,
        derived_uid(run_hash, "instance", "figure", label),
        modality="OT",
        reference=reference,
        run_hash=run_hash,
        created=created,
        series_role="figures",
        series_number=5,
        instance_number=instance_number,
        description="figures",
    )
    head.ConversionType = "WSD"
    head.BodyPartExamined = "WHOLEBODY"
    head.PatientOrientation = ""
    head.BurnedInAnnotation = "NO"
    head.ImageType = ["DERIVED", "SECONDARY"]
    head.ImageComments = clip_text(caution_text(label), "LT")
    head.SamplesPerPixel = 3
    head.PhotometricInterpretation = "RGB"
    head.PlanarConfiguration = 0
    head.Rows, head.Columns = pixels.shape[:2]
    head.BitsAllocated, head.BitsStored, head.HighBit = 8, 8, 7
    head.PixelRepresentation = 0
    data = pixels.tobytes()
    head.add_new("PixelData", "OB", data + b"\0" * (len(data) % 2))
    return save_object(head, path)

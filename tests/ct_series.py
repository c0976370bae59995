"""Small CT series and structure sets made for the tests; invented, no patient behind them."""

from __future__ import annotations

import numpy as np
from pydicom.dataset import Dataset, FileDataset, FileMetaDataset
from pydicom.uid import ExplicitVRLittleEndian, ImplicitVRLittleEndian

CT = "1.2.840.10008.5.1.4.1.1.2"
RTSTRUCT = "1.2.840.10008.5.1.4.1.1.481.3"
FRAME = "2.25.1001"
SERIES = "2.25.2001"
STUDY = "2.25.3001"

# Rows and columns of the image as a scanner sends them for each patient position: unit vectors along a row and
# along a column in LPS. Head or feet first does not turn the image against the patient; prone does.
ORIENTATIONS = {
    "HFS": (1, 0, 0, 0, 1, 0),
    "FFS": (1, 0, 0, 0, 1, 0),
    "HFP": (-1, 0, 0, 0, -1, 0),
    "FFP": (-1, 0, 0, 0, -1, 0),
}


def slice_dataset(
    hu,
    *,
    position,
    orientation=(1, 0, 0, 0, 1, 0),
    spacing=(1.0, 1.0),
    number=1,
    slope=1.0,
    intercept=-1024.0,
    signed=False,
    series=SERIES,
    frame=FRAME,
    patient_position="HFS",
    padding=None,
    **extra,
):
    """One CT slice; HU in [row, column]; spacing as DICOM has it (between rows, between columns)."""
    stored = np.rint((np.asarray(hu, dtype=float) - intercept) / slope)
    kind = np.int16 if signed else np.uint16
    stored = stored.astype(kind)
    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = CT
    meta.MediaStorageSOPInstanceUID = f"{series}.{number}"
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    ds = FileDataset(None, {}, file_meta=meta, preamble=b"\0" * 128)
    ds.SOPClassUID = CT
    ds.SOPInstanceUID = f"{series}.{number}"
    ds.StudyInstanceUID = STUDY
    ds.SeriesInstanceUID = series
    ds.SeriesNumber = 7
    ds.FrameOfReferenceUID = frame
    ds.Modality = "CT"
    ds.ImageType = ["ORIGINAL", "PRIMARY", "AXIAL"]
    ds.PatientName = "Planted^Name"
    ds.PatientID = "PLANTED-ID"
    ds.PatientPosition = patient_position
    ds.InstanceNumber = number
    ds.ImagePositionPatient = [f"{v:.6f}" for v in position]
    ds.ImageOrientationPatient = [f"{v:.10f}"[:16] for v in orientation]
    ds.PixelSpacing = [f"{v:.6f}" for v in spacing]
    ds.SliceThickness = "3"
    ds.Rows, ds.Columns = stored.shape
    ds.SamplesPerPixel = 1
    ds.PhotometricInterpretation = "MONOCHROME2"
    ds.BitsAllocated = ds.BitsStored = 16
    ds.HighBit = 15
    ds.PixelRepresentation = int(signed)
    ds.RescaleSlope = f"{slope:g}"
    ds.RescaleIntercept = f"{intercept:g}"
    if padding is not None:
        ds.add_new(0x00280120, "SS" if signed else "US", padding)
    for keyword, value in extra.items():
        setattr(ds, keyword, value)
    ds.PixelData = stored.tobytes()
    return ds


def save(ds, path):
    """Write a data set made here."""
    ds.save_as(path, enforce_file_format=True)
    return path


def write_series(
    folder,
    volume_hu,
    *,
    origin=(0.0, 0.0, 0.0),
    spacing=(1.0, 1.5, 2.0),
    patient_position="HFS",
    z=None,
    shuffle=True,
    **options,
):
    """Write a volume [z, y, x] on LPS axes as the scanner of that patient position would; return the slices."""
    folder.mkdir(parents=True, exist_ok=True)
    orientation = ORIENTATIONS[patient_position]
    nz, ny, nx = volume_hu.shape
    flip_x, flip_y = orientation[0] < 0, orientation[4] < 0
    heights = origin[2] + spacing[2] * np.arange(nz) if z is None else np.asarray(z)
    made = []
    numbers = list(range(1, nz + 1))
    if patient_position.startswith("FF"):
        numbers.reverse()
    for k in range(nz):
        image = volume_hu[k]
        x0 = origin[0] + (spacing[0] * (nx - 1) if flip_x else 0.0)
        y0 = origin[1] + (spacing[1] * (ny - 1) if flip_y else 0.0)
        image = image[:: -1 if flip_y else 1, :: -1 if flip_x else 1]
        ds = slice_dataset(
            image,
            position=(x0, y0, heights[k]),
            orientation=orientation,
            spacing=(spacing[1], spacing[0]),
            number=numbers[k],
            patient_position=patient_position,
            **options,
        )
        name = f"{(numbers[k] * 7919) % 1000:03d}_{numbers[k]}.dcm" if shuffle else f"{k:04d}.dcm"
        save(ds, folder / name)
        made.append(ds)
    return made


def odd_volume(nz=5, ny=6, nx=7, *, seed=3):
    """A volume in which every voxel differs, so that any flip or swap shows."""
    generator = np.random.default_rng(seed)
    values = generator.permutation(nz * ny * nx) - 900
    return values.reshape(nz, ny, nx).astype(np.int16)


def structure_dataset(
    rois, *, frame=FRAME, top_frame=True, listed_frame=True, own_frame=True, types=None, references=()
):
    """A structure set; rois maps a name to a list of contours, each a list of (x, y, z)."""
    meta = FileMetaDataset()
    meta.MediaStorageSOPClassUID = RTSTRUCT
    meta.MediaStorageSOPInstanceUID = "2.25.4001"
    meta.TransferSyntaxUID = ImplicitVRLittleEndian
    ds = FileDataset(None, {}, file_meta=meta, preamble=b"\0" * 128)
    ds.SOPClassUID = RTSTRUCT
    ds.SOPInstanceUID = "2.25.4001"
    ds.StudyInstanceUID = STUDY
    ds.SeriesInstanceUID = "2.25.4002"
    ds.Modality = "RTSTRUCT"
    ds.PatientName = "Planted^Name"
    if top_frame:
        ds.FrameOfReferenceUID = frame
    if listed_frame:
        item = Dataset()
        item.FrameOfReferenceUID = frame
        series = Dataset()
        series.SeriesInstanceUID = SERIES
        series.ContourImageSequence = []
        for uid in references:
            image = Dataset()
            image.ReferencedSOPClassUID = CT
            image.ReferencedSOPInstanceUID = uid
            series.ContourImageSequence.append(image)
        study = Dataset()
        study.RTReferencedSeriesSequence = [series]
        item.RTReferencedStudySequence = [study]
        ds.ReferencedFrameOfReferenceSequence = [item]
    ds.StructureSetROISequence = []
    ds.ROIContourSequence = []
    ds.RTROIObservationsSequence = []
    for number, (name, contours) in enumerate(rois.items(), start=1):
        roi = Dataset()
        roi.ROINumber = number
        roi.ROIName = name
        if own_frame:
            roi.ReferencedFrameOfReferenceUID = frame
        ds.StructureSetROISequence.append(roi)
        drawn = Dataset()
        drawn.ReferencedROINumber = number
        drawn.ContourSequence = []
        for points in contours:
            contour = Dataset()
            contour.ContourGeometricType = "CLOSED_PLANAR" if len(points) > 1 else "POINT"
            contour.NumberOfContourPoints = len(points)
            contour.ContourData = [f"{float(v):.4f}" for point in points for v in point]
            drawn.ContourSequence.append(contour)
        ds.ROIContourSequence.append(drawn)
        seen = Dataset()
        seen.ObservationNumber = number
        seen.ReferencedROINumber = number
        seen.RTROIInterpretedType = (types or {}).get(name, "")
        ds.RTROIObservationsSequence.append(seen)
    return ds


def rectangle(x0, y0, x1, y1, z):
    """Corners of a rectangle in a plane of constant z."""
    return [(x0, y0, z), (x1, y0, z), (x1, y1, z), (x0, y1, z)]

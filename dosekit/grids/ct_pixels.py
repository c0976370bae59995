"""CT numbers of a sorted stack: pixels, slope and intercept, padding.

HU = slope * stored + intercept, slice by slice, for signed and unsigned pixels. Whole slopes and intercepts keep
whole numbers (int16, or int32 where needed); others give float32. Padding (the value the header names, and anything
below -1024 HU that scanners write outside their circle) is marked and left in the HU as it was read.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import DicomError
from dosekit.grids.dicom_files import Header, guarded, in_threads, quiet_decoder, read_file
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pydicom.dataset import Dataset

    from dosekit.grids.ct_geometry import Stack

__all__ = ["PADDING_BELOW_HU", "read_pixels"]

PADDING_BELOW_HU = -1024
"""Nothing a scanner measures lies lower; what does is padding."""

_BITS = (8, 16, 32)
_UNITS = ("HU", "US")  # US: unspecified, as older scanners write (DICOM PS3.3 C.11.1.1.2)
_LARGEST_SCALE = 1.0e6


def read_pixels(
    stack: Stack, *, progress: Callable[[int, int], None] | None = None
) -> tuple[NDArray[Any], NDArray[np.bool_] | None]:
    """Read the CT numbers of a stack.

    Parameters
    ----------
    stack : Stack
        The sorted slices.
    progress : callable, optional
        Told how many slices of how many are done.

    Returns
    -------
    tuple
        HU [slice, row, column] (int16, int32 or float32), and a mask of padding inside the HU range of tissue that
        the header declares (None when there is none).

    Raises
    ------
    SizeError
        When the volume would not fit into memory; asked first.
    DicomError
        When pixels are missing, cut short, of an unknown kind or compressed without a decoder.
    """
    scales = [_scale(header) for header in stack.headers]
    kinds = [_check_kind(header) for header in stack.headers]
    whole = all(slope == round(slope) and intercept == round(intercept) for slope, intercept in scales)
    widest = _widest(scales, kinds)
    shape = (stack.count, stack.rows, stack.columns)
    check_memory(math.prod(shape) * 28.0, what=f"a CT of {shape[0]} x {shape[1]} x {shape[2]} voxels")
    slices: list[NDArray[Any]] = [np.empty((0, 0))] * stack.count
    padded: list[NDArray[np.bool_] | None] = [None] * stack.count

    def fill(number: int) -> None:
        slope, intercept = scales[number]
        stored, padding = _stored_pixels(stack.headers[number], stack)
        slices[number] = _scaled(stored, slope, intercept, whole=whole and widest < 2**31)
        if padding is not None and padding * slope + intercept > -900.0:
            padded[number] = _border_padding(stored, padding)

    with quiet_decoder():
        in_threads(fill, range(stack.count), progress=progress)
    values = np.empty(shape, dtype=np.result_type(*{one.dtype for one in slices}))
    for number, one in enumerate(slices):
        values[number] = one
        slices[number] = np.empty((0, 0))
    if all(mask is None or not mask.any() for mask in padded):
        return values, None
    marked = np.zeros(shape, dtype=bool)
    for number, mask in enumerate(padded):
        if mask is not None:
            marked[number] = mask
    return values, marked


def _scale(header: Header) -> tuple[float, float]:
    """Return slope and intercept."""
    with guarded(header.name):
        said = [header.dataset.get(keyword) for keyword in ("RescaleSlope", "RescaleIntercept")]
        if any(value is None or value == "" for value in said):
            raise DicomError(
                f"{header.name} has no slope or no intercept, so its CT numbers are unknown",
                allowed="CT images with RescaleSlope and RescaleIntercept",
                remedy="get the original series",
            )
        slope, intercept = (float(value) for value in said)
        unit = str(header.dataset.get("RescaleType") or "HU").strip().upper()
        if unit not in _UNITS:
            raise DicomError(
                f"{header.name} holds {unit[:20]!r}, not CT numbers",
                allowed="Hounsfield units (RescaleType HU, or none named)",
                remedy="choose the series in Hounsfield units",
            )
    sane = math.isfinite(slope) and math.isfinite(intercept)
    if not sane or not 0.0 < slope < _LARGEST_SCALE or abs(intercept) > _LARGEST_SCALE:
        raise DicomError(
            f"{header.name} has slope {slope:g} and intercept {intercept:g}",
            allowed="a slope above 0 and finite numbers",
            remedy="the file is damaged; get it again",
        )
    return slope, intercept


def _check_kind(header: Header) -> tuple[int, bool]:
    """Check that the pixels are plain grey values; return bits and sign."""
    dataset = header.dataset
    with guarded(header.name):
        samples = dataset.get("SamplesPerPixel", 1)
        meaning = str(dataset.get("PhotometricInterpretation", "MONOCHROME2"))
        bits, used = dataset.get("BitsAllocated"), dataset.get("BitsStored")
        sign = dataset.get("PixelRepresentation", 0)
        frames = int(dataset.get("NumberOfFrames", 1) or 1)
        high = dataset.get("HighBit", (used or 1) - 1)
        right = samples == 1 and meaning == "MONOCHROME2" and bits in _BITS and sign in {0, 1} and frames == 1
        right = right and isinstance(used, int) and 1 <= used <= bits and high == used - 1
    if not right:
        raise DicomError(
            f"{header.name} holds {samples} x {meaning[:20]} pixels, {used} of {bits} bits (high bit {high}), "
            f"{frames} frames",
            allowed="one MONOCHROME2 frame of 8, 16 or 32 bits",
            remedy="the file is damaged or no plain CT slice",
        )
    return int(used), bool(sign)


def _widest(scales: list[tuple[float, float]], kinds: list[tuple[int, bool]]) -> float:
    """Return the largest amount that HU may have."""
    reach = 0.0
    for (slope, intercept), (bits, signed) in zip(scales, kinds, strict=True):
        reach = max(reach, 2.0 ** (bits - 1 if signed else bits) * slope + abs(intercept))
    return reach


def _scaled(stored: NDArray[Any], slope: float, intercept: float, *, whole: bool) -> NDArray[Any]:
    """Return HU in the smallest type that holds them: int16, int32 or float32."""
    if not whole:
        return (stored * np.float64(slope) + intercept).astype(np.float32)
    lowest, highest = (int(v) * int(slope) + int(intercept) for v in (stored.min(), stored.max()))
    limits = np.iinfo(np.int16)
    scaled = stored.astype(np.int32)
    if slope != 1:
        scaled *= np.int32(slope)
    scaled += np.int32(intercept)
    return scaled.astype(np.int16) if limits.min <= lowest and highest <= limits.max else scaled


def _stored_pixels(header: Header, stack: Stack) -> tuple[NDArray[Any], int | None]:
    """Return the stored values of one slice and its padding value."""
    dataset = read_file(header.path, pixels=True)
    if dataset is None:
        raise DicomError(f"{header.name} is not DICOM any more", remedy="do not change files while they are read")
    with guarded(header.name):
        if "PixelData" not in dataset:
            raise DicomError(f"{header.name} has no pixels", allowed="CT images", remedy="get the file again")
        syntax = dataset.file_meta.get("TransferSyntaxUID")
        if syntax is not None and syntax.is_compressed:
            pixels = _decompressed(header, dataset)
        else:
            pixels = _plain(header, dataset, stack)
        if pixels.shape != (stack.rows, stack.columns):
            raise DicomError(f"{header.name} unpacks to {pixels.shape} pixels",
                             allowed=f"{stack.rows} x {stack.columns}", remedy="get the file again")  # fmt: skip
        padding = dataset.get("PixelPaddingValue")
        if not isinstance(padding, int):
            return pixels, None
        if pixels.dtype.kind == "i" and padding > np.iinfo(pixels.dtype).max:
            padding -= 1 << (8 * pixels.dtype.itemsize)
        return pixels, int(padding)


def _plain(header: Header, dataset: Dataset, stack: Stack) -> NDArray[Any]:
    """Return uncompressed pixels straight from the file's bytes."""
    bits, used = int(dataset.BitsAllocated), int(dataset.BitsStored)
    signed = int(dataset.get("PixelRepresentation", 0)) == 1
    little = dataset.original_encoding[1] is not False
    kind = np.dtype(f"{'<' if little else '>'}{'i' if signed else 'u'}{bits // 8}")
    wanted = stack.rows * stack.columns * kind.itemsize
    raw = dataset.PixelData
    if not wanted <= len(raw) <= wanted + 1 + wanted % 2:
        raise DicomError(
            f"{header.name} holds {len(raw)} bytes of pixels",
            allowed=f"{wanted} bytes for {stack.rows} x {stack.columns} pixels of {bits} bits",
            remedy="the file is cut short or damaged; get it again",
        )
    if not little and bits == 8 and dataset["PixelData"].VR == "OW":
        raise DicomError(f"{header.name} has 8-bit pixels in big-endian words", remedy="convert the file")
    values: NDArray[Any] = np.frombuffer(raw, dtype=kind, count=stack.rows * stack.columns)
    values = values.reshape(stack.rows, stack.columns)
    if used < bits:
        values = values.astype(kind.newbyteorder("="))
        if signed:  # bits above the highest stored one carry no meaning
            values = (values << (bits - used)) >> (bits - used)
        else:
            values = values & values.dtype.type((1 << used) - 1)
    return values


def _decompressed(header: Header, dataset: Dataset) -> NDArray[Any]:
    """Return compressed pixels, or say which decoder is missing."""
    syntax = dataset.file_meta.TransferSyntaxUID
    try:
        pixels: NDArray[Any] = dataset.pixel_array
    except (MemoryError, RecursionError):
        raise
    except Exception as problem:
        reason = " ".join(str(problem).split())[:200]
        missing = "missing dependencies" in reason or "plugin" in reason or isinstance(problem, NotImplementedError)
        raise DicomError(
            f"{header.name} is compressed as {syntax.name} ({syntax}) and cannot be unpacked: {reason}",
            allowed="uncompressed or RLE slices, and others whose decoder is installed",
            remedy="install a decoder for pydicom (pylibjpeg, python-gdcm) or convert the series to uncompressed"
            if missing
            else "the pixels are damaged; get the file again",
        ) from None
    return pixels


def _border_padding(stored: NDArray[Any], padding: int) -> NDArray[np.bool_] | None:
    """Return the pixels with the padding value that hang together with the border.

    A padding value that is also a possible CT number of tissue must not punch holes into the body, so only what is
    connected to the edge of the slice counts.
    """
    from scipy import ndimage

    same = stored == padding
    if not same.any():
        return None
    labels, _ = ndimage.label(same)
    edge = np.unique(np.concatenate([labels[0], labels[-1], labels[:, 0], labels[:, -1]]))
    marked: NDArray[np.bool_] = np.isin(labels, edge[edge > 0])
    return marked

"""Where do the slices lie? Sorting, checks and the lattice of one CT series.

Slices are sorted by their position along the normal of the image plane (DICOM PS3.3 C.7.6.2.1.1), never by name or
number. What is tolerated is written here once: positions may jitter around an even lattice by `JITTER_SHARE` of the
spacing; a volume may be skewed or rotated against the patient axes by at most `SKEW_LIMIT_MM` at its corners.
Anything beyond is refused with what was found, and can be resampled where that is honest.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import DicomError, GeometryError, SeriesError
from dosekit.grids.dicom_files import CT_STORAGE, Header, guarded, text_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["JITTER_SHARE", "SKEW_LIMIT_MM", "Stack", "choose_series", "sort_stack"]

JITTER_SHARE = 0.02
"""How far a slice may lie from an even lattice, as a share of the spacing (rounded decimals in real archives)."""
SKEW_LIMIT_MM = 0.1
"""How far a corner of the volume may lie from a lattice along the patient axes, mm."""

_DOUBLE_MM = 0.01
_SPACING_RANGE_MM = (0.01, 50.0)
_LARGEST_POSITION_MM = 1.0e5
_MOST_PIXELS = 16384
_POSITIONS = ("HFS", "FFS", "HFP", "FFP", "HFDR", "HFDL", "FFDR", "FFDL")


@dataclass(frozen=True)
class Stack:
    """The slices of one series, sorted and checked.

    Parameters
    ----------
    headers : tuple of Header
        By increasing position along the normal.
    rows, columns : int
        Pixels of a slice.
    across_mm, down_mm : float
        Distance between columns and between rows, mm.
    across, down : ndarray
        Unit vectors along a row and along a column, LPS.
    positions_mm : ndarray
        Centre of the first pixel of each slice, [slice, 3], LPS.
    frame_of_reference_uid : str
        Frame of reference; empty when the files name none.
    patient_position : str
        DICOM patient position; empty when absent.
    """

    headers: tuple[Header, ...]
    rows: int
    columns: int
    across_mm: float
    down_mm: float
    across: NDArray[np.float64] = field(repr=False)
    down: NDArray[np.float64] = field(repr=False)
    positions_mm: NDArray[np.float64] = field(repr=False)
    frame_of_reference_uid: str = field(repr=False)
    patient_position: str

    @property
    def count(self) -> int:
        """Return the number of slices."""
        return len(self.headers)

    @property
    def along(self) -> NDArray[np.float64]:
        """Return the unit vector from the first slice to the last."""
        line = self.positions_mm[-1] - self.positions_mm[0]
        unit: NDArray[np.float64] = line / np.linalg.norm(line)
        return unit

    @property
    def offsets_mm(self) -> NDArray[np.float64]:
        """Return how far each slice lies from the first, along the line of slices, mm."""
        offsets: NDArray[np.float64] = (self.positions_mm - self.positions_mm[0]) @ self.along
        return offsets

    @property
    def spacing_mm(self) -> float:
        """Return the mean distance between slices along the line of slices, mm."""
        return float(self.offsets_mm[-1]) / (self.count - 1)

    @property
    def tilt_deg(self) -> float:
        """Return the angle between the normal of the slices and the line of slices, degrees."""
        return math.degrees(math.acos(min(1.0, abs(float(np.cross(self.across, self.down) @ self.along)))))

    @property
    def rotation_deg(self) -> float:
        """Return the largest angle between an image axis and the nearest patient axis, degrees."""
        largest = [float(np.abs(v).max()) for v in (self.across, self.down)]
        return max(math.degrees(math.acos(min(1.0, cosine))) for cosine in largest)

    def unevenness(self) -> str:
        """Say what is wrong with the distances between slices.

        Returns
        -------
        str
            Empty when they are even within `JITTER_SHARE`; otherwise a sentence that names the slices.
        """
        offsets = self.offsets_mm
        step = self.spacing_mm
        worst = float(np.abs(offsets - step * np.arange(self.count)).max())
        if worst <= JITTER_SHARE * step:
            return ""
        gaps = np.diff(offsets)
        usual = float(np.median(gaps))
        places = np.flatnonzero(gaps > (1.0 + 2 * JITTER_SHARE) * usual)
        whole = np.abs(gaps / usual - np.round(gaps / usual)) <= 2 * JITTER_SHARE * np.round(gaps / usual)
        z = self.positions_mm[:, int(np.abs(self.along).argmax())]
        if places.size and bool(whole.all()) and places.size <= self.count // 2:
            lost = [f"{round(gaps[i] / usual) - 1} between {z[i]:.2f} and {z[i + 1]:.2f} mm" for i in places[:5]]
            more = f" and {places.size - 5} more gaps" if places.size > 5 else ""
            return f"slices are missing: {', '.join(lost)}{more} (usual distance {usual:.3f} mm)"
        return f"uneven slice spacing: {gaps.min():.3f} to {gaps.max():.3f} mm between slices (usual {usual:.3f} mm)"

    def affine(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the lattice of the stack.

        Returns
        -------
        tuple of ndarray
            Matrix [3, 3] whose columns are the steps of the column index, row index and slice index (mm, LPS), and
            the centre of the first pixel of the first slice.
        """
        matrix = np.stack(
            [self.across * self.across_mm, self.down * self.down_mm, self.along * self.spacing_mm], axis=1
        )
        return matrix, self.positions_mm[0].copy()

    def skew_mm(self) -> float:
        """Return how far a corner lies from a lattice along the patient axes, mm."""
        matrix, _ = self.affine()
        worst = 0.0
        for column, count in zip(matrix.T, (self.columns, self.rows, self.count), strict=True):
            off = np.delete(column, int(np.abs(column).argmax()))
            worst += float(np.linalg.norm(off)) * (count - 1)
        return worst


def choose_series(headers: Sequence[Header], series: str | int | None = None) -> list[Header]:
    """Return the slices of one CT series.

    Parameters
    ----------
    headers : sequence of Header
        Everything that was found.
    series : str or int, optional
        Series instance UID, or its end, or series number; needed when there are several.

    Returns
    -------
    list of Header
        The headers of that series, localizers left out.

    Raises
    ------
    SeriesError
        When there is no CT, several series and no choice, or the choice does not fit; the choices are listed.
    """
    groups: dict[str, list[Header]] = {}
    others: Counter[str] = Counter()
    for header in headers:
        modality = text_of(header.dataset, "Modality", name=header.name)
        storage = text_of(header.dataset, "SOPClassUID", name=header.name)
        if modality != "CT" or storage not in {"", CT_STORAGE}:
            others[modality or "nothing named"] += 1
            continue
        if "LOCALIZER" in text_of(header.dataset, "ImageType", name=header.name).upper():
            others["CT localizer"] += 1
            continue
        groups.setdefault(text_of(header.dataset, "SeriesInstanceUID", name=header.name), []).append(header)
    if not groups:
        found = ", ".join(f"{count} x {kind[:40]}" for kind, count in sorted(others.items())) or "no DICOM files"
        raise SeriesError(
            f"no CT slices among the files ({found})",
            allowed="single-slice CT images (modality CT)",
            remedy="name the folder of a CT series; enhanced multi-frame CT must be converted first",
        )
    if series is None and len(groups) == 1:
        return next(iter(groups.values()))
    wanted = "" if series is None else str(series).strip()
    matches = [uid for uid in groups if uid == wanted]
    if not matches and wanted:
        matches = [uid for uid, group in groups.items() if _number(group) == wanted]
    if not matches and len(wanted) >= 4:
        matches = [uid for uid in groups if uid.endswith(wanted)]
    if len(matches) == 1:
        return groups[matches[0]]
    listed = "; ".join(
        f"number {_number(group) or '-'}, {len(group)} slices, UID {uid or '-'}"
        for uid, group in sorted(groups.items())
    )
    raise SeriesError(
        f"{len(groups)} CT series" + (f", {len(matches)} of them called {series!r}" if wanted else ""),
        allowed=f"one series: {listed}",
        remedy="choose one with series= (its number or its UID)",
    )


def _number(group: Sequence[Header]) -> str:
    """Return the series number of a group."""
    return text_of(group[0].dataset, "SeriesNumber", name=group[0].name)


def sort_stack(headers: Sequence[Header]) -> Stack:
    """Sort the slices of a series along their normal and check that they belong together.

    Parameters
    ----------
    headers : sequence of Header
        The slices of one series, in any order.

    Returns
    -------
    Stack
        The sorted slices. Unevenness, tilt and rotation are measured there, not refused yet.

    Raises
    ------
    GeometryError
        When positions, spacing or orientation cannot be trusted, or slices are doubled.
    SeriesError
        When slices of different frames of reference or sizes are mixed, or there is only one slice.
    """
    if len(headers) < 2:
        raise SeriesError(
            f"{len(headers)} CT slice", allowed="two slices or more", remedy="name the folder of the whole series"
        )
    rows = _same([_integer(h, "Rows") for h in headers], headers, "rows")
    columns = _same([_integer(h, "Columns") for h in headers], headers, "columns")
    frame = _same(
        [text_of(h.dataset, "FrameOfReferenceUID", name=h.name) for h in headers], headers, "frame of reference"
    )
    place = _same([text_of(h.dataset, "PatientPosition", name=h.name) for h in headers], headers, "patient position")
    if place and place not in _POSITIONS:
        place = ""
    spacings = np.array([_numbers(h, "PixelSpacing", 2) for h in headers])
    low, high = _SPACING_RANGE_MM
    for header, (down, across) in zip(headers, spacings, strict=True):
        if not (low <= down <= high and low <= across <= high):
            raise GeometryError(
                f"{header.name} has pixel spacing {down:g} x {across:g} mm",
                allowed=f"{low} to {high:g} mm",
                remedy="the file is damaged; get it again",
            )
    if float(np.ptp(spacings, axis=0).max()) > 1e-4 * float(spacings.min()):
        raise SeriesError("slices with different pixel spacings", allowed="one pixel spacing in a series",
                          remedy="read one reconstruction at a time")  # fmt: skip
    axes = np.array([_numbers(h, "ImageOrientationPatient", 6) for h in headers])
    across, down = _orientation(headers, axes)
    positions = np.array([_numbers(h, "ImagePositionPatient", 3) for h in headers])
    if float(np.abs(positions).max()) > _LARGEST_POSITION_MM:
        raise GeometryError(
            f"a slice at {np.abs(positions).max():.3g} mm", allowed="within 100 m of the origin",
            remedy="the file is damaged; get it again",
        )  # fmt: skip
    heights = positions @ np.cross(across, down)
    order = np.argsort(heights, kind="stable")
    sorted_headers = tuple(headers[i] for i in order)
    positions = positions[order]
    _refuse_doubles(sorted_headers, positions, heights[order])
    stack = Stack(
        sorted_headers,
        rows,
        columns,
        float(spacings[0, 1]),
        float(spacings[0, 0]),
        across,
        down,
        positions,
        frame,
        place,
    )
    aside = positions - positions[0] - np.outer(stack.offsets_mm, stack.along)
    if float(np.linalg.norm(aside, axis=1).max()) > max(SKEW_LIMIT_MM, JITTER_SHARE * stack.spacing_mm):
        raise GeometryError(
            f"slices wander sideways by up to {np.linalg.norm(aside, axis=1).max():.2f} mm",
            allowed="slices on one straight line",
            remedy="read slices of one reconstruction only",
        )
    if stack.spacing_mm > 4 * high:
        raise GeometryError(
            f"slices {stack.spacing_mm:.4g} mm apart", allowed=f"up to {4 * high:g} mm", remedy="check the series"
        )
    return stack


def _orientation(
    headers: Sequence[Header], axes: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the unit vectors of the image plane, the same for all slices."""
    away = np.abs(axes - np.median(axes, axis=0)).max(axis=1)
    if float(away.max()) > 1e-3:
        raise GeometryError(
            f"{headers[int(away.argmax())].name} has another orientation than the rest of the series",
            allowed="one orientation in a series",
            remedy="leave out localizers and reformatted slices",
        )
    across, down = axes[0, :3], axes[0, 3:]
    lengths = np.linalg.norm(across), np.linalg.norm(down)
    if any(abs(length - 1.0) > 1e-2 for length in lengths) or abs(float(across @ down)) > 1e-2:
        raise GeometryError(
            f"image orientation {axes[0].tolist()}",
            allowed="two unit vectors at right angles",
            remedy="the file is damaged; get it again",
        )
    across = across / lengths[0]
    down = down - across * float(across @ down)
    return across, down / np.linalg.norm(down)


def _refuse_doubles(headers: Sequence[Header], positions: NDArray[np.float64], heights: NDArray[np.float64]) -> None:
    """Refuse two slices in one place, naming them."""
    doubled = np.flatnonzero(np.diff(heights) < _DOUBLE_MM)
    if doubled.size:
        pairs = ", ".join(
            f"{headers[i].name} and {headers[i + 1].name} at {positions[i][2]:.2f} mm" for i in doubled[:5]
        )
        raise GeometryError(
            f"{doubled.size} doubled slice{'s' if doubled.size > 1 else ''}: {pairs}",
            allowed="one slice in each place",
            remedy="remove one of each pair, or read one acquisition at a time",
        )


def _same(values: Sequence[Any], headers: Sequence[Header], what: str) -> Any:
    """Return the value all slices share."""
    counted = Counter(values).most_common()
    if len(counted) > 1:
        odd = next(h for h, value in zip(headers, values, strict=True) if value != counted[0][0])
        detail = "" if what == "frame of reference" else f" ({', '.join(str(v) for v, _ in counted[:4])})"
        raise SeriesError(
            f"slices with different {what}{detail}; {odd.name} differs from most",
            allowed=f"one {what} in a series",
            remedy="read one series at a time",
        )
    return counted[0][0]


def _integer(header: Header, keyword: str) -> int:
    """Return the number of rows or columns."""
    with guarded(header.name):
        value = header.dataset.get(keyword)
        if isinstance(value, int) and 1 <= value <= _MOST_PIXELS:
            return int(value)
    raise DicomError(
        f"{header.name} has {keyword} = {value!r}", allowed=f"1 to {_MOST_PIXELS}", remedy="get the file again"
    )


def _numbers(header: Header, keyword: str, count: int) -> list[float]:
    """Return finite decimal numbers of a header."""
    with guarded(header.name, kind=GeometryError):
        value = header.dataset.get(keyword)
        if value is None:
            raise GeometryError(
                f"{header.name} has no {keyword}", allowed="images with position, orientation and spacing",
                remedy="the volume cannot be placed; get the original series",
            )  # fmt: skip
        numbers = [float(one) for one in value]
        if len(numbers) == count and all(math.isfinite(one) for one in numbers):
            return numbers
    raise GeometryError(
        f"{header.name} has {keyword} = {str(value)[:80]}",
        allowed=f"{count} finite numbers",
        remedy="get the file again",
    )

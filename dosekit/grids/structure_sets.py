"""Structures of a patient: an RT Structure Set laid onto a CT.

The set belongs to the CT when the frame of reference is the same. It is looked for where archives put it: with the
structure itself, in the list of referenced frames, or at the top. References to single images are not needed, and
often do not resolve; contours are placed by their coordinates.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any
from warnings import warn

import numpy as np

from dosekit.errors import GeometryWarning, StructureError, UnknownNameError
from dosekit.grids.contours import Contour, Lattice, covered_voxels
from dosekit.grids.coverages import BoxedCoverage
from dosekit.grids.dicom_files import guarded, quiet_decoder, read_file, text_of
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

    from dosekit.grids.ct import CtVolume

__all__ = ["FoundStructures", "Outline", "read_outlines", "read_structures"]

_ROLE_OF_TYPE = {
    "EXTERNAL": "body",
    "GTV": "target",
    "CTV": "target",
    "PTV": "target",
    "ORGAN": "organ_at_risk",
    "AVOIDANCE": "organ_at_risk",
}
_CLOSED = ("CLOSED_PLANAR", "CLOSEDPLANAR_XOR")
_MOST_POINTS = 20_000_000
_LARGEST_POSITION_MM = 1.0e5


@dataclass(frozen=True, eq=False)
class Outline:
    """One structure as it was drawn.

    Parameters
    ----------
    name : str
        Its name.
    role : str
        What it is for, as its type or its name says.
    frame_of_reference_uid : str
        Frame of reference; empty when none is named.
    contours : list of Contour
        Closed contours.
    passed_over : int
        Contours that enclose nothing (points, open lines, fewer than three points).
    """

    name: str
    role: str
    frame_of_reference_uid: str = field(repr=False)
    contours: list[Contour] = field(repr=False)
    passed_over: int = 0


@dataclass(frozen=True, eq=False)
class FoundStructures:
    """Structures laid onto a CT.

    Parameters
    ----------
    boxes : dict
        Name to coverage.
    roles : dict
        Name to what it is for.
    notes : dict
        What was found and passed over.
    header : pydicom.Dataset
        The structure set without contours.
    """

    boxes: dict[str, BoxedCoverage]
    roles: dict[str, str]
    notes: dict[str, Any]
    header: Dataset = field(repr=False)


def read_outlines(path: str | Path) -> tuple[list[Outline], Dataset]:
    """Read the contours of a structure set.

    Parameters
    ----------
    path : str or Path
        The RT Structure Set.

    Returns
    -------
    tuple
        The structures in the order of the file, and the data set.

    Raises
    ------
    StructureError
        When the file is no structure set, or contours cannot be understood.
    """
    file = Path(path)
    if not file.is_file():
        raise StructureError(f"{file.name!r} is not a file", allowed="an RT Structure Set", remedy="check the path")
    with quiet_decoder():
        dataset = read_file(file, pixels=False)
        modality = "" if dataset is None else text_of(dataset, "Modality", name=file.name)
        if dataset is None or modality != "RTSTRUCT":
            raise StructureError(
                f"{file.name} holds {modality[:20] or 'no DICOM'}",
                allowed="modality RTSTRUCT",
                remedy="name the structure set",
            )
        with guarded(file.name, kind=StructureError):
            return _outlines(dataset, file.name), dataset


def read_structures(path: str | Path, volume: CtVolume, *, only: Sequence[str] | None = None) -> FoundStructures:
    """Lay the structures of a structure set onto a CT.

    Parameters
    ----------
    path : str or Path
        The RT Structure Set.
    volume : CtVolume
        The CT.
    only : sequence of str, optional
        Names to read, without regard to case; all that have contours by default.

    Returns
    -------
    FoundStructures
        Coverage of each structure.

    Raises
    ------
    StructureError
        When the set belongs to another frame of reference, has no contours, or a wanted structure lies outside.
    UnknownNameError
        When a wanted structure is not there.

    Warns
    -----
    GeometryWarning
        When contours leave the CT.
    """
    file = Path(path)
    outlines, dataset = read_outlines(file)
    drawn = {outline.name: outline for outline in outlines if outline.contours}
    empty = [outline.name for outline in outlines if not outline.contours]
    wanted = list(drawn) if only is None else [_match(name, drawn, empty) for name in only]
    if not wanted:
        raise StructureError(
            f"{file.name} has no structure with closed contours",
            allowed="closed planar contours",
            remedy="check the file",
        )
    _check_frames(file.name, [drawn[name] for name in wanted], dataset, volume)
    shape = volume.hu.shape
    lattice = Lattice(volume.origin_mm, volume.spacing_mm, (shape[0], shape[1], shape[2]))
    boxes, outside, cut = {}, [], []
    for name in wanted:
        check_memory(math.prod(shape) * 8.0, what=f"structure {name!r}")
        box = covered_voxels(drawn[name].contours, lattice, name=name)
        if not box.values.size:
            outside.append(name)
            continue
        if _leaves(drawn[name].contours, lattice):
            cut.append(name)
        boxes[name] = box
    if outside and (only is not None or not boxes):
        raise StructureError(
            f"structure {', '.join(outside[:5])} lies outside the CT", allowed="structures inside the CT",
            remedy="check that the structure set belongs to this series",
        )  # fmt: skip
    if outside or cut:
        said = [f"{', '.join(outside)} left out (outside)"] if outside else []
        said += [f"{', '.join(cut)} cut at its edge"] if cut else []
        warn(f"structures leave the CT: {'; '.join(said)}", GeometryWarning, stacklevel=3)
    notes = {
        "read": list(boxes),
        "without contours": empty,
        "outside the CT": outside,
        "contours passed over": sum(outline.passed_over for outline in outlines),
    }
    roles = {name: drawn[name].role for name in boxes}
    return FoundStructures(boxes, roles, notes, dataset)


def _match(name: str, drawn: dict[str, Outline], empty: Sequence[str]) -> str:
    """Find a structure without regard to case."""
    if name in drawn:
        return name
    matches = [known for known in drawn if known.strip().lower() == name.strip().lower()]
    if len(matches) == 1:
        return matches[0]
    if not matches and any(known.strip().lower() == name.strip().lower() for known in empty):
        raise StructureError(f"structure {name!r} has no closed contours", allowed=", ".join(drawn), remedy="draw it")
    raise UnknownNameError("structure", name, drawn)


def _check_frames(file: str, outlines: Sequence[Outline], dataset: Dataset, volume: CtVolume) -> None:
    """Refuse structures of another frame of reference."""
    own = volume.frame_of_reference_uid or ""
    strangers = [o.name for o in outlines if own and o.frame_of_reference_uid and o.frame_of_reference_uid != own]
    if strangers:
        images = {str(image.get("SOPInstanceUID", "")) for image in (volume.headers.images if volume.headers else ())}
        if images & _referenced_images(dataset):  # contradicts itself: the images are these, the frame is another
            warn(
                "the structure set names another frame of reference than the CT but refers to its images; "
                "the images decide",
                GeometryWarning,
                stacklevel=4,
            )
            return
        raise StructureError(
            f"{file}: {', '.join(strangers[:5])} drawn in another frame of reference than the CT",
            allowed="structures in the frame of reference of the CT",
            remedy="choose the structure set that belongs to this series",
        )
    if not own or any(not outline.frame_of_reference_uid for outline in outlines):
        warn(
            "the structure set or the CT names no frame of reference; contours are placed by their coordinates",
            GeometryWarning,
            stacklevel=4,
        )


def _referenced_images(dataset: Dataset) -> set[str]:
    """Return the identifiers of the images that the set refers to."""
    found: set[str] = set()
    with guarded("the structure set", kind=StructureError):
        for frame in dataset.get("ReferencedFrameOfReferenceSequence") or []:
            for study in frame.get("RTReferencedStudySequence") or []:
                for series in study.get("RTReferencedSeriesSequence") or []:
                    for image in series.get("ContourImageSequence") or []:
                        found.add(str(image.get("ReferencedSOPInstanceUID", "")))
    return found


def _leaves(contours: Sequence[Contour], lattice: Lattice) -> bool:
    """Say whether contours leave the voxels by more than half a voxel."""
    low = np.array(lattice.origin_mm) - np.array(lattice.spacing_mm)
    high = np.array(lattice.origin_mm) + np.array(lattice.spacing_mm) * np.array(lattice.shape[::-1])
    for contour in contours:
        inside = np.all(contour.points_mm >= low[:2]) and np.all(contour.points_mm <= high[:2])
        if not inside or not low[2] <= contour.z_mm <= high[2]:
            return True
    return False


def _outlines(dataset: Dataset, file: str) -> list[Outline]:
    """Take structures out of the data set."""
    declared = list(dataset.get("StructureSetROISequence") or [])
    contoured = {int(item.ReferencedROINumber): item for item in dataset.get("ROIContourSequence") or []}
    types = {
        int(item.ReferencedROINumber): str(item.get("RTROIInterpretedType") or "").upper()
        for item in dataset.get("RTROIObservationsSequence") or []
        if item.get("ReferencedROINumber") is not None
    }
    if not declared:
        raise StructureError(f"{file} declares no structures", allowed="at least one", remedy="check the file")
    frames = [
        str(item.get("FrameOfReferenceUID") or "") for item in dataset.get("ReferencedFrameOfReferenceSequence") or []
    ]
    common = str(dataset.get("FrameOfReferenceUID") or "") or (frames[0] if len(frames) == 1 else "")
    outlines: list[Outline] = []
    points = 0
    for item in declared:
        number = int(item.ROINumber)
        name = str(item.get("ROIName") or "").strip()[:64] or f"structure {number}"
        taken = {outline.name for outline in outlines}
        if name in taken:
            name = next(f"{name} ({n})" for n in range(2, len(declared) + 2) if f"{name} ({n})" not in taken)
        frame = str(item.get("ReferencedFrameOfReferenceUID") or "") or common
        contours, passed = _contours(contoured.get(number), name)
        points += sum(len(contour.points_mm) for contour in contours)
        if points > _MOST_POINTS:
            raise StructureError(
                f"{file} has more than {_MOST_POINTS:g} contour points", remedy="simplify the contours"
            )
        outlines.append(Outline(name, _role(name, types.get(number, "")), frame, contours, passed))
    return outlines


def _role(name: str, kind: str) -> str:
    """Return what a structure is for, from its type or else its name."""
    if kind in _ROLE_OF_TYPE:
        return _ROLE_OF_TYPE[kind]
    lowered = name.lower()
    if lowered.startswith(("gtv", "ctv", "ptv")):
        return "target"
    return "body" if lowered in {"body", "external", "outline", "skin"} and not kind else "other"


def _contours(item: Dataset | None, name: str) -> tuple[list[Contour], int]:
    """Return the closed contours of a structure and how many lines enclose nothing."""
    contours: list[Contour] = []
    passed = 0
    for entry in [] if item is None else item.get("ContourSequence") or []:
        kind = str(entry.get("ContourGeometricType") or "")
        raw = entry.get("ContourData")
        values = np.array([] if raw is None else [float(v) for v in np.atleast_1d(raw)], dtype=float)
        if kind not in _CLOSED or values.size < 9:
            passed += 1
            continue
        stated = entry.get("NumberOfContourPoints")
        if values.size % 3 or (stated is not None and int(stated) * 3 != values.size):
            raise StructureError(
                f"a contour of {name!r} has {values.size} coordinates for {stated} points",
                allowed="three coordinates per point", remedy="the file is damaged; get it again",
            )  # fmt: skip
        if not np.all(np.isfinite(values)) or float(np.abs(values).max()) > _LARGEST_POSITION_MM:
            raise StructureError(
                f"a contour of {name!r} holds coordinates that are not finite or beyond 100 m",
                allowed="finite coordinates in mm", remedy="the file is damaged; get it again",
            )  # fmt: skip
        corners = values.reshape(-1, 3)
        if float(np.ptp(corners[:, 2])) > 0.2:
            raise StructureError(
                f"a contour of {name!r} spans {np.ptp(corners[:, 2]):.1f} mm in z",
                allowed="contours in planes of constant z (within 0.2 mm)",
                remedy="export the contours on axial slices",
            )
        contours.append(Contour(float(corners[:, 2].mean()), corners[:, :2].copy()))
    return contours, passed

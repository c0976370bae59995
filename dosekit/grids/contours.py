"""From contours to voxels: the even-odd rule, holes by nesting, cross-sections between contour planes.

Contours of one plane are filled together by the even-odd rule, so a contour inside another is a hole and an island in
the hole is full again. Coverage is the covered area of each pixel (exact along a row, `RAYS` lines per row). It is
held to the side of one half on which the pixel's centre lies, so that ``coverage >= 0.5`` is exactly the even-odd
rule at pixel centres.

Across the slices a contour plane speaks for the slice it lies in (within `ON_SLICE` of the slice spacing). Planes
finer than the slices are averaged over the slice. A slice between two planes gets a cross-section interpolated by
signed distance (Raya and Udupa, IEEE Trans. Med. Imaging 9 (1990) 32); a gap of more than `GAP` times the usual
plane distance is a real gap. The first and last plane reach half a plane distance outwards.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import StructureError
from dosekit.grids.coverages import BoxedCoverage

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["GAP", "ON_SLICE", "RAYS", "Contour", "Lattice", "covered_voxels"]

RAYS = 32
"""Scan lines per pixel row."""
ON_SLICE = 0.1
"""A contour this close to a slice, as a share of the slice spacing, lies on it."""
GAP = 1.5
"""Planes farther apart than this times their usual distance have a real gap between them."""

_CROSSING_SHARE = 0.02
_MOST_POINTS_PER_PLANE = 200_000


@dataclass(frozen=True, eq=False)
class Contour:
    """One closed contour in a plane of constant z.

    Parameters
    ----------
    z_mm : float
        Where the plane lies, mm.
    points_mm : ndarray
        Corners [point, (x, y)], mm.
    """

    z_mm: float
    points_mm: NDArray[np.float64]


@dataclass(frozen=True)
class Lattice:
    """The voxels to fill.

    Parameters
    ----------
    origin_mm, spacing_mm : tuple of float
        Centre of the first voxel and spacing (x, y, z), mm.
    shape : tuple of int
        Voxels (z, y, x).
    """

    origin_mm: tuple[float, float, float]
    spacing_mm: tuple[float, float, float]
    shape: tuple[int, int, int]


@dataclass(frozen=True, eq=False)
class _Plane:
    """Contours of one z, filled in the pixel box of the structure."""

    z: float
    coverage: NDArray[np.float64]


def covered_voxels(contours: Sequence[Contour], lattice: Lattice, *, name: str = "structure") -> BoxedCoverage:
    """Return the share of each voxel that a structure covers.

    Parameters
    ----------
    contours : sequence of Contour
        All contours of the structure, at least one.
    lattice : Lattice
        The voxels.
    name : str
        Name of the structure, for messages.

    Returns
    -------
    BoxedCoverage
        Coverage; an empty box when the structure lies outside the lattice.

    Raises
    ------
    StructureError
        When contours of one plane cross each other or themselves.

    Examples
    --------
    >>> square = np.array([[0.5, 0.5], [2.5, 0.5], [2.5, 2.5], [0.5, 2.5]])
    >>> box = covered_voxels([Contour(1.0, square)], Lattice((0, 0, 0), (1, 1, 1), (4, 4, 4)))
    >>> box.start, box.values.tolist()
    ((1, 1, 1), [[[1.0, 1.0], [1.0, 1.0]]])
    """
    planes, corner = _filled_planes(contours, lattice, name)
    if not planes:
        return BoxedCoverage((0, 0, 0), np.zeros((0, 0, 0), dtype=np.float32))
    step = lattice.spacing_mm[2]
    positions = np.array([plane.z for plane in planes])
    gaps = np.diff(positions)
    usual = float(np.median(gaps)) if gaps.size else step
    first = int(np.clip(np.floor((positions[0] - usual / 2 - lattice.origin_mm[2]) / step), 0, lattice.shape[0]))
    last = int(np.clip(np.ceil((positions[-1] + usual / 2 - lattice.origin_mm[2]) / step) + 1, first, lattice.shape[0]))
    sections = np.zeros((last - first, *planes[0].coverage.shape))
    for number in range(first, last):
        z = lattice.origin_mm[2] + number * step
        sections[number - first] = _section(z, step, planes, positions, usual, lattice)
    box = BoxedCoverage.from_dense(sections)
    start = (box.start[0] + first, box.start[1] + corner[1], box.start[2] + corner[0])
    return BoxedCoverage(start if box.values.size else (0, 0, 0), np.clip(box.values, 0.0, 1.0))


def _section(
    z: float, step: float, planes: Sequence[_Plane], positions: NDArray[np.float64], usual: float, lattice: Lattice
) -> NDArray[np.float64]:
    """Return the cross-section of one slice."""
    nearest = int(np.abs(positions - z).argmin())
    fine = usual < 0.75 * step
    if not fine and abs(positions[nearest] - z) <= ON_SLICE * step:
        return planes[nearest].coverage
    result = np.zeros_like(planes[0].coverage)
    if fine:
        for plane, (low, high) in zip(planes, _slabs(positions, usual), strict=True):
            overlap = min(high, z + step / 2) - max(low, z - step / 2)
            if overlap > 1e-3 * step:
                result += plane.coverage * (overlap / step)
        return result
    right = int(np.searchsorted(positions, z))
    if 0 < right < len(planes) and positions[right] - positions[right - 1] <= GAP * usual:
        before, after = planes[right - 1], planes[right]
        share = (after.z - z) / (after.z - before.z)
        blend = share * _distance(before.coverage, lattice) + (1 - share) * _distance(after.coverage, lattice)
        return np.asarray(np.clip(blend + 0.5, 0.0, 1.0))
    for end, sign in ((right - 1, 1.0), (right, -1.0)):  # beyond the plane below, before the plane above
        if 0 <= end < len(planes):
            reach = usual / 2 - (sign * (z - positions[end]) - step / 2)
            share = float(np.clip(reach / step, 0.0, 1.0))
            if share > 0.02:
                result = np.maximum(result, share * planes[end].coverage)
    return result


def _slabs(positions: NDArray[np.float64], usual: float) -> list[tuple[float, float]]:
    """Return the thickness that each plane speaks for."""
    slabs = []
    for number, z in enumerate(positions):
        below = z - positions[number - 1] if number else usual
        above = positions[number + 1] - z if number + 1 < len(positions) else usual
        reach = [gap if gap <= GAP * usual else usual for gap in (below, above)]
        slabs.append((z - reach[0] / 2, z + reach[1] / 2))
    return slabs


def _distance(coverage: NDArray[np.float64], lattice: Lattice) -> NDArray[np.float64]:
    """Return the signed distance to the edge in pixels, positive inside; partly covered pixels hold share - 1/2."""
    from scipy import ndimage

    inside = coverage >= 0.5
    mean = float(np.sqrt(lattice.spacing_mm[0] * lattice.spacing_mm[1]))
    sampling = (lattice.spacing_mm[1] / mean, lattice.spacing_mm[0] / mean)
    padded = np.pad(inside, 1)
    within = ndimage.distance_transform_edt(padded, sampling=sampling)[1:-1, 1:-1]
    if inside.any():
        beyond = ndimage.distance_transform_edt(~inside, sampling=sampling)
    else:
        beyond = np.full(inside.shape, float(max(inside.shape)))
    distance: NDArray[np.float64] = np.where(inside, within - 0.5, 0.5 - beyond)
    partly = (coverage > 0.0) & (coverage < 1.0)
    distance[partly] = coverage[partly] - 0.5
    return distance


def _filled_planes(contours: Sequence[Contour], lattice: Lattice, name: str) -> tuple[list[_Plane], tuple[int, int]]:
    """Fill the contours plane by plane in the pixel box of the structure; return the planes and its corner (x, y)."""
    from dosekit.grids.kernels import scan_edges

    origin = np.array(lattice.origin_mm[:2])
    spacing = np.array(lattice.spacing_mm[:2])
    pixels = [(c.points_mm - origin) / spacing for c in contours]
    low = np.min([p.min(axis=0) for p in pixels], axis=0)
    high = np.max([p.max(axis=0) for p in pixels], axis=0)
    counts = np.array([lattice.shape[2], lattice.shape[1]])
    first = np.clip(np.floor(np.clip(low, -1, counts)) - 1, 0, counts).astype(int)
    last = np.clip(np.ceil(np.clip(high, -1, counts)) + 2, 0, counts).astype(int)
    if np.any(last <= first):
        return [], (0, 0)
    size = (int(last[1] - first[1]), int(last[0] - first[0]))
    tolerance = 0.02 * lattice.spacing_mm[2]
    order = np.argsort([c.z_mm for c in contours], kind="stable")
    groups: list[list[int]] = []
    for number in order:
        if groups and contours[number].z_mm - contours[groups[-1][0]].z_mm <= tolerance:
            groups[-1].append(int(number))
        else:
            groups.append([int(number)])
    planes = []
    for group in groups:
        loops = [pixels[number] - first for number in group]
        where = f"{name!r} at z = {contours[group[0]].z_mm:.2f} mm"
        if sum(len(loop) for loop in loops) > _MOST_POINTS_PER_PLANE:
            raise StructureError(
                f"{where} has more than {_MOST_POINTS_PER_PLANE} contour points",
                allowed="fewer points in a plane", remedy="simplify the contours",
            )  # fmt: skip
        coverage = np.empty(size)
        centres = np.empty(size, dtype=bool)
        scan_edges(np.concatenate([_edges(loop) for loop in loops]), RAYS, coverage, centres)
        _refuse_crossings(loops, coverage, where)
        below = np.nextafter(np.float32(0.5), np.float32(0.0))
        held = np.where(centres, np.maximum(coverage, 0.5), np.minimum(coverage, below))
        planes.append(_Plane(contours[group[0]].z_mm, np.clip(held, 0.0, 1.0)))
    return planes, (int(first[0]), int(first[1]))


def _edges(loop: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the edges of a closed loop [edge, 4]."""
    return np.hstack([loop, np.roll(loop, -1, axis=0)])


def _refuse_crossings(loops: Sequence[NDArray[np.float64]], coverage: NDArray[np.float64], where: str) -> None:
    """Refuse planes whose contours cross each other or themselves by more than a trifle.

    Loops that do not cross are disjoint or nested, and then the even-odd area is the alternating sum of their areas.
    """
    if len(loops) == 1:
        loop = loops[0]
        x, y = loop[:, 0], loop[:, 1]
        signed = 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
        inner = coverage.sum()
        touches = loop.min() < -0.5 or np.any(loop.max(axis=0) > np.array(coverage.shape[::-1]) - 0.5)
        if not touches and inner > abs(signed) * (1 + _CROSSING_SHARE) + 2.0:
            raise StructureError(
                f"the contour of {where} crosses itself",
                allowed="contours that do not cross",
                remedy="redraw this contour",
            )
        return
    for number, loop in enumerate(loops):
        for other in loops[number + 1 :]:
            if _cross_deeply(loop, other):
                raise StructureError(
                    f"two contours of {where} cross each other",
                    allowed="contours that are apart or one inside the other (a hole)",
                    remedy="redraw or unite them",
                )


def _cross_deeply(one: NDArray[np.float64], two: NDArray[np.float64]) -> bool:
    """Say whether two loops overlap in part, by more than a trifle of the smaller one."""
    from dosekit.grids.kernels import scan_edges

    low = np.maximum(one.min(axis=0), two.min(axis=0))
    high = np.minimum(one.max(axis=0), two.max(axis=0))
    if np.any(high <= low):
        return False
    corner = np.floor(np.minimum(one.min(axis=0), two.min(axis=0)))
    reach = np.ceil(np.maximum(one.max(axis=0), two.max(axis=0))) - corner + 2
    if float(np.prod(reach)) > 4e7:
        return False
    size = (int(reach[1]), int(reach[0]))
    shares, spare = np.empty(size), np.empty(size, dtype=bool)
    areas = []
    for edges in (_edges(one - corner), _edges(two - corner), np.vstack([_edges(one - corner), _edges(two - corner)])):
        scan_edges(edges, RAYS, shares, spare)
        areas.append(float(shares.sum()))
    common = 0.5 * (areas[0] + areas[1] - areas[2])  # area of the exclusive or = A + B - 2 (A and B)
    smaller = min(areas[0], areas[1])
    trifle = max(_CROSSING_SHARE * smaller, 1.0)
    return trifle < common < smaller - trifle

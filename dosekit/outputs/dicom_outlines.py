"""Where in a slice does a structure end? Outlines from the coverage of voxels.

Outlines are lines of equal coverage between voxel centres (marching squares after
Lorensen and Cline, Comput. Graph. 21 (1987) 163).  The level is one half where the
polygons then enclose the covered area to 1 %.  Elsewhere, chiefly in slices near
the end of a rounded structure whose coverage is below one, the level is the one
whose polygons enclose the covered area, so that volumes are kept.

Limit: where the coverage is the same all over a slice (a flat end inside the
slice) no such level exists; the slice is kept as a whole when the coverage is one
half or more, and dropped when it is less.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["slice_outlines", "thinned"]

SMALLEST_AREA_MM2 = 0.01
AREA_TOLERANCE = 0.01
LEVEL_STEPS = 12


def slice_outlines(coverage: NDArray[Any], *, x_mm: NDArray[Any], y_mm: NDArray[Any]) -> list[NDArray[np.float64]]:
    """Return the outlines of a structure in one slice.

    Parameters
    ----------
    coverage : ndarray, shape (y, x)
        Coverage 0 to 1.
    x_mm, y_mm : ndarray
        Voxel centres (mm).

    Returns
    -------
    list of ndarray, shape (n, 2)
        Closed polygons (x, y) in mm, first point not repeated, points on straight lines left out;
        outer outlines run the other way round than holes.

    Examples
    --------
    >>> square = np.zeros((20, 20))
    >>> square[1:19, 1:19] = 1.0
    >>> outline, = slice_outlines(square, x_mm=np.arange(20.0), y_mm=np.arange(20.0))
    >>> float(outline[:, 0].min()), float(outline[:, 0].max())
    (0.5, 18.5)
    """
    from contourpy import contour_generator

    rows, columns = np.nonzero(coverage > 0.0)
    if rows.size == 0:
        return []
    first_row, last_row = int(rows.min()), int(rows.max()) + 1
    first_column, last_column = int(columns.min()), int(columns.max()) + 1
    part = np.pad(coverage[first_row:last_row, first_column:last_column].astype(np.float64), 1)
    x, y = _padded(x_mm, first_column, last_column), _padded(y_mm, first_row, last_row)
    generator = contour_generator(x=x, y=y, z=part)
    covered_mm2 = float(part.sum()) * (x[1] - x[0]) * (y[1] - y[0])

    def polygons(level: float) -> list[NDArray[np.float64]]:
        return [np.asarray(line, dtype=np.float64)[:-1] for line in generator.lines(level)]

    found = polygons(0.5)
    missing = covered_mm2 - _enclosed_mm2(found)
    if abs(missing) > AREA_TOLERANCE * covered_mm2:
        low, high = (0.0, 0.5) if missing > 0.0 else (0.5, 1.0)
        for _ in range(LEVEL_STEPS):
            middle = 0.5 * (low + high)
            trial = polygons(middle)
            excess = _enclosed_mm2(trial) - covered_mm2
            if abs(excess) < abs(missing):
                found, missing = trial, -excess
            low, high = (middle, high) if excess > 0.0 else (low, middle)
    outlines = [_without_straight_points(polygon) for polygon in found]
    return [outline for outline in outlines if len(outline) >= 3 and abs(_area_mm2(outline)) >= SMALLEST_AREA_MM2]


def thinned(polygon: NDArray[np.float64], *, tolerance_mm: float) -> NDArray[np.float64]:
    """Leave out points that lie nearer than a tolerance to what is left.

    The method of Douglas and Peucker, Cartographica 10 (1973) 112, from two opposite points on.

    Parameters
    ----------
    polygon : ndarray, shape (n, 2)
        Closed polygon (mm), first point not repeated.
    tolerance_mm : float
        Largest distance of a point left out from the polygon returned.

    Returns
    -------
    ndarray, shape (m, 2)
    """
    half = len(polygon) // 2
    closed = np.vstack([polygon, polygon[:1]])
    keep = np.zeros(len(closed), dtype=bool)
    keep[[0, half, -1]] = True
    pending = [(0, half), (half, len(closed) - 1)]
    while pending:
        first, last = pending.pop()
        if last - first < 2:
            continue
        chord = closed[last] - closed[first]
        offsets = closed[first + 1 : last] - closed[first]
        length = float(np.hypot(*chord)) or 1.0
        distances = np.abs(offsets[:, 0] * chord[1] - offsets[:, 1] * chord[0]) / length
        far = int(distances.argmax())
        if distances[far] > tolerance_mm:
            middle = first + 1 + far
            keep[middle] = True
            pending += [(first, middle), (middle, last)]
    return np.asarray(closed[keep][:-1], dtype=np.float64)


def _enclosed_mm2(polygons: list[NDArray[np.float64]]) -> float:
    """Return the area inside outer outlines and outside holes."""
    return abs(sum(_area_mm2(polygon) for polygon in polygons))


def _padded(centres_mm: NDArray[Any], first: int, last: int) -> NDArray[np.float64]:
    """Return voxel centres with one more on either side."""
    axis = np.asarray(centres_mm, dtype=np.float64)
    step_mm = (axis[-1] - axis[0]) / (len(axis) - 1) if len(axis) > 1 else 1.0
    return np.asarray(axis[first] + step_mm * np.arange(-1, last - first + 1), dtype=np.float64)


def _area_mm2(polygon: NDArray[np.float64]) -> float:
    x, y = polygon.T
    return 0.5 * float(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1)))


def _without_straight_points(polygon: NDArray[np.float64]) -> NDArray[np.float64]:
    """Leave out repeated points and points on the line between their neighbours."""
    steps = polygon - np.roll(polygon, 1, axis=0)
    polygon = polygon[np.hypot(*steps.T) > 1e-9]
    if len(polygon) < 3:
        return polygon
    before, after = polygon - np.roll(polygon, 1, axis=0), np.roll(polygon, -1, axis=0) - polygon
    cross = before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0]
    return np.asarray(polygon[np.abs(cross) > 1e-9 * np.hypot(*before.T) * np.hypot(*after.T)], dtype=np.float64)

"""Compiled kernels of the room: material by overlap, filling of contours.

Readable twins live in ``tests/naive.py``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["overlap_material", "scan_edges"]


@njit(**KERNEL)
def overlap_material(
    index: NDArray[np.uint16],
    first: tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]],
    shares: tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]],
    tally: NDArray[np.float64],
    out: NDArray[np.uint16],
) -> None:
    """Find the material with the largest share of each new voxel.

    Parameters
    ----------
    index : ndarray
        Material index on the old lattice [z, y, x].
    first : tuple of ndarray
        Per axis (z, y, x) the first old voxel under each new voxel.
    shares : tuple of ndarray
        Per axis the share of the new voxel that each old voxel from `first` on covers, [new, k].
    tally : ndarray
        Work space, one entry per material, all 0.
    out : ndarray
        Material index on the new lattice, overwritten; of equal shares the lowest index wins.
    """
    count_z, count_y, count_x = out.shape
    for z in range(count_z):
        for y in range(count_y):
            for x in range(count_x):
                for sweep in range(2):
                    best = -1
                    for a in range(shares[0].shape[1]):
                        share_z = shares[0][z, a]
                        if share_z == 0.0:
                            continue
                        for b in range(shares[1].shape[1]):
                            share_zy = share_z * shares[1][y, b]
                            if share_zy == 0.0:
                                continue
                            for c in range(shares[2].shape[1]):
                                share = share_zy * shares[2][x, c]
                                if share == 0.0:
                                    continue
                                which = index[first[0][z] + a, first[1][y] + b, first[2][x] + c]
                                if sweep == 0:
                                    tally[which] += share
                                    if best < 0 or _beats(tally, which, best):
                                        best = which
                                else:
                                    tally[which] = 0.0
                    if sweep == 0:
                        out[z, y, x] = max(best, 0)


@njit(cache=True, error_model="numpy", nogil=True, inline="always")
def _beats(tally: NDArray[np.float64], which: int, best: int) -> bool:
    """Say whether one material has the larger share, ties going to the lower index."""
    gain = tally[which] - tally[best]
    return bool(gain > 1e-12 or (gain > -1e-12 and which < best))


@njit(**KERNEL)
def scan_edges(
    edges: NDArray[np.float64], rays: int, coverage: NDArray[np.float64], centres: NDArray[np.bool_]
) -> None:
    """Fill closed polygons by the even-odd rule on one slice.

    Parameters
    ----------
    edges : ndarray
        Edges of all polygons [edge, 4]: x1, y1, x2, y2 in pixels, pixel centres at whole numbers.
    rays : int
        Scan lines per pixel row; along a line the covered length is exact.
    coverage : ndarray
        Covered share of each pixel [y, x], overwritten.
    centres : ndarray
        Whether the centre of each pixel is inside [y, x], overwritten.
    """
    rows, columns = coverage.shape
    crossings = np.empty(len(edges), dtype=np.float64)
    for row in range(rows):
        coverage[row, :] = 0.0
        centres[row, :] = False
        count = _cross(edges, float(row), crossings)
        for pair in range(0, count - 1, 2):
            first = max(0, int(np.ceil(max(crossings[pair], -1.0))))
            last = min(columns - 1.0, np.ceil(crossings[pair + 1]) - 1.0)
            for column in range(first, int(last) + 1):
                centres[row, column] = True
        for ray in range(rays):
            count = _cross(edges, row - 0.5 + (ray + 0.5) / rays, crossings)
            for pair in range(0, count - 1, 2):
                low = max(crossings[pair] + 0.5, 0.0)
                high = min(crossings[pair + 1] + 0.5, float(columns))
                if high <= low:
                    continue
                for column in range(int(low), min(int(high), columns - 1) + 1):
                    length = min(high, column + 1.0) - max(low, float(column))
                    if length > 0.0:
                        coverage[row, column] += length / rays


@njit(**PART)
def _cross(edges: NDArray[np.float64], y: float, crossings: NDArray[np.float64]) -> int:
    """Collect where edges cross a line of constant y, sorted; an edge owns its lower end."""
    count = 0
    for number in range(len(edges)):
        y1, y2 = edges[number, 1], edges[number, 3]
        if (y1 <= y) != (y2 <= y):
            x1 = edges[number, 0]
            x = x1 + (y - y1) * (edges[number, 2] - x1) / (y2 - y1)
            place = count
            while place > 0 and crossings[place - 1] > x:
                crossings[place] = crossings[place - 1]
                place -= 1
            crossings[place] = x
            count += 1
    return count

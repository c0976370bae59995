"""Compiled kernels of the room: resampling by overlap.

Readable twins live in ``tests/naive.py``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["overlap_density", "overlap_material"]


@njit(cache=True, error_model="numpy", nogil=True)
def overlap_density(
    values: NDArray[np.float32],
    first: tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]],
    shares: tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]],
    out: NDArray[np.float32],
) -> None:
    """Average values over new voxels.

    Parameters
    ----------
    values : ndarray
        Values on the old lattice [z, y, x].
    first : tuple of ndarray
        Per axis (z, y, x) the first old voxel under each new voxel.
    shares : tuple of ndarray
        Per axis the share of the new voxel that each old voxel from `first` on covers, [new, k].
    out : ndarray
        Averages on the new lattice [z, y, x], overwritten.
    """
    count_z, count_y, count_x = out.shape
    for z in range(count_z):
        for y in range(count_y):
            for x in range(count_x):
                total = 0.0
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
                            if share != 0.0:
                                total += share * values[first[0][z] + a, first[1][y] + b, first[2][x] + c]
                out[z, y, x] = total


@njit(cache=True, error_model="numpy", nogil=True)
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
    first, shares : tuple of ndarray
        As in `overlap_density`.
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

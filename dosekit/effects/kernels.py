"""Loops of the room, compiled: the search for the nearest agreeing point of two dose maps.

Pure functions on plain arrays; every constant is passed in.  Points are independent of one another, so the
result does not depend on the number of threads.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

__all__ = ["search_agreement"]

Doses = NDArray[np.float64]


@njit(cache=True, error_model="numpy", parallel=True)
def search_agreement(
    reference: Doses,
    reference_origin: Doses,
    reference_spacing: Doses,
    chosen: NDArray[np.int64],
    dose_tolerance: Doses,
    evaluated: Doses,
    evaluated_origin: Doses,
    evaluated_spacing: Doses,
    offsets: Doses,
    offset_squares: Doses,
    limit_square: float,
    out: Doses,
) -> None:
    """Write the smallest combined deviation of every chosen reference point into `out`.

    `reference`, `evaluated`: doses [z, y, x].  Origins and spacings: (z, y, x) in mm.  `chosen`: flat indices of
    reference points.  `dose_tolerance`: per chosen point, Gy.  `offsets` (n, 3) in mm and `offset_squares`, squared
    distance over squared distance tolerance, ascending.  `limit_square`: largest squared index kept.
    """
    ny, nx = reference.shape[1], reference.shape[2]
    ez, ey, ex = evaluated.shape
    for index in prange(chosen.shape[0]):
        flat = chosen[index]
        iz = flat // (ny * nx)
        iy = (flat // nx) % ny
        ix = flat % nx
        dose = reference[iz, iy, ix]
        scale = 1.0 / dose_tolerance[index]
        base_z = (reference_origin[0] + iz * reference_spacing[0] - evaluated_origin[0]) / evaluated_spacing[0]
        base_y = (reference_origin[1] + iy * reference_spacing[1] - evaluated_origin[1]) / evaluated_spacing[1]
        base_x = (reference_origin[2] + ix * reference_spacing[2] - evaluated_origin[2]) / evaluated_spacing[2]
        best = limit_square
        found = False
        for number in range(offsets.shape[0]):
            away = offset_squares[number]
            if away >= best:
                break
            pz = base_z + offsets[number, 0] / evaluated_spacing[0]
            py = base_y + offsets[number, 1] / evaluated_spacing[1]
            px = base_x + offsets[number, 2] / evaluated_spacing[2]
            # a hair of rounding at the outermost centres is no step outside
            if pz < -1e-9 or py < -1e-9 or px < -1e-9:
                continue
            if pz > ez - 1 + 1e-9 or py > ey - 1 + 1e-9 or px > ex - 1 + 1e-9:
                continue
            found = True
            lz = min(max(math.floor(pz), 0), max(ez - 2, 0))
            ly = min(max(math.floor(py), 0), max(ey - 2, 0))
            lx = min(max(math.floor(px), 0), max(ex - 2, 0))
            fz, fy, fx = pz - lz, py - ly, px - lx
            hz, hy, hx = min(lz + 1, ez - 1), min(ly + 1, ey - 1), min(lx + 1, ex - 1)
            low = (evaluated[lz, ly, lx] * (1.0 - fx) + evaluated[lz, ly, hx] * fx) * (1.0 - fy) + (
                evaluated[lz, hy, lx] * (1.0 - fx) + evaluated[lz, hy, hx] * fx
            ) * fy
            high = (evaluated[hz, ly, lx] * (1.0 - fx) + evaluated[hz, ly, hx] * fx) * (1.0 - fy) + (
                evaluated[hz, hy, lx] * (1.0 - fx) + evaluated[hz, hy, hx] * fx
            ) * fy
            deviation = (low * (1.0 - fz) + high * fz - dose) * scale
            combined = away + deviation * deviation
            best = min(best, combined)
        out[index] = math.sqrt(best) if found else np.nan

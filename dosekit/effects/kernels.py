"""Loops of the room, compiled: the search for the nearest agreeing point of two dose maps.

Pure functions on plain arrays; every constant is passed in.  Points are independent of one another, so the
result does not depend on the number of threads.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from dosekit.basis.compiling import PART

__all__ = ["search_agreement"]

Doses = NDArray[np.float64]
Indices = NDArray[np.int64]


@njit(**PART)
def _interpolate(values: Doses, lz: int, ly: int, lx: int, fz: float, fy: float, fx: float) -> float:
    """Interpolate linearly in one cell; an axis of one point is constant."""
    hz = min(lz + 1, values.shape[0] - 1)
    hy = min(ly + 1, values.shape[1] - 1)
    hx = min(lx + 1, values.shape[2] - 1)
    low = (values[lz, ly, lx] * (1.0 - fx) + values[lz, ly, hx] * fx) * (1.0 - fy) + (
        values[lz, hy, lx] * (1.0 - fx) + values[lz, hy, hx] * fx
    ) * fy
    high = (values[hz, ly, lx] * (1.0 - fx) + values[hz, ly, hx] * fx) * (1.0 - fy) + (
        values[hz, hy, lx] * (1.0 - fx) + values[hz, hy, hx] * fx
    ) * fy
    return float(low * (1.0 - fz) + high * fz)


@njit(**PART)
def _gap(place: float, low: float, high: float) -> float:
    """Distance of a number from an interval."""
    return max(low - place, place - high, 0.0)


@njit(cache=True, error_model="numpy", parallel=True)
def search_agreement(
    reference: Doses,
    reference_origin: Doses,
    reference_spacing: Doses,
    chosen: Indices,
    dose_tolerance: Doses,
    evaluated: Doses,
    evaluated_origin: Doses,
    evaluated_spacing: Doses,
    cell_low: Doses,
    cell_high: Doses,
    cell_steps: Indices,
    cell_squares: Doses,
    step: float,
    reach: Indices,
    distance: float,
    limit_square: float,
    out: Doses,
) -> None:
    """Write the smallest combined deviation of every chosen reference point into `out`.

    `reference`, `evaluated`: doses [z, y, x].  Origins and spacings: (z, y, x) in mm.  `chosen`: flat
    indices of reference points.  `dose_tolerance`: per chosen point, Gy.  `cell_low`, `cell_high`: smallest
    and largest corner dose of every evaluated cell.  `cell_steps` (n, 3): cells around a point, ascending
    in `cell_squares`, their least possible squared distance over squared tolerance.  `step`: lattice step
    in mm, at most `reach` (per axis) steps away.  `limit_square`: largest squared index kept.  A cell is
    entered only when its distance and its range of doses allow an index below the best so far; this changes
    no result.
    """
    ny, nx = reference.shape[1], reference.shape[2]
    cz, cy, cx = cell_low.shape
    hair = 1e-9  # rounding at the faces of a cell, in cells
    for index in prange(chosen.shape[0]):
        flat = chosen[index]
        place = (flat // (ny * nx), (flat // nx) % ny, flat % nx)
        dose = reference[place]
        scale = 1.0 / dose_tolerance[index]
        bz = (reference_origin[0] + place[0] * reference_spacing[0] - evaluated_origin[0]) / evaluated_spacing[0]
        by = (reference_origin[1] + place[1] * reference_spacing[1] - evaluated_origin[1]) / evaluated_spacing[1]
        bx = (reference_origin[2] + place[2] * reference_spacing[2] - evaluated_origin[2]) / evaluated_spacing[2]
        gz, gy, gx = step / evaluated_spacing[0], step / evaluated_spacing[1], step / evaluated_spacing[2]
        home_z, home_y, home_x = math.floor(bz), math.floor(by), math.floor(bx)
        # a single point on an axis is a cell of no width
        wide_z = 1.0 if evaluated.shape[0] > 1 else 0.0
        wide_y = 1.0 if evaluated.shape[1] > 1 else 0.0
        wide_x = 1.0 if evaluated.shape[2] > 1 else 0.0
        best = limit_square
        found = False
        # the point itself comes first: most points find a small index there
        lz, ly, lx = min(max(home_z, 0), cz - 1), min(max(home_y, 0), cy - 1), min(max(home_x, 0), cx - 1)
        fz, fy, fx = bz - lz, by - ly, bx - lx
        if min(fz, fy, fx) >= -hair and fz <= wide_z + hair and fy <= wide_y + hair and fx <= wide_x + hair:
            found = True
            best = min(best, ((_interpolate(evaluated, lz, ly, lx, fz, fy, fx) - dose) * scale) ** 2)
        for number in range(cell_steps.shape[0]):
            if cell_squares[number] >= best:
                break
            lz, ly, lx = home_z + cell_steps[number, 0], home_y + cell_steps[number, 1], home_x + cell_steps[number, 2]
            if lz < 0 or ly < 0 or lx < 0 or lz >= cz or ly >= cy or lx >= cx:
                continue
            dz = _gap(bz, float(lz), lz + wide_z) * evaluated_spacing[0] / distance
            dy = _gap(by, float(ly), ly + wide_y) * evaluated_spacing[1] / distance
            dx = _gap(bx, float(lx), lx + wide_x) * evaluated_spacing[2] / distance
            off = _gap(dose, cell_low[lz, ly, lx], cell_high[lz, ly, lx]) * scale
            if found and (dz * dz + dy * dy + dx * dx + off * off) * (1.0 - 1e-12) >= best:
                continue
            first_z = max(math.ceil((lz - hair - bz) / gz), -reach[0])
            first_y = max(math.ceil((ly - hair - by) / gy), -reach[1])
            first_x = max(math.ceil((lx - hair - bx) / gx), -reach[2])
            last_z = min(math.floor((lz + wide_z + hair - bz) / gz), reach[0])
            last_y = min(math.floor((ly + wide_y + hair - by) / gy), reach[1])
            last_x = min(math.floor((lx + wide_x + hair - bx) / gx), reach[2])
            for kz in range(first_z, last_z + 1):
                az = (kz * step / distance) ** 2
                for ky in range(first_y, last_y + 1):
                    ay = az + (ky * step / distance) ** 2
                    for kx in range(first_x, last_x + 1):
                        away = ay + (kx * step / distance) ** 2
                        found = True
                        if away >= best:
                            continue
                        value = _interpolate(
                            evaluated, lz, ly, lx, bz + kz * gz - lz, by + ky * gy - ly, bx + kx * gx - lx
                        )
                        best = min(best, away + ((value - dose) * scale) ** 2)
        out[index] = math.sqrt(best) if found else np.nan

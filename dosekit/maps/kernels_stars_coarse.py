"""Compiled steps between voxels and blocks of voxels; each block of planes is one independent piece of work."""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["block_sources", "spread_blocks"]


@njit(cache=True, nogil=True, error_model="numpy")
def block_sources(stops, material, table, fz, fy, fx, out, begin, end):  # type: ignore[no-untyped-def]
    """Sum stops times their material's energy in each mode over blocks of planes ``begin`` to ``end``.

    The arrays begin with the first plane of block ``begin``; no materials means the first for all.
    """
    nz, ny, nx = stops.shape
    modes = table.shape[1]
    alike = material.shape[0] == 0
    for block in range(begin, end):
        for z in range((block - begin) * fz, min(nz, (block - begin + 1) * fz)):
            for y in range(ny):
                for x in range(nx):
                    number = stops[z, y, x]
                    if number != 0.0:
                        kind = 0 if alike else material[z, y, x]
                        for m in range(modes):
                            out[m, block, y // fy, x // fx] += number * table[kind, m]


@njit(cache=True, nogil=True, error_model="numpy")
def spread_blocks(energy, dose, block_mass, mass, fz, fy, fx, out, begin, end):  # type: ignore[no-untyped-def]
    """Spread block energies over voxels: linear dose between block centres, then one dose per block that closes the
    sum.
    """
    nz, ny, nx = mass.shape
    bz, by, bx = energy.shape
    for block in range(begin, min(bz, end)):
        held = np.zeros((by, bx))
        line = np.empty(bx)
        for z in range(block * fz, min(nz, block * fz + fz)):
            place = min(max((z + 0.5) / fz - 0.5, 0.0), bz - 1.0)
            z0 = min(int(place), max(bz - 2, 0))
            z1 = min(z0 + 1, bz - 1)
            pz = place - z0
            for y in range(ny):
                place = min(max((y + 0.5) / fy - 0.5, 0.0), by - 1.0)
                y0 = min(int(place), max(by - 2, 0))
                y1 = min(y0 + 1, by - 1)
                py = place - y0
                for i in range(bx):
                    low = (1.0 - py) * dose[z0, y0, i] + py * dose[z0, y1, i]
                    high = (1.0 - py) * dose[z1, y0, i] + py * dose[z1, y1, i]
                    line[i] = (1.0 - pz) * low + pz * high
                for x in range(nx):
                    place = min(max((x + 0.5) / fx - 0.5, 0.0), bx - 1.0)
                    x0 = min(int(place), max(bx - 2, 0))
                    x1 = min(x0 + 1, bx - 1)
                    px = place - x0
                    value = mass[z, y, x] * ((1.0 - px) * line[x0] + px * line[x1])
                    out[z, y, x] = value
                    held[y // fy, x // fx] += value
        for j in range(by):
            for i in range(bx):
                held[j, i] = (energy[block, j, i] - held[j, i]) / block_mass[block, j, i]
        for z in range(block * fz, min(nz, block * fz + fz)):
            for y in range(ny):
                for x in range(nx):
                    out[z, y, x] += held[y // fy, x // fx] * mass[z, y, x]

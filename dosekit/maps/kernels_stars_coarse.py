"""Compiled steps between voxels and blocks of voxels; each block of planes is one independent piece of work."""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL

__all__ = ["block_sources", "spread_blocks"]


@njit(**KERNEL)
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
                row = stops[z, y]
                for i in range(out.shape[3]):
                    for x in range(i * fx, min(nx, i * fx + fx)):
                        number = row[x]
                        if number != 0.0:
                            kind = 0 if alike else material[z, y, x]
                            for m in range(modes):
                                out[m, block, y // fy, i] += number * table[kind, m]


@njit(**KERNEL)
def spread_blocks(  # type: ignore[no-untyped-def]
    energy, dose, block_mass, mass, fz, fy, fx, low, part, out, begin, end
):
    """Spread block energies over voxels: linear dose between block centres, then one dose per block that closes the
    sum.

    ``low[axis]`` holds for each voxel the block centre before it and ``part[axis]`` the weight of the next.
    """
    nz, ny, nx = mass.shape
    bz, by, bx = energy.shape
    px, x0 = part[2], low[2]
    for block in range(begin, min(bz, end)):
        held = np.zeros((by, bx))
        line = np.empty(bx)
        for z in range(block * fz, min(nz, block * fz + fz)):
            for y in range(ny):
                z0, y0, pz, py = low[0, z], low[1, y], part[0, z], part[1, y]
                z1, y1 = min(z0 + 1, bz - 1), min(y0 + 1, by - 1)
                for i in range(bx):
                    near = (1.0 - py) * dose[z0, y0, i] + py * dose[z0, y1, i]
                    far = (1.0 - py) * dose[z1, y0, i] + py * dose[z1, y1, i]
                    line[i] = (1.0 - pz) * near + pz * far
                goal = out[z, y]
                weight = mass[z, y]
                for x in range(nx):
                    goal[x] = weight[x] * ((1.0 - px[x]) * line[x0[x]] + px[x] * line[min(x0[x] + 1, bx - 1)])
                kept = held[y // fy]
                for i in range(bx):
                    for x in range(i * fx, min(nx, i * fx + fx)):
                        kept[i] += goal[x]
        for j in range(by):
            for i in range(bx):
                held[j, i] = (energy[block, j, i] - held[j, i]) / block_mass[block, j, i]
        for z in range(block * fz, min(nz, block * fz + fz)):
            for y in range(ny):
                goal = out[z, y]
                weight = mass[z, y]
                kept = held[y // fy]
                for i in range(bx):
                    for x in range(i * fx, min(nx, i * fx + fx)):
                        goal[x] += kept[i] * weight[x]

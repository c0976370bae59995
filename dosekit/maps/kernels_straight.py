"""Inner loop of the voxels of fields that run along the axes of the volume.

Where every axis of the voxels is parallel to one of the beam's, a map is interpolated along one axis after the other:
for each layer of nodes along z and each row of voxels first along y and x, and then between layers, a whole row at a
time. A row of a layer serves all voxels between it and the next. The sum is the same as that of
:mod:`dosekit.maps.kernels_voxels`, in another order. What the arguments mean is said where they are made:
:mod:`dosekit.maps.straight`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["deposit_straight"]


@njit(**PART)
def _row_of_layer(flat, place, stride, count, share_y, first_x, share_x, parts, line, out):  # type: ignore[no-untyped-def]
    """Set out[part, voxel] for a row of voxels in one layer of nodes; `place` is where the first y node lies."""
    for x in range(line.size):
        line[x] = 0.0
    for n in range(share_y.size):
        if share_y[n] == 0.0:
            continue
        for a in range(count[2]):
            begin = place + n * stride[1] + a * stride[2]
            for t in range(parts):
                line[a * parts + t] += share_y[n] * flat[begin + t]
    for t in range(parts):
        row = out[t]
        for m in range(row.size):
            row[m] = share_x[0, m] * line[first_x[m] * parts + t]
        for n in range(1, share_x.shape[0]):
            for m in range(row.size):
                row[m] += share_x[n, m] * line[(first_x[m] + n) * parts + t]


@njit(**KERNEL)
def deposit_straight(  # type: ignore[no-untyped-def]
    run_first, run_column, run_count, run_place, flat, stride, count, first, share, index, rsp, rows, factor, out,
    begin, end,
):  # fmt: skip
    """Add a map to voxels, as `dosekit.maps.kernels_voxels.deposit` does.

    ``stride[axis]``, ``count[axis]``, ``first[axis, voxel]`` and ``share[axis, node, voxel]`` tell, for z, y and x, how
    far nodes lie apart in the flat map, how many there are, the first one that a voxel reads, and the shares of it
    and those that follow. ``rows[part]`` is the row of the result for each part of the map, or negative.
    """
    parts, width, voxels = rows.size, share.shape[1], first.shape[1]
    # a line ends with room for nodes that count nothing
    layers, line = np.empty((width, voxels, parts, voxels)), np.empty((count[2] + width) * parts)
    made = np.empty((width, voxels), dtype=np.int64)  # which layer of nodes a row belongs to
    for k in range(width):
        for y in range(voxels):
            made[k, y] = -1
    values = np.empty(voxels)
    for n in range(begin, end):
        x, y, z = run_place[n, 0], run_place[n, 1], run_place[n, 2]
        some = False
        for k in range(width):
            some = some or share[1, k, y] != 0.0
        if not some:
            continue
        for k in range(width):
            node = first[0, z] + k
            if share[0, k, z] != 0.0 and made[node % width, y] != node:
                made[node % width, y] = node
                _row_of_layer(
                    flat, node * stride[0] + first[1, y] * stride[1], stride, count, share[1, :, y].copy(), first[2],
                    share[2], parts, line, layers[node % width, y],
                )  # fmt: skip
        for t in range(parts):
            if rows[t] < 0:
                continue
            for m in range(run_count[n]):
                values[m] = 0.0
            for k in range(width):
                part = share[0, k, z]
                if part != 0.0:
                    given = layers[(first[0, z] + k) % width, y, t][x:]
                    for m in range(run_count[n]):
                        values[m] += part * given[m]
            here, sizes = out[rows[t]][run_column[n] :], factor[rows[t]]
            matter, strength = index[run_first[n] :], rsp[run_first[n] :]
            for m in range(run_count[n]):
                size = sizes[matter[m]]
                here[m] += (size if size >= 0.0 else -size * strength[m]) * values[m]

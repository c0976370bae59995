"""Inner loop of the voxels of fields that run along the axes of the volume.

Where every axis of the voxels is parallel to one of the beam's, a map is interpolated along one axis after the other:
a layer for each z, a line for each row of voxels in it, and a few multiply-adds for each voxel. The sum is the same as
that of :mod:`dosekit.maps.kernels_voxels`, in another order. What the arguments mean is said where they are made:
:mod:`dosekit.maps.straight`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["deposit_straight"]


@njit(nogil=True, error_model="numpy")
def _layer(flat, stride, count, first, share, parts, layer):  # type: ignore[no-untyped-def]
    """Set layer[y node, x node x parts] to the sum over z nodes from `first` of share times the map."""
    for b in range(count[1]):
        line = layer[b]
        for x in range(count[2] * parts):
            line[x] = 0.0
        for n in range(share.size):
            if share[n] == 0.0:
                continue
            for a in range(count[2]):
                place = (first + n) * stride[0] + b * stride[1] + a * stride[2]
                for t in range(parts):
                    line[a * parts + t] += share[n] * flat[place + t]


@njit(nogil=True, error_model="numpy")
def _line(layer, first, share, line):  # type: ignore[no-untyped-def]
    """Set line[x node x parts] to the sum over y nodes from `first` of share times the layer; say if there is any."""
    some = False
    for x in range(line.size):
        line[x] = 0.0
    for n in range(share.size):
        if share[n] != 0.0:
            some = True
            given = layer[first + n]
            for x in range(line.size):
                line[x] += share[n] * given[x]
    return some


@njit(nogil=True, error_model="numpy", cache=True)
def deposit_straight(  # type: ignore[no-untyped-def]
    run_first,
    run_column,
    run_count,
    run_place,
    flat,
    stride,
    count,
    first,
    share,
    index,
    rsp,
    rows,
    factor,
    out,
    begin,
    end,
):
    """Add a map to voxels, as `dosekit.maps.kernels_voxels.deposit` does.

    ``stride[axis]``, ``count[axis]``, ``first[axis, voxel]`` and ``share[axis, voxel, node]`` tell, for z, y and x, how
    far nodes lie apart in the flat map, how many there are, the first one that a voxel reads, and the shares of it
    and those that follow. ``rows[part]`` is the row of the result for each part of the map, or negative.
    """
    parts, width = rows.size, share.shape[2]
    nodes, line = np.empty((count[1], count[2] * parts)), np.empty(count[2] * parts)
    values = np.empty(first.shape[1])
    layer = -1
    for n in range(begin, end):
        x, y, z = run_place[n, 0], run_place[n, 1], run_place[n, 2]
        if z != layer:
            _layer(flat, stride, count, first[0, z], share[0, z], parts, nodes)
            layer = z
        if not _line(nodes, first[1, y], share[1, y], line):
            continue
        for t in range(parts):
            if rows[t] < 0:
                continue
            for m in range(run_count[n]):
                values[m] = 0.0
            for k in range(width):
                for m in range(run_count[n]):
                    part = share[2, x + m, k]
                    if part != 0.0:
                        values[m] += part * line[(first[2, x + m] + k) * parts + t]
            here = out[rows[t]]
            for m in range(run_count[n]):
                if values[m] != 0.0:
                    size = factor[rows[t], index[run_first[n] + m]]
                    strength = rsp[run_first[n] + m]
                    here[run_column[n] + m] += (size if size >= 0.0 else -size * strength) * values[m]

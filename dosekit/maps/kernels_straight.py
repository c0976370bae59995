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


@njit(nogil=True, error_model="numpy")
def _add_voxels(line, parts, part, first, share, values):  # type: ignore[no-untyped-def]
    """Add to each voxel of a run one part of the sum over x nodes of share times the line."""
    width = share.shape[1]
    for m in range(values.size):
        place = first[m] * parts + part
        for n in range(width):
            values[m] += share[m, n] * line[place + n * parts]


@njit(nogil=True, error_model="numpy", cache=True)
def deposit_straight(  # type: ignore[no-untyped-def]
    run_first, run_column, run_count, shape, fine, coarse, stride, count, first, share, index, rsp, rows, factor, out,
    begin, end,
):  # fmt: skip
    """Add maps to voxels, as `dosekit.maps.kernels_voxels.deposit` does.

    ``stride[map, axis]``, ``count[map, axis]``, ``first[map, axis, voxel]`` and ``share[map, axis, voxel, node]`` tell,
    for the fine and the coarse map and for z, y and x, how far nodes lie apart in the flat map, how many there are, the
    first one that a voxel reads, and the shares of it and those that follow.
    """
    targets = rows.size
    fine_layer, coarse_layer = np.empty((count[0, 1], count[0, 2] * 2)), np.empty((count[1, 1], count[1, 2] * targets))
    fine_line, coarse_line = np.empty(count[0, 2] * 2), np.empty(count[1, 2] * targets)
    values = np.empty(shape[2])
    layer = -1
    for n in range(begin, end):
        x, y, z = run_first[n] % shape[2], (run_first[n] // shape[2]) % shape[1], run_first[n] // (shape[2] * shape[1])
        if z != layer:
            _layer(fine, stride[0], count[0], first[0, 0, z], share[0, 0, z], 2, fine_layer)
            _layer(coarse, stride[1], count[1], first[1, 0, z], share[1, 0, z], targets, coarse_layer)
            layer = z
        some_fine = _line(fine_layer, first[0, 1, y], share[0, 1, y], fine_line)
        some_coarse = _line(coarse_layer, first[1, 1, y], share[1, 1, y], coarse_line)
        last = x + run_count[n]
        voxels = values[: run_count[n]]
        for t in range(targets):
            if rows[t] < 0:
                continue
            for m in range(voxels.size):
                voxels[m] = 0.0
            if some_fine and t < 2:
                _add_voxels(fine_line, 2, t, first[0, 2, x:last], share[0, 2, x:last], voxels)
            if some_coarse:
                _add_voxels(coarse_line, targets, t, first[1, 2, x:last], share[1, 2, x:last], voxels)
            here = out[rows[t]]
            for m in range(voxels.size):
                if voxels[m] != 0.0:
                    size = factor[rows[t], index[run_first[n] + m]]
                    strength = rsp[run_first[n] + m]
                    here[run_column[n] + m] += (size if size >= 0.0 else -size * strength) * voxels[m]

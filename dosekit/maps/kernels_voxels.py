"""Inner loops of the voxels: read a field's maps at the points that sample a voxel, and the transpose.

Voxels come in runs along x: the flat index of the first, the column of the result it belongs to, and how many there
are. Runs from `begin` to `end` are one piece of work. A voxel is sampled at ``sub`` points along each axis. A point
reads the coarse map by linear interpolation, the fine map linearly along the beam and across it by a quadratic B-spline
(three nodes each way), or on the one node it lies on. What the arguments mean is said where they are made:
:mod:`dosekit.maps.sampling`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["deposit", "deposit_transposed"]


@njit(**PART)
def _beam_place(x, y, z, start, turn, inverse_source):  # type: ignore[no-untyped-def]
    """Return the fan position u, v (mm) and the position w along the beam (mm) of a point in index units."""
    u = start[0] + turn[0, 0] * x + turn[0, 1] * y + turn[0, 2] * z
    v = start[1] + turn[1, 0] * x + turn[1, 1] * y + turn[1, 2] * z
    w = start[2] + turn[2, 0] * x + turn[2, 1] * y + turn[2, 2] * z
    shrink = 1.0 / (1.0 + w * inverse_source)
    return u * shrink, v * shrink, w


@njit(**PART)
def _spline(place, nodes, weights):  # type: ignore[no-untyped-def]
    """Fill the weights of the quadratic B-spline about the nearest node; return the first node that counts.

    The weights add to one and their variance is a quarter at any place. With one node the nearest takes all.
    """
    i = int(np.floor(place + 0.5))
    t = place - i
    if nodes == 1:
        weights[0] = 1.0
        return i
    weights[0], weights[1], weights[2] = 0.5 * (0.5 - t) ** 2, 0.75 - t * t, 0.5 * (0.5 + t) ** 2
    return i - 1


@njit(**PART)
def _read_fine(fine, j, lower, upper, place_u, place_v, nodes, weights_u, weights_v, value):  # type: ignore[no-untyped-def]
    """Add energy and stops of the fine map between planes j and j + 1 to the first two values."""
    k, i = _spline(place_u, nodes, weights_u), _spline(place_v, nodes, weights_v)
    if k < 0 or i < 0 or k + nodes > fine.shape[2] or i + nodes > fine.shape[1]:
        return
    energy, stops = 0.0, 0.0
    for di in range(nodes):
        for dk in range(nodes):
            weight = weights_v[di] * weights_u[dk]
            here, there = fine[j, i + di, k + dk], fine[j + 1, i + di, k + dk]
            energy += weight * (lower * here[0] + upper * there[0])
            stops += weight * (lower * here[1] + upper * there[1])
    value[0] += energy
    value[1] += stops


@njit(**PART)
def _read_coarse(coarse, j, lower, upper, place_u, place_v, value):  # type: ignore[no-untyped-def]
    """Add every target of the coarse map between planes j and j + 1 to the values."""
    k, i = int(np.floor(place_u)), int(np.floor(place_v))
    if k < 0 or i < 0 or k + 1 >= coarse.shape[2] or i + 1 >= coarse.shape[1]:
        return
    fu, fv = place_u - k, place_v - i
    w00, w01, w10, w11 = (1.0 - fv) * (1.0 - fu), (1.0 - fv) * fu, fv * (1.0 - fu), fv * fu
    a00, a01, a10, a11 = coarse[j, i, k], coarse[j, i, k + 1], coarse[j, i + 1, k], coarse[j, i + 1, k + 1]
    j += 1
    b00, b01, b10, b11 = coarse[j, i, k], coarse[j, i, k + 1], coarse[j, i + 1, k], coarse[j, i + 1, k + 1]
    for t in range(6):
        here = w00 * a00[t] + w01 * a01[t] + w10 * a10[t] + w11 * a11[t]
        there = w00 * b00[t] + w01 * b01[t] + w10 * b10[t] + w11 * b11[t]
        value[t] += lower * here + upper * there


@njit(**KERNEL)
def deposit(  # type: ignore[no-untyped-def]
    first, column, count, place_of_run, start, turn, inverse_source, sub, planes, nodes, fine_lattice, fine, fine_lit,
    coarse_lattice, coarse, coarse_lit, index, rsp, rows, factor, out, begin, end,
):  # fmt: skip
    """Add maps to voxels: ``out[rows[target], column] += factor[row, material] * mean of the map in the voxel``.

    A negative factor is per length of path: its size times the voxel's stopping power counts.
    """
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    value = np.empty(6)  # all targets; written out so that loops over them become vectors
    weights_u, weights_v = np.empty(3), np.empty(3)
    for n in range(begin, end):
        ix, iy, iz = place_of_run[n, 0], place_of_run[n, 1], place_of_run[n, 2]
        for m in range(count[n]):
            some = False
            for t in range(6):
                value[t] = 0.0
            for a in range(sub[0]):
                x = ix + m + (a + 0.5) / sub[0] - 0.5
                for b in range(sub[1]):
                    y = iy + (b + 0.5) / sub[1] - 0.5
                    for c in range(sub[2]):
                        z = iz + (c + 0.5) / sub[2] - 0.5
                        u, v, w = _beam_place(x, y, z, start, turn, inverse_source)
                        place = (w - planes[0]) * planes[1]
                        j = int(np.floor(place))
                        if j < 0 or j + 1 >= fine.shape[0]:
                            continue
                        upper = (place - j) * share
                        lower = share - upper
                        if fine_lit[j] or fine_lit[j + 1]:
                            some = True
                            pu = (u - fine_lattice[0]) * fine_lattice[2]
                            pv = (v - fine_lattice[1]) * fine_lattice[2]
                            _read_fine(fine, j, lower, upper, pu, pv, nodes, weights_u, weights_v, value)
                        if coarse_lit[j] or coarse_lit[j + 1]:
                            some = True
                            pu = (u - coarse_lattice[0]) * coarse_lattice[2]
                            pv = (v - coarse_lattice[1]) * coarse_lattice[2]
                            _read_coarse(coarse, j, lower, upper, pu, pv, value)
            if some:
                matter, strength = index[first[n] + m], rsp[first[n] + m]
                for t in range(6):
                    if rows[t] >= 0:
                        size = factor[rows[t], matter]
                        out[rows[t], column[n] + m] += (size if size >= 0.0 else -size * strength) * value[t]


@njit(**PART)
def _add_fine(fine, j, lower, upper, place_u, place_v, nodes, weights_u, weights_v, value):  # type: ignore[no-untyped-def]
    """Transpose of `_read_fine`."""
    k, i = _spline(place_u, nodes, weights_u), _spline(place_v, nodes, weights_v)
    if k < 0 or i < 0 or k + nodes > fine.shape[2] or i + nodes > fine.shape[1]:
        return
    for di in range(nodes):
        for dk in range(nodes):
            weight = weights_v[di] * weights_u[dk]
            here, there = fine[j, i + di, k + dk], fine[j + 1, i + di, k + dk]
            here[0] += lower * weight * value[0]
            here[1] += lower * weight * value[1]
            there[0] += upper * weight * value[0]
            there[1] += upper * weight * value[1]


@njit(**PART)
def _add_coarse(coarse, j, part, place_u, place_v, value):  # type: ignore[no-untyped-def]
    """Transpose of `_read_coarse` for one plane."""
    k, i = int(np.floor(place_u)), int(np.floor(place_v))
    if k < 0 or i < 0 or k + 1 >= coarse.shape[2] or i + 1 >= coarse.shape[1]:
        return
    fu, near, far = place_u - k, part * (1.0 - (place_v - i)), part * (place_v - i)
    a00, a01, a10, a11 = coarse[j, i, k], coarse[j, i, k + 1], coarse[j, i + 1, k], coarse[j, i + 1, k + 1]
    for t in range(6):
        a00[t] += near * (1.0 - fu) * value[t]
        a01[t] += near * fu * value[t]
        a10[t] += far * (1.0 - fu) * value[t]
        a11[t] += far * fu * value[t]


@njit(**KERNEL)
def deposit_transposed(  # type: ignore[no-untyped-def]
    slabs, first, column, count, place_of_run, start, turn, inverse_source, sub, planes, nodes, fine_lattice, fine,
    coarse_lattice, coarse, index, rsp, rows, factor, values, colour, begin, end,
):  # fmt: skip
    """Transpose of `deposit`: add voxels to the maps.

    Runs of one slab ``slabs[s]:slabs[s + 1]`` reach no node that the next slab but one reaches, so that even slabs
    may be done at once, and then odd ones.
    """
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    value = np.empty(6)
    weights_u, weights_v = np.empty(3), np.empty(3)
    for half in range(begin, end):
        for n in range(slabs[2 * half + colour], slabs[2 * half + colour + 1]):
            ix, iy, iz = place_of_run[n, 0], place_of_run[n, 1], place_of_run[n, 2]
            for m in range(count[n]):
                matter, strength = index[first[n] + m], rsp[first[n] + m]
                some = False
                for t in range(6):
                    value[t] = 0.0
                    if rows[t] >= 0:
                        size = factor[rows[t], matter]
                        value[t] = (size if size >= 0.0 else -size * strength) * values[rows[t], column[n] + m] * share
                        some = some or value[t] != 0.0
                if not some:
                    continue
                for a in range(sub[0]):
                    x = ix + m + (a + 0.5) / sub[0] - 0.5
                    for b in range(sub[1]):
                        y = iy + (b + 0.5) / sub[1] - 0.5
                        for c in range(sub[2]):
                            z = iz + (c + 0.5) / sub[2] - 0.5
                            u, v, w = _beam_place(x, y, z, start, turn, inverse_source)
                            place = (w - planes[0]) * planes[1]
                            j = int(np.floor(place))
                            if j < 0 or j + 1 >= fine.shape[0]:
                                continue
                            upper = place - j
                            pu = (u - fine_lattice[0]) * fine_lattice[2]
                            pv = (v - fine_lattice[1]) * fine_lattice[2]
                            _add_fine(fine, j, 1.0 - upper, upper, pu, pv, nodes, weights_u, weights_v, value)
                            pu = (u - coarse_lattice[0]) * coarse_lattice[2]
                            pv = (v - coarse_lattice[1]) * coarse_lattice[2]
                            _add_coarse(coarse, j, 1.0 - upper, pu, pv, value)
                            _add_coarse(coarse, j + 1, upper, pu, pv, value)

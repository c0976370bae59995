"""Inner loops of the planes: spread rows of rays by Gaussians of several widths, and the transpose.

A Gaussian is a product of one along u and one along v, so a plane is spread along its rows first and across them
second. Lines are combined four at a time, which is what makes it fast: one load and one store of the result for four
multiply-adds. Planes of a block from `begin` to `end` are one piece of work; every sum has one order. What the
arguments mean is said where they are made: :mod:`dosekit.maps.loops`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["gather_planes", "share_planes", "spread_planes"]


@njit(**PART)
def _along(line, stride, taps, reach, out):  # type: ignore[no-untyped-def]
    """Set out[x] to the sum over t of taps[|t|] line[x + (reach + t) stride]."""
    middle = reach * stride
    centre, factor = line[middle:], taps[0]
    for x in range(out.size):
        out[x] = factor * centre[x]
    for t in range(1, reach + 1, 2):
        n = min(t + 1, reach)
        one, other = taps[t], (taps[n] if n > t else 0.0)
        a, b = line[middle - t * stride :], line[middle + t * stride :]
        c, d = line[middle - n * stride :], line[middle + n * stride :]
        for x in range(out.size):
            out[x] += one * (a[x] + b[x]) + other * (c[x] + d[x])


@njit(**PART)
def _across(lines, shift, first, last, centre, taps, out):  # type: ignore[no-untyped-def]
    """Add to out[x] the sum over r from first to last - 1 of taps[|r - centre|] lines[r, x + shift]."""
    for r in range(first, last, 4):
        r1, r2, r3 = min(r + 1, last - 1), min(r + 2, last - 1), min(r + 3, last - 1)
        f0 = taps[abs(r - centre)]
        f1 = taps[abs(r1 - centre)] if r + 1 < last else 0.0
        f2 = taps[abs(r2 - centre)] if r + 2 < last else 0.0
        f3 = taps[abs(r3 - centre)] if r + 3 < last else 0.0
        a, b, c, d = lines[r][shift:], lines[r1][shift:], lines[r2][shift:], lines[r3][shift:]
        for x in range(out.size):
            out[x] += f0 * a[x] + f1 * b[x] + f2 * c[x] + f3 * d[x]


@njit(**PART)
def _spread(source, used, taps_u, taps_v, radius, corner, stride, target, total):  # type: ignore[no-untyped-def]
    """Spread the widths of one plane: add to total[target, row, column x stride] from source[v, width, u x stride].

    `stride` values (energy and stops, or one part) stand beside each other; ``used[v, width]`` tells which rows hold
    anything; `corner` is the row and column of the first ray.
    """
    nv, widths, _ = source.shape
    nu, rows, columns = source.shape[2] // stride, total.shape[1], total.shape[2] // stride
    padded = np.empty((columns + nu + 2 * taps_u.shape[1]) * stride)
    lines = np.empty((nv, columns * stride))
    for g in range(widths):
        first, last = nv, 0
        for r in range(nv):
            if used[r, g]:
                first, last = min(first, r), r + 1
        if first >= last:
            continue
        reach = radius[g]
        low, high = max(0, corner[1] - reach), min(columns, corner[1] + nu + reach)
        size = (high - low) * stride
        begin = (corner[1] - low + reach) * stride
        for x in range(size + 2 * reach * stride):
            padded[x] = 0.0
        for r in range(first, last):
            line = lines[r][:size]
            for x in range(size):
                line[x] = 0.0
            if used[r, g]:
                for x in range(nu * stride):
                    padded[begin + x] = source[r, g, x]
                _along(padded, stride, taps_u[g], reach, line)
        for row in range(max(0, corner[0] + first - reach), min(rows, corner[0] + last + reach)):
            centre = row - corner[0]
            line = total[target[g], row][low * stride : high * stride]
            _across(lines, 0 * low, max(first, centre - reach), min(last, centre + reach + 1), centre, taps_v[g], line)


@njit(**PART)
def _gather(wanted, used, taps_u, taps_v, radius, corner, stride, target, source):  # type: ignore[no-untyped-def]
    """Transpose of `_spread`: source[v, width, u x stride] from wanted[target, row, column x stride]."""
    nv, widths, _ = source.shape
    nu, rows, columns = source.shape[2] // stride, wanted.shape[1], wanted.shape[2] // stride
    padded = np.empty((nu + 2 * taps_u.shape[1]) * stride)
    for g in range(widths):
        reach = radius[g]
        low, high = max(0, corner[1] - reach), min(columns, corner[1] + nu + reach)
        begin = (low - corner[1] + reach) * stride
        lines = wanted[target[g]]
        for r in range(nv):
            if not used[r, g]:
                continue
            centre = corner[0] + r
            for x in range((nu + 2 * reach) * stride):
                padded[x] = 0.0
            line = padded[begin : begin + (high - low) * stride]
            begin_row, end_row = max(0, centre - reach), min(rows, centre + reach + 1)
            _across(lines, low * stride, begin_row, end_row, centre, taps_v[g], line)
            _along(padded, stride, taps_u[g], reach, source[r, g])


@njit(**KERNEL)
def share_planes(gathered, row, share_v, source, used, begin, end):  # type: ignore[no-untyped-def]
    """Share rows of rays out among coarse rows.

    ``source[plane, coarse row, part, column]`` is made from ``gathered[plane, v, column, part]``, and
    ``used[plane, coarse row, part]`` becomes whether there is anything.
    """
    nv, columns, parts = gathered.shape[1:]
    for j in range(begin, end):
        for n in range(source.shape[1]):
            for b in range(parts):
                used[j, n, b] = 0
                for m in range(columns):
                    source[j, n, b, m] = 0.0
        for r in range(nv):
            n = row[r] - row[0]
            for b in range(parts):
                for m in range(columns):
                    value = gathered[j, r, m, b]
                    if value != 0.0:
                        used[j, n, b] = 1
                        used[j, n + 1, b] = 1
                        source[j, n, b, m] += (1.0 - share_v[r]) * value
                        source[j, n + 1, b, m] += share_v[r] * value


@njit(**KERNEL)
def spread_planes(  # type: ignore[no-untyped-def]
    source,
    used,
    kernel_of_plane,
    taps_u,
    taps_v,
    radius,
    corner,
    target,
    per_area,
    stride,
    first_plane,
    out,
    begin,
    end,
):
    """Spread planes of a block: out[plane, v, u, part] from source[plane, v, width, u x stride].

    With a stride of one every width adds to one part of the result; otherwise the values that stand beside each other
    are the parts.
    """
    _, rows, columns, parts = out.shape
    targets = parts // stride
    total = np.empty((targets, rows, columns * stride))
    for m in range(begin, end):
        j = first_plane + m
        n = kernel_of_plane[j]
        some = False
        for r in range(used.shape[1]):
            for g in range(used.shape[2]):
                some = some or used[m, r, g] != 0
        if not some:  # the result is zero as it is
            continue
        for t in range(targets):
            for row in range(rows):
                for x in range(columns * stride):
                    total[t, row, x] = 0.0
        _spread(source[m], used[m], taps_u[n], taps_v[n], radius[n], corner, stride, target, total)
        for row in range(rows):
            for c in range(columns):
                for part in range(parts):
                    t, k = part // stride, part % stride
                    out[j, row, c, part] = total[t, row, c * stride + k] * per_area[j]


@njit(**KERNEL)
def gather_planes(  # type: ignore[no-untyped-def]
    source,
    used,
    kernel_of_plane,
    taps_u,
    taps_v,
    radius,
    corner,
    target,
    per_area,
    stride,
    first_plane,
    given,
    begin,
    end,
):
    """Transpose of `spread_planes`, for the rows and widths that are used: source from given[plane, v, u, part]."""
    _, rows, columns, parts = given.shape
    wanted = np.empty((parts // stride, rows, columns * stride))
    for m in range(begin, end):
        j = first_plane + m
        n = kernel_of_plane[j]
        for row in range(rows):
            for c in range(columns):
                for part in range(parts):
                    t, k = part // stride, part % stride
                    wanted[t, row, c * stride + k] = given[j, row, c, part] * per_area[j]
        _gather(wanted, used[m], taps_u[n], taps_v[n], radius[n], corner, stride, target, source[m])

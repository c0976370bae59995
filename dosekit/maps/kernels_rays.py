"""Inner loop of the rays: how much matter lies between the planes of a field.

Plain arrays in, plain arrays out; rows of rays from `begin` to `end` are one piece of work, and no piece touches what
another writes. What the arguments mean is said where they are made: :mod:`dosekit.maps.rays`.
"""

from __future__ import annotations

from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["trace_rays"]


@njit(**PART)
def _between(f, count):  # type: ignore[no-untyped-def]
    """Return the voxel below an index position, the one above, and the share of that; the outer half voxel is flat."""
    f = min(max(f, 0.0), count - 1.0)
    i = int(f)
    return i, min(i + 1, count - 1), f - i


@njit(**KERNEL)
def trace_rays(rsp, scatter, start, step, length, enter, leave, ends, samples, wet, local, begin, end):  # type: ignore[no-untyped-def]
    """Add up stopping power along each ray, by linear interpolation between voxel centres.

    A point at w on ray [v, u] is ``start[v, u] + w step[v, u]`` in index units (x, y, z); the ray runs inside the
    volume from `enter` to `leave` and is `length` long for each step along w. ``ends`` are the planes, with the
    beginning of the first stretch before them. ``wet[j, v, u]`` becomes the water-equivalent path up to plane j,
    ``local[j, v, u]`` the mean of `scatter` between planes j - 1 and j.
    """
    nz, ny, nx = rsp.shape
    for r in range(begin, end):
        for c in range(wet.shape[2]):
            x0, y0, z0 = start[r, c, 0], start[r, c, 1], start[r, c, 2]
            dx, dy, dz = step[r, c, 0], step[r, c, 1], step[r, c, 2]
            path = 0.0
            for j in range(wet.shape[0]):
                stretch = ends[j + 1] - ends[j]
                sum_a, sum_b = 0.0, 0.0
                for s in range(samples):
                    low = max(ends[j] + stretch * s / samples, enter[r, c])
                    high = min(ends[j] + stretch * (s + 1) / samples, leave[r, c])
                    if high <= low:
                        continue
                    at = 0.5 * (low + high)
                    ix, jx, tx = _between(x0 + at * dx, nx)
                    iy, jy, ty = _between(y0 + at * dy, ny)
                    iz, jz, tz = _between(z0 + at * dz, nz)
                    for corner in range(4):
                        y, wy = (jy, ty) if corner % 2 else (iy, 1.0 - ty)
                        z, wz = (jz, tz) if corner >= 2 else (iz, 1.0 - tz)
                        weight = wy * wz * (high - low)
                        sum_a += weight * ((1.0 - tx) * rsp[z, y, ix] + tx * rsp[z, y, jx])
                        sum_b += weight * ((1.0 - tx) * scatter[z, y, ix] + tx * scatter[z, y, jx])
                path += sum_a * length[r, c]
                wet[j, r, c] = path
                local[j, r, c] = sum_b / stretch if stretch > 0.0 else 0.0

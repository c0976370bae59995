"""Inner loop of the rays: how much matter lies between the planes of a field.

Plain arrays in, plain arrays out; rows of rays from `begin` to `end` are one piece of work, and no piece touches what
another writes. What the arguments mean is said where they are made: :mod:`dosekit.maps.rays`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = ["trace_rays"]


@njit(nogil=True, error_model="numpy")
def _sample(rsp, scatter, fx, fy, fz):  # type: ignore[no-untyped-def]
    """Interpolate two volumes at an index position inside; the outer half voxel is flat."""
    nz, ny, nx = rsp.shape
    fx = min(max(fx, 0.0), nx - 1.0)
    fy = min(max(fy, 0.0), ny - 1.0)
    fz = min(max(fz, 0.0), nz - 1.0)
    ix = min(int(fx), max(nx - 2, 0))
    iy = min(int(fy), max(ny - 2, 0))
    iz = min(int(fz), max(nz - 2, 0))
    tx, ty, tz = fx - ix, fy - iy, fz - iz
    jx, jy, jz = min(ix + 1, nx - 1), min(iy + 1, ny - 1), min(iz + 1, nz - 1)
    w00, w01, w10, w11 = (1.0 - tz) * (1.0 - ty), (1.0 - tz) * ty, tz * (1.0 - ty), tz * ty
    a = (
        w00 * ((1.0 - tx) * rsp[iz, iy, ix] + tx * rsp[iz, iy, jx])
        + w01 * ((1.0 - tx) * rsp[iz, jy, ix] + tx * rsp[iz, jy, jx])
        + w10 * ((1.0 - tx) * rsp[jz, iy, ix] + tx * rsp[jz, iy, jx])
        + w11 * ((1.0 - tx) * rsp[jz, jy, ix] + tx * rsp[jz, jy, jx])
    )
    b = (
        w00 * ((1.0 - tx) * scatter[iz, iy, ix] + tx * scatter[iz, iy, jx])
        + w01 * ((1.0 - tx) * scatter[iz, jy, ix] + tx * scatter[iz, jy, jx])
        + w10 * ((1.0 - tx) * scatter[jz, iy, ix] + tx * scatter[jz, iy, jx])
        + w11 * ((1.0 - tx) * scatter[jz, jy, ix] + tx * scatter[jz, jy, jx])
    )
    return a, b


@njit(nogil=True, error_model="numpy", cache=True)
def trace_rays(  # type: ignore[no-untyped-def]
    rsp, scatter, origin, spacing, base, axes, inverse_source, u, v, w, lead, samples, wet, local, begin, end
):
    """Add up stopping power along each ray.

    ``wet[j, v, u]`` becomes the water-equivalent path up to plane j, ``local[j, v, u]`` the mean of `scatter` between
    planes j - 1 and j. The first stretch begins `lead` before the first plane. `base` is the isocentre.
    """
    nw = w.size
    for r in range(begin, end):
        for c in range(u.size):
            # a point on the ray is start + w * step, in index units
            start = np.empty(3)
            step = np.empty(3)
            length = 0.0
            for a in range(3):
                across = u[c] * axes[0, a] + v[r] * axes[1, a]
                slope = axes[2, a] + across * inverse_source
                start[a] = (base[a] + across - origin[a]) / spacing[a]
                step[a] = slope / spacing[a]
                length += slope * slope
            length = np.sqrt(length)
            enter, leave = -np.inf, np.inf  # where the ray runs inside the volume
            for a in range(3):
                low, high = -0.5, rsp.shape[2 - a] - 0.5
                if step[a] == 0.0:
                    if start[a] < low or start[a] > high:
                        leave = -np.inf
                else:
                    one, other = (low - start[a]) / step[a], (high - start[a]) / step[a]
                    enter, leave = max(enter, min(one, other)), min(leave, max(one, other))
            path = 0.0
            for j in range(nw):
                stretch = lead if j == 0 else w[j] - w[j - 1]
                before = w[0] - lead if j == 0 else w[j - 1]
                sum_a = 0.0
                sum_b = 0.0
                for s in range(samples):
                    low = max(before + stretch * s / samples, enter)
                    high = min(before + stretch * (s + 1) / samples, leave)
                    if high <= low:
                        continue
                    at = 0.5 * (low + high)
                    a, b = _sample(
                        rsp, scatter, start[0] + at * step[0], start[1] + at * step[1], start[2] + at * step[2]
                    )
                    sum_a += a * (high - low)
                    sum_b += b * (high - low)
                path += sum_a * length
                wet[j, r, c] = path
                local[j, r, c] = sum_b / stretch if stretch > 0.0 else 0.0

"""The fold's inner loops: rays through voxels, spots on rays, spread in planes, and back to voxels.

Everything is plain arrays in, plain arrays out. Each output element is summed by one thread in one order, so that the
result does not depend on the number of threads. Forward loops and their transposes stand side by side. What the
arguments mean is said where they are made: :mod:`dosekit.maps.rays`, :mod:`dosekit.maps.tables` and
:mod:`dosekit.maps.pencils`.
"""

from __future__ import annotations

import numpy as np
from numba import njit, prange

__all__ = [
    "deposit",
    "deposit_transposed",
    "lay_spots",
    "lay_spots_transposed",
    "prepare_matter",
    "spread",
    "spread_transposed",
    "trace_rays",
    "widest_spread",
]


@njit(parallel=True, error_model="numpy", cache=True)
def prepare_matter(density, index, rsp_per_density, scatter_ratio, rsp, scatter):  # type: ignore[no-untyped-def]
    """Fill relative stopping power, and the same times the material's scattering ratio."""
    nz, ny, nx = density.shape
    for z in prange(nz):
        for y in range(ny):
            for x in range(nx):
                m = index[z, y, x]
                value = density[z, y, x] * rsp_per_density[m]
                rsp[z, y, x] = value
                scatter[z, y, x] = value * scatter_ratio[m]


@njit(inline="always", error_model="numpy")
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


@njit(parallel=True, error_model="numpy", cache=True)
def trace_rays(rsp, scatter, origin, spacing, base, axes, inverse_source, u, v, w, lead, samples, wet, local):  # type: ignore[no-untyped-def]
    """Add up stopping power along each ray.

    ``wet[j, v, u]`` becomes the water-equivalent path up to plane j, ``local[j, v, u]`` the mean of `scatter` between
    planes j - 1 and j. The first stretch begins `lead` before the first plane. `base` is the isocentre.
    """
    nw = w.size
    for r in prange(v.size):
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
                begin = w[0] - lead if j == 0 else w[j - 1]
                sum_a = 0.0
                sum_b = 0.0
                for s in range(samples):
                    low = max(begin + stretch * s / samples, enter)
                    high = min(begin + stretch * (s + 1) / samples, leave)
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


@njit(inline="always", error_model="numpy")
def _row(wet, inverse_bin, last):  # type: ignore[no-untyped-def]
    """Return the table row below a depth and the share of the row above."""
    place = wet * inverse_bin - 0.5
    if place <= 0.0:
        return 0, 0.0
    i = int(place)
    if i >= last:
        return last - 1, 1.0
    return i, place - i


@njit(parallel=True, error_model="numpy", cache=True)
def widest_spread(wet, local, slant, w, inverse_bin, power, weight, start, ahead, reference):  # type: ignore[no-untyped-def]
    """Return the largest scatter variance of any ray and step that still counts, for each row of rays."""
    nw, nv, nu = wet.shape
    steps = power.shape[1]
    last = power.shape[0] - 1
    widest = np.zeros(nv)
    for r in prange(nv):
        for c in range(nu):
            a0 = start[0].copy()
            a1 = start[1].copy()
            a2 = start[2].copy()
            before = 0.0
            for j in range(nw):
                dl = (ahead if j == 0 else w[j] - w[j - 1]) * slant[r, c]
                i, f = _row(0.5 * (before + wet[j, r, c]), inverse_bin, last)
                before = wet[j, r, c]
                n, g = _row(before, inverse_bin, last)
                for k in range(steps):
                    t = local[j, r, c] * ((1.0 - f) * power[i, k] + f * power[i + 1, k]) if j > 0 else 0.0
                    a2[k] += dl * (2.0 * a1[k] + dl * (a0[k] + t * dl / 3.0))
                    a1[k] += dl * (a0[k] + 0.5 * t * dl)
                    a0[k] += t * dl
                    if (1.0 - g) * weight[n, k] + g * weight[n + 1, k] > 0.0:
                        widest[r] = max(widest[r], a2[k] - reference[k])
    return widest.max()


@njit(parallel=True, error_model="numpy", cache=True)
def lay_spots(weights, first_u, first_v, profile_u, profile_v, fluence):  # type: ignore[no-untyped-def]
    """Add the spots' profiles to the rays: fluence[v, u, step] in particles per ray."""
    spots, width_u, steps = profile_u.shape
    width_v = profile_v.shape[1]
    for r in prange(fluence.shape[0]):
        for s in range(spots):
            p = r - first_v[s]
            if p < 0 or p >= width_v:
                continue
            for q in range(width_u):
                c = first_u[s] + q
                for k in range(steps):
                    fluence[r, c, k] += weights[s, k] * profile_v[s, p, k] * profile_u[s, q, k]


@njit(parallel=True, error_model="numpy", cache=True)
def lay_spots_transposed(fluence, first_u, first_v, profile_u, profile_v, weights):  # type: ignore[no-untyped-def]
    """Transpose of `lay_spots`."""
    spots, width_u, steps = profile_u.shape
    width_v = profile_v.shape[1]
    for s in prange(spots):
        for p in range(width_v):
            for q in range(width_u):
                for k in range(steps):
                    weights[s, k] += (
                        fluence[first_v[s] + p, first_u[s] + q, k] * profile_v[s, p, k] * profile_u[s, q, k]
                    )


@njit(inline="always", error_model="numpy")
def _advance(state, r, c, j, dl, wet_before, wet, local, inverse_bin, power, last):  # type: ignore[no-untyped-def]
    """Carry the Fermi-Eyges moments of every step of one ray to the next plane."""
    i, f = _row(0.5 * (wet_before + wet), inverse_bin, last)
    scatter = local if j > 0 else 0.0
    for k in range(power.shape[1]):
        t = scatter * ((1.0 - f) * power[i, k] + f * power[i + 1, k])
        a0 = state[r, c, 0, k]
        a1 = state[r, c, 1, k]
        state[r, c, 2, k] += dl * (2.0 * a1 + dl * (a0 + t * dl / 3.0))
        state[r, c, 1, k] = a1 + dl * (a0 + 0.5 * t * dl)
        state[r, c, 0, k] = a0 + t * dl


@njit(inline="always", error_model="numpy")
def _split(variance, inverse_width_step, ladder):  # type: ignore[no-untyped-def]
    """Return the rung below a variance and the share of the rung above; the mixture's variance is exact."""
    if variance <= 0.0:
        return 0, 0.0
    g = min(int(np.sqrt(variance) * inverse_width_step), ladder.size - 2)
    share = (variance - ladder[g]) / (ladder[g + 1] - ladder[g])
    return g, min(max(share, 0.0), 1.0)


@njit(error_model="numpy", cache=True)
def _fill_row(  # type: ignore[no-untyped-def]
    j, r, gap, fluence, wet, local, slant, inverse_bin, power, narrow, state, reference, growth, ladder,
    inverse_width_step, broad, column, share_u, source, touched, gathered,
):  # fmt: skip
    """Take one row of rays to plane j and share out what they leave there: widths of the core, coarse columns."""
    steps = power.shape[1]
    last = power.shape[0] - 1
    parts = broad.shape[2]
    total = np.zeros(parts)
    touched[r, :] = 0
    source[:, :, r, :] = 0.0
    gathered[r] = 0.0
    for c in range(wet.shape[2]):
        depth = wet[j, r, c]
        before = wet[j - 1, r, c] if j > 0 else 0.0
        _advance(state, r, c, j, gap * slant[r, c], before, depth, local[j, r, c], inverse_bin, power, last)
        i, f = _row(depth, inverse_bin, last)
        total[:] = 0.0
        some = False
        for k in range(steps):
            number = fluence[r, c, k] * slant[r, c]
            if number == 0.0:
                continue
            some = True
            low = (1.0 - f) * number
            high = f * number
            for b in range(parts):
                total[b] += low * broad[i, k, b] + high * broad[i + 1, k, b]
            energy = low * narrow[i, k, 0] + high * narrow[i + 1, k, 0]
            stops = low * narrow[i, k, 1] + high * narrow[i + 1, k, 1]
            if energy == 0.0 and stops == 0.0:
                continue
            g, share = _split(state[r, c, 2, k] - reference[k] * growth, inverse_width_step, ladder)
            source[g, 0, r, c] += (1.0 - share) * energy
            source[g, 1, r, c] += (1.0 - share) * stops
            touched[r, g] = 1
            if share > 0.0:
                source[g + 1, 0, r, c] += share * energy
                source[g + 1, 1, r, c] += share * stops
                touched[r, g + 1] = 1
        if some:
            n = column[c] - column[0]
            for b in range(parts):
                gathered[r, n, b] += (1.0 - share_u[c]) * total[b]
                gathered[r, n + 1, b] += share_u[c] * total[b]


@njit(error_model="numpy", cache=True)
def _touch_row(  # type: ignore[no-untyped-def]
    j, r, gap, wet, local, slant, inverse_bin, power, narrow, state, reference, growth, ladder, inverse_width_step,
    touched,
):  # fmt: skip
    """Take one row of rays to plane j and note which widths they use."""
    last = power.shape[0] - 1
    touched[r, :] = 0
    for c in range(wet.shape[2]):
        depth = wet[j, r, c]
        before = wet[j - 1, r, c] if j > 0 else 0.0
        _advance(state, r, c, j, gap * slant[r, c], before, depth, local[j, r, c], inverse_bin, power, last)
        i, f = _row(depth, inverse_bin, last)
        for k in range(power.shape[1]):
            energy = (1.0 - f) * narrow[i, k, 0] + f * narrow[i + 1, k, 0]
            stops = (1.0 - f) * narrow[i, k, 1] + f * narrow[i + 1, k, 1]
            if energy == 0.0 and stops == 0.0:
                continue
            g, share = _split(state[r, c, 2, k] - reference[k] * growth, inverse_width_step, ladder)
            touched[r, g] = 1
            if share > 0.0:
                touched[r, g + 1] = 1


@njit(error_model="numpy", cache=True)
def _list_rungs(touched, rungs):  # type: ignore[no-untyped-def]
    """Write down the widths that any row uses; return how many."""
    used = 0
    for g in range(touched.shape[1]):
        for r in range(touched.shape[0]):
            if touched[r, g]:
                rungs[used] = g
                used += 1
                break
    return used


@njit(error_model="numpy", cache=True)
def _spread_along_u(source, taps, reach, first_column, across):  # type: ignore[no-untyped-def]
    """Spread one row of rays along u: across[part, column] from source[part, ray]."""
    parts, nu = source.shape
    columns = across.shape[1]
    for part in range(parts):
        across[part, :] = 0.0
        for t in range(-reach, reach + 1):
            tap = taps[abs(t)]
            shift = first_column + t
            for c in range(max(0, -shift), min(nu, columns - shift)):
                across[part, shift + c] += tap * source[part, c]


@njit(error_model="numpy", cache=True)
def _gather_along_u(across, taps, reach, first_column, source):  # type: ignore[no-untyped-def]
    """Transpose of `_spread_along_u`."""
    parts, nu = source.shape
    columns = across.shape[1]
    for part in range(parts):
        source[part, :] = 0.0
        for t in range(-reach, reach + 1):
            tap = taps[abs(t)]
            shift = first_column + t
            for c in range(max(0, -shift), min(nu, columns - shift)):
                source[part, c] += tap * across[part, shift + c]


@njit(error_model="numpy", cache=True)
def _spread_along_v(row, across, taps, radius, rungs, used, touched, first_row, per_area, line, out):  # type: ignore[no-untyped-def]
    """Collect one row of a plane from the rows of rays, over all widths."""
    nv = touched.shape[0]
    columns = line.size
    for part in range(2):
        line[:] = 0.0
        for n in range(used):
            g = rungs[n]
            reach = radius[g]
            for r in range(max(0, row - first_row - reach), min(nv, row - first_row + reach + 1)):
                if touched[r, g] == 0:
                    continue
                tap = taps[g, abs(row - first_row - r)]
                for c in range(columns):
                    line[c] += tap * across[g, part, r, c]
        for c in range(columns):
            out[c, part] = line[c] * per_area


@njit(error_model="numpy", cache=True)
def _gather_along_v(g, r, plane, taps, reach, first_row, per_area, across):  # type: ignore[no-untyped-def]
    """Transpose of `_spread_along_v` for one width and row of rays."""
    rows, columns = plane.shape[0], plane.shape[1]
    for part in range(2):
        across[g, part, r, :] = 0.0
        for row in range(max(0, first_row + r - reach), min(rows, first_row + r + reach + 1)):
            tap = taps[abs(row - first_row - r)] * per_area
            for c in range(columns):
                across[g, part, r, c] += tap * plane[row, c, part]


@njit(error_model="numpy", cache=True)
def _coarse_along_u(row, gathered, coarse_row, share_v, taps, reach, first_column, source, across):  # type: ignore[no-untyped-def]
    """Add rows of rays into one coarse row and spread it along u."""
    active, parts = source.shape
    source[:] = 0.0
    across[:] = 0.0
    for r in range(coarse_row.size):
        here = coarse_row[r] - coarse_row[0]
        if here == row:
            share = 1.0 - share_v[r]
        elif here + 1 == row:
            share = share_v[r]
        else:
            continue
        for n in range(active):
            for b in range(parts):
                source[n, b] += share * gathered[r, n, b]
    for column in range(across.shape[0]):
        for n in range(active):
            offset = abs(column - first_column - n)
            for b in range(reach[offset]):
                across[column, b] += taps[offset, b] * source[n, b]


@njit(error_model="numpy", cache=True)
def _coarse_along_v(row, across, taps, reach, first_row, component, per_area, cell, out):  # type: ignore[no-untyped-def]
    """Collect one coarse row from the coarse rows of rays and add the parts of each component."""
    active, columns, parts = across.shape
    for column in range(columns):
        cell[:] = 0.0
        for n in range(active):
            offset = abs(row - first_row - n)
            for b in range(reach[offset]):
                cell[b] += taps[offset, b] * across[n, column, b]
        for m in range(out.shape[1]):
            out[column, m] = 0.0
        for b in range(parts):
            out[column, component[b]] += cell[b] * per_area


@njit(error_model="numpy", cache=True)
def _coarse_transposed(n, plane, taps_u, taps_v, reach, first_row, first_column, component, per_area, across, source):  # type: ignore[no-untyped-def]
    """Transpose of both coarse spreads for one coarse row of rays."""
    rows, columns = plane.shape[0], plane.shape[1]
    active, parts = source.shape
    cell = np.zeros(parts)
    for column in range(columns):
        cell[:] = 0.0
        for row in range(rows):
            offset = abs(row - first_row - n)
            for b in range(reach[offset]):
                cell[b] += taps_v[offset, b] * plane[row, column, component[b]]
        for b in range(parts):
            across[column, b] = cell[b] * per_area
    for m in range(active):
        cell[:] = 0.0
        for column in range(columns):
            offset = abs(column - first_column - m)
            for b in range(reach[offset]):
                cell[b] += taps_u[offset, b] * across[column, b]
        for b in range(parts):
            source[m, b] = cell[b]


@njit(error_model="numpy", cache=True)
def _read_row(  # type: ignore[no-untyped-def]
    j, r, wet, slant, inverse_bin, power, narrow, state, reference, growth, ladder, inverse_width_step, broad,
    column, share_u, row, share_v, source, coarse, fluence,
):  # fmt: skip
    """Transpose of `_fill_row`: what each particle on a row of rays is worth at plane j."""
    last = power.shape[0] - 1
    parts = broad.shape[2]
    total = np.zeros(parts)
    n = row[r] - row[0]
    for c in range(wet.shape[2]):
        m = column[c] - column[0]
        for b in range(parts):
            total[b] = (1.0 - share_v[r]) * (
                (1.0 - share_u[c]) * coarse[n, m, b] + share_u[c] * coarse[n, m + 1, b]
            ) + share_v[r] * ((1.0 - share_u[c]) * coarse[n + 1, m, b] + share_u[c] * coarse[n + 1, m + 1, b])
        i, f = _row(wet[j, r, c], inverse_bin, last)
        for k in range(power.shape[1]):
            value = 0.0
            for b in range(parts):
                value += total[b] * ((1.0 - f) * broad[i, k, b] + f * broad[i + 1, k, b])
            energy = (1.0 - f) * narrow[i, k, 0] + f * narrow[i + 1, k, 0]
            stops = (1.0 - f) * narrow[i, k, 1] + f * narrow[i + 1, k, 1]
            if energy != 0.0 or stops != 0.0:
                g, share = _split(state[r, c, 2, k] - reference[k] * growth, inverse_width_step, ladder)
                value += (1.0 - share) * (energy * source[g, 0, r, c] + stops * source[g, 1, r, c])
                if share > 0.0:
                    value += share * (energy * source[g + 1, 0, r, c] + stops * source[g + 1, 1, r, c])
            fluence[r, c, k] += value * slant[r, c]


@njit(error_model="numpy", cache=True)
def _begin(start, state):  # type: ignore[no-untyped-def]
    """Set the moments of every ray to those at the start."""
    for r in range(state.shape[0]):
        for c in range(state.shape[1]):
            state[r, c] = start


@njit(parallel=True, error_model="numpy", cache=True)
def spread(  # type: ignore[no-untyped-def]
    fluence, wet, local, slant, w, inverse_bin, power, narrow, start, ahead, reference, growth, ladder,
    inverse_width_step, kernel_of_plane, taps_u, taps_v, radius, first_row, first_column, per_area,
    broad, coarse_column, coarse_share_u, coarse_row, coarse_share_v, broad_taps_u, broad_taps_v, broad_reach,
    broad_component, coarse_first_row, coarse_first_column, coarse_per_area, fine_map, coarse_map,
):  # fmt: skip
    """Fold the fluence on rays into maps on the planes: fine_map[j, v, u, 2] and coarse_map[j, v, u, component]."""
    nw, nv, nu = wet.shape
    columns, coarse_columns = fine_map.shape[2], coarse_map.shape[2]
    parts = broad.shape[2]
    active_rows = coarse_row[nv - 1] - coarse_row[0] + 2
    active_columns = coarse_column[nu - 1] - coarse_column[0] + 2
    state = np.empty((nv, nu, 3, power.shape[1]))
    _begin(start, state)
    source = np.zeros((ladder.size, 2, nv, nu))
    across = np.zeros((ladder.size, 2, nv, columns))
    touched = np.zeros((nv, ladder.size), dtype=np.uint8)
    rungs = np.zeros(ladder.size, dtype=np.int64)
    gathered = np.zeros((nv, active_columns, parts))
    coarse_source = np.zeros((active_rows, active_columns, parts))
    coarse_across = np.zeros((active_rows, coarse_columns, parts))
    for j in range(nw):
        gap = ahead if j == 0 else w[j] - w[j - 1]
        n = kernel_of_plane[j]
        for r in prange(nv):
            _fill_row(
                j, r, gap, fluence, wet, local, slant, inverse_bin, power, narrow, state, reference, growth[j],
                ladder, inverse_width_step, broad, coarse_column, coarse_share_u, source, touched, gathered,
            )  # fmt: skip
        used = _list_rungs(touched, rungs)
        for task in prange(used * nv):
            g = rungs[task // nv]
            r = task % nv
            if touched[r, g]:
                _spread_along_u(source[g, :, r], taps_u[n, g], radius[n, g], first_column, across[g, :, r])
        for row in prange(fine_map.shape[1]):
            _spread_along_v(
                row, across, taps_v[n], radius[n], rungs, used, touched, first_row, per_area[j], np.empty(columns),
                fine_map[j, row],
            )  # fmt: skip
        for row in prange(active_rows):
            _coarse_along_u(
                row, gathered, coarse_row, coarse_share_v, broad_taps_u[n], broad_reach[n], coarse_first_column,
                coarse_source[row], coarse_across[row],
            )  # fmt: skip
        for row in prange(coarse_map.shape[1]):
            _coarse_along_v(
                row, coarse_across, broad_taps_v[n], broad_reach[n], coarse_first_row, broad_component,
                coarse_per_area[j], np.empty(parts), coarse_map[j, row],
            )  # fmt: skip


@njit(parallel=True, error_model="numpy", cache=True)
def spread_transposed(  # type: ignore[no-untyped-def]
    fine_map, coarse_map, wet, local, slant, w, inverse_bin, power, narrow, start, ahead, reference, growth, ladder,
    inverse_width_step, kernel_of_plane, taps_u, taps_v, radius, first_row, first_column, per_area,
    broad, coarse_column, coarse_share_u, coarse_row, coarse_share_v, broad_taps_u, broad_taps_v, broad_reach,
    broad_component, coarse_first_row, coarse_first_column, coarse_per_area, fluence,
):  # fmt: skip
    """Transpose of `spread`: maps on the planes to fluence on rays."""
    nw, nv, nu = wet.shape
    columns, coarse_columns = fine_map.shape[2], coarse_map.shape[2]
    parts = broad.shape[2]
    active_rows = coarse_row[nv - 1] - coarse_row[0] + 2
    active_columns = coarse_column[nu - 1] - coarse_column[0] + 2
    state = np.empty((nv, nu, 3, power.shape[1]))
    _begin(start, state)
    fluence[:] = 0.0
    source = np.zeros((ladder.size, 2, nv, nu))
    across = np.zeros((ladder.size, 2, nv, columns))
    touched = np.zeros((nv, ladder.size), dtype=np.uint8)
    rungs = np.zeros(ladder.size, dtype=np.int64)
    coarse_source = np.zeros((active_rows, active_columns, parts))
    coarse_across = np.zeros((active_rows, coarse_columns, parts))
    for j in range(nw):
        gap = ahead if j == 0 else w[j] - w[j - 1]
        n = kernel_of_plane[j]
        for r in prange(nv):
            _touch_row(
                j, r, gap, wet, local, slant, inverse_bin, power, narrow, state, reference, growth[j], ladder,
                inverse_width_step, touched,
            )  # fmt: skip
        used = _list_rungs(touched, rungs)
        for task in prange(used * nv):
            g = rungs[task // nv]
            r = task % nv
            if touched[r, g]:
                _gather_along_v(g, r, fine_map[j], taps_v[n, g], radius[n, g], first_row, per_area[j], across)
                _gather_along_u(across[g, :, r], taps_u[n, g], radius[n, g], first_column, source[g, :, r])
        for row in prange(active_rows):
            _coarse_transposed(
                row, coarse_map[j], broad_taps_u[n], broad_taps_v[n], broad_reach[n], coarse_first_row,
                coarse_first_column, broad_component, coarse_per_area[j], coarse_across[row], coarse_source[row],
            )  # fmt: skip
        for r in prange(nv):
            _read_row(
                j, r, wet, slant, inverse_bin, power, narrow, state, reference, growth[j], ladder,
                inverse_width_step, broad, coarse_column, coarse_share_u, coarse_row, coarse_share_v, source,
                coarse_source, fluence,
            )  # fmt: skip


@njit(inline="always", error_model="numpy")
def _corner(value, first, inverse_step, count):  # type: ignore[no-untyped-def]
    """Return the node below a position, the share of the node above, and whether it lies on the lattice."""
    place = (value - first) * inverse_step
    i = int(np.floor(place))
    return i, place - i, i >= 0 and i + 1 < count


@njit(inline="always", error_model="numpy")
def _three(value, first, inverse_step, count, on_nodes, weights):  # type: ignore[no-untyped-def]
    """Fill the weights of the quadratic B-spline about the nearest node; return the node below and if it fits.

    The weights add to one and their variance is a quarter at any place. A position on a node may take it alone.
    """
    place = (value - first) * inverse_step
    i = int(np.floor(place + 0.5))
    t = place - i
    if on_nodes:
        weights[0], weights[1], weights[2] = 0.0, 1.0, 0.0
    else:
        weights[0], weights[1], weights[2] = 0.5 * (0.5 - t) ** 2, 0.75 - t * t, 0.5 * (0.5 + t) ** 2
    return i - 1, i >= 1 and i + 1 < count


@njit(parallel=True, error_model="numpy", cache=True)
def deposit(  # type: ignore[no-untyped-def]
    voxels, places, shape, origin, spacing, base, axes, inverse_source, sub, on_nodes, w0, inverse_dw,
    u0, v0, inverse_h, fine_map, coarse_u0, coarse_v0, coarse_inverse_h, coarse_map, fine_target, coarse_target,
    index, rsp, factor, out,
):  # fmt: skip
    """Add the maps to voxels: out[target, place] += factor[target, material] * the mean of the map in the voxel.

    Targets with a negative factor are per length of path: the factor's size times the voxel's stopping power counts.
    """
    ny, nx = shape[1], shape[2]
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    parts = fine_map.shape[3]
    components = coarse_map.shape[3]
    chunk = 4096
    for piece in prange((voxels.size + chunk - 1) // chunk):
        value = np.zeros(parts + components)
        weights_u, weights_v = np.empty(3), np.empty(3)
        for n in range(piece * chunk, min((piece + 1) * chunk, voxels.size)):
            flat = voxels[n]
            ix = flat % nx
            iy = (flat // nx) % ny
            iz = flat // (nx * ny)
            value[:] = 0.0
            some = False
            for a in range(sub[0]):
                px = origin[0] + spacing[0] * (ix + (a + 0.5) / sub[0] - 0.5) - base[0]
                for b in range(sub[1]):
                    py = origin[1] + spacing[1] * (iy + (b + 0.5) / sub[1] - 0.5) - base[1]
                    for c in range(sub[2]):
                        pz = origin[2] + spacing[2] * (iz + (c + 0.5) / sub[2] - 0.5) - base[2]
                        w = axes[2, 0] * px + axes[2, 1] * py + axes[2, 2] * pz
                        j, fw, inside = _corner(w, w0, inverse_dw, fine_map.shape[0])
                        if not inside:
                            continue
                        shrink = 1.0 / (1.0 + w * inverse_source)
                        u = (axes[0, 0] * px + axes[0, 1] * py + axes[0, 2] * pz) * shrink
                        v = (axes[1, 0] * px + axes[1, 1] * py + axes[1, 2] * pz) * shrink
                        k, inside_u = _three(u, u0, inverse_h, fine_map.shape[2], on_nodes, weights_u)
                        i, inside_v = _three(v, v0, inverse_h, fine_map.shape[1], on_nodes, weights_v)
                        if inside_u and inside_v:
                            some = True
                            for dj in range(2):
                                ww = (fw if dj else 1.0 - fw) * share
                                for di in range(3):
                                    wv = ww * weights_v[di]
                                    if wv == 0.0:
                                        continue
                                    for dk in range(3):
                                        weight = wv * weights_u[dk]
                                        if weight == 0.0:
                                            continue
                                        for m in range(parts):
                                            value[m] += weight * fine_map[j + dj, i + di, k + dk, m]
                        k, fu, inside_u = _corner(u, coarse_u0, coarse_inverse_h, coarse_map.shape[2])
                        i, fv, inside_v = _corner(v, coarse_v0, coarse_inverse_h, coarse_map.shape[1])
                        if inside_u and inside_v:
                            some = True
                            for dj in range(2):
                                ww = fw if dj else 1.0 - fw
                                for di in range(2):
                                    wv = ww * (fv if di else 1.0 - fv)
                                    for dk in range(2):
                                        weight = wv * (fu if dk else 1.0 - fu) * share
                                        for m in range(components):
                                            value[parts + m] += weight * coarse_map[j + dj, i + di, k + dk, m]
            if some:
                place = places[n]
                matter = index[flat]
                for m in range(parts + components):
                    t = fine_target[m] if m < parts else coarse_target[m - parts]
                    if t >= 0:
                        size = factor[t, matter]
                        out[t, place] += (size if size >= 0.0 else -size * rsp[flat]) * value[m]


@njit(parallel=True, error_model="numpy", cache=True)
def deposit_transposed(  # type: ignore[no-untyped-def]
    slabs, voxels, places, shape, origin, spacing, base, axes, inverse_source, sub, on_nodes, w0, inverse_dw,
    u0, v0, inverse_h, fine_map, coarse_u0, coarse_v0, coarse_inverse_h, coarse_map, fine_target, coarse_target,
    index, rsp, factor, out,
):  # fmt: skip
    """Transpose of `deposit`: add voxels to the maps.

    Voxels of one slab ``slabs[s]:slabs[s + 1]`` reach no node that the next slab but one reaches, so that even slabs
    may be done at once, and then odd ones.
    """
    ny, nx = shape[1], shape[2]
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    parts = fine_map.shape[3]
    components = coarse_map.shape[3]
    count = slabs.size - 1
    for colour in range(2):
        for half in prange((count - colour + 1) // 2):
            slab = 2 * half + colour
            value = np.zeros(parts + components)
            weights_u, weights_v = np.empty(3), np.empty(3)
            for n in range(slabs[slab], slabs[slab + 1]):
                flat = voxels[n]
                place = places[n]
                ix = flat % nx
                iy = (flat // nx) % ny
                iz = flat // (nx * ny)
                some = False
                for m in range(parts + components):
                    t = fine_target[m] if m < parts else coarse_target[m - parts]
                    value[m] = 0.0
                    if t >= 0:
                        size = factor[t, index[flat]]
                        value[m] = (size if size >= 0.0 else -size * rsp[flat]) * out[t, place] * share
                        some = some or value[m] != 0.0
                if not some:
                    continue
                for a in range(sub[0]):
                    px = origin[0] + spacing[0] * (ix + (a + 0.5) / sub[0] - 0.5) - base[0]
                    for b in range(sub[1]):
                        py = origin[1] + spacing[1] * (iy + (b + 0.5) / sub[1] - 0.5) - base[1]
                        for c in range(sub[2]):
                            pz = origin[2] + spacing[2] * (iz + (c + 0.5) / sub[2] - 0.5) - base[2]
                            w = axes[2, 0] * px + axes[2, 1] * py + axes[2, 2] * pz
                            j, fw, inside = _corner(w, w0, inverse_dw, fine_map.shape[0])
                            if not inside:
                                continue
                            shrink = 1.0 / (1.0 + w * inverse_source)
                            u = (axes[0, 0] * px + axes[0, 1] * py + axes[0, 2] * pz) * shrink
                            v = (axes[1, 0] * px + axes[1, 1] * py + axes[1, 2] * pz) * shrink
                            k, inside_u = _three(u, u0, inverse_h, fine_map.shape[2], on_nodes, weights_u)
                            i, inside_v = _three(v, v0, inverse_h, fine_map.shape[1], on_nodes, weights_v)
                            if inside_u and inside_v:
                                for dj in range(2):
                                    ww = fw if dj else 1.0 - fw
                                    for di in range(3):
                                        wv = ww * weights_v[di]
                                        if wv == 0.0:
                                            continue
                                        for dk in range(3):
                                            weight = wv * weights_u[dk]
                                            if weight == 0.0:
                                                continue
                                            for m in range(parts):
                                                fine_map[j + dj, i + di, k + dk, m] += weight * value[m]
                            k, fu, inside_u = _corner(u, coarse_u0, coarse_inverse_h, coarse_map.shape[2])
                            i, fv, inside_v = _corner(v, coarse_v0, coarse_inverse_h, coarse_map.shape[1])
                            if inside_u and inside_v:
                                for dj in range(2):
                                    ww = fw if dj else 1.0 - fw
                                    for di in range(2):
                                        wv = ww * (fv if di else 1.0 - fv)
                                        for dk in range(2):
                                            weight = wv * (fu if dk else 1.0 - fu)
                                            for m in range(components):
                                                coarse_map[j + dj, i + di, k + dk, m] += weight * value[parts + m]

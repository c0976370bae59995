"""The fold's inner loops: rays through voxels, spots on rays, spread in planes, and back to voxels.

Everything is plain arrays in, plain arrays out. Kernels do the pieces from `begin` to `end`, which plain threads
share; each output element is summed in one piece and one order, so that the result does not depend on the number of
threads. Forward loops and their transposes stand side by side. What the arguments mean is said where they are made:
:mod:`dosekit.maps.rays`, :mod:`dosekit.maps.tables` and :mod:`dosekit.maps.pencils`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

__all__ = [
    "deposit",
    "deposit_transposed",
    "follow_rows",
    "gather_planes",
    "lay_spots",
    "lay_spots_transposed",
    "prepare_matter",
    "read_rows",
    "spread_planes",
    "touch_rows",
    "trace_rays",
    "widest_spread",
]


@njit(nogil=True, error_model="numpy", cache=True)
def prepare_matter(density, index, rsp_per_density, scatter_ratio, rsp, scatter, begin, end):  # type: ignore[no-untyped-def]
    """Fill relative stopping power, and the same times the material's scattering ratio."""
    _, ny, nx = density.shape
    for z in range(begin, end):
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


@njit(nogil=True, error_model="numpy", cache=True)
def widest_spread(wet, local, slant, w, inverse_bin, power, weight, start, ahead, reference, widest, begin, end):  # type: ignore[no-untyped-def]
    """Find the largest scatter variance of any ray and step that still counts, for each row of rays."""
    nw, _, nu = wet.shape
    steps = power.shape[1]
    last = power.shape[0] - 1
    a0, a1, a2 = np.empty(steps), np.empty(steps), np.empty(steps)
    for r in range(begin, end):
        for c in range(nu):
            for k in range(steps):
                a0[k], a1[k], a2[k] = start[0, k], start[1, k], start[2, k]
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


@njit(nogil=True, error_model="numpy", cache=True)
def lay_spots(weights, first_u, first_v, profile_u, profile_v, fluence, begin, end):  # type: ignore[no-untyped-def]
    """Add the spots' profiles to the rays: fluence[v, u, step] in particles per ray."""
    spots, width_u, steps = profile_u.shape
    width_v = profile_v.shape[1]
    for r in range(begin, end):
        for s in range(spots):
            p = r - first_v[s]
            if p < 0 or p >= width_v:
                continue
            for q in range(width_u):
                c = first_u[s] + q
                for k in range(steps):
                    fluence[r, c, k] += weights[s, k] * profile_v[s, p, k] * profile_u[s, q, k]


@njit(nogil=True, error_model="numpy", cache=True)
def lay_spots_transposed(fluence, first_u, first_v, profile_u, profile_v, weights, begin, end):  # type: ignore[no-untyped-def]
    """Transpose of `lay_spots`."""
    _, width_u, steps = profile_u.shape
    width_v = profile_v.shape[1]
    for s in range(begin, end):
        for p in range(width_v):
            for q in range(width_u):
                for k in range(steps):
                    weights[s, k] += (
                        fluence[first_v[s] + p, first_u[s] + q, k] * profile_v[s, p, k] * profile_u[s, q, k]
                    )


@njit(inline="always", error_model="numpy")
def _advance(state, r, c, j, dl, wet_before, wet, local, inverse_bin, power, alive, last):  # type: ignore[no-untyped-def]
    """Carry the Fermi-Eyges moments of every step of one ray to the next plane."""
    i, f = _row(0.5 * (wet_before + wet), inverse_bin, last)
    scatter = local if j > 0 else 0.0
    for k in range(alive[i]):
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
    share = (variance * inverse_width_step * inverse_width_step - g * g) / (2.0 * g + 1.0)
    return g, min(max(share, 0.0), 1.0)


@njit(error_model="numpy", cache=True)
def _fill_row(  # type: ignore[no-untyped-def]
    j, r, gap, fluence, wet, local, slant, inverse_bin, power, alive, survivors, narrow, state, reference, growth,
    ladder, inverse_width_step, broad, column, share_u, source, touched, gathered,
):  # fmt: skip
    """Take one row of rays to plane j and share out what they leave there: widths of the core, coarse columns."""
    steps = power.shape[1]
    last = power.shape[0] - 1
    parts = broad.shape[2]
    rungs = ladder.size
    total = np.empty(parts)
    energy, stops = np.empty(steps), np.empty(steps)
    rung, upper = np.empty(steps, dtype=np.int64), np.empty(steps)
    here = np.zeros((rungs + 1, 2))
    for g in range(rungs):
        touched[r, g] = 0
    for m in range(gathered.shape[1]):
        for b in range(parts):
            gathered[r, m, b] = 0.0
    for c in range(wet.shape[2]):
        depth = wet[j, r, c]
        before = wet[j - 1, r, c] if j > 0 else 0.0
        _advance(state, r, c, j, gap * slant[r, c], before, depth, local[j, r, c], inverse_bin, power, alive, last)
        i, f = _row(depth, inverse_bin, last)
        for b in range(parts):
            total[b] = 0.0
        some = False
        n = min(int(depth * inverse_bin * 4.0), broad.shape[0] - 1)
        for k in range(steps):
            number = fluence[r, c, k] * slant[r, c]
            if number == 0.0:
                continue
            some = True
            for b in range(parts):
                total[b] += number * broad[n, k, b]
        if not some:
            continue
        for k in range(alive[i]):
            number = fluence[r, c, k] * slant[r, c]
            energy[k] = number * ((1.0 - f) * narrow[i, 0, k] + f * narrow[i + 1, 0, k])
            stops[k] = number * ((1.0 - f) * narrow[i, 1, k] + f * narrow[i + 1, 1, k])
            left = (1.0 - f) * survivors[i, k] + f * survivors[i + 1, k]
            variance = max((state[r, c, 2, k] - reference[k] * growth) * left, 0.0)
            g = min(int(np.sqrt(variance) * inverse_width_step), rungs - 2)
            rung[k] = g
            upper[k] = min((variance * inverse_width_step * inverse_width_step - g * g) / (2.0 * g + 1.0), 1.0)
        for k in range(alive[i]):
            if energy[k] == 0.0 and stops[k] == 0.0:
                continue
            g = rung[k]
            here[g, 0] += (1.0 - upper[k]) * energy[k]
            here[g, 1] += (1.0 - upper[k]) * stops[k]
            here[g + 1, 0] += upper[k] * energy[k]
            here[g + 1, 1] += upper[k] * stops[k]
        for g in range(rungs):
            if here[g, 0] != 0.0 or here[g, 1] != 0.0:
                if touched[r, g] == 0:
                    for m in range(source.shape[3]):
                        source[g, 0, r, m] = 0.0
                        source[g, 1, r, m] = 0.0
                source[g, 0, r, c] = here[g, 0]
                source[g, 1, r, c] = here[g, 1]
                touched[r, g] = 1
                here[g, 0] = 0.0
                here[g, 1] = 0.0
        n = column[c] - column[0]
        for b in range(parts):
            gathered[r, n, b] += (1.0 - share_u[c]) * total[b]
            gathered[r, n + 1, b] += share_u[c] * total[b]


@njit(error_model="numpy", cache=True)
def _touch_row(  # type: ignore[no-untyped-def]
    j, r, gap, wet, local, slant, inverse_bin, power, alive, survivors, narrow, state, reference, growth, ladder,
    inverse_width_step, touched, variances,
):  # fmt: skip
    """Take one row of rays to plane j; keep their variances and note which widths they use."""
    last = power.shape[0] - 1
    for g in range(ladder.size):
        touched[r, g] = 0
    for c in range(wet.shape[2]):
        depth = wet[j, r, c]
        before = wet[j - 1, r, c] if j > 0 else 0.0
        _advance(state, r, c, j, gap * slant[r, c], before, depth, local[j, r, c], inverse_bin, power, alive, last)
        i, f = _row(depth, inverse_bin, last)
        for k in range(alive[i]):
            energy = (1.0 - f) * narrow[i, 0, k] + f * narrow[i + 1, 0, k]
            stops = (1.0 - f) * narrow[i, 1, k] + f * narrow[i + 1, 1, k]
            if energy == 0.0 and stops == 0.0:
                continue
            left = (1.0 - f) * survivors[i, k] + f * survivors[i + 1, k]
            variances[r, c, k] = (state[r, c, 2, k] - reference[k] * growth) * left
            g, share = _split(variances[r, c, k], inverse_width_step, ladder)
            touched[r, g] = 1
            if share > 0.0:
                touched[r, g + 1] = 1


@njit(error_model="numpy", cache=True)
def _spread_plane(  # type: ignore[no-untyped-def]
    source, touched, taps_u, taps_v, radius, first_row, first_column, component, per_area, out
):
    """Spread every width of one plane along u and v: out[row, column, component] from source[width, part, v, u]."""
    widths, parts, nv, nu = source.shape
    rows, columns, components = out.shape
    across = np.empty((nv, columns))
    total = np.zeros((components, rows, columns))
    for g in range(widths):
        used = False
        for r in range(nv):
            used = used or touched[r, g] != 0
        if not used:
            continue
        reach = radius[g]
        for part in range(parts):
            target = total[component[g] + part]
            for r in range(nv):
                line = across[r]
                _clear(line)
                if touched[r, g] == 0:
                    continue
                given = source[g, part, r]
                for t in range(-reach, reach + 1):
                    tap = taps_u[g, abs(t)]
                    begin = first_column + t
                    c0, c1 = max(0, -begin), min(nu, columns - begin)
                    if c1 > c0:
                        _add_scaled(line[begin + c0 : begin + c1], given[c0:c1], tap)
            for row in range(rows):
                for r in range(max(0, row - first_row - reach), min(nv, row - first_row + reach + 1)):
                    if touched[r, g]:
                        _add_scaled(target[row], across[r], taps_v[g, abs(row - first_row - r)])
    for row in range(rows):
        for c in range(columns):
            for m in range(components):
                out[row, c, m] = total[m, row, c] * per_area


@njit(error_model="numpy", cache=True)
def _gather_plane(  # type: ignore[no-untyped-def]
    plane, touched, taps_u, taps_v, radius, first_row, first_column, component, per_area, source
):
    """Transpose of `_spread_plane`."""
    widths, parts, nv, nu = source.shape
    rows, columns, components = plane.shape
    wanted = np.empty((components, rows, columns))
    for row in range(rows):
        for c in range(columns):
            for m in range(components):
                wanted[m, row, c] = plane[row, c, m] * per_area
    line = np.empty(columns)
    for g in range(widths):
        reach = radius[g]
        for r in range(nv):
            if touched[r, g] == 0:
                continue
            for part in range(parts):
                _clear(line)
                for row in range(max(0, first_row + r - reach), min(rows, first_row + r + reach + 1)):
                    _add_scaled(line, wanted[component[g] + part, row], taps_v[g, abs(row - first_row - r)])
                given = source[g, part, r]
                _clear(given)
                for t in range(-reach, reach + 1):
                    begin = first_column + t
                    c0, c1 = max(0, -begin), min(nu, columns - begin)
                    if c1 > c0:
                        _add_scaled(given[c0:c1], line[begin + c0 : begin + c1], taps_u[g, abs(t)])


@njit(error_model="numpy", cache=True)
def _add_scaled(target, values, factor):  # type: ignore[no-untyped-def]
    """Add a multiple of one line to another."""
    for c in range(target.size):
        target[c] += factor * values[c]


@njit(error_model="numpy", cache=True)
def _clear(target):  # type: ignore[no-untyped-def]
    """Set a line to nothing."""
    for c in range(target.size):
        target[c] = 0.0


@njit(error_model="numpy", cache=True)
def _to_coarse_rows(gathered, coarse_row, share_v, source):  # type: ignore[no-untyped-def]
    """Share out rows of rays among coarse rows: source[part, 0, row, column] from gathered[v, column, part]."""
    nv, active, parts = gathered.shape
    for b in range(parts):
        for n in range(source.shape[2]):
            _clear(source[b, 0, n])
    for r in range(nv):
        n = coarse_row[r] - coarse_row[0]
        for b in range(parts):
            for m in range(active):
                source[b, 0, n, m] += (1.0 - share_v[r]) * gathered[r, m, b]
                source[b, 0, n + 1, m] += share_v[r] * gathered[r, m, b]


@njit(error_model="numpy", cache=True)
def _read_row(  # type: ignore[no-untyped-def]
    j, r, wet, slant, inverse_bin, alive, narrow, variances, ladder, inverse_width_step, broad, column, share_u, row,
    share_v, source, coarse, fluence,
):  # fmt: skip
    """Transpose of `_fill_row`: what each particle on a row of rays is worth at plane j."""
    last = narrow.shape[0] - 1
    parts = broad.shape[2]
    total = np.zeros(parts)
    n = row[r] - row[0]
    for c in range(wet.shape[2]):
        m = column[c] - column[0]
        for b in range(parts):
            near = (1.0 - share_u[c]) * coarse[b, 0, n, m] + share_u[c] * coarse[b, 0, n, m + 1]
            far = (1.0 - share_u[c]) * coarse[b, 0, n + 1, m] + share_u[c] * coarse[b, 0, n + 1, m + 1]
            total[b] = (1.0 - share_v[r]) * near + share_v[r] * far
        i, f = _row(wet[j, r, c], inverse_bin, last)
        n_row = min(int(wet[j, r, c] * inverse_bin * 4.0), broad.shape[0] - 1)
        for k in range(narrow.shape[2]):
            value = 0.0
            for b in range(parts):
                value += total[b] * broad[n_row, k, b]
            fluence[r, c, k] += value * slant[r, c]
        for k in range(alive[i]):
            energy = (1.0 - f) * narrow[i, 0, k] + f * narrow[i + 1, 0, k]
            stops = (1.0 - f) * narrow[i, 1, k] + f * narrow[i + 1, 1, k]
            if energy != 0.0 or stops != 0.0:
                g, share = _split(variances[r, c, k], inverse_width_step, ladder)
                value = (1.0 - share) * (energy * source[g, 0, r, c] + stops * source[g, 1, r, c])
                if share > 0.0:
                    value += share * (energy * source[g + 1, 0, r, c] + stops * source[g + 1, 1, r, c])
                fluence[r, c, k] += value * slant[r, c]


@njit(nogil=True, error_model="numpy", cache=True)
def follow_rows(  # type: ignore[no-untyped-def]
    fluence, wet, local, slant, gaps, inverse_bin, power, alive, survivors, narrow, state, reference, growth, ladder,
    inverse_width_step, broad, column, share_u, source, touched, gathered, first_plane, last_plane, begin, end,
):  # fmt: skip
    """Follow rows of rays through a block of planes; see `_fill_row`."""
    for r in range(begin, end):
        for j in range(first_plane, last_plane):
            n = j - first_plane
            _fill_row(
                j, r, gaps[j], fluence, wet, local, slant, inverse_bin, power, alive, survivors, narrow, state,
                reference, growth[j], ladder, inverse_width_step, broad, column, share_u, source[n], touched[n],
                gathered[n],
            )  # fmt: skip


@njit(nogil=True, error_model="numpy", cache=True)
def spread_planes(  # type: ignore[no-untyped-def]
    source, touched, gathered, kernel_of_plane, taps_u, taps_v, radius, first_row, first_column, component, per_area,
    coarse_row, coarse_share_v, broad_taps_u, broad_taps_v, broad_radius, coarse_first_row, coarse_first_column,
    broad_component, coarse_per_area, fine_map, coarse_map, first_plane, begin, end,
):  # fmt: skip
    """Spread planes of a block: fine_map[j, v, u, 2] and coarse_map[j, v, u, component]."""
    _, nv, active, parts = gathered.shape
    lines = coarse_row[nv - 1] - coarse_row[0] + 2
    coarse_source = np.empty((parts, 1, lines, active))
    every_part = np.ones((lines, parts), dtype=np.uint8)
    for m in range(begin, end):
        j = first_plane + m
        n = kernel_of_plane[j]
        _spread_plane(
            source[m], touched[m], taps_u[n], taps_v[n], radius[n], first_row, first_column, component, per_area[j],
            fine_map[j],
        )  # fmt: skip
        _to_coarse_rows(gathered[m], coarse_row, coarse_share_v, coarse_source)
        _spread_plane(
            coarse_source, every_part, broad_taps_u[n], broad_taps_v[n], broad_radius[n], coarse_first_row,
            coarse_first_column, broad_component, coarse_per_area[j], coarse_map[j],
        )  # fmt: skip


@njit(nogil=True, error_model="numpy", cache=True)
def touch_rows(  # type: ignore[no-untyped-def]
    wet, local, slant, gaps, inverse_bin, power, alive, survivors, narrow, state, reference, growth, ladder,
    inverse_width_step, touched, variances, first_plane, last_plane, begin, end,
):  # fmt: skip
    """Follow rows of rays through a block of planes without their fluence; see `_touch_row`."""
    for r in range(begin, end):
        for j in range(first_plane, last_plane):
            n = j - first_plane
            _touch_row(
                j, r, gaps[j], wet, local, slant, inverse_bin, power, alive, survivors, narrow, state, reference,
                growth[j], ladder, inverse_width_step, touched[n], variances[n],
            )  # fmt: skip


@njit(nogil=True, error_model="numpy", cache=True)
def gather_planes(  # type: ignore[no-untyped-def]
    source, touched, coarse_source, kernel_of_plane, taps_u, taps_v, radius, first_row, first_column, component,
    per_area, broad_taps_u, broad_taps_v, broad_radius, coarse_first_row, coarse_first_column, broad_component,
    coarse_per_area, fine_map, coarse_map, first_plane, begin, end,
):  # fmt: skip
    """Transpose of `spread_planes`, up to the coarse rows."""
    every_part = np.ones((coarse_source.shape[3], coarse_source.shape[1]), dtype=np.uint8)
    for m in range(begin, end):
        j = first_plane + m
        n = kernel_of_plane[j]
        _gather_plane(
            fine_map[j], touched[m], taps_u[n], taps_v[n], radius[n], first_row, first_column, component, per_area[j],
            source[m],
        )  # fmt: skip
        _gather_plane(
            coarse_map[j], every_part, broad_taps_u[n], broad_taps_v[n], broad_radius[n], coarse_first_row,
            coarse_first_column, broad_component, coarse_per_area[j], coarse_source[m],
        )  # fmt: skip


@njit(nogil=True, error_model="numpy", cache=True)
def read_rows(  # type: ignore[no-untyped-def]
    wet, slant, inverse_bin, alive, narrow, variances, ladder, inverse_width_step, broad, column, share_u, row,
    share_v, source, coarse_source, fluence, first_plane, last_plane, begin, end,
):  # fmt: skip
    """Transpose of `follow_rows`."""
    for r in range(begin, end):
        for j in range(first_plane, last_plane):
            n = j - first_plane
            _read_row(
                j, r, wet, slant, inverse_bin, alive, narrow, variances[n], ladder, inverse_width_step, broad, column,
                share_u, row, share_v, source[n], coarse_source[n], fluence,
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


@njit(nogil=True, error_model="numpy", cache=True)
def deposit(  # type: ignore[no-untyped-def]
    voxels, places, shape, origin, spacing, base, axes, inverse_source, sub, on_nodes, w0, inverse_dw,
    u0, v0, inverse_h, fine_map, coarse_u0, coarse_v0, coarse_inverse_h, coarse_map, fine_target, coarse_target,
    index, rsp, factor, out, begin, end,
):  # fmt: skip
    """Add the maps to voxels: out[target, place] += factor[target, material] * the mean of the map in the voxel.

    Targets with a negative factor are per length of path: the factor's size times the voxel's stopping power counts.
    """
    ny, nx = shape[1], shape[2]
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    parts = 2  # of fine_map: energy and stops; written out so that the loops over it vanish
    components = 6  # of coarse_map: all targets
    value = np.zeros(parts + components)
    weights_u, weights_v = np.empty(3), np.empty(3)
    for n in range(begin, end):
        flat = voxels[n]
        ix = flat % nx
        iy = (flat // nx) % ny
        iz = flat // (nx * ny)
        for m in range(parts + components):
            value[m] = 0.0
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
                                    cell = fine_map[j + dj, i + di, k + dk]
                                    for m in range(parts):
                                        value[m] += weight * cell[m]
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
                                    cell = coarse_map[j + dj, i + di, k + dk]
                                    for m in range(components):
                                        value[parts + m] += weight * cell[m]
        if some:
            place = places[n]
            matter = index[flat]
            for m in range(parts + components):
                t = fine_target[m] if m < parts else coarse_target[m - parts]
                if t >= 0:
                    size = factor[t, matter]
                    out[t, place] += (size if size >= 0.0 else -size * rsp[flat]) * value[m]


@njit(nogil=True, error_model="numpy", cache=True)
def deposit_transposed(  # type: ignore[no-untyped-def]
    slabs, voxels, places, shape, origin, spacing, base, axes, inverse_source, sub, on_nodes, w0, inverse_dw,
    u0, v0, inverse_h, fine_map, coarse_u0, coarse_v0, coarse_inverse_h, coarse_map, fine_target, coarse_target,
    index, rsp, factor, out, colour, begin, end,
):  # fmt: skip
    """Transpose of `deposit`: add voxels to the maps.

    Voxels of one slab ``slabs[s]:slabs[s + 1]`` reach no node that the next slab but one reaches, so that even slabs
    may be done at once, and then odd ones.
    """
    ny, nx = shape[1], shape[2]
    share = 1.0 / (sub[0] * sub[1] * sub[2])
    parts = 2  # of fine_map: energy and stops; written out so that the loops over it vanish
    components = 6  # of coarse_map: all targets
    for half in range(begin, end):
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

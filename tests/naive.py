"""Slow, readable oracles: the same sums as the fast code, written as they are said aloud."""

from __future__ import annotations

import math
from functools import cache

import numpy as np

# ---------------------------------------------------------------- effects: volume histograms and agreement


def dose_at_volume(doses, volumes, percent):
    """Largest dose that at least `percent` of the volume receives, by trying every dose there is."""
    total = sum(volumes)
    best = None
    for candidate in doses:
        reached = sum(volume for dose, volume in zip(doses, volumes, strict=True) if dose >= candidate)
        if reached >= total * percent / 100.0 - 1e-12 * total and (best is None or candidate > best):
            best = candidate
    return best


def volume_share(doses, volumes, level):
    """Share of the volume with at least this dose."""
    reached = sum(volume for dose, volume in zip(doses, volumes, strict=True) if dose >= level)
    return reached / sum(volumes)


def interpolate_linear(values, position):
    """Linear interpolation on every axis at a position in index units; None outside the grid."""
    from itertools import product
    from math import floor

    lows, parts = [], []
    for place, length in zip(position, values.shape, strict=True):
        if place < -1e-9 or place > length - 1 + 1e-9:
            return None
        low = min(max(floor(place), 0), max(length - 2, 0))
        lows.append(low)
        parts.append(place - low)
    total = 0.0
    for corner in product((0, 1), repeat=len(lows)):
        weight, index = 1.0, []
        for low, part, step, length in zip(lows, parts, corner, values.shape, strict=True):
            weight *= part if step else 1.0 - part
            index.append(min(low + step, length - 1))
        total += weight * values[tuple(index)]
    return total


def gamma(reference, evaluated, spacing, other_spacing, *, distance, percent, local, threshold, step, largest):
    """Gamma index after Low 1998 by trying every lattice point around every reference point."""
    from itertools import product

    import numpy as np

    result = np.full(reference.shape, np.nan)
    top = reference.max()
    reach = int(np.floor(largest * distance / step + 1e-9))
    for index in np.ndindex(*reference.shape):
        dose = reference[index]
        if dose < threshold / 100.0 * top or dose <= 0.0:
            continue
        tolerance = percent / 100.0 * (dose if local else top)
        best = None
        for shifts in product(range(-reach, reach + 1), repeat=reference.ndim):
            away = sum((shift * step) ** 2 for shift in shifts)
            place = [
                (number * width + shift * step) / other
                for number, width, shift, other in zip(index, spacing, shifts, other_spacing, strict=True)
            ]
            value = interpolate_linear(evaluated, place)
            if value is None:
                continue
            square = away / distance**2 + ((value - dose) / tolerance) ** 2
            best = square if best is None else min(best, square)
        if best is not None:
            result[index] = min(np.sqrt(best), largest)
    return result


# ---------------------------------------------------------------- effects: equal effect


def photon_dose_of_equal_effect(doses, alphas, betas, *, alpha, beta, fractions):
    """Photon dose with the effect of a mixed field, found by halving an interval."""
    linear = sum(a * d / fractions for a, d in zip(alphas, doses, strict=True))
    root = sum(b**0.5 * d / fractions for b, d in zip(betas, doses, strict=True))
    effect = linear + root**2
    low, high = 0.0, 1.0
    while alpha * high + beta * high**2 < effect:
        high *= 2.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if alpha * middle + beta * middle**2 < effect:
            low = middle
        else:
            high = middle
    return fractions * 0.5 * (low + high)


# ---------------------------------------------------------------- grids: contours and lattices


def even_odd_mask(polygons, origin, spacing, shape):
    """Which pixel centres lie inside polygons (x, y) by counting the edges to their left; shape is (rows, columns)."""
    import numpy as np

    mask = np.zeros(shape, dtype=bool)
    for row, column in np.ndindex(*shape):
        x, y = origin[0] + column * spacing[0], origin[1] + row * spacing[1]
        crossings = 0
        for polygon in polygons:
            for (x1, y1), (x2, y2) in zip(polygon, [*polygon[1:], polygon[0]], strict=True):
                if (y1 <= y) != (y2 <= y) and x1 + (y - y1) * (x2 - x1) / (y2 - y1) <= x:
                    crossings += 1
        mask[row, column] = crossings % 2 == 1
    return mask


def averaged_by_overlap(values, spacing, new_spacing):
    """Average a volume over larger or smaller voxels with the same lower corner; what hangs over counts as nothing."""
    import numpy as np

    counts = [
        max(1, int(np.ceil(n * s / t - 1e-6))) for n, s, t in zip(values.shape, spacing, new_spacing, strict=True)
    ]
    result = np.zeros(counts)
    for new in np.ndindex(*counts):
        for old in np.ndindex(*values.shape):
            share = 1.0
            for a in range(3):
                low = max(new[a] * new_spacing[a], old[a] * spacing[a])
                high = min((new[a] + 1) * new_spacing[a], (old[a] + 1) * spacing[a])
                share *= max(0.0, high - low) / new_spacing[a]
            result[new] += share * values[old]
    return result


def largest_share(index, spacing, new_spacing, count):
    """Material with the largest share of each new voxel, the lowest number among equals."""
    import numpy as np

    shares = [averaged_by_overlap((index == number).astype(float), spacing, new_spacing) for number in range(count)]
    return np.argmax(np.round(shares, 9), axis=0)


def share_inside(inside, origin, spacing, shape, rays):
    """Share of each voxel [z, y, x] where inside(x, y, z) holds, by trying rays ** 3 points in each voxel."""
    import numpy as np

    result = np.zeros(shape)
    steps = (np.arange(rays) + 0.5) / rays - 0.5
    for z, y, x in np.ndindex(*shape):
        found = 0
        for a in steps:
            for b in steps:
                for c in steps:
                    point = (
                        origin[0] + (x + c) * spacing[0],
                        origin[1] + (y + b) * spacing[1],
                        origin[2] + (z + a) * spacing[2],
                    )
                    found += bool(inside(*point))
        result[z, y, x] = found / rays**3
    return result


# ---------------------------------------------------------------- depths: slowing down


def carried_straight(source, cosines, step_mm, node_energy, cells):
    """Carry particles one by one along straight lines; source (nodes, cells, directions). Deposit and stops by cell.

    Positions lie on a lattice that moves with each direction, so a particle starts on the two lattice points about it.
    Deposit is shared between the two nearest cells; what falls over an end has escaped.
    """
    deposit, stops, escaped = [0.0] * cells, [0.0] * cells, 0.0
    nodes = len(source)

    def share(place):
        low = math.floor(place)
        part = place - low
        return ((min(max(low, 0), cells - 1), 1.0 - part), (min(max(low + 1, 0), cells - 1), part))

    for node in range(nodes):
        for cell in range(cells):
            for direction, cosine in enumerate(cosines):
                whole = float(source[node][cell][direction])
                moved = (nodes - 1 - node) * cosine
                low = math.floor(cell - moved)
                part = cell - moved - low
                for number, place in ((whole * (1.0 - part), low + moved), (whole * part, low + 1 + moved)):
                    if number == 0.0:
                        continue
                    left, inside = node, True
                    while left > 0 and inside:
                        given = number * (node_energy[left] - node_energy[left - 1])
                        middle = math.floor(place + 0.5 * cosine)
                        beyond = place + 0.5 * cosine - middle
                        for target, piece in ((middle, 1.0 - beyond), (middle + 1, beyond)):
                            if 0 <= target < cells:
                                deposit[target] += given * piece
                            else:
                                escaped += given * piece
                        place += cosine
                        left -= 1
                        if place < -0.5 or place > cells - 0.5:
                            escaped += number * node_energy[left]
                            inside = False
                    if inside:
                        for target, piece in share(place):
                            stops[target] += number * piece
    return deposit, stops, escaped


def slowing_down(energy_of_range, reach_mm, edges_mm, path_mm, deviation_mm, quantiles, weights):
    """Deposit of a beam that only slows down: for each quantile of range and bin, energy ahead less energy behind."""
    deposit = [0.0] * (len(edges_mm) - 1)
    for quantile, weight in zip(quantiles, weights, strict=True):
        energies = []
        for path, deviation in zip(path_mm, deviation_mm, strict=True):
            energies.append(float(energy_of_range(max(reach_mm + quantile * deviation - path, 0.0))))
        for index in range(len(deposit)):
            deposit[index] += weight * (energies[index] - energies[index + 1])
    return deposit


# ---------------------------------------------------------------- depths: histories of single particles


def stopping_depths(
    energy_mev, *, mass_mev, electrons_per_mm3, stopping_mev_mm, scattering_rad2_mm, step_mm, cut_mev, count, rng
):
    """Return depths at which particles stop, one by one: random collisions over a cut, a Gaussian under it, turns.

    Collisions of energy e with free electrons have the density 2 pi r^2 m n / beta^2 (1/e^2 - beta^2 / (e W)); the
    rest of the mean loss is smooth, with the variance of the collisions under the cut.
    """
    electron, area = 0.51099895, 2.0 * math.pi * 2.8179403262e-12**2
    energy = np.full(count, float(energy_mev))
    depth = np.zeros(count)
    direction = np.zeros((count, 3))
    direction[:, 2] = 1.0
    while True:
        moving = np.flatnonzero(energy > 0.5)
        if len(moving) == 0:
            return depth
        now = energy[moving]
        step = np.minimum(step_mm, 0.03 * now / stopping_mev_mm(now))
        half = now - 0.5 * step * stopping_mev_mm(now)
        gamma = 1.0 + half / mass_mev
        beta2 = 1.0 - 1.0 / gamma**2
        ratio = electron / mass_mev
        top = 2.0 * electron * beta2 * gamma**2 / (1.0 + 2.0 * gamma * ratio + ratio**2)
        cut = np.minimum(cut_mev, top)
        xi = area * electron * electrons_per_mm3 * step / beta2
        hard_number = np.maximum(xi * (1.0 / cut - 1.0 / top - beta2 / top * np.log(top / cut)), 0.0)
        hard_loss = xi * (np.log(top / cut) - beta2 * (1.0 - cut / top))
        loss = step * stopping_mev_mm(half) - hard_loss
        loss += rng.normal(size=len(now)) * np.sqrt(xi * (cut - 0.5 * beta2 * cut**2 / top))
        hits = np.repeat(np.arange(len(now)), rng.poisson(hard_number))
        while len(hits):
            share = rng.random(len(hits))
            given = 1.0 / (1.0 / cut[hits] - share * (1.0 / cut[hits] - 1.0 / top[hits]))
            taken = rng.random(len(hits)) < 1.0 - beta2[hits] * given / top[hits]
            np.add.at(loss, hits[taken], given[taken])
            hits = hits[~taken]
        energy[moving] = now - np.maximum(loss, 0.0)
        # turn in the middle of the step: two small angles about the direction of flight
        ahead = direction[moving]
        side = np.cross(ahead, np.where(np.abs(ahead[:, :1]) < 0.9, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]]))
        side /= np.linalg.norm(side, axis=1, keepdims=True)
        other = np.cross(ahead, side)
        angles = rng.normal(size=(2, len(now))) * np.sqrt(scattering_rad2_mm(half) * step)
        size = np.hypot(*angles)
        across = (side * angles[0][:, None] + other * angles[1][:, None]) / np.maximum(size, 1e-30)[:, None]
        turned = ahead * np.cos(size)[:, None] + across * np.sin(size)[:, None]
        depth[moving] += 0.5 * step * (ahead[:, 2] + turned[:, 2])
        direction[moving] = turned


# ---------------------------------------------------------------- maps: exponentials along straight lines


def carry_along(lines_by_axis, scale, rates, emitted):
    """Energy left in each voxel when every ray of every direction is followed on its own, one mode at a time.

    `emitted[m, z, y, x]` is the energy each voxel sends out; a ray is the list of voxels it meets, plane by plane.
    """
    import numpy as np

    orders = ((0, 1, 2), (1, 0, 2), (2, 0, 1))
    left = np.zeros(scale.shape)
    for order, lines in zip(orders, lines_by_axis, strict=True):
        turned = scale.transpose(order)
        sources = emitted.transpose(0, *(axis + 1 for axis in order))
        out = np.zeros(turned.shape)
        nk, nj, ni = turned.shape
        for line in lines:
            planes = range(nk - 1, -1, -1) if line.down else range(nk)
            for r in range(-2 * nk - nj, 2 * nk + 2 * nj):
                for q in range(-2 * nk - ni, 2 * nk + 2 * ni):
                    ray = []
                    for k in planes:
                        j = r + int(np.rint(line.slope_j * (k - nk // 2)))
                        i = q + int(np.rint(line.slope_i * (k - nk // 2)))
                        if 0 <= j < nj and 0 <= i < ni:
                            ray.append((k, j, i))
                    for m, rate in enumerate(rates):
                        carried = 0.0
                        for voxel in ray:
                            a = rate * line.step_mm * float(turned[voxel])
                            h = sum(a**n / f for n, f in enumerate((1, 2, 6, 24, 120, 720)))
                            passed = 1.0 / (1.0 + a * h)
                            new = line.weight * sources[(m, *voxel)]
                            out[voxel] += carried * (1.0 - passed) + new * (1.0 - h * passed)
                            carried = (carried + new * h) * passed
        left += out.transpose(np.argsort(order))
    return left


# ---------------------------------------------------------------- maps: one field folded ray by ray


@cache
def gaussian_weights(variance, count):
    """Weights of a Gaussian at whole distances 0..count - 1 (both sides add to one), as the fold cuts it."""
    from math import ceil, exp, sqrt

    from scipy.special import ive

    reach = ceil(4.0 * sqrt(variance) + 1.0 - 1e-9) if variance > 1e-9 else 0
    raw = [
        0.0 if n > reach else float(ive(n, variance)) if variance < 1.0 else exp(-n * n / (2.0 * variance))
        for n in range(count)
    ]
    total = raw[0] + 2.0 * sum(raw[1:])
    return [weight / total for weight in raw]


def fold_core_on_planes(pencils, weights):
    """Core energy on the field's planes [w, v, u]: every ray and step by itself, spread over all nodes by itself."""
    import numpy as np

    rays, tables, planes = pencils.rays, pencils.tables, pencils.planes
    fluence = pencils.fluence(weights)
    step = planes.spacing_mm
    w = planes.w_mm
    magnification = planes.frame.magnification(w)
    surface = float(planes.frame.magnification(pencils.surface_mm))
    fine = pencils.fine
    out = np.zeros((len(w), len(fine.v_mm), len(fine.u_mm)))
    last = len(tables.power) - 1
    width_step = 1.0 / pencils.width_steps_per_mm

    def rows(depth):
        place = max(depth / tables.bin_mm - 0.5, 0.0)
        row = min(int(place), last - 1)
        return row, min(place - row, 1.0)

    for r, v in enumerate(rays.v_mm):
        for c, u in enumerate(rays.u_mm):
            for k in range(fluence.shape[2]):
                a0, a1, a2 = tables.start[:, k]
                before = 0.0
                for j in range(len(w)):
                    length = w[j] - w[j - 1] if j else w[0] - pencils.surface_mm + tables.gap_mm
                    length *= rays.slant[r, c]
                    depth = rays.wet_mm[j, r, c]
                    row, part = rows(0.5 * (before + depth))
                    power = (1 - part) * tables.power[row, k] + part * tables.power[row + 1, k]
                    power *= rays.scatter[j, r, c] if j else 0.0
                    a2 += 2 * a1 * length + a0 * length**2 + power * length**3 / 3
                    a1 += a0 * length + power * length**2 / 2
                    a0 += power * length
                    before = depth
                    row, part = rows(depth)
                    energy = (1 - part) * tables.narrow[row, 0, k] + part * tables.narrow[row + 1, 0, k]
                    energy *= fluence[r, c, k] * rays.slant[r, c]
                    left = (1 - part) * tables.survivors[row, k] + part * tables.survivors[row + 1, k]
                    gained = a2 - tables.surface_variance_mm2[k] * (magnification[j] / surface) ** 2
                    variance = max(gained * left, 0.0)
                    if energy == 0.0:
                        continue
                    rung = int(np.sqrt(variance) / width_step)
                    low, high = (rung * width_step) ** 2, ((rung + 1) * width_step) ** 2
                    share = (variance - low) / (high - low)
                    for weight, spread in ((1 - share, low), (share, high)):
                        along_u, along_v = (
                            gaussian_weights((spread + extra[j]) / (step * magnification[j]) ** 2, 400)
                            for extra in pencils.optics_variance_mm2
                        )
                        to_u = [along_u[round(abs(place - u) / step)] for place in fine.u_mm]
                        to_v = [along_v[round(abs(place - v) / step)] for place in fine.v_mm]
                        out[j] += weight * energy * np.outer(to_v, to_u)
    return out / ((step * magnification) ** 2)[:, None, None]


def sample_by_spline(maps, position):
    """A map [w, v, u] between its nodes (index units): linear along w, a quadratic B-spline along v and u."""
    from math import floor

    j = floor(position[0])
    along = [(j, 1 - (position[0] - j)), (j + 1, position[0] - j)]
    across = []
    for place in position[1:]:
        near = floor(place + 0.5)
        t = place - near
        across.append([(near - 1, (0.5 - t) ** 2 / 2), (near, 0.75 - t * t), (near + 1, (0.5 + t) ** 2 / 2)])
    return sum(a * b * c * maps[k, i, m] for k, a in along for i, b in across[0] for m, c in across[1])

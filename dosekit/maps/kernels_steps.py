"""Inner loops of rays and range steps: spots to rays, rays through planes, and the transposes.

Plain arrays in, plain arrays out; rows of rays from `begin` to `end` (spots, in the transpose of `lay_spots`) are one
piece of work. No piece touches what another writes and every sum has one order, so that the result does not depend on
the number of threads. What the arguments mean is said where they are made: :mod:`dosekit.maps.loops`.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["follow_rows", "lay_spots", "lay_spots_transposed", "read_rows"]


@njit(**KERNEL)
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


@njit(**KERNEL)
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


@njit(**PART)
def _row(wet, inverse_bin, last):  # type: ignore[no-untyped-def]
    """Return the table row below a depth and the share of the row above."""
    place = wet * inverse_bin - 0.5
    if place <= 0.0:
        return 0, 0.0
    i = int(place)
    if i >= last:
        return last - 1, 1.0
    return i, place - i


@njit(**PART)
def _advance(state, r, c, length, scatter, core, i, f, steps):  # type: ignore[no-untyped-def]
    """Carry the Fermi-Eyges moments of the steps of one ray along a length (Eyges 1948)."""
    for k in range(steps):
        t = scatter * ((1.0 - f) * core[i, 0, k] + f * core[i + 1, 0, k])
        a0, a1 = state[r, c, 0, k], state[r, c, 1, k]
        state[r, c, 2, k] += length * (2.0 * a1 + length * (a0 + t * length / 3.0))
        state[r, c, 1, k] = a1 + length * (a0 + 0.5 * t * length)
        state[r, c, 0, k] = a0 + t * length


@njit(**PART)
def _core(core, i, f, reference, growth, state, r, c, squared_rungs, rungs, found, steps):  # type: ignore[no-untyped-def]
    """Look up what each step of one ray leaves: energy and stops per particle, its rung and the share of the next.

    ``core[row, 4, K]`` holds scattering power, survivors, energy and stops. `squared_rungs` turns a variance into
    squared rungs of the ladder; a variance between two rungs is shared so that it is exact. ``found[4, K]`` becomes
    energy, stops, rung and share.
    """
    highest = rungs - 2.0
    for k in range(steps):
        found[0, k] = (1.0 - f) * core[i, 2, k] + f * core[i + 1, 2, k]
        found[1, k] = (1.0 - f) * core[i, 3, k] + f * core[i + 1, 3, k]
    for k in range(steps):
        survivors = (1.0 - f) * core[i, 1, k] + f * core[i + 1, 1, k]
        squared = max((state[r, c, 2, k] - reference[k] * growth) * survivors * squared_rungs, 0.0)
        g = min(np.floor(np.sqrt(squared)), highest)
        found[2, k] = g
        found[3, k] = min((squared - g * g) / (2.0 * g + 1.0), 1.0)


@njit(**KERNEL)
def follow_rows(  # type: ignore[no-untyped-def]
    fluence, wet, local, slant, gaps, inverse_bin, core, alive, state, reference, growth, squared_rungs, broad,
    parts_at, column, share_u, source, used, gathered, first_plane, last_plane, begin, end,
):  # fmt: skip
    """Follow rows of rays through a block of planes and share out what they leave there.

    ``source[plane, v, rung, 2 u + (energy, stops)]`` becomes what is to be spread by each width of the ladder. It is
    not zero where ``used[plane, v, rung]``, which says on entry what must be cleared. The broad parts go to
    ``gathered[plane, v, coarse column, part]``.
    """
    steps = core.shape[2]
    last = core.shape[0] - 1
    rungs = source.shape[2]
    parts = broad.shape[2]
    columns = wet.shape[2]
    lit, total = np.empty(columns, dtype=np.uint8), np.empty(parts)
    found = np.empty((4, steps))
    for r in range(begin, end):
        for c in range(columns):
            lit[c] = 0
            for k in range(steps):
                if fluence[r, c, k] != 0.0:
                    lit[c] = 1
        for j in range(first_plane, last_plane):
            rows, flags, sums = source[j - first_plane, r], used[j - first_plane, r], gathered[j - first_plane, r]
            for g in range(rungs):
                if flags[g]:
                    flags[g] = 0
                    for m in range(2 * columns):
                        rows[g, m] = 0.0
            for m in range(sums.shape[0]):
                for b in range(parts):
                    sums[m, b] = 0.0
            for c in range(columns):
                if not lit[c]:
                    continue
                depth = wet[j, r, c]
                before = wet[j - 1, r, c] if j > 0 else 0.0
                i, f = _row(0.5 * (before + depth), inverse_bin, last)
                scatter = local[j, r, c] if j > 0 else 0.0
                _advance(state, r, c, gaps[j] * slant[r, c], scatter, core, i, f, alive[i])
                i, f = _row(depth, inverse_bin, last)
                _core(core, i, f, reference, growth[j], state, r, c, squared_rungs, rungs, found, alive[i])
                # neighbouring steps mostly share a rung: add up before storing
                at = -1
                low_e, low_s, high_e, high_s = 0.0, 0.0, 0.0, 0.0
                for k in range(alive[i] + 1):
                    g = int(found[2, k]) if k < alive[i] else -1
                    if g != at:
                        if low_e != 0.0 or low_s != 0.0 or high_e != 0.0 or high_s != 0.0:
                            flags[at] = 1
                            flags[at + 1] = 1
                            rows[at, 2 * c] += low_e
                            rows[at, 2 * c + 1] += low_s
                            rows[at + 1, 2 * c] += high_e
                            rows[at + 1, 2 * c + 1] += high_s
                        at = g
                        low_e, low_s, high_e, high_s = 0.0, 0.0, 0.0, 0.0
                    if k < alive[i]:
                        number = fluence[r, c, k] * slant[r, c]
                        e, s, upper = found[0, k] * number, found[1, k] * number, found[3, k]
                        low_e += (1.0 - upper) * e
                        low_s += (1.0 - upper) * s
                        high_e += upper * e
                        high_s += upper * s
                n = min(int(depth * inverse_bin * 4.0), broad.shape[0] - 1)
                some = parts_at[n]
                for b in range(some):
                    total[b] = 0.0
                for k in range(0, steps - 3, 4):  # four at a time
                    n0, n1, n2, n3 = fluence[r, c, k], fluence[r, c, k + 1], fluence[r, c, k + 2], fluence[r, c, k + 3]
                    for b in range(some):
                        near = n0 * broad[n, k, b] + n1 * broad[n, k + 1, b]
                        total[b] += near + (n2 * broad[n, k + 2, b] + n3 * broad[n, k + 3, b])
                for k in range(steps - steps % 4, steps):
                    for b in range(some):
                        total[b] += fluence[r, c, k] * broad[n, k, b]
                near, n = slant[r, c] * (1.0 - share_u[c]), column[c] - column[0]
                far = slant[r, c] * share_u[c]
                for b in range(some):
                    sums[n, b] += near * total[b]
                    sums[n + 1, b] += far * total[b]


@njit(**KERNEL)
def read_rows(  # type: ignore[no-untyped-def]
    wet, local, slant, gaps, inverse_bin, core, alive, state, reference, growth, squared_rungs, broad, column, share_u,
    row, share_v, source, coarse, fluence, first_plane, last_plane, begin, end,
):  # fmt: skip
    """Transpose of `follow_rows`: what a particle of each step on each ray is worth.

    Here ``broad[row, part, K]`` has its last axes exchanged, and ``coarse[plane, coarse row, part, coarse column]``
    has not been shared out among rows of rays.
    """
    steps = core.shape[2]
    last = core.shape[0] - 1
    rungs = source.shape[2]
    parts = broad.shape[1]
    found = np.empty((4, steps))
    value, total = np.empty(steps), np.zeros(parts)
    for r in range(begin, end):
        line, share = row[r] - row[0], share_v[r]
        for j in range(first_plane, last_plane):
            rows = source[j - first_plane, r]
            near, far = coarse[j - first_plane, line], coarse[j - first_plane, line + 1]
            for c in range(wet.shape[2]):
                depth = wet[j, r, c]
                before = wet[j - 1, r, c] if j > 0 else 0.0
                i, f = _row(0.5 * (before + depth), inverse_bin, last)
                scatter = local[j, r, c] if j > 0 else 0.0
                _advance(state, r, c, gaps[j] * slant[r, c], scatter, core, i, f, alive[i])
                i, f = _row(depth, inverse_bin, last)
                _core(core, i, f, reference, growth[j], state, r, c, squared_rungs, rungs, found, alive[i])
                u, m = share_u[c], column[c] - column[0]
                for b in range(parts):
                    one = (1.0 - u) * near[b, m] + u * near[b, m + 1]
                    other = (1.0 - u) * far[b, m] + u * far[b, m + 1]
                    total[b] = (1.0 - share) * one + share * other
                n = min(int(depth * inverse_bin * 4.0), broad.shape[0] - 1)
                for k in range(steps):
                    value[k] = 0.0
                for b in range(0, parts - 3, 4):
                    f0, f1, f2, f3 = total[b], total[b + 1], total[b + 2], total[b + 3]
                    for k in range(steps):
                        first = f0 * broad[n, b, k] + f1 * broad[n, b + 1, k]
                        value[k] += first + (f2 * broad[n, b + 2, k] + f3 * broad[n, b + 3, k])
                for b in range(parts - parts % 4, parts):
                    for k in range(steps):
                        value[k] += total[b] * broad[n, b, k]
                for k in range(alive[i]):
                    energy, stops, upper = found[0, k], found[1, k], found[3, k]
                    if energy == 0.0 and stops == 0.0:
                        continue
                    g = int(found[2, k])
                    below = energy * rows[g, 2 * c] + stops * rows[g, 2 * c + 1]
                    above = energy * rows[g + 1, 2 * c] + stops * rows[g + 1, 2 * c + 1]
                    value[k] += (1.0 - upper) * below + upper * above
                for k in range(steps):
                    fluence[r, c, k] += value[k] * slant[r, c]

"""Compiled sweeps of exponentials along the straight lines of one direction, forward and transposed.

A direction crosses the voxels plane by plane along its main axis (array axis 0 here). Seen from one plane, the line
that starts at ray (r, q) lies in voxel (r + shift_j, q + shift_i), with shifts rounded to whole voxels, so that in
every plane each voxel belongs to exactly one line: rays never share a voxel, no energy is made or lost, and rows of
rays can run at the same time in any order with the same result (`dosekit.maps.cones_threads`).

In a voxel of optical thickness a, with h = (e^a - 1)/a to sixth order and T = 1 / (1 + a h), a mode that enters
with s and is emitted evenly with e leaves s (1 - T) + e (1 - h T) there and goes on with (s + h e) T.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

_C3, _C4, _C5, _C6 = 1.0 / 6.0, 1.0 / 24.0, 1.0 / 120.0, 1.0 / 720.0

__all__ = ["sweep", "sweep_transposed", "sweep_widening", "sweep_widening_transposed"]


@njit(**PART)
def _step_shining(thick, b, here, bright, given):  # type: ignore[no-untyped-def]
    """Pass one row of voxels that emit."""
    for q in range(len(thick)):
        a = b * thick[q]
        h = 1.0 + a * (0.5 + a * (_C3 + a * (_C4 + a * (_C5 + a * _C6))))
        s = here[q]
        e = bright[q]
        going = (s + h * e) / (1.0 + a * h)
        given[q] += s + e - going
        here[q] = going


@njit(**PART)
def _step_dark(thick, b, here, given):  # type: ignore[no-untyped-def]
    """Pass one row of voxels that emit nothing."""
    for q in range(len(thick)):
        a = b * thick[q]
        h = 1.0 + a * (0.5 + a * (_C3 + a * (_C4 + a * (_C5 + a * _C6))))
        s = here[q]
        going = s / (1.0 + a * h)
        given[q] += s - going
        here[q] = going


@njit(**PART)
def _step_back(thick, b, here, asked, weight, worth):  # type: ignore[no-untyped-def]
    """Pass one row of voxels backwards."""
    for q in range(len(thick)):
        a = b * thick[q]
        h = 1.0 + a * (0.5 + a * (_C3 + a * (_C4 + a * (_C5 + a * _C6))))
        y = asked[q]
        s = here[q]
        passed = 1.0 / (1.0 + a * h)
        worth[q] = weight * (y + (s - y) * h * passed)
        here[q] = y + (s - y) * passed


@njit(**KERNEL)
def sweep(  # type: ignore[no-untyped-def]
    stops,
    material,
    energies,
    sources,
    scale,
    rates,
    slope_j,
    slope_i,
    down,
    step_mm,
    weight,
    first,
    last,
    faint,
    swapped,
    out,
    row_begin,
    row_end,
):
    """Carry all modes along one direction and add what they leave to ``out``.

    ``energies[material, mode]`` times ``stops`` is emitted, or ``sources[mode]`` if there is any. Where a mode has
    fallen below ``faint[mode]`` on the ray row, what is left is put down at once. If ``swapped``, the second array
    axis is the main one.
    """
    nk, nj, ni = scale.shape
    if swapped:
        nk, nj = nj, nk
    modes = len(rates)
    middle = nk // 2
    low_j = min(int(np.rint(slope_j * (0 - middle))), int(np.rint(slope_j * (nk - 1 - middle))))
    high_j = max(int(np.rint(slope_j * (0 - middle))), int(np.rint(slope_j * (nk - 1 - middle))))
    low_i = min(int(np.rint(slope_i * (0 - middle))), int(np.rint(slope_i * (nk - 1 - middle))))
    high_i = max(int(np.rint(slope_i * (0 - middle))), int(np.rint(slope_i * (nk - 1 - middle))))
    width = ni + high_i - low_i
    rows = nj + high_j - low_j
    by_material = sources.shape[0] == 0
    for row in range(row_begin, min(rows, row_end)):
        state = np.zeros((modes, width))
        left = np.empty(ni)
        emitted = np.empty(ni)
        start = width
        stop = 0
        alive = np.zeros(modes, dtype=np.bool_)
        for turn in range(nk):
            plane = nk - 1 - turn if down else turn
            across = row - high_j + int(np.rint(slope_j * (plane - middle)))
            if across < 0 or across >= nj:
                continue
            offset = high_i - int(np.rint(slope_i * (plane - middle)))
            k, j = (across, plane) if swapped else (plane, across)
            if last[k, j] > 0:
                start = min(start, first[k, j] + offset)
                stop = max(stop, last[k, j] + offset)
            begin = max(start, offset)
            end = min(stop, offset + ni)
            count = end - begin
            shining = last[k, j] > 0
            if count <= 0 or not (shining or alive.any()):
                continue
            i0 = begin - offset
            thick = scale[k, j, i0 : i0 + count]
            given = left[:count]
            bright = emitted[:count]
            given[:] = 0.0
            for m in range(modes):
                b = rates[m] * step_mm
                here = state[m, begin:end]
                if shining:
                    alive[m] = True
                    if by_material:
                        many = stops[k, j, i0 : i0 + count]
                        kind = material[k, j, i0 : i0 + count]
                        for q in range(count):
                            bright[q] = weight * many[q] * energies[kind[q], m]
                    else:
                        light = sources[m, k, j, i0 : i0 + count]
                        for q in range(count):
                            bright[q] = weight * light[q]
                    _step_shining(thick, b, here, bright, given)
                elif alive[m]:
                    _step_dark(thick, b, here, given)
                    if turn % 8 == 0:
                        # a mode that has all but died stays where it is
                        most = 0.0
                        for q in range(count):
                            most = max(most, abs(here[q]))
                        if most < faint[m]:
                            for q in range(count):
                                given[q] += here[q]
                            state[m, :] = 0.0
                            alive[m] = False
            target = out[k, j, i0 : i0 + count]
            for q in range(count):
                target[q] += given[q]
            if not alive.any():
                start = width
                stop = 0


@njit(**KERNEL)
def sweep_transposed(  # type: ignore[no-untyped-def]
    wanted,
    material,
    energies,
    by_mode,
    scale,
    rates,
    slope_j,
    slope_i,
    down,
    step_mm,
    weight,
    first,
    last,
    faint,
    swapped,
    out,
    out_modes,
    row_begin,
    row_end,
):
    """Carry values back along one direction: the exact transpose of `sweep`.

    ``wanted`` is what each voxel's energy counts. The result per stop is added to ``out`` (through ``energies``),
    or per mode to ``out_modes`` if ``by_mode``. Where a mode has fallen below ``faint`` on the ray row, it counts as 0.
    """
    nk, nj, ni = scale.shape
    if swapped:
        nk, nj = nj, nk
    modes = len(rates)
    middle = nk // 2
    low_j = min(int(np.rint(slope_j * (0 - middle))), int(np.rint(slope_j * (nk - 1 - middle))))
    high_j = max(int(np.rint(slope_j * (0 - middle))), int(np.rint(slope_j * (nk - 1 - middle))))
    low_i = min(int(np.rint(slope_i * (0 - middle))), int(np.rint(slope_i * (nk - 1 - middle))))
    high_i = max(int(np.rint(slope_i * (0 - middle))), int(np.rint(slope_i * (nk - 1 - middle))))
    width = ni + high_i - low_i
    rows = nj + high_j - low_j
    for row in range(row_begin, min(rows, row_end)):
        state = np.zeros((modes, width))
        value = np.empty(ni)
        start = width
        stop = 0
        alive = np.zeros(modes, dtype=np.bool_)
        for turn in range(nk):
            plane = turn if down else nk - 1 - turn
            across = row - high_j + int(np.rint(slope_j * (plane - middle)))
            if across < 0 or across >= nj:
                continue
            offset = high_i - int(np.rint(slope_i * (plane - middle)))
            k, j = (across, plane) if swapped else (plane, across)
            if last[k, j] > 0:
                start = min(start, first[k, j] + offset)
                stop = max(stop, last[k, j] + offset)
            begin = max(start, offset)
            end = min(stop, offset + ni)
            count = end - begin
            shining = last[k, j] > 0
            if count <= 0 or not (shining or alive.any()):
                continue
            i0 = begin - offset
            thick = scale[k, j, i0 : i0 + count]
            asked = wanted[k, j, i0 : i0 + count]
            worth = value[:count]
            for m in range(modes):
                if not (shining or alive[m]):
                    continue
                b = rates[m] * step_mm
                here = state[m, begin:end]
                _step_back(thick, b, here, asked, weight, worth)
                if shining:
                    alive[m] = True
                elif turn % 8 == 0:
                    most = 0.0
                    for q in range(count):
                        most = max(most, abs(here[q]))
                    if most < faint:
                        state[m, :] = 0.0
                        alive[m] = False
                if by_mode:
                    goal = out_modes[m, k, j, i0 : i0 + count]
                    for q in range(count):
                        goal[q] += worth[q]
                else:
                    goal = out[k, j, i0 : i0 + count]
                    kind = material[k, j, i0 : i0 + count]
                    for q in range(count):
                        goal[q] += worth[q] * energies[kind[q], m]
            if not alive.any():
                start = width
                stop = 0


@njit(**PART)
def _moved(old, middle, new, pad, stride, taps_j, start_j, taps_i, start_i):  # type: ignore[no-untyped-def]
    """Move a flat, padded plane sideways by four taps along each lateral axis; what enters the padding is gone."""
    begin, end = pad * stride, len(old) - pad * stride
    many = end - begin
    at = begin - start_j * stride
    first, second = old[at : at + many], old[at - stride : at - stride + many]
    at -= 2 * stride
    third, fourth = old[at : at + many], old[at - stride : at - stride + many]
    a, b, c, d = taps_j[0], taps_j[1], taps_j[2], taps_j[3]
    goal = middle[begin:end]
    for f in range(many):
        goal[f] = (a * first[f] + b * second[f]) + (c * third[f] + d * fourth[f])
    at = begin - start_i
    first, second = middle[at : at + many], middle[at - 1 : at - 1 + many]
    third, fourth = middle[at - 2 : at - 2 + many], middle[at - 3 : at - 3 + many]
    a, b, c, d = taps_i[0], taps_i[1], taps_i[2], taps_i[3]
    goal = new[begin:end]
    for f in range(many):
        goal[f] = (a * first[f] + b * second[f]) + (c * third[f] + d * fourth[f])
    for row in range(begin, end, stride):
        new[row : row + pad] = 0.0
        new[row + stride - pad : row + stride] = 0.0


@njit(**KERNEL)
def sweep_widening(  # type: ignore[no-untyped-def]
    sources, scale, pad, stride, rates, taps_j, start_j, taps_i, start_i, down, steps_mm, out, line_begin, line_end
):
    """Carry all modes along several directions, widening on the way; each direction has its own ``out[line]``.

    Planes are flat, rows of ``stride`` with ``pad`` empty voxels all round.
    """
    nk, flat = scale.shape
    modes = len(rates)
    middle = np.zeros(flat)
    for line in range(line_begin, min(len(steps_mm), line_end)):
        state = np.zeros((modes, flat))
        moved = np.zeros((modes, flat))
        for turn in range(nk):
            k = nk - 1 - turn if down[line] else turn
            for m in range(modes):
                here = moved[m]
                if turn > 0:
                    _moved(
                        state[m], middle, here, pad, stride, taps_j[line], start_j[line], taps_i[line], start_i[line]
                    )
                _step_shining(scale[k], rates[m] * steps_mm[line], here, sources[m, k], out[line, k])
            state, moved = moved, state


@njit(**KERNEL)
def sweep_widening_transposed(  # type: ignore[no-untyped-def]
    wanted, scale, pad, stride, rates, taps_j, start_j, taps_i, start_i, down, steps_mm, out, line_begin, line_end
):
    """Apply the exact transpose of `sweep_widening`; results per mode in ``out[line, mode]``."""
    nk, flat = scale.shape
    modes = len(rates)
    middle = np.zeros(flat)
    for line in range(line_begin, min(len(steps_mm), line_end)):
        state = np.zeros((modes, flat))
        moved = np.zeros((modes, flat))
        back_j = taps_j[line, ::-1].copy()
        back_i = taps_i[line, ::-1].copy()
        for turn in range(nk):
            k = turn if down[line] else nk - 1 - turn
            for m in range(modes):
                here = moved[m]
                if turn > 0:
                    _moved(state[m], middle, here, pad, stride, back_j, -start_j[line] - 3, back_i, -start_i[line] - 3)
                _step_back(scale[k], rates[m] * steps_mm[line], here, wanted[k], 1.0, out[line, m, k])
            state, moved = moved, state

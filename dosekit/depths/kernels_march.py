"""Inner loop of the solver: a population carried down in residual range, with events and angular diffusion.

One step after the other: sources enter frames that move with each direction, everything is carried a step down, what
happened on the way becomes sources further down, and a part turns into other directions. The pieces are separate
functions because a compiler works longer on one long function than on its parts.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["march"]


@njit(**PART)
def _share(values, first, second, here, there, amount):  # type: ignore[no-untyped-def]
    """Share an amount between two cells."""
    values[first] += amount * here
    values[second] += amount * there


@njit(**PART)
def _enter(source, outside, k, step, cosine, node_energy, escaped, state, left, right):  # type: ignore[no-untyped-def]
    """Take the sources at a node into the moving frames."""
    _, cells, directions = source.shape
    shift = len(node_energy) + 3
    for j in range(directions):
        for u in range(-1, cells + 1):
            if 0 <= u < cells:
                n = source[k, u, j]
            elif (u < 0) == (cosine[j] < 0.0):
                # half a cell outside and going away
                n = 0.0
                escaped[0 if u < 0 else 2] += outside[1 if u < 0 else 0, j] * node_energy[k]
                escaped[1 if u < 0 else 3] += outside[1 if u < 0 else 0, j]
            else:
                n = outside[1 if u < 0 else 0, j]
            if n != 0.0:
                c = u + shift - step * cosine[j]
                low = math.floor(c)
                w = c - low
                state[j, low] += n * (1.0 - w)
                state[j, low + 1] += n * w
                left[j] = min(left[j], low)
                right[j] = max(right[j], low + 1)


@njit(**PART)
def _walk(  # type: ignore[no-untyped-def]
    k, step, step_mm, cosine, node_energy, let, stuff, chance, parts, brems, group_low, group_weight, state, way,
    aside, left, right, happened, deposit, let_weighted, counts, decays, forward, escaped, bremsstrahlung, sideways,
    ahead, within,
):  # fmt: skip
    """Carry everything one step down in residual range; return whether anything happened on the way."""
    directions, cells = len(cosine), len(stuff)
    shift = len(node_energy) + 3
    events = chance.shape[1] > 0
    loss = node_energy[k] - node_energy[k - 1]
    any_event = False
    for j in range(directions):
        for c in range(left[j], right[j] + 1):
            n = state[j, c]
            if n < 1e-16:
                continue
            tilt = 1.0 - cosine[j] * cosine[j]
            half_way = aside[j, c] + tilt * (0.5 * step_mm * way[j, c] + n * 0.125 * step_mm * step_mm)
            per_particle = half_way / n
            aside[j, c] += tilt * (step_mm * way[j, c] + n * 0.5 * step_mm * step_mm)
            way[j, c] += n * step_mm
            x = c - shift + step * cosine[j]
            middle = x + 0.5 * cosine[j]
            end = x + cosine[j]
            low = math.floor(middle)
            w = middle - low
            first = min(max(low, 0), cells - 1)
            second = min(max(low + 1, 0), cells - 1)
            m = stuff[first if w < 0.5 else second]
            if events:
                hit = n * chance[m, k]
                if hit > 0.0:
                    any_event = True
                    n -= hit
                    spared = 1.0 - chance[m, k]
                    way[j, c] *= spared
                    aside[j, c] *= spared
                    for which in range(2):
                        happened[which, first, j] += hit * parts[m, k, which] * (1.0 - w)
                        happened[which, second, j] += hit * parts[m, k, which] * w
                    lost = hit * parts[m, k, 2]
                    _share(counts[2], first, second, 1.0 - w, w, lost)
                    g = group_low[k]
                    for low_or_high in range(2):
                        part = group_weight[k] if low_or_high else 1.0 - group_weight[k]
                        decays[first, g + low_or_high] += lost * part * (1.0 - w)
                        decays[second, g + low_or_high] += lost * part * w
                    _share(forward[1], first, second, 1.0 - w, w, lost * cosine[j])
            # what is shared over an end has left
            here = 1.0 - w if 0 <= low < cells else 0.0
            there = w if 0 <= low + 1 < cells else 0.0
            escaped[0 if low < 0 else 2] += n * loss * (1.0 - here - there)
            given = n * loss * (1.0 - brems)
            _share(deposit, first, second, here, there, given)
            _share(let_weighted, first, second, here, there, given * let[m, k])
            _share(sideways, first, second, here, there, given * per_particle)
            for which in range(len(ahead)):
                if cosine[j] > ahead[which]:
                    _share(within[which, 0], first, second, here, there, given)
                    _share(within[which, 2], first, second, here, there, given * per_particle)
                    _share(within[which, 3], first, second, here, there, given * per_particle * per_particle)
            if brems > 0.0:
                bremsstrahlung[first, j] += n * loss * brems * here
                bremsstrahlung[second, j] += n * loss * brems * there
            if end < -0.5:
                escaped[0] += n * node_energy[k - 1]
                escaped[1] += n
                state[j, c] = 0.0
                way[j, c] = 0.0
                aside[j, c] = 0.0
            elif end > cells - 0.5:
                escaped[2] += n * node_energy[k - 1]
                escaped[3] += n
                state[j, c] = 0.0
                way[j, c] = 0.0
                aside[j, c] = 0.0
            else:
                state[j, c] = n
    return any_event


@njit(**PART)
def _events(  # type: ignore[no-untyped-def]
    k, source, cosine, node_energy, let, stuff, elastic_to, reemit, turn_elastic, turn_reemit, group_low, group_weight,
    happened, after_elastic, after_reaction, deposit, let_weighted, counts, reactions, forward, recoil,
):  # fmt: skip
    """Make sources of what comes out of elastic scattering and reactions."""
    _, cells, directions = source.shape
    for u in range(cells):
        m = stuff[u]
        struck = 0.0
        reacted = 0.0
        after_elastic[:] = 0.0
        after_reaction[:] = 0.0
        for j in range(directions):
            n = happened[0, u, j]
            if n > 0.0:
                struck += n
                for i in range(directions):
                    after_elastic[i] += n * turn_elastic[m, k, j, i]
            n = happened[1, u, j]
            if n > 0.0:
                reacted += n
                forward[0, u] += n * cosine[j]
                for kind in range(reemit.shape[0]):
                    for i in range(directions):
                        after_reaction[kind, i] += n * turn_reemit[kind, m, k, j, i]
        if struck > 0.0:
            counts[0, u] += struck
            after = elastic_to[m, k]
            recoil[u] += struck * (node_energy[k] - after)
            if after > node_energy[k - 1]:
                deposit[u] += struck * (after - node_energy[k - 1])
                let_weighted[u] += struck * (after - node_energy[k - 1]) * let[m, k]
                after = node_energy[k - 1]
            low = k - 1
            while low > 0 and node_energy[low] > after:
                low -= 1
            if low == k - 1:
                low = max(k - 2, 0)
            w = 0.0
            if k > 1:
                w = (after - node_energy[low]) / (node_energy[low + 1] - node_energy[low])
            for i in range(directions):
                source[low, u, i] += after_elastic[i] * (1.0 - w)
                if k > 1:
                    source[low + 1, u, i] += after_elastic[i] * w
        if reacted > 0.0:
            counts[1, u] += reacted
            g = group_low[k]
            reactions[u, g] += reacted * (1.0 - group_weight[k])
            reactions[u, g + 1] += reacted * group_weight[k]
            for kind in range(reemit.shape[0]):
                for low in range(k):
                    a = reemit[kind, m, k, low]
                    if reacted * a > 1e-16:
                        for i in range(directions):
                            source[low, u, i] += a * after_reaction[kind, i]


@njit(**PART)
def _diffuse(k, step, source, cosine, turn, state, way, aside, left, right, moved, outside):  # type: ignore[no-untyped-def]
    """Turn a part into other directions."""
    nodes, cells, directions = source.shape
    shift = nodes + 3
    moved[:] = 0.0
    for j in range(directions):
        stay = turn[k, j, j]
        for c in range(left[j], right[j] + 1):
            n = state[j, c]
            if n < 1e-16:
                continue
            state[j, c] = n * stay
            way[j, c] *= stay
            aside[j, c] *= stay
            x = c - shift + (step + 1) * cosine[j]
            low = math.floor(x)
            w = x - low
            for i in range(directions):
                if i != j and turn[k, j, i] > 0.0:
                    a = n * turn[k, j, i]
                    moved[low + 1, i] += a * (1.0 - w)
                    moved[low + 2, i] += a * w
    for i in range(directions):
        outside[0, i] = moved[cells + 1, i]
        outside[1, i] = moved[0, i]
    for u in range(cells):
        for i in range(directions):
            if moved[u + 1, i] != 0.0:
                source[k - 1, u, i] += moved[u + 1, i]


@njit(**KERNEL)
def march(  # type: ignore[no-untyped-def]
    source,
    cosine,
    step_mm,
    node_energy,
    let,
    stuff,
    chance,
    parts,
    elastic_to,
    reemit,
    turn_elastic,
    turn_reemit,
    turn,
    radiated,
    group_low,
    group_weight,
    deposit,
    let_weighted,
    stops,
    counts,
    reactions,
    decays,
    forward,
    escaped,
    bremsstrahlung,
    sideways,
    ahead,
    within,
):
    """Carry a population down in residual range, with events and angular diffusion.

    source (nodes, cells, directions) is used up and changed. node_energy (nodes); let (materials, nodes) keV/um on
    the way down from a node; stuff (cells); chance (materials, nodes) of an event on the way down from a node;
    parts (materials, nodes, 3) elastic, reaction, decay; elastic_to (materials, nodes) energy after elastic
    scattering; reemit (classes, materials, nodes, nodes) particles of the same kind per reaction; turn_elastic
    (materials, nodes, directions, directions), turn_reemit likewise for each class; turn (nodes, directions,
    directions) angular diffusion per step or of length 0; radiated (nodes) share of the loss that is bremsstrahlung.
    Sideways displacement (variance of one axis since emission) is carried along as a sum over particles; sideways
    (cells) receives it times the deposit; within (thresholds, 4, cells) holds deposit, stops, sideways and
    the same with the squared variance, of directions over each threshold of `ahead`. Scores: deposit, let_weighted,
    stops, counts (3, cells) of events, reactions and decays (cells, groups), forward (2, cells) sum of cosine times
    events, escaped (4): energy and number through the front and the back, bremsstrahlung (cells, directions).
    Returns the energy that elastic scattering gave to nuclei, by cell.
    """
    nodes, cells, directions = source.shape
    width = cells + 2 * nodes + 6
    shift = nodes + 3
    state = np.zeros((directions, width))
    way = np.zeros((directions, width))
    aside = np.zeros((directions, width))
    recoil = np.zeros(cells)
    happened = np.zeros((2, cells, directions))
    # cells -1 and `cells` take what is shared over an end
    moved = np.zeros((cells + 2, directions))
    outside = np.zeros((2, directions))
    after_elastic = np.zeros(directions)
    after_reaction = np.zeros((reemit.shape[0], directions))
    left, right = np.empty(directions, np.int64), np.empty(directions, np.int64)
    for j in range(directions):
        left[j], right[j] = width, -1
    events = chance.shape[1] > 0
    diffuse = turn.shape[0] > 0
    for k in range(nodes - 1, -1, -1):
        step = nodes - 1 - k
        # sources at this node enter the moving frames
        _enter(source, outside, k, step, cosine, node_energy, escaped, state, left, right)
        if k == 0:
            break
        brems = radiated[k] if radiated.shape[0] > 0 else 0.0
        if events:
            happened[:] = 0.0
        any_event = _walk(
            k, step, step_mm, cosine, node_energy, let, stuff, chance, parts, brems, group_low, group_weight, state,
            way, aside, left, right, happened, deposit, let_weighted, counts, decays, forward, escaped,
            bremsstrahlung, sideways, ahead, within,
        )  # fmt: skip
        if any_event:
            _events(
                k, source, cosine, node_energy, let, stuff, elastic_to, reemit, turn_elastic, turn_reemit, group_low,
                group_weight, happened, after_elastic, after_reaction, deposit, let_weighted, counts, reactions,
                forward, recoil,
            )  # fmt: skip
        if diffuse:
            _diffuse(k, step, source, cosine, turn, state, way, aside, left, right, moved, outside)
    step = nodes - 1
    for j in range(directions):
        for c in range(width):
            n = state[j, c]
            if n > 0.0:
                x = c - shift + step * cosine[j]
                low = math.floor(x)
                w = x - low
                first = min(max(low, 0), cells - 1)
                second = min(max(low + 1, 0), cells - 1)
                stops[first] += n * (1.0 - w)
                stops[second] += n * w
                for which in range(len(ahead)):
                    if cosine[j] > ahead[which]:
                        within[which, 1, first] += n * (1.0 - w)
                        within[which, 1, second] += n * w
    return recoil

"""Compiled loops of the one-dimensional transport.

A population is kept by residual range and direction cosine. Each step takes all of it down by one node of residual
range and along its direction by the same length. For each direction the population lives in a frame that moves with
it, so that nothing is smeared by the stepping; only sources and scores are shared between the two nearest cells of
depth.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL
from dosekit.depths.kernels_march import march

__all__ = ["gather_products", "march", "score_events", "stream_photons"]


@njit(**KERNEL)
def score_events(number, energy, cell, parts, node_energy, group_energy, by_node, by_group):  # type: ignore[no-untyped-def]
    """Sort events of classes (q, i) into cells of depth, energy nodes and energy groups.

    parts (3, q, i) are the shares of elastic, reaction and decay in `number`; by_node (2, cells, nodes) takes
    elastic and reaction, by_group (2, cells, groups) reaction and decay. Weights linear in energy keep number and
    energy.
    """
    nodes = len(node_energy)
    groups = len(group_energy)
    for q in range(number.shape[0]):
        for i in range(number.shape[1]):
            n = number[q, i]
            if n < 1e-14:
                continue
            t = energy[q, i]
            u = cell[i]
            lo = np.searchsorted(node_energy, t) - 1
            lo = max(lo, 0)
            lo = min(lo, nodes - 2)
            w = (t - node_energy[lo]) / (node_energy[lo + 1] - node_energy[lo])
            for which in range(2):
                m = n * parts[which, q, i]
                by_node[which, u, lo] += m * (1.0 - w)
                by_node[which, u, lo + 1] += m * w
            g = np.searchsorted(group_energy, t) - 1
            g = max(g, 0)
            g = min(g, groups - 2)
            v = (t - group_energy[g]) / (group_energy[g + 1] - group_energy[g])
            v = min(max(v, 0.0), 1.0)
            for which in range(2):
                m = n * parts[which + 1, q, i]
                by_group[which, u, g] += m * (1.0 - v)
                by_group[which, u, g + 1] += m * v


@njit(**KERNEL)
def gather_products(events, stuff, spread, angular, out):  # type: ignore[no-untyped-def]
    """Add products of events to the sources of a species.

    events (cells, groups), stuff (cells) material number, spread (materials, groups, nodes) particles per event by
    node, angular (materials, groups, directions) shares by direction, out (nodes, cells, directions).
    """
    cells, groups = events.shape
    nodes = spread.shape[2]
    directions = angular.shape[2]
    for u in range(cells):
        m = stuff[u]
        for g in range(groups):
            n = events[u, g]
            if n < 1e-15:
                continue
            for k in range(nodes):
                a = n * spread[m, g, k]
                if a == 0.0:
                    continue
                for j in range(directions):
                    out[k, u, j] += a * angular[m, g, j]


@njit(**KERNEL)
def stream_photons(source, cosine, attenuation, deposit, escaped):  # type: ignore[no-untyped-def]
    """Carry photon energy along its direction with exponential absorption.

    source (cells, directions) MeV; attenuation (cells) absorbed per cell at normal incidence; deposit (cells);
    escaped (2) through the front and the back.
    """
    cells, directions = source.shape
    for j in range(directions):
        mu = cosine[j]
        flow = 0.0
        if mu > 0.0:
            for u in range(cells):
                lost = -math.expm1(-attenuation[u] / mu)
                half = -math.expm1(-0.5 * attenuation[u] / mu)
                deposit[u] += flow * lost + source[u, j] * half
                flow = flow * (1.0 - lost) + source[u, j] * (1.0 - half)
            escaped[1] += flow
        else:
            for u in range(cells - 1, -1, -1):
                lost = -math.expm1(attenuation[u] / mu)
                half = -math.expm1(0.5 * attenuation[u] / mu)
                deposit[u] += flow * lost + source[u, j] * half
                flow = flow * (1.0 - lost) + source[u, j] * (1.0 - half)
            escaped[0] += flow

"""Where do beam particles slow down, stop, react and decay before their first nuclear scattering?

The beam is cut into classes by quantile of residual range, each a stretch of residual range with an even density, whose
edges move down together: r(z) = r(0) - s(z) + D (sd(z) - sd(0)). Here s is the mean path to depth z, longer than z by
multiple scattering (ds = dz exp(A0), A0 the Fermi-Eyges angle variance); sd(z) is the standard deviation of residual
range, from momentum spread at the start and growing by straggling; D is the change of a quantile per change of sd, from
the exact shapes at both ends (:func:`dosekit.beams.straggling.range_shape` and a Gaussian of momentum). At a
boundary the edges keep their energy. Energy flux and number at each depth are exact for the classes, so that
nothing is lost:

    deposit of a bin = mean over the bin's ends of survival * (T at the front - T at the back)

A closed form with similar ingredients for protons: T. Bortfeld, Med. Phys. 24 (1997) 2024.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from dosekit.basis.materials import Material
from dosekit.basis.particles import kinetic_energy_mev
from dosekit.beams.ranges import RangeTable, range_table
from dosekit.beams.reactions import CHANNELS
from dosekit.beams.scattering import scattering_power_rad2_mm
from dosekit.beams.straggling import mean_range_excess_mm, range_shape, range_sigma_mm, range_variance_mm2
from dosekit.depths.lookup import Lookup, middle_of

__all__ = ["Core", "bin_edges", "solve_core"]

_SPACING = 0.2
_LOWEST_SIGMA = -9.0
_HIGHEST_SIGMA = 5.5


@dataclass(frozen=True)
class Core:
    """The unscattered beam in fine bins of depth.

    Attributes
    ----------
    edges_mm : ndarray, shape (bins + 1,)
        Depth edges, layer boundaries among them.
    layer : ndarray of int, shape (bins,)
        Layer of each bin.
    deposit : ndarray, shape (bins,)
        Energy given by slowing down, MeV per particle.
    let_weighted : ndarray, shape (bins,)
        Deposit times LET, MeV keV/um.
    stops : ndarray, shape (bins,)
        Particles brought to rest.
    channels : dict of str to ndarray, shape (bins,)
        Events by channel of reaction, and ``decay``.
    number, mean_energy : ndarray, shape (bins + 1,)
        Particles left at the edges, and their mean kinetic energy, MeV.
    events : ndarray, shape (classes, bins)
        Events by class.
    event_energy : ndarray, shape (classes, bins)
        Kinetic energy at these events, MeV.
    event_parts : ndarray, shape (3, classes, bins)
        Shares of elastic, reaction and decay.
    angle_variance : ndarray, shape (bins + 1,)
        Fermi-Eyges A0 along the mean trajectory, rad2.
    class_number : ndarray, shape (classes, bins + 1)
        Particles of each class at the edges of bins.
    class_energy : ndarray, shape (classes + 1, bins + 1)
        Energies of the class edges there, MeV; between them the density is taken as even.
    energy_in, energy_out : float
        Kinetic energy at depth 0 and behind the last edge, MeV.
    """

    edges_mm: NDArray[np.float64] = field(repr=False)
    layer: NDArray[np.int64] = field(repr=False)
    deposit: NDArray[np.float64] = field(repr=False)
    let_weighted: NDArray[np.float64] = field(repr=False)
    stops: NDArray[np.float64] = field(repr=False)
    channels: dict[str, NDArray[np.float64]] = field(repr=False)
    number: NDArray[np.float64] = field(repr=False)
    mean_energy: NDArray[np.float64] = field(repr=False)
    events: NDArray[np.float64] = field(repr=False)
    event_energy: NDArray[np.float64] = field(repr=False)
    event_parts: NDArray[np.float64] = field(repr=False)
    angle_variance: NDArray[np.float64] = field(repr=False)
    class_number: NDArray[np.float64] = field(repr=False)
    class_energy: NDArray[np.float64] = field(repr=False)
    energy_in: float = 0.0
    energy_out: float = 0.0


def solve_core(
    species: str,
    momentum: float,
    *,
    spread: float,
    layers: tuple[tuple[Material, float], ...],
    bin_mm: float,
    yields: str,
    nuclear: bool = True,
    decays: bool = True,
    detour: bool = True,
) -> Core:
    """Follow the unscattered beam through a stack.

    Parameters
    ----------
    species : str
        Beam particle.
    momentum : float
        Mean momentum, MeV/c.
    spread : float
        Standard deviation of momentum over mean.
    layers : tuple of (Material, float)
        Materials and thicknesses, mm.
    bin_mm : float
        Largest bin, mm; boundaries of layers are added.
    yields : str
        Yield set.
    nuclear, decays, detour : bool
        Whether reactions, decay and the longer path by multiple scattering are in.

    Returns
    -------
    Core
        The result.
    """
    edges, layer = bin_edges(layers, bin_mm)
    mean_energy = float(kinetic_energy_mev(species, momentum))
    first = range_table(species, layers[0][0])
    front, final, weight = _classes(species, momentum, spread, layers[0][0], mean_energy, first)
    sd_first = float(_deviation(front, weight))
    sd_last = float(_deviation(final, weight))
    shape = (final - front - np.sum(weight * (middle_of(final) - middle_of(front)))) / max(sd_last - sd_first, 1e-12)

    bins, classes = len(layer), len(weight)
    deposit, let_weighted, stops = np.zeros(bins), np.zeros(bins), np.zeros(bins)
    channels = {name: np.zeros(bins) for name in (*CHANNELS, "decay")}
    number, flux_energy = np.zeros(bins + 1), np.zeros(bins + 1)
    events, event_energy = np.zeros((classes, bins)), np.zeros((classes, bins))
    parts = np.zeros((3, classes, bins))
    variance = np.zeros(bins + 1)
    class_number, class_energy = np.zeros((classes, bins + 1)), np.zeros((classes + 1, bins + 1))

    ranges = front.copy()
    survival = np.ones(classes)
    angle, sd = 0.0, sd_first
    walk = mean_energy
    stuff = layers[0][0]
    energy_in = 0.0
    for m, (stuff, _thickness) in enumerate(layers):
        table = range_table(species, stuff)
        inside = np.flatnonzero(layer == m)
        first_bin = int(inside[0])
        z = edges[first_bin : first_bin + len(inside) + 1] - edges[first_bin]
        path, angles, walk_out, detour_variance = _trajectory(
            species, table, walk, angle, mean_energy, z, detour=detour
        )
        start_range = float(table.range_mm(walk))
        left = np.maximum(start_range - path, 0.0)
        grown = np.maximum(
            range_variance_mm2(species, stuff, walk) - range_variance_mm2(species, stuff, table.energy_mev(left)), 0.0
        )
        deviation = np.sqrt(sd**2 + grown + detour_variance)
        total_variance = max(float(range_variance_mm2(species, stuff, walk)), 1e-12)
        excess = mean_range_excess_mm(species, stuff, walk) * grown / total_variance if walk > 0.1 else 0.0 * grown
        now = ranges[:, None] - path[None, :] + shape[:, None] * (deviation - sd)[None, :] + excess[None, :]
        lookup = Lookup(species, table, float(np.max(now)) + 1.0, yields, nuclear=nuclear, decays=decays)
        result = lookup.bins(now, survival)
        keep = slice(first_bin, first_bin + len(inside))
        w = weight[:, None]
        deposit[keep] = np.sum(w * result.deposit, axis=0)
        let_weighted[keep] = np.sum(w * result.let_weighted, axis=0)
        stops[keep] = np.sum(w * result.stops, axis=0)
        events[:, keep] = w * result.events
        event_energy[:, keep] = result.event_energy
        for index, name in enumerate((*CHANNELS, "decay")):
            channels[name][keep] = np.sum(events[:, keep] * result.shares[index], axis=0)
        channels["elastic"][keep] += np.sum(events[:, keep] * result.shares[5], axis=0)
        parts[0, :, keep] = result.shares[3]
        parts[1, :, keep] = result.shares[0] + result.shares[1] + result.shares[2] + result.shares[5]
        parts[2, :, keep] = result.shares[4]
        edges_here = slice(first_bin, first_bin + len(inside) + 1)
        number[edges_here] = np.sum(w * result.alive, axis=0)
        flux_energy[edges_here] = np.sum(w * result.flux, axis=0)
        variance[edges_here] = angles
        class_number[:, edges_here] = w * result.alive
        class_energy[:, edges_here] = lookup.energies(now)
        if m == 0:
            energy_in = float(flux_energy[0])
        # hand over to the next layer at equal energy
        survival = result.survival_end
        edge_energy = table.energy_mev(now[:, -1])
        if m + 1 < len(layers):
            following = range_table(species, layers[m + 1][0])
            ranges = np.where(now[:, -1] > 0.0, following.range_mm(edge_energy), now[:, -1])
            scale = float(table.stopping_mev_mm(max(walk_out, 0.05)) / following.stopping_mev_mm(max(walk_out, 0.05)))
            sd = float(deviation[-1]) * scale
            walk, angle = walk_out, float(angles[-1])
    safe = np.where(number > 1e-12, number, 1.0)
    return Core(
        edges, layer, deposit, let_weighted, stops, channels, number,
        np.where(number > 1e-12, flux_energy / safe, 0.0), events, event_energy, parts, variance,
        class_number, class_energy,
        energy_in, float(flux_energy[-1]),
    )  # fmt: skip


def bin_edges(
    layers: tuple[tuple[Material, float], ...], bin_mm: float
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return bin edges that hold all multiples of the bin and all boundaries, and the layer of each bin.

    Parameters
    ----------
    layers : tuple of (Material, float)
        Materials and thicknesses, mm.
    bin_mm : float
        Largest bin, mm.

    Returns
    -------
    edges_mm : ndarray, shape (bins + 1,)
        Edges, mm.
    layer : ndarray of int, shape (bins,)
        Layer of each bin.
    """
    borders = np.concatenate([[0.0], np.cumsum([thickness for _, thickness in layers])])
    regular = bin_mm * np.arange(int(np.ceil(borders[-1] / bin_mm - 1e-9)) + 1)
    regular = regular[regular < borders[-1] + 1e-9]
    edges = np.unique(np.round(np.concatenate([regular, borders]), 9))
    edges = edges[np.concatenate([[True], np.diff(edges) > 1e-6])]
    middle = 0.5 * (edges[1:] + edges[:-1])
    return edges, np.clip(np.searchsorted(borders, middle) - 1, 0, len(layers) - 1)


def _deviation(edges: NDArray[np.float64], weight: NDArray[np.float64]) -> float:
    """Return the standard deviation of a piecewise even density."""
    centre = middle_of(edges)
    mean = float(np.sum(weight * centre))
    return float(np.sqrt(np.sum(weight * ((centre - mean) ** 2 + np.diff(edges) ** 2 / 12.0))))


def _classes(
    species: str, momentum: float, spread: float, stuff: Material, energy: float, table: RangeTable
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return class edges in residual range at the start, in total range at the end, and class weights."""
    x, density = range_shape(species, stuff, energy)
    sigma = float(range_sigma_mm(species, stuff, energy))
    centre = float(table.range_mm(energy))
    dx = float(x[1] - x[0])
    if spread <= 0.0:
        cumulative = np.concatenate([[0.0], np.cumsum(density) * dx])
        x_edge = np.concatenate([x - 0.5 * dx, [x[-1] + 0.5 * dx]])
        steps = np.arange(_LOWEST_SIGMA, _HIGHEST_SIGMA + 1e-9, _SPACING)
        at = np.interp(steps, x_edge, cumulative / cumulative[-1])
        weight = np.diff(at)
        final = centre + sigma * steps
        front = np.full(len(steps), centre)
        weight = weight / np.sum(weight)
        return front, final, weight
    # momentum: equal steps of a Gaussian; straggling scales with range; the mixture is summed on a fine grid
    z = np.linspace(-4.5, 4.5, 61)
    gauss = np.exp(-0.5 * z**2)
    gauss /= np.sum(gauss)
    each = kinetic_energy_mev(species, momentum * np.maximum(1.0 + spread * z, 0.02))
    ranges, sigmas = table.range_mm(each), range_sigma_mm(species, stuff, each)
    low = float(np.min(ranges - 6.0 * sigmas))
    high = float(np.max(ranges + 5.5 * sigmas))
    fine = np.linspace(low, high, 1501)
    x_edge = np.concatenate([x - 0.5 * dx, [x[-1] + 0.5 * dx]])
    shape_cdf = np.concatenate([[0.0], np.cumsum(density) * dx])
    reduced = (fine[None, :] - ranges[:, None]) / sigmas[:, None]
    cumulative = gauss @ np.interp(reduced, x_edge, shape_cdf / shape_cdf[-1])
    total_sd = np.sqrt(float(np.sum(gauss * (ranges - centre) ** 2)) + sigma**2)
    # edges scale with the spread, so that curves change smoothly with momentum and spread
    final = centre + total_sd * np.arange(-6.2, 6.21, 0.08)
    at = np.interp(final, fine, cumulative, left=0.0, right=1.0)
    at[0], at[-1] = 0.0, 1.0
    weight = np.diff(at)
    quantile = ndtri(np.clip(at, 1e-10, 1.0 - 1e-10))
    front = table.range_mm(kinetic_energy_mev(species, momentum * np.maximum(1.0 + spread * quantile, 0.02)))
    return np.asarray(front), final, weight / np.sum(weight)


def _trajectory(
    species: str,
    table: RangeTable,
    energy: float,
    angle: float,
    start_energy: float,
    z: NDArray[np.float64],
    *,
    detour: bool,
) -> tuple[NDArray[np.float64], NDArray[np.float64], float, NDArray[np.float64]]:
    """Return path and angle variance at depths in a layer, the mean energy behind it, and the variance of the path.

    The path exceeds the depth by half the integral of the squared angle; for two Gaussian angles with independent
    increments its variance is 2 int ds int_0^s A0(s')^2 ds'.
    """
    total = float(table.range_mm(energy))
    nodes = total * (1.0 - (1.0 - np.linspace(0.0, 1.0, 301)) ** 2)
    middle = middle_of(nodes)
    t_middle = np.maximum(table.energy_mev(total - middle), 1e-3)
    power = scattering_power_rad2_mm(species, table.material, t_middle, start_energy_mev=start_energy)
    angles = angle + np.concatenate([[0.0], np.cumsum(power * np.diff(nodes))])
    spread = np.zeros(len(nodes))
    if not detour or total <= 0.0:
        path = z.copy()
    else:
        inner = np.concatenate([[0.0], np.cumsum(middle_of(np.minimum(angles, 1.0)) ** 2 * np.diff(nodes))])
        spread = np.concatenate([[0.0], np.cumsum(2.0 * middle_of(inner) * np.diff(nodes))])
        shrink = np.exp(-np.minimum(middle_of(angles), 1.0))
        depth = np.concatenate([[0.0], np.cumsum(shrink * np.diff(nodes))])
        path = np.interp(z, depth, nodes)
        path = np.where(z > depth[-1], total + (z - depth[-1]), path)
    left = float(table.energy_mev(total - path[-1]))
    return path, np.interp(path, nodes, angles), left, np.interp(path, nodes, spread)

"""What the fold takes from a depth library: rows of water-equivalent depth, columns of range steps.

The library says, for each range step, what a broad beam leaves in water at each depth. Here it becomes

``narrow``  energy and stops of the core, whose width follows each ray's own Fermi-Eyges moments;
``broad``   everything wider (the core's tails of large scatterings, scattered beam particles, products of reactions,
            decays, contaminants). Its variance is the core's in water plus the library's extra variance; each quantity
            is divided between a few fixed widths (:mod:`dosekit.maps.parts`), and what has hardly left the beam stays
            with the core;
``power``   the core's scattering power in water, rad2 per mm, by differential Moliere (Gottschalk 2010).

Depth rows are bin centres; a row of zeros follows the last. ``broad`` varies slowly and is read from the nearest of
four rows to a bin.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.parts import Contribution, divide

if TYPE_CHECKING:
    from dosekit.beams.beam import Beam
    from dosekit.depths.library import DepthLibrary

__all__ = ["BROAD_TARGETS", "TARGETS", "StepTables", "step_tables"]

TARGETS: tuple[str, ...] = ("primary", "stops", "in_flight", "decay", "contaminant_muon", "contaminant_electron")
"""What the fold makes in voxels; star components follow from the stops."""

BROAD_TARGETS: dict[str, str] = {
    "scattered": "primary",
    "scattered_stops": "stops",
    "scattered_near": "primary",
    "scattered_near_stops": "stops",
    "scattered_oblique": "primary",
    "scattered_oblique_stops": "stops",
    "scattered_wide": "primary",
    "scattered_wide_stops": "stops",
    "in_flight_charged": "in_flight",
    "in_flight_neutral": "in_flight",
    "decay": "decay",
    "contaminant_muon": "contaminant_muon",
    "contaminant_electron": "contaminant_electron",
}
"""Quantities of the library that are spread by fixed widths, and where they go. A library that divides its scattered
particles into near, oblique and wide ones has their sum as well, which is then left out."""

_UNEQUAL = {"scattered": 3.3, "scattered_stops": 3.3, "in_flight_charged": 3.3}  # events and slopes of all kinds
_NARROW_TARGETS = ("primary", "stops")
_NARROWEST_OF_SPOT = 0.96  # makes the variance that the coarse lattice adds no larger than that of the lowest rung
_NARROWEST_MM = 4.62
_NEGLIGIBLE = 1e-10
_DETOURS = (-0.2, 3.0)  # where the first order and its continuation end
_GONE = 1e-3
_QUADRATURE = 24
_LOWEST_ENERGY_MEV = 0.5


@dataclass(frozen=True, eq=False)
class StepTables:
    """Depth tables of one beam's range steps.

    Attributes
    ----------
    bin_mm : float
        Width of a depth row, mm of water.
    narrow : ndarray
        Energy (MeV/mm) and stops (1/mm) of the core per particle, shape (rows, 2, K).
    power : ndarray
        Scattering power of the core in water, rad2/mm, shape (rows, K).
    survivors : ndarray
        Scatter variance of those that reach a depth, tails left out, over that of the mean particle, shape (rows, K).
    broad : ndarray
        Energy or stops per part, shape (4 rows, K, parts): four rows to a depth bin.
    part_sigma_mm : ndarray
        Width of each part, falling, shape (parts,), mm.
    part_target : ndarray
        Index into `TARGETS` of each part.
    start : ndarray
        Fermi-Eyges moments A0, A1, A2 of each step behind its range shifter, shape (3, K); rad2, mm rad, mm2.
    gap_mm : float
        From the range shifter to the surface, mm.
    """

    bin_mm: float
    narrow: NDArray[np.float64]
    power: NDArray[np.float64]
    survivors: NDArray[np.float64]
    broad: NDArray[np.float64]
    part_sigma_mm: NDArray[np.float64]
    part_target: NDArray[np.int64]
    start: NDArray[np.float64]
    gap_mm: float

    @property
    def surface_variance_mm2(self) -> NDArray[np.float64]:
        """Spread from the range shifter and the gap at the surface, shape (K,), mm2."""
        a0, a1, a2 = self.start
        return np.asarray(a2 + 2.0 * a1 * self.gap_mm + a0 * self.gap_mm**2)

    def alive(self) -> NDArray[np.int64]:
        """Return how many steps must be followed at each row: up to the last whose core is still needed.

        Returns
        -------
        ndarray
            Number of steps, shape (rows,).
        """
        exists = (self.power > 0.0) | (self.narrow > 0.0).any(axis=1)
        exists[:-1] |= exists[1:]
        exists = np.logical_or.accumulate(exists[::-1], axis=0)[::-1]
        last = exists.shape[1] - exists[:, ::-1].argmax(axis=1)
        return np.where(exists.any(axis=1), last, 0).astype(np.int64)


def step_tables(library: DepthLibrary, beam: Beam) -> StepTables:
    """Turn a depth library into the fold's tables.

    Parameters
    ----------
    library : DepthLibrary
        Depth curves in water for each range step.
    beam : Beam
        The beam before the range shifter.

    Returns
    -------
    StepTables
        The tables.
    """
    from dosekit.beams.moliere import TAIL_SIGMAS, core_variance_share
    from dosekit.beams.scattering import scattering_power_rad2_mm

    depth = np.asarray(library.depth_mm, dtype=np.float64)
    bin_mm = float(depth[1] - depth[0])
    energy = np.maximum(np.asarray(library.kinetic_energy_mev, dtype=np.float64), _LOWEST_ENERGY_MEV)
    power = scattering_power_rad2_mm(beam.particle, "water", energy, start_energy_mev=beam.kinetic_energy_mev)
    core = np.asarray(library.quantities["core"], dtype=np.float64)
    power[core < _GONE * core.max(axis=1, keepdims=True)] = 0.0  # nothing is left to scatter
    start = _behind_shifter(library, beam)
    gap = beam.range_shifter_gap_mm
    in_water = _variance_in_water(power, start, gap_mm=gap, bin_mm=bin_mm)
    survivors = _survivors(beam, energy, start, in_water, gap_mm=gap, depth_mm=depth)
    tail_shares = _tail_shares(library, beam)
    detour = _detours(core, power, start, in_water, gap_mm=gap, depth_mm=depth)
    survivors *= core_variance_share(tail_shares) / (1.0 + detour)
    in_water *= survivors
    squares = np.square(TAIL_SIGMAS)
    late = np.maximum(detour, 0.0)[..., None]
    tail_shares = tail_shares * (1.0 + late) / (1.0 + late * squares)
    tail_squares = squares * (1.0 + late) / (1.0 + late * squares)
    narrow = np.stack([_clean(library.quantities[key]) for key in ("core", "core_stops")], axis=2)
    contributions = _tails(tail_shares, tail_squares, narrow, in_water)
    for tail in contributions:
        narrow[..., tail.target] -= tail.quantity
    contributions += _wider(library, in_water)
    values, sigmas, targets = [], [], []
    narrowest = _narrowest_mm(beam, start, gap_mm=gap)
    for target in range(len(TARGETS)):
        chosen = [one for one in contributions if one.target == target and one.quantity.any()]
        if not chosen:
            continue
        with_core = TARGETS[target] in _NARROW_TARGETS
        core_variance = np.where((power > 0.0) & with_core, in_water, np.inf)
        widths, shared, kept = divide(chosen, core_variance, narrowest_mm=narrowest)
        if with_core:
            narrow[..., target] += kept
        sigmas += list(widths)
        values += list(shared)
        targets += [target] * len(widths)
    order = np.argsort(-np.array(sigmas), kind="stable")
    shape = (*energy.shape, len(order))
    broad = np.stack([values[n] for n in order], axis=2) if len(order) else np.zeros(shape)
    return StepTables(
        bin_mm=bin_mm,
        narrow=np.ascontiguousarray(_rows(narrow).transpose(0, 2, 1)),
        power=_rows(power),
        survivors=_rows(survivors),
        broad=_quarter_rows(broad),
        part_sigma_mm=np.array([sigmas[n] for n in order], dtype=np.float64),
        part_target=np.array([targets[n] for n in order], dtype=np.int64),
        start=start,
        gap_mm=gap,
    )


def _behind_shifter(library: DepthLibrary, beam: Beam) -> NDArray[np.float64]:
    """Return the moments that scattering in the range shifter leaves, one column for each step."""
    from dosekit.beams.scattering import fermi_eyges_moments
    from dosekit.beams.stopping import relative_stopping_power

    shift = np.asarray(library.shift_mm, dtype=np.float64)
    shifter = beam.shifter_material
    medium = "water" if shifter is None else shifter
    thickness = shift / float(relative_stopping_power(medium, beam.particle)) + beam.fixed_shifter_mm
    if not thickness.any():
        return np.zeros((3, len(shift)))
    moments = fermi_eyges_moments(beam.particle, medium, beam.kinetic_energy_mev, depth_mm=thickness)
    return np.stack([np.asarray(moment, dtype=np.float64) for moment in moments])


def _variance_in_water(
    power: NDArray[np.float64], start: NDArray[np.float64], *, gap_mm: float, bin_mm: float
) -> NDArray[np.float64]:
    """Return the scatter variance gained in water up to each bin centre, shape (K, N), mm2."""
    a0, a1, a2 = (moment.copy() for moment in start)
    a2 += gap_mm * (2.0 * a1 + gap_mm * a0)
    a1 += gap_mm * a0
    surface = a2.copy()
    gained = np.empty_like(power)
    for n in range(power.shape[1]):
        dl = 0.5 * bin_mm if n == 0 else bin_mm
        t = power[:, n] if n == 0 else 0.5 * (power[:, n] + power[:, n - 1])
        a2 = a2 + dl * (2.0 * a1 + dl * (a0 + t * dl / 3.0))
        a1 = a1 + dl * (a0 + 0.5 * t * dl)
        a0 = a0 + t * dl
        gained[:, n] = a2 - surface
    return gained


def _survivors(
    beam: Beam,
    energy: NDArray[np.float64],
    start: NDArray[np.float64],
    in_water: NDArray[np.float64],
    *,
    gap_mm: float,
    depth_mm: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Return by how much the scatter variance of those that reach a depth differs from `in_water`, shape (K, N).

    Near the end of the range only particles with more range than the mean are left: they had more energy all along
    and scattered less. Their own range is the depth plus what is left of it, and their variance in water is the
    integral of the scattering power over the squared distance, at the energies that belong to that range.
    """
    from dosekit.beams.ranges import range_table
    from dosekit.beams.scattering import scattering_power_rad2_mm

    table = range_table(beam.particle, "water")
    left = np.asarray(table.range_mm(energy), dtype=np.float64)  # range left at each depth
    nodes, weights = np.polynomial.legendre.leggauss(_QUADRATURE)
    part, weights = 0.5 * (nodes + 1.0), 0.5 * weights
    distance = depth_mm[None, :, None] * part**2  # from the depth back to the surface, finer near the depth
    there = np.maximum(table.energy_mev(left[..., None] + distance), _LOWEST_ENERGY_MEV)
    power = scattering_power_rad2_mm(beam.particle, "water", there, start_energy_mev=beam.kinetic_energy_mev)
    gained = (power * distance**2 * (2.0 * part * depth_mm[None, :, None]) * weights).sum(axis=2)
    a0, a1, _ = start
    drift = 2.0 * (a1 + a0 * gap_mm)[:, None] * depth_mm + a0[:, None] * depth_mm**2
    return np.where(in_water > 0.0, (gained + drift) / np.where(in_water > 0.0, in_water, 1.0), 1.0)


def _detours(
    core: NDArray[np.float64],
    power: NDArray[np.float64],
    start: NDArray[np.float64],
    in_water: NDArray[np.float64],
    *,
    gap_mm: float,
    depth_mm: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Return by how much detours narrow the beam at each depth: 1 + this divides the scatter variance, shape (K, N).

    A particle that is far from the axis has run further, by half the squared angle along its path, and leaves what the
    beam leaves that much deeper. With the slope h = -d ln(core)/dz the particles are weighted by exp(-h detour); since
    Cov(x^2, theta^2) = 2 Cov(x, theta)^2 of Gaussian angles, the variance of x changes by -h C to first order, with
    C = int Cov(x, theta(z'))^2 dz' and Cov = A1 + A0 z + int T (z - z'') dz'' up to z'. 1 / (1 + h C / variance) goes
    on to large h. It is little before the peak, and a third of the width some straggling sigmas behind it.
    """
    step = float(depth_mm[1] - depth_mm[0])
    a0, a1, _ = start
    m0 = a0[:, None] + np.cumsum(power, axis=1) * step
    m1 = -(a1 + gap_mm * a0)[:, None] + np.cumsum(power * depth_mm, axis=1) * step
    p0, p1, p2 = (np.cumsum(product, axis=1) * step for product in (m0 * m0, m0 * m1, m1 * m1))
    together = np.maximum(depth_mm * (depth_mm * p0 - 2.0 * p1) + p2, 0.0)
    steep = -np.gradient(np.log(np.maximum(core, _NEGLIGIBLE * core.max(axis=1, keepdims=True))), depth_mm, axis=1)
    late = steep * together / np.where(in_water > 0.0, in_water, np.inf)
    return np.asarray(np.clip(late, *_DETOURS))


def _tail_shares(library: DepthLibrary, beam: Beam) -> NDArray[np.float64]:
    """Return the shares of the core with one or a few large Coulomb scatterings, shape (K, N, 2)."""
    from dosekit.beams.moliere import tail_shares
    from dosekit.beams.ranges import range_table

    reach = float(range_table(beam.particle, "water").range_mm(beam.kinetic_energy_mev))
    in_front = (reach - np.asarray(library.residual_range_mm, dtype=np.float64))[:, None].clip(min=0.0)
    return tail_shares(beam.particle, beam.kinetic_energy_mev, library.depth_mm + in_front)


def _tails(
    shares: NDArray[np.float64],
    squares: NDArray[np.float64],
    narrow: NDArray[np.float64],
    in_water: NDArray[np.float64],
) -> list[Contribution]:
    """Return the tails of the core: shares, and variances over that of the core, have shape (K, N, tails)."""
    nothing = np.zeros_like(in_water)
    return [
        Contribution(target, shares[..., n] * narrow[..., target], squares[..., n] * in_water, nothing)
        for target in range(len(_NARROW_TARGETS))
        for n in range(shares.shape[-1])
    ]


def _wider(library: DepthLibrary, in_water: NDArray[np.float64]) -> list[Contribution]:
    """Return what the library spreads wider than the core."""
    divided = {"scattered", "scattered_stops"} if "scattered_wide" in library.quantities else set()
    nothing = np.zeros_like(in_water)
    widths = library.extra_sigma_mm
    result = []
    for key, target in BROAD_TARGETS.items():
        if key in divided:
            continue
        extra = np.asarray(widths.get(key, widths.get(key.removesuffix("_stops"), nothing)), dtype=np.float64)
        quantity = _clean(library.quantities.get(key, nothing))
        unequal = library.unequal.get(key.removesuffix("_stops"), _UNEQUAL.get(key, 1.0))
        result.append(Contribution(TARGETS.index(target), quantity, in_water, np.nan_to_num(extra) ** 2, unequal))
    return result


def _narrowest_mm(beam: Beam, start: NDArray[np.float64], *, gap_mm: float) -> float:
    """Return the smallest width that the coarse lattice carries for the beam's spots, mm.

    Its step is 1.2 times the smallest sigma of a spot joined with that of the narrowest part, at most 8 mm, and it adds
    a third of a squared step of variance.
    """
    a0, a1, a2 = start
    shifted = float((a2 + 2.0 * a1 * gap_mm + a0 * gap_mm**2).min())
    spot = min(float(np.hypot(beam.axis(axis)[0], np.sqrt(max(shifted, 0.0)))) for axis in range(2))
    return float(np.clip(_NARROWEST_OF_SPOT * spot, 0.5, _NARROWEST_MM))


def _clean(quantity: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return a quantity with its negligible ends set to nothing."""
    values = np.array(quantity, dtype=np.float64)
    values[np.abs(values) < _NEGLIGIBLE * np.abs(values).max(initial=0.0)] = 0.0
    return values


def _rows(table: NDArray[np.float64]) -> NDArray[np.float64]:
    """Turn (K, N, ...) into rows of depth (N + 1, K, ...), the last one zero."""
    rows = np.moveaxis(table, 1, 0)
    return np.ascontiguousarray(np.concatenate([rows, np.zeros((1, *rows.shape[1:]))]))


def _quarter_rows(table: NDArray[np.float64]) -> NDArray[np.float64]:
    """Turn (K, N, parts) into rows at the middles of quarter bins, the last one zero."""
    rows = _rows(table)
    place = np.clip((np.arange(4 * table.shape[1]) + 0.5) / 4.0 - 0.5, 0.0, table.shape[1] - 1.0)
    low = np.minimum(place.astype(int), table.shape[1] - 2)
    part = (place - low)[:, None, None]
    return np.concatenate([(1.0 - part) * rows[low] + part * rows[low + 1], rows[-1:]])

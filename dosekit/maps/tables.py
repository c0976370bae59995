"""What the fold takes from a depth library: rows of water-equivalent depth, columns of range steps.

The library says, for each range step, what a broad beam leaves in water at each depth. Here it becomes

``narrow``  energy and stops of the core, whose width follows each ray's own Fermi-Eyges moments;
``broad``   everything wider (the core's single-scattering tail, scattered beam particles, products of reactions,
            decays, contaminants). Its variance is the core's in water plus the library's extra variance; each quantity
            is divided between a few fixed widths so that the variance is kept at every depth (a sum of Gaussians);
``power``   the core's scattering power in water, rad2 per mm, by differential Moliere (Gottschalk 2010).

Depth rows are bin centres; a row of zeros follows the last. ``broad`` varies slowly and is read from the nearest of
four rows to a bin.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

if TYPE_CHECKING:
    from dosekit.beams.beam import Beam
    from dosekit.depths.library import DepthLibrary

__all__ = ["BROAD_TARGETS", "TAIL_SIGMAS", "TARGETS", "StepTables", "moliere_tail_share", "step_tables"]

TARGETS: tuple[str, ...] = ("primary", "stops", "in_flight", "decay", "contaminant_muon", "contaminant_electron")
"""What the fold makes in voxels; star components follow from the stops."""

BROAD_TARGETS: dict[str, str] = {
    "scattered": "primary",
    "scattered_stops": "stops",
    "scattered_near": "primary",
    "scattered_near_stops": "stops",
    "scattered_wide": "primary",
    "scattered_wide_stops": "stops",
    "in_flight_charged": "in_flight",
    "in_flight_neutral": "in_flight",
    "decay": "decay",
    "contaminant_muon": "contaminant_muon",
    "contaminant_electron": "contaminant_electron",
}
"""Quantities of the library that are spread by fixed widths, and where they go. A library that divides its scattered
particles into near and wide ones has their sum as well, which is then left out."""

TAIL_SIGMAS = 2.4
"""Width of the single-scattering tail over that of the core; see `moliere_tail_share`."""

_TAIL_TIMES_B = 0.94
_THOMAS_FERMI_MEV = 4.216e-3  # hbar c over 0.885 Bohr radii
_HALF_NORMAL = np.square(ndtri(0.5 + (np.arange(8) + 0.5) / 16.0))  # squares of a normal number, equal shares
_HALF_NORMAL /= _HALF_NORMAL.mean()
_MIXED = ("scattered", "scattered_stops", "scattered_wide", "scattered_wide_stops", "in_flight_charged")
_MOST_MIXED_WIDTHS = 5
_MOST_WIDTHS = 3
_WIDTH_RATIO = 2.0
_SIGNIFICANT = 1e-4
_NEGLIGIBLE = 1e-10
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
        Scatter variance of those that reach a depth over that of the mean particle, shape (rows, K).
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
    in_water *= survivors
    narrow = np.stack([_clean(library.quantities[key]) for key in ("core", "core_stops")], axis=2)
    share = moliere_tail_share(beam)
    tail = TAIL_SIGMAS**2 * in_water
    parts = [(share * narrow[..., n], tail, 0.0 * tail, name, False) for n, name in enumerate(("primary", "stops"))]
    narrow *= 1.0 - share
    divided = {"scattered", "scattered_stops"} if "scattered_wide" in library.quantities else set()
    for key, target in BROAD_TARGETS.items():
        if key in divided:
            continue
        widths = library.extra_sigma_mm
        extra = np.asarray(widths.get(key, widths.get(key.removesuffix("_stops"), 0.0 * energy)), dtype=np.float64)
        parts.append(
            (
                _clean(library.quantities.get(key, 0.0 * energy)),
                in_water,
                np.nan_to_num(extra) ** 2,
                target,
                key in _MIXED,
            )
        )
    values, sigmas, targets = [], [], []
    for quantity, variance, extra, target, mixed in parts:
        if not quantity.any():
            continue
        for sigma, part in _divide(quantity, np.maximum(variance, 0.0), extra, mixed=mixed):
            values.append(quantity * part)
            sigmas.append(sigma)
            targets.append(TARGETS.index(target))
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


def moliere_tail_share(beam: Beam) -> float:
    """Return the share of the core that lies in the tail of single Coulomb scatterings.

    Moliere's distribution of the angle in space is a Gaussian and corrections in powers of 1/B (H.A. Bethe, Phys. Rev.
    89 (1953) 1256). Beside the Gaussian that the differential Moliere power describes, a second one of `TAIL_SIGMAS`
    times its width holds 0.94 / B of the particles: the least-squares description of f0 + f1/B + f2/B2 from 0.3 to 6
    sigma, for B of 10 to 14 (own calculation). A displacement has the same tail as the angle because both go as the
    square of the distance. Electrons of the atoms, which make up part of the scattering, cannot turn a heavy particle
    by a large angle: the tail is reduced by the nuclei's part of it. B is taken in water at half the range.

    Parameters
    ----------
    beam : Beam
        The beam.

    Returns
    -------
    float
        Share of the core.
    """
    from dosekit.basis.constants import FINE_STRUCTURE
    from dosekit.basis.materials import element, material
    from dosekit.basis.particles import momentum_mev_c
    from dosekit.beams.ranges import range_table
    from dosekit.beams.scattering import pv_mev

    table = range_table(beam.particle, "water")
    half_mm = 0.5 * float(table.range_mm(beam.kinetic_energy_mev))
    energy = float(table.energy_mev(half_mm))
    pv, momentum = float(pv_mev(beam.particle, energy)), float(momentum_mev_c(beam.particle, energy))
    total, nuclei, screened = 0.0, 0.0, 0.0
    for symbol, fraction in material("water").mass_fractions:
        z, a = element(symbol).atomic_number, element(symbol).atomic_weight
        weight = fraction * z * (z + 1.0) / a
        angle = (_THOMAS_FERMI_MEV * z ** (1.0 / 3.0) / momentum) ** 2  # Bethe eqs. 17 and 21
        total += weight
        nuclei += fraction * z * z / a
        screened += weight * np.log(angle * (1.13 + 3.76 * (FINE_STRUCTURE * z * momentum / pv) ** 2))
    characteristic = 0.157 * total * 0.1 * half_mm / pv**2  # chi_c squared, Bethe eq. 10, 1 g/cm3
    b = np.log(characteristic / 1.167) - screened / total
    big = max(b, 2.0)
    for _ in range(50):
        big = b + np.log(max(big, 1.5))
    return float(_TAIL_TIMES_B / max(big, 4.5) * nuclei / total)


def _divide(
    quantity: NDArray[np.float64], variance: NDArray[np.float64], extra: NDArray[np.float64], *, mixed: bool
) -> list[tuple[float, NDArray[np.float64]]]:
    """Divide a quantity between fixed widths: pairs of sigma and share, the shares adding to one everywhere.

    A particle that left the beam at a distance s under a slope is displaced by their product, and both are spread
    widely: many are still near and a few are far. When `mixed`, the extra sigma is therefore itself distributed, as the
    size of a normal number, which makes the radial integral fall as exp(-r / sigma); eight equal shares stand for it.
    """
    sizes = _HALF_NORMAL if mixed and extra.any() else np.ones(1)
    each = [np.asarray(variance + size * extra) for size in sizes]
    counts = quantity > _SIGNIFICANT * quantity.max()
    low, high = float(np.sqrt(each[0][counts].min())), float(np.sqrt(each[-1][counts].max()))
    low = max(low, 0.05 * high, 1e-3)
    most = _MOST_MIXED_WIDTHS if len(sizes) > 1 else _MOST_WIDTHS
    number = int(np.clip(np.ceil(np.log(max(high / low, 1.0)) / np.log(_WIDTH_RATIO) - 1e-9) + 1, 1, most))
    if number == 1:
        mean = np.average(variance + extra, weights=quantity)
        return [(float(np.sqrt(mean)), np.ones_like(variance))]
    rungs = np.linspace(np.sqrt(low), np.sqrt(high), number) ** 2
    squares = rungs**2
    shares = np.zeros((number, *variance.shape))
    for one in each:
        g = np.clip(np.searchsorted(squares, one, side="right") - 1, 0, number - 2)
        upper = np.clip((one - squares[g]) / (squares[g + 1] - squares[g]), 0.0, 1.0) / len(sizes)
        for n in range(number):
            shares[n] += np.where(g == n, 1.0 / len(sizes) - upper, 0.0) + np.where(g + 1 == n, upper, 0.0)
    return [(float(sigma), share) for sigma, share in zip(rungs, shares, strict=True)]


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

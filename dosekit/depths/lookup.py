"""What do particles of a given residual range do in one material? Energy, LET, chances, as running integrals.

Used by :mod:`dosekit.depths.core` for classes of residual range: means over a class are differences of integrals, so
that energy and numbers close exactly whatever the width of the class.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosekit.beams.decay import decay_per_mm
from dosekit.beams.ranges import RangeTable
from dosekit.beams.reactions import CHANNELS, ENERGY_GRID_MEV, reactions

__all__ = ["Bins", "Lookup", "middle_of"]


def middle_of(edges: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the middle between neighbours.

    Parameters
    ----------
    edges : ndarray, shape (n + 1,) or more
        Edges along the first axis.

    Returns
    -------
    ndarray, shape (n,) or more
        Middles.
    """
    return 0.5 * (edges[1:] + edges[:-1])


@dataclass(frozen=True)
class Bins:
    """What happens to classes in bins.

    Attributes
    ----------
    deposit, let_weighted, stops, events, event_energy : ndarray, shape (classes, bins)
        Energy given, MeV; the same times LET, MeV keV/um; particles brought to rest; events; their kinetic energy, MeV.
    shares : ndarray, shape (6, classes, bins)
        Shares of the channels of reaction, of decay and of struck hydrogen in the events.
    alive, flux : ndarray, shape (classes, bins + 1)
        Particles still moving, and their kinetic energy, MeV, at the edges of bins.
    survival_end : ndarray, shape (classes,)
        Survival behind the last bin.
    """

    deposit: NDArray[np.float64]
    let_weighted: NDArray[np.float64]
    stops: NDArray[np.float64]
    events: NDArray[np.float64]
    event_energy: NDArray[np.float64]
    shares: NDArray[np.float64]
    alive: NDArray[np.float64]
    flux: NDArray[np.float64]
    survival_end: NDArray[np.float64]


class Lookup:
    """Functions of residual range in one material, on an even grid.

    Parameters
    ----------
    species : str
        Beam particle.
    table : RangeTable
        Its ranges in the material.
    top_mm : float
        Longest residual range, mm.
    yields : str
        Yield set.
    nuclear, decays : bool
        Whether reactions and decay happen.
    """

    def __init__(
        self, species: str, table: RangeTable, top_mm: float, yields: str, *, nuclear: bool, decays: bool
    ) -> None:
        self.step = max(min(0.05, top_mm / 400.0), top_mm / 6000.0)
        self.grid = self.step * np.arange(int(top_mm / self.step) + 3)
        self.energy = table.energy_mev(self.grid)
        middle = middle_of(self.energy)
        mass = table.particle.mass_mev
        # integral of T over r; T ~ r^0.57 in the first cells is integrated on the spline's own points
        self.integral = np.concatenate([[0.0], np.cumsum(middle) * self.step])
        energy = np.maximum(self.energy, 0.02 * mass / 938.3)
        self.let = table.stopping_mev_mm(energy)
        rates = np.zeros((6, len(self.grid)))
        if nuclear:
            reaction = reactions(species, table.material, yields=yields)
            for index, channel in enumerate(CHANNELS):
                rates[index] = np.interp(energy, ENERGY_GRID_MEV, reaction.per_mm[channel])
            rates[5] = np.interp(energy, ENERGY_GRID_MEV, reaction.struck_hydrogen_per_mm)
        if decays:
            rates[4] = decay_per_mm(species, np.maximum(energy, 0.05))
        self.rates = rates
        total = np.sum(rates, axis=0)
        self.shares = rates / np.where(total > 0.0, total, 1.0)
        self.depth = np.concatenate([[0.0], np.cumsum(middle_of(total)) * self.step])
        # integral of LET over energy for the energy-weighted LET, d(int S dT)
        self.let_energy = np.concatenate([[0.0], np.cumsum(middle_of(self.let) * np.diff(self.energy))])
        self.let_integral = np.concatenate([[0.0], np.cumsum(middle_of(self.let_energy)) * self.step])

    def _at(self, values: NDArray[np.float64], r: NDArray[np.float64]) -> NDArray[np.float64]:
        """Interpolate linearly along the last axis of values on the even grid, constant outside."""
        place = np.clip(r / self.step, 0.0, len(self.grid) - 1.001)
        low = place.astype(np.int64)
        lower = values[..., low]
        return np.asarray(lower + (place - low) * (values[..., low + 1] - lower))

    def _integral_at(
        self, values: NDArray[np.float64], running: NDArray[np.float64], r: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Return the integral from 0 to r of a function that is linear between grid points."""
        place = np.clip(r / self.step, 0.0, len(self.grid) - 1.001)
        low = place.astype(np.int64)
        part = place - low
        lower = values[low]
        return np.asarray(running[low] + self.step * part * (lower + 0.5 * part * (values[low + 1] - lower)))

    def energies(self, ranges: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return energies at residual ranges; 0 where nothing is left.

        Parameters
        ----------
        ranges : ndarray
            Residual ranges, mm.

        Returns
        -------
        ndarray
            Kinetic energy, MeV.
        """
        return self._at(self.energy, np.maximum(ranges, 0.0))

    def bins(self, edges: NDArray[np.float64], survival: NDArray[np.float64]) -> Bins:
        """Return what classes do between depths.

        Parameters
        ----------
        edges : ndarray, shape (classes + 1, depths)
            Edges of the classes in residual range, mm; the density between two is even.
        survival : ndarray, shape (classes,)
            Share of each class that is left at the first depth.

        Returns
        -------
        Bins
            Per particle of the class.
        """
        upper, lower = edges[1:], edges[:-1]
        width = np.maximum(upper - lower, 1e-9)
        thin = width < 1e-6
        above = np.maximum(edges, 0.0)
        centre = np.maximum(0.5 * (upper + lower), 0.0)
        integral = self._integral_at(self.energy, self.integral, above)
        mean = np.where(thin, self._at(self.energy, centre), (integral[1:] - integral[:-1]) / width)
        fraction = np.where(thin, (upper > 0.0).astype(float), np.clip(upper / width, 0.0, 1.0))
        depth = self._at(self.depth, np.maximum(0.5 * (np.maximum(lower, 0.0) + np.maximum(upper, 0.0)), 0.0))
        alive = survival[:, None] * np.exp(np.minimum(depth - depth[:, :1], 0.0))
        flux = alive * mean
        w_mid = 0.5 * (alive[:, 1:] + alive[:, :-1])
        t_mid = 0.5 * (mean[:, 1:] + mean[:, :-1])
        f_mid = 0.5 * (fraction[:, 1:] + fraction[:, :-1])
        gone = np.maximum(alive[:, :-1] - alive[:, 1:], 0.0)
        deposit = w_mid * (mean[:, :-1] - mean[:, 1:])
        stops = w_mid * (fraction[:, :-1] - fraction[:, 1:])
        events = gone * f_mid
        energy = np.where(f_mid > 1e-12, t_mid / np.where(f_mid > 1e-12, f_mid, 1.0), 0.0)
        r_mid = 0.5 * (centre[:, 1:] + centre[:, :-1])
        shares = self._at(self.shares, r_mid)
        # LET averaged over the energy given in the bin: mean over the class of int S dT
        spread = self._integral_at(self.let_energy, self.let_integral, above)
        level = np.where(thin, self._at(self.let_energy, centre), (spread[1:] - spread[:-1]) / width)
        let_weighted = w_mid * (level[:, :-1] - level[:, 1:])
        return Bins(deposit, let_weighted, stops, events, energy, shares, alive * fraction, flux, alive[:, -1])

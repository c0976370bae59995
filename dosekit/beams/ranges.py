"""How far does a charged particle go, and how much energy is left on the way?

Range in the continuous-slowing-down approximation, R(T) = integral of dT / S, on a logarithmic energy grid with
Simpson's rule, inverted by a monotone cubic. A table is made once per particle and material and kept.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from dosekit.basis.materials import Material, material
from dosekit.basis.particles import Particle, particle
from dosekit.beams.stopping import PROTON_MASS_MEV, stopping_power_mev_mm
from dosekit.errors import InputError

__all__ = ["RangeTable", "csda_range_mm", "range_table", "residual_energy_mev"]

_POINTS = 481
_LOWEST_PER_PROTON_MASS_MEV = 0.002
_HIGHEST_PER_PROTON_MASS_MEV = 8000.0


@dataclass(frozen=True)
class RangeTable:
    """Range against energy for one particle in one material.

    Attributes
    ----------
    particle : Particle
        The particle.
    material : Material
        The material.
    grid_energy_mev : ndarray
        Logarithmic energy grid, MeV.
    grid_range_mm : ndarray
        Range at the grid energies, mm.
    grid_stopping_mev_mm : ndarray
        Stopping power at the grid energies, MeV/mm.
    """

    particle: Particle
    material: Material
    grid_energy_mev: NDArray[np.float64] = field(repr=False)
    grid_range_mm: NDArray[np.float64] = field(repr=False)
    grid_stopping_mev_mm: NDArray[np.float64] = field(repr=False)
    _to_range: CubicSpline = field(repr=False)
    _to_energy: CubicSpline = field(repr=False)
    _to_stopping: CubicSpline = field(repr=False)

    def range_mm(self, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
        """Return the range.

        Parameters
        ----------
        kinetic_energy_mev : array_like
            Kinetic energy, MeV, >= 0.

        Returns
        -------
        ndarray
            Range, mm; 0 at 0.
        """
        energy = np.asarray(kinetic_energy_mev, dtype=float)
        lowest = self.grid_energy_mev[0]
        logs = np.log(np.clip(energy, lowest, self.grid_energy_mev[-1]))
        inside = np.exp(self._to_range(logs))
        return np.asarray(np.where(energy < lowest, self.grid_range_mm[0] * np.maximum(energy, 0.0) / lowest, inside))

    def energy_mev(self, range_mm: ArrayLike) -> NDArray[np.float64]:
        """Return the energy that has a range.

        Parameters
        ----------
        range_mm : array_like
            Residual range, mm; 0 or less gives 0.

        Returns
        -------
        ndarray
            Kinetic energy, MeV.
        """
        length = np.asarray(range_mm, dtype=float)
        lowest = self.grid_range_mm[0]
        logs = np.log(np.clip(length, lowest, self.grid_range_mm[-1]))
        inside = np.exp(self._to_energy(logs))
        return np.asarray(np.where(length < lowest, self.grid_energy_mev[0] * np.maximum(length, 0.0) / lowest, inside))

    def stopping_mev_mm(self, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
        """Return the stopping power from the table, clamped at its ends.

        Parameters
        ----------
        kinetic_energy_mev : array_like
            Kinetic energy, MeV.

        Returns
        -------
        ndarray
            Stopping power, MeV/mm.
        """
        energy = np.clip(np.asarray(kinetic_energy_mev, dtype=float), self.grid_energy_mev[0], self.grid_energy_mev[-1])
        return np.asarray(np.exp(self._to_stopping(np.log(energy))))


def range_table(projectile: str | Particle, medium: str | Material) -> RangeTable:
    """Return the range table of a particle in a material.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name.

    Returns
    -------
    RangeTable
        The table; made once, then kept.

    Examples
    --------
    >>> table = range_table("proton", "water")
    >>> round(float(table.range_mm(150.0)), 0)
    159.0
    """
    return _table(particle(projectile), material(medium))


def csda_range_mm(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the range in the continuous-slowing-down approximation.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, >= 0.

    Returns
    -------
    ndarray
        Range along the path, mm.
    """
    return range_table(projectile, medium).range_mm(kinetic_energy_mev)


def residual_energy_mev(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike, depth_mm: ArrayLike
) -> NDArray[np.float64]:
    """Return the energy left after a path.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : array_like
        Kinetic energy at the start, MeV.
    depth_mm : array_like
        Path, mm, >= 0.

    Returns
    -------
    ndarray
        Kinetic energy left, MeV; 0 behind the range.

    Raises
    ------
    InputError
        If the path is negative.
    """
    path = np.asarray(depth_mm, dtype=float)
    if np.any(path < 0.0):
        raise InputError("negative path length", allowed="0 mm or more")
    table = range_table(projectile, medium)
    return table.energy_mev(table.range_mm(kinetic_energy_mev) - path)


@lru_cache(maxsize=512)
def _table(moving: Particle, stuff: Material) -> RangeTable:
    """Make a table."""
    scale = moving.mass_mev / PROTON_MASS_MEV if moving.name not in ("e-", "e+") else 0.1
    low, high = _LOWEST_PER_PROTON_MASS_MEV * scale, _HIGHEST_PER_PROTON_MASS_MEV * scale
    logs = np.linspace(np.log(low), np.log(high), 2 * _POINTS - 1)
    energy = np.exp(logs)
    stopping = stopping_power_mev_mm(moving, stuff, energy)
    integrand = energy / stopping
    step = logs[2] - logs[0]
    pieces = step / 6.0 * (integrand[:-2:2] + 4.0 * integrand[1:-1:2] + integrand[2::2])
    # below the grid S goes as the speed, so that the range is 2 T / S
    ranges = 2.0 * energy[0] / stopping[0] + np.concatenate([[0.0], np.cumsum(pieces)])
    energy, stopping, logs = energy[::2], stopping[::2], logs[::2]
    for array in (energy, ranges, stopping):
        array.setflags(write=False)
    return RangeTable(
        moving,
        stuff,
        energy,
        ranges,
        stopping,
        CubicSpline(logs, np.log(ranges)),
        CubicSpline(np.log(ranges), logs),
        CubicSpline(logs, np.log(stopping)),
    )

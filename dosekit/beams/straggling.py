"""How much do ranges spread because collisions are random?

Bohr's variance with the relativistic correction (N. Bohr 1915; form of ICRU Report 49 and of the PDG review),

    d(sigma_E^2)/dx = K m_e c^2 z^2 (Z/A) rho gamma^2 (1 - beta^2/2) / (1 + 2 gamma m_e/M + (m_e/M)^2)

carried to the range: sigma_R^2 = integral of (d sigma_E^2/dx) / S^3 dT. Gaussian; the tail of single hard
collisions (Vavilov) is left out, which is right when the loss is many times W_max, i.e. after a few mm.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from dosekit.basis.constants import BETHE_CONSTANT_MEV_CM2_MOL, ELECTRON_MASS_MEV
from dosekit.basis.materials import Material, material
from dosekit.basis.particles import Particle, particle
from dosekit.beams.ranges import range_table
from dosekit.beams.stopping import effective_charge

__all__ = ["energy_variance_mev2_mm", "range_sigma_mm", "range_variance_mm2"]


def energy_variance_mev2_mm(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the growth of the energy variance per length.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, > 0.

    Returns
    -------
    ndarray
        d(sigma_E^2)/dx, MeV2/mm.
    """
    moving, stuff = particle(projectile), material(medium)
    gamma = 1.0 + np.asarray(kinetic_energy_mev, dtype=float) / moving.mass_mev
    beta2 = 1.0 - 1.0 / gamma**2
    ratio = ELECTRON_MASS_MEV / moving.mass_mev
    charge = effective_charge(moving, np.sqrt(beta2))
    front = 0.1 * stuff.density_g_cm3 * BETHE_CONSTANT_MEV_CM2_MOL * ELECTRON_MASS_MEV * stuff.z_over_a
    kinematic = gamma**2 * (1.0 - 0.5 * beta2) / (1.0 + 2.0 * gamma * ratio + ratio**2)
    return np.asarray(front * charge**2 * kinematic)


def range_variance_mm2(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the variance of the range from straggling alone.

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
        Variance, mm2.
    """
    spline, low, high = _variance_spline(particle(projectile), material(medium))
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    inside = np.exp(spline(np.log(np.clip(energy, low, high))))
    return np.asarray(np.where(energy > 0.0, inside, 0.0))


def range_sigma_mm(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the standard deviation of the range from straggling alone.

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
        Standard deviation, mm.

    Examples
    --------
    >>> round(float(range_sigma_mm("proton", "water", 150.0)) / 158.6, 3)
    0.011
    """
    return np.asarray(np.sqrt(range_variance_mm2(projectile, medium, kinetic_energy_mev)))


@lru_cache(maxsize=256)
def _variance_spline(moving: Particle, stuff: Material) -> tuple[CubicSpline, float, float]:
    """Integrate the variance over energy once."""
    table = range_table(moving, stuff)
    energy, stopping = table.grid_energy_mev, table.grid_stopping_mev_mm
    integrand = energy_variance_mev2_mm(moving, stuff, energy) / stopping**3 * energy
    logs = np.log(energy)
    pieces = 0.5 * (integrand[1:] + integrand[:-1]) * np.diff(logs)
    total = integrand[0] * 0.4 + np.concatenate([[0.0], np.cumsum(pieces)])
    return CubicSpline(logs, np.log(total)), float(energy[0]), float(energy[-1])

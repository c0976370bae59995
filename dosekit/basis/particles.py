"""Which particles are there, and how do momentum, energy and speed relate?

Masses, lives and charges after the Particle Data Group (S. Navas et al., Phys. Rev. D 110 (2024) 030001);
light ions after CODATA 2018 (nuclear masses, without electrons). The carbon nucleus is 12 u less six electrons.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.tables import read_table
from dosekit.errors import UnknownNameError

__all__ = ["Particle", "beta_gamma", "kinetic_energy_mev", "momentum_mev_c", "particle", "particle_names"]


@dataclass(frozen=True)
class Particle:
    """A particle as the rest of the package needs it.

    Attributes
    ----------
    name : str
        Name used throughout, e.g. ``"pi-"``.
    mass_mev : float
        Rest energy, MeV.
    charge : int
        Charge in units of the elementary charge.
    mean_life_ns : float or None
        Mean life, ns; None if stable here.
    pdg_id : int
        Number in the Monte Carlo numbering scheme of the PDG.
    baryon_number : int
        Baryon number.
    """

    name: str
    mass_mev: float
    charge: int
    mean_life_ns: float | None
    pdg_id: int
    baryon_number: int


@lru_cache(maxsize=1)
def _particles() -> dict[str, Particle]:
    """Read all particles once."""
    return {
        str(row["name"]): Particle(
            name=str(row["name"]),
            mass_mev=float(row["mass_mev"]),
            charge=int(row["charge"]),
            mean_life_ns=None if np.isnan(row["mean_life_ns"]) else float(row["mean_life_ns"]),
            pdg_id=int(row["pdg_id"]),
            baryon_number=int(row["baryon_number"]),
        )
        for row in read_table("particles").rows()
    }


def particle_names() -> tuple[str, ...]:
    """Return the names of all particles.

    Returns
    -------
    tuple of str
        Names in table order.
    """
    return tuple(_particles())


def particle(name: str | Particle) -> Particle:
    """Return a particle by name.

    Parameters
    ----------
    name : str or Particle
        Name; a particle is returned as it is.

    Returns
    -------
    Particle
        The particle.

    Raises
    ------
    UnknownNameError
        If there is no such particle.

    Examples
    --------
    >>> particle("pi-").mass_mev
    139.57039
    """
    if isinstance(name, Particle):
        return name
    known = _particles()
    if name not in known:
        raise UnknownNameError("particle", name, known)
    return known[name]


def kinetic_energy_mev(projectile: str | Particle, momentum_mev_c: ArrayLike) -> NDArray[np.float64]:
    """Return the kinetic energy for a momentum: T = sqrt(p^2 + m^2) - m.

    Parameters
    ----------
    projectile : str or Particle
        Particle or its name.
    momentum_mev_c : array_like
        Momentum, MeV/c, >= 0.

    Returns
    -------
    ndarray
        Kinetic energy, MeV, same shape.

    Examples
    --------
    >>> round(float(kinetic_energy_mev("pi-", 172.0)), 1)
    81.9
    """
    mass = particle(projectile).mass_mev
    momentum = np.asarray(momentum_mev_c, dtype=float)
    total = np.sqrt(momentum**2 + mass**2)
    return np.asarray(np.where(total + mass > 0, momentum**2 / np.maximum(total + mass, 1e-300), 0.0))


def momentum_mev_c(projectile: str | Particle, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return the momentum for a kinetic energy: p = sqrt(T (T + 2 m)).

    Parameters
    ----------
    projectile : str or Particle
        Particle or its name.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, >= 0.

    Returns
    -------
    ndarray
        Momentum, MeV/c, same shape.
    """
    mass = particle(projectile).mass_mev
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    return np.asarray(np.sqrt(energy * (energy + 2.0 * mass)))


def beta_gamma(
    projectile: str | Particle, kinetic_energy_mev: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return speed over that of light and the Lorentz factor.

    Parameters
    ----------
    projectile : str or Particle
        Particle with mass, or its name.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, >= 0.

    Returns
    -------
    beta, gamma : ndarray
        v/c and the Lorentz factor, same shape.
    """
    mass = particle(projectile).mass_mev
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    gamma = 1.0 + energy / mass
    beta = np.sqrt(energy * (energy + 2.0 * mass)) / (energy + mass)
    return np.asarray(beta), np.asarray(gamma)

"""What becomes of a meson that decays, in flight or at rest?

pi -> mu nu: in the rest frame the muon has T* = (m_pi - m_mu)^2 / (2 m_pi) = 4.12 MeV and any direction. In flight
its energy is spread evenly between gamma (E* - beta p*) and gamma (E* + beta p*), and its energy fixes its angle.
mu -> e nu nu: spectrum of L. Michel (1950), mean total electron energy 0.35 m_mu = 36.98 MeV in vacuum. Probability per
path: 1 / (beta gamma c tau). Masses and lives: Particle Data Group. The radiative and electronic pion decays (1.2e-4)
are left out; so is muon polarisation.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import ELECTRON_MASS_MEV, SPEED_OF_LIGHT_MM_NS
from dosekit.basis.particles import Particle, beta_gamma, particle

__all__ = [
    "MICHEL_MEAN_ENERGY_MEV",
    "MUON_ENERGY_AT_REST_MEV",
    "decay_per_mm",
    "decay_probability",
    "michel_spectrum",
    "muon_from_pion",
]

_PION = 139.57039
_MUON = 105.6583755
MUON_ENERGY_AT_REST_MEV = (_PION - _MUON) ** 2 / (2.0 * _PION)
"""Kinetic energy of the muon from a pion at rest, MeV."""

MICHEL_MEAN_ENERGY_MEV = 0.35 * (_MUON**2 + ELECTRON_MASS_MEV**2) / _MUON - ELECTRON_MASS_MEV
"""Mean kinetic energy of the electron from a free muon at rest, MeV."""


def decay_per_mm(projectile: str | Particle, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return the probability of decay per path.

    Parameters
    ----------
    projectile : str or Particle
        Particle; 0 for stable ones.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, > 0.

    Returns
    -------
    ndarray
        1 / (beta gamma c tau), 1/mm.

    Examples
    --------
    >>> round(1e-3 / float(decay_per_mm("pi-", 80.38)), 2)
    9.51
    """
    moving = particle(projectile)
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    if moving.mean_life_ns is None:
        return np.zeros_like(energy)
    beta, gamma = beta_gamma(moving, np.maximum(energy, 1e-6))
    return np.asarray(1.0 / (beta * gamma * SPEED_OF_LIGHT_MM_NS * moving.mean_life_ns))


def decay_probability(projectile: str | Particle, kinetic_energy_mev: float, *, path_mm: float) -> float:
    """Return the probability of decay along a path in vacuum.

    Parameters
    ----------
    projectile : str or Particle
        Particle.
    kinetic_energy_mev : float
        Kinetic energy, MeV.
    path_mm : float
        Path, mm.

    Returns
    -------
    float
        Probability.
    """
    return -math.expm1(-path_mm * float(decay_per_mm(projectile, kinetic_energy_mev)))


def muon_from_pion(
    kinetic_energy_mev: ArrayLike, *, samples: int = 8
) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Return energies and cosines of muons from pions that decay in flight, and the mean neutrino energy.

    Parameters
    ----------
    kinetic_energy_mev : array_like, shape (n,)
        Pion kinetic energy, MeV.
    samples : int
        Equally likely muons per pion energy.

    Returns
    -------
    muon_energy_mev, cosine : ndarray, shape (n, samples)
        Kinetic energy and cosine of the angle to the pion.
    mean_neutrino_share : float
        Mean neutrino energy over total pion energy (the same for all speeds).
    """
    pion = np.atleast_1d(np.asarray(kinetic_energy_mev, dtype=float))[:, None] + _PION
    gamma = pion / _PION
    beta = np.sqrt(np.maximum(1.0 - 1.0 / gamma**2, 0.0))
    star_energy = MUON_ENERGY_AT_REST_MEV + _MUON
    star_momentum = math.sqrt(star_energy**2 - _MUON**2)
    star_cosine = -1.0 + (2.0 * np.arange(samples) + 1.0) / samples
    energy = gamma * (star_energy + beta * star_momentum * star_cosine)
    along = gamma * (star_momentum * star_cosine + beta * star_energy)
    momentum = np.sqrt(np.maximum(energy**2 - _MUON**2, 1e-12))
    return energy - _MUON, np.clip(along / momentum, -1.0, 1.0), star_momentum / _PION


def michel_spectrum(points: int = 40) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return electron kinetic energies and probabilities for a free muon at rest.

    Parameters
    ----------
    points : int
        Number of bins, even in total energy.

    Returns
    -------
    energy_mev, probability : ndarray, shape (points,)
        Bin centres and probabilities (sum 1); x^2 (3 - 2 x) with x = E / E_max.
    """
    edges = np.linspace(0.0, 1.0, points + 1)
    cumulative = 2.0 * edges**3 - edges**4
    centres = 0.5 * (edges[1:] + edges[:-1])
    top = (_MUON**2 + ELECTRON_MASS_MEV**2) / (2.0 * _MUON)
    return np.maximum(centres * top - ELECTRON_MASS_MEV, 1e-3), np.diff(cumulative)

"""How far does a beam spread sideways in matter?

Fermi-Eyges moments with the scattering power of B. Gottschalk, Med. Phys. 37 (2010) 352 ("differential Moliere",
eqs. 46 to 48), which knows how much the beam has scattered already through the ratio of pv to its start value::

    T_dM = f_dM(pv, p1 v1) (E_s / pv)^2 / X_S,   E_s = 15.0 MeV
    f_dM = 0.5244 + 0.1975 lg(1 - (pv/p1v1)^2) + 0.2320 lg(pv) - 0.0098 lg(pv) lg(1 - (pv/p1v1)^2)

    1/(rho X_S) = alpha N r_e^2 (Z^2/A) [2 ln(33219 (A Z)^(-1/3)) - 1]

(X_S the scattering length, Bragg additivity; 46.9 cm in water). Moments of L. Eyges, Phys. Rev. 74 (1948) 1534:
A0 = integral T, A1 = integral T (z - z'), A2 = integral T (z - z')^2 dz'. Valid for singly charged particles above
about 1 MeV in matter thick enough to scatter many times; the core is Gaussian, single large-angle scattering is not
in it.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import AVOGADRO_PER_MOL, CLASSICAL_ELECTRON_RADIUS_CM, FINE_STRUCTURE
from dosekit.basis.materials import Material, element, material
from dosekit.basis.particles import Particle, particle
from dosekit.beams.ranges import range_table

__all__ = [
    "fermi_eyges_moments",
    "pv_mev",
    "scattering_length_g_cm2",
    "scattering_power_rad2_mm",
    "scattering_power_ratio",
]

E_S_MEV = 15.0
_SINGLE_SCATTERING_FLOOR = 1e-4


@lru_cache(maxsize=8192)
def scattering_length_g_cm2(medium: str | Material) -> float:
    """Return the scattering length X_S times density.

    Parameters
    ----------
    medium : str or Material
        Material or its name.

    Returns
    -------
    float
        Scattering length, g/cm2; Gottschalk (2010) eq. 20, Bragg additivity.

    Examples
    --------
    >>> round(scattering_length_g_cm2("water"), 1)
    46.9
    """
    inverse = 0.0
    for symbol, fraction in material(medium).mass_fractions:
        atom = element(symbol)
        z, a = atom.atomic_number, atom.atomic_weight
        inverse += fraction * z * z / a * (2.0 * math.log(33219.0 * (a * z) ** (-1.0 / 3.0)) - 1.0)
    return 1.0 / (FINE_STRUCTURE * AVOGADRO_PER_MOL * CLASSICAL_ELECTRON_RADIUS_CM**2 * inverse)


def pv_mev(projectile: str | Particle, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return momentum times speed, T (T + 2 m) / (T + m).

    Parameters
    ----------
    projectile : str or Particle
        Particle.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV.

    Returns
    -------
    ndarray
        pv, MeV.
    """
    mass = particle(projectile).mass_mev
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    return np.asarray(energy * (energy + 2.0 * mass) / (energy + mass))


def scattering_power_rad2_mm(
    projectile: str | Particle,
    medium: str | Material,
    kinetic_energy_mev: ArrayLike,
    *,
    start_energy_mev: float,
) -> NDArray[np.float64]:
    """Return the scattering power of one projected angle.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name; its density counts.
    kinetic_energy_mev : array_like
        Kinetic energy now, MeV, > 0.
    start_energy_mev : float
        Kinetic energy with which the beam entered matter, MeV.

    Returns
    -------
    ndarray
        T_dM, rad2/mm.
    """
    moving, stuff = particle(projectile), material(medium)
    now = np.maximum(pv_mev(moving, kinetic_energy_mev), 1e-6)
    start = float(pv_mev(moving, start_energy_mev))
    lost = np.log10(np.maximum(1.0 - np.minimum(now / start, 1.0) ** 2, _SINGLE_SCATTERING_FLOOR))
    log_pv = np.log10(now)
    f_dm = 0.5244 + 0.1975 * lost + 0.2320 * log_pv - 0.0098 * log_pv * lost
    length_mm = 10.0 * scattering_length_g_cm2(stuff) / stuff.density_g_cm3
    charge = abs(moving.charge)
    return np.asarray(np.maximum(f_dm, 0.0) * (charge * E_S_MEV / now) ** 2 / length_mm)


def scattering_power_ratio(medium: str | Material) -> float:
    """Return the scattering power per water-equivalent thickness, relative to water.

    Parameters
    ----------
    medium : str or Material
        Material or its name; its density cancels.

    Returns
    -------
    float
        (X_S of water / X_S) / relative stopping power.

    Examples
    --------
    >>> scattering_power_ratio("water")
    1.0
    """
    return _ratio(material(medium))


@lru_cache(maxsize=8192)
def _ratio(stuff: Material) -> float:
    """Return the ratio; kept because voxel volumes ask for many materials."""
    from dosekit.beams.stopping import relative_stopping_power

    per_length = stuff.density_g_cm3 * scattering_length_g_cm2(material("water")) / scattering_length_g_cm2(stuff)
    return per_length / relative_stopping_power(stuff)


def fermi_eyges_moments(
    projectile: str | Particle,
    medium: str | Material,
    kinetic_energy_mev: float,
    *,
    depth_mm: ArrayLike,
    sigma_mm: float = 0.0,
    divergence_sigma_rad: float = 0.0,
    correlation: float = 0.0,
    steps: int = 400,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return the Fermi-Eyges moments of one transverse axis against depth in a uniform medium.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : float
        Kinetic energy at depth 0, MeV.
    depth_mm : array_like
        Depths, mm; behind the range the moments of the range are given.
    sigma_mm, divergence_sigma_rad, correlation : float
        Standard deviations of position and angle and their correlation at depth 0.
    steps : int
        Integration steps to the range.

    Returns
    -------
    angle_variance, covariance, position_variance : ndarray
        A0 rad2, A1 mm rad, A2 mm2 at the depths.
    """
    moving, stuff = particle(projectile), material(medium)
    table = range_table(moving, stuff)
    total = float(table.range_mm(kinetic_energy_mev))
    # finer towards the end, where the scattering power rises steeply
    nodes = total * (1.0 - (1.0 - np.linspace(0.0, 1.0, steps + 1)) ** 2)
    middle = 0.5 * (nodes[1:] + nodes[:-1])
    energy = np.maximum(table.energy_mev(total - middle), 1e-4)
    power = scattering_power_rad2_mm(moving, stuff, energy, start_energy_mev=kinetic_energy_mev) * np.diff(nodes)
    m0 = np.concatenate([[0.0], np.cumsum(power)])
    m1 = np.concatenate([[0.0], np.cumsum(power * middle)])
    m2 = np.concatenate([[0.0], np.cumsum(power * middle**2)])
    depth = np.clip(np.asarray(depth_mm, dtype=float), 0.0, total)
    t0, t1, t2 = (np.interp(depth, nodes, moment) for moment in (m0, m1, m2))
    mixed = correlation * sigma_mm * divergence_sigma_rad
    a0 = divergence_sigma_rad**2 + t0
    a1 = mixed + divergence_sigma_rad**2 * depth + depth * t0 - t1
    a2 = sigma_mm**2 + 2.0 * mixed * depth + divergence_sigma_rad**2 * depth**2 + depth**2 * t0 - 2.0 * depth * t1 + t2
    return np.asarray(a0), np.asarray(a1), np.asarray(np.maximum(a2, 0.0))

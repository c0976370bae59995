"""Where do the neutrons of a star leave their energy?

A small history simulation in a uniform medium (`dosekit.capture.kernels.neutron_histories`): free flight with the total
cross-section, then

* n-p scattering: sigma after J. L. Gammel (in Fast Neutron Physics II, 1963) below 30 MeV, after Charagi and Gupta,
  Phys. Rev. C 41 (1990) 1610 above 60 MeV, blended between (both memory); angles 1 + b cos^2, b = 2 (E / 90 MeV)^2
  in the centre of mass (Gammel); the recoil proton slows down along a straight line;
* elastic scattering on nuclei: momentum transfer from exp(-R^2 q^2 / 4), R = 1.3 A^(1/3) + 0.5 fm, which tends to
  isotropy at low energy; the recoil stays where it is;
* non-elastic collisions: a direct part (a leading neutron, proton or deuteron with energy uniform up to what is
  available, often with a partner), then evaporation of n, p, d, alpha against their separation energies; below
  about 12 MeV inelastic scattering to a low level or (n, alpha). Protons and deuterons run straight, alphas and
  recoils stay, photons fly one mean free path.

Cross-sections of C, O and Ca are tabled (``neutron_cross_sections``, memory); others are interpolated in A.
Neutrons stop at 1 keV. Photons of thermal capture (2.2 MeV from hydrogen) are not followed: they would add up to
2.2 MeV for each neutron that does not escape.

The result for one source energy is a profile: energy in shells about the source, per neutron. Profiles in water are
tabled for a set of energies (``neutron_profiles_water``, made by `dosekit.capture.tabling`); other media are
simulated when asked for.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import AVOGADRO_PER_MOL
from dosekit.basis.materials import Material, element
from dosekit.basis.tables import read_table
from dosekit.beams.ranges import range_table

__all__ = ["EDGES_MM", "NODE_ENERGIES_MEV", "np_cross_section_barn", "nucleus_cross_sections_barn", "simulate"]

EDGES_MM: NDArray[np.float64] = np.concatenate(
    [np.arange(0.0, 20.0, 1.0), np.arange(20.0, 60.0, 5.0), np.arange(60.0, 200.0, 10.0), np.arange(200.0, 400.0, 25.0),
     np.arange(400.0, 1001.0, 100.0), [1250.0, 1500.0, 2000.0, 3000.0]]
)  # fmt: skip
"""Shell radii of a profile in g/cm2 times 10, that is mm at unit density."""

NODE_ENERGIES_MEV: NDArray[np.float64] = np.array(
    [0.2, 0.5, 1, 1.5, 2, 3, 4, 5, 6.5, 8, 10, 12, 14, 17, 20, 25, 30, 35, 40, 45, 50, 55, 60, 70, 80, 90, 100, 118.0]
)
"""Source energies of the profiles."""

_GRID_MEV = np.geomspace(1e-3, 200.0, 241)
_CUTOFF_MEV = 1e-3
_PHOTON_CM2_G = 0.022
"""Energy absorption of MeV photons, cm2/g (Hubbell and Seltzer, NISTIR 5632, 1995; memory)."""

# separation energies of n, p, d, alpha, first strong level, (n, alpha) Q and share: masses of AME 2020, memory
_NUCLEI = {
    "C": ((18.7, 16.0, 25.2, 7.4), 4.44, -5.7, 0.15),
    "N": ((10.6, 7.6, 10.3, 11.6), 3.9, -0.16, 0.30),
    "O": ((15.7, 12.1, 20.7, 7.2), 6.13, -2.2, 0.25),
    "Ca": ((15.6, 8.3, 21.0, 7.0), 3.7, 1.7, 0.30),
}
_HEAVY = ((10.0, 8.5, 18.0, 8.5), 2.0, 0.0, 0.2)

_TUNING = np.array([20.0, 0.58, 0.32, 1.0, 0.55, 0.2, -2.0])
"""Decay of the compound part (MeV), lead shares of n and p, exponent of the lead's energy, chance of a partner, and
two slots."""


def np_cross_section_barn(energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return the n-p total cross-section.

    Parameters
    ----------
    energy_mev : array_like
        Neutron kinetic energy in the laboratory, MeV.

    Returns
    -------
    ndarray
        Barn.

    Notes
    -----
    Gammel below 30 MeV: 3 pi / (1.206 E + (-1.86 + 0.09415 E + 0.0001306 E^2)^2) + pi / (1.206 E + (0.4223 + 0.13
    E)^2). Charagi and Gupta above 60 MeV: -70.67 - 18.18 / beta + 25.26 / beta^2 + 113.85 beta, millibarn.

    Examples
    --------
    >>> [round(float(np_cross_section_barn(e)), 2) for e in (1.0, 14.0, 90.0)]
    [4.26, 0.69, 0.08]
    """
    energy = np.asarray(energy_mev, dtype=float)
    low = 3.0 * math.pi / (1.206 * energy + (-1.86 + 0.09415 * energy + 0.0001306 * energy**2) ** 2)
    low = low + math.pi / (1.206 * energy + (0.4223 + 0.13 * energy) ** 2)
    gamma = 1.0 + np.maximum(energy, 10.0) / 939.565
    speed = np.sqrt(1.0 - 1.0 / gamma**2)
    high = 1e-3 * (-70.67 - 18.18 / speed + 25.26 / speed**2 + 113.85 * speed)
    part = np.clip((energy - 30.0) / 30.0, 0.0, 1.0)
    return np.asarray((1.0 - part) * low + part * high)


def nucleus_cross_sections_barn(symbol: str, energy_mev: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return total and non-elastic cross-sections of an element.

    Parameters
    ----------
    symbol : str
        Element.
    energy_mev : array_like
        Neutron kinetic energy, MeV.

    Returns
    -------
    tuple of ndarray
        Total and non-elastic, barn. Between tabled elements the power of A is interpolated; beyond Ca both grow as
        A^(2/3).
    """
    energy = np.asarray(energy_mev, dtype=float)
    if symbol == "H":
        return np_cross_section_barn(energy), np.zeros_like(energy)
    table = read_table("neutron_cross_sections", folder="capture")

    def tabled(name: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Interpolate the rows of one element in log energy."""
        rows = table.where(element=name)
        logs = np.log(np.asarray(rows["energy_mev"], dtype=float))
        at = np.log(np.clip(energy, 1e-6, None))
        return tuple(np.interp(at, logs, np.asarray(rows[c], dtype=float)) for c in ("total", "nonelastic"))

    if symbol in ("C", "O", "Ca"):
        return tabled(symbol)
    mass = element(symbol).atomic_weight
    if mass > element("Ca").atomic_weight:
        grown = (mass / element("Ca").atomic_weight) ** (2.0 / 3.0)
        total, other = tabled("Ca")
        return total * grown, other * grown
    first, second = ("C", "O") if mass < element("O").atomic_weight else ("O", "Ca")
    low, high = (element(name).atomic_weight for name in (first, second))
    part = math.log(mass / low) / math.log(high / low)
    (total_a, other_a), (total_b, other_b) = tabled(first), tabled(second)
    return (1.0 - part) * total_a + part * total_b, (1.0 - part) * other_a + part * other_b


def simulate(
    medium: Material, energies_mev: NDArray[np.float64], *, histories: int, seed: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Simulate profiles in a medium taken at unit density.

    Parameters
    ----------
    medium : Material
        Composition; the density is set to 1 g/cm3.
    energies_mev : ndarray, shape (m,)
        Source energies, MeV.
    histories : int
        Neutrons per energy.
    seed : int
        Seed; the energies use seed, seed + 1, ...

    Returns
    -------
    tuple of ndarray
        Energy per neutron in shells `EDGES_MM`, shape (m, n), with what lies beyond in the last element, and energy
        lost to binding, shape (m,).
    """
    from dosekit.capture.kernels import neutron_histories

    unit = medium.replace(density_g_cm3=1.0)
    symbols = [s for s, _ in unit.mass_fractions]
    masses = np.array([element(s).atomic_weight for s in symbols])
    elastic, other = np.empty((len(symbols), len(_GRID_MEV))), np.empty((len(symbols), len(_GRID_MEV)))
    for k, s in enumerate(symbols):
        per_mm = unit.fraction(s) * AVOGADRO_PER_MOL / masses[k] * 1e-24 * 0.1
        total, nonelastic = nucleus_cross_sections_barn(s, _GRID_MEV)
        elastic[k], other[k] = (total - nonelastic) * per_mm, nonelastic * per_mm
    nuclei = [_NUCLEI.get(s, _HEAVY) for s in symbols]
    protons, deuterons = range_table("proton", unit), range_table("deuteron", unit)
    shells = np.empty((len(energies_mev), len(EDGES_MM)))
    lost = np.empty(len(energies_mev))
    for i, energy in enumerate(energies_mev):
        shells[i], sums = neutron_histories(
            float(energy), histories, seed + i, EDGES_MM, math.log(_GRID_MEV[0]), math.log(_GRID_MEV[1] / _GRID_MEV[0]),
            masses, elastic, other, np.array([n[0] for n in nuclei]), np.array([n[1] for n in nuclei]),
            np.array([n[2] for n in nuclei]), np.array([n[3] for n in nuclei]), 1.3 * masses ** (1.0 / 3.0) + 0.5,
            _TUNING, protons.range_mm(_GRID_MEV), deuterons.range_mm(_GRID_MEV), 0.1 * _PHOTON_CM2_G, _CUTOFF_MEV,
        )  # fmt: skip
        lost[i] = sums[0]
    return shells, lost

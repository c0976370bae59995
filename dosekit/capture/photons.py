"""Where do the photons of a star leave their energy?

Histories in a uniform medium (`dosekit.capture.kernels.photon_histories`): free flight, then

* incoherent scattering on free electrons, Klein and Nishina, Z. Phys. 52 (1929) 853;
* photoelectric absorption, per atom 2.47e-28 cm2 Z^4.6 (0.1 MeV / E)^3.2 normalised to water (0.00276 cm2/g at 0.1
  MeV, Hubbell and Seltzer, NISTIR 5632 (1995), memory);
* pair and triplet production, water values of the same source (memory), per atom as Z (Z + 1).

Electrons run straight with 0.2 MeV/mm at unit density (0.85 of the track, for scattering) and turn E^2 / (E + 220
MeV) into one forward photon (radiation yield after ICRU Report 37, memory). Coherent scattering moves no energy and
is left out.

A star's photons: X rays of the atomic cascade as K-alpha quanta (3/4 of the Bohr energy; what is left over stays
local), de-excitation quanta spread over 1 to 7 MeV, radiative capture at 110 to 130 MeV, pi0 as two quanta of about
69 MeV.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import (
    AVOGADRO_PER_MOL,
    CLASSICAL_ELECTRON_RADIUS_CM,
    ELECTRON_MASS_MEV,
)
from dosekit.basis.materials import Material, element, material

__all__ = ["NODE_PHOTON_MEV", "klein_nishina_cm2", "mass_attenuation_cm2_g", "photon_lines", "simulate"]

NODE_PHOTON_MEV: NDArray[np.float64] = np.array(
    [0.02, 0.03, 0.05, 0.08, 0.12, 0.18, 0.3, 0.5, 0.8, 1.2, 2, 3, 4, 6, 8, 15, 30, 50, 70, 90, 110, 130.0]
)
"""Source energies of the profiles, MeV."""

_GRID_MEV = np.geomspace(5e-3, 200.0, 241)
_CUTOFF_MEV = 0.01
_PHOTO_WATER_CM2_G = 0.00276
_PAIR_MEV = np.array([1.022, 1.5, 2, 3, 4, 5, 6, 8, 10, 15, 20, 30, 50, 70, 100, 150, 200])
_PAIR_WATER_CM2_G = np.array(
    [0, 9.8e-5, 3.92e-4, 1.15e-3, 1.91e-3, 2.6e-3, 3.25e-3, 4.35e-3, 5.25e-3, 7.1e-3, 8.4e-3, 1.02e-2, 1.24e-2,
    1.36e-2, 1.48e-2, 1.59e-2, 1.65e-2]
)  # fmt: skip
_RADIATION_MEV = 220.0
_ELECTRON_MEV_PER_MM = 0.2 / 0.85


def klein_nishina_cm2(energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return the Klein-Nishina cross-section of one electron.

    Parameters
    ----------
    energy_mev : array_like
        Photon energy, MeV.

    Returns
    -------
    ndarray
        Cross-section, cm2.

    Examples
    --------
    >>> round(float(klein_nishina_cm2(1.0)) * 1e25, 3)
    2.112
    """
    k = np.asarray(energy_mev, dtype=float) / ELECTRON_MASS_MEV
    logs = np.log1p(2.0 * k)
    bracket = (1.0 + k) / k**2 * (2.0 * (1.0 + k) / (1.0 + 2.0 * k) - logs / k)
    bracket = bracket + logs / (2.0 * k) - (1.0 + 3.0 * k) / (1.0 + 2.0 * k) ** 2
    return np.asarray(2.0 * math.pi * CLASSICAL_ELECTRON_RADIUS_CM**2 * bracket)


def mass_attenuation_cm2_g(medium: Material | str, energy_mev: ArrayLike) -> dict[str, NDArray[np.float64]]:
    """Return mass attenuation coefficients by process.

    Parameters
    ----------
    medium : Material or str
        Composition.
    energy_mev : array_like
        Photon energy, MeV, 0.02 to 150.

    Returns
    -------
    dict of str to ndarray
        ``compton``, ``photo`` and ``pair``, cm2/g (coherent scattering left out).

    Examples
    --------
    >>> parts = mass_attenuation_cm2_g("water", 2.0)
    >>> round(float(sum(parts.values())), 4)
    0.0493
    """
    medium = material(medium)
    energy = np.asarray(energy_mev, dtype=float)
    compton = klein_nishina_cm2(energy) * medium.electrons_per_gram
    photo_scale = _per_gram(medium, 4.6) / _per_gram(material("water"), 4.6)
    photo = _PHOTO_WATER_CM2_G * (0.1 / energy) ** 3.2 * photo_scale
    pair_water = np.interp(np.log(energy), np.log(_PAIR_MEV), _PAIR_WATER_CM2_G, left=0.0)
    pair = pair_water * _pairs_per_gram(medium) / _pairs_per_gram(material("water"))
    return {"compton": compton, "photo": photo, "pair": pair}


def _per_gram(medium: Material, power: float) -> float:
    """Return the sum of atoms per gram times a power of Z."""
    return math.fsum(medium.atoms_per_gram(s) * element(s).atomic_number ** power for s, _ in medium.mass_fractions)


def _pairs_per_gram(medium: Material) -> float:
    """Return the sum of atoms per gram times Z (Z + 1)."""
    return _per_gram(medium, 2.0) + medium.electrons_per_gram


def simulate(medium: Material, energies_mev: NDArray[np.float64], *, histories: int, seed: int) -> NDArray[np.float64]:
    """Simulate profiles in a medium taken at unit density.

    Parameters
    ----------
    medium : Material
        Composition; the density is set to 1 g/cm3.
    energies_mev : ndarray, shape (m,)
        Source energies, MeV.
    histories : int
        Photons per energy.
    seed : int
        Seed; the energies use seed, seed + 1, ...

    Returns
    -------
    ndarray, shape (m, n)
        Energy per photon in shells (`dosekit.capture.neutrons.EDGES_MM`), what lies beyond in the last element.
    """
    from dosekit.capture.kernels import photon_histories
    from dosekit.capture.neutrons import EDGES_MM

    parts = {name: 0.1 * value for name, value in mass_attenuation_cm2_g(medium, _GRID_MEV).items()}
    return np.array(
        [
            photon_histories(
                float(energy), histories, seed + i, EDGES_MM, math.log(_GRID_MEV[0]), math.log(_GRID_MEV[1] /
                _GRID_MEV[0]), parts["compton"], parts["photo"], parts["pair"], _ELECTRON_MEV_PER_MM *
                medium.electrons_per_gram / (0.5551 * AVOGADRO_PER_MOL), _RADIATION_MEV, _CUTOFF_MEV,
            )
            for i, energy in enumerate(energies_mev)
        ]
    )  # fmt: skip


def photon_lines(parts_mev: dict[str, float], atomic_number: int) -> tuple[list[tuple[float, float]], float]:
    """Return the photons of a star as lines.

    Parameters
    ----------
    parts_mev : dict of str to float
        Energy per stop by part (photon_atomic, photon_deexcitation, photon_radiative, photon_pi0), MeV.
    atomic_number : int
        Of the capturing element.

    Returns
    -------
    tuple
        Lines as (photon energy MeV, energy per stop MeV), and energy that stays local, MeV per stop.
    """
    lines: list[tuple[float, float]] = []
    atomic = parts_mev.get("photon_atomic", 0.0)
    lines.append((max(0.75 * 3.7e-3 * atomic_number**2, 0.02), 0.75 * atomic))
    nuclear = parts_mev.get("photon_deexcitation", 0.0)
    lines += [(energy, 0.25 * nuclear) for energy in (1.5, 3.0, 4.5, 6.5)]
    lines += [(energy, 0.5 * parts_mev.get("photon_radiative", 0.0)) for energy in (105.0, 120.0)]
    lines.append((69.0, parts_mev.get("photon_pi0", 0.0)))
    return [line for line in lines if line[1] > 0.0], 0.25 * atomic

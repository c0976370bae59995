"""How much energy does a charged particle lose per unit of path in a material?

Mass collision stopping power after Bethe with its corrections (notation of U. Fano, Annu. Rev. Nucl. Sci. 13
(1963) 1, and ICRU Report 49 (1993) eq. 2.1 ff.)::

    S = K z^2 (Z/A) / beta^2 * [ L0 + z L1 + z^2 L2 ]
    L0 = 1/2 ln(2 m c^2 beta^2 gamma^2 W_max / I^2) - beta^2 - C/Z - delta/2

with the parts

- W_max, largest energy given to a free electron, projectile mass included;
- C/Z = <v_e^2>/v^2, the leading shell correction of J. Lindhard & A. Winther, Mat. Fys. Medd. Dan. Vid.
  Selsk. 34 no. 4 (1964), the mean square electron speed from Hartree-Fock total energies by the virial theorem
  (data/atomic_electrons.csv), summed over the atoms;
- delta, the density effect in the form of R.M. Sternheimer, with tabulated parameters where there are some and
  the general ones of R.M. Sternheimer & R.F. Peierls, Phys. Rev. B 3 (1971) 3681 elsewhere;
- L1 = (3 pi / 2) alpha (I / m c^2) ln(2 m v^2 / I) / beta^3, the Barkas term of a harmonic oscillator including
  close collisions (J. Lindhard, Nucl. Instrum. Meth. 132 (1976) 1); it carries the sign of the charge, so that
  negative mesons lose slightly less than positive ones;
- L2, the Bloch term in the expansion of ICRU Report 49 eq. 2.6.

Below 5 MeV per proton mass (1/2 to 2/3 of the speed where the shell correction is a tenth of L0) the sum is
joined, value and slope smooth between 3 and 5 MeV, to the proton fit of Andersen & Ziegler (1977) at equal speed,
scaled to meet it. Ions of charge 2 and more carry the effective charge of W.H. Barkas (1963),
z (1 - exp(-125 beta z^(-2/3))), relative to that of a proton.

Electrons and positrons: :mod:`dosekit.beams.electrons`. Valid from 10 keV to 2 GeV per proton mass. Not in it:
nuclear (elastic) stopping, which matters to recoils below 0.1 MeV per u only; chemical binding beyond I.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import (
    BETHE_CONSTANT_MEV_CM2_MOL,
    ELECTRON_MASS_MEV,
    FINE_STRUCTURE,
)
from dosekit.basis.materials import Material, element, material
from dosekit.basis.particles import Particle, particle
from dosekit.basis.tables import read_table
from dosekit.errors import InputError

__all__ = [
    "density_effect",
    "effective_charge",
    "mass_stopping_power",
    "relative_stopping_power",
    "stopping_power_mev_mm",
]

PROTON_MASS_MEV = 938.27208816
JOIN_LOW_MEV = 3.0
JOIN_HIGH_MEV = 5.0
HARTREE_EV = 27.211386
PROTON_MASS_U = 1.00727647


def mass_stopping_power(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the mass stopping power for electronic collisions.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle. For electrons and positrons radiative losses are included.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV, > 0.

    Returns
    -------
    ndarray
        Mass stopping power, MeV cm2/g, same shape.

    Raises
    ------
    InputError
        If the particle is neutral or an energy is not positive.

    Examples
    --------
    >>> round(float(mass_stopping_power("proton", "water", 100.0)), 2)
    7.25
    """
    moving = particle(projectile)
    stuff = material(medium)
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    if moving.charge == 0:
        raise InputError(f"stopping power of the neutral particle {moving.name!r}", allowed="charged particles")
    if not np.all(energy > 0.0) or not np.all(np.isfinite(energy)):
        raise InputError("kinetic energy that is not positive or not finite", allowed="more than 0 MeV")
    if moving.name in ("e-", "e+"):
        from dosekit.beams.electrons import electron_stopping_powers

        collision, radiative = electron_stopping_powers(stuff, energy, positron=moving.name == "e+")
        return np.asarray(collision + radiative)
    per_proton_mass = energy * (PROTON_MASS_MEV / moving.mass_mev)
    high = _bethe(moving, stuff, np.maximum(energy, _at_proton_speed(JOIN_LOW_MEV, moving)))
    join = np.array([_at_proton_speed(JOIN_HIGH_MEV, moving)])
    factor = float(_bethe(moving, stuff, join)[0] / _low_energy(moving, stuff, np.array([JOIN_HIGH_MEV]))[0])
    low = factor * _low_energy(moving, stuff, np.minimum(per_proton_mass, JOIN_HIGH_MEV))
    blend = np.clip(np.log(per_proton_mass / JOIN_LOW_MEV) / math.log(JOIN_HIGH_MEV / JOIN_LOW_MEV), 0.0, 1.0)
    blend = blend * blend * (3.0 - 2.0 * blend)
    return np.asarray((1.0 - blend) * low + blend * high)


def stopping_power_mev_mm(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike
) -> NDArray[np.float64]:
    """Return the stopping power per length, density included.

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
        Stopping power, MeV/mm, same shape.
    """
    stuff = material(medium)
    return mass_stopping_power(projectile, stuff, kinetic_energy_mev) * (0.1 * stuff.density_g_cm3)


def relative_stopping_power(
    medium: str | Material, projectile: str | Particle = "pi-", *, kinetic_energy_mev: float = 60.0
) -> float:
    """Return the stopping power per length relative to water.

    Parameters
    ----------
    medium : str or Material
        Material or its name; its density counts.
    projectile : str or Particle
        Charged particle.
    kinetic_energy_mev : float
        Kinetic energy, MeV.

    Returns
    -------
    float
        Stopping power per length over that of water.

    Examples
    --------
    >>> relative_stopping_power("water")
    1.0
    """
    stuff = material(medium)
    return _relative(stuff, particle(projectile), float(kinetic_energy_mev))


@lru_cache(maxsize=8192)
def _relative(stuff: Material, moving: Particle, energy: float) -> float:
    """Return the ratio to water; kept because voxel volumes ask for many materials."""
    water = material("water")
    return float(stopping_power_mev_mm(moving, stuff, energy) / stopping_power_mev_mm(moving, water, energy))


def effective_charge(projectile: str | Particle, beta: ArrayLike) -> NDArray[np.float64]:
    """Return the charge an ion carries on average, relative to a proton of equal speed.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle.
    beta : array_like
        Speed over that of light.

    Returns
    -------
    ndarray
        Signed charge; the bare one for unit charges. W.H. Barkas, Nuclear Research Emulsions I (1963).
    """
    charge = particle(projectile).charge
    speed = np.asarray(beta, dtype=float)
    if abs(charge) <= 1:
        return np.full(speed.shape, float(charge))
    bare = 1.0 - np.exp(-125.0 * speed * abs(charge) ** (-2.0 / 3.0))
    return np.asarray(charge * bare / (1.0 - np.exp(-125.0 * speed)))


def density_effect(medium: str | Material, beta_gamma: ArrayLike) -> NDArray[np.float64]:
    """Return the density-effect correction delta.

    Parameters
    ----------
    medium : str or Material
        Material or its name.
    beta_gamma : array_like
        Product of speed and Lorentz factor.

    Returns
    -------
    ndarray
        delta (dimensionless), after Sternheimer & Peierls (1971) eq. 4 and Sternheimer et al. (1984).
    """
    c_bar, a, m, x0, x1 = _density_parameters(material(medium))
    x = np.log10(np.maximum(np.asarray(beta_gamma, dtype=float), 1e-12))
    middle = 2.0 * math.log(10.0) * x - c_bar + a * np.maximum(x1 - x, 0.0) ** m
    return np.asarray(np.where(x < x0, 0.0, np.maximum(middle, 0.0)))


@lru_cache(maxsize=4096)
def _density_parameters(stuff: Material) -> tuple[float, float, float, float, float]:
    """Return C, a, m, X0, X1 for a material."""
    plasma_ev = 28.816 * math.sqrt(stuff.density_g_cm3 * stuff.z_over_a)
    c_bar = 1.0 + 2.0 * math.log(stuff.mean_excitation_ev / plasma_ev)
    for row in read_table("density_effect", "beams").rows():
        if row["material"] == stuff.name and abs(stuff.density_g_cm3 / material(stuff.name).density_g_cm3 - 1) < 0.2:
            return c_bar, float(row["a"]), float(row["m"]), float(row["x0"]), float(row["x1"])
    m = 3.0
    if stuff.density_g_cm3 < 0.02:
        gas = (
            (10.0, 1.6, 4.0),
            (10.5, 1.7, 4.0),
            (11.0, 1.8, 4.0),
            (11.5, 1.9, 4.0),
            (12.25, 2.0, 4.0),
            (13.804, 2.0, 5.0),
        )
        x0, x1 = next(((lo, hi) for top, lo, hi in gas if c_bar < top), (0.326 * c_bar - 2.5, 5.0))
    elif stuff.mean_excitation_ev < 100.0:
        x0, x1 = (0.2 if c_bar < 3.681 else 0.326 * c_bar - 1.0), 2.0
    else:
        x0, x1 = (0.2 if c_bar < 5.215 else 0.326 * c_bar - 1.5), 3.0
    x1 = max(x1, x0 + 1.0)
    a = max(c_bar - 2.0 * math.log(10.0) * x0, 0.0) / (x1 - x0) ** m
    return c_bar, a, m, x0, x1


@lru_cache(maxsize=4096)
def _electron_kinetic_ev(stuff: Material) -> float:
    """Return the mean kinetic energy of an electron in a material, eV."""
    table = read_table("atomic_electrons", "beams")
    energy = dict(zip(table["symbol"], table["total_energy_hartree"], strict=True))
    total = math.fsum(w / element(s).atomic_weight * float(energy[s]) for s, w in stuff.mass_fractions)
    return HARTREE_EV * total / stuff.z_over_a


def _at_proton_speed(energy_mev: float, moving: Particle) -> float:
    """Return the kinetic energy with the speed of a proton of the given energy."""
    return energy_mev * moving.mass_mev / PROTON_MASS_MEV


def _bethe(moving: Particle, stuff: Material, energy: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the Bethe sum with corrections, MeV cm2/g."""
    me = ELECTRON_MASS_MEV
    gamma = 1.0 + energy / moving.mass_mev
    beta2 = 1.0 - 1.0 / gamma**2
    beta = np.sqrt(beta2)
    bg2 = beta2 * gamma**2
    ratio = me / moving.mass_mev
    w_max = 2.0 * me * bg2 / (1.0 + 2.0 * gamma * ratio + ratio**2)
    excitation = stuff.mean_excitation_ev * 1e-6
    shell = _electron_kinetic_ev(stuff) * 1e-6 / (0.5 * me * beta2)
    l0 = (
        0.5 * np.log(2.0 * me * bg2 * w_max / excitation**2) - beta2 - shell - 0.5 * density_effect(stuff, np.sqrt(bg2))
    )
    charge = effective_charge(moving, beta)
    barkas = 1.5 * math.pi * FINE_STRUCTURE * (excitation / me) / beta**3
    l1 = barkas * np.log(np.maximum(2.0 * me * bg2 / excitation, math.e))
    y2 = (charge * FINE_STRUCTURE / beta) ** 2
    bloch = -y2 * (1.202 - y2 * (1.042 - 0.855 * y2 + 0.343 * y2**2))
    l1 = np.clip(charge * l1, -0.1 * l0, 0.1 * l0)
    front = BETHE_CONSTANT_MEV_CM2_MOL * charge**2 * stuff.z_over_a / beta2
    return np.asarray(front * np.maximum(l0 + l1 + bloch, 0.05 * l0))


def _low_energy(moving: Particle, stuff: Material, energy_per_proton_mass: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the proton fit of Andersen & Ziegler (1977) at equal speed, Bragg additivity, MeV cm2/g."""
    table = read_table("low_energy_stopping", "beams")
    rows = {str(row["symbol"]): row for row in table.rows()}
    kev = np.maximum(energy_per_proton_mass, 1e-9) * 1e3 / PROTON_MASS_U
    fit = np.maximum(kev, 10.0)
    total = np.zeros_like(kev)
    for symbol, _ in stuff.mass_fractions:
        row = rows[symbol]
        slow = float(row["a2"]) * fit**0.45
        fast = float(row["a3"]) / fit * np.log(1.0 + float(row["a4"]) / fit + float(row["a5"]) * fit)
        total += slow * fast / (slow + fast) * (1e-21 * stuff.atoms_per_gram(symbol))
    total = total * np.sqrt(np.minimum(kev / 10.0, 1.0))
    gamma = 1.0 + energy_per_proton_mass / PROTON_MASS_MEV
    beta = np.sqrt(np.maximum(1.0 - 1.0 / gamma**2, 1e-18))
    return np.asarray(total * effective_charge(moving, beta) ** 2)

"""What does a capture star emit, and does its energy close?

Two yield sets, by name:

``evaluated`` (default)
    Energies per stop of ``star_energy_balance`` (charged, neutron, photon), split by ``star_charged_species``
    (multiplicity and mean energy), neutrons by ``neutron_spectrum_fits``. C, N, O and Ca have rows; F takes that of
    O, heavier elements that of Ca (with the neutron spectrum of Al). One standard deviation for each energy comes
    along.
``cascade``
    ``star_totals`` and ``star_spectra`` as they are, for comparison with results of the same origin. Elements without
    a row take the nearest by atomic number.

In both sets the binding energy is what closes the balance to the pion's rest energy, 139.57 MeV; it must come out
positive and, in the evaluated set, within 0.1 MeV of the tabled one. Charged energies in a row are brought to the
row's total.

Hydrogen captures to pi0 n or gamma n in the Panofsky ratio 1.546 (Spuller et al., Phys. Lett. B 67 (1977) 479);
energies follow from the masses of the PDG for capture at rest.

Photons of a nucleus have up to four parts: atomic cascade (X rays, Z**2 times 3.7 keV in all, the Bohr energy of
the 1s pion), de-excitation, radiative capture and pi0. Radiative capture per stop: O 2.27 % (Strassner et al.,
Phys. Rev. C 20 (1979) 248), C 1.9, N 2.1, Ca 1.8 % (memory), mean photon energy 110 MeV (memory).

``star_scale`` multiplies the charged energies (p, d, t, 3He, 4He, recoils) of every element alike; neutrons and
photons stay as they are, because they are better known, and the binding energy takes what is left.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.constants import PION_REST_ENERGY_MEV
from dosekit.basis.materials import Material, element, material
from dosekit.basis.particles import particle
from dosekit.basis.tables import Table, read_table
from dosekit.capture.sharing import YIELD_SETS, capture_shares
from dosekit.capture.spectra import (
    Spectrum,
    cascade_spectrum,
    fitted_neutron_spectrum,
    line_spectrum,
    stretched,
    thinned,
)
from dosekit.errors import InputError, TableError, UnknownNameError

__all__ = ["CHARGED_SPECIES", "HEAVY_SPECIES", "LIGHT_SPECIES", "PANOFSKY_RATIO", "Star", "star", "star_energy_mev"]

LIGHT_SPECIES = ("proton", "deuteron", "triton")
HEAVY_SPECIES = ("helium3", "alpha", "heavy")
CHARGED_SPECIES = LIGHT_SPECIES + HEAVY_SPECIES

PANOFSKY_RATIO = 1.546
"""pi0 n to gamma n on hydrogen, Spuller et al. 1977, +-0.009 (read second-hand)."""

_ATOMIC_CASCADE_MEV = 3.7e-3
_RADIATIVE_SHARE = {"C": 0.019, "N": 0.021, "O": 0.0227, "Ca": 0.018}
_RADIATIVE_ENERGY_MEV = 110.0
_CLOSURE_MEV = 0.1


@dataclass(frozen=True)
class Star:
    """What leaves a nucleus that has captured a negative pion, per stop.

    Attributes
    ----------
    element : str
        Capturing element.
    yields : str
        Yield set.
    row : str
        Element whose row in the tables is used.
    spectra : dict of str to Spectrum
        Spectra by species: proton, deuteron, triton, helium3, alpha, heavy, neutron.
    energy_mev : dict of str to float
        Kinetic energy per stop by species, MeV, and of the photon parts: photon_atomic, photon_deexcitation,
        photon_radiative, photon_pi0.
    binding_mev : float
        What closes the balance, MeV.
    sigma_mev : dict of str to float
        One standard deviation of charged, neutron, binding and photon energy, MeV (evaluated; the cascade set has none
        of its own and carries the same).
    species_uncertainty : float
        Relative uncertainty of each charged species.
    """

    element: str
    yields: str
    row: str
    spectra: dict[str, Spectrum]
    energy_mev: dict[str, float]
    binding_mev: float
    sigma_mev: dict[str, float]
    species_uncertainty: float

    def component_energy_mev(self, star_scale: float = 1.0) -> dict[str, float]:
        """Return the energy per stop by component.

        Parameters
        ----------
        star_scale : float
            Factor on the charged energy.

        Returns
        -------
        dict of str to float
            star_light, star_heavy, star_neutron, star_photon, binding, MeV per stop; they sum to 139.57.

        Raises
        ------
        InputError
            If the scale leaves no binding energy, or is negative.
        """
        light = math.fsum(self.energy_mev[s] for s in LIGHT_SPECIES) * star_scale
        heavy = math.fsum(self.energy_mev[s] for s in HEAVY_SPECIES) * star_scale
        neutron = self.energy_mev["neutron"]
        photon = math.fsum(value for name, value in self.energy_mev.items() if name.startswith("photon"))
        binding = PION_REST_ENERGY_MEV - light - heavy - neutron - photon
        if not star_scale >= 0.0 or binding < 0.0:
            raise InputError(
                f"star_scale {star_scale!r} gives {light + heavy:.1f} MeV of charged energy to {self.element}",
                allowed="0 up to the factor that leaves the binding energy positive, about 2",
            )
        return {
            "star_light": light,
            "star_heavy": heavy,
            "star_neutron": neutron,
            "star_photon": photon,
            "binding": binding,
        }


def star(symbol: str, yields: str = "evaluated") -> Star:
    """Return what an element's capture star emits.

    Parameters
    ----------
    symbol : str
        Capturing element.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    Star
        Spectra and energies per stop; the sum with binding is 139.57 MeV.

    Raises
    ------
    UnknownNameError
        If element or yield set is unknown.
    TableError
        If the energies of the tables do not close.

    Examples
    --------
    >>> oxygen = star("O")
    >>> round(sum(oxygen.component_energy_mev().values()), 2)
    139.57
    >>> round(star("O", "cascade").energy_mev["proton"], 1)
    18.3
    """
    if yields not in YIELD_SETS:
        raise UnknownNameError("yield set", yields, YIELD_SETS)
    return _star(element(symbol).symbol, yields)


@lru_cache(maxsize=128)
def _star(symbol: str, yields: str) -> Star:
    """Build one star and check its balance."""
    if symbol == "H":
        built = _hydrogen(yields)
    elif yields == "evaluated":
        built = _evaluated(symbol)
    else:
        built = _cascade(symbol)
    total = math.fsum(built.energy_mev.values()) + built.binding_mev
    if abs(total - PION_REST_ENERGY_MEV) > 1e-6 or built.binding_mev < 0.0:
        raise TableError(
            f"the {yields} star of {symbol} has {total:.2f} MeV, binding {built.binding_mev:.2f} MeV",
            allowed=f"{PION_REST_ENERGY_MEV} MeV with positive binding",
            remedy="check the star tables",
        )
    return built


def star_energy_mev(medium: Material | str, yields: str = "evaluated", *, star_scale: float = 1.0) -> dict[str, float]:
    """Return the energy per stopped pion by component in a material.

    Parameters
    ----------
    medium : Material or str
        Where they stop.
    yields : {"evaluated", "cascade"}
        Yield set.
    star_scale : float
        Factor on the charged energy.

    Returns
    -------
    dict of str to float
        star_light, star_heavy, star_neutron, star_photon, binding: MeV per stop, summing to 139.57.

    Examples
    --------
    >>> energies = star_energy_mev("water")
    >>> round(energies["star_light"] + energies["star_heavy"], 1)
    24.9
    """
    result: dict[str, float] = {}
    for symbol, share in capture_shares(material(medium), yields=yields).items():
        for name, value in star(symbol, yields).component_energy_mev(star_scale).items():
            result[name] = result.get(name, 0.0) + share * value
    return result


# ---------------------------------------------------------------- the sets


def _row(table: Table, symbol: str, fallback: str) -> str:
    """Return the element whose row stands for another."""
    known = set(table["element"])
    if symbol in known:
        return symbol
    return "O" if symbol == "F" and "O" in known else fallback


def _nearest(table: Table, symbol: str) -> str:
    """Return the element with a row that is nearest by atomic number (the lighter of two)."""
    z = element(symbol).atomic_number
    known = sorted(set(table["element"]), key=lambda s: element(s).atomic_number)
    return str(min(known, key=lambda s: (abs(element(s).atomic_number - z), element(s).atomic_number)))


def _sigmas(row: str) -> tuple[dict[str, float], float]:
    """Return standard deviations and the relative uncertainty of a species."""
    cells = next(iter(read_table("star_energy_balance").where(element=row).rows()))
    sigma = {name: float(cells[f"{name}_sigma"]) for name in ("charged", "neutron", "binding", "photon")}
    return sigma, 0.40 if row == "Ca" else 0.25


def _evaluated(symbol: str) -> Star:
    """Build a star of the evaluated set."""
    balance, shares = read_table("star_energy_balance"), read_table("star_charged_species")
    row = _row(balance, symbol, "Ca")
    cells = next(iter(balance.where(element=row).rows()))
    stated = {
        str(line["species"]): (float(line["multiplicity"]), float(line["mean_energy_mev"]))
        for line in shares.where(element=row).rows()
    }
    factor = float(cells["charged"]) / math.fsum(n * e for n, e in stated.values())
    if abs(factor - 1.0) > 0.03:
        raise TableError(f"charged species of {row} sum to {1.0 / factor:.3f} of the balance", allowed="1 within 3 %")
    spectra: dict[str, Spectrum] = {}
    for species, (number, mean) in stated.items():
        shape = cascade_spectrum(row, species)
        shape = thinned(shape, mean) if species == "proton" else stretched(shape, mean)
        spectra[species] = shape.scaled(factor * number / shape.multiplicity)
    neutrons = fitted_neutron_spectrum(_row(read_table("neutron_spectrum_fits"), row, "Al"))
    spectra["neutron"] = neutrons.scaled(float(cells["neutron"]) / neutrons.energy_mev)
    energy = {species: spectrum.energy_mev for species, spectrum in spectra.items()}
    atomic = min(_ATOMIC_CASCADE_MEV * element(symbol).atomic_number ** 2, 0.5 * float(cells["photon"]))
    radiative = min(_RADIATIVE_SHARE[row] * _RADIATIVE_ENERGY_MEV, float(cells["photon"]) - atomic)
    energy |= {
        "photon_atomic": atomic,
        "photon_deexcitation": float(cells["photon"]) - radiative - atomic,
        "photon_radiative": radiative,
        "photon_pi0": 0.0,
    }
    binding = PION_REST_ENERGY_MEV - math.fsum(energy.values())
    if abs(binding - float(cells["binding"])) > _CLOSURE_MEV:
        raise TableError(
            f"star_energy_balance of {row} closes with {binding:.2f} MeV of binding, not {cells['binding']}",
            allowed=f"within {_CLOSURE_MEV} MeV",
        )
    sigma, relative = _sigmas(row)
    return Star(symbol, "evaluated", row, spectra, energy, binding, sigma, relative)


def _cascade(symbol: str) -> Star:
    """Build a star of the cascade set."""
    totals = read_table("star_totals")
    row = _nearest(totals, symbol)
    stated = {
        str(line["species"]): (float(line["multiplicity"]), float(line["energy_mev"]))
        for line in totals.where(element=row).rows()
    }
    spectra = {}
    for species in (*CHARGED_SPECIES, "neutron"):
        shape = cascade_spectrum(row, species)
        spectra[species] = shape.scaled(stated[species][1] / shape.energy_mev)
    energy = {species: spectrum.energy_mev for species, spectrum in spectra.items()}
    photon = stated["photon"][1]
    atomic = min(_ATOMIC_CASCADE_MEV * element(row).atomic_number ** 2, 0.5 * photon)
    number, kinetic = stated.get("pi0", (0.0, 0.0))
    energy |= {
        "photon_atomic": atomic,
        "photon_deexcitation": photon - atomic,
        "photon_radiative": 0.0,
        "photon_pi0": number * particle("pi0").mass_mev + kinetic,
    }
    sigma, relative = _sigmas(_row(read_table("star_energy_balance"), row, "Ca"))
    binding = PION_REST_ENERGY_MEV - math.fsum(energy.values())
    return Star(symbol, "cascade", row, spectra, energy, binding, sigma, relative)


def _hydrogen(yields: str) -> Star:
    """Build the star of pionic hydrogen: pi0 n or gamma n, two bodies at rest."""
    neutron, proton, pi0 = (particle(name).mass_mev for name in ("neutron", "proton", "pi0"))
    total = PION_REST_ENERGY_MEV + proton
    pi0_share = PANOFSKY_RATIO / (1.0 + PANOFSKY_RATIO)
    slow = (total**2 + neutron**2 - pi0**2) / (2.0 * total) - neutron
    fast = (total**2 + neutron**2) / (2.0 * total) - neutron
    charge_exchange = line_spectrum(slow, pi0_share)
    radiative = line_spectrum(fast, 1.0 - pi0_share)
    edges = [*charge_exchange.edges_mev, *radiative.edges_mev]
    values = [charge_exchange.per_mev[0], 0.0, radiative.per_mev[0]]
    empty = Spectrum(_array(1.0, 2.0), _array(0.0))
    spectra = dict.fromkeys(CHARGED_SPECIES, empty) | {"neutron": Spectrum(_array(*edges), _array(*values))}
    energy = dict.fromkeys(CHARGED_SPECIES, 0.0) | {
        "neutron": pi0_share * slow + (1.0 - pi0_share) * fast,
        "photon_atomic": 0.0,
        "photon_deexcitation": 0.0,
        "photon_radiative": (1.0 - pi0_share) * (total - neutron - fast),
        "photon_pi0": pi0_share * (total - neutron - slow),
    }
    sigma = {"charged": 0.0, "neutron": 0.0, "binding": 0.0, "photon": 0.3}
    return Star("H", yields, "H", spectra, energy, neutron - proton, sigma, 0.0)


def _array(*values: float) -> NDArray[np.float64]:
    """Return floats as an array."""
    return np.array(values, dtype=float)

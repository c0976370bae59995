"""How often does a hadron meet a nucleus in flight, and what comes out?

Cross sections by element and channel, summed over a material to probabilities per mm:

- absorption (no pion comes out), charge_exchange (a neutral pion), inelastic (a charged pion), elastic.
- Negative pions, ``yields="cascade"``: the table inflight_products (cross sections after Barashenkov, channels from an
  intranuclear cascade). ``yields="evaluated"``: V.S. Barashenkov, JINR P2-90-158 (1990), with the channel split of
  reaction_partition (from the measurements of Navon, Ashery and others); hydrogen, and energies outside 20-140 MeV,
  scaled to the former.
- Positive pions: inflight_products; with ``"evaluated"`` the channel split of the measurements. Hydrogen: elastic only.
- Protons: non-elastic after J.R. Letaw, R. Silberberg & C.H. Tsao, Astrophys. J. Suppl. 51 (1983) 271; elastic on
nuclei
  0.45 of that (ICRU Report 63 (2000), 100 to 200 MeV on C and O, from memory, +-25 %); a struck hydrogen nucleus
  makes two protons out of one and is kept apart (``struck_hydrogen``).
- Elements without a row take the nearest row times (A/A')^(3/4), the rule of Barashenkov.

What comes out, per reaction: number, mean and rms energy, mean cosine by species, as functions of energy. Binding
energy closes the balance: T + m(pi, if it is gone) = kinetic energies + pi0 energies + binding.

Valid up to 150 MeV (pions) and 250 MeV (protons); constant cross sections beyond. Below 5 MeV pion cross sections
go as 1/v.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.materials import Material, element, material
from dosekit.basis.particles import Particle, particle
from dosekit.basis.tables import read_table
from dosekit.beams.elastic import elastic_laws, elastic_mean_cosine
from dosekit.beams.emissions import PRODUCT_SPECIES, inflight_table, nearest_row, products_of
from dosekit.errors import UnknownNameError

__all__ = [
    "CHANNELS",
    "ENERGY_GRID_MEV",
    "PRODUCT_SPECIES",
    "YIELDS",
    "Reactions",
    "elastic_mean_cosine",
    "element_cross_sections_mb",
    "macroscopic_cross_sections_mm",
    "reactions",
]

CHANNELS: tuple[str, ...] = ("absorption", "inelastic", "charge_exchange", "elastic")
"""Channels of a reaction in flight."""

YIELDS: tuple[str, ...] = ("evaluated", "cascade")
"""Yield sets."""

ENERGY_GRID_MEV: NDArray[np.float64] = np.array(
    [0.5, 1, 2, 3.5, 5, 7.5, 10, 15, 20, 25, 30, 35, 40, 45, 50, 55, 60, 65, 70, 75, 80, 90, 100, 110, 120, 135, 150,
     175, 200, 250.0]
)  # fmt: skip
"""Kinetic energies of the tables of a material, MeV."""

_PION_REST_MEV = 139.57039
_PI0_REST_MEV = 134.9768
_PROTON_ELASTIC_SHARE = 0.45


@dataclass(frozen=True)
class Reactions:
    """Reactions of one projectile in one material, on `ENERGY_GRID_MEV`.

    Attributes
    ----------
    projectile : str
        Name of the projectile.
    material : Material
        The material.
    yields : str
        Yield set.
    per_mm : dict of str to ndarray
        Probability per mm by channel, 1/mm.
    number : dict of str to ndarray
        Particles per reaction (all channels but elastic) by species.
    mean_energy_mev, rms_energy_mev : dict of str to ndarray
        Mean and root mean square kinetic energy of one particle, MeV.
    mean_cosine : dict of str to ndarray
        Mean cosine to the projectile, weighted by energy.
    binding_mev : ndarray
        Energy that goes into binding per reaction, MeV (negative where the tables make a little too much).
    elastic_cosine : ndarray
        Mean cosine of elastic scattering.
    elastic_laws : tuple of (ndarray, ndarray)
        Laws of elastic scattering exp(kappa cos): probability per mm and kappa of each.
    elastic_loss_mev : ndarray
        Mean energy given to the nucleus in elastic scattering, MeV.
    struck_hydrogen_per_mm : ndarray
        Protons only: probability per mm of elastic scattering on hydrogen, which makes two protons that share the
        energy.
    """

    projectile: str
    material: Material
    yields: str
    per_mm: dict[str, NDArray[np.float64]] = field(repr=False)
    number: dict[str, NDArray[np.float64]] = field(repr=False)
    mean_energy_mev: dict[str, NDArray[np.float64]] = field(repr=False)
    rms_energy_mev: dict[str, NDArray[np.float64]] = field(repr=False)
    mean_cosine: dict[str, NDArray[np.float64]] = field(repr=False)
    binding_mev: NDArray[np.float64] = field(repr=False)
    elastic_cosine: NDArray[np.float64] = field(repr=False)
    elastic_laws: tuple[tuple[NDArray[np.float64], NDArray[np.float64]], ...] = field(repr=False)
    elastic_loss_mev: NDArray[np.float64] = field(repr=False)
    struck_hydrogen_per_mm: NDArray[np.float64] = field(repr=False)

    def at(self, values: NDArray[np.float64], kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
        """Return a tabled quantity at other energies (linear in energy, constant outside).

        Parameters
        ----------
        values : ndarray
            Quantity on `ENERGY_GRID_MEV`.
        kinetic_energy_mev : array_like
            Kinetic energy, MeV.

        Returns
        -------
        ndarray
            Quantity at these energies.
        """
        return np.asarray(np.interp(np.asarray(kinetic_energy_mev, dtype=float), ENERGY_GRID_MEV, values))

    @property
    def reaction_share(self) -> NDArray[np.float64]:
        """Share of reactions in the sum of reactions and struck hydrogen; 1 but for protons."""
        both = self.reaction_per_mm + self.struck_hydrogen_per_mm
        return np.asarray(np.where(both > 0.0, self.reaction_per_mm / np.where(both > 0.0, both, 1.0), 1.0))

    @property
    def reaction_per_mm(self) -> NDArray[np.float64]:
        """Probability per mm of all channels but elastic, 1/mm."""
        return self.per_mm["absorption"] + self.per_mm["inelastic"] + self.per_mm["charge_exchange"]


def macroscopic_cross_sections_mm(
    projectile: str | Particle, medium: str | Material, kinetic_energy_mev: ArrayLike, *, yields: str = "evaluated"
) -> dict[str, NDArray[np.float64]]:
    """Return the probability of a reaction per mm, by channel.

    Parameters
    ----------
    projectile : str or Particle
        Pion or proton; zero for other particles.
    medium : str or Material
        Material; its density counts.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    dict of str to ndarray
        1/mm for absorption, inelastic, charge_exchange and elastic.

    Examples
    --------
    >>> sigma = macroscopic_cross_sections_mm("pi-", "water", 80.0, yields="cascade")
    >>> round(1.0 / float(sigma["absorption"] + sigma["inelastic"] + sigma["charge_exchange"]))
    673
    """
    table = reactions(projectile, medium, yields=yields)
    return {channel: table.at(values, kinetic_energy_mev) for channel, values in table.per_mm.items()}


def reactions(projectile: str | Particle, medium: str | Material, *, yields: str = "evaluated") -> Reactions:
    """Return everything about reactions of a projectile in a material.

    Parameters
    ----------
    projectile : str or Particle
        Projectile; leptons react with nothing here.
    medium : str or Material
        Material.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    Reactions
        Tables on `ENERGY_GRID_MEV`; made once, then kept.

    Raises
    ------
    UnknownNameError
        If the yield set is not known.
    """
    if yields not in YIELDS:
        raise UnknownNameError("yield set", yields, YIELDS)
    return _reactions(particle(projectile).name, material(medium), yields)


def element_cross_sections_mb(
    projectile: str, symbol: str, kinetic_energy_mev: ArrayLike, *, yields: str = "evaluated"
) -> dict[str, NDArray[np.float64]]:
    """Return cross sections of one element by channel.

    Parameters
    ----------
    projectile : str
        pi-, pi+ or proton; other particles have none.
    symbol : str
        Element.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    dict of str to ndarray
        Millibarn by channel.

    Examples
    --------
    >>> mb = element_cross_sections_mb("pi-", "C", 80.0, yields="evaluated")
    >>> round(float(mb["absorption"] + mb["inelastic"] + mb["charge_exchange"]))
    315
    """
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    zero = np.zeros_like(energy)
    if projectile == "proton":
        return _proton_cross_sections(symbol, energy)
    if projectile not in ("pi-", "pi+"):
        return dict.fromkeys(CHANNELS, zero)
    if projectile == "pi+" and symbol == "H":
        table = read_table("pion_hydrogen_plus", "beams")
        value = np.interp(energy, table["kinetic_energy_mev"], table["elastic_mb"])
        return {"absorption": zero, "inelastic": zero, "charge_exchange": zero, "elastic": np.asarray(value)}
    row = nearest_row(projectile, symbol)
    grow = (element(symbol).atomic_weight / element(row).atomic_weight) ** 0.75
    data = inflight_table(projectile, row)
    grid = data["kinetic_energy_mev"]
    slow = np.sqrt(np.where(energy < grid[0], grid[0] / np.maximum(energy, 0.05), 1.0)) if symbol != "H" else 1.0
    inelastic = grow * slow * np.interp(energy, grid, data["inelastic_mb"])
    elastic = grow * np.interp(energy, grid, data["elastic_mb"])
    shares = {
        "absorption": np.interp(energy, grid, data["no_pion"]),
        "charge_exchange": np.interp(energy, grid, data["neutral_pion"]),
        "inelastic": np.interp(energy, grid, data["charged_pion"]),
    }
    if yields == "evaluated" and symbol != "H":
        split = read_table("reaction_partition")
        for channel in shares:
            shares[channel] = np.interp(energy, split["kinetic_energy_mev"], split[channel])
        if projectile == "pi-":
            inelastic, elastic = _barashenkov(symbol, row, energy, inelastic / grow, elastic / grow)
    total = sum(shares.values())
    result = {channel: np.asarray(inelastic * shares[channel] / total) for channel in CHANNELS[:3]}
    result["elastic"] = np.asarray(elastic)
    return result


def _barashenkov(
    symbol: str, row: str, energy: NDArray[np.float64], inelastic: NDArray[np.float64], elastic: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return reaction and elastic cross sections of the evaluated table, scaled from the other one outside."""
    table = read_table("pion_minus_cross_sections")
    known = list(dict.fromkeys(table["element"]))
    mass = element(symbol).atomic_weight
    base = symbol if symbol in known else min(known, key=lambda name: abs(math.log(element(name).atomic_weight / mass)))
    grow = (mass / element(base).atomic_weight) ** 0.75
    rows = table.where(element=base)
    grid = rows["kinetic_energy_mev"]
    data = inflight_table("pi-", row)

    def along(values: NDArray[np.float64], other: str, shape: NDArray[np.float64]) -> NDArray[np.float64]:
        """Use the table inside its range; outside, the other table times the ratio at the end."""
        low = grow * values[0] / np.interp(grid[0], data["kinetic_energy_mev"], data[other])
        high = grow * values[-1] / np.interp(grid[-1], data["kinetic_energy_mev"], data[other])
        inside = grow * np.interp(energy, grid, values)
        return np.asarray(np.where(energy < grid[0], shape * low, np.where(energy > grid[-1], shape * high, inside)))

    return (
        along(rows["reaction_mb"], "inelastic_mb", inelastic),
        along(rows["total_mb"] - rows["reaction_mb"], "elastic_mb", elastic),
    )


def _proton_cross_sections(symbol: str, energy: NDArray[np.float64]) -> dict[str, NDArray[np.float64]]:
    """Return proton cross sections; inelastic holds everything that is not elastic."""
    zero = np.zeros_like(energy)
    if symbol == "H":
        table = read_table("proton_hydrogen", "beams")
        value = np.interp(energy, table["kinetic_energy_mev"], table["elastic_mb"])
        return {"absorption": zero, "inelastic": zero, "charge_exchange": zero, "elastic": np.asarray(value)}
    a = element(symbol).atomic_weight
    high = 45.0 * a**0.7 * (1.0 + 0.016 * math.sin(5.3 - 2.63 * math.log(a)))
    safe = np.maximum(energy, 10.0)
    low = 1.0 - 0.62 * np.exp(-safe / 200.0) * np.sin(10.9 * safe**-0.28)
    # falls to zero at the Coulomb barrier and the first levels
    threshold = np.clip((energy - 4.0) / 8.0, 0.0, 1.0)
    return {
        "absorption": zero,
        "inelastic": np.asarray(high * low * threshold),
        "charge_exchange": zero,
        "elastic": np.asarray(_PROTON_ELASTIC_SHARE * high * low * threshold),
    }


@lru_cache(maxsize=512)
def _reactions(projectile: str, stuff: Material, yields: str) -> Reactions:
    """Sum over the elements of a material."""
    grid = ENERGY_GRID_MEV
    per_mm = {channel: np.zeros(len(grid)) for channel in CHANNELS}
    number = {species: np.zeros(len(grid)) for species in PRODUCT_SPECIES}
    energy = {species: np.zeros(len(grid)) for species in PRODUCT_SPECIES}
    square = {species: np.zeros(len(grid)) for species in PRODUCT_SPECIES}
    forward = {species: np.zeros(len(grid)) for species in PRODUCT_SPECIES}
    elastic_cosine = np.zeros(len(grid))
    elastic_loss = np.zeros(len(grid))
    laws = []
    gone = np.zeros(len(grid))
    struck = np.zeros(len(grid))
    mass = particle(projectile).mass_mev
    for symbol, _ in stuff.mass_fractions:
        atoms_per_mm = stuff.atoms_per_gram(symbol) * stuff.density_g_cm3 * 0.1 * 1e-27
        sections = element_cross_sections_mb(projectile, symbol, grid, yields=yields)
        if projectile == "proton" and symbol == "H":
            struck += atoms_per_mm * sections["elastic"]
            continue
        for channel in CHANNELS:
            per_mm[channel] += atoms_per_mm * sections[channel]
        weight = atoms_per_mm * (sections["absorption"] + sections["inelastic"] + sections["charge_exchange"])
        if np.any(weight > 0.0):
            out = products_of(projectile, symbol, grid, sections, yields)
            for species, (count, mean, rms, cosine) in out.items():
                number[species] += weight * count
                energy[species] += weight * count * mean
                square[species] += weight * count * rms**2
                forward[species] += weight * count * mean * cosine
            if projectile in ("pi-", "pi+"):
                gone += atoms_per_mm * (sections["absorption"] + sections["charge_exchange"]) * _PION_REST_MEV
        bounce = atoms_per_mm * sections["elastic"]
        cosine = elastic_mean_cosine(symbol, projectile, grid, yields=yields)
        elastic_cosine += bounce * cosine
        for share, kappa in elastic_laws(symbol, projectile, grid, yields=yields):
            laws.append((bounce * share, kappa))
        target = element(symbol).atomic_weight * 931.494
        if symbol == "H":
            fraction = 2.0 * mass * target * (1.0 + grid / (2.0 * mass)) / ((mass + target) ** 2 + 2.0 * target * grid)
            elastic_loss += bounce * grid * np.minimum(fraction, 0.5)
        else:
            elastic_loss += bounce * grid * (grid + 2.0 * mass) / target * (1.0 - cosine)
    total = per_mm["absorption"] + per_mm["inelastic"] + per_mm["charge_exchange"]
    safe = np.where(total > 0.0, total, 1.0)
    result_energy, result_rms, result_cosine = {}, {}, {}
    spent = np.zeros(len(grid))
    for species in PRODUCT_SPECIES:
        count = np.where(number[species] > 0.0, number[species], 1.0)
        result_energy[species] = energy[species] / count
        result_rms[species] = np.sqrt(square[species] / count)
        result_cosine[species] = forward[species] / np.where(energy[species] > 0.0, energy[species], 1.0)
        spent += (energy[species] + (_PI0_REST_MEV * number[species] if species == "pi0" else 0.0)) / safe
        number[species] = number[species] / safe
    binding = np.where(total > 0.0, grid + gone / safe - spent, 0.0)
    bounces = np.where(per_mm["elastic"] > 0.0, per_mm["elastic"], 1.0)
    return Reactions(
        projectile, stuff, yields, per_mm, number, result_energy, result_rms, result_cosine, binding,
        elastic_cosine / bounces, tuple(laws), elastic_loss / bounces, struck,
    )  # fmt: skip

"""What comes out of a reaction in flight? Number, energy and direction of the products, by element.

Pions: the table inflight_products, the species weighted with the channel split in use (``"evaluated"`` keeps the
share of the available energy that goes to nucleons). Protons: energy shares after S.M. Seltzer, NISTIR 5221 (1993),
forward for nucleons.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import element
from dosekit.basis.tables import read_table

__all__ = ["PRODUCT_SPECIES", "Product", "inflight_table", "nearest_row", "products_of"]

PRODUCT_SPECIES: tuple[str, ...] = (
    "proton", "deuteron", "triton", "helium3", "alpha", "heavy", "neutron", "photon", "pi0", "pi-", "pi+",
)  # fmt: skip
"""Species that come out of reactions."""

_PION_REST_MEV = 139.57039
_PI0_REST_MEV = 134.9768

Product = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]
"""Number per reaction, mean energy, rms energy and mean cosine."""

Look = Callable[[str], NDArray[np.float64]]


def nearest_row(projectile: str, symbol: str) -> str:
    """Return the element of the table of products nearest in mass.

    Parameters
    ----------
    projectile : str
        pi- or pi+.
    symbol : str
        Element.

    Returns
    -------
    str
        Element with a row of its own.
    """
    table = read_table("inflight_products")
    known = set(table["element"][table["projectile"] == projectile])
    if symbol in known:
        return symbol
    mass = element(symbol).atomic_weight
    heavy = sorted(known - {"H"}, key=lambda name: abs(math.log(element(str(name)).atomic_weight / mass)))
    return str(heavy[0])


@lru_cache(maxsize=64)
def inflight_table(projectile: str, symbol: str) -> dict[str, NDArray[np.float64]]:
    """Return cross sections and products of one element, by energy.

    Parameters
    ----------
    projectile : str
        pi- or pi+.
    symbol : str
        Element with a row of its own.

    Returns
    -------
    dict of str to ndarray
        Columns by name; products as ``"species:column"``.
    """
    table = read_table("inflight_products").where(projectile=projectile, element=symbol)
    grid = np.unique(table["kinetic_energy_mev"])
    place = np.searchsorted(grid, table["kinetic_energy_mev"])
    data: dict[str, NDArray[np.float64]] = {"kinetic_energy_mev": grid}
    for column in ("inelastic_mb", "elastic_mb", "no_pion", "neutral_pion", "charged_pion"):
        values = np.zeros(len(grid))
        values[place] = table[column]
        data[column] = values
    for species in PRODUCT_SPECIES:
        keep = table["species"] == species
        for column in ("multiplicity", "energy_mev", "mean_cosine", "rms_energy_mev"):
            values = np.zeros(len(grid))
            values[place[keep]] = table[column][keep]
            data[f"{species}:{column}"] = values
    return data


def products_of(
    projectile: str, symbol: str, grid: NDArray[np.float64], sections: dict[str, NDArray[np.float64]], yields: str
) -> dict[str, Product]:
    """Return number, mean energy, rms energy and mean cosine per reaction of one element.

    Parameters
    ----------
    projectile : str
        pi-, pi+ or proton.
    symbol : str
        Element.
    grid : ndarray
        Kinetic energies of the projectile, MeV.
    sections : dict of str to ndarray
        Cross sections by channel at these energies.
    yields : str
        Yield set.

    Returns
    -------
    dict of str to tuple
        Number, mean energy (MeV), rms energy (MeV) and mean cosine by species, each on the grid.
    """
    if projectile == "proton":
        return _proton_products(grid)
    row = nearest_row(projectile, symbol)
    data = inflight_table(projectile, row)
    axis = data["kinetic_energy_mev"]

    def at(name: str) -> NDArray[np.float64]:
        """Return a column of the table on the grid."""
        return np.asarray(np.interp(grid, axis, data[name]))

    total = sections["absorption"] + sections["inelastic"] + sections["charge_exchange"]
    out: dict[str, Product] = {}
    for species in PRODUCT_SPECIES:
        count = at(f"{species}:multiplicity")
        held = at(f"{species}:energy_mev")
        mean = np.where(count > 0.0, held / np.where(count > 0.0, count, 1.0), 0.0)
        rms = np.maximum(at(f"{species}:rms_energy_mev"), mean)
        if species in ("pi-", "pi+", "pi0"):
            top = np.maximum(grid - 1.0, 0.1)
            mean = np.minimum(mean, 0.95 * top)
            rms = np.clip(rms, mean, np.sqrt(mean * top))
            if yields == "evaluated" and symbol != "H":
                wanted = sections["charge_exchange" if species == "pi0" else "inelastic"] / np.where(
                    total > 0, total, 1.0
                )
                present = at("neutral_pion" if species == "pi0" else "charged_pion")
                count = count * np.where(present > 0.0, wanted / np.where(present > 0.0, present, 1.0), 0.0)
        out[species] = (count, mean, rms, at(f"{species}:mean_cosine"))
    if yields == "evaluated" and symbol != "H":
        _rescale_nucleons(out, grid, sections, at)
    return out


def _rescale_nucleons(
    out: dict[str, Product], grid: NDArray[np.float64], sections: dict[str, NDArray[np.float64]], look: Look
) -> None:
    """Keep the share of the available energy that goes to nucleons when the channel split changes."""
    total = np.maximum(sections["absorption"] + sections["inelastic"] + sections["charge_exchange"], 1e-12)
    now = grid + _PION_REST_MEV * (1.0 - sections["inelastic"] / total)
    was = grid + _PION_REST_MEV * (1.0 - look("charged_pion"))
    for name in ("pi-", "pi+", "pi0"):
        rest = _PI0_REST_MEV if name == "pi0" else 0.0
        count, mean, _, _ = out[name]
        now = now - count * (mean + rest)
        was = was - look(f"{name}:energy_mev") - rest * look(f"{name}:multiplicity")
    factor = np.clip(now / np.maximum(was, 1.0), 0.0, 3.0)
    for name in PRODUCT_SPECIES[:8]:
        count, mean, rms, cosine = out[name]
        out[name] = (count * factor, mean, rms, cosine)


@lru_cache(maxsize=1)
def _proton_table() -> dict[str, tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]]:
    """Return energies, shares and multiplicities of proton reactions by species."""
    table = read_table("proton_reactions", "beams")
    found = {}
    for species in dict.fromkeys(table["species"]):
        rows = table.where(species=species)
        found[str(species)] = (rows["kinetic_energy_mev"], rows["energy_share"], rows["multiplicity"])
    return found


def _proton_products(grid: NDArray[np.float64]) -> dict[str, Product]:
    """Return products of proton reactions; forward for nucleons, nearly isotropic for the rest."""
    cosines = {
        "proton": 0.75,
        "neutron": 0.70,
        "deuteron": 0.55,
        "triton": 0.4,
        "helium3": 0.4,
        "alpha": 0.25,
        "heavy": 0.5,
    }
    zero = np.zeros(len(grid))
    out: dict[str, Product] = dict.fromkeys(PRODUCT_SPECIES, (zero, zero, zero, zero))
    for species, (energies, shares, multiplicities) in _proton_table().items():
        count = np.interp(grid, energies, multiplicities)
        mean = np.interp(grid, energies, shares) * grid / count
        spread = 1.35 if species in ("proton", "neutron") else 1.25
        rms = np.minimum(spread * mean, np.sqrt(mean * np.maximum(grid - 1.0, 0.1)))
        out[species] = (count, mean, np.maximum(rms, mean), np.full(len(grid), cosines[species]))
    return out

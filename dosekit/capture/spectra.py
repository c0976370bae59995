"""With what energies do particles leave a star?

A spectrum is a histogram: bin edges in MeV and dN/dE per stop. The shapes of the charged species come from the
``star_spectra`` table (a cascade calculation). The ``evaluated`` set changes them in two documented ways:

* protons: the cascade's excess of hard protons is thinned by a factor f above 25 MeV (f falls linearly from 1 at
  15 MeV), f chosen so that the mean energy is the evaluated one. The excess shows against the measured ratio of nn to
  np pairs, 6.3 +- 1.4 (Heusi et al., Nucl. Phys. A 407 (1983) 429);
* other species: the energy axis is stretched to the evaluated mean energy.

Evaluated neutrons follow the three-component fit to Madey et al., Phys. Rev. C 25 (1982) 3050,
dN/dE = n1/t1 exp(-E/t1) + n2/t2 exp(-E/t2) + n3 Normal(E; e0, w), cut at 118 MeV.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.tables import read_table
from dosekit.errors import TableError

__all__ = ["Spectrum", "cascade_spectrum", "fitted_neutron_spectrum", "line_spectrum", "stretched", "thinned"]

_THINNING_STARTS_MEV = 15.0
_THINNING_FULL_MEV = 25.0
_NEUTRON_LIMIT_MEV = 118.0


@dataclass(frozen=True)
class Spectrum:
    """Particles per stop and MeV in bins of kinetic energy.

    Attributes
    ----------
    edges_mev : ndarray, shape (n + 1,)
        Bin edges, MeV.
    per_mev : ndarray, shape (n,)
        dN/dE, 1/(MeV stop).
    """

    edges_mev: NDArray[np.float64]
    per_mev: NDArray[np.float64]

    @property
    def centres_mev(self) -> NDArray[np.float64]:
        """Bin centres, MeV."""
        return 0.5 * (self.edges_mev[1:] + self.edges_mev[:-1])

    @property
    def numbers(self) -> NDArray[np.float64]:
        """Particles per stop in each bin."""
        return self.per_mev * np.diff(self.edges_mev)

    @property
    def multiplicity(self) -> float:
        """Particles per stop."""
        return float(self.numbers.sum())

    @property
    def energy_mev(self) -> float:
        """Kinetic energy per stop, MeV."""
        return float((self.numbers * self.centres_mev).sum())

    @property
    def mean_energy_mev(self) -> float:
        """Mean kinetic energy of one particle, MeV."""
        return self.energy_mev / self.multiplicity if self.multiplicity > 0.0 else 0.0

    def scaled(self, factor: float) -> Spectrum:
        """Return the spectrum with all numbers multiplied.

        Parameters
        ----------
        factor : float
            Factor on dN/dE.

        Returns
        -------
        Spectrum
            The new spectrum.
        """
        return Spectrum(self.edges_mev, self.per_mev * factor)


@lru_cache(maxsize=256)
def cascade_spectrum(symbol: str, species: str) -> Spectrum:
    """Return the tabled cascade spectrum of one species from one element.

    Parameters
    ----------
    symbol : str
        Capturing element with rows in the table.
    species : str
        proton, deuteron, triton, helium3, alpha, heavy or neutron.

    Returns
    -------
    Spectrum
        The histogram; gaps in the table are empty bins.
    """
    rows = read_table("star_spectra").where(element=symbol, species=species)
    if not len(rows):
        raise TableError(f"star_spectra has no rows for {species} from {symbol}")
    low, high, density = (np.asarray(rows[name], dtype=float) for name in ("e_low_mev", "e_high_mev", "dn_de"))
    edges: list[float] = [float(low[0])]
    values: list[float] = []
    for left, right, value in zip(low, high, density, strict=True):
        if left > edges[-1] * 1.0001:
            edges.append(float(left))
            values.append(0.0)
        edges.append(float(right))
        values.append(float(value))
    return Spectrum(np.array(edges), np.array(values))


def stretched(spectrum: Spectrum, mean_energy_mev: float) -> Spectrum:
    """Return the spectrum with its energy axis stretched to another mean, numbers kept.

    Parameters
    ----------
    spectrum : Spectrum
        A spectrum.
    mean_energy_mev : float
        The mean energy wanted, MeV.

    Returns
    -------
    Spectrum
        The new spectrum.
    """
    factor = mean_energy_mev / spectrum.mean_energy_mev
    return Spectrum(spectrum.edges_mev * factor, spectrum.per_mev / factor)


def thinned(spectrum: Spectrum, mean_energy_mev: float) -> Spectrum:
    """Return the spectrum with its hard part thinned until the mean is the wanted one.

    Parameters
    ----------
    spectrum : Spectrum
        A spectrum.
    mean_energy_mev : float
        The mean energy wanted, MeV; must lie below the present mean and above that of the soft part.

    Returns
    -------
    Spectrum
        The new spectrum. Where thinning alone cannot reach the mean, the rest is done by stretching.
    """
    energy = spectrum.centres_mev
    hard = np.clip((energy - _THINNING_STARTS_MEV) / (_THINNING_FULL_MEV - _THINNING_STARTS_MEV), 0.0, 1.0)
    number = spectrum.numbers
    # sum n (1 - g h) (E - mean) = 0 is linear in the thinned part g
    excess = float((number * (energy - mean_energy_mev)).sum())
    removable = float((number * hard * (energy - mean_energy_mev)).sum())
    part = min(max(excess / removable, 0.0), 1.0) if removable > 0.0 else 0.0
    result = Spectrum(spectrum.edges_mev, spectrum.per_mev * (1.0 - part * hard))
    return stretched(result, mean_energy_mev)


def fitted_neutron_spectrum(symbol: str) -> Spectrum:
    """Return the fit to measured neutrons for C, N, O or Al, times its balance scale.

    Parameters
    ----------
    symbol : str
        C, N, O or Al.

    Returns
    -------
    Spectrum
        Neutrons per stop, 0.05 to 118 MeV.
    """
    row = next(iter(read_table("neutron_spectrum_fits").where(element=symbol).rows()))
    edges = np.concatenate([np.geomspace(0.05, 10.0, 41), np.linspace(10.0, _NEUTRON_LIMIT_MEV, 109)[1:]])

    def below(energy: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the number of neutrons below an energy."""
        gauss = np.array([0.5 * math.erfc((row["e0"] - e) / (row["w"] * math.sqrt(2.0))) for e in energy])
        soft = row["n1"] * -np.expm1(-energy / row["t1"]) + row["n2"] * -np.expm1(-energy / row["t2"])
        return np.asarray(soft + row["n3"] * gauss, dtype=float)

    return Spectrum(edges, np.diff(below(edges)) / np.diff(edges) * float(row["balance_scale"]))


def line_spectrum(energy_mev: float, number: float, *, width_mev: float = 0.0) -> Spectrum:
    """Return particles of one energy (or of a uniform band of energies).

    Parameters
    ----------
    energy_mev : float
        Mean energy, MeV.
    number : float
        Particles per stop.
    width_mev : float
        Full width of the band, MeV; a narrow bin if 0.

    Returns
    -------
    Spectrum
        One bin.
    """
    half = 0.5 * (width_mev if width_mev > 0.0 else 1e-3 * energy_mev)
    return Spectrum(np.array([energy_mev - half, energy_mev + half]), np.array([number / (2.0 * half)]))

"""What becomes of negative muons at rest?

They are captured by an atom and either decay on the spot or are captured by its nucleus. Nuclear capture per stop is
1 - (life in the element / 2197 ns), with the lives of T. Suzuki, D.F. Measday & J.P. Roalsvig, Phys. Rev. C 35 (1987)
2212 (from memory). Atoms share the stopped muons by the law of the yield set (:mod:`dosekit.capture.sharing`); hydrogen
hands its muons on to heavier atoms. On its way to the ground state a muon gives its binding energy, Z^2 times 2.81
keV, as X rays. A capture gives most of the muon's rest energy to a neutrino; the rest after D.F. Measday, Phys. Rep.
354 (2001) 243, section 5 (evaluated here, +-30 %): neutrons 8 MeV, protons and deuterons 1.2 MeV, alphas and recoils
0.6 MeV, photons 3 MeV, binding 12 MeV.

The ``cascade`` set has the conditions of the transport results it is compared with: muons that hydrogen catches stay
there and decay (31 % in water: weights Z, 0.56 Z for oxygen, the element choice named with those results), and nuclei
emit no photons (they have no level data). That hydrogen keeps its muons there is inferred: 1 - 0.184 x 0.69 decays per
stop, and 8 MeV of neutrons per capture, are what they show.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, element
from dosekit.capture.sharing import SHARING_LAWS, YIELD_SETS
from dosekit.depths.broad import convolve_planes, neutron_plane_kernel, photon_plane_kernel
from dosekit.depths.coarse import CoarseGrid

__all__ = ["MuonCapture", "muon_capture_products", "muon_capture_share", "muonic_cascade_mev"]

_FREE_NS = 2197.0
_LIFE_NS = {
    "H": 2195.0, "C": 2026.0, "N": 1907.0, "O": 1795.0, "F": 1463.0, "Na": 1204.0, "Mg": 1067.0, "Al": 864.0, "Si": 756.0,  # noqa: E501
    "P": 611.0, "S": 554.0, "Cl": 560.0, "Ar": 537.0, "K": 435.0, "Ca": 333.0, "Fe": 206.0, "Zn": 159.0,
}  # fmt: skip
_MUON_REST = 105.6583755
_NEUTRON, _LIGHT, _HEAVY, _PHOTON, _BINDING = 8.0, 1.2, 0.6, 3.0, 12.0
_CASCADE_MEV = 2.81e-3  # Rydberg energy times 206.77, the muon's mass in electron masses
_XRAY_MEV = 0.13  # 2p-1s line of muonic oxygen, 133 keV (memory)


@dataclass(frozen=True)
class MuonCapture:
    """What captures leave.

    Attributes
    ----------
    caught : ndarray, shape (cells,)
        Captures by nuclei.
    deposit : dict of str to (ndarray, float)
        Energy per cell, MeV, and its LET, keV/um, by part.
    neutrino, escaped, binding : float
        Energies, MeV.
    """

    caught: NDArray[np.float64] = field(repr=False)
    deposit: dict[str, tuple[NDArray[np.float64], float]] = field(repr=False)
    neutrino: float
    escaped: float
    binding: float


def muon_capture_share(medium: Material, *, yields: str = "evaluated") -> float:
    """Return the share of stopped negative muons that a nucleus captures.

    Parameters
    ----------
    medium : Material
        Medium.
    yields : str
        Yield set, which brings its own sharing among atoms.

    Returns
    -------
    float
        0 to 1; the others decay.

    Examples
    --------
    >>> from dosekit.basis.materials import material
    >>> round(muon_capture_share(material("water")), 2)
    0.18
    """
    return math.fsum(
        share * max(1.0 - _LIFE_NS[symbol] / _FREE_NS, 0.0) for symbol, share in _atomic_shares(medium, yields)
    )


def muonic_cascade_mev(medium: Material, *, yields: str = "evaluated") -> float:
    """Return the energy of muonic X rays per stopped negative muon.

    Parameters
    ----------
    medium : Material
        Medium.
    yields : str
        Yield set, which brings its own sharing among atoms.

    Returns
    -------
    float
        Mean binding energy of the ground state, MeV; point nuclei, not above calcium (1.1 MeV).
    """
    return math.fsum(
        share * _CASCADE_MEV * min(element(symbol).atomic_number, 20) ** 2
        for symbol, share in _atomic_shares(medium, yields)
        if symbol != "H"
    )


@lru_cache(maxsize=1024)
def _atomic_shares(medium: Material, yields: str) -> tuple[tuple[str, float], ...]:
    """Return the share of each element in the capture of muons by atoms."""
    law, _ = YIELD_SETS[yields]
    keeps = yields == "cascade" or medium.fraction("H") == 1.0
    parts = {
        symbol: medium.atoms_per_gram(symbol) * (1.0 if symbol == "H" else SHARING_LAWS[law](symbol))
        for symbol, _ in medium.mass_fractions
        if symbol != "H" or keeps
    }
    total = math.fsum(parts.values())
    return tuple((symbol, part / total) for symbol, part in parts.items())


def muon_capture_products(
    stopped: NDArray[np.float64], grid: CoarseGrid, *, yields: str = "evaluated", width_mm: float | None = None
) -> MuonCapture:
    """Return the energy that stopped negative muons leave before they decay, or by capture.

    Parameters
    ----------
    stopped : ndarray, shape (cells,)
        Muons at rest per cell.
    grid : CoarseGrid
        The cells.
    yields : str
        Yield set, which brings its own sharing among atoms.
    width_mm : float, optional
        Width of the square over which energy is summed, mm.

    Returns
    -------
    MuonCapture
        Deposits and the rest of the balance.
    """
    by_stuff = [(muon_capture_share(m, yields=yields), muonic_cascade_mev(m, yields=yields)) for m in grid.materials]
    share, xray = np.array(by_stuff).T[:, grid.stuff]
    caught = stopped * share
    gamma = 0.0 if yields == "cascade" else _PHOTON
    number, atomic = float(np.sum(caught)), stopped * xray
    neutron = convolve_planes(
        caught * _NEUTRON,
        neutron_plane_kernel(grid.reference, (2.0, 5.0, 12.0), bin_mm=grid.step_mm, width_mm=width_mm),
    )
    photon = convolve_planes(
        caught * gamma, photon_plane_kernel(grid.reference, 2.0, bin_mm=grid.step_mm, width_mm=width_mm)
    ) + convolve_planes(atomic, photon_plane_kernel(grid.reference, _XRAY_MEV, bin_mm=grid.step_mm, width_mm=width_mm))
    deposit = {
        "capture_light": (caught * _LIGHT, 20.0),
        "capture_heavy": (caught * _HEAVY, 150.0),
        "capture_neutron": (neutron, 25.0),
        "capture_photon": (photon, 0.3),
    }
    cascade = float(np.sum(atomic))
    escaped = number * (_NEUTRON + gamma) + cascade - float(np.sum(neutron) + np.sum(photon))
    # a bound muon has less to give to its neutrinos
    neutrino = number * (_MUON_REST - _NEUTRON - _LIGHT - _HEAVY - _PHOTON - _BINDING) - cascade
    return MuonCapture(caught, deposit, neutrino, escaped, number * (_BINDING + _PHOTON - gamma))

"""What becomes of negative muons at rest?

They are captured by an atom and either decay on the spot or are captured by its nucleus. Nuclear capture per stop is
1 - (life in the element / 2197 ns), with the lives of T. Suzuki, D.F. Measday & J.P. Roalsvig, Phys. Rev. C 35 (1987)
2212 (from memory), shared among atoms like stopped pions (hydrogen gives its muons away). A capture gives most of the
muon's rest energy to a neutrino; the rest after D.F. Measday, Phys. Rep. 354 (2001) 243, section 5 (evaluated here,
+-30 %): neutrons 8 MeV, protons and deuterons 1.2 MeV, alphas and recoils 0.6 MeV, photons 3 MeV, binding 12 MeV.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, element
from dosekit.depths.broad import convolve_planes, neutron_plane_kernel, photon_plane_kernel
from dosekit.depths.coarse import CoarseGrid

__all__ = ["MuonCapture", "muon_capture_products", "muon_capture_share"]

_FREE_NS = 2197.0
_LIFE_NS = {
    "H": 2195.0, "C": 2026.0, "N": 1907.0, "O": 1795.0, "F": 1463.0, "Na": 1204.0, "Mg": 1067.0, "Al": 864.0, "Si": 756.0,  # noqa: E501
    "P": 611.0, "S": 554.0, "Cl": 560.0, "Ar": 537.0, "K": 435.0, "Ca": 333.0, "Fe": 206.0, "Zn": 159.0,
}  # fmt: skip
_MUON_REST = 105.6583755
_NEUTRON, _LIGHT, _HEAVY, _PHOTON, _BINDING = 8.0, 1.2, 0.6, 3.0, 12.0


@dataclass(frozen=True)
class MuonCapture:
    """What captures leave.

    Attributes
    ----------
    deposit : dict of str to (ndarray, float)
        Energy per cell, MeV, and its LET, keV/um, by part.
    neutrino, escaped, binding : float
        Energies, MeV.
    """

    deposit: dict[str, tuple[NDArray[np.float64], float]] = field(repr=False)
    neutrino: float
    escaped: float
    binding: float


@lru_cache(maxsize=1024)
def muon_capture_share(medium: Material) -> float:
    """Return the share of stopped negative muons that a nucleus captures.

    Parameters
    ----------
    medium : Material
        Medium.

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
    weight = 0.0
    caught = 0.0
    for symbol, fraction in medium.mass_fractions:
        if symbol == "H":
            continue
        atom = element(symbol)
        # capture by atoms grows slowly with Z (H. Daniel, Phys. Rev. Lett. 35 (1975) 1649)
        share = fraction / atom.atomic_weight * atom.atomic_number ** (1.0 / 3.0) * np.log(0.57 * atom.atomic_number)
        weight += share
        caught += share * max(1.0 - _LIFE_NS[symbol] / _FREE_NS, 0.0)
    return float(caught / weight) if weight > 0.0 else 0.0


def muon_capture_products(
    caught: NDArray[np.float64], grid: CoarseGrid, *, width_mm: float | None = None
) -> MuonCapture:
    """Return the energy that muon captures leave.

    Parameters
    ----------
    caught : ndarray, shape (cells,)
        Captures per cell.
    grid : CoarseGrid
        The cells.
    width_mm : float, optional
        Width of the square over which energy is summed, mm.

    Returns
    -------
    MuonCapture
        Deposits and the rest of the balance.
    """
    number = float(np.sum(caught))
    neutron = convolve_planes(
        caught * _NEUTRON,
        neutron_plane_kernel(grid.reference, (2.0, 5.0, 12.0), bin_mm=grid.step_mm, width_mm=width_mm),
    )
    photon = convolve_planes(
        caught * _PHOTON, photon_plane_kernel(grid.reference, 2.0, bin_mm=grid.step_mm, width_mm=width_mm)
    )
    deposit = {
        "capture_light": (caught * _LIGHT, 20.0),
        "capture_heavy": (caught * _HEAVY, 150.0),
        "capture_neutron": (neutron, 25.0),
        "capture_photon": (photon, 0.3),
    }
    escaped = number * (_NEUTRON + _PHOTON) - float(np.sum(neutron) + np.sum(photon))
    neutrino = number * (_MUON_REST - _NEUTRON - _LIGHT - _HEAVY - _PHOTON - _BINDING)
    return MuonCapture(deposit, neutrino, escaped, number * _BINDING)

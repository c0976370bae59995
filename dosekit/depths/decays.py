"""What becomes of beam particles that decay, in flight or at rest, and of muons that nuclei capture?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dosekit.beams.decay import MICHEL_MEAN_ENERGY_MEV, MUON_ENERGY_AT_REST_MEV
from dosekit.depths.coarse import CoarseGrid, regrid
from dosekit.depths.core import Core
from dosekit.depths.leptons import decay_muons, michel_electrons
from dosekit.depths.muons import muon_capture_products
from dosekit.depths.products import Carried
from dosekit.depths.scattered import Scattered
from dosekit.depths.tables import GROUP_ENERGY_MEV

__all__ = ["AtRest", "follow_decays"]

_PION_REST = 139.57039
_MUON_REST = 105.6583755
_ELECTRON_REST = 0.51099895
_NO_BREMSSTRAHLUNG = ("cascade",)
"""Yield sets whose results list no bremsstrahlung among their processes, and show no photons far from decays."""


@dataclass
class AtRest:
    """What happens to particles at rest and to neutrinos, by cell and in sum.

    Attributes
    ----------
    at_rest : ndarray, shape (cells,)
        Decays of particles at rest.
    capture : dict of str to (ndarray, float)
        What captures of negative muons leave, MeV, and its LET, keV/um.
    neutrino, escaped, binding, electron_rest : float
        Energies, MeV.
    """

    at_rest: NDArray[np.float64]
    capture: dict[str, tuple[NDArray[np.float64], float]]
    neutrino: float = 0.0
    escaped: float = 0.0
    binding: float = 0.0
    electron_rest: float = 0.0


def follow_decays(
    species: str,
    core: Core,
    fine: CoarseGrid,
    grid: CoarseGrid,
    scattered: Scattered,
    yields: str,
    width_mm: float | None,
) -> tuple[Carried, AtRest]:
    """Follow muons and electrons from decays in flight and at rest.

    Parameters
    ----------
    species : str
        Beam particle.
    core : Core
        The beam before its first nuclear scattering.
    fine, grid : CoarseGrid
        The cells of scattered particles, and those of decays.
    scattered : Scattered
        The scattered particles.
    yields : str
        Yield set.
    width_mm : float or None
        Width of the square over which the energy of neutrons and photons is summed, mm.

    Returns
    -------
    Carried
        Scores of muons and electrons.
    AtRest
        The rest of the balance.
    """
    total = Carried(grid.cells)
    rest = AtRest(np.zeros(grid.cells), {})
    if species == "proton":
        return total, rest
    positive = species in ("pi+", "mu+")
    muon = "mu+" if positive else "mu-"
    stopped = grid.to_cells(core.stops) + regrid(scattered.carried.stops, fine, grid)
    first, later = (regrid(rows, fine, grid) for rows in (scattered.core_decays, scattered.later_decays))
    muons = np.zeros(grid.cells)
    electrons = np.zeros(grid.cells)
    if species in ("pi-", "pi+"):
        for decays, isotropic in ((first, False), (later, True)):
            flown = decay_muons(muon, decays, grid, isotropic=isotropic)
            total.add(flown)
            muons += flown.stops
            count = np.sum(decays, axis=0)
            pion = float(np.sum(count * (GROUP_ENERGY_MEV + _PION_REST)))
            gone = float(flown.escaped[0] + flown.escaped[2] + (flown.escaped[1] + flown.escaped[3]) * _MUON_REST)
            rest.escaped += gone
            rest.neutrino += pion * (1.0 - (MUON_ENERGY_AT_REST_MEV + _MUON_REST) / _PION_REST)
        if positive:
            rest.at_rest = stopped.copy()
            rest.neutrino += float(np.sum(stopped)) * (_PION_REST - MUON_ENERGY_AT_REST_MEV - _MUON_REST)
            muons += stopped
    else:
        muons += stopped
        # muons that decay in flight: their electron starts where they are, boost neglected
        flying = np.sum(first + later, axis=1)
        count = np.sum(first + later, axis=0)
        rest.neutrino += float(np.sum(count * GROUP_ENERGY_MEV))
        electrons += flying
    caught = np.zeros(grid.cells)
    if not positive:
        products = muon_capture_products(muons, grid, yields=yields, width_mm=width_mm)
        caught = products.caught
        rest.capture.update(products.deposit)
        rest.neutrino += products.neutrino
        rest.escaped += products.escaped
        rest.binding += products.binding
    electrons += muons - caught
    if not species.startswith("pi"):
        rest.at_rest = muons - caught
    run, photons = michel_electrons(
        electrons, grid, positron=positive, radiates=yields not in _NO_BREMSSTRAHLUNG, width_mm=width_mm
    )
    total.add(run)
    gone_number = float(run.escaped[1] + run.escaped[3])
    number = float(np.sum(electrons))
    rest.escaped += photons + float(run.escaped[0] + run.escaped[2]) + gone_number * _ELECTRON_REST
    # an electron keeps its rest energy; a positron gives its own and that of an electron of the medium to photons
    rest.electron_rest += (number - gone_number) * (-_ELECTRON_REST if positive else _ELECTRON_REST)
    rest.neutrino += number * (_MUON_REST - MICHEL_MEAN_ENERGY_MEV - _ELECTRON_REST)
    return total, rest

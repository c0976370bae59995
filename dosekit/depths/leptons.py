"""What do muons and electrons from decays, and electron beams, leave?

Muons from decays in flight run straight on their own range. Electrons run with multiple scattering as diffusion of
direction, and radiate; bremsstrahlung is absorbed along its direction.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material
from dosekit.beams.decay import michel_spectrum, muon_from_pion
from dosekit.beams.electrons import electron_stopping_powers
from dosekit.beams.scattering import pv_mev, scattering_length_g_cm2
from dosekit.depths.angles import COSINES, WEIGHTS, diffusion_matrices
from dosekit.depths.coarse import CoarseGrid
from dosekit.depths.kernels import gather_products, stream_photons
from dosekit.depths.products import Carried, carry, carry_populations, node_tables
from dosekit.depths.tables import GROUP_ENERGY_MEV, node_spread

__all__ = ["carry_electrons", "decay_muons", "michel_electrons"]

_GAMMA_CM2_G = 0.0170


@lru_cache(maxsize=64)
def _muon_tables(
    reference: Material, materials: tuple[Material, ...], step: float, name: str, samples: int = 8
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies, stopping, and for each sample the spread and angles by group of pion energy."""
    energies, cosines, _ = muon_from_pion(GROUP_ENERGY_MEV, samples=samples)
    nodes, let = node_tables(name, reference, materials, step, float(np.max(energies)) * 1.001)
    spread = np.empty((samples, 1, len(GROUP_ENERGY_MEV), len(nodes)))
    angular = np.zeros((samples, 1, len(GROUP_ENERGY_MEV), len(COSINES)))
    for index in range(samples):
        spread[index, 0] = node_spread(energies[:, index : index + 1], nodes) / samples
        low = np.clip(np.searchsorted(COSINES, cosines[:, index]) - 1, 0, len(COSINES) - 2)
        part = np.clip((cosines[:, index] - COSINES[low]) / (COSINES[low + 1] - COSINES[low]), 0.0, 1.0)
        rows = np.arange(len(GROUP_ENERGY_MEV))
        angular[index, 0, rows, low] = 1.0 - part
        angular[index, 0, rows, low + 1] += part
    return nodes, let, spread, angular


def decay_muons(name: str, decays: NDArray[np.float64], grid: CoarseGrid, *, isotropic: bool = False) -> Carried:
    """Carry muons from pions that decay in flight.

    Parameters
    ----------
    name : str
        mu- or mu+.
    decays : ndarray, shape (cells, groups)
        Decays by cell and energy group of the pion.
    grid : CoarseGrid
        The cells.
    isotropic : bool
        Whether the pions come from all sides.

    Returns
    -------
    Carried
        Scores; the stops are muons at rest.
    """
    if not np.any(decays > 0.0):
        return Carried(grid.cells)
    nodes, let, spread, angular = _muon_tables(grid.reference, grid.materials, grid.step_mm, name)
    source = np.zeros((len(nodes), grid.cells, len(COSINES)))
    one = np.zeros(grid.cells, dtype=np.int64)
    for index in range(len(spread)):
        angles = np.broadcast_to(0.5 * WEIGHTS, angular[index].shape).copy() if isotropic else angular[index]
        gather_products(decays, one, spread[index], angles, source)
    return carry(source, grid, nodes, let)


@lru_cache(maxsize=64)
def _electron_tables(
    reference: Material, materials: tuple[Material, ...], step: float, top_mev: float, positron: bool
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies, stopping, radiated share and angular diffusion per step."""
    name = "e+" if positron else "e-"
    energy, let = node_tables(name, reference, materials, step, top_mev)
    middle = np.maximum(np.concatenate([[0.5 * energy[1]], 0.5 * (energy[1:] + energy[:-1])]), 1e-3)
    collision, radiative = electron_stopping_powers(reference, middle, positron=positron)
    length = 10.0 * scattering_length_g_cm2(reference) / reference.density_g_cm3
    power = (15.0 / pv_mev(name, middle)) ** 2 / length
    let = let * (collision / (collision + radiative))[None, :]
    return energy, let, radiative / (collision + radiative), diffusion_matrices(np.minimum(power * step, 50.0))


def carry_electrons(
    source_spectrum: tuple[NDArray[np.float64], NDArray[np.float64]],
    number: NDArray[np.float64],
    angular: NDArray[np.float64],
    grid: CoarseGrid,
    *,
    positron: bool,
) -> tuple[Carried, float]:
    """Carry electrons with multiple scattering and bremsstrahlung.

    Parameters
    ----------
    source_spectrum : (energy_mev, probability)
        Kinetic energies, MeV, and probabilities.
    number : ndarray, shape (cells,)
        Electrons by cell.
    angular : ndarray, shape (16,)
        Shares by direction.
    grid : CoarseGrid
        The cells; its step is the step of residual range.
    positron : bool
        Whether they are positrons.

    Returns
    -------
    scores : Carried
        Scores; the deposit includes absorbed bremsstrahlung.
    escaped_photons : float
        Energy of bremsstrahlung that leaves, MeV.
    """
    energies, probability = source_spectrum
    top = float(np.ceil(np.max(energies) * 1.001 / 5.0) * 5.0)
    nodes, let, radiated, turn = _electron_tables(grid.reference, grid.materials, grid.step_mm, top, positron)
    spread = np.sum(node_spread(energies[:, None], nodes) * probability[:, None], axis=0)
    source = spread[:, None, None] * number[None, :, None] * angular[None, None, :]
    scores = Carried(grid.cells)
    brems = np.zeros((grid.cells, len(COSINES)))
    carry_populations(source, grid, nodes, let, scores, turn, radiated, brems, len(nodes))
    gone = np.zeros(2)
    attenuation = np.full(grid.cells, 0.1 * _GAMMA_CM2_G * grid.reference.density_g_cm3 * grid.step_mm)
    photons = np.zeros(grid.cells)
    stream_photons(brems, COSINES, attenuation, photons, gone)
    scores.deposit += photons
    scores.let_weighted += 0.3 * photons
    return scores, float(np.sum(gone))


def michel_electrons(muons: NDArray[np.float64], grid: CoarseGrid, *, positron: bool) -> tuple[Carried, float]:
    """Carry the electrons of muons that decay at rest.

    Parameters
    ----------
    muons : ndarray, shape (cells,)
        Muons that decay, by cell.
    grid : CoarseGrid
        The cells.
    positron : bool
        Whether the muons are positive.

    Returns
    -------
    scores : Carried
        Scores.
    escaped_photons : float
        Energy of bremsstrahlung that leaves, MeV.
    """
    if not np.any(muons > 0.0):
        return Carried(grid.cells), 0.0
    return carry_electrons(michel_spectrum(), muons, 0.5 * WEIGHTS, grid, positron=positron)

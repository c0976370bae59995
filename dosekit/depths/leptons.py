"""What do muons and electrons from decays, and electron beams, leave?

Muons from decays in flight run straight on their own range. Electrons run with multiple scattering as diffusion of
direction, and radiate; bremsstrahlung is absorbed along its direction. Positrons annihilate, in flight with the cross
section of W. Heitler, The Quantum Theory of Radiation (1954), section 27::

    sigma = pi r_e^2 / (gamma + 1) [ (gamma^2 + 4 gamma + 1) / (gamma^2 - 1) ln(gamma + sqrt(gamma^2 - 1))
                                     - (gamma + 3) / sqrt(gamma^2 - 1) ]

(their mean loss joins the stopping power, the photon goes on along the positron's direction) or at rest.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.constants import CLASSICAL_ELECTRON_RADIUS_CM, ELECTRON_MASS_MEV
from dosekit.basis.materials import Material
from dosekit.beams.decay import michel_spectrum, muon_from_pion
from dosekit.beams.electrons import electron_stopping_powers
from dosekit.beams.scattering import pv_mev, scattering_length_g_cm2
from dosekit.depths.angles import COSINES, WEIGHTS, diffusion_matrices
from dosekit.depths.broad import convolve_planes, photon_plane_kernel
from dosekit.depths.coarse import CoarseGrid
from dosekit.depths.kernels import gather_products, stream_photons
from dosekit.depths.products import Carried, carry, carry_populations, node_tables
from dosekit.depths.tables import GROUP_ENERGY_MEV, node_spread

__all__ = ["annihilation_cm2_g", "carry_electrons", "decay_muons", "michel_electrons"]

_GAMMA_CM2_G = 0.0170
_SMALLEST_SHARE = 1e-6  # of a turn in one step; smaller ones cost time only


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


def annihilation_cm2_g(medium: Material, kinetic_energy_mev: ArrayLike) -> NDArray[np.float64]:
    """Return the annihilation of positrons in flight per mass thickness.

    Parameters
    ----------
    medium : Material
        Medium.
    kinetic_energy_mev : array_like
        Kinetic energy of the positron, MeV, > 0.

    Returns
    -------
    ndarray
        Probability per g/cm2; Heitler (1954).
    """
    gamma = 1.0 + np.asarray(kinetic_energy_mev, dtype=float) / ELECTRON_MASS_MEV
    root = np.sqrt(gamma**2 - 1.0)
    bracket = (gamma**2 + 4.0 * gamma + 1.0) / root**2 * np.log(gamma + root) - (gamma + 3.0) / root
    return np.asarray(math.pi * CLASSICAL_ELECTRON_RADIUS_CM**2 * medium.electrons_per_gram / (gamma + 1.0) * bracket)


@lru_cache(maxsize=64)
def _electron_tables(
    reference: Material, materials: tuple[Material, ...], step: float, top_mev: float, positron: bool, radiates: bool
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies, collision stopping, share of the loss given to photons and angular diffusion per step."""
    name = "e+" if positron else "e-"
    fine = np.geomspace(1e-3, 1.2 * top_mev + 1.0, 800)
    collision, photons = _losses(reference, fine, positron, radiates)
    per_mm = 0.1 * reference.density_g_cm3 * (collision + photons)
    slowness = fine / per_mm
    reach = fine[0] / per_mm[0] + np.concatenate(
        [[0.0], np.cumsum(0.5 * (slowness[1:] + slowness[:-1]) * np.diff(np.log(fine)))]
    )
    count = int(np.ceil(float(np.interp(top_mev, fine, reach)) / step)) + 2
    energy = np.concatenate([[0.0], np.interp(step * np.arange(1, count), reach, fine)])
    middle = np.maximum(np.concatenate([[0.5 * energy[1]], 0.5 * (energy[1:] + energy[:-1])]), 1e-3)
    collision, photons = _losses(reference, middle, positron, radiates)
    length = 10.0 * scattering_length_g_cm2(reference) / reference.density_g_cm3
    power = (15.0 / pv_mev(name, middle)) ** 2 / length
    let = np.stack(
        [
            0.1 * stuff.density_g_cm3 * electron_stopping_powers(stuff, middle, positron=positron)[0]
            for stuff in materials
        ]
    )
    turn = diffusion_matrices(np.minimum(power * step, 50.0))
    turn = np.where(turn > _SMALLEST_SHARE, turn, 0.0)
    return energy, let, photons / (collision + photons), turn / np.sum(turn, axis=2, keepdims=True)


def _losses(
    stuff: Material, energy: NDArray[np.float64], positron: bool, radiates: bool
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the loss to collisions and to photons (bremsstrahlung, annihilation in flight), MeV cm2/g."""
    collision, photons = electron_stopping_powers(stuff, energy, positron=positron)
    if not radiates:
        photons = np.zeros_like(photons)
    return collision, photons + (annihilation_cm2_g(stuff, energy) * energy if positron else 0.0)


def carry_electrons(
    source_spectrum: tuple[NDArray[np.float64], NDArray[np.float64]],
    number: NDArray[np.float64],
    angular: NDArray[np.float64],
    grid: CoarseGrid,
    *,
    positron: bool,
    radiates: bool = True,
    width_mm: float | None = None,
) -> tuple[Carried, float]:
    """Carry electrons with multiple scattering, bremsstrahlung and annihilation.

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
        Whether they are positrons, which annihilate: 1.022 MeV for each that stops join the photons.
    radiates : bool
        Whether there is bremsstrahlung.
    width_mm : float, optional
        Width of the square over which the energy of annihilation photons is summed, mm.

    Returns
    -------
    scores : Carried
        Scores; the deposit includes absorbed photons.
    escaped_photons : float
        Energy of photons that leave, MeV.
    """
    energies, probability = source_spectrum
    top = float(np.ceil(np.max(energies) * 1.001 / 5.0) * 5.0)
    nodes, let, radiated, turn = _electron_tables(grid.reference, grid.materials, grid.step_mm, top, positron, radiates)
    spread = np.sum(node_spread(energies[:, None], nodes) * probability[:, None], axis=0)
    source = spread[:, None, None] * number[None, :, None] * angular[None, None, :]
    scores = Carried(grid.cells)
    brems = np.zeros((grid.cells, len(COSINES)))
    carry_populations(source, grid, nodes, let, scores, turn, radiated, brems, len(nodes))
    gone = np.zeros(2)
    attenuation = np.full(grid.cells, 0.1 * _GAMMA_CM2_G * grid.reference.density_g_cm3 * grid.step_mm)
    photons = np.zeros(grid.cells)
    stream_photons(brems, COSINES, attenuation, photons, gone)
    escaped = float(np.sum(gone))
    if positron:
        pairs = 2.0 * ELECTRON_MASS_MEV * scores.stops
        left = convolve_planes(
            pairs, photon_plane_kernel(grid.reference, ELECTRON_MASS_MEV, bin_mm=grid.step_mm, width_mm=width_mm)
        )
        photons += left
        escaped += float(np.sum(pairs) - np.sum(left))
    scores.deposit += photons
    scores.let_weighted += 0.3 * photons
    return scores, escaped


def michel_electrons(
    muons: NDArray[np.float64],
    grid: CoarseGrid,
    *,
    positron: bool,
    radiates: bool = True,
    width_mm: float | None = None,
) -> tuple[Carried, float]:
    """Carry the electrons of muons that decay at rest.

    Parameters
    ----------
    muons : ndarray, shape (cells,)
        Muons that decay, by cell.
    grid : CoarseGrid
        The cells.
    positron : bool
        Whether the muons are positive.
    radiates : bool
        Whether there is bremsstrahlung.
    width_mm : float, optional
        Width of the square over which the energy of annihilation photons is summed, mm.

    Returns
    -------
    scores : Carried
        Scores.
    escaped_photons : float
        Energy of photons that leave, MeV.
    """
    if not np.any(muons > 0.0):
        return Carried(grid.cells), 0.0
    return carry_electrons(
        michel_spectrum(), muons, 0.5 * WEIGHTS, grid, positron=positron, radiates=radiates, width_mm=width_mm
    )

"""What do the products of reactions and decays in flight leave, and where?

Protons, deuterons and tritons run on their own ranges in sixteen directions, muons from decays on theirs; heavier
ions stay. Neutrons, photons and neutral pions are broad. Electrons from muons at rest run with multiple scattering
and radiate.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material
from dosekit.basis.particles import particle
from dosekit.beams.decay import michel_spectrum, muon_from_pion
from dosekit.beams.electrons import electron_stopping_powers
from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import reactions
from dosekit.beams.scattering import pv_mev, scattering_length_g_cm2
from dosekit.depths.angles import COSINES, WEIGHTS, diffusion_matrices
from dosekit.depths.broad import (
    convolve_planes,
    neutron_kerma_ratio,
    neutron_plane_kernel,
    photon_plane_kernel,
)
from dosekit.depths.coarse import CoarseGrid
from dosekit.depths.kernels import gather_products, march, stream_photons
from dosekit.depths.tables import GROUP_ENERGY_MEV, beta_samples, node_spread, product_spread

__all__ = [
    "NEAR_COSINE",
    "Carried",
    "carry",
    "carry_electrons",
    "charged_products",
    "decay_muons",
    "michel_electrons",
    "neutral_products",
]

NEAR_COSINE = 0.9
"""Directions over this cosine count as near the beam."""

_NO_EVENTS = np.zeros((0, 0))
_GAMMA_CM2_G = 0.0170
_ANCHORS_MEV = (10.0, 50.0, 100.0, 200.0)


class Carried:
    """Scores of a population: deposit, LET-weighted deposit and stops by cell, and what escaped.

    Parameters
    ----------
    cells : int
        Number of cells.
    """

    def __init__(self, cells: int) -> None:
        self.deposit = np.zeros(cells)
        self.let_weighted = np.zeros(cells)
        self.stops = np.zeros(cells)
        self.escaped = np.zeros(4)
        self.sideways = np.zeros(cells)
        self.near = np.zeros((3, cells))

    def add(self, other: Carried) -> None:
        """Add the scores of another population.

        Parameters
        ----------
        other : Carried
            The other one.
        """
        self.deposit += other.deposit
        self.let_weighted += other.let_weighted
        self.stops += other.stops
        self.escaped += other.escaped
        self.sideways += other.sideways
        self.near += other.near


def carry(
    source: NDArray[np.float64], grid: CoarseGrid, nodes_mev: NDArray[np.float64], let: NDArray[np.float64]
) -> Carried:
    """Carry particles along straight lines until they stop or leave; nothing else happens to them.

    Parameters
    ----------
    source : ndarray, shape (nodes, cells, 16)
        Particles by node of residual range, cell and direction; used up.
    grid : CoarseGrid
        The cells.
    nodes_mev : ndarray, shape (nodes,)
        Energy with residual range k h, MeV.
    let : ndarray, shape (materials, nodes)
        Stopping power on the way down from a node, keV/um.

    Returns
    -------
    Carried
        Scores.
    """
    scores = Carried(grid.cells)
    nodes = len(nodes_mev)
    _march(source, grid, nodes_mev, let, scores, np.zeros((0, 0, 0)), np.zeros(0), np.zeros((0, 0)), nodes)
    return scores


def _march(
    source: NDArray[np.float64],
    grid: CoarseGrid,
    nodes_mev: NDArray[np.float64],
    let: NDArray[np.float64],
    scores: Carried,
    turn: NDArray[np.float64],
    radiated: NDArray[np.float64],
    brems: NDArray[np.float64],
    nodes: int,
) -> None:
    """Call the compiled loop without events."""
    march(
        source, COSINES, grid.step_mm, nodes_mev, let, grid.stuff, np.zeros((len(grid.materials), 0)),
        np.zeros((0, 0, 3)), _NO_EVENTS, np.zeros((0, 0, 0)), np.zeros((0, 0, 0, 0)), np.zeros((0, 0, 0, 0)), turn,
        radiated, np.zeros(nodes, dtype=np.int64), np.zeros(nodes), scores.deposit, scores.let_weighted,
        scores.stops, np.zeros((3, grid.cells)), np.zeros((grid.cells, 2)), np.zeros((grid.cells, 2)), np.zeros((2,
        grid.cells)), scores.escaped, brems, scores.sideways, NEAR_COSINE, scores.near,
    )  # fmt: skip


@lru_cache(maxsize=256)
def _nodes(
    species: str, reference: Material, materials: tuple[Material, ...], step: float, top_mev: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies up to an energy, and stopping powers on the way down."""
    table = range_table(species, reference)
    count = int(np.ceil(float(table.range_mm(top_mev)) / step)) + 2
    energy = table.energy_mev(step * np.arange(count))
    middle = np.maximum(np.concatenate([[0.5 * energy[1]], 0.5 * (energy[1:] + energy[:-1])]), 1e-3)
    let = np.stack([range_table(species, stuff).stopping_mev_mm(middle) for stuff in materials])
    return energy, let


@lru_cache(maxsize=256)
def _charged_tables(
    projectile: str, species: str, reference: Material, materials: tuple[Material, ...], step: float, yields: str
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies, stopping, spread and angles of a product."""
    top = 220.0 if projectile == "proton" else 150.0
    energy, let = _nodes(species, reference, materials, step, top)
    pairs = [product_spread(reactions(projectile, stuff, yields=yields), species, energy) for stuff in materials]
    return energy, let, np.stack([pair[0] for pair in pairs]), np.stack([pair[1] for pair in pairs])


def charged_products(
    projectile: str, events: NDArray[np.float64], grid: CoarseGrid, *, yields: str, isotropic: bool = False
) -> Carried:
    """Carry protons, deuterons and tritons of reactions; heavier ions stay where they are made.

    Parameters
    ----------
    projectile : str
        What reacts.
    events : ndarray, shape (cells, groups)
        Reactions by cell and energy group.
    grid : CoarseGrid
        The cells.
    yields : str
        Yield set.
    isotropic : bool
        Whether the projectiles come from all sides.

    Returns
    -------
    Carried
        Scores.
    """
    total = Carried(grid.cells)
    if not np.any(events > 0.0):
        return total
    light = ("deuteron", "triton") if projectile == "proton" else ("proton", "deuteron", "triton")
    for species in light:
        energy, let, spread, angular = _charged_tables(
            projectile, species, grid.reference, grid.materials, grid.step_mm, yields
        )
        if isotropic:
            angular = np.broadcast_to(0.5 * WEIGHTS, angular.shape).copy()
        source = np.zeros((len(energy), grid.cells, len(COSINES)))
        gather_products(events, grid.stuff, spread, angular, source)
        total.add(carry(source, grid, energy, let))
    for species in ("helium3", "alpha", "heavy"):
        held = _energy_by_group(projectile, species, grid.materials, yields)
        local = np.sum(events * held[grid.stuff], axis=1)
        total.deposit += local
        total.let_weighted += local * _stopped_let(species, grid.reference)
    return total


@lru_cache(maxsize=512)
def _energy_by_group(
    projectile: str, species: str, materials: tuple[Material, ...], yields: str
) -> NDArray[np.float64]:
    """Return energy of a product per reaction, shape (materials, groups)."""
    rows = []
    for stuff in materials:
        table = reactions(projectile, stuff, yields=yields)
        extra = 134.9768 if species == "pi0" else 0.0
        held = table.reaction_share * table.number[species] * (table.mean_energy_mev[species] + extra)
        rows.append(table.at(held, GROUP_ENERGY_MEV))
    return np.stack(rows)


@lru_cache(maxsize=64)
def _stopped_let(species: str, stuff: Material) -> float:
    """Return the energy-averaged stopping power of ions of a few MeV that stop, keV/um."""
    name = {"helium3": "helium3", "alpha": "alpha", "heavy": "carbon12"}[species]
    top = {"helium3": 10.0, "alpha": 7.0, "heavy": 4.0}[species]
    energy = np.linspace(0.02, 1.0, 50) * top
    return float(np.mean(range_table(name, stuff).stopping_mev_mm(energy)))


def neutral_products(
    projectile: str,
    events: NDArray[np.float64],
    grid: CoarseGrid,
    *,
    yields: str,
    width_mm: float | None = None,
) -> tuple[NDArray[np.float64], dict[str, NDArray[np.float64]]]:
    """Spread the energy of neutrons, photons and neutral pions of reactions.

    Parameters
    ----------
    projectile : str
        What reacts.
    events : ndarray, shape (cells, groups)
        Reactions by cell and energy group.
    grid : CoarseGrid
        The cells.
    yields : str
        Yield set.
    width_mm : float, optional
        Width of the square over which energy is summed, mm.

    Returns
    -------
    deposit : ndarray, shape (cells,)
        Energy left, MeV.
    emitted : dict of str to ndarray, shape (cells,)
        Energy emitted by species, MeV.
    """
    deposit = np.zeros(grid.cells)
    emitted: dict[str, NDArray[np.float64]] = {}
    if not np.any(events > 0.0):
        return deposit, {name: np.zeros(grid.cells) for name in ("neutron", "photon", "pi0")}
    for species in ("neutron", "photon", "pi0"):
        held = _energy_by_group(projectile, species, grid.materials, yields)
        by_group = events * held[grid.stuff]
        emitted[species] = np.sum(by_group, axis=1)
        for index, anchor in enumerate(_ANCHORS_MEV):
            source = by_group @ _anchor_weights()[:, index]
            if np.any(source > 0.0):
                kernel = _neutral_kernel(
                    projectile, species, anchor, grid.reference, grid.materials[0], grid.step_mm, yields, width_mm
                )
                left = convolve_planes(source, kernel)
                if species == "neutron":
                    left *= np.array([neutron_kerma_ratio(stuff) for stuff in grid.materials])[grid.stuff]
                deposit += left
    return deposit, emitted


@lru_cache(maxsize=1)
def _anchor_weights() -> NDArray[np.float64]:
    """Return linear weights of projectile energies at which kernels are made, shape (groups, anchors)."""
    return np.stack([np.interp(GROUP_ENERGY_MEV, _ANCHORS_MEV, row) for row in np.eye(len(_ANCHORS_MEV))], axis=1)


@lru_cache(maxsize=256)
def _neutral_kernel(
    projectile: str,
    species: str,
    anchor_mev: float,
    reference: Material,
    stuff: Material,
    step: float,
    yields: str,
    width_mm: float | None,
) -> NDArray[np.float64]:
    """Return the plane kernel of a neutral product for one energy of the projectile."""
    table = reactions(projectile, stuff, yields=yields)
    at = np.array([anchor_mev])
    forward = float(table.at(table.mean_cosine[species], at)[0])
    mean = table.at(table.mean_energy_mev[species], at)
    if species == "neutron":
        rms = table.at(table.rms_energy_mev[species], at)
        top = at + (130.0 if projectile.startswith("pi") else 0.0)
        energies = tuple(float(value) for value in beta_samples(mean, rms, top, samples=12)[0])
        return neutron_plane_kernel(reference, energies, bin_mm=step, mean_cosine=forward, width_mm=width_mm)
    energy = 0.5 * (134.98 + float(mean[0])) if species == "pi0" else max(float(mean[0]), 0.5)
    return photon_plane_kernel(reference, energy, bin_mm=step, mean_cosine=forward, width_mm=width_mm)


@lru_cache(maxsize=64)
def _muon_tables(
    reference: Material, materials: tuple[Material, ...], step: float, name: str, samples: int = 8
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies, stopping, and for each sample the spread and angles by group of pion energy."""
    energies, cosines, _ = muon_from_pion(GROUP_ENERGY_MEV, samples=samples)
    nodes, let = _nodes(name, reference, materials, step, float(np.max(energies)) * 1.001)
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
    energy, let = _nodes(name, reference, materials, step, top_mev)
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
    _march(source, grid, nodes, let, scores, turn, radiated, brems, len(nodes))
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


def electron_rest_mev() -> float:
    """Return the rest energy of an electron, MeV.

    Returns
    -------
    float
        MeV.
    """
    return particle("e-").mass_mev

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
from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import reactions
from dosekit.depths.angles import COSINES, WEIGHTS
from dosekit.depths.broad import (
    convolve_planes,
    neutron_kerma_ratio,
    neutron_plane_kernel,
    photon_plane_kernel,
)
from dosekit.depths.coarse import CoarseGrid
from dosekit.depths.kernels import gather_products, march
from dosekit.depths.tables import GROUP_ENERGY_MEV, beta_samples, product_spread

__all__ = [
    "AHEAD_COSINES",
    "Carried",
    "carry",
    "carry_populations",
    "charged_products",
    "neutral_products",
    "node_tables",
]

AHEAD_COSINES = np.array([0.9, 0.5, -2.0])
"""Directions over these cosines count as near the beam, oblique to it, and all."""

_NO_EVENTS = np.zeros((0, 0))
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
        self.ahead = np.zeros((len(AHEAD_COSINES), 4, cells))

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
        self.ahead += other.ahead


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
    carry_populations(source, grid, nodes_mev, let, scores, np.zeros((0, 0, 0)), np.zeros(0), np.zeros((0, 0)), nodes)
    return scores


def carry_populations(
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
    """Call the compiled loop for particles to which nothing but scattering and radiation happens.

    Parameters
    ----------
    source : ndarray, shape (nodes, cells, 16)
        Particles by node, cell and direction; used up.
    grid : CoarseGrid
        The cells.
    nodes_mev : ndarray, shape (nodes,)
        Node energies, MeV.
    let : ndarray, shape (materials, nodes)
        Stopping power on the way down, keV/um.
    scores : Carried
        Where the scores go.
    turn : ndarray, shape (nodes, 16, 16) or (0, 0, 0)
        Angular diffusion per step, or none.
    radiated : ndarray, shape (nodes,) or (0,)
        Share of the loss that is bremsstrahlung, or none.
    brems : ndarray, shape (cells, 16) or (0, 0)
        Where its energy goes.
    nodes : int
        Number of nodes.
    """
    march(
        source, COSINES, grid.step_mm, nodes_mev, let, grid.stuff, np.zeros((len(grid.materials), 0)),
        np.zeros((0, 0, 3)), _NO_EVENTS, np.zeros((0, 0, 0, 0)), np.zeros((0, 0, 0, 0)), np.zeros((0, 0, 0, 0, 0)),
        turn, radiated, np.zeros(nodes, dtype=np.int64), np.zeros(nodes), scores.deposit, scores.let_weighted,
        scores.stops, np.zeros((3, grid.cells)), np.zeros((grid.cells, 2)), np.zeros((grid.cells, 2)), np.zeros((2,
        grid.cells)), scores.escaped, brems, scores.sideways, AHEAD_COSINES, scores.ahead,
    )  # fmt: skip


@lru_cache(maxsize=256)
def node_tables(
    species: str, reference: Material, materials: tuple[Material, ...], step: float, top_mev: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return node energies up to an energy, and stopping powers on the way down.

    Parameters
    ----------
    species : str
        Particle.
    reference : Material
        Material in which residual range is counted.
    materials : tuple of Material
        Materials of the stack.
    step : float
        Step of residual range, mm.
    top_mev : float
        Highest energy, MeV.

    Returns
    -------
    energy : ndarray, shape (nodes,)
        Node energies, MeV.
    let : ndarray, shape (materials, nodes)
        Stopping power on the way down, keV/um.
    """
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
    energy, let = node_tables(species, reference, materials, step, top)
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

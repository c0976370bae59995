"""What becomes of beam particles after their first nuclear scattering?

Elastic and inelastic collisions leave particles of the same kind with less energy and another direction. All their
generations are carried in one sweep over residual range (:func:`dosekit.depths.kernels.march`).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import CHANNELS, reactions
from dosekit.depths.angles import COSINES
from dosekit.depths.coarse import CoarseGrid
from dosekit.depths.core import Core
from dosekit.depths.kernels import gather_products, march, score_events
from dosekit.depths.products import AHEAD_COSINES, Carried
from dosekit.depths.tables import GROUP_ENERGY_MEV, SpeciesTable, node_spread, species_table

__all__ = ["Scattered", "add_later", "classes_of", "width_of"]


class Scattered:
    """Beam particles after their first nuclear scattering, all generations.

    Parameters
    ----------
    species : str
        Beam particle.
    core : Core
        The beam before.
    grid : CoarseGrid
        The cells.
    top : float
        Highest energy, MeV.
    yields : str
        Yield set.
    nuclear, decays : bool
        Whether reactions and decay happen.

    Attributes
    ----------
    carried : Carried
        Scores.
    recoil : ndarray, shape (cells,)
        Energy of nuclei struck elastically, MeV.
    core_reactions, later_reactions, core_decays, later_decays : ndarray, shape (cells, groups)
        Events of the beam and of scattered particles by energy group.
    counts : ndarray, shape (3, cells)
        Elastic scatterings, reactions and decays of scattered particles.
    forward : ndarray, shape (2, cells)
        Sum of cosines of scattered particles over their reactions and decays.
    """

    def __init__(
        self, species: str, core: Core, grid: CoarseGrid, top: float, yields: str, *, nuclear: bool, decays: bool
    ) -> None:
        groups = len(GROUP_ENERGY_MEV)
        reach = float(range_table(species, grid.reference).range_mm(top))
        nodes = 8 * (int(np.ceil(reach / grid.step_mm / 8.0)) + 1)
        table = species_table(
            species,
            grid.reference,
            grid.materials,
            step_mm=grid.step_mm,
            nodes=nodes,
            yields=yields,
            nuclear=nuclear,
            decays=decays,
        )
        by_node = np.zeros((2, grid.cells, nodes))
        by_group = np.zeros((2, grid.cells, groups))
        score_events(
            core.events,
            core.event_energy,
            grid.cell_of_bin,
            core.event_parts,
            table.energy,
            GROUP_ENERGY_MEV,
            by_node,
            by_group,
        )
        source = np.zeros((nodes, grid.cells, len(COSINES)))
        self.recoil = np.zeros(grid.cells)
        self.carried = Carried(grid.cells)
        self.core_reactions, self.core_decays = by_group[0], by_group[1]
        self.later_reactions, self.later_decays = np.zeros((grid.cells, groups)), np.zeros((grid.cells, groups))
        self.counts = np.zeros((3, grid.cells))
        self.forward = np.zeros((2, grid.cells))
        if nuclear and np.any(by_node > 0.0):
            scattered = np.stack([node_spread(row[:, None], table.energy) for row in table.elastic_to])
            gather_products(by_node[0], grid.stuff, scattered, table.start_elastic, source)
            for spread, angular in zip(table.reemit, table.start_reemit, strict=True):
                gather_products(by_node[1], grid.stuff, spread, angular, source)
            loss = table.energy[None, :] - table.elastic_to
            self.recoil += np.sum(by_node[0] * loss[grid.stuff], axis=1)
            self.recoil += self._run(table, grid, source)

    def _run(self, table: SpeciesTable, grid: CoarseGrid, source: NDArray[np.float64]) -> NDArray[np.float64]:
        """Carry all generations."""
        result: NDArray[np.float64] = march(
            source, COSINES, grid.step_mm, table.energy, table.let, grid.stuff, table.chance, table.parts,
            table.elastic_to, table.reemit, table.turn_elastic, table.turn_reemit, np.zeros((0, 0, 0)), np.zeros(0),
            table.group_low, table.group_weight, self.carried.deposit, self.carried.let_weighted,
            self.carried.stops, self.counts, self.later_reactions, self.later_decays, self.forward,
            self.carried.escaped, np.zeros((0, 0)), self.carried.sideways,
            AHEAD_COSINES, self.carried.ahead,
        )  # fmt: skip
        return result


def add_later(
    channels: dict[str, NDArray[np.float64]], scattered: Scattered, grid: CoarseGrid, species: str, yields: str
) -> None:
    """Add events of scattered particles, split by channel at their energy groups.

    Parameters
    ----------
    channels : dict of str to ndarray, shape (bins,)
        Events of the beam by channel; changed.
    scattered : Scattered
        The scattered particles.
    grid : CoarseGrid
        Their cells.
    species, yields : str
        Beam particle and yield set.
    """
    channels["elastic"] += grid.to_bins(scattered.counts[0])
    channels["decay"] += grid.to_bins(scattered.counts[2])
    split = {name: np.zeros(grid.cells) for name in CHANNELS}
    for index, stuff in enumerate(grid.materials):
        table = reactions(species, stuff, yields=yields)
        rows = {name: table.at(table.per_mm[name], GROUP_ENERGY_MEV) for name in CHANNELS[:3]}
        rows["elastic"] = table.at(table.struck_hydrogen_per_mm, GROUP_ENERGY_MEV)
        total = np.maximum(sum(rows.values()), 1e-30)
        here = grid.stuff == index
        for name, row in rows.items():
            split[name][here] = scattered.later_reactions[here] @ (row / total)
    for name, values in split.items():
        channels[name] += grid.to_bins(values)


def classes_of(part: Carried, grid: CoarseGrid) -> dict[str, tuple[NDArray[np.float64], ...]]:
    """Split scattered particles by direction: near the beam, oblique to it, and wide.

    Parameters
    ----------
    part : Carried
        Scores.
    grid : CoarseGrid
        The cells.

    Returns
    -------
    dict of str to (deposit, stops, sigma, evenness)
        See :attr:`dosekit.depths.solver.Solution.classes`.
    """
    left_given, left_stopped, before = grid.to_bins(part.deposit), grid.to_bins(part.stops), np.zeros((4, grid.cells))
    result: dict[str, tuple[NDArray[np.float64], ...]] = {}
    for name, row in zip(("scattered_near", "scattered_oblique", "scattered_wide"), part.ahead, strict=True):
        own = row - before
        here = np.clip(grid.to_bins(own[0]), 0.0, left_given), np.clip(grid.to_bins(own[1]), 0.0, left_stopped)
        if name == "scattered_wide":
            here = left_given, left_stopped
        left_given, left_stopped, before = left_given - here[0], left_stopped - here[1], row
        width = _spread(own[2], own[0], grid)
        unequal = _spread(own[3], own[0], grid) / np.maximum(width**2, 1e-12)  # both are roots
        result[name] = (*here, width, np.where(width > 0.0, unequal**2, 1.0))
    return result


def width_of(part: Carried, grid: CoarseGrid) -> NDArray[np.float64]:
    """Return the standard deviation of one transverse axis in fine bins.

    Parameters
    ----------
    part : Carried
        Scores.
    grid : CoarseGrid
        The cells.

    Returns
    -------
    ndarray, shape (bins,)
        mm.
    """
    return _spread(part.sideways, part.deposit, grid)


def _spread(sideways: NDArray[np.float64], deposit: NDArray[np.float64], grid: CoarseGrid) -> NDArray[np.float64]:
    """Return the root of the mean variance in fine bins, mm; cells without deposit take their neighbours'."""
    variance = sideways / np.where(deposit > 1e-15, deposit, 1.0)
    known = np.flatnonzero(deposit > 1e-9 * max(float(np.max(deposit)), 1e-300))
    if len(known) == 0:
        return np.zeros(len(grid.place_of_edge) - 1)
    middle = 0.5 * (grid.place_of_edge[1:] + grid.place_of_edge[:-1]) - 0.5
    return np.asarray(np.sqrt(np.maximum(np.interp(middle, known, variance[known]), 0.0)))

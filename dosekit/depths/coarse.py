"""Which coarse grid do scattered particles and products use, and how do its scores come back to fine bins?

The coarse grid counts water-equivalent depth (depth itself where the medium is uniform) in steps of the residual-range
step h, 1/80 of the range. Scores go back through a monotone cubic of their running sum, so that nothing is lost. The
last cell may reach beyond the end of the stack; what lies there has left the medium.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material, material
from dosekit.beams.ranges import range_table

__all__ = ["CoarseGrid", "coarse_grid", "monotone_slopes", "regrid"]

_STEPS_MM = (0.25, 0.5, 0.75, 1.0, 1.25, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0, 15.0, 20.0, 30.0)


@dataclass(frozen=True)
class CoarseGrid:
    """Even cells of water-equivalent depth.

    Attributes
    ----------
    reference : Material
        Material in which residual range and depth are counted.
    materials : tuple of Material
        Different materials of the stack.
    step_mm : float
        Step of residual range, mm of the reference.
    cells : int
        Number of cells.
    stuff : ndarray of int, shape (cells,)
        Material of each cell.
    cell_of_bin : ndarray of int, shape (bins,)
        Cell of each fine bin.
    place_of_edge : ndarray, shape (bins + 1,)
        Fine edges in units of cells.
    factor : ndarray, shape (cells,)
        Length in the reference per length in the cell's material.
    """

    reference: Material
    materials: tuple[Material, ...]
    step_mm: float
    cells: int
    stuff: NDArray[np.int64] = field(repr=False)
    cell_of_bin: NDArray[np.int64] = field(repr=False)
    place_of_edge: NDArray[np.float64] = field(repr=False)
    factor: NDArray[np.float64] = field(repr=False)

    @property
    def nodes(self) -> NDArray[np.float64]:
        """Cell edges in units of cells."""
        return np.arange(self.cells + 1.0)

    def to_bins(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Share out values summed per cell to fine bins.

        Parameters
        ----------
        values : ndarray, shape (cells,)
            Amounts per cell.

        Returns
        -------
        ndarray, shape (bins,)
            Amounts per fine bin; the sum is kept but for what lies beyond the stack.
        """
        if not np.any(values):
            return np.zeros(len(self.place_of_edge) - 1)
        low = np.minimum(self.place_of_edge.astype(np.int64), self.cells - 1)
        t = self.place_of_edge - low
        total = np.concatenate([[0.0], np.cumsum(values)])
        slope = monotone_slopes(values)
        running = total[low] + t * (
            values[low] * t * (3.0 - 2.0 * t) + slope[low] * (1.0 - t) ** 2 - slope[low + 1] * t * (1.0 - t)
        )
        return np.asarray(np.diff(running))

    def to_cells(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sum fine bins into cells, sharing bins between cells by overlap.

        Parameters
        ----------
        values : ndarray, shape (bins,)
            Amounts per fine bin.

        Returns
        -------
        ndarray, shape (cells,)
            Amounts per cell; the sum is kept.
        """
        running = np.concatenate([[0.0], np.cumsum(values)])
        return np.asarray(np.diff(np.interp(self.nodes, self.place_of_edge, running)))


def monotone_slopes(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return slopes at the edges of cells for a monotone cubic through the running sum.

    Parameters
    ----------
    values : ndarray, shape (cells,)
        Amounts per cell of length 1, which are the slopes of chords.

    Returns
    -------
    ndarray, shape (cells + 1,)
        Slopes; harmonic mean of neighbours, 0 where they differ in sign (F.N. Fritsch & J. Butland, SIAM J. Sci. Stat.
        Comput. 5 (1984) 300), a limited three-point formula at the ends.
    """
    before, after = values[:-1], values[1:]
    product = before * after
    inner = np.where(product > 0.0, 2.0 * product / np.where(product > 0.0, before + after, 1.0), 0.0)
    ends = []
    for first, second in ((values[0], values[1]), (values[-1], values[-2])):
        slope = 1.5 * first - 0.5 * second
        if slope * first <= 0.0:
            slope = 0.0
        elif first * second <= 0.0 and abs(slope) > 3.0 * abs(first):
            slope = 3.0 * first
        ends.append(slope)
    return np.concatenate([[ends[0]], inner, [ends[1]]])


def regrid(values: NDArray[np.float64], old: CoarseGrid, new: CoarseGrid) -> NDArray[np.float64]:
    """Sum cells of one grid into those of another over the same stack, sharing by overlap.

    Parameters
    ----------
    values : ndarray, shape (old cells, ...)
        Amounts per cell.
    old, new : CoarseGrid
        The grids.

    Returns
    -------
    ndarray, shape (new cells, ...)
        Amounts per new cell; sums are kept (what the old grid has beyond the new one goes into its last cell).
    """
    running = np.concatenate([np.zeros((1, *values.shape[1:])), np.cumsum(values, axis=0)])
    place = np.interp(new.nodes * new.step_mm, old.nodes * old.step_mm, np.arange(old.cells + 1.0))
    place[-1] = old.cells
    low = np.minimum(place.astype(np.int64), old.cells - 1)
    part = (place - low).reshape(-1, *([1] * (values.ndim - 1)))
    return np.asarray(np.diff(running[low] * (1.0 - part) + running[low + 1] * part, axis=0))


def coarse_grid(
    species: str,
    energy_mev: float,
    *,
    layers: tuple[tuple[Material, float], ...],
    edges_mm: NDArray[np.float64],
    layer: NDArray[np.int64],
    step_mm: float | None = None,
) -> CoarseGrid:
    """Return the coarse grid for a stack.

    Parameters
    ----------
    species : str
        Beam particle.
    energy_mev : float
        Kinetic energy at the surface, MeV.
    layers : tuple of (Material, float)
        Materials and thicknesses, mm.
    edges_mm : ndarray
        Fine edges.
    layer : ndarray of int
        Layer of each fine bin.
    step_mm : float, optional
        Step; by default near 1/80 of the range in the reference.

    Returns
    -------
    CoarseGrid
        The grid.
    """
    materials = tuple(dict.fromkeys(stuff for stuff, _ in layers))
    reference = materials[0] if len(materials) == 1 else material("water")
    reach = float(range_table(species, reference).range_mm(energy_mev))
    if step_mm is None:
        step_mm = min(_STEPS_MM, key=lambda step: abs(np.log(step / (reach / 80.0))))
    probe = 0.5 * energy_mev
    base = range_table(species, reference).stopping_mev_mm(probe)
    ratio = np.array([float(range_table(species, stuff).stopping_mev_mm(probe) / base) for stuff, _ in layers])
    equivalent = np.concatenate([[0.0], np.cumsum(np.diff(edges_mm) * ratio[layer])])
    cells = max(math.ceil(equivalent[-1] / step_mm - 1e-9), 2)
    place = equivalent / step_mm
    border_place = np.cumsum(np.array([thickness for _, thickness in layers]) * ratio) / step_mm
    layer_of_cell = np.minimum(np.searchsorted(border_place, np.arange(cells) + 0.5), len(layers) - 1)
    index = np.array([materials.index(stuff) for stuff, _ in layers])
    middle = 0.5 * (place[1:] + place[:-1])
    return CoarseGrid(
        reference,
        materials,
        float(step_mm),
        cells,
        index[layer_of_cell].astype(np.int64),
        np.clip(middle.astype(np.int64), 0, cells - 1),
        place,
        ratio[layer_of_cell],
    )

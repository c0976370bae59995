"""What the inner loops of a field take, as plain arrays, and how much memory they need.

Rays are indexed [v, u], planes across the beam first. Made by :mod:`dosekit.maps.pencils`, used by
:mod:`dosekit.maps.passes`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.tables import TARGETS, StepTables

__all__ = ["PLANES_AT_ONCE", "Lattice", "Loops", "Spreads", "core_table", "field_bytes"]

PLANES_AT_ONCE = 8
"""Planes that are followed, and then spread, together."""


@dataclass(frozen=True, eq=False)
class Lattice:
    """Nodes on a plane.

    Attributes
    ----------
    u_mm, v_mm : ndarray
        Nodes along u and v, in the plane of the isocentre, mm.
    spacing_mm : float
        Distance between them, mm.
    """

    u_mm: NDArray[np.float64]
    v_mm: NDArray[np.float64]
    spacing_mm: float

    @property
    def nodes(self) -> int:
        """How many there are."""
        return len(self.u_mm) * len(self.v_mm)


@dataclass(frozen=True, eq=False)
class Spreads:
    """How each of several widths is spread on a lattice.

    Attributes
    ----------
    taps_u, taps_v : ndarray
        One-sided taps, shape (kernels, widths, reach + 1).
    radius : ndarray
        How many of them count on each side, shape (kernels, widths).
    corner : ndarray
        Row and column at which the rays, or what is gathered from them, begin.
    target : ndarray
        Which component of the result each width adds to.
    per_area : ndarray
        One over the area of a cell at each plane, 1/mm2.
    """

    taps_u: NDArray[np.float64]
    taps_v: NDArray[np.float64]
    radius: NDArray[np.int64]
    corner: NDArray[np.int64]
    target: NDArray[np.int64]
    per_area: NDArray[np.float64]

    def arrays(self) -> tuple[Any, ...]:
        """Return them in the order that the kernels take."""
        return self.taps_u, self.taps_v, self.radius, self.corner, self.target, self.per_area


@dataclass(frozen=True, eq=False)
class Loops:
    """What the kernels take.

    Attributes
    ----------
    wet, local, slant : ndarray
        Of the rays, see :class:`dosekit.maps.rays.RayTrace`.
    gaps : ndarray
        Distance of each plane from the one before; of the first from the range shifter, mm.
    inverse_bin : float
        Depth rows per mm of water.
    core : ndarray
        Scattering power, survivors, energy and stops of the core, see `core_table`, shape (rows, 4, K).
    alive : ndarray
        Steps that must be followed at each row.
    start : ndarray
        Fermi-Eyges moments of each step behind its range shifter, shape (3, K).
    reference, growth : ndarray
        Variance that is in the fluence already, at the surface, and by how much it grows to each plane.
    rungs : int
        Widths of the ladder.
    squared_rungs_per_mm2 : float
        Turns a variance into squared rungs.
    kernel_of_plane : ndarray
        Which of the kernels of `core_spreads` and `broad_spreads` a plane uses.
    core_spreads, broad_spreads : Spreads
        How the core and the broad parts are spread.
    broad : ndarray
        Energy or stops of each broad part, shape (4 rows, K, parts).
    parts_at : ndarray
        How many parts count at each row, up to the last that is not zero; the widest come first.
    column, share_u, row, share_v : ndarray
        Coarse node below each ray and the share of the next.
    """

    wet: NDArray[np.float64]
    local: NDArray[np.float64]
    slant: NDArray[np.float64]
    gaps: NDArray[np.float64]
    inverse_bin: float
    core: NDArray[np.float64]
    alive: NDArray[np.int64]
    start: NDArray[np.float64]
    reference: NDArray[np.float64]
    growth: NDArray[np.float64]
    rungs: int
    squared_rungs_per_mm2: float
    kernel_of_plane: NDArray[np.int64]
    core_spreads: Spreads
    broad_spreads: Spreads
    broad: NDArray[np.float64]
    parts_at: NDArray[np.int64]
    column: NDArray[np.int64]
    share_u: NDArray[np.float64]
    row: NDArray[np.int64]
    share_v: NDArray[np.float64]

    @property
    def coarse_size(self) -> tuple[int, int]:
        """Coarse rows and columns among which the rays are shared out."""
        return int(self.row[-1] - self.row[0]) + 2, int(self.column[-1] - self.column[0]) + 2

    @cached_property
    def broad_by_part(self) -> NDArray[np.float64]:
        """`broad` with its last axes exchanged, for the transpose."""
        return np.ascontiguousarray(self.broad.transpose(0, 2, 1))

    def steps(self, state: NDArray[np.float64]) -> tuple[Any, ...]:
        """Return rays and steps in the order that the kernels take, the running moments among them."""
        return (
            self.wet, self.local, self.slant, self.gaps, self.inverse_bin, self.core, self.alive, state,
            self.reference, self.growth, self.squared_rungs_per_mm2,
        )  # fmt: skip

    def moments(self) -> NDArray[np.float64]:
        """Return the moments of every ray and step at the start, shape (v, u, 3, K)."""
        state = np.empty((*self.slant.shape, *self.start.shape))
        state[:] = self.start
        return state

    def room(self) -> NDArray[np.float64]:
        """Return room for what a block of planes spreads, shape (planes, v, rungs, 2 u)."""
        rows, columns = self.slant.shape
        return np.zeros((PLANES_AT_ONCE, rows, self.rungs, 2 * columns))


def core_table(tables: StepTables) -> NDArray[np.float64]:
    """Return scattering power, survivors, energy and stops of the core beside each other.

    Parameters
    ----------
    tables : StepTables
        Depth tables.

    Returns
    -------
    ndarray
        Shape (rows, 4, K).
    """
    return np.ascontiguousarray(
        np.concatenate([tables.power[:, None], tables.survivors[:, None], tables.narrow], axis=1)
    )


def field_bytes(
    *,
    planes: int,
    rays: int,
    nodes: int,
    coarse_nodes: int,
    steps: int,
    parts: int,
    rungs: int,
    gathered: int,
    threads: int = 1,
) -> float:
    """Return the memory one field takes while it is folded.

    Parameters
    ----------
    planes, rays, nodes, coarse_nodes, steps, parts, rungs, gathered, threads : int
        Planes across the beam, rays with fluence, nodes of a fine and a coarse plane, range steps, parts of the broad
        dose, widths of the ladder, rows of rays times the coarse columns they are shared out among, threads.

    Returns
    -------
    float
        Bytes: 8 [2 planes rays + 4 rays steps + 2 P (rungs rays + parts gathered) + planes (2 nodes + 6 coarse)
        + T (4 nodes + 7 coarse)], with P planes at once on T threads.
    """
    return 8.0 * (
        2.0 * planes * rays
        + 4.0 * rays * steps
        + 2.0 * PLANES_AT_ONCE * (rungs * rays + parts * gathered)
        + planes * (2.0 * nodes + len(TARGETS) * coarse_nodes)
        + threads * (4.0 * nodes + (len(TARGETS) + 1.0) * coarse_nodes)
    )

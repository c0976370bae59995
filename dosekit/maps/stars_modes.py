"""On which lattice does each exponential of a star component travel, and along how many directions?

Light charged products: the first `dosekit.capture.exponentials.SMOOTH_MODES` exponentials sum to a kernel without a
spike at the stop and run on blocks of about 4 mm; the others, which make up for the rest near the stop, run on the
voxels and are gone within centimetres. The sum is the kernel; the split is the same for every source, so that all
stays linear with an exact transpose. Neutrons and photons run on blocks of about 8 mm, with directions that widen.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.capture.exponentials import RATES_PER_MM, SMOOTH_MODES
from dosekit.maps.cones import Cones
from dosekit.maps.stars_coarse import Blocks, block_factors

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["LIGHT_BLOCK_MM", "NEAR_DIRECTIONS", "Travel"]

LIGHT_BLOCK_MM = 4.0
"""Size of the blocks for the smooth part of light products, mm."""

NEAR_DIRECTIONS = 50
"""Most directions for the part of light products that ends near the stop (where voxels blur more than cones do)."""


@dataclass(frozen=True)
class Travel:
    """How one component travels through a volume.

    Attributes
    ----------
    component : str
        Star component.
    grid : VoxelGrid
        The volume.
    scale : ndarray [z, y, x]
        Scaled distance per mm of path.
    directions : int
        Number of directions.
    block_mm : float
        Size of blocks for neutrons and photons, mm; 0 puts everything on the voxels.
    bias : callable, optional
        Emission against direction (`Cones`).
    """

    component: str
    grid: VoxelGrid
    scale: NDArray[Any]
    directions: int
    block_mm: float
    bias: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None = None

    def carry(
        self, stops: NDArray[np.float64], material: NDArray[Any], table: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Return the energy left in each voxel.

        Parameters
        ----------
        stops : ndarray [z, y, x]
            Stops per voxel.
        material : ndarray [z, y, x]
            Row of ``table`` for each voxel.
        table : ndarray, shape (n, m)
            Energy per stop in each mode, MeV.

        Returns
        -------
        ndarray [z, y, x]
            MeV.
        """
        total: NDArray[np.float64] | None = None
        for modes, factors, widening, count in self._parts():
            rates, energies = np.array(RATES_PER_MM[self.component])[modes], table[:, modes]
            if factors == (1, 1, 1) and not widening:
                cones = Cones(self.grid.spacing_mm, count, self.bias)
                left = cones.carry(self.scale, rates, stops=stops, material=material, energies_mev=energies)
            else:
                blocks = Blocks(self.grid.shape, factors, self.grid.density_g_cm3)
                sources = blocks.sources(stops, material, energies)
                cones = Cones(_coarse_spacing(self.grid, factors), count, self.bias)
                scale = blocks.averaged(self.scale)
                held = (
                    cones.carry_widening(scale, rates, sources)
                    if widening
                    else cones.carry(scale, rates, sources_mev=sources)
                )
                left = blocks.spread(held)
            if total is None:
                total = left
            else:
                total += left
        assert total is not None
        return total

    def gather(
        self, wanted: NDArray[np.float64], material: NDArray[Any], table: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Apply the exact transpose of `carry`.

        Parameters
        ----------
        wanted : ndarray [z, y, x]
            What 1 MeV in each voxel counts.
        material, table
            As in `carry`.

        Returns
        -------
        ndarray [z, y, x]
            What a stop in each voxel counts.
        """
        total = np.zeros(self.grid.shape)
        for modes, factors, widening, count in self._parts():
            rates, energies = np.array(RATES_PER_MM[self.component])[modes], table[:, modes]
            if factors == (1, 1, 1) and not widening:
                cones = Cones(self.grid.spacing_mm, count, self.bias)
                total += cones.gather(self.scale, rates, wanted, material=material, energies_mev=energies)
                continue
            blocks = Blocks(self.grid.shape, factors, self.grid.density_g_cm3)
            cones = Cones(_coarse_spacing(self.grid, factors), count, self.bias)
            scale, asked = blocks.averaged(self.scale), blocks.spread_transposed(wanted)
            per_mode = cones.gather_widening(scale, rates, asked) if widening else cones.gather(scale, rates, asked)
            for mode in range(len(rates)):
                total += blocks.repeated(per_mode[mode]) * energies[:, mode][material]
        return total

    def _parts(self) -> list[tuple[slice, tuple[int, int, int], bool, int]]:
        """Return modes, voxels per block, whether directions widen, and their number."""
        whole, spacing, count = (1, 1, 1), self.grid.spacing_mm, self.directions
        if self.component not in ("star_light", "star_heavy"):
            return [(slice(None), block_factors(spacing, self.block_mm) if self.block_mm > 0.0 else whole, True, count)]
        factors = block_factors(spacing, LIGHT_BLOCK_MM) if self.block_mm > 0.0 else whole
        if factors == whole:
            return [(slice(None), whole, False, count)]
        near = min(count, NEAR_DIRECTIONS)
        return [(slice(0, SMOOTH_MODES), factors, False, count), (slice(SMOOTH_MODES, None), whole, False, near)]


def _coarse_spacing(grid: VoxelGrid, factors: tuple[int, int, int]) -> tuple[float, float, float]:
    """Return the spacing of blocks (x, y, z)."""
    x, y, z = (step * factor for step, factor in zip(grid.spacing_mm, reversed(factors), strict=True))
    return x, y, z

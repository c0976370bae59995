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
    scale_per_density : ndarray, shape (n,)
        Scaled distance per mm of path for each material at 1 g/cm3.
    directions : int
        Number of directions.
    block_mm : float
        Size of blocks for neutrons and photons, mm; 0 puts everything on the voxels.
    bias : callable, optional
        Emission against direction (`Cones`).
    """

    component: str
    grid: VoxelGrid
    scale_per_density: NDArray[np.float64]
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
        for modes, factors, widening, count in self._parts():  # blocks come first, so that voxels add to them
            rates, energies = np.array(RATES_PER_MM[self.component])[modes], table[:, modes]
            if factors == (1, 1, 1) and not widening:
                cones = Cones(self.grid.spacing_mm, count, self.bias)
                total = cones.carry(
                    self._scale(), rates, stops=stops, material=material, energies_mev=energies, total=total
                )
                continue
            blocks = Blocks(self.grid.shape, factors, self.grid.density_g_cm3)
            sources = blocks.sources(stops, material, energies)
            cones = Cones(_coarse_spacing(self.grid, factors), count, self.bias)
            scale = self._block_scale(blocks)
            if widening:
                total = blocks.spread(cones.carry_widening(scale, rates, sources))
            else:
                total = blocks.spread(cones.carry(scale, rates, sources_mev=sources))
        assert total is not None
        return total

    def gather(
        self,
        wanted: NDArray[np.float64],
        material: NDArray[Any],
        table: NDArray[np.float64],
        total: NDArray[np.float64],
    ) -> None:
        """Apply the exact transpose of `carry`.

        Parameters
        ----------
        wanted : ndarray [z, y, x]
            What 1 MeV in each voxel counts.
        material, table
            As in `carry`.
        total : ndarray [z, y, x]
            What a stop in each voxel counts is added here.
        """
        for modes, factors, widening, count in self._parts():
            rates, energies = np.array(RATES_PER_MM[self.component])[modes], table[:, modes]
            if factors == (1, 1, 1) and not widening:
                cones = Cones(self.grid.spacing_mm, count, self.bias)
                cones.gather(self._scale(), rates, wanted, material=material, energies_mev=energies, total=total)
                continue
            blocks = Blocks(self.grid.shape, factors, self.grid.density_g_cm3)
            cones = Cones(_coarse_spacing(self.grid, factors), count, self.bias)
            scale, asked = self._block_scale(blocks), blocks.spread_transposed(wanted)
            per_mode = cones.gather_widening(scale, rates, asked) if widening else cones.gather(scale, rates, asked)
            blocks.sources_transposed(per_mode, material, energies, total)

    def _scale(self) -> NDArray[np.float32]:
        """Return scaled distance per mm of path in each voxel."""
        scale = self.scale_per_density.astype(np.float32)[self.grid.material_index]
        scale *= self.grid.density_g_cm3
        return scale

    def _block_scale(self, blocks: Blocks) -> NDArray[np.float32]:
        """Return scaled distance per mm of path, averaged over blocks."""
        per_density = self.scale_per_density.astype(np.float32).astype(np.float64)
        summed = blocks.sources(self.grid.density_g_cm3, self.grid.material_index, per_density[:, None])[0]
        averaged: NDArray[np.float32] = (summed / float(np.prod(blocks.factors))).astype(np.float32)
        return averaged

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

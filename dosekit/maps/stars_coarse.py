"""Neutrons and photons vary slowly: how are they carried on a coarser lattice without losing energy?

Sources are summed over blocks of voxels, scales averaged by volume. What comes back per block is spread over its
voxels as a dose that is linear between block centres, times each voxel's mass, and then corrected by one constant
dose per block so that the block keeps its energy to the last digit. Both ways are linear; both transposes are
exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.cones_layouts import read
from dosekit.maps.cones_threads import Threads

__all__ = ["Blocks", "block_factors"]

_ALIKE = np.zeros((0, 0, 0), np.uint16)


def block_factors(spacing_mm: tuple[float, float, float], target_mm: float) -> tuple[int, int, int]:
    """Return how many voxels (z, y, x) make a block of about the wanted size.

    Parameters
    ----------
    spacing_mm : tuple of float
        Voxel spacing (x, y, z), mm.
    target_mm : float
        Wanted size of a block, mm; never exceeded by more than a voxel is.

    Returns
    -------
    tuple of int
        Factors (z, y, x), at least 1.

    Examples
    --------
    >>> block_factors((2.0, 2.0, 4.0), 6.0)
    (1, 3, 3)
    """
    fz, fy, fx = (max(1, int(target_mm / step + 1e-6)) for step in reversed(spacing_mm))
    return fz, fy, fx


@dataclass(frozen=True)
class Blocks:
    """Blocks of voxels.

    Attributes
    ----------
    shape : tuple of int
        Voxels (z, y, x).
    factors : tuple of int
        Voxels per block (z, y, x).
    mass : ndarray [z, y, x]
        Mass of each voxel, any unit.
    """

    shape: tuple[int, int, int]
    factors: tuple[int, int, int]
    mass: NDArray[Any]

    @property
    def coarse_shape(self) -> tuple[int, int, int]:
        """Blocks (z, y, x)."""
        z, y, x = (-(-n // f) for n, f in zip(self.shape, self.factors, strict=True))
        return z, y, x

    def summed(self, values: NDArray[Any]) -> NDArray[np.float64]:
        """Return the sums over blocks of an array [z, y, x]."""
        total: NDArray[np.float64] = self.sources(values, _ALIKE, np.ones((1, 1)))[0]
        return total

    def spread(self, energy: NDArray[Any]) -> NDArray[np.float64]:
        """Return energy per voxel from energy per block, smooth in dose and exact in every block."""
        from dosekit.maps.kernels_stars_coarse import spread_blocks

        energy = np.ascontiguousarray(energy, dtype=np.float64)
        out = np.empty(self.shape)
        with Threads() as pool:
            low, part = self._between
            dose = energy / self._block_mass
            arguments = (energy, dose, self._block_mass, self.mass, *self.factors, low, part, out)
            pool.run(spread_blocks, arguments, self.coarse_shape[0])
        return out

    def sources(self, stops: NDArray[Any], material: NDArray[Any], table: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return stops times their material's energies per mode, summed over blocks, shape (m, z, y, x)."""
        out = np.zeros((table.shape[1], *self.coarse_shape))
        with Threads() as pool:
            arguments = (stops, material, np.ascontiguousarray(table), self.factors, out)
            pool.run(_planes, arguments, self.coarse_shape[0])
        return out

    def sources_transposed(
        self, per_mode: NDArray[Any], material: NDArray[Any], table: NDArray[np.float64], total: NDArray[np.float64]
    ) -> None:
        """Add to ``total`` what a stop in each voxel counts: the transpose of `sources`."""
        with Threads() as pool:
            pool.run(_worth_of_planes, (per_mode, material, table.T, self.factors, total), self.shape[0])

    def spread_transposed(self, wanted: NDArray[Any]) -> NDArray[np.float64]:
        """Apply the transpose of `spread`."""
        weighted = np.zeros(self.coarse_shape)
        with Threads() as pool:
            pool.run(_weigh, (wanted, self.mass, self.factors, weighted), self.coarse_shape[0])
            per_block = weighted / self._block_mass
            z, y, x = self._matrices
            planes = np.empty((self.shape[0], *self.coarse_shape[1:]))
            pool.run(_gather_planes, (wanted, self.mass, per_block, self.factors, y, x, planes), self.shape[0])
        return np.asarray(per_block + np.tensordot(z.T, planes, axes=(1, 0)) / self._block_mass)

    @cached_property
    def _block_mass(self) -> NDArray[np.float64]:
        """Mass of each block, never 0."""
        return np.maximum(self.summed(self.mass), 1e-12)

    @cached_property
    def _between(self) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Return for the voxels of each axis (z, y, x) the block centre before them and the weight of the next."""
        low = np.zeros((3, max(self.shape)), dtype=np.int64)
        part = np.zeros(low.shape)
        for axis, (size, factor, blocks) in enumerate(zip(self.shape, self.factors, self.coarse_shape, strict=True)):
            place = np.clip((np.arange(size) + 0.5) / factor - 0.5, 0.0, blocks - 1.0)
            low[axis, :size] = np.minimum(place.astype(int), max(blocks - 2, 0))
            part[axis, :size] = place - low[axis, :size]
        return low, part

    @cached_property
    def _matrices(self) -> list[NDArray[np.float64]]:
        """Linear interpolation from block centres to voxel centres, one matrix per axis."""
        matrices = []
        for low, part, size, blocks in zip(*self._between, self.shape, self.coarse_shape, strict=True):
            matrix = np.zeros((size, blocks))
            matrix[np.arange(size), low[:size]] += 1.0 - part[:size]
            matrix[np.arange(size), np.minimum(low[:size] + 1, blocks - 1)] += part[:size]
            matrices.append(matrix)
        return matrices


def _planes(
    stops: NDArray[Any],
    material: NDArray[Any],
    table: NDArray[np.float64],
    factors: tuple[int, int, int],
    out: NDArray[np.float64],
    begin: int,
    end: int,
) -> None:
    """Sum over some planes of blocks, brought to one type a few planes at a time."""
    from dosekit.maps.kernels_stars_coarse import block_sources

    for block in range(begin, min(end, out.shape[1])):
        part = slice(block * factors[0], (block + 1) * factors[0])
        values = np.require(stops[part], np.float64, ["C", "W"])
        if values.any():
            block_sources(values, read(material[part]), table, *factors, out, block, block + 1)


def _repeated(plane: NDArray[Any], factors: tuple[int, int, int], shape: tuple[int, ...]) -> NDArray[Any]:
    """Return a plane of blocks at the voxels of one plane."""
    _, fy, fx = factors
    return np.repeat(np.repeat(plane, fy, axis=-2), fx, axis=-1)[..., : shape[0], : shape[1]]


def _worth_of_planes(
    per_mode: NDArray[Any],
    material: NDArray[Any],
    by_mode: NDArray[Any],
    factors: tuple[int, int, int],
    total: NDArray[np.float64],
    begin: int,
    end: int,
) -> None:
    """Add what stops count, plane by plane."""
    for z in range(begin, end):
        for values, energies in zip(per_mode[:, z // factors[0]], by_mode, strict=True):
            total[z] += _repeated(values, factors, total[z].shape) * energies[material[z]]


def _weigh(
    wanted: NDArray[Any],
    mass: NDArray[Any],
    factors: tuple[int, int, int],
    weighted: NDArray[np.float64],
    begin: int,
    end: int,
) -> None:
    """Sum wanted times mass over some planes of blocks."""
    fz, fy, fx = factors
    for block in range(begin, min(end, len(weighted))):
        part = slice(block * fz, (block + 1) * fz)
        plane = np.einsum("zyx,zyx->yx", wanted[part], mass[part], dtype=np.float64)
        rows = np.add.reduceat(plane, np.arange(0, plane.shape[0], fy), axis=0)
        weighted[block] = np.add.reduceat(rows, np.arange(0, plane.shape[1], fx), axis=1)


def _gather_planes(
    wanted: NDArray[Any],
    mass: NDArray[Any],
    per_block: NDArray[np.float64],
    factors: tuple[int, int, int],
    along_y: NDArray[np.float64],
    along_x: NDArray[np.float64],
    planes: NDArray[np.float64],
    begin: int,
    end: int,
) -> None:
    """Apply the transpose of interpolation within some planes, to what blocks do not explain."""
    for z in range(begin, end):
        rest = (wanted[z] - _repeated(per_block[z // factors[0]], factors, wanted[z].shape)) * mass[z]
        planes[z] = along_y.T @ (rest @ along_x)

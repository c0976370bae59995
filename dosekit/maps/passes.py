"""One field made ready to be folded: its weights to maps, maps to voxels, and both ways back.

For ray r, plane j and range step k with fluence phi (particles on the ray), water-equivalent path WET and slant s:

    source(r, j, k)   = phi s q_k(WET)                                    energy or stops per mm of water
    variance(r, j, k) = A2(r, j, k) - A2(surface, k) + optics(j)          Fermi-Eyges (Eyges 1948) along the ray
    map(j)            = sum over rays and steps of source * Gaussian(variance) / area of a ray
    dose in a voxel   = map interpolated at its points * its own stopping power / density

The spot's size where it enters is in phi; what the beam spreads after that is in the variance. Particles that scatter
from one ray to another lose energy by what lies where they arrive, so the voxel's own stopping power counts; in a
plane of one material this keeps the energy exactly, beside an edge it keeps the particles.

All steps of a ray are added up before anything is spread, and all rays of one width are spread together. With R rays
in n rows, J planes, K steps, P broad parts, G widths that reach h nodes each way, a lattice of c columns and V voxels,
a fold costs about

    J [ R K (P + 25) + 4 G (2h + 1) n c ] + 30 V        multiply-adds

whatever the number of spots.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.cones_threads import Threads
from dosekit.maps.fields import PARTICLES_PER_UNIT, Field
from dosekit.maps.loops import PLANES_AT_ONCE, Lattice, Loops
from dosekit.maps.rays import Matter, Planes, RayTrace
from dosekit.maps.sampling import Runs, box_of_voxels, places_of_points, slabs_apart
from dosekit.maps.straight import runs_straight, straight_reading
from dosekit.maps.tables import TARGETS, StepTables

__all__ = ["FieldPencils"]


@dataclass(frozen=True, eq=False)
class FieldPencils:
    """A field on its own lattices, ready for its weights.

    Attributes
    ----------
    field : Field
        The field.
    matter : Matter
        The volume.
    planes : Planes
        Rays and planes.
    rays : RayTrace
        Matter along the rays that carry fluence.
    tables : StepTables
        Depth tables of the range steps.
    surface_mm : float
        Where the first ray enters something, along w, mm.
    misses : bool
        Whether no ray meets anything.
    fine, coarse : Lattice
        Nodes on which the core and the broad parts are formed.
    optics_variance_mm2 : ndarray
        Variance that size and divergence of the beam add after the surface, shape (2, planes), mm2.
    width_steps_per_mm : float
        Rungs of the ladder of widths per mm of sigma.
    profiles : tuple of ndarray
        First ray of each spot along u and v, and what it gives to each ray from there.
    loops : Loops
        Everything else the kernels take.
    """

    field: Field
    matter: Matter
    planes: Planes
    rays: RayTrace
    tables: StepTables
    surface_mm: float
    misses: bool
    fine: Lattice
    coarse: Lattice
    optics_variance_mm2: NDArray[np.float64]
    width_steps_per_mm: float
    profiles: tuple[NDArray[Any], ...]
    loops: Loops

    def fluence(self, weights: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return particles on each ray.

        Parameters
        ----------
        weights : ndarray
            Units of 1e9 particles, spots by steps.

        Returns
        -------
        ndarray
            Particles, shape (v, u, K).
        """
        from dosekit.maps import kernels_steps

        out = np.zeros((*self.rays.slant.shape, self.field.shape[1]))
        particles = np.ascontiguousarray(weights, dtype=np.float64) * PARTICLES_PER_UNIT
        with Threads() as threads:
            threads.run(kernels_steps.lay_spots, (particles, *self.profiles, out), len(out))
        return out

    def maps(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the field's dose on its own lattices.

        Parameters
        ----------
        weights : ndarray
            Units of 1e9 particles, spots by steps.

        Returns
        -------
        fine : ndarray
            Core energy (MeV) and stops per mm of water and mm2, shape (w, v, u, 2).
        coarse : ndarray
            The broad components, shape (w, v, u, components).
        """
        from dosekit.maps import kernels_spread

        work = self.loops
        fine, coarse = self._empty_maps()
        lines, across = work.coarse_size
        shared = np.empty((PLANES_AT_ONCE, lines, work.broad.shape[2], across))
        some = np.empty(shared.shape[:3], dtype=np.uint8)
        core, broad = work.core_spreads.arrays(), work.broad_spreads.arrays()
        with Threads() as threads:
            for first, last, (source, used, gathered) in self._blocks(threads, self.fluence(weights)):
                count, which = last - first, work.kernel_of_plane
                threads.run(kernels_spread.spread_planes, (source, used, which, *core, 2, first, fine), count)
                threads.run(kernels_spread.share_planes, (gathered, work.row, work.share_v, shared, some), count)
                threads.run(kernels_spread.spread_planes, (shared, some, which, *broad, 1, first, coarse), count)
        return fine, coarse

    def weights_of(self, fine: NDArray[np.float64], coarse: NDArray[np.float64]) -> NDArray[np.float64]:
        """Apply the transpose of `maps`.

        Parameters
        ----------
        fine, coarse : ndarray
            Maps as `maps` returns them.

        Returns
        -------
        ndarray
            One value for each spot and step.
        """
        from dosekit.maps import kernels_spread, kernels_steps

        work, planes = self.loops, len(self.planes.w_mm)
        spots, steps = self.field.shape
        rows, columns = self.rays.slant.shape
        used = self._used
        fluence = np.zeros((rows, columns, steps))
        state, source = work.moments(), work.room()
        lines, across = work.coarse_size
        shared = np.empty((PLANES_AT_ONCE, lines, work.broad.shape[2], across))
        every = np.ones(shared.shape[:3], dtype=np.uint8)
        core, broad = work.core_spreads.arrays(), work.broad_spreads.arrays()
        places = (work.column, work.share_u, work.row, work.share_v)
        weights = np.zeros((spots, steps))
        with Threads() as threads:
            for first in range(0, planes, PLANES_AT_ONCE):
                last = min(first + PLANES_AT_ONCE, planes)
                count, which = last - first, work.kernel_of_plane
                block = (source, used[first:last], which, *core, 2, first, fine)
                threads.run(kernels_spread.gather_planes, block, count)
                threads.run(kernels_spread.gather_planes, (shared, every, which, *broad, 1, first, coarse), count)
                read = (*work.steps(state), work.broad_by_part, *places, source, shared, fluence, first, last)
                threads.run(kernels_steps.read_rows, read, rows)
            threads.run(kernels_steps.lay_spots_transposed, (fluence, *self.profiles, weights), spots)
        return weights * PARTICLES_PER_UNIT

    def _blocks(self, threads: Threads, fluence: NDArray[np.float64]) -> Any:
        """Follow all rays, a block of planes after the other; yield its bounds and what it is to spread."""
        from dosekit.maps import kernels_steps

        work, planes = self.loops, len(self.planes.w_mm)
        rows = len(self.rays.v_mm)
        state, source = work.moments(), work.room()
        used = np.zeros((PLANES_AT_ONCE, rows, work.rungs), dtype=np.uint8)
        gathered = np.empty((PLANES_AT_ONCE, rows, work.coarse_size[1], work.broad.shape[2]))
        block = (source, used, gathered)
        for first in range(0, planes, PLANES_AT_ONCE):
            last = min(first + PLANES_AT_ONCE, planes)
            shared = (
                fluence,
                *work.steps(state),
                work.broad,
                work.parts_at,
                work.column,
                work.share_u,
                *block,
                first,
                last,
            )
            threads.run(kernels_steps.follow_rows, shared, rows)
            yield first, last, block

    @cached_property
    def _used(self) -> NDArray[np.uint8]:
        """Which widths any particle on a row of rays uses at a plane, shape (planes, v, rungs)."""
        planes, (rows, columns) = len(self.planes.w_mm), self.rays.slant.shape
        out = np.zeros((planes, rows, self.loops.rungs), dtype=np.uint8)
        with Threads() as threads:
            for first, last, (_, used, _) in self._blocks(threads, np.ones((rows, columns, self.field.shape[1]))):
                out[first:last] = used[: last - first]
        return out

    @cached_property
    def _present(self) -> NDArray[np.bool_]:
        """Which of `TARGETS` the field makes at all."""
        given = self.loops.broad.any(axis=(0, 1))
        targets = np.arange(len(TARGETS))
        fine = np.isin(targets, [TARGETS.index("primary"), TARGETS.index("stops")])
        return np.asarray(fine | np.isin(targets, self.loops.broad_spreads.target[given]))

    def deposit(
        self,
        fine: NDArray[np.float64],
        coarse: NDArray[np.float64],
        voxels: NDArray[np.int64] | Runs,
        columns: NDArray[np.int64] | None = None,
        *,
        factor: NDArray[np.float64],
        rows: NDArray[np.int64],
        out: NDArray[Any],
    ) -> None:
        """Add maps to voxels.

        Parameters
        ----------
        fine, coarse : ndarray
            The maps.
        voxels : ndarray or Runs
            Flat indices of voxels, or runs of them.
        columns : ndarray, optional
            Column of `out` for each voxel of a list.
        factor : ndarray
            Factor of each row of `out` and material; negative: its size times the voxel's stopping power.
        rows : ndarray
            Row of `out` for each of `TARGETS`, or -1.
        out : ndarray
            Where to add, shape (rows, columns).
        """
        runs = self._runs(voxels, columns)
        rows = np.where(self._present, rows, -1)
        if runs_straight(self.planes):
            from dosekit.maps import kernels_straight

            core = rows[[TARGETS.index("primary"), TARGETS.index("stops")]]
            with Threads() as threads:
                for lattice, array, wanted in ((self.fine, fine, core), (self.coarse, coarse, rows)):
                    reading = straight_reading(self.matter, self.planes, self.fine, lattice, array)
                    shared: tuple[Any, ...] = (
                        *self._of(runs), array.reshape(-1), *reading, *self._matter(), wanted, factor, out,
                    )  # fmt: skip
                    threads.run(kernels_straight.deposit_straight, shared, len(runs.first))
            return
        from dosekit.maps import kernels_voxels

        lit = [np.array([plane.any() for plane in maps]) for maps in (fine, coarse)]
        shared = (
            *self._of(runs), *places_of_points(self.matter, self.planes, self.fine),
            _corner(self.fine), fine, lit[0], _corner(self.coarse), coarse, lit[1], *self._matter(), rows, factor, out,
        )  # fmt: skip
        with Threads() as threads:
            threads.run(kernels_voxels.deposit, shared, len(runs.first))

    def gather(
        self,
        values: NDArray[Any],
        voxels: NDArray[np.int64] | Runs,
        columns: NDArray[np.int64] | None = None,
        *,
        factor: NDArray[np.float64],
        rows: NDArray[np.int64],
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Apply the transpose of `deposit`.

        Parameters
        ----------
        values : ndarray
            Values in voxels, shape (rows, columns).
        voxels, columns, factor, rows : ndarray
            As for `deposit`; the voxels must be in rising order.

        Returns
        -------
        fine, coarse : ndarray
            The maps.
        """
        from dosekit.maps import kernels_voxels

        runs = self._runs(voxels, columns)
        fine, coarse = self._empty_maps()
        slabs = slabs_apart(runs, self.matter, self.planes, self.fine, self.coarse)
        shared = (
            slabs, *self._of(runs), *places_of_points(self.matter, self.planes, self.fine),
            _corner(self.fine), fine, _corner(self.coarse), coarse, *self._matter(), rows, factor, values,
        )  # fmt: skip
        with Threads() as threads:
            for colour in range(2):
                threads.run(kernels_voxels.deposit_transposed, (*shared, colour), (len(slabs) - colour) // 2)
        return fine, coarse

    def reach(self) -> Runs:
        """Return the voxels that the field's lattices can reach; their columns are their flat indices.

        Returns
        -------
        Runs
            Rows of a box of voxels.
        """
        return Runs.of_box(*box_of_voxels(self.matter, self.planes, self.fine, self.coarse), self.matter.shape)

    def voxels(self) -> NDArray[np.int64]:
        """Return the same voxels as a list.

        Returns
        -------
        ndarray
            Flat indices in rising order.
        """
        runs = self.reach()
        size = int(runs.count[0]) if len(runs.count) else 0
        return (runs.first[:, None] + np.arange(size, dtype=np.int64)).reshape(-1)

    def _runs(self, voxels: NDArray[np.int64] | Runs, columns: NDArray[np.int64] | None) -> Runs:
        """Return voxels as runs."""
        if isinstance(voxels, Runs):
            return voxels
        return Runs.of_voxels(voxels, voxels if columns is None else columns, self.matter.shape)

    def _of(self, runs: Runs) -> tuple[NDArray[np.int64], ...]:
        """Return runs as the kernels take them."""
        return runs.first, runs.column, runs.count, runs.places(self.matter.shape)

    def _matter(self) -> tuple[NDArray[Any], NDArray[Any]]:
        """Return material and stopping power of each voxel, flat."""
        return self.matter.index.reshape(-1), self.matter.rsp.reshape(-1)

    def _empty_maps(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return maps of nothing."""
        planes = len(self.planes.w_mm)
        fine = np.zeros((planes, len(self.fine.v_mm), len(self.fine.u_mm), 2))
        coarse = np.zeros((planes, len(self.coarse.v_mm), len(self.coarse.u_mm), len(TARGETS)))
        return fine, coarse


def _corner(lattice: Lattice) -> NDArray[np.float64]:
    """Return where a lattice begins along u and v (mm), and its nodes per mm."""
    return np.array([lattice.u_mm[0], lattice.v_mm[0], 1.0 / lattice.spacing_mm])

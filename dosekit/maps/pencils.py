"""One field made ready to be folded: rays, tables, spreads and the lattices its dose is formed on.

For ray r, plane j and range step k with fluence phi (particles on the ray), water-equivalent path WET and slant s:

    source(r, j, k)   = phi s q_k(WET)                                    energy or stops per mm of water
    variance(r, j, k) = A2(r, j, k) - A2(surface, k) + optics(j)          Fermi-Eyges (Eyges 1948) along the ray
    map(j)            = sum over rays and steps of source * Gaussian(variance) / area of a ray
    dose in a voxel   = map interpolated at its points * its own stopping power / density

The spot's size where it enters is in phi; what the beam spreads after that is in the variance. Particles that scatter
from one ray to another lose energy by what lies where they arrive, so the voxel's own stopping power counts; in a
plane of one material this keeps the energy exactly, beside an edge it keeps the particles.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import GeometryWarning
from dosekit.grids.memory import check_memory
from dosekit.maps.cones_threads import Threads
from dosekit.maps.fields import PARTICLES_PER_UNIT, Field
from dosekit.maps.rays import Matter, Planes, RayTrace, plane_lattice, trace
from dosekit.maps.tables import TARGETS, StepTables, step_tables
from dosekit.maps.widths import REACH_SIGMAS, gaussian_taps, spot_profiles, width_ladder

if TYPE_CHECKING:
    from dosekit.depths.library import DepthLibrary

__all__ = ["FieldPencils", "field_bytes", "field_pencils"]

BODY_RSP = 0.05
"""Relative stopping power above which a ray counts as having met something."""

PLANES_AT_ONCE = 8
_COARSEST_MM = 8.0
_LINEAR_VARIANCE = 1.0 / 6.0  # mean variance that linear interpolation adds, squared lattice steps
_SPLINE_VARIANCE = 1.0 / 4.0  # variance that interpolation by a quadratic B-spline adds, anywhere
_SIGNIFICANT = 1e-4


@dataclass(frozen=True, eq=False)
class _Lattice:
    """Nodes on a plane."""

    u_mm: NDArray[np.float64]
    v_mm: NDArray[np.float64]
    spacing_mm: float


@dataclass(frozen=True, eq=False)
class Loops:
    """What the kernels take, in arrays.

    Attributes
    ----------
    wet, local, slant : ndarray
        Of the rays, see :class:`dosekit.maps.rays.RayTrace`.
    gaps : ndarray
        Distance of each plane from the one before; of the first from the range shifter, mm.
    inverse_bin, power, alive, survivors, narrow, start, broad : ndarray
        Of the tables, see :class:`dosekit.maps.tables.StepTables`.
    reference, growth : ndarray
        Variance that is in the fluence already, at the surface and by how much it grows to each plane.
    ladder, inverse_width_step : ndarray, float
        Variances of the ladder of widths, and rungs per mm.
    kernel_of_plane, taps_u, taps_v, radius, component : ndarray
        Which taps a plane uses, the taps, their reach, and the first component of each width.
    first_row, first_column : int
        Where the rays begin on the fine lattice.
    per_area, coarse_per_area : ndarray
        One over the area of a cell at each plane, 1/mm2.
    coarse_row, coarse_column, coarse_share_v, coarse_share_u : ndarray
        Coarse node below each ray and the share of the next.
    broad_taps_u, broad_taps_v, broad_radius, broad_component : ndarray
        The same for the broad parts.
    """

    wet: NDArray[np.float64]
    local: NDArray[np.float64]
    slant: NDArray[np.float64]
    gaps: NDArray[np.float64]
    inverse_bin: float
    power: NDArray[np.float64]
    alive: NDArray[np.int64]
    survivors: NDArray[np.float64]
    narrow: NDArray[np.float64]
    start: NDArray[np.float64]
    reference: NDArray[np.float64]
    growth: NDArray[np.float64]
    ladder: NDArray[np.float64]
    inverse_width_step: float
    kernel_of_plane: NDArray[np.int64]
    taps_u: NDArray[np.float64]
    taps_v: NDArray[np.float64]
    radius: NDArray[np.int64]
    first_row: int
    first_column: int
    component: NDArray[np.int64]
    per_area: NDArray[np.float64]
    broad: NDArray[np.float64]
    coarse_column: NDArray[np.int64]
    coarse_share_u: NDArray[np.float64]
    coarse_row: NDArray[np.int64]
    coarse_share_v: NDArray[np.float64]
    broad_taps_u: NDArray[np.float64]
    broad_taps_v: NDArray[np.float64]
    broad_radius: NDArray[np.int64]
    broad_component: NDArray[np.int64]
    coarse_per_area: NDArray[np.float64]

    def rays(self) -> tuple[Any, ...]:
        """Return what says where the rays run."""
        return self.wet, self.local, self.slant, self.gaps

    def steps(self, state: NDArray[np.float64]) -> tuple[Any, ...]:
        """Return what says what the steps leave, with the running moments among it."""
        return (
            self.inverse_bin, self.power, self.alive, self.survivors, self.narrow, state, self.reference, self.growth,
            self.ladder, self.inverse_width_step,
        )  # fmt: skip

    def fine(self) -> tuple[Any, ...]:
        """Return what spreads the core."""
        return (
            self.kernel_of_plane, self.taps_u, self.taps_v, self.radius, self.first_row, self.first_column,
            self.component, self.per_area,
        )  # fmt: skip

    def coarse(self) -> tuple[Any, ...]:
        """Return what spreads the broad parts."""
        return (
            self.broad_taps_u, self.broad_taps_v, self.broad_radius, int(self.coarse_row[0]),
            int(self.coarse_column[0]), self.broad_component, self.coarse_per_area,
        )  # fmt: skip


def field_bytes(*, planes: int, rays: int, nodes: int, coarse_nodes: int, steps: int, parts: int, rungs: int) -> float:
    """Return the memory one field takes while it is folded.

    Parameters
    ----------
    planes, rays, nodes, coarse_nodes, steps, parts, rungs : int
        Planes across the beam, rays with fluence, nodes of a fine and a coarse plane, range steps, parts of the broad
        dose, widths of the ladder.

    Returns
    -------
    float
        Bytes: 8 [2 planes rays + (4 + P) rays steps + 2 P rungs rays + planes (2 nodes + 6 coarse)
        + 3 coarse parts], with P planes at once.
    """
    return 8.0 * (
        2.0 * planes * rays
        + (4.0 + PLANES_AT_ONCE) * rays * steps
        + 2.0 * PLANES_AT_ONCE * rungs * rays
        + planes * (2.0 * nodes + len(TARGETS) * coarse_nodes)
        + 3.0 * coarse_nodes * parts
    )


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
    fine, coarse : lattice
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
    fine: _Lattice
    coarse: _Lattice
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
        from dosekit.maps import kernels

        first_u, first_v, profile_u, profile_v = self.profiles
        out = np.zeros((*self.rays.slant.shape, self.field.shape[1]))
        particles = np.ascontiguousarray(weights, dtype=np.float64) * PARTICLES_PER_UNIT
        with Threads() as threads:
            threads.run(kernels.lay_spots, (particles, first_u, first_v, profile_u, profile_v, out), len(out))
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
        from dosekit.maps import kernels

        fine, coarse = self._empty_maps()
        fluence = self.fluence(weights)
        work, planes, rows = self.loops, len(self.planes.w_mm), len(self.rays.v_mm)
        state, source, touched = self._scratch()
        columns = int(work.coarse_column[-1] - work.coarse_column[0]) + 2
        gathered = np.empty((PLANES_AT_ONCE, rows, columns, work.broad.shape[2]))
        with Threads() as threads:
            for first in range(0, planes, PLANES_AT_ONCE):
                last = min(first + PLANES_AT_ONCE, planes)
                threads.run(
                    kernels.follow_rows,
                    (fluence, *work.rays(), *work.steps(state), work.broad, work.coarse_column, work.coarse_share_u,
                     source, touched, gathered, first, last),
                    rows,
                )  # fmt: skip
                threads.run(
                    kernels.spread_planes,
                    (source, touched, gathered, *work.fine(), work.coarse_row, work.coarse_share_v, *work.coarse(),
                     fine, coarse, first),
                    last - first,
                )  # fmt: skip
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
        from dosekit.maps import kernels

        first_u, first_v, profile_u, profile_v = self.profiles
        work, planes = self.loops, len(self.planes.w_mm)
        rows, columns = self.rays.slant.shape
        spots, steps = self.field.shape
        fluence = np.zeros((rows, columns, steps))
        state, source, touched = self._scratch()
        variances = np.zeros((PLANES_AT_ONCE, rows, columns, steps))
        lines = int(work.coarse_row[-1] - work.coarse_row[0]) + 2
        across = int(work.coarse_column[-1] - work.coarse_column[0]) + 2
        coarse_source = np.empty((PLANES_AT_ONCE, work.broad.shape[2], 1, lines, across))
        weights = np.zeros((spots, steps))
        with Threads() as threads:
            for first in range(0, planes, PLANES_AT_ONCE):
                last = min(first + PLANES_AT_ONCE, planes)
                threads.run(
                    kernels.touch_rows,
                    (*work.rays(), *work.steps(state), touched, variances, first, last),
                    rows,
                )
                threads.run(
                    kernels.gather_planes,
                    (source, touched, coarse_source, *work.fine(), *work.coarse(), fine, coarse, first),
                    last - first,
                )
                threads.run(
                    kernels.read_rows,
                    (work.wet, work.slant, work.inverse_bin, work.alive, work.narrow, variances, work.ladder,
                     work.inverse_width_step, work.broad, work.coarse_column, work.coarse_share_u, work.coarse_row,
                     work.coarse_share_v, source, coarse_source, fluence, first, last),
                    rows,
                )  # fmt: skip
            threads.run(kernels.lay_spots_transposed, (fluence, first_u, first_v, profile_u, profile_v, weights), spots)
        return weights * PARTICLES_PER_UNIT

    def _scratch(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.uint8]]:
        """Return the moments of every ray and step at the start, and room for a block of planes."""
        work = self.loops
        rows, columns = self.rays.slant.shape
        state = np.empty((rows, columns, *work.start.shape))
        state[:] = work.start
        source = np.empty((PLANES_AT_ONCE, len(work.ladder), 2, rows, columns))
        return state, source, np.zeros((PLANES_AT_ONCE, rows, len(work.ladder)), dtype=np.uint8)

    def deposit(
        self,
        fine: NDArray[np.float64],
        coarse: NDArray[np.float64],
        voxels: NDArray[np.int64],
        places: NDArray[np.int64],
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
        voxels : ndarray
            Flat indices of voxels.
        places : ndarray
            Column of `out` for each.
        factor : ndarray
            Factor of each row of `out` and material; negative: its size times the voxel's stopping power.
        rows : ndarray
            Row of `out` for each of `TARGETS`, or -1.
        out : ndarray
            Where to add, shape (rows, columns).
        """
        from dosekit.maps import kernels

        where = self._voxel_arguments(fine, coarse, rows)
        with Threads() as threads:
            threads.run(kernels.deposit, (voxels, places, *where, factor, out), len(voxels))

    def gather(
        self,
        values: NDArray[Any],
        voxels: NDArray[np.int64],
        places: NDArray[np.int64],
        *,
        factor: NDArray[np.float64],
        rows: NDArray[np.int64],
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Apply the transpose of `deposit`.

        Parameters
        ----------
        values : ndarray
            Values in voxels, shape (rows, columns).
        voxels, places, factor, rows : ndarray
            As for `deposit`; the voxels must be in rising order.

        Returns
        -------
        fine, coarse : ndarray
            The maps.
        """
        from dosekit.maps import kernels

        fine, coarse = self._empty_maps()
        nz, ny, nx = self.matter.shape
        widest = max(self.coarse.spacing_mm, self.fine.spacing_mm) * float(
            np.max(self.planes.frame.magnification(self.planes.w_mm))
        )
        step = max(widest, float(np.diff(self.planes.w_mm[:2])[0]))
        thickness = 2.0 * np.sqrt(3.0) * step + float(self.matter.spacing_mm[2])
        layers = max(int(np.ceil(thickness / self.matter.spacing_mm[2])), 1)
        starts = np.arange(0, nz + layers, layers, dtype=np.int64) * (ny * nx)
        slabs = np.searchsorted(voxels, starts)
        where = self._voxel_arguments(fine, coarse, rows)
        with Threads() as threads:
            for colour in range(2):
                halves = (len(slabs) - colour) // 2
                shared = (slabs, voxels, places, *where, factor, values, colour)
                threads.run(kernels.deposit_transposed, shared, halves)
        return fine, coarse

    def _empty_maps(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return maps of nothing."""
        planes = len(self.planes.w_mm)
        fine = np.zeros((planes, len(self.fine.v_mm), len(self.fine.u_mm), 2))
        coarse = np.zeros((planes, len(self.coarse.v_mm), len(self.coarse.u_mm), len(TARGETS)))
        return fine, coarse

    def _voxel_arguments(
        self, fine: NDArray[np.float64], coarse: NDArray[np.float64], rows: NDArray[np.int64]
    ) -> tuple[Any, ...]:
        """Return what the voxel kernels need to know about both lattices."""
        frame, matter = self.planes.frame, self.matter
        on_nodes = self.planes.on_nodes
        apart = self.fine.spacing_mm if on_nodes else 1.25 * self.fine.spacing_mm
        sub = np.maximum(np.ceil(matter.spacing_mm / apart - 1e-9), 1).astype(np.int64)
        if on_nodes:  # along the beam, planes lie so as well
            along = int(np.argmax(np.abs(frame.rotation[2])))
            step = float(self.planes.w_mm[1] - self.planes.w_mm[0])
            sub[along] = max(1, round(float(matter.spacing_mm[along]) / step))
        w = self.planes.w_mm
        return (
            np.array(matter.shape),
            matter.origin_mm,
            matter.spacing_mm,
            np.array(frame.isocentre_mm),
            frame.rotation,
            0.0 if frame.source_distance_mm is None else 1.0 / frame.source_distance_mm,
            sub,
            on_nodes,
            float(w[0]),
            1.0 / float(w[1] - w[0]),
            float(self.fine.u_mm[0]),
            float(self.fine.v_mm[0]),
            1.0 / self.fine.spacing_mm,
            fine,
            float(self.coarse.u_mm[0]),
            float(self.coarse.v_mm[0]),
            1.0 / self.coarse.spacing_mm,
            coarse,
            rows[[TARGETS.index("primary"), TARGETS.index("stops")]],
            rows,
            matter.index.reshape(-1),
            matter.rsp.reshape(-1),
        )

    def voxels(self) -> NDArray[np.int64]:
        """Return the voxels that the field's lattices can reach.

        Returns
        -------
        ndarray
            Flat indices in rising order.
        """
        matter, frame, w = self.matter, self.planes.frame, self.planes.w_mm
        u, v = self.coarse.u_mm, self.coarse.v_mm
        fine_u, fine_v = self.fine.u_mm, self.fine.v_mm
        edges_u = (min(u[0], fine_u[0]), max(u[-1], fine_u[-1]))
        edges_v = (min(v[0], fine_v[0]), max(v[-1], fine_v[-1]))
        corners = frame.to_patient([[a, b, c] for a in edges_u for b in edges_v for c in (w[0], w[-1])])
        first = (corners.min(axis=0) - matter.origin_mm) / matter.spacing_mm
        last = (corners.max(axis=0) - matter.origin_mm) / matter.spacing_mm
        nz, ny, nx = matter.shape
        low = np.clip(np.floor(first).astype(int), 0, [nx, ny, nz])
        high = np.clip(np.ceil(last).astype(int) + 1, 0, [nx, ny, nz])
        x, y, z = (np.arange(a, max(a, b), dtype=np.int64) for a, b in zip(low, high, strict=True))
        return ((z[:, None, None] * ny + y[:, None]) * nx + x).reshape(-1)


def field_pencils(
    field: Field, matter: Matter, library: DepthLibrary, *, patient_position: str = "HFS"
) -> FieldPencils:
    """Make a field ready to be folded.

    Parameters
    ----------
    field : Field
        The field; its weights are not used.
    matter : Matter
        The volume.
    library : DepthLibrary
        Depth curves in water for the field's range steps.
    patient_position : str
        How the patient lies.

    Returns
    -------
    FieldPencils
        The field on its lattices.

    Raises
    ------
    SizeError
        When the field would take too much memory.

    Warns
    -----
    GeometryWarning
        When the field misses everything, or its source lies inside the volume.
    """
    frame = field.frame(patient_position)
    tables = step_tables(library, field.beam)
    optics = [field.beam.axis(axis) for axis in range(2)]
    smallest = min(float(np.hypot(sigma, np.sqrt(tables.surface_variance_mm2.min()))) for sigma, _, _ in optics)
    planes = plane_lattice(frame, matter, spot_sigma_mm=smallest)
    magnified = frame.magnification(planes.w_mm)
    bounds = _bounds(matter, frame, float(magnified.min()))
    rays, first = _rays_that_count(field, matter, planes, tables, bounds)
    misses = first is None
    surface = float(planes.w_mm[0] if first is None else planes.w_mm[first] - 0.5 * np.diff(planes.w_mm[:2])[0])
    if planes.starts_inside:
        warnings.warn(
            GeometryWarning(f"field {field.name!r}: the source lies so close that part of the volume is left out"),
            stacklevel=3,
        )
    if misses:
        warnings.warn(GeometryWarning(f"field {field.name!r} meets nothing in the volume: no dose"), stacklevel=3)
    shift_variance = np.asarray(tables.surface_variance_mm2)
    behind = planes.w_mm >= surface - 1e-9
    in_air = np.array([_air_variance(axis, planes.w_mm - surface) for axis in optics])
    entry = (in_air / magnified**2)[:, behind].min(axis=1)  # smallest in-air variance behind the surface, per axis
    growth = (magnified / float(frame.magnification(surface))) ** 2
    spacing = planes.spacing_mm
    blur = np.full(2, 0.0 if planes.on_nodes else _SPLINE_VARIANCE * spacing**2)
    at_surface = shift_variance / float(frame.magnification(surface)) ** 2
    sigma = np.sqrt(np.maximum(entry[:, None] + at_surface - blur[:, None], 0.0))
    nodes = [_spot_nodes(field, planes, axis, sigma[axis]) for axis in range(2)]
    rays = rays.part(*nodes)
    profiles = [
        spot_profiles(field.spots_mm[:, axis], sigma[axis], nodes[axis], spacing_mm=spacing) for axis in range(2)
    ]
    ahead = float(planes.w_mm[0] - (surface - tables.gap_mm))
    widest = _widest(rays, planes, tables, ahead, shift_variance)
    ladder, width_step = width_ladder(np.sqrt(widest))
    optics_variance = in_air - magnified**2 * entry[:, None]
    varies = frame.source_distance_mm is not None or float(np.ptp(optics_variance)) > 1e-12
    which = np.arange(len(planes.w_mm)) if varies else np.zeros(len(planes.w_mm), dtype=np.int64)
    chosen = np.arange(len(planes.w_mm)) if varies else np.zeros(1, dtype=np.int64)
    scale = (magnified[chosen] * spacing) ** 2
    extra = optics_variance[:, chosen]
    largest_fine = float(np.sqrt(widest + extra.max()) / magnified.min())
    fine = _widened(planes, nodes, REACH_SIGMAS * largest_fine, spacing, bounds)
    part_sigma, part_target, broad = _parts(tables)
    wanted = min(_COARSEST_MM, 1.2 * float(np.hypot(sigma.min(), part_sigma[-1])))
    factor = max(1, int(wanted / spacing + 1e-9))
    largest_broad = float(np.sqrt(part_sigma[0] ** 2 + extra.max()) / magnified.min())
    coarse = _widened(planes, nodes, (REACH_SIGMAS - 0.5) * largest_broad, factor * spacing, bounds)
    check_memory(
        field_bytes(
            planes=len(planes.w_mm),
            rays=rays.slant.size,
            nodes=len(fine.u_mm) * len(fine.v_mm),
            coarse_nodes=len(coarse.u_mm) * len(coarse.v_mm),
            steps=field.shape[1],
            parts=len(part_sigma),
            rungs=len(ladder),
        )
        + 8.0 * sum(profile.size for _, profile in profiles),
        what=f"field {field.name!r}",
        remedy="use a coarser volume, a smaller field or fewer range steps",
    )
    variances = [(ladder[None, :] + extra[axis][:, None]) / scale[:, None] for axis in range(2)]
    taps = [gaussian_taps(variance, largest=len(fine.u_mm) + len(fine.v_mm)) for variance in variances]
    length = max(t.shape[-1] for t, _ in taps)
    taps_u, taps_v = (_padded(t, length) for t, _ in taps)
    radius = np.maximum(taps[0][1], taps[1][1])
    # spreading rays over coarse nodes and interpolating between them add a sixth each
    broad_variances = [
        np.maximum(
            (part_sigma[None, :] ** 2 + extra[axis][:, None]) / (scale[:, None] * factor**2) - 2.0 * _LINEAR_VARIANCE,
            0.0,
        )
        for axis in range(2)
    ]
    broad_taps = [gaussian_taps(v, largest=len(coarse.u_mm) + len(coarse.v_mm)) for v in broad_variances]
    length = max(t.shape[-1] for t, _ in broad_taps)
    broad_taps_u, broad_taps_v = (_padded(t, length) for t, _ in broad_taps)
    columns, share_u = _coarse_places(rays.u_mm, coarse.u_mm, coarse.spacing_mm)
    lines, share_v = _coarse_places(rays.v_mm, coarse.v_mm, coarse.spacing_mm)
    loops = Loops(
        wet=rays.wet_mm,
        local=rays.scatter,
        slant=rays.slant,
        gaps=np.concatenate([[ahead], np.diff(planes.w_mm)]),
        inverse_bin=1.0 / tables.bin_mm,
        power=tables.power,
        alive=tables.alive(),
        survivors=tables.survivors,
        narrow=tables.narrow,
        start=tables.start,
        reference=shift_variance,
        growth=growth,
        ladder=ladder,
        inverse_width_step=1.0 / width_step,
        kernel_of_plane=which,
        taps_u=taps_u,
        taps_v=taps_v,
        radius=radius,
        first_row=_index_of(rays.v_mm[0], fine.v_mm, spacing),
        first_column=_index_of(rays.u_mm[0], fine.u_mm, spacing),
        component=np.zeros(len(ladder), dtype=np.int64),
        per_area=1.0 / (spacing * magnified) ** 2,
        broad=broad,
        coarse_column=columns,
        coarse_share_u=share_u,
        coarse_row=lines,
        coarse_share_v=share_v,
        broad_taps_u=broad_taps_u,
        broad_taps_v=broad_taps_v,
        broad_radius=np.maximum(broad_taps[0][1], broad_taps[1][1]),
        broad_component=part_target,
        coarse_per_area=1.0 / (coarse.spacing_mm * magnified) ** 2,
    )
    return FieldPencils(
        field=field,
        matter=matter,
        planes=planes,
        rays=rays,
        tables=tables,
        surface_mm=surface,
        misses=misses,
        fine=fine,
        coarse=coarse,
        optics_variance_mm2=optics_variance,
        width_steps_per_mm=1.0 / width_step,
        profiles=(profiles[0][0], profiles[1][0], profiles[0][1], profiles[1][1]),
        loops=loops,
    )


def _bounds(matter: Matter, frame: Any, smallest_magnification: float) -> NDArray[np.float64]:
    """Return the rectangle (low, high) of fan positions that the volume covers, rows u and v."""
    across = (matter.corners_mm() - np.array(frame.isocentre_mm)) @ frame.rotation.T
    shrink = np.array([1.0, smallest_magnification])
    positions = (across[:, :2, None] / np.minimum(shrink, 1.0)).transpose(1, 0, 2).reshape(2, -1)
    return np.stack([positions.min(axis=1), positions.max(axis=1)], axis=1)


def _rays_that_count(
    field: Field, matter: Matter, planes: Planes, tables: StepTables, bounds: NDArray[np.float64]
) -> tuple[RayTrace, int | None]:
    """Follow the rays of the largest the spots can be; return them and the first plane behind a surface."""
    frame, w = planes.frame, planes.w_mm
    magnified = frame.magnification(w)
    nodes = []
    for axis in range(2):
        optics = field.beam.axis(axis)
        reach = np.array([w[-1] - w[0], 0.0])
        in_air = max(_air_variance(optics, reach).max(), optics[0] ** 2) / min(magnified.min(), 1.0) ** 2
        shift = tables.surface_variance_mm2.max() / min(magnified.min(), 1.0) ** 2
        sigma = np.array([np.sqrt(min(in_air, 1e6) + shift)])
        nodes.append(_spot_nodes(field, planes, axis, sigma))
    check_memory(
        16.0 * len(w) * len(nodes[0]) * len(nodes[1]),
        what=f"field {field.name!r}",
        remedy="use a smaller field or smaller spots",
    )
    rays = trace(planes, matter, nodes[0], nodes[1])
    met = np.flatnonzero(rays.scatter.max(axis=(1, 2)) > BODY_RSP)
    inside = all(n[-1] >= low and n[0] <= high for n, (low, high) in zip(nodes, bounds, strict=True))
    return rays, int(met[0]) if len(met) and inside else None


def _spot_nodes(field: Field, planes: Planes, axis: int, sigma_mm: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the rays that the spots reach along one axis."""
    reach = REACH_SIGMAS * float(sigma_mm.max()) + 1.5 * planes.spacing_mm
    spots = field.spots_mm[:, axis]
    return planes.nodes(float(spots.min()) - reach, float(spots.max()) + reach, axis)


def _air_variance(optics: tuple[float, float, float], distance_mm: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the variance of position in air at a distance behind the surface, mm2."""
    sigma, angle, correlation = optics
    return sigma**2 + 2.0 * correlation * sigma * angle * distance_mm + (angle * distance_mm) ** 2


def _widest(rays: RayTrace, planes: Planes, tables: StepTables, ahead: float, reference: NDArray[np.float64]) -> float:
    """Return the largest scatter variance behind the surface, from every third ray, with room for the others."""
    from dosekit.maps import kernels

    counts = np.ascontiguousarray(tables.narrow[:, 0] > _SIGNIFICANT * tables.narrow[:, 0].max(axis=0))
    width = np.zeros(len(rays.v_mm[::3]))
    shared = (
        np.ascontiguousarray(rays.wet_mm[:, ::3, ::3]),
        np.ascontiguousarray(rays.scatter[:, ::3, ::3]),
        np.ascontiguousarray(rays.slant[::3, ::3]),
        planes.w_mm,
        1.0 / tables.bin_mm,
        tables.power,
        counts.astype(np.float64),
        tables.start,
        ahead,
        reference,
        width,
    )
    with Threads() as threads:
        threads.run(kernels.widest_spread, shared, len(width))
    return 1.1 * float(width.max()) + 0.01


def _widened(
    planes: Planes, nodes: list[NDArray[np.float64]], margin_mm: float, spacing_mm: float, bounds: NDArray[np.float64]
) -> _Lattice:
    """Return a lattice around the rays, wide enough for what spreads, no wider than the volume."""
    axes = []
    factor = round(spacing_mm / planes.spacing_mm)
    for ray, (low, high) in zip(nodes, bounds, strict=True):
        before = min(max(ray[0] - margin_mm, low - spacing_mm), ray[0])
        after = max(min(ray[-1] + margin_mm, high + spacing_mm), ray[-1])
        # coarse nodes lie symmetrically about the middle of the rays, fine ones on the rays
        centre = ray[0] if factor == 1 else 0.5 * (ray[0] + ray[-1])
        steps_before = int(np.ceil((centre - before) / spacing_mm - 1e-9)) + (factor > 1)
        steps_after = int(np.ceil((after - centre) / spacing_mm - 1e-9)) + (factor > 1)
        axes.append(centre + spacing_mm * np.arange(-steps_before, steps_after + 1))
    return _Lattice(u_mm=axes[0], v_mm=axes[1], spacing_mm=spacing_mm)


def _parts(tables: StepTables) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64]]:
    """Return the broad parts, with empty ones up to a multiple of eight: loops over parts then run in full vectors."""
    count = len(tables.part_sigma_mm)
    more = 8 - count % 8 if count % 8 or not count else 0
    sigma = np.concatenate([tables.part_sigma_mm, np.full(more, tables.part_sigma_mm.min(initial=10.0))])
    target = np.concatenate([tables.part_target, np.full(more, tables.part_target.min(initial=0))])
    return sigma, target, np.ascontiguousarray(np.pad(tables.broad, [(0, 0), (0, 0), (0, more)]))


def _coarse_places(
    rays_mm: NDArray[np.float64], nodes_mm: NDArray[np.float64], spacing_mm: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return the coarse node below each ray and the share of the node above."""
    place = (rays_mm - nodes_mm[0]) / spacing_mm
    low = np.clip(np.floor(place + 1e-9).astype(np.int64), 0, len(nodes_mm) - 2)
    return low, np.clip(place - low, 0.0, 1.0)


def _index_of(value_mm: float, nodes_mm: NDArray[np.float64], spacing_mm: float) -> int:
    """Return the index of a node."""
    return int(np.rint((value_mm - nodes_mm[0]) / spacing_mm))


def _padded(taps: NDArray[np.float64], length: int) -> NDArray[np.float64]:
    """Return taps with zeros up to a length."""
    out = np.zeros((*taps.shape[:-1], length))
    keep = min(length, taps.shape[-1])
    out[..., :keep] = taps[..., :keep]
    return out

"""Rays of a field: where they run, and how much matter lies on them.

A field is followed on its own lattice: rays through the nodes (u, v) of the plane of the isocentre, and planes across
the beam at positions w (see :mod:`dosekit.maps.frames`). Rays lie closer than the spots are wide, so that a spot is
split into rays and the edge of a bone inside a spot divides it. Where a lattice axis is parallel to an axis of the
voxels, the nodes are laid on the points at which voxels are sampled.

Along each ray the relative stopping power and the scattering power are sampled by linear interpolation between voxel
centres at two points or more for each voxel, and summed to the water-equivalent path.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.maps.cones_threads import Threads
from dosekit.maps.frames import BeamFrame

if TYPE_CHECKING:
    from dosekit.basis.materials import Material
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["Matter", "Planes", "RayTrace", "matter_of", "plane_lattice", "ray_spacing_mm", "trace"]

LARGEST_RAY_SPACING_MM = 2.5
SMALLEST_RAY_SPACING_MM = 0.8
RAYS_PER_SPOT_SIGMA = 2.0
SAMPLES_PER_VOXEL = 2
_NEAREST_TO_SOURCE = 0.1  # part of the source distance that is never entered


@dataclass(frozen=True, eq=False)
class Matter:
    """What the voxels are made of, as the fold needs it.

    Attributes
    ----------
    origin_mm, spacing_mm : ndarray
        Centre of the first voxel and distances (x, y, z), mm.
    rsp : ndarray
        Relative stopping power [z, y, x], float32.
    scatter : ndarray
        Scattering power over that of water at the same energy, per length [z, y, x], float32.
    index : ndarray
        Index of the material [z, y, x].
    rsp_per_density : ndarray
        Relative stopping power over density for each material, cm3/g.
    """

    origin_mm: NDArray[np.float64]
    spacing_mm: NDArray[np.float64]
    rsp: NDArray[np.float32]
    scatter: NDArray[np.float32]
    index: NDArray[np.uint16]
    rsp_per_density: NDArray[np.float64]

    @property
    def shape(self) -> tuple[int, int, int]:
        """Voxels along z, y and x."""
        nz, ny, nx = self.rsp.shape
        return nz, ny, nx

    @property
    def lower_mm(self) -> NDArray[np.float64]:
        """Lower corner (x, y, z), mm."""
        return self.origin_mm - 0.5 * self.spacing_mm

    @property
    def upper_mm(self) -> NDArray[np.float64]:
        """Upper corner (x, y, z), mm."""
        return np.asarray(self.lower_mm + self.spacing_mm * np.array(self.shape[::-1]))

    def corners_mm(self) -> NDArray[np.float64]:
        """Return the eight corners of the volume.

        Returns
        -------
        ndarray
            Points (x, y, z), shape (8, 3), mm.
        """
        low, high = self.lower_mm, self.upper_mm
        return np.array([[(low, high)[(n >> a) & 1][a] for a in range(3)] for n in range(8)])


@dataclass(frozen=True, eq=False)
class Planes:
    """The lattice of a field: rays (u, v) and planes w.

    Attributes
    ----------
    frame : BeamFrame
        The axes.
    spacing_mm : float
        Distance between rays in the plane of the isocentre, mm.
    u_phase_mm, v_phase_mm : float
        Rays lie at the phase plus whole multiples of the spacing.
    on_nodes : bool
        Whether every point at which a voxel is sampled lies on a ray.
    w_mm : ndarray
        Positions of the planes, mm.
    lead_mm : float
        How far the volume begins before the first plane, mm.
    starts_inside : bool
        Whether the source lies so close that part of the volume is left out.
    """

    frame: BeamFrame
    spacing_mm: float
    u_phase_mm: float
    v_phase_mm: float
    on_nodes: bool
    w_mm: NDArray[np.float64]
    lead_mm: float
    starts_inside: bool

    def nodes(self, low_mm: float, high_mm: float, axis: int) -> NDArray[np.float64]:
        """Return the rays that cover an interval.

        Parameters
        ----------
        low_mm, high_mm : float
            The interval, mm.
        axis : int
            0 for u, 1 for v.

        Returns
        -------
        ndarray
            Positions, at least two, mm.
        """
        phase = (self.u_phase_mm, self.v_phase_mm)[axis]
        first = int(np.floor((low_mm - phase) / self.spacing_mm + 1e-9))
        last = max(int(np.ceil((high_mm - phase) / self.spacing_mm - 1e-9)), first + 1)
        return np.asarray(phase + self.spacing_mm * np.arange(first, last + 1), dtype=np.float64)


@dataclass(frozen=True, eq=False)
class RayTrace:
    """Matter along a rectangle of rays.

    Attributes
    ----------
    u_mm, v_mm : ndarray
        Rays, mm.
    wet_mm : ndarray
        Water-equivalent path up to each plane [w, v, u], mm.
    scatter : ndarray
        Mean scattering power between a plane and the one before, over that of water [w, v, u].
    slant : ndarray
        Path along the ray for a step along w [v, u].
    """

    u_mm: NDArray[np.float64]
    v_mm: NDArray[np.float64]
    wet_mm: NDArray[np.float64]
    scatter: NDArray[np.float64]
    slant: NDArray[np.float64]

    def part(self, u_mm: NDArray[np.float64], v_mm: NDArray[np.float64]) -> RayTrace:
        """Return the rays of a smaller rectangle.

        Parameters
        ----------
        u_mm, v_mm : ndarray
            Rays to keep, mm.

        Returns
        -------
        RayTrace
            The smaller rectangle.
        """
        first_u, first_v = (int(np.argmin(np.abs(a - b[0]))) for a, b in ((self.u_mm, u_mm), (self.v_mm, v_mm)))
        rows, columns = slice(first_v, first_v + len(v_mm)), slice(first_u, first_u + len(u_mm))
        return RayTrace(
            u_mm=self.u_mm[columns],
            v_mm=self.v_mm[rows],
            wet_mm=np.ascontiguousarray(self.wet_mm[:, rows, columns]),
            scatter=np.ascontiguousarray(self.scatter[:, rows, columns]),
            slant=np.ascontiguousarray(self.slant[rows, columns]),
        )


@lru_cache(maxsize=4)
def matter_of(grid: VoxelGrid, particle: str = "pi-", kinetic_energy_mev: float = 60.0) -> Matter:
    """Return stopping and scattering power of a volume.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    particle : str
        Beam particle.
    kinetic_energy_mev : float
        Energy at which stopping powers are compared with water, MeV.

    Returns
    -------
    Matter
        Kept for the volumes asked for last.
    """
    from dosekit.beams.scattering import scattering_power_ratio
    from dosekit.beams.stopping import relative_stopping_power

    def per_density(matter: Material) -> float:
        stopping = relative_stopping_power(matter, particle, kinetic_energy_mev=kinetic_energy_mev)
        return float(stopping) / matter.density_g_cm3

    stopping = np.array([per_density(matter) for matter in grid.materials])
    ratio = np.array([scattering_power_ratio(matter) for matter in grid.materials])
    rsp = stopping.astype(np.float32)[grid.material_index]
    rsp *= grid.density_g_cm3
    scatter = ratio.astype(np.float32)[grid.material_index]
    scatter *= rsp
    return Matter(
        origin_mm=np.array(grid.origin_mm),
        spacing_mm=np.array(grid.spacing_mm),
        rsp=rsp,
        scatter=scatter,
        index=grid.material_index,
        rsp_per_density=stopping,
    )


def ray_spacing_mm(spot_sigma_mm: float, voxel_mm: float) -> float:
    """Return the distance between rays: two in a spot's sigma, and a whole part or multiple of the voxel.

    Parameters
    ----------
    spot_sigma_mm : float
        Smallest sigma of the spots where they enter the volume, mm.
    voxel_mm : float
        Smallest voxel spacing, mm.

    Returns
    -------
    float
        Distance, mm.

    Examples
    --------
    >>> ray_spacing_mm(5.0, 2.0), ray_spacing_mm(5.0, 3.0), ray_spacing_mm(5.0, 1.0)
    (2.0, 1.5, 2.0)
    """
    wanted = float(np.clip(spot_sigma_mm / RAYS_PER_SPOT_SIGMA, SMALLEST_RAY_SPACING_MM, LARGEST_RAY_SPACING_MM))
    if voxel_mm <= wanted:
        return voxel_mm * max(1, int(wanted / voxel_mm + 1e-9))
    return voxel_mm / int(np.ceil(voxel_mm / wanted - 1e-9))


def plane_lattice(frame: BeamFrame, matter: Matter, *, spot_sigma_mm: float) -> Planes:
    """Lay the rays and planes of a field over a volume.

    Parameters
    ----------
    frame : BeamFrame
        Axes of the field.
    matter : Matter
        The volume.
    spot_sigma_mm : float
        Smallest sigma of the spots where they enter, mm.

    Returns
    -------
    Planes
        The lattice.
    """
    axes = frame.rotation
    corners = (matter.corners_mm() - np.array(frame.isocentre_mm)) @ axes.T
    low, high = float(corners[:, 2].min()), float(corners[:, 2].max())
    starts_inside = False
    if frame.source_distance_mm is not None:
        nearest = -(1.0 - _NEAREST_TO_SOURCE) * frame.source_distance_mm
        starts_inside = low < nearest
        low = max(low, nearest)
        high = max(high, low + 1.0)
    spacing = ray_spacing_mm(spot_sigma_mm, float(matter.spacing_mm.min()))
    along = _parallel_axis(axes[2])
    step = float(matter.spacing_mm.min() if along is None else matter.spacing_mm[along])
    step = step * max(1, int(2.0 / step + 1e-9)) if step <= 2.0 else step / np.ceil(step / 2.0 - 1e-9)
    count = max(int(np.ceil((high - low) / step - 1e-9)), 1)
    w = np.asarray(low + step * (np.arange(count + 2) - 0.5), dtype=np.float64)
    phases, aligned = [], []
    for axis in range(2):
        parallel = None if frame.source_distance_mm is not None else _parallel_axis(axes[axis])
        multiple = 0.0 if parallel is None else float(matter.spacing_mm[parallel]) / spacing
        fits = parallel is not None and abs(multiple - round(multiple)) < 1e-9 and round(multiple) >= 1
        phase = 0.0
        if fits and parallel is not None:
            distance = axes[axis, parallel] * (matter.origin_mm[parallel] - frame.isocentre_mm[parallel])
            distance += 0.5 * spacing * (round(multiple) % 2 == 0)  # rays at the points that sample the voxel
            phase = float(distance - spacing * np.round(distance / spacing))
        phases.append(phase)
        aligned.append(bool(fits))
    return Planes(
        frame=frame,
        spacing_mm=float(spacing),
        u_phase_mm=phases[0],
        v_phase_mm=phases[1],
        on_nodes=all(aligned),
        w_mm=w,
        lead_mm=0.0,
        starts_inside=starts_inside,
    )


def trace(planes: Planes, matter: Matter, u_mm: NDArray[np.float64], v_mm: NDArray[np.float64]) -> RayTrace:
    """Follow rays through a volume.

    Parameters
    ----------
    planes : Planes
        The lattice.
    matter : Matter
        The volume.
    u_mm, v_mm : ndarray
        Rays to follow, mm.

    Returns
    -------
    RayTrace
        Water-equivalent path and scattering along them.
    """
    from dosekit.maps import kernels_rays

    frame = planes.frame
    inverse = 0.0 if frame.source_distance_mm is None else 1.0 / frame.source_distance_mm
    shape = (len(planes.w_mm), len(v_mm), len(u_mm))
    spacing = float(planes.w_mm[1] - planes.w_mm[0])
    samples = int(np.ceil(SAMPLES_PER_VOXEL * spacing / float(matter.spacing_mm.min()) - 1e-9))
    u_axis, v_axis, direction = frame.rotation
    across = u_mm[None, :, None] * u_axis + v_mm[:, None, None] * v_axis
    start = (np.asarray(frame.isocentre_mm) + across - matter.origin_mm) / matter.spacing_mm
    slope = direction + across * inverse
    length = np.sqrt((slope**2).sum(axis=2))
    step = slope / matter.spacing_mm
    enter, leave = _inside(start, step, np.array(matter.shape[::-1]))
    wet, scatter = np.zeros(shape), np.zeros(shape)
    ends = np.concatenate([[planes.w_mm[0] - planes.lead_mm], planes.w_mm])
    shared = (matter.rsp, matter.scatter, start, step, length, enter, leave, ends, samples, wet, scatter)
    with Threads() as threads:
        threads.run(kernels_rays.trace_rays, shared, len(v_mm))
    slant = np.sqrt(1.0 + (u_mm[None, :] ** 2 + v_mm[:, None] ** 2) * inverse**2)
    return RayTrace(u_mm=u_mm, v_mm=v_mm, wet_mm=wet, scatter=scatter, slant=slant)


def _inside(
    start: NDArray[np.float64], step: NDArray[np.float64], size: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return where rays (index units, [v, u, axis]) enter and leave a volume; they leave first when they miss it."""
    low, high = -0.5 - start, size - 0.5 - start
    with np.errstate(divide="ignore", invalid="ignore"):
        one, other = low / step, high / step
    along = step != 0.0
    outside = ~along & ((low > 0.0) | (high < 0.0))
    enter = np.where(along, np.minimum(one, other), -np.inf).max(axis=2)
    leave = np.where(along, np.maximum(one, other), np.where(outside, -np.inf, np.inf)).min(axis=2)
    return enter, leave


def _parallel_axis(axis: NDArray[np.float64]) -> int | None:
    """Return which patient axis a direction is parallel to, if any."""
    largest = int(np.argmax(np.abs(axis)))
    return largest if abs(abs(axis[largest]) - 1.0) < 1e-12 else None

"""A quick stand-in for the fold, for the many small steps of a search.

Dose of one particle of step ``k`` of a spot in a voxel at water-equivalent depth ``z`` on its own ray::

    d = sum over components of f_c T_ck(z) x exp(-r_u^2 / (2 s_u^2) - r_v^2 / (2 s_v^2)) / (2 pi s_u s_v)

with depth doses ``T`` of the depth library (stars folded in along depth) and Gaussian widths of the beam's
optics and of Fermi-Eyges scattering in water.  All components share the core's width; spots farther than 3 of
their widths from a voxel are left out.  Kept as a sparse matrix over the chosen voxels, so that a step of a search
takes milliseconds.

An error of range multiplies the depths by one number; an error of position moves the spots beside the voxels, whose
depths stay what they were (exact for a parallel beam, and within d/S of the slope of the surface for a source at S
moved by d).

Neutrons, photons and neutral products (decimetres wide) are left out; so are edges beside the ray and the
spread of star products in other tissue.  `dosekit.modulation.corrections` puts back what is missing from
the fold itself, which alone decides the dose that is reported.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.errors import InputError
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import ArrayLike, NDArray

    from dosekit.depths.library import DepthLibrary
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field
    from dosekit.modulation.thin_matrices import ThinMatrix

__all__ = ["Pencils", "pencil_matrices", "voxel_centres_mm", "water_depth_mm"]

#: Dose (Gy) of 1e9 particles per mm2 that leave 1 MeV/mm each in water.
_GRAY_PER_UNIT = 1e9 * 1e3 * GRAY_PER_MEV_PER_GRAM
_WIDE = ("star_neutron", "star_photon")
_REACH_SIGMAS = 3.0
_SIGNIFICANT = 1e-3
_RAY_STEP_MM = 2.0
_CHUNK = 2000


def water_depth_mm(field: Field, grid: VoxelGrid, voxels: ArrayLike) -> NDArray[np.float64]:
    """Give the water-equivalent depth of voxels along the rays of a field.

    Parameters
    ----------
    field : Field
        The field.
    grid : VoxelGrid
        The volume.
    voxels : array_like of int
        Flat indices of the voxels.

    Returns
    -------
    ndarray, shape (n,)
        Depth from the edge of the volume to the voxel's centre, mm of water.
    """
    from scipy.ndimage import map_coordinates

    frame = field.frame(grid.patient_position)
    beam = frame.to_beam(voxel_centres_mm(grid, voxels))
    corners = np.array(np.meshgrid(*zip(grid.lower_mm, grid.upper_mm, strict=True))).reshape(3, -1).T
    start = float(((corners - np.asarray(frame.isocentre_mm)) @ frame.rotation.T)[:, 2].min())
    power = np.asarray(grid.relative_stopping_power(), dtype=np.float32)
    origin, spacing = np.array(grid.origin_mm), np.array(grid.spacing_mm)
    out = np.empty(len(beam))
    for first in range(0, len(beam), _CHUNK):
        part = beam[first : first + _CHUNK]
        samples = max(int(np.ceil(float(part[:, 2].max() - start) / _RAY_STEP_MM)), 1)
        fraction = (np.arange(samples) + 0.5) / samples
        places = np.repeat(part[:, None, :], samples, axis=1)
        places[:, :, 2] = start + fraction * (part[:, None, 2] - start)
        points = frame.to_patient(places)
        length = np.linalg.norm(points[:, -1] - points[:, 0], axis=1) * samples / max(samples - 1, 1)
        index = np.moveaxis((points - origin) / spacing, -1, 0)[::-1]
        local = map_coordinates(power, index, order=1, mode="grid-constant", cval=0.0, prefilter=False)
        out[first : first + _CHUNK] = local.mean(axis=1) * length
    return out


@dataclass(frozen=True, eq=False)
class Pencils:
    """A field as the stand-in sees it.

    Parameters
    ----------
    field : Field
        Spots, steps and geometry.
    library : DepthLibrary
        Depth curves of the field's steps.
    depth_mm : ndarray, shape (n,), optional
        Water-equivalent depth of the chosen voxels (`water_depth_mm`); found when absent.
    """

    field: Field
    library: DepthLibrary
    depth_mm: NDArray[np.float64] | None = None

    def __post_init__(self) -> None:
        """Refuse a library of other steps."""
        if len(self.library.residual_range_mm) != self.field.shape[1]:
            raise InputError(
                f"a library of {len(self.library.residual_range_mm)} steps for a field of {self.field.shape[1]}",
                allowed="the field's own library",
                remedy="build the library from the field's shifter thicknesses",
            )

    @property
    def weights(self) -> int:
        """Spots times steps."""
        return int(np.prod(self.field.shape))


@dataclass(frozen=True, eq=False)
class _Rows:
    """What the entries of one field are made from, for every chosen voxel."""

    u_mm: NDArray[np.float64]
    v_mm: NDArray[np.float64]
    wide: NDArray[np.float64]
    reach_mm: NDArray[np.float64]
    live: NDArray[np.bool_]
    variance_u: NDArray[np.float64]
    variance_v: NDArray[np.float64]
    amplitude: NDArray[np.float64]


def pencil_matrices(
    fields: Sequence[Pencils],
    grid: VoxelGrid,
    voxels: ArrayLike,
    *,
    factors: Sequence[Mapping[str, ArrayLike]],
    star_scale: float = 1.0,
    range_factor: float = 1.0,
    moved_mm: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> list[ThinMatrix]:
    """Build the stand-in of some fields for one or several sets of component factors.

    Parameters
    ----------
    fields : sequence of Pencils
        The fields; their weights follow one another in the columns.
    grid : VoxelGrid
        The volume.
    voxels : array_like of int, shape (n,)
        Flat indices of the voxels.
    factors : sequence of mapping of str to number or array
        For each matrix the factor of each component, one number or one for each voxel; a component left out
        counts 0.
    star_scale : float
        Factor on the charged energy of stars.
    range_factor : float
        Factor on all water-equivalent depths, for an error of range.
    moved_mm : tuple of float
        By how much the isocentre lies beside its place (x, y, z), for an error of position.

    Returns
    -------
    list of ThinMatrix, shape (n, all weights)
        Gy (times factor) per 1e9 particles.

    Raises
    ------
    SizeError
        More entries than fit into memory.
    """
    from dosekit.maps.cones_threads import Threads
    from dosekit.modulation import kernels
    from dosekit.modulation.thin_matrices import ThinMatrix

    places = np.asarray(voxels, dtype=np.int64).ravel()
    rows = [
        _rows(one, grid, places, factors, star_scale=star_scale, range_factor=range_factor, moved_mm=moved_mm)
        for one in fields
    ]
    spots = [np.ascontiguousarray(one.field.spots_mm, dtype=np.float64) for one in fields]
    counts = np.zeros(len(places), dtype=np.int64)
    with Threads() as threads:
        for row, own in zip(rows, spots, strict=True):
            threads.run(kernels.count_entries, (row.u_mm, row.v_mm, row.reach_mm, row.live, own, counts), len(places))
        starts = np.concatenate([[0], np.cumsum(counts)])
        check_memory(
            4.0 * float(starts[-1]) * (1.0 + len(factors)),
            what=f"a stand-in of {int(starts[-1])} entries",
            remedy="choose coarser voxels, a wider spacing of spots or fewer steps",
        )
        columns = np.empty(int(starts[-1]), dtype=np.int32)
        values = np.empty((len(factors), int(starts[-1])), dtype=np.float32)
        at, first = starts[:-1].copy(), 0
        for one, row, own in zip(fields, rows, spots, strict=True):
            threads.run(
                kernels.fill_entries,
                (row.u_mm, row.v_mm, row.wide, row.reach_mm, row.live, row.variance_u, row.variance_v, row.amplitude,
                 own, first, at, columns, values),
                len(places),
            )  # fmt: skip
            first += one.weights
    return [ThinMatrix(matrix, columns, starts, (len(places), first)) for matrix in values]


def voxel_centres_mm(grid: VoxelGrid, voxels: ArrayLike) -> NDArray[np.float64]:
    """Give the centres of voxels.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    voxels : array_like of int, shape (n,)
        Flat indices of the voxels.

    Returns
    -------
    ndarray, shape (n, 3)
        (x, y, z), mm.
    """
    k, j, i = np.unravel_index(np.asarray(voxels, dtype=np.int64).ravel(), grid.shape)
    return np.stack([grid.centres_mm("x")[i], grid.centres_mm("y")[j], grid.centres_mm("z")[k]], axis=1)


def _rows(
    one: Pencils,
    grid: VoxelGrid,
    voxels: NDArray[np.int64],
    factors: Sequence[Mapping[str, ArrayLike]],
    *,
    star_scale: float,
    range_factor: float,
    moved_mm: tuple[float, float, float],
) -> _Rows:
    """Find depth, widths and amplitudes at the voxels."""
    depth = water_depth_mm(one.field, grid, voxels) if one.depth_mm is None else one.depth_mm
    depth = depth * range_factor
    x, y, z = (place + step for place, step in zip(one.field.isocentre_mm, moved_mm, strict=True))
    frame = one.field.replace(isocentre_mm=(x, y, z)).frame(grid.patient_position)
    beam = frame.to_beam(voxel_centres_mm(grid, voxels))
    variance_u, variance_v = _variances(one.field, one.library, depth, beam[:, 2])
    wide = frame.magnification(beam[:, 2])
    curves = one.library.depth_dose(star_scale=star_scale) * _GRAY_PER_UNIT
    amplitude = np.stack([_amplitudes(curves, one.library.depth_mm, depth, chosen) for chosen in factors])
    live = np.any(amplitude > _SIGNIFICANT * amplitude.max(axis=(1, 2), keepdims=True, initial=1e-300), axis=0)
    widest = np.where(live, np.maximum(variance_u, variance_v), 0.0).max(axis=1)
    reach = _REACH_SIGMAS * np.sqrt(widest) / wide
    u, v = (np.ascontiguousarray(beam[:, axis]) for axis in range(2))
    return _Rows(u, v, wide, reach, live, variance_u, variance_v, amplitude)


def _amplitudes(
    curves: NDArray[np.float64],
    depth_mm: NDArray[np.float64],
    at_mm: NDArray[np.float64],
    factors: Mapping[str, ArrayLike],
) -> NDArray[np.float64]:
    """Weighted broad-field dose of each step at each voxel's depth, shape (voxels, steps)."""
    out = np.zeros((len(at_mm), len(curves)))
    alike = np.zeros((len(curves), len(depth_mm)))
    for place, name in enumerate(COMPONENTS):
        factor = np.asarray(factors.get(name, 0.0), dtype=np.float64)
        if name in _WIDE or not factor.any():
            continue
        if factor.ndim == 0:
            alike += float(factor) * curves[:, place]
            continue
        for step in range(len(curves)):
            out[:, step] += factor * np.interp(at_mm, depth_mm, curves[step, place], right=0.0)
    for step in range(len(curves)):
        out[:, step] += np.interp(at_mm, depth_mm, alike[step], right=0.0)
    return np.maximum(out, 0.0)


def _variances(
    field: Field, library: DepthLibrary, depth_mm: NDArray[np.float64], w_mm: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Variance of the pencils along u and v at each voxel for each step, mm2."""
    from dosekit.beams.scattering import fermi_eyges_moments

    beam: Any = field.beam
    shift = np.asarray(library.shift_mm, dtype=np.float64)
    line = np.linspace(0.0, float(depth_mm.max(initial=0.0) + shift.max()) + 1.0, 400)
    energy = beam.kinetic_energy_mev
    angle, both, place = fermi_eyges_moments(beam.particle, "water", energy, depth_mm=line)
    scatter = np.empty((len(depth_mm), len(shift)))
    for step, front in enumerate(shift):
        inner = np.interp(front + depth_mm, line, place)
        # what was scattered in the shifter: its spot, and its angle carried over the depth
        spot = np.interp(front, line, place)
        turned = np.interp(front, line, angle) * depth_mm**2 + 2.0 * np.interp(front, line, both) * depth_mm
        scatter[:, step] = np.maximum(inner, spot + turned)
    optics = []
    for axis in range(2):
        pick = [np.broadcast_to(np.asarray(value, dtype=np.float64), (2,))[axis] for value in (
            beam.spot_sigma_mm, beam.divergence_sigma_mrad, beam.correlation)]  # fmt: skip
        angle_sigma = 1e-3 * pick[1]
        optics.append(pick[0] ** 2 + 2.0 * pick[2] * pick[0] * angle_sigma * w_mm + (angle_sigma * w_mm) ** 2)
    return optics[0][:, None] + scatter, optics[1][:, None] + scatter

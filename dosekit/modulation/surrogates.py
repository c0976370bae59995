"""A quick stand-in for the fold, for the many small steps of a search.

Dose of one particle of step ``k`` of a spot in a voxel at water-equivalent depth ``z`` on its own ray::

    d = sum over components of f_c T_ck(z) x exp(-r_u^2 / (2 s_u^2) - r_v^2 / (2 s_v^2)) / (2 pi s_u s_v)

with depth doses ``T`` of the depth library (stars folded in along depth) and Gaussian widths of the beam's
optics and of Fermi-Eyges scattering in water.  All components share the core's width.  Kept as a sparse
matrix over the chosen voxels, so that a step of a search takes milliseconds.

Neutrons, photons and neutral products (decimetres wide) are left out; so are edges beside the ray and the
spread of star products in other tissue.  `dosekit.modulation.corrections` puts back what is missing from
the fold itself, which alone decides the dose that is reported.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.basis.constants import GRAY_PER_MEV_PER_GRAM
from dosekit.errors import InputError, SizeError

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import ArrayLike, NDArray
    from scipy.sparse import csr_array

    from dosekit.depths.library import DepthLibrary
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field

__all__ = ["pencil_matrices", "water_depth_mm"]

#: Dose (Gy) of 1e9 particles per mm2 that leave 1 MeV/mm each in water.
_GRAY_PER_UNIT = 1e9 * 1e3 * GRAY_PER_MEV_PER_GRAM
_WIDE = ("star_neutron", "star_photon")
_REACH_SIGMAS = 3.2
_SIGNIFICANT = 1e-3
_RAY_STEP_MM = 2.0
_MOST_ENTRIES = 60_000_000
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
    beam = frame.to_beam(_centres(grid, voxels))
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


def pencil_matrices(
    field: Field,
    library: DepthLibrary,
    grid: VoxelGrid,
    voxels: ArrayLike,
    *,
    factors: Sequence[Mapping[str, ArrayLike]],
    star_scale: float = 1.0,
) -> list[csr_array]:
    """Build the stand-in of a field for one or several sets of component factors.

    Parameters
    ----------
    field : Field
        Spots, steps and geometry.
    library : DepthLibrary
        Depth curves of the field's steps.
    grid : VoxelGrid
        The volume.
    voxels : array_like of int, shape (n,)
        Flat indices of the voxels.
    factors : sequence of mapping of str to number or array
        For each matrix the factor of each component, one number or one for each voxel; a component left out
        counts 0.
    star_scale : float
        Factor on the charged energy of stars.

    Returns
    -------
    list of csr_array, shape (n, spots times steps)
        Gy (times factor) per 1e9 particles.

    Raises
    ------
    InputError, SizeError
        A library of other steps; more than 6e7 entries.
    """
    from scipy.sparse import coo_array, csr_array
    from scipy.spatial import cKDTree

    places = np.asarray(voxels, dtype=np.int64).ravel()
    spots, steps = field.shape
    if len(library.residual_range_mm) != steps:
        raise InputError(
            f"a library of {len(library.residual_range_mm)} steps for a field of {steps}",
            allowed="the field's own library",
            remedy="build the library from the field's shifter thicknesses",
        )
    frame = field.frame(grid.patient_position)
    beam = frame.to_beam(_centres(grid, places))
    depth = water_depth_mm(field, grid, places)
    variance_u, variance_v = _variances(field, library, depth, beam[:, 2])
    wide = frame.magnification(beam[:, 2])
    tree = cKDTree(field.spots_mm)
    reach = _REACH_SIGMAS * np.sqrt(np.maximum(variance_u, variance_v).max(axis=1)) / wide
    near = tree.query_ball_point(beam[:, :2], reach, return_sorted=True)
    counts = np.array([len(found) for found in near], dtype=np.int64)
    if float(counts.sum()) * steps * len(factors) > 4.0 * _MOST_ENTRIES:
        raise SizeError(
            f"a stand-in with {int(counts.sum()) * steps} entries",
            allowed=f"at most {4 * _MOST_ENTRIES}",
            remedy="choose fewer voxels, wider spots spacing or fewer steps",
        )
    row = np.repeat(np.arange(len(places)), counts)
    spot = np.fromiter((index for found in near for index in found), dtype=np.int64, count=int(counts.sum()))
    apart = (beam[row, :2] - field.spots_mm[spot]) * wide[row, None]
    curves = library.depth_dose(star_scale=star_scale) * _GRAY_PER_UNIT
    matrices = []
    for chosen in factors:
        amplitude = _amplitudes(curves, library.depth_mm, depth, chosen)
        top = float(amplitude.max(initial=0.0))
        rows, columns, values = [], [], []
        for step in range(steps):
            live = amplitude[row, step] > _SIGNIFICANT * top
            i, s, off = row[live], spot[live], apart[live]
            u2, v2 = variance_u[i, step], variance_v[i, step]
            value = np.exp(-0.5 * (off[:, 0] ** 2 / u2 + off[:, 1] ** 2 / v2)) / (2.0 * np.pi * np.sqrt(u2 * v2))
            rows.append(i)
            columns.append(s * steps + step)
            values.append(amplitude[i, step] * value)
        shape = (len(places), spots * steps)
        entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
        matrices.append(csr_array(coo_array(entries, shape=shape)))
    return matrices


def _centres(grid: VoxelGrid, voxels: ArrayLike) -> NDArray[np.float64]:
    """Give the centres (x, y, z) of voxels."""
    k, j, i = np.unravel_index(np.asarray(voxels, dtype=np.int64).ravel(), grid.shape)
    return np.stack([grid.centres_mm("x")[i], grid.centres_mm("y")[j], grid.centres_mm("z")[k]], axis=1)


def _amplitudes(
    curves: NDArray[np.float64],
    depth_mm: NDArray[np.float64],
    at_mm: NDArray[np.float64],
    factors: Mapping[str, ArrayLike],
) -> NDArray[np.float64]:
    """Weighted broad-field dose of each step at each voxel's depth, shape (voxels, steps)."""
    out = np.zeros((len(at_mm), len(curves)))
    for place, name in enumerate(COMPONENTS):
        if name in _WIDE or name not in factors:
            continue
        factor = np.asarray(factors[name], dtype=np.float64)
        for step in range(len(curves)):
            out[:, step] += factor * np.interp(at_mm, depth_mm, curves[step, place], right=0.0)
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

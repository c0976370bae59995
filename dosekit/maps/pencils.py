"""Make a field ready to be folded: lattices, widths, taps, and the order in which the loops take them.

The lattices follow from the spots and the volume: rays where the spots reach, a fine lattice around them as wide as
the core spreads, a coarse one as wide as the broad parts do, no wider than the volume. Memory is checked before it is
taken.
"""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import GeometryWarning
from dosekit.grids.memory import check_memory
from dosekit.maps.fields import Field
from dosekit.maps.loops import Lattice, Loops, Spreads, core_table, field_bytes
from dosekit.maps.passes import FieldPencils
from dosekit.maps.rays import Matter, Planes, RayTrace, plane_lattice, trace
from dosekit.maps.tables import StepTables, step_tables
from dosekit.maps.widths import REACH_SIGMAS, gaussian_taps, spot_profiles, width_ladder

if TYPE_CHECKING:
    from dosekit.depths.library import DepthLibrary

__all__ = ["FieldPencils", "field_pencils"]

BODY_RSP = 0.05
"""Relative stopping power above which a ray counts as having met something."""

_COARSEST_MM = 8.0
_LINEAR_VARIANCE = 1.0 / 6.0  # mean variance that linear interpolation adds, squared lattice steps
_SPLINE_VARIANCE = 1.0 / 4.0  # variance that interpolation by a quadratic B-spline adds, anywhere
_SIGNIFICANT = 1e-4


def field_pencils(
    field: Field,
    matter: Matter,
    library: DepthLibrary,
    *,
    patient_position: str = "HFS",
    tables: StepTables | None = None,
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
    tables : StepTables, optional
        The library as `dosekit.maps.tables.step_tables` gives it, when that is known already.

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
    from numba import get_num_threads

    frame = field.frame(patient_position)
    tables = step_tables(library, field.beam) if tables is None else tables
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
    profiles = [_profiles(field.spots_mm[:, axis], sigma[axis], nodes[axis], spacing) for axis in range(2)]
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
    columns, share_u = _coarse_places(rays.u_mm, coarse.u_mm, coarse.spacing_mm)
    lines, share_v = _coarse_places(rays.v_mm, coarse.v_mm, coarse.spacing_mm)
    check_memory(
        field_bytes(
            planes=len(planes.w_mm),
            rays=rays.slant.size,
            nodes=fine.nodes,
            coarse_nodes=coarse.nodes,
            steps=field.shape[1],
            parts=len(part_sigma),
            rungs=len(ladder),
            gathered=len(lines) * (int(columns[-1] - columns[0]) + 2),
            threads=int(get_num_threads()),
        )
        + 8.0 * sum(profile.size for _, profile in profiles),
        what=f"field {field.name!r}",
        remedy="use a coarser volume, a smaller field or fewer range steps",
    )
    # spreading rays over coarse nodes and interpolating between them add a sixth of a squared step each
    core_spreads = _spreads(
        ladder, extra, scale, fine, corner=(rays.v_mm[0], rays.u_mm[0]), target=np.zeros(len(ladder), dtype=np.int64),
        per_area=1.0 / (spacing * magnified) ** 2, less=0.0,
    )  # fmt: skip
    broad_spreads = _spreads(
        part_sigma**2, extra, scale * factor**2, coarse, corner=(coarse.v_mm[lines[0]], coarse.u_mm[columns[0]]),
        target=part_target, per_area=1.0 / (coarse.spacing_mm * magnified) ** 2, less=2.0 * _LINEAR_VARIANCE,
    )  # fmt: skip
    loops = Loops(
        wet=rays.wet_mm,
        local=rays.scatter,
        slant=rays.slant,
        gaps=np.concatenate([[ahead], np.diff(planes.w_mm)]),
        inverse_bin=1.0 / tables.bin_mm,
        core=core_table(tables),
        alive=tables.alive(),
        start=tables.start,
        reference=shift_variance,
        growth=growth,
        rungs=len(ladder),
        squared_rungs_per_mm2=1.0 / width_step**2,
        kernel_of_plane=which,
        core_spreads=core_spreads,
        broad_spreads=broad_spreads,
        broad=broad,
        parts_at=_parts_at(broad),
        column=columns,
        share_u=share_u,
        row=lines,
        share_v=share_v,
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


def _spreads(
    variance_mm2: NDArray[np.float64],
    extra_mm2: NDArray[np.float64],
    scale_mm2: NDArray[np.float64],
    lattice: Lattice,
    *,
    corner: tuple[float, float],
    target: NDArray[np.int64],
    per_area: NDArray[np.float64],
    less: float,
) -> Spreads:
    """Return how widths are spread on a lattice.

    `extra_mm2` (2, kernels) comes on top of every width; `scale_mm2` is the squared spacing for each kernel; `less` is
    the variance, in squared steps, that is there already.
    """
    taps, radii = [], []
    for axis in range(2):
        variance = (variance_mm2[None, :] + extra_mm2[axis][:, None]) / scale_mm2[:, None] - less
        t, reach = gaussian_taps(np.maximum(variance, 0.0), largest=len(lattice.u_mm) + len(lattice.v_mm))
        taps.append(t)
        radii.append(reach)
    length = max(t.shape[-1] for t in taps)
    return Spreads(
        taps_u=_padded(taps[0], length),
        taps_v=_padded(taps[1], length),
        radius=np.maximum(*radii),
        corner=np.array(
            [
                _index_of(corner[0], lattice.v_mm, lattice.spacing_mm),
                _index_of(corner[1], lattice.u_mm, lattice.spacing_mm),
            ]
        ),
        target=target,
        per_area=per_area,
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


def _profiles(
    centres_mm: NDArray[np.float64], sigma_mm: NDArray[np.float64], nodes_mm: NDArray[np.float64], spacing_mm: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return what each spot gives to the rays along one axis; spots in one line are the same."""
    different, which = np.unique(centres_mm, return_inverse=True)
    first, profile = spot_profiles(different, sigma_mm, nodes_mm, spacing_mm=spacing_mm)
    return first[which], profile[which]


def _air_variance(optics: tuple[float, float, float], distance_mm: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the variance of position in air at a distance behind the surface, mm2."""
    sigma, angle, correlation = optics
    return sigma**2 + 2.0 * correlation * sigma * angle * distance_mm + (angle * distance_mm) ** 2


def _widest(rays: RayTrace, planes: Planes, tables: StepTables, ahead: float, reference: NDArray[np.float64]) -> float:
    """Return the largest scatter variance behind the surface, from every third ray, with room for the others."""
    wet = rays.wet_mm[:, ::3, ::3].reshape(len(planes.w_mm), -1)
    scatter = rays.scatter[:, ::3, ::3].reshape(wet.shape)
    slant = rays.slant[::3, ::3].reshape(-1, 1)
    counts = tables.narrow[:, 0] > _SIGNIFICANT * tables.narrow[:, 0].max(axis=0)
    counts[:-1] |= counts[1:]  # between a row and the next
    deepest = float(np.flatnonzero(counts.any(axis=1)).max(initial=0)) + 1.5
    a0, a1, a2 = (np.tile(moment, (wet.shape[1], 1)) for moment in tables.start)
    widest, before = 0.0, np.zeros(wet.shape[1])
    for j in range(len(wet)):
        length = slant * (ahead if j == 0 else planes.w_mm[j] - planes.w_mm[j - 1])
        row, part = _row_and_part(0.5 * (before + wet[j]) / tables.bin_mm, len(counts))
        power = (1.0 - part) * tables.power[row] + part * tables.power[row + 1]
        power *= scatter[j][:, None] if j > 0 else 0.0
        a2 += length * (2.0 * a1 + length * (a0 + power * length / 3.0))
        a1 += length * (a0 + 0.5 * power * length)
        a0 += power * length
        before = wet[j]
        row, _ = _row_and_part(before / tables.bin_mm, len(counts))
        widest = max(widest, float((a2 - reference)[counts[row]].max(initial=0.0)))
        if float(before.min()) > deepest * tables.bin_mm:
            break
    return 1.1 * widest + 0.01


def _row_and_part(place: NDArray[np.float64], rows: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return the table row below depths (in rows from the surface), and the share of the next as a column."""
    from_first = np.clip(place - 0.5, 0.0, rows - 1.0)
    row = np.minimum(from_first.astype(np.int64), rows - 2)
    return row, (from_first - row)[:, None]


def _widened(
    planes: Planes, nodes: list[NDArray[np.float64]], margin_mm: float, spacing_mm: float, bounds: NDArray[np.float64]
) -> Lattice:
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
    return Lattice(u_mm=axes[0], v_mm=axes[1], spacing_mm=spacing_mm)


def _parts(tables: StepTables) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64]]:
    """Return the broad parts, with empty ones up to a multiple of eight: loops over parts then run in full vectors."""
    count = len(tables.part_sigma_mm)
    more = 8 - count % 8 if count % 8 or not count else 0
    sigma = np.concatenate([tables.part_sigma_mm, np.full(more, tables.part_sigma_mm.min(initial=10.0))])
    target = np.concatenate([tables.part_target, np.full(more, tables.part_target.min(initial=0))])
    return sigma, target, np.ascontiguousarray(np.pad(tables.broad, [(0, 0), (0, 0), (0, more)]))


def _parts_at(broad: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return how many parts count at each row, rounded up to a multiple of four."""
    parts = broad.shape[2]
    last = np.where((broad != 0.0).any(axis=1), np.arange(1, parts + 1), 0).max(axis=1)
    return np.asarray(np.minimum(-(-last // 4) * 4, parts), dtype=np.int64)


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

"""An invented depth library and small volumes, for tests that need no real physics."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
from scipy.special import ndtr

from dosekit.basis.materials import material
from dosekit.beams.beam import Beam
from dosekit.beams.ranges import range_table
from dosekit.grids.voxels import VoxelGrid

BEAM = Beam("pi-", momentum_mev_c=120, momentum_sigma=0.02, spot_sigma_mm=4.0)


def invented_library(beam, shift_mm, *, tail_mm=60.0, straggling_mm=4.0):
    """Smooth curves of the right kind: a core with a peak and stops, and something in every other quantity."""
    table = range_table(beam.particle, "water")
    reach = float(table.range_mm(beam.kinetic_energy_mev))
    shift = np.atleast_1d(np.asarray(shift_mm, dtype=float))
    depth = np.arange(int(reach + tail_mm)) + 0.5
    left = (reach - shift)[:, None] - depth
    alive = ndtr(left / straggling_mm) * np.exp(-depth / 600.0)
    ones = np.ones_like(left)
    quantities = {
        "core": alive * (0.25 + 6.0 / np.maximum(left + 8.0, 3.0)),
        "core_stops": 0.7 * np.exp(-0.5 * (left / straggling_mm) ** 2) / straggling_mm / np.sqrt(2 * np.pi),
        "scattered": 0.02 * alive,
        "scattered_stops": 0.0004 * alive,
        "in_flight_charged": 0.03 * alive,
        "in_flight_neutral": 0.02 * np.exp(-depth / 150.0) * ones,
        "decay": 0.003 * alive,
        "contaminant_muon": 0.02 * np.exp(-depth / 400.0) * ones,
        "contaminant_electron": 0.03 * np.exp(-depth / 500.0) * ones,
    }
    extra = {
        "scattered": 0.1 * depth * ones,
        "scattered_stops": 0.1 * depth * ones,
        "in_flight_charged": 6.0 * ones,
        "in_flight_neutral": 12.0 * ones,
        "decay": 8.0 * ones,
        "contaminant_muon": 0.0 * ones,
        "contaminant_electron": 0.05 * depth * ones,
    }
    return SimpleNamespace(
        residual_range_mm=reach - shift,
        shift_mm=shift,
        depth_mm=depth,
        quantities=quantities,
        extra_sigma_mm=extra,
        kinetic_energy_mev=np.maximum(table.energy_mev(np.maximum(left, 0.5)), 0.3),
        let={},
        unequal={},
    )


def box_grid(shape_zyx, spacing_mm=2.0, *, fill="water", centre_mm=(0.0, 0.0, 0.0)):
    """A box of one material around a centre, with no air about it."""
    spacing = np.broadcast_to(np.asarray(spacing_mm, dtype=float), (3,))
    origin = [c - 0.5 * s * (n - 1) for c, s, n in zip(centre_mm, spacing, shape_zyx[::-1], strict=True)]
    stuff = material(fill)
    return VoxelGrid(
        origin_mm=tuple(origin),
        spacing_mm=tuple(spacing),
        density_g_cm3=np.full(shape_zyx, stuff.density_g_cm3, dtype=np.float32),
        material_index=np.zeros(shape_zyx, dtype=np.uint16),
        materials=(stuff,),
    )


def mixed_grid(shape_zyx, rng, spacing_mm=(3.0, 2.5, 4.0)):
    """A box of random blobs of four materials and densities."""
    from scipy.ndimage import zoom

    names = ("water", "bone_cortical", "lung_tissue", "air")
    stuffs = tuple(material(name) for name in names)
    coarse = rng.integers(0, 4, size=tuple(-(-n // 3) for n in shape_zyx))
    index = zoom(coarse, 3, order=0)[: shape_zyx[0], : shape_zyx[1], : shape_zyx[2]].astype(np.uint16)
    density = np.array([stuff.density_g_cm3 for stuff in stuffs])[index] * rng.uniform(0.5, 1.0, shape_zyx)
    origin = tuple(-0.5 * s * (n - 1) for s, n in zip(spacing_mm, shape_zyx[::-1], strict=True))
    return VoxelGrid(origin, spacing_mm, density.astype(np.float32), index, stuffs)

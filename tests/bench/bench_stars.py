"""How long does the transport of stars take, and how much memory? Three sizes, ratios to the number of voxels.

Run with ``python tests/bench/bench_stars.py``; nothing here is a test.
"""

from __future__ import annotations

import resource
import time

import numpy as np

from dosekit.basis.materials import material
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.stars import carry_stars


def body(size):
    """A cube of water at 2 mm with a slab of lung and one of bone, and stops in a cube of a quarter of its side."""
    materials = (material("water"), material("lung_tissue", 0.30), material("bone_cortical"))
    index = np.zeros((size, size, size), dtype=np.uint16)
    index[:, size // 8 : size // 5, :] = 2
    index[:, size // 4 : size // 3, :] = 1
    density = np.array([m.density_g_cm3 for m in materials], dtype=np.float32)[index]
    grid = VoxelGrid((0, 0, 0), (2.0, 2.0, 2.0), density, index, materials)
    stops = np.zeros(grid.shape)
    part = slice(3 * size // 8, 5 * size // 8)
    stops[part, part, part] = 1.0
    return grid, stops


def main():
    """Print seconds and memory for three sizes."""
    grid, stops = body(40)
    start = time.perf_counter()
    carry_stars(stops, grid)
    print(f"warm-up (compiling or loading): {time.perf_counter() - start:.1f} s")
    first = None
    for size in (50, 100, 200):
        grid, stops = body(size)
        before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        start, cpu = time.perf_counter(), time.process_time()
        for component in ("star_light", "star_heavy", "star_neutron", "star_photon"):
            t = time.perf_counter()
            carry_stars(stops, grid, components=[component])
            print(f"   {component}: {time.perf_counter() - t:.2f} s")
        start, cpu = time.perf_counter(), time.process_time()
        carry_stars(stops, grid)
        seconds, cpu = time.perf_counter() - start, time.process_time() - cpu
        per_voxel = seconds / size**3
        first = first or per_voxel
        after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        print(
            f"{size}^3: {seconds:.2f} s ({cpu:.2f} s of processor), {per_voxel * 1e9:.0f} ns per voxel, "
            f"{per_voxel / first:.2f} times the smallest, "
            f"memory +{(after - before) / 1e6:.2f} GB (peak {after / 1e6:.2f} GB)"
        )


if __name__ == "__main__":
    main()

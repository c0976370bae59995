"""How long do a depth curve and a library take, and how much faster is the compiled core than the readable oracle?

Run with ``python tests/bench/bench_depths.py``; prints, asserts nothing.
"""

from __future__ import annotations

import sys
import time
from functools import partial
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

import dosekit as dk
from dosekit.beams.ranges import range_table
from dosekit.beams.straggling import range_shape, range_variance_mm2
from dosekit.depths import solver
from dosekit.depths.angles import COSINES
from dosekit.depths.coarse import coarse_grid
from dosekit.depths.core import solve_core
from dosekit.depths.products import carry

import naive

BEAM = dk.Beam("pi-", momentum_mev_c=172, momentum_sigma=0.03, contaminants={"mu-": 0.08, "e-": 0.15})


def best(call, repeats=5):
    """Return the shortest of a few times, solutions not kept between them."""
    times = []
    for _ in range(repeats):
        solver._solve.cache_clear()
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return min(times)


def main():
    ranges = np.linspace(60.0, 190.0, 30)

    def curve():
        """Make one curve."""
        return dk.depth_curve(BEAM, "water", bin_mm=0.5)

    start = time.perf_counter()
    curve()
    print(f"depth curve, 0.5 mm bins, first call       {time.perf_counter() - start:8.3f} s")
    print(f"depth curve, 0.5 mm bins, warm             {best(curve):8.3f} s   (asked for: 0.3 s)")
    for mode, bar in (("shifter", "asked for: 1 s"), ("momentum", "30 separate momenta")):
        call = partial(dk.depth_library, BEAM, ranges, mode=mode)
        call()
        print(f"library of 30 residual ranges, {mode:10s}  {best(call, 3):8.3f} s   ({bar})")

    water = dk.material("water")
    settings = {"spread": 0.0, "layers": ((water, 250.0),), "bin_mm": 0.5, "yields": "cascade"}
    bare = {"nuclear": False, "decays": False, "detour": False}
    fast = best(lambda: solve_core("pi-", 172.0, **settings, **bare))
    table = range_table("pi-", water)
    reach = float(table.range_mm(BEAM.kinetic_energy_mev))
    edges = np.arange(0.0, 250.1, 0.5)
    left = table.energy_mev(np.maximum(reach - edges, 0.0))
    width = np.sqrt(
        np.maximum(
            range_variance_mm2("pi-", water, BEAM.kinetic_energy_mev) - range_variance_mm2("pi-", water, left), 0
        )
    )
    x, density = range_shape("pi-", water, BEAM.kinetic_energy_mev)
    x, density = x[::40], density[::40] / np.sum(density[::40])
    start = time.perf_counter()
    naive.slowing_down(table.energy_mev, reach, edges, edges, width, x, density)
    slow = time.perf_counter() - start
    print(f"slowing down alone: ours {fast:.4f} s, readable {slow:.2f} s, ratio {slow / fast:.0f}")

    cells = 60
    layers = ((water, 2.5 * cells),)
    fine = np.linspace(0.0, 2.5 * cells, cells + 1)
    grid = coarse_grid(
        "proton", 100.0, layers=layers, edges_mm=fine, layer=np.zeros(cells, dtype=np.int64), step_mm=2.5
    )
    nodes = range_table("proton", water).energy_mev(2.5 * np.arange(30))
    source = np.random.default_rng(1).random((30, cells, 16))
    fast = best(lambda: carry(source.copy(), grid, nodes, np.ones((1, 30))))
    start = time.perf_counter()
    naive.carried_straight(source, COSINES, 2.5, nodes, cells)
    slow = time.perf_counter() - start
    print(f"products along lines: ours {fast:.4f} s, readable {slow:.2f} s, ratio {slow / fast:.0f}")


if __name__ == "__main__":
    main()

"""How long does a fold take? Three volumes, three numbers of spots, and ratios.

Run with ``python tests/bench/bench_fold.py``; nothing here is a test. Prints seconds after a warm-up (the best of
three), voxel-updates per second (voxels reached times range steps), the share of the machine's measured multiply-add
peak that the counted multiply-adds make up, memory by the system, and the ratio to the readable
oracle on a tiny case. ``--plot FILE`` draws how the cost grows.
"""

from __future__ import annotations

import argparse
import resource
import sys
import time
from pathlib import Path

import numpy as np
from numba import get_num_threads, njit, prange

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from dosekit.beams.beam import Beam
from dosekit.maps.fields import Field, spot_lattice
from dosekit.maps.fold import fold, library_of, pencils_of

import naive
from invented_fields import box_grid

BEAM = Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02, spot_sigma_mm=5, range_shifter="water")


@njit(parallel=True)
def _multiply_adds(values, rounds):
    """Many independent multiply-adds that stay in the first cache."""
    for n in prange(values.shape[0]):
        row = values[n]
        for _ in range(rounds):
            for k in range(row.size):
                row[k] = row[k] * 0.999 + 0.001


def peak_per_second():
    """Multiply-adds per second that a plain loop reaches on all threads."""
    values = np.ones((get_num_threads() * 4, 2048))
    _multiply_adds(values, 10)
    rounds = 20000
    start = time.perf_counter()
    _multiply_adds(values, rounds)
    return values.size * rounds / (time.perf_counter() - start)


def field_of(size_mm, half_width_mm, steps):
    """A field of spots 5 mm apart and range steps, with its peak inside the volume."""
    return Field(
        "bench", BEAM, (0, 120.0 - 0.5 * size_mm, 0), 0.0, spots_mm=spot_lattice(half_width_mm, 5.0),
        shift_mm=np.linspace(0.0, 100.0, steps),
    )  # fmt: skip


def best(work, times=3):
    """The shortest of several runs, s."""
    seconds = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def counted(pencils):
    """Multiply-adds of one fold, counted from the sizes of its loops."""
    planes, rows, columns = pencils.rays.wet_mm.shape
    steps = pencils.field.shape[1]
    parts = pencils.tables.broad.shape[2]
    fine, coarse = len(pencils.fine.u_mm) * len(pencils.fine.v_mm), len(pencils.coarse.u_mm) * len(pencils.coarse.v_mm)
    per_ray = steps * (parts + 20)
    reach = 2.0 * 4.0 * 8.0 / pencils.fine.spacing_mm
    per_plane = rows * columns * per_ray + 2 * 4 * reach * fine + parts * 27 * coarse
    return planes * per_plane + len(pencils.voxels()) * 8 * 8


def run(size, half_width_mm, steps, peak):
    """Fold one case and print a line; return voxels, spots and seconds."""
    grid = box_grid((size, size, size), 2.0)
    field = field_of(2.0 * size, half_width_mm, steps)
    library_of(field, "evaluated")

    def work():
        pencils = pencils_of(field, grid)
        fine, coarse = pencils.maps(field.weights)
        out = np.zeros((1, size**3), dtype=np.float32)
        voxels = pencils.voxels()
        rows = np.zeros(6, dtype=np.int64)
        pencils.deposit(fine, coarse, voxels, voxels, factor=np.ones((1, 1)), rows=rows, out=out)

    seconds = best(work)
    with_stars = best(lambda: fold(field, grid), times=1)
    pencils = pencils_of(field, grid)
    updates = len(pencils.voxels()) * steps
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{size}^3 voxels, {len(field.spots_mm)} spots, {steps} steps: folded {seconds:.2f} s, "
        f"with stars {with_stars:.2f} s, "
        f"{updates / seconds / 1e6:.0f} million voxel-updates per s, {counted(pencils) / seconds / peak:.2f} of the "
        f"multiply-add peak, peak memory {memory:.2f} GB"
    )
    return size**3, len(field.spots_mm), seconds


def against_the_oracle():
    """Print the ratio to the readable oracle on a tiny case (core only there)."""
    grid = box_grid((6, 12, 6), 4.0)
    field = Field("tiny", BEAM, (0, 0, 0), 0.0, spots_mm=[[0, 0]], shift_mm=[120.0])
    pencils = pencils_of(field, grid)
    pencils.maps(field.weights)
    fast = best(lambda: pencils.maps(field.weights))
    start = time.perf_counter()
    naive.fold_core_on_planes(pencils, field.weights)
    slow = time.perf_counter() - start
    print(f"tiny case: readable oracle {slow:.2f} s, fast {fast * 1e3:.1f} ms, ratio {slow / fast:.0f}")


def main():
    """Print the table, and draw it when asked."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--plot", metavar="FILE", default=None)
    wanted = parser.parse_args()
    start = time.perf_counter()
    fold(field_of(80.0, 10.0, 2), box_grid((40, 40, 40), 2.0))
    print(f"warm-up (compiling or loading): {time.perf_counter() - start:.1f} s on {get_num_threads()} threads")
    peak = peak_per_second()
    print(f"multiply-add peak of a plain loop: {peak / 1e9:.1f} billion per s")
    rows = [run(size, 45.0, 30, peak) for size in (100, 150, 200)]
    rows += [run(150, half, 30, peak) for half in (10.0, 25.0, 60.0)]
    against_the_oracle()
    if wanted.plot:
        from matplotlib.figure import Figure

        figure = Figure(figsize=(7.0, 3.0), layout="constrained")
        left, right = figure.subplots(1, 2)
        left.plot([row[0] / 1e6 for row in rows[:3]], [row[2] for row in rows[:3]], "o-")
        left.set(xlabel="voxels, million", ylabel="seconds", title="361 spots, 30 steps")
        right.plot([row[1] for row in rows[3:]], [row[2] for row in rows[3:]], "o-")
        right.set(xlabel="spots", ylabel="seconds", title="3.4 million voxels, 30 steps")
        figure.savefig(wanted.plot, dpi=150)


if __name__ == "__main__":
    main()

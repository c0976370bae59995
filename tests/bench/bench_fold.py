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
from dosekit.outputs.style import letter_panel, new_figure, own_style, styled

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
    work, used = pencils.loops, pencils._used
    planes, _, columns = work.wet.shape
    followed = 0.0
    for wet in work.wet:
        row = np.minimum((wet * work.inverse_bin).astype(int), len(work.alive) - 1)
        broad = np.minimum((wet * work.inverse_bin * 4).astype(int), len(work.parts_at) - 1)
        followed += 25.0 * work.alive[row].sum() + work.core.shape[2] * work.parts_at[broad].sum()
    spread = 0.0
    for j in range(planes):
        n = work.kernel_of_plane[j]
        for lattice, spreads, lines, width, parts in (
            (pencils.fine, work.core_spreads, used[j].sum(axis=0), columns, 2),
            (pencils.coarse, work.broad_spreads, work.coarse_size[0], work.coarse_size[1], 1),
        ):
            taps = 2.0 * spreads.radius[n] + 1.0
            wide = np.minimum(width + taps - 1.0, len(lattice.u_mm))
            spread += (parts * lines * (np.minimum(taps, len(lattice.v_mm)) + taps) * wide).sum()
    return followed + spread + 30.0 * pencils.reach().count.sum()


def run(size, half_width_mm, steps, peak):
    """Fold one case and print a line; return voxels, spots, and seconds without and with stars."""
    grid = box_grid((size, size, size), 2.0)
    field = field_of(2.0 * size, half_width_mm, steps)
    library_of(field, "evaluated")

    def work():
        pencils = pencils_of(field, grid)
        fine, coarse = pencils.maps(field.weights)
        out = np.zeros((6, size**3), dtype=np.float32)
        pencils.deposit(fine, coarse, pencils.reach(), factor=np.ones((6, 1)), rows=np.arange(6), out=out)

    work()
    seconds = best(work)
    with_stars = best(lambda: fold(field, grid), times=2)
    pencils = pencils_of(field, grid)
    updates = int(pencils.reach().count.sum()) * steps
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{size}^3 voxels, {len(field.spots_mm)} spots, {steps} steps: folded {seconds:.2f} s, "
        f"with stars {with_stars:.2f} s, "
        f"{updates / seconds / 1e6:.0f} million voxel-updates per s, {counted(pencils) / seconds / peak:.2f} of the "
        f"multiply-add peak, peak memory {memory:.2f} GB"
    )
    return size**3, len(field.spots_mm), seconds, with_stars


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
        draw(rows, Path(wanted.plot))


@styled
def draw(rows, place):
    """Draw how the cost grows with voxels and with spots."""
    figure = new_figure(140.0, 62.0, alt="Seconds of a fold against voxels and against spots, with and without stars.")
    panels = figure.subplots(1, 2)
    for axes, letter, column, unit, part, fixed in (
        (panels[0], "a", 0, 1e6, rows[:3], "361 spots, 30 steps"),
        (panels[1], "b", 1, 1.0, rows[3:], "3.4 million voxels, 30 steps"),
    ):
        for row, style, label in ((2, "o-", "folded"), (3, "s--", "with star transport")):
            axes.plot([case[column] / unit for case in part], [case[row] for case in part], style, label=label)
        axes.set(xlabel=("voxels (million)", "spots")[column], ylabel="time (s)")
        axes.set_xlim(left=0.0)
        axes.set_ylim(bottom=0.0)
        letter_panel(axes, letter, fixed)
    panels[0].legend()
    with own_style():
        figure.savefig(place, dpi=150, metadata={"Software": None})


if __name__ == "__main__":
    main()

"""How long does a CT of 200 slices of 512 x 512 take? Printed beside the time of an independent reader.

Run as ``python tests/bench/bench_ct.py``; nothing here passes or fails. The series is made here, so the files are in
the system's cache. ``read_hu`` is the like of the other reader; ``read_ct`` also makes density and composition.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

SLICES, PIXELS = 200, 512


def fastest(work, times=3):
    """Return the shortest of several durations, seconds."""
    durations = []
    for _ in range(times):
        start = time.perf_counter()
        work()
        durations.append(time.perf_counter() - start)
    return min(durations)


def main():
    """Make the series, read it, print the times."""
    from ct_series import write_series

    from dosekit.grids.ct import read_ct, read_hu

    y, x = np.mgrid[:PIXELS, :PIXELS] - PIXELS / 2
    plane = np.where(x * x / 190.0**2 + y * y / 140.0**2 < 1, 40, -1000)
    noise = np.random.default_rng(1).normal(0, 12, (SLICES, PIXELS, PIXELS))
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_series(folder, (plane + noise).clip(-1024, 3000), spacing=(0.8, 0.8, 1.5))
        start = time.perf_counter()
        read_ct(folder)
        rows = [("dosekit read_ct, first call", time.perf_counter() - start)]
        rows += [("dosekit read_ct", fastest(lambda: read_ct(folder)))]
        rows += [("dosekit read_hu", fastest(lambda: read_hu(folder)))]
        try:
            import SimpleITK as sitk
        except ImportError:
            print("SimpleITK is not installed: no time to compare with")
        else:

            def theirs():
                reader = sitk.ImageSeriesReader()
                reader.SetFileNames(sitk.ImageSeriesReader.GetGDCMSeriesFileNames(str(folder)))
                return reader.Execute()

            rows += [("SimpleITK series reader", fastest(theirs))]
    print(f"{SLICES} slices of {PIXELS} x {PIXELS}, files cached")
    for what, seconds in rows:
        print(f"{what:32s} {seconds:6.2f} s   {seconds / rows[-1][1]:5.2f} x the last line")


if __name__ == "__main__":
    main()

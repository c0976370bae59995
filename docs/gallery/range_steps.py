"""Make eight centimetres flat with range steps, and draw the ridge that gives the same steps."""

import sys
from pathlib import Path

import numpy as np

import dosekit as dk
from dosekit.modulation.devices import ridge_profile
from dosekit.outputs.figures_modulation import range_steps_figure, ridge_profile_figure
from dosekit.outputs.style import write_figure


def main(folder: Path) -> None:
    beam = dk.Beam("pi-", momentum_mev_c=172, momentum_sigma=0.02, spot_sigma_mm=5)
    ranges = np.arange(104.0, 196.0, 5.0)[::-1]
    library = dk.depth_library(beam, ranges)
    curves = library.depth_dose(components=False)
    interval = (100.0, 180.0)
    settings = dk.range_steps(curves, library.depth_mm, interval, residual_range_mm=ranges, shift_mm=library.shift_mm)
    figure = range_steps_figure(
        settings.depth_mm,
        curves[settings.index],
        interval_mm=settings.interval_mm,
        residual_range_mm=settings.residual_range_mm,
        weights=settings.weights,
        flatness=settings.flatness,
        flat_interval_mm=settings.measures.judged_mm,
        title="negative pions, 172 MeV/c",
    )
    write_figure(figure, folder / "range_steps")
    pmma = 1.16  # stopping power of PMMA relative to water, per length
    ridge = ridge_profile(settings.shift_mm, settings.weights, pitch_mm=8.0, relative_stopping_power=pmma)
    drawn = ridge_profile_figure(ridge.width_mm, ridge.thickness_mm, material="PMMA", pitch_mm=ridge.pitch_mm)
    write_figure(drawn, folder / "ridge")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

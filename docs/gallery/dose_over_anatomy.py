"""Draw one negative-pion field on the shipped trunk phantom: three planes, components, volume histograms."""

import sys
from pathlib import Path

import numpy as np

import dosekit as dk
from dosekit.effects.histograms import volume_histogram
from dosekit.maps.fields import spot_lattice
from dosekit.outputs.figures_histogram import histogram_figure
from dosekit.outputs.figures_slices import component_slices_figure, slices_figure
from dosekit.outputs.style import write_figure

DOSE_GY = 2.0


def target_interval_mm(grid: dk.VoxelGrid) -> tuple[float, float]:
    """Water-equivalent depths of the target's front and back, seen from the front along its middle."""
    x, _, z = grid.centroid_mm("target")
    column = np.argmin(np.abs(grid.centres_mm("z") - z)), slice(None), np.argmin(np.abs(grid.centres_mm("x") - x))
    behind = np.cumsum(grid.relative_stopping_power()[column]) * grid.spacing_mm[1]
    inside = behind[grid.structure("target")[column] > 0.5]
    return float(inside[0]), float(inside[-1])


def main(folder: Path) -> None:
    grid = dk.phantom("torso", spacing_mm=4.0)
    near, far = target_interval_mm(grid)
    beam = dk.Beam(
        "pi-", momentum_mev_c=160, momentum_sigma=0.02, spot_sigma_mm=5, contaminants={"mu-": 0.05, "e-": 0.05}
    )
    ranges = np.arange(far + 6.0, near - 6.0, -5.0)
    library = dk.depth_library(beam, ranges)
    curves = library.depth_dose(components=False)
    steps = dk.range_steps(curves, library.depth_mm, (near, far), residual_range_mm=ranges, shift_mm=library.shift_mm)
    spots = spot_lattice(30.0, 6.0)
    field = dk.Field(
        "anterior",
        beam,
        isocentre_mm=grid.centroid_mm("target"),
        gantry_deg=0,
        spots_mm=spots,
        shift_mm=steps.shift_mm,
        weights=np.tile(steps.share, (len(spots), 1)),
    )
    dose = dk.fold([field], grid)
    inside = grid.structure("target")
    total = dose["dose"].sum("component").values
    scale = DOSE_GY / float((total * inside).sum() / inside.sum())
    dose["dose"] = (dose["dose"] * scale).assign_attrs(units="Gy")
    write_figure(slices_figure(dose, grid, target="target", reference_gy=DOSE_GY), folder / "three_planes")
    figure = component_slices_figure(dose, grid, target="target", reference_gy=DOSE_GY)
    write_figure(figure, folder / "components")
    names = ["target", "liver", "kidney right", "kidney left", "cord"]
    curves_by_name = {name: volume_histogram(scale * total, grid.structure(name)).curve() for name in names}
    figure = histogram_figure(curves_by_name, target="target", order=list(grid.structures), prescribed_gy=DOSE_GY)
    write_figure(figure, folder / "histograms")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

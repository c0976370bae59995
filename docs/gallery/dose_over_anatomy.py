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


def main(folder: Path) -> None:
    grid = dk.phantom("torso", spacing_mm=4.0)
    beam = dk.Beam(
        "pi-", momentum_mev_c=160, momentum_sigma=0.02, spot_sigma_mm=5, contaminants={"mu-": 0.05, "e-": 0.05}
    )
    spots = spot_lattice(24.0, 6.0)
    shifts = 2.0 + 8.0 * np.arange(6)
    shares = np.array([0.30, 0.18, 0.15, 0.13, 0.12, 0.12])  # a rough modulation, not an optimised one
    field = dk.Field(
        "anterior",
        beam,
        isocentre_mm=grid.centroid_mm("target"),
        gantry_deg=0,
        spots_mm=spots,
        shift_mm=shifts,
        weights=np.tile(shares, (len(spots), 1)),
    )
    dose = dk.fold([field], grid)
    total = dose["dose"].sum("component").values
    inside = grid.structure("target")
    scale = 2.0 / float((total * inside).sum() / inside.sum())
    dose["dose"] = (dose["dose"] * scale).assign_attrs(units="Gy")
    total = total * scale
    write_figure(slices_figure(dose, grid, target="target", reference_gy=2.0), folder / "three_planes")
    write_figure(component_slices_figure(dose, grid, target="target", reference_gy=2.0), folder / "components")
    names = ["target", "liver", "kidney right", "kidney left", "cord"]
    curves = {name: volume_histogram(total, grid.structure(name)).curve() for name in names}
    figure = histogram_figure(curves, target="target", order=list(grid.structures), prescribed_gy=2.0)
    write_figure(figure, folder / "histograms")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

"""Draw the depth dose of a negative-pion beam in water, every component apart, and its radiation quality."""

import sys
from pathlib import Path

import dosekit as dk
from dosekit.outputs.figures_depth import depth_curve_figure, let_figure
from dosekit.outputs.style import write_figure


def main(folder: Path) -> None:
    beam = dk.Beam(
        "pi-", momentum_mev_c=172, momentum_sigma=0.02, spot_sigma_mm=5, contaminants={"mu-": 0.08, "e-": 0.15}
    )
    curve = dk.depth_curve(beam, "water", bin_mm=1.0)
    title = "negative pions, 172 MeV/c, water"
    write_figure(depth_curve_figure(curve, title=title), folder / "depth_dose_by_component")
    write_figure(let_figure(curve, title=title), folder / "radiation_quality")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

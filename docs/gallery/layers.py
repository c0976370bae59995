"""Draw a negative-pion beam through muscle, bone, lung and water."""

import sys
from pathlib import Path

import dosekit as dk
from dosekit.outputs.figures_depth import depth_curve_figure
from dosekit.outputs.style import write_figure


def main(folder: Path) -> None:
    lung = dk.material("lung_tissue", density_g_cm3=0.30)
    stack = dk.Layers([("muscle_skeletal", 50), ("bone_cortical", 20), (lung, 80), ("water", 250)])
    beam = dk.Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02, spot_sigma_mm=5)
    figure = depth_curve_figure(dk.depth_curve(beam, stack), title="negative pions, 170 MeV/c, layers")
    write_figure(figure, folder / "layers")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

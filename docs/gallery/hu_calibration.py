"""Draw the HU calibration: density, relative stopping power, charged star energy per stop."""

import sys
from pathlib import Path

from dosekit.grids.calibration import stoichiometric_calibration
from dosekit.outputs.figures_calibration import calibration_figure
from dosekit.outputs.style import write_figure


def main(folder: Path) -> None:
    curve = stoichiometric_calibration().curve()
    figure = calibration_figure(
        curve.hu,
        density_g_cm3=curve.density_g_cm3,
        relative_stopping_power=curve.relative_stopping_power,
        star_energy_mev=curve.star_energy_mev,
        tissues=curve.tissues,
        title="stoichiometric",
    )
    write_figure(figure, folder / "hu_calibration")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

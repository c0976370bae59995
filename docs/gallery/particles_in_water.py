"""Draw negative pions, positive pions and protons of one range in water, side by side."""

import sys
from pathlib import Path

import numpy as np

import dosekit as dk
from dosekit.beams.ranges import range_table
from dosekit.outputs.figures_comparison import ParticleResult, particles_depth_figure
from dosekit.outputs.marks import curve_marks
from dosekit.outputs.style import write_figure

PARTICLES = ("pi-", "pi+", "proton")
RANGE_MM = 195.0


def result(name: str) -> ParticleResult:
    """Compute one particle; dose in % of its own peak."""
    energy_mev = float(range_table(name, "water").energy_mev(RANGE_MM))
    beam = dk.Beam(name, kinetic_energy_mev=energy_mev, momentum_sigma=0.01, spot_sigma_mm=5)
    curve = dk.depth_curve(beam, "water", depth_mm=300.0)
    energy, let = curve["energy"].values, np.nan_to_num(curve["let_dose"].values)
    total = energy.sum(axis=0)
    mean_let = np.divide((energy * let).sum(axis=0), total, out=np.full_like(total, np.nan), where=total > 0.0)
    marks = curve_marks(curve["depth"].values, total)
    return ParticleResult(name, curve["depth"].values, 100.0 * total / marks.peak, let_kev_um=mean_let)


def main(folder: Path) -> None:
    figure = particles_depth_figure([result(name) for name in PARTICLES], title="one range, each scaled to its peak")
    figure.axes[0].set_ylabel("dose (% of its own peak)")
    write_figure(figure, folder / "particles_in_water")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

"""Draw the neutron share of star dose against field size, and the error of each set of directions."""

import sys
from pathlib import Path

import numpy as np
from scipy.signal import fftconvolve
from scipy.special import erf

from dosekit.basis.components import STAR_COMPONENTS
from dosekit.basis.materials import material
from dosekit.capture.exponentials import material_kernel
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.cones_directions import DIRECTION_SETS
from dosekit.maps.stars import DIRECTIONS, carry_stars
from dosekit.outputs.style import letter_panel, new_figure, styled, write_figure

FIELDS_CM = (2, 5, 10, 15, 20)
DEPTH_CM = 8
BOUND = 0.5  # Brenner, Dicello and Zaider, Int. J. Radiat. Oncol. 8 (1982) 121: upper bound for large fields


def water(size: int, spacing_mm: float) -> VoxelGrid:
    density = np.ones((size,) * 3, dtype=np.float32)
    return VoxelGrid((0, 0, 0), (spacing_mm,) * 3, density, density * 0, (material("water"),))


def edge(size: int, spacing_mm: float, width_mm: float, blur_mm: float) -> np.ndarray:
    place = (np.arange(size) - (size - 1) / 2) * spacing_mm
    reach = np.sqrt(2.0) * blur_mm
    return 0.5 * (erf((place + width_mm / 2) / reach) - erf((place - width_mm / 2) / reach))


def neutron_shares(yields: str) -> list[float]:
    """Share of star dose at the middle of stops that fill field x field x 8 cm of a large water tank."""
    size, spacing = 80, 5.0
    grid = water(size, spacing)
    shares = []
    for field in FIELDS_CM:
        lateral, depth = edge(size, spacing, 10.0 * field, 8.0), edge(size, spacing, 10.0 * DEPTH_CM, 5.0)
        stops = depth[:, None, None] * lateral[None, :, None] * lateral[None, None, :]
        energy = carry_stars(stops, grid, yields=yields, block_mm=0.0)
        middle = {name: energy[name][39:41, 39:41, 39:41].sum() for name in STAR_COMPONENTS}
        shares.append(middle["star_neutron"] / sum(middle.values()))
    return shares


def exact_light(size: int, spacing_mm: float) -> np.ndarray:
    """Energy per voxel about a point, voxels cut into 5 x 5 x 5."""
    kernel = material_kernel("star_light", "evaluated", material("water"))
    radii = np.linspace(0.0, size * spacing_mm, 6001)
    left = np.exp(-np.outer(radii, kernel.rates_per_mm)) @ kernel.energies_mev
    per_mm3 = -np.diff(left) / (4.0 / 3.0 * np.pi * np.diff(radii**3))
    place = (np.arange(size) - size // 2) * spacing_mm
    offsets = (np.arange(5) - 2.0) / 5.0 * spacing_mm
    energy = np.zeros((size,) * 3)
    for z in offsets:
        for y in offsets:
            for x in offsets:
                r2 = (place + z)[:, None, None] ** 2 + (place + y)[None, :, None] ** 2 + (place + x) ** 2
                energy += np.interp(np.sqrt(r2), 0.5 * (radii[1:] + radii[:-1]), per_mm3) * (spacing_mm / 5.0) ** 3
    energy[(size // 2,) * 3] += kernel.energy_mev - energy.sum()
    return energy


def direction_errors() -> dict[str, list[float]]:
    """Largest local error of charged star dose where it is over 5 % of the maximum, for each set of directions."""
    size, spacing = 61, 2.0
    grid, exact = water(size, spacing), exact_light(size, spacing)
    place = (np.arange(size) - size // 2) * spacing
    shapes = {
        "pencil, 9 mm by 5 mm": [np.exp(-0.5 * (place / s) ** 2) for s in (5.0, 9.0, 9.0)],
        "narrow pencil, 5 mm by 5 mm": [np.exp(-0.5 * (place / 5.0) ** 2)] * 3,
        "field, 40 mm": [edge(size, spacing, 40.0, 6.0)] * 3,
    }
    errors = {}
    for name, (z, y, x) in shapes.items():
        stops = z[:, None, None] * y[None, :, None] * x[None, None, :]
        stops[stops < 1e-12 * stops.max()] = 0.0
        smooth = fftconvolve(stops, exact, mode="same")
        errors[name] = []
        for count in DIRECTION_SETS:
            parts = carry_stars(stops, grid, components=["star_light", "star_heavy"], directions={"star_light": count})
            truth = smooth + parts["star_heavy"]
            ours = sum(parts.values())
            large = truth > 0.05 * truth.max()
            errors[name].append(float(np.abs(ours[large] / truth[large] - 1.0).max()))
    return errors


@styled
def draw():
    shares = {name: neutron_shares(name) for name in ("evaluated", "cascade")}
    errors = direction_errors()
    print("neutron share", shares)
    print("errors", errors)
    figure = new_figure(
        175, 80, alt="Neutron share of star dose against field size; error against number of directions"
    )
    left, right = figure.subplots(1, 2)
    for (name, values), style in zip(shares.items(), ("-o", "--s"), strict=True):
        left.plot(FIELDS_CM, 100 * np.array(values), style, label=f"{name} yields")
    left.axhline(100 * BOUND, color="0.5", linewidth=0.8)
    left.text(2, 100 * BOUND + 1, "upper bound, Brenner et al. 1982", fontsize=6, va="bottom")
    left.set(xlabel="side of the field / cm", ylabel="neutron share of star dose / %", xlim=(0, 22), ylim=(0, 60))
    left.legend(loc="lower right")
    letter_panel(left, "a", "middle of 8 cm of stops in water")
    for (name, values), style in zip(errors.items(), ("-o", "--s", ":^"), strict=True):
        right.plot(list(DIRECTION_SETS), 100 * np.array(values), style, label=name)
    right.axvline(DIRECTIONS["star_light"], color="0.5", linewidth=0.8)
    right.axhline(2.0, color="0.5", linewidth=0.8)
    right.set(xlabel="directions", ylabel="largest local error / %", xscale="log", ylim=(0, None))
    right.set_xticks(list(DIRECTION_SETS), [str(count) for count in DIRECTION_SETS])
    right.minorticks_off()
    right.legend()
    letter_panel(right, "b", "charged star dose over 5 % of its maximum")
    return figure


def main(folder: Path) -> None:
    write_figure(draw(), folder / "star_transport")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "figures"))

"""Radiation quality over the anatomy: dose-averaged LET, and effect-weighted over physical dose, in one plane.

Both are drawn where the dose is worth speaking of; elsewhere the anatomy shows through.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib import colormaps
from matplotlib.cm import ScalarMappable
from matplotlib.colors import LogNorm
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

from dosekit.errors import InputError
from dosekit.outputs.planes import DoseVolume, dose_volume, plane, shown_box_mm
from dosekit.outputs.slice_drawing import draw_slice
from dosekit.outputs.style import PAGE_MM, letter_panel, new_figure, styled

if TYPE_CHECKING:
    import xarray as xr
    from matplotlib.figure import Figure

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["quality_slices_figure"]

_LEAST_DOSE_PERCENT = 2.0
_LET_TICKS = (0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0)
_RATIO_TICKS = (0.5, 0.8, 1.0, 1.2, 1.5, 2.0, 2.5, 3.0, 4.0, 6.0)


@styled
def quality_slices_figure(
    dose: xr.Dataset,
    grid: VoxelGrid,
    *,
    reference_gy: float,
    target: str | None = None,
    point_mm: tuple[float, float, float] | None = None,
    view: str = "transverse",
) -> Figure:
    """Draw dose-averaged LET, and the ratio of effect-weighted to physical dose where it is known, in one plane.

    Parameters
    ----------
    dose : Dataset
        ``dose(component, z, y, x)`` in Gy, ``let(z, y, x)`` in keV/um and, for the second panel,
        ``effect_dose(z, y, x)`` in Gy.
    grid : VoxelGrid
        The anatomy.
    reference_gy : float
        Dose of 100 %; nothing is drawn under 2 % of it.
    target : str, optional
        Structure whose centroid is shown and which is outlined.
    point_mm : (x, y, z), optional
        Point to show instead; the dose maximum without both.
    view : str
        Plane.

    Returns
    -------
    Figure
        175 mm wide.

    Raises
    ------
    InputError
        If there is no LET, or nowhere enough dose.
    """
    if "let" not in dose:
        raise InputError(f"maps of {sorted(map(str, dose.data_vars))}", allowed="maps that hold ``let``")
    total = dose_volume(dose)
    enough = total.gy >= 0.01 * _LEAST_DOSE_PERCENT * reference_gy
    if not enough.any():
        raise InputError(f"a dose under {_LEAST_DOSE_PERCENT:g} % of {reference_gy:g} Gy everywhere")
    point = point_mm or (grid.centroid_mm(target) if target is not None else total.maximum_mm)
    panels = [("dose-averaged LET", "LET (keV/µm)", dose["let"].transpose("z", "y", "x").values, _LET_TICKS)]
    if "effect_dose" in dose:
        effect = dose["effect_dose"].transpose("z", "y", "x").values
        ratio = np.divide(effect, total.gy, out=np.zeros_like(total.gy), where=enough)
        panels.append(("effect-weighted over physical dose", "ratio", ratio, _RATIO_TICKS))
    box = shown_box_mm(grid)
    chosen = plane(view)
    width = box[chosen.horizontal][1] - box[chosen.horizontal][0]
    height = box[chosen.vertical][1] - box[chosen.vertical][0]
    panel_mm = min((PAGE_MM - 40.0) / 2.0 * height / width, 90.0)
    figure = new_figure(
        PAGE_MM,
        panel_mm + 16.0,
        alt=(
            f"{chosen.name.capitalize()} plane: {' and '.join(name for name, *_ in panels)} where the dose is at least "
            f"{_LEAST_DOSE_PERCENT:g} % of {reference_gy:.3g} Gy."
        ),
    )
    row = figure.subplots(1, 2, squeeze=False)[0]
    for axes, letter, (name, label, values, ticks) in zip(row, "ab", panels, strict=False):
        shown = np.where(enough, values, 0.0).astype(np.float32)
        norm = _scale(shown[enough], ticks)
        draw_slice(
            axes,
            DoseVolume(gy=shown, x_mm=total.x_mm, y_mm=total.y_mm, z_mm=total.z_mm),
            grid,
            view=view,
            point_mm=point,
            reference_gy=100.0,
            structures=[grid.structure_name(target)] if target is not None else [],
            target=target,
            isodose_percent=(),
            norm=norm,
            colours=colormaps["viridis"],
            box_mm=box,
            scale_bar=letter == "a",
            letters=letter == "a",
        )
        letter_panel(axes, letter, name)
        bar = figure.colorbar(ScalarMappable(norm, colormaps["viridis"]), ax=axes, shrink=0.9, aspect=24, pad=0.02)
        bar.ax.yaxis.set_major_locator(FixedLocator(list(ticks)))
        bar.ax.yaxis.set_minor_locator(NullLocator())
        bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        bar.ax.tick_params(length=1.5)
        bar.set_label(label)
    for axes in row[len(panels) :]:
        axes.set_axis_off()
    return figure


def _scale(values: np.ndarray, ticks: tuple[float, ...]) -> LogNorm:
    """Return a logarithmic scale between ticks that holds nearly all values."""
    low, high = np.quantile(values[values > 0.0], [0.01, 0.999]) if (values > 0.0).any() else (ticks[0], ticks[-1])
    under = [tick for tick in ticks if tick <= low] or [ticks[0]]
    over = [tick for tick in ticks if tick >= high] or [ticks[-1]]
    first, last = under[-1], over[0]
    return LogNorm(first, last if last > first else 1.5 * first)

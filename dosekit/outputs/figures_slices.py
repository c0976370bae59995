"""Dose over the anatomy in three planes, and the parts of the dose side by side in one plane.

The anatomy is drawn as density in grey, the dose as a colour wash that fades out towards zero,
isodose lines carry their percentage, structures are outlined and named, and a bar gives the scale.
The three planes (see `dosekit.outputs.planes`) have one scale and true aspect.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.colors import LogNorm, Normalize

from dosekit.errors import InputError
from dosekit.outputs.planes import PLANES, DoseVolume, Plane, dose_volume, plane, shown_box_mm
from dosekit.outputs.slice_drawing import (
    ISODOSE_PERCENT,
    WASH_TOP_PERCENT,
    dose_colours,
    draw_slice,
    outline_legend,
    structure_slice,
)
from dosekit.outputs.style import COMPONENT_LABELS, PAGE_MM, foot_legend, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from collections.abc import Sequence

    import xarray as xr
    from matplotlib.figure import Figure

    from dosekit.grids.voxels import VoxelGrid

__all__ = [
    "ISODOSE_PERCENT",
    "component_slices_figure",
    "dose_colours",
    "draw_slice",
    "outline_legend",
    "slices_figure",
]

_LOWEST_SHOWN_PERCENT = 0.1
_TALLEST_PANEL_MM = 95.0
_PANELS_WIDTH_MM = PAGE_MM - 27.0


@styled
def slices_figure(
    dose: xr.Dataset,
    grid: VoxelGrid,
    *,
    target: str | None = None,
    point_mm: tuple[float, float, float] | None = None,
    reference_gy: float | None = None,
    components: Sequence[str] | None = None,
    structures: Sequence[str] | None = None,
    isodose_percent: Sequence[float] = ISODOSE_PERCENT,
    variable: str = "dose",
    quantity: str = "dose",
    unit: str = "Gy",
    title: str = "",
) -> Figure:
    """Draw dose over the anatomy in three planes through one point.

    Parameters
    ----------
    dose : Dataset
        ``dose(component, z, y, x)`` in Gy on coordinates in mm, or ``dose(z, y, x)``.
    grid : VoxelGrid
        The anatomy; its spacing may differ from the dose's.
    target : str, optional
        Structure whose centroid is shown and whose outline is heaviest.
    point_mm : (x, y, z), optional
        Point to show instead of the target's centroid; the dose maximum without both.
    reference_gy : float, optional
        Dose that counts as 100 %; the maximum without it.
    components : sequence of str, optional
        Components to add up; all without it.
    structures : sequence of str, optional
        Structures to outline; all without it.
    isodose_percent : sequence of float
        Levels of the isodose lines.
    variable : str
        Variable of the dataset to draw.
    quantity, unit : str
        What it holds and the printed unit of the reference dose.
    title : str
        A few words.

    Returns
    -------
    Figure
        175 mm wide.
    """
    volume = dose_volume(dose, components=None if components is None else list(components), variable=variable)
    reference = _reference_gy(volume, reference_gy)
    point = _point_mm(volume, grid, target, point_mm)
    named = _structure_names(grid, structures, target)
    names = [name for name in named if any(_crosses(grid, name, view, point) for view in PLANES)]
    box = shown_box_mm(grid)
    widths = [box[view.horizontal][1] - box[view.horizontal][0] for view in PLANES]
    tallest = max(box[view.vertical][1] - box[view.vertical][0] for view in PLANES)
    scale = min(_PANELS_WIDTH_MM / sum(widths), _TALLEST_PANEL_MM / tallest)
    where = ", ".join(f"{axis} {value:.0f} mm" for axis, value in zip("xyz", point, strict=True))
    figure = new_figure(
        PAGE_MM,
        max(50.0, tallest * scale + 12.0 + 3.8 * -(-len(names) // 5)),
        alt=(
            f"{quantity.capitalize()} in three planes (transverse, coronal, sagittal) through {where}"
            f"{', ' + title if title else ''}: "
            f"colour wash and isodose lines at {', '.join(f'{level:g}' for level in isodose_percent)} % of "
            f"{reference:.3g} {unit}; outlines: {', '.join(names) or 'none'}."
        ),
    )
    panels = figure.subplots(1, 3, width_ratios=widths)
    norm = Normalize(0.0, WASH_TOP_PERCENT)
    for axes, letter, view in zip(panels, "abc", PLANES, strict=True):
        draw_slice(
            axes,
            volume,
            grid,
            view=view.name,
            point_mm=point,
            reference_gy=reference,
            structures=names,
            target=target,
            isodose_percent=isodose_percent,
            norm=norm,
            box_mm=box,
        )
        at = point["xyz".index(view.fixed)]
        letter_panel(axes, letter, f"{view.name}, {view.fixed} {at:.0f} mm")
    bar = figure.colorbar(ScalarMappable(norm, dose_colours()), ax=list(panels), shrink=0.9, aspect=28, pad=0.012)
    bar.set_label(f"{quantity} (% of {reference:.3g} {unit})")
    bar.ax.tick_params(length=1.5)
    for axes in panels:
        axes.set_anchor("N")
    for level in isodose_percent:
        if level <= WASH_TOP_PERCENT:
            bar.ax.axhline(level, color="white", linewidth=0.7)
    if names:
        foot_legend(figure, outline_legend(grid, names, target=target), ncols=min(5, len(names)))
    return figure


@styled
def component_slices_figure(
    dose: xr.Dataset,
    grid: VoxelGrid,
    *,
    target: str | None = None,
    point_mm: tuple[float, float, float] | None = None,
    view: str = "transverse",
    reference_gy: float | None = None,
    structures: Sequence[str] | None = None,
    unit: str = "Gy",
) -> Figure:
    """Draw the same plane once for each component, on one logarithmic scale.

    Parameters
    ----------
    dose : Dataset
        ``dose(component, z, y, x)`` in Gy on coordinates in mm.
    grid : VoxelGrid
        The anatomy.
    target : str, optional
        Structure whose centroid is shown.
    point_mm : (x, y, z), optional
        Point to show instead.
    view : str
        Plane.
    reference_gy : float, optional
        Total dose that counts as 100 %; the maximum of the total without it.
    structures : sequence of str, optional
        Structures to outline; the target alone without it.
    unit : str
        Printed unit of the reference dose.

    Returns
    -------
    Figure
        175 mm wide; one panel for each component that reaches 0.01 % anywhere, with its maximum.
    """
    names = [str(name) for name in dose["component"].values]
    parts = {name: dose_volume(dose, components=[name]) for name in names}
    total = dose_volume(dose)
    reference = _reference_gy(total, reference_gy)
    shown = [name for name in names if float(parts[name].gy.max()) > 1e-4 * reference]
    point = _point_mm(total, grid, target, point_mm)
    outlines = _structure_names(grid, structures if structures is not None else ([target] if target else []), target)
    box = shown_box_mm(grid)
    chosen = plane(view)
    width = box[chosen.horizontal][1] - box[chosen.horizontal][0]
    height = box[chosen.vertical][1] - box[chosen.vertical][0]
    columns = 3
    rows = -(-len(shown) // columns)
    panel_mm = min(_PANELS_WIDTH_MM / columns * height / width, 62.0)
    figure = new_figure(
        PAGE_MM,
        rows * (panel_mm + 7.5) + 9.0,
        alt=(
            f"{chosen.name.capitalize()} plane, one panel for each dose component on a logarithmic scale in % of "
            f"{reference:.3g} {unit}: " + ", ".join(COMPONENT_LABELS.get(name, name) for name in shown) + "."
        ),
    )
    panels = figure.subplots(rows, columns, squeeze=False)
    norm = LogNorm(_LOWEST_SHOWN_PERCENT, 100.0)
    for i, axes in enumerate(panels.flat):
        if i >= len(shown):
            axes.set_axis_off()
            continue
        name = shown[i]
        draw_slice(
            axes,
            parts[name],
            grid,
            view=view,
            point_mm=point,
            reference_gy=reference,
            structures=outlines,
            target=target,
            isodose_percent=(),
            norm=norm,
            box_mm=box,
            scale_bar=i == 0,
            letters=i == 0,
        )
        top = 100.0 * float(parts[name].gy.max()) / reference
        letter_panel(axes, "abcdefghijkl"[i], f"{COMPONENT_LABELS.get(name, name)} (up to {top:.2g} %)")
    bar = figure.colorbar(ScalarMappable(norm, dose_colours()), ax=list(panels.flat), shrink=0.7, aspect=32, pad=0.012)
    bar.set_label(f"dose (% of {reference:.3g} {unit})")
    return figure


def _crosses(grid: VoxelGrid, name: str, view: Plane, point_mm: tuple[float, float, float]) -> bool:
    values = structure_slice(grid, name, view, point_mm).values
    return bool(values.max() >= 0.5 > values.min())


def _reference_gy(volume: DoseVolume, reference_gy: float | None) -> float:
    reference = float(volume.gy.max()) if reference_gy is None else float(reference_gy)
    if not (np.isfinite(reference) and reference > 0.0):
        raise InputError(
            f"a reference dose of {reference:g} Gy",
            allowed="a dose above zero",
            remedy="check the weights and that the fields meet the volume",
        )
    return reference


def _point_mm(
    volume: DoseVolume, grid: VoxelGrid, target: str | None, point_mm: tuple[float, float, float] | None
) -> tuple[float, float, float]:
    if point_mm is not None:
        return point_mm
    return grid.centroid_mm(target) if target is not None else volume.maximum_mm


def _structure_names(grid: VoxelGrid, structures: Sequence[str] | None, target: str | None) -> list[str]:
    asked = list(grid.structures) if structures is None else list(structures)
    names = [grid.structure_name(name) for name in asked]
    if target is not None:
        exact = grid.structure_name(target)
        names = [exact, *[name for name in names if name != exact]]
    return names

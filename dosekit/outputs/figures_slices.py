"""Dose over the anatomy in three planes, and the parts of the dose side by side in one plane.

The anatomy is drawn as density in grey, the dose as a colour wash that fades out towards zero,
isodose lines carry their percentage, structures are outlined and named, and a bar gives the scale.
The three planes (see `dosekit.outputs.planes`) have one scale and true aspect.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib import colormaps
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Colormap, ListedColormap, LogNorm, Normalize
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from dosekit.errors import InputError
from dosekit.outputs.figures_histogram import structure_style
from dosekit.outputs.planes import PLANES, DoseVolume, Plane, Slice, cut, dose_volume, plane, shown_box_mm
from dosekit.outputs.style import COMPONENT_LABELS, PAGE_MM, foot_legend, halo, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from collections.abc import Sequence

    import xarray as xr
    from matplotlib.artist import Artist
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["ISODOSE_PERCENT", "component_slices_figure", "draw_slice", "outline_legend", "slices_figure"]

ISODOSE_PERCENT = (20.0, 50.0, 80.0, 95.0)
"""Levels of the isodose lines, in % of the reference dose."""

_GREY_TOP_G_CM3 = 1.9
_WASH_STARTS_PERCENT = 4.0
_WASH_TOP_PERCENT = 110.0
_LOWEST_SHOWN_PERCENT = 0.1
_TALLEST_PANEL_MM = 95.0
_PANELS_WIDTH_MM = PAGE_MM - 27.0
_BODY_NAMES = ("body", "external", "outline", "skin", "patient")
_SCALE_BARS_MM = (200.0, 100.0, 50.0, 20.0, 10.0, 5.0)


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
    norm = Normalize(0.0, _WASH_TOP_PERCENT)
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
        if level <= _WASH_TOP_PERCENT:
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


def draw_slice(
    axes: Axes,
    volume: DoseVolume,
    grid: VoxelGrid,
    *,
    view: str,
    point_mm: tuple[float, float, float],
    reference_gy: float,
    structures: Sequence[str] = (),
    target: str | None = None,
    isodose_percent: Sequence[float] = ISODOSE_PERCENT,
    norm: Normalize | None = None,
    box_mm: dict[str, tuple[float, float]] | None = None,
    scale_bar: bool = True,
    letters: bool = True,
) -> None:
    """Draw one plane of dose over anatomy into a panel.

    Parameters
    ----------
    axes : Axes
        The panel.
    volume : DoseVolume
        The dose.
    grid : VoxelGrid
        The anatomy.
    view : str
        Plane.
    point_mm : (x, y, z)
        Point the plane goes through.
    reference_gy : float
        Dose of 100 %.
    structures : sequence of str
        Structures to outline.
    target : str, optional
        The one outlined heaviest.
    isodose_percent : sequence of float
        Levels of the isodose lines.
    norm : Normalize, optional
        Colour scale in %.
    box_mm : dict, optional
        Limits along x, y and z.
    scale_bar, letters : bool
        Whether to draw the scale bar and the direction letters.
    """
    chosen = plane(view)
    at_mm = point_mm["xyz".index(chosen.fixed)]
    centres = {axis: np.asarray(grid.centres_mm(axis), dtype=np.float64) for axis in "xyz"}
    norm = norm or Normalize(0.0, _WASH_TOP_PERCENT)
    density = cut(np.asarray(grid.density_g_cm3), centres, chosen, at_mm=at_mm)
    axes.imshow(density.values, cmap="gray", vmin=0.0, vmax=_GREY_TOP_G_CM3, extent=density.extent_mm, origin="lower")
    dose_centres = {axis: volume.centres_mm(axis) for axis in "xyz"}
    percent = cut(volume.gy, dose_centres, chosen, at_mm=at_mm)
    percent = Slice(100.0 * percent.values / reference_gy, percent.horizontal_mm, percent.vertical_mm)
    axes.imshow(
        percent.values,
        cmap=dose_colours(),
        norm=norm,
        alpha=_opacity(percent.values, norm),
        extent=percent.extent_mm,
        origin="lower",
        interpolation="nearest",
    )
    for name in structures:
        coverage = _coverage(grid, name, chosen, point_mm)
        _outline(axes, coverage, name=name, index=_place(grid, name), target=target)
    _isodoses(axes, percent, isodose_percent)
    box = box_mm or shown_box_mm(grid)
    axes.set_aspect("equal")
    axes.set_xlim(*box[chosen.horizontal])
    low, high = box[chosen.vertical]
    axes.set_ylim((low, high) if chosen.upwards else (high, low))
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_visible(False)
    if letters:
        _direction_letters(axes, chosen)
    if scale_bar:
        _scale_bar(axes, box, chosen)


def dose_colours() -> Colormap:
    """Return the colour wash: dark to light, the same order in grey print and for every reader.

    Returns
    -------
    Colormap
        The upper nine tenths of matplotlib's perceptually uniform "plasma".
    """
    return ListedColormap(colormaps["plasma"](np.linspace(0.1, 1.0, 256)), name="dose")


def outline_legend(
    grid: VoxelGrid, names: Sequence[str], *, target: str | None = None
) -> tuple[list[Artist], list[str]]:
    """Return legend handles and labels of structure outlines.

    Parameters
    ----------
    grid : VoxelGrid
        The anatomy; a structure's place in it decides its colour.
    names : sequence of str
        Structures to list.
    target : str, optional
        The target.

    Returns
    -------
    (list, list)
        Handles and labels.
    """
    handles: list[Artist] = [Line2D([], [], **_outline_style(name, _place(grid, name), target)) for name in names]
    return handles, list(names)


def _place(grid: VoxelGrid, name: str) -> int:
    return list(grid.structures).index(name)


def _outline_style(name: str, index: int, target: str | None) -> dict[str, Any]:
    style: dict[str, Any] = structure_style(name, index=index, target=target)
    if target is not None and name.casefold() == target.casefold():
        style["color"] = "#00E0C0"
    elif name.casefold() in _BODY_NAMES:
        style |= {"color": "#C8C8C8", "linestyle": "-", "linewidth": 0.7}
    return style


def _crosses(grid: VoxelGrid, name: str, view: Plane, point_mm: tuple[float, float, float]) -> bool:
    values = _coverage(grid, name, view, point_mm).values
    return bool(values.max() >= 0.5 > values.min())


def _coverage(grid: VoxelGrid, name: str, view: Plane, point_mm: tuple[float, float, float]) -> Slice:
    centres = {axis: np.asarray(grid.centres_mm(axis), dtype=np.float64) for axis in "xyz"}
    return cut(np.asarray(grid.structure(name)), centres, view, at_mm=point_mm["xyz".index(view.fixed)])


def _outline(axes: Axes, coverage: Slice, *, name: str, index: int, target: str | None) -> None:
    if not (float(coverage.values.max()) >= 0.5 > float(coverage.values.min())):
        return
    style = _outline_style(name, index, target)
    axes.contour(
        coverage.horizontal_mm,
        coverage.vertical_mm,
        coverage.values,
        levels=[0.5],
        colors=[style["color"]],
        linestyles=[style["linestyle"]],
        linewidths=[style["linewidth"]],
    ).set_gid(f"outline {name}")


def _isodoses(axes: Axes, percent: Slice, levels: Sequence[float]) -> None:
    low, high = float(percent.values.min()), float(percent.values.max())
    usable = sorted(level for level in set(levels) if low < level < high)
    if not usable or min(percent.values.shape) < 2:
        return
    lines = axes.contour(
        percent.horizontal_mm,
        percent.vertical_mm,
        percent.values,
        levels=usable,
        colors="white",
        linewidths=[0.5 if level < 90.0 else 0.9 for level in usable],
    )
    lines.set_gid("isodoses")
    labels = axes.clabel(lines, fmt=lambda level: f"{level:g}", fontsize=5.5, inline_spacing=1.0, colors="white")
    for label in labels or ():
        label.set_path_effects(halo(1.2, colour="#333333"))


def _opacity(percent: NDArray[np.float64], norm: Normalize) -> NDArray[np.float64]:
    if isinstance(norm, LogNorm):
        return np.where(percent >= float(norm.vmin or 0.0), 0.75, 0.0)
    rise = (percent - _WASH_STARTS_PERCENT) / (30.0 - _WASH_STARTS_PERCENT)
    return 0.62 * np.clip(rise, 0.0, 1.0) ** 0.6


def _direction_letters(axes: Axes, view: Plane) -> None:
    places = (
        (0.015, 0.5, "left", "center"),
        (0.985, 0.5, "right", "center"),
        (0.5, 0.985, "center", "top"),
        (0.5, 0.015, "center", "bottom"),
    )
    for letter, (x, y, horizontal, vertical) in zip(view.letters, places, strict=True):
        axes.text(
            x,
            y,
            letter,
            transform=axes.transAxes,
            ha=horizontal,
            va=vertical,
            color="white",
            fontsize=7.0,
            path_effects=halo(1.5, colour="black"),
            gid="direction",
        )


def _scale_bar(axes: Axes, box: dict[str, tuple[float, float]], view: Plane) -> None:
    left, right = box[view.horizontal]
    low, high = box[view.vertical]
    length = next((bar for bar in _SCALE_BARS_MM if bar <= 0.35 * (right - left)), _SCALE_BARS_MM[-1])
    start = left + 0.04 * (right - left)
    rise = 0.05 * (high - low)
    y = low + rise if view.upwards else high - rise
    axes.plot(
        [start, start + length],
        [y, y],
        color="white",
        linewidth=1.6,
        solid_capstyle="butt",
        path_effects=halo(2.8, colour="black"),
        gid="scale bar",
    )
    axes.annotate(
        f"{length:g} mm",
        (start, y),
        xytext=(0, 2.5),
        textcoords="offset points",
        ha="left",
        va="bottom",
        color="white",
        fontsize=6.0,
        path_effects=halo(1.5, colour="black"),
    )


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

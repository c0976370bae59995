"""One plane of dose over anatomy in one panel: density in grey, colour wash, isodose lines, outlines, scale bar."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib import colormaps
from matplotlib.colors import Colormap, ListedColormap, LogNorm, Normalize
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from dosekit.outputs.figures_histogram import structure_style
from dosekit.outputs.planes import DoseVolume, Plane, Slice, cut, plane, shown_box_mm
from dosekit.outputs.style import halo

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.artist import Artist
    from matplotlib.axes import Axes

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["ISODOSE_PERCENT", "WASH_TOP_PERCENT", "dose_colours", "draw_slice", "outline_legend", "structure_slice"]

ISODOSE_PERCENT = (20.0, 50.0, 80.0, 95.0)
"""Levels of the isodose lines, in % of the reference dose."""
WASH_TOP_PERCENT = 110.0
"""Top of the linear colour scale, in % of the reference dose."""

_GREY_TOP_G_CM3 = 1.9
_WASH_STARTS_PERCENT = 4.0
_BODY_NAMES = ("body", "external", "outline", "skin", "patient")
_SCALE_BARS_MM = (200.0, 100.0, 50.0, 20.0, 10.0, 5.0)


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
    colours: Colormap | None = None,
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
    colours : Colormap, optional
        Colours of the wash; those of dose without it.
    box_mm : dict, optional
        Limits along x, y and z.
    scale_bar, letters : bool
        Whether to draw the scale bar and the direction letters.
    """
    chosen = plane(view)
    at_mm = point_mm["xyz".index(chosen.fixed)]
    centres = {axis: np.asarray(grid.centres_mm(axis), dtype=np.float64) for axis in "xyz"}
    norm = norm or Normalize(0.0, WASH_TOP_PERCENT)
    density = cut(np.asarray(grid.density_g_cm3), centres, chosen, at_mm=at_mm)
    axes.imshow(density.values, cmap="gray", vmin=0.0, vmax=_GREY_TOP_G_CM3, extent=density.extent_mm, origin="lower")
    dose_centres = {axis: volume.centres_mm(axis) for axis in "xyz"}
    percent = cut(volume.gy, dose_centres, chosen, at_mm=at_mm)
    percent = Slice(100.0 * percent.values / reference_gy, percent.horizontal_mm, percent.vertical_mm)
    axes.imshow(
        percent.values,
        cmap=colours or dose_colours(),
        norm=norm,
        alpha=_opacity(percent.values, norm),
        extent=percent.extent_mm,
        origin="lower",
        interpolation="nearest",
    )
    for name in structures:
        coverage = structure_slice(grid, name, chosen, point_mm)
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


def structure_slice(grid: VoxelGrid, name: str, view: Plane, point_mm: tuple[float, float, float]) -> Slice:
    """Return the coverage of a structure in one plane.

    Parameters
    ----------
    grid : VoxelGrid
        The anatomy.
    name : str
        The structure.
    view : Plane
        Which way to cut.
    point_mm : (x, y, z)
        Point the plane goes through.

    Returns
    -------
    Slice
        Coverage, 0 to 1.
    """
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

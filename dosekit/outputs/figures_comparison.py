"""Several beam particles on the same anatomy and goals, side by side on one page.

Each particle brings what was found for it: its depth dose, its dose map, its histograms, its LET
and a row of measures. All are drawn on the same scales, so that a difference on the page is a
difference in the result. Curves that come from elsewhere carry their source in the legend.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.lines import Line2D
from matplotlib.transforms import Bbox
from numpy.typing import NDArray

from dosekit.errors import InputError
from dosekit.outputs.figures_histogram import Histogram, draw_histograms, structure_style
from dosekit.outputs.planes import dose_volume, plane, shown_box_mm
from dosekit.outputs.slice_drawing import dose_colours, draw_slice
from dosekit.outputs.style import INK, PAGE_MM, foot_legend, letter_panel, new_figure, particle_style, styled

if TYPE_CHECKING:
    from collections.abc import Sequence

    import xarray as xr
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["ParticleResult", "comparison_figure", "particles_depth_figure"]

_WASH_TOP_PERCENT = 110.0
_TABLE_ROW_MM = 4.2
_MOST_MAPS = 4


@dataclass(frozen=True, eq=False)
class ParticleResult:
    """What one particle gives on the common anatomy and goals.

    Parameters
    ----------
    particle : str
        The particle's name.
    depth_mm : ndarray, shape (n,)
        Depth along the axis of a field.
    dose_percent : ndarray, shape (n,)
        Dose at these depths in % of the prescribed dose.
    let_kev_um : ndarray, shape (n,), optional
        Dose-averaged LET at these depths.
    dose : Dataset, optional
        Its dose map.
    histograms : mapping of str to (dose_gy, volume_fraction)
        Volume histograms.
    measures : mapping of str to float
        Numbers for the table; the name carries the unit, e.g. ``"target D95 (%)"``.
    source : str
        Where a curve brought in from outside comes from; empty for own results.
    """

    particle: str
    depth_mm: NDArray[np.float64]
    dose_percent: NDArray[np.float64]
    let_kev_um: NDArray[np.float64] | None = None
    dose: xr.Dataset | None = None
    histograms: Mapping[str, Histogram] = field(default_factory=dict)
    measures: Mapping[str, float] = field(default_factory=dict)
    source: str = ""


@styled
def particles_depth_figure(
    results: Sequence[ParticleResult], *, target_interval_mm: tuple[float, float] | None = None, title: str = ""
) -> Figure:
    """Draw depth doses and LET of several particles.

    Parameters
    ----------
    results : sequence of ParticleResult
        What each particle gives.
    target_interval_mm : (float, float), optional
        The target along the axis.
    title : str
        A few words.

    Returns
    -------
    Figure
        175 mm wide: (a) depth dose, (b) dose-averaged LET where it is known.
    """
    _check(results)
    figure = new_figure(PAGE_MM, 78.0, alt=_depth_alt(results, title))
    left, right = figure.subplots(1, 2)
    _draw_depth(left, results, target_interval_mm)
    _draw_let(right, results, target_interval_mm)
    letter_panel(left, "a", title or "depth dose")
    letter_panel(right, "b", "radiation quality")
    foot_legend(figure, left, ncols=4)
    return figure


@styled
def comparison_figure(
    results: Sequence[ParticleResult],
    grid: VoxelGrid,
    *,
    target: str,
    prescribed_gy: float,
    view: str = "transverse",
    target_interval_mm: tuple[float, float] | None = None,
    quantity: str = "dose",
    unit: str = "Gy",
) -> Figure:
    """Draw the comparison page: depth dose, LET, one slice for each particle, histograms and the table.

    Parameters
    ----------
    results : sequence of ParticleResult
        What each particle gives; at most four of them may carry a dose map.
    grid : VoxelGrid
        The common anatomy.
    target : str
        Structure the slices go through.
    prescribed_gy : float
        Dose of 100 %.
    view : str
        Plane of the slices.
    target_interval_mm : (float, float), optional
        The target along the axis of the depth doses.
    quantity, unit : str
        What the maps and histograms hold.

    Returns
    -------
    Figure
        A page 175 mm wide.
    """
    _check(results)
    mapped = [result for result in results if result.dose is not None]
    if len(mapped) > _MOST_MAPS:
        raise InputError(f"{len(mapped)} dose maps on one page", allowed=f"at most {_MOST_MAPS}")
    rows = list(dict.fromkeys(name for result in results for name in result.measures))
    box = shown_box_mm(grid)
    chosen = plane(view)
    ratio = (box[chosen.vertical][1] - box[chosen.vertical][0]) / (
        box[chosen.horizontal][1] - box[chosen.horizontal][0]
    )
    map_mm = min(62.0, (PAGE_MM - 22.0) / max(1, len(mapped)) * ratio) if mapped else 1.0
    table_mm = _TABLE_ROW_MM * (len(rows) + 1)
    alt = (
        f"Comparison of {', '.join(result.particle for result in results)} on the same anatomy and goals: depth dose, "
        f"LET, {chosen.name} slices, volume histograms and a table of {len(rows)} measures."
    )
    figure = new_figure(PAGE_MM, 62.0 + map_mm + 66.0 + table_mm + 26.0, alt=alt)
    parts: Any = figure.subfigures(4, 1, height_ratios=(62.0, map_mm + 7.0, 66.0, table_mm + 5.0))
    depth, let = parts[0].subplots(1, 2)
    _draw_depth(depth, results, target_interval_mm, quantity=quantity)
    _draw_let(let, results, target_interval_mm)
    letter_panel(depth, "a", "along the axis of the first field")
    letter_panel(let, "b", "radiation quality")
    letters = iter("cdefghij")
    if mapped:
        panels = np.atleast_1d(parts[1].subplots(1, len(mapped)))
        norm = Normalize(0.0, _WASH_TOP_PERCENT)
        for i, (axes, result) in enumerate(zip(panels, mapped, strict=True)):
            assert result.dose is not None
            draw_slice(
                axes,
                dose_volume(result.dose),
                grid,
                view=view,
                point_mm=grid.centroid_mm(target),
                reference_gy=prescribed_gy,
                structures=[grid.structure_name(target)],
                target=target,
                norm=norm,
                box_mm=box,
                scale_bar=i == 0,
                letters=i == 0,
            )
            letter_panel(axes, next(letters), str(particle_style(result.particle)["label"]))
        bar = parts[1].colorbar(ScalarMappable(norm, dose_colours()), ax=list(panels), shrink=0.9, pad=0.012, aspect=22)
        bar.set_label(f"{quantity} (% of {prescribed_gy:.3g} {unit})")
    histogram_axes = parts[2].subplots()
    _draw_histograms(histogram_axes, results, target=target, order=list(grid.structures), label=f"{quantity} ({unit})")
    letter_panel(histogram_axes, next(letters), "volume histograms")
    _draw_table(parts[3].subplots(), results, rows)
    foot_legend(figure, depth, ncols=4)
    return figure


def _check(results: Sequence[ParticleResult]) -> None:
    if not results:
        raise InputError("no particle to compare", allowed="at least one result")
    for result in results:
        if np.shape(result.depth_mm) != np.shape(result.dose_percent):
            raise InputError(f"depths and doses of {result.particle} of unequal lengths")


def _depth_alt(results: Sequence[ParticleResult], title: str) -> str:
    names = ", ".join(result.particle for result in results)
    return f"Depth dose and dose-averaged LET of {names}{', ' + title if title else ''}."


def _line(result: ParticleResult, index: int) -> dict[str, Any]:
    style: dict[str, Any] = particle_style(result.particle, index=index)
    if result.source:
        style["label"] = f"{style['label']} ({result.source})"
    return style


def _draw_depth(
    axes: Axes,
    results: Sequence[ParticleResult],
    target_interval_mm: tuple[float, float] | None,
    *,
    quantity: str = "dose",
) -> None:
    _shade(axes, target_interval_mm, label="target")
    for i, result in enumerate(results):
        axes.plot(result.depth_mm, result.dose_percent, **_line(result, i) | {"linewidth": 1.2})
    axes.set_xlim(0.0, max(float(np.max(result.depth_mm)) for result in results))
    axes.set_ylim(0.0, 1.08 * max(float(np.max(result.dose_percent)) for result in results))
    axes.set_xlabel("depth (mm)")
    axes.set_ylabel(f"{quantity} (% of prescribed)")


def _draw_let(axes: Axes, results: Sequence[ParticleResult], target_interval_mm: tuple[float, float] | None) -> None:
    _shade(axes, target_interval_mm)
    for i, result in enumerate(results):
        if result.let_kev_um is not None:
            seen = np.asarray(result.dose_percent) > 0.5
            axes.plot(
                result.depth_mm, np.where(seen, result.let_kev_um, np.nan), **_line(result, i) | {"linewidth": 1.2}
            )
    axes.set_xlim(0.0, max(float(np.max(result.depth_mm)) for result in results))
    if axes.lines:
        axes.set_yscale("log")
    axes.set_xlabel("depth (mm)")
    axes.set_ylabel("dose-averaged LET (keV/µm)")


def _shade(axes: Axes, interval_mm: tuple[float, float] | None, *, label: str = "_nolegend_") -> None:
    if interval_mm is not None and np.all(np.isfinite(interval_mm)):
        axes.axvspan(*interval_mm, color="#DDCC77", alpha=0.35, linewidth=0.0, label=label)


def _draw_histograms(
    axes: Axes, results: Sequence[ParticleResult], *, target: str, order: Sequence[str], label: str
) -> None:
    names = list(dict.fromkeys(name for result in results for name in result.histograms))
    for i, result in enumerate(results):
        if result.histograms:
            ordered = {name: result.histograms[name] for name in names if name in result.histograms}
            dash = particle_style(result.particle, index=i)["linestyle"]
            draw_histograms(axes, ordered, target=target, order=order, dash=dash, labels=False)
    handles = []
    for name in names:
        solid: dict[str, Any] = structure_style(name, index=_place(name, order), target=target) | {"linestyle": "-"}
        handles.append(Line2D([], [], label=name, **solid))
    handles += [
        Line2D([], [], color=INK, linewidth=1.0, linestyle=style["linestyle"], label=str(style["label"]))
        for style in (_line(result, i) for i, result in enumerate(results) if result.histograms)
    ]
    axes.set_xlabel(label)
    axes.set_ylabel("volume receiving at least this (%)")
    if handles:
        axes.legend(handles=handles, loc="upper left", bbox_to_anchor=(1.01, 1.0))


def _place(name: str, order: Sequence[str]) -> int:
    return list(order).index(name) if name in order else len(order)


def _draw_table(axes: Axes, results: Sequence[ParticleResult], rows: Sequence[str]) -> None:
    axes.set_axis_off()
    if not rows:
        return
    cells = [
        [f"{result.measures[name]:.3g}" if name in result.measures else "-" for result in results] for name in rows
    ]
    table = axes.table(
        cellText=cells,
        rowLabels=list(rows),
        colLabels=[str(particle_style(result.particle)["label"]) for result in results],
        cellLoc="right",
        rowLoc="left",
        bbox=Bbox.from_bounds(0.34, 0.0, 0.66, 1.0),
        edges="horizontal",
    )
    table.auto_set_font_size(False)
    table.set_fontsize(7.0)
    for cell in table.get_celld().values():
        cell.set_linewidth(0.4)
        cell.set_edgecolor("#bbbbbb")

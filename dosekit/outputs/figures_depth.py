"""Depth dose by component, as a paper shows it: the sum built up on the left, every part on a log scale on the right.

A depth curve is a Dataset as made by the depths room: ``energy(component, depth)`` in MeV/mm per
incident particle, ``let_dose(component, depth)`` in keV/um and ``stops(depth)`` per mm, bin centres in mm.
Components that carry nothing are left out of the picture, not out of the sum.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from dosekit.outputs.marks import CurveMarks, curve_marks
from dosekit.outputs.style import (
    INK,
    PAGE_MM,
    RULE,
    component_style,
    foot_legend,
    halo,
    letter_panel,
    new_figure,
    styled,
)

if TYPE_CHECKING:
    import xarray as xr
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["depth_curve_figure", "let_figure"]

_SMALLEST_SHOWN = 1e-4
_LOG_DECADES = 4.0
_LAYER_HEADROOM = 1.4


@styled
def depth_curve_figure(curve: xr.Dataset, *, title: str = "", quantity: str = "energy") -> Figure:
    """Draw a depth curve by component.

    Parameters
    ----------
    curve : Dataset
        A depth curve.
    title : str
        A few words on beam and medium.
    quantity : str
        The variable to draw, on dimensions (component, depth).

    Returns
    -------
    Figure
        175 mm wide: (a) stacked components with peak and range, (b) each component on a log scale.
    """
    depth_mm, parts = _parts(curve, quantity)
    total = np.sum(list(_all_parts(curve, quantity).values()), axis=0)
    marks = curve_marks(depth_mm, total)
    unit = str(curve[quantity].attrs.get("units", "MeV/mm per incident particle"))
    alt = (
        f"Depth dose by component{', ' + title if title else ''}: the total peaks at "
        f"{marks.peak_depth_mm:.0f} mm with {marks.peak_to_entrance:.1f} times the entrance value; components shown: "
        + ", ".join(str(component_style(name)["label"]) for name in parts)
        + "."
    )
    figure = new_figure(PAGE_MM, 88.0, alt=alt)
    stacked, logged = figure.subplots(1, 2)
    _draw_stack(stacked, depth_mm, parts, total)
    _draw_marks(stacked, marks, right_mm=float(depth_mm[-1]))
    _draw_lines(logged, depth_mm, parts, total)
    _draw_layers(stacked, curve, depth_mm, named=True)
    _draw_layers(logged, curve, depth_mm, named=False)
    for axes in (stacked, logged):
        axes.set_xlabel("depth (mm)")
        axes.set_xlim(0.0, float(depth_mm[-1]))
    stacked.set_ylabel(_axis_label(unit))
    logged.set_ylabel(_axis_label(unit))
    letter_panel(stacked, "a", title)
    letter_panel(logged, "b", "each component")
    foot_legend(figure, logged, ncols=5)
    return figure


@styled
def let_figure(curve: xr.Dataset, *, title: str = "") -> Figure:
    """Draw dose-averaged LET by component and for the whole dose.

    Parameters
    ----------
    curve : Dataset
        A depth curve with ``energy`` and ``let_dose``.
    title : str
        A few words on beam and medium.

    Returns
    -------
    Figure
        175 mm wide, LET on a log scale against depth; a component is drawn where it holds
        at least 0.1 % of the peak dose.
    """
    depth_mm = np.asarray(curve["depth"].values, dtype=np.float64)
    energies = _all_parts(curve, "energy")
    lets = _all_parts(curve, "let_dose")
    total = np.sum(list(energies.values()), axis=0)
    floor = 1e-3 * float(total.max())
    figure = new_figure(PAGE_MM, 80.0, alt="")
    axes = figure.subplots()
    weighted = np.zeros_like(total)
    drawn = []
    for name, let in lets.items():
        energy = energies[name]
        usable = np.isfinite(let) & (let > 0.0) & (energy > 0.0)
        weighted += np.where(usable, np.nan_to_num(let) * energy, 0.0)
        if np.any(usable & (energy >= floor)):
            axes.plot(depth_mm, np.where(usable & (energy >= floor), let, np.nan), **_line(name))
            drawn.append(str(component_style(name)["label"]))
    mean = np.divide(weighted, total, out=np.full_like(total, np.nan), where=total > 0.0)
    axes.plot(depth_mm, np.where(total >= floor, mean, np.nan), color=INK, linewidth=1.6, label="whole dose")
    axes.set_yscale("log")
    axes.set_xlim(0.0, float(depth_mm[-1]))
    axes.set_xlabel("depth (mm)")
    axes.set_ylabel("dose-averaged LET (keV/µm)")
    if title:
        axes.set_title(title)
    figure.legend(*axes.get_legend_handles_labels(), loc="outside right upper")
    figure.set_label(
        f"Dose-averaged LET against depth{', ' + title if title else ''}; lines: whole dose, {', '.join(drawn)}."
    )
    return figure


def _all_parts(curve: xr.Dataset, quantity: str) -> dict[str, NDArray[np.float64]]:
    array = curve[quantity].transpose("component", "depth")
    return {str(name): np.asarray(array.values[i], np.float64) for i, name in enumerate(array["component"].values)}


def _parts(curve: xr.Dataset, quantity: str) -> tuple[NDArray[np.float64], dict[str, NDArray[np.float64]]]:
    parts = _all_parts(curve, quantity)
    peak = float(np.sum(list(parts.values()), axis=0).max())
    shown = {name: part for name, part in parts.items() if float(part.max()) > _SMALLEST_SHOWN * peak}
    return np.asarray(curve["depth"].values, dtype=np.float64), shown


def _line(name: str) -> dict[str, Any]:
    return dict(component_style(name))


def _axis_label(unit: str) -> str:
    if unit.startswith("MeV/mm"):
        return "energy deposit (MeV/mm per particle)"
    return f"dose ({unit})"


def _draw_stack(
    axes: Axes, depth_mm: NDArray[np.float64], parts: dict[str, NDArray[np.float64]], total: NDArray[np.float64]
) -> None:
    lower = np.zeros_like(total)
    for name, part in parts.items():
        upper = lower + part
        style = component_style(name)
        axes.fill_between(
            depth_mm, lower, upper, color=str(style["color"]), linewidth=0.0, alpha=0.85, label=str(style["label"])
        )
        lower = upper
    axes.plot(depth_mm, total, color=INK, linewidth=1.2, label="total")
    axes.set_ylim(0.0, 1.22 * float(total.max()))


def _draw_lines(
    axes: Axes, depth_mm: NDArray[np.float64], parts: dict[str, NDArray[np.float64]], total: NDArray[np.float64]
) -> None:
    axes.plot(depth_mm, np.where(total > 0.0, total, np.nan), color=INK, linewidth=1.4, label="total")
    for name, part in parts.items():
        axes.plot(depth_mm, np.where(part > 0.0, part, np.nan), **_line(name))
    top = float(total.max())
    axes.set_yscale("log")
    axes.set_ylim(top * 10.0**-_LOG_DECADES, 2.0 * top)


def _draw_layers(axes: Axes, curve: xr.Dataset, depth_mm: NDArray[np.float64], *, named: bool) -> None:
    """Rule off the layers of a stack, where the curve knows them, and name them."""
    if "layer" not in curve.coords:
        return
    names = [str(name) for name in curve["layer"].values]
    starts = [0, *(i for i in range(1, len(names)) if names[i] != names[i - 1]), len(names)]
    if len(starts) < 3:
        return
    half = 0.5 * float(depth_mm[1] - depth_mm[0])
    edges = [float(depth_mm[i]) - half for i in starts[:-1]] + [float(depth_mm[-1]) + half]
    for edge in edges[1:-1]:
        axes.axvline(edge, color=RULE, linewidth=0.5, gid="layer edge")
    if named:
        # Room for the names above everything that is drawn.
        axes.set_ylim(0.0, _LAYER_HEADROOM * axes.get_ylim()[1])
        for start, low, high in zip(starts[:-1], edges[:-1], edges[1:], strict=True):
            axes.annotate(
                names[start].replace("_", " "),
                (0.5 * (low + high), 1.0),
                xycoords=("data", "axes fraction"),
                xytext=(0, -2),
                textcoords="offset points",
                ha="center",
                va="top",
                rotation=90.0,
                fontsize=6.0,
                path_effects=halo(),
                gid="layer",
            )


def _draw_marks(axes: Axes, marks: CurveMarks, *, right_mm: float) -> None:
    axes.plot([marks.peak_depth_mm], [marks.peak], marker="o", color=INK, linestyle="none", markersize=3.0)
    note = f"peak {marks.peak_depth_mm:.0f} mm\npeak / entrance {marks.peak_to_entrance:.2f}"
    left = marks.peak_depth_mm > 0.45 * right_mm
    axes.annotate(
        note,
        (marks.peak_depth_mm, marks.peak),
        xytext=(-6 if left else 6, 3),
        textcoords="offset points",
        ha="right" if left else "left",
        va="bottom",
        fontsize=7.0,
        path_effects=halo(),
    )
    if np.isfinite(marks.distal_80_mm):
        axes.vlines(marks.distal_80_mm, 0.0, 0.8 * marks.peak, color=RULE, linewidth=0.6, linestyle=(0, (2, 2)))
        axes.annotate(
            f"80 % at {marks.distal_80_mm:.0f} mm",
            (marks.distal_80_mm, 0.8 * marks.peak),
            xytext=(5, 0),
            textcoords="offset points",
            ha="left" if left else "right",
            va="center",
            fontsize=7.0,
            path_effects=halo(),
        )

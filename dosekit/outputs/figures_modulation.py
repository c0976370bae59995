"""Figures of how a beam is modulated: range steps and their sum, the ridge profile, the dwell program, convergence."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.errors import InputError
from dosekit.outputs.style import COLUMN_MM, INK, PAGE_MM, RULE, foot_legend, halo, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from collections.abc import Mapping

    from matplotlib.figure import Figure

__all__ = ["convergence_figure", "range_steps_figure", "ridge_profile_figure"]

_STEP_COLOUR = "#88CCEE"
_SUM_COLOUR = "#332288"
_FLAT_COLOUR = "#882255"
_TARGET_COLOUR = "#DDCC77"


@styled
def range_steps_figure(
    depth_mm: ArrayLike,
    step_dose: ArrayLike,
    *,
    interval_mm: tuple[float, float],
    residual_range_mm: ArrayLike,
    weights: ArrayLike,
    flatness: float,
    flat_interval_mm: tuple[float, float] | None = None,
    flat_dose: ArrayLike | None = None,
    quantity: str = "dose",
    title: str = "",
) -> Figure:
    """Draw each weighted range step, their sum, the target interval and its flatness; and the weights.

    Parameters
    ----------
    depth_mm : array_like, shape (n,)
        Water-equivalent depth.
    step_dose : array_like, shape (k, n)
        Depth dose of each step per unit weight, any unit.
    interval_mm : (float, float)
        Interval that should be flat.
    residual_range_mm, weights : array_like, shape (k,)
        The steps.
    flatness : float
        Largest deviation from the mean inside the flat interval, as a fraction.
    flat_interval_mm : (float, float), optional
        Where the flatness was judged, if it is less than the whole interval.
    flat_dose : array_like, shape (n,), optional
        The curve that is flat, if it is not the sum of the steps (effect-weighted dose); drawn beside the sum.
    quantity : str
        What is flat, e.g. ``"dose"`` or ``"effect-weighted dose"``.
    title : str
        A few words on beam and field.

    Returns
    -------
    Figure
        175 mm wide: (a) depth dose in % of the interval's mean, (b) share of the particles against residual range.
    """
    depth, curves, ranges, shares = _checked_steps(depth_mm, step_dose, residual_range_mm, weights)
    weighted = curves * shares[:, None]
    total = weighted.sum(axis=0)
    low, high = flat_interval_mm or interval_mm
    inside = (depth >= low) & (depth <= high)
    if not np.any(inside):
        raise InputError(
            f"no depth between {low:g} and {high:g} mm", remedy="choose an interval inside the depth range"
        )
    mean = float(total[inside].mean())
    used = int(np.count_nonzero(shares > 0.0))
    figure = new_figure(
        PAGE_MM,
        82.0,
        alt=(
            f"{used} weighted range steps and their sum{', ' + title if title else ''}: {quantity} flat to "
            f"{100 * flatness:.1f} % from {low:.0f} to {high:.0f} mm; right: share of particles by residual range."
        ),
    )
    main, bars = figure.subplots(1, 2, width_ratios=(2.0, 1.0))
    main.axvspan(*interval_mm, color=_TARGET_COLOUR, alpha=0.35, linewidth=0.0, label="target interval")
    for k in np.flatnonzero(shares > 0.0):
        main.plot(depth, 100.0 * weighted[k] / mean, color=_STEP_COLOUR, linewidth=0.6)
    main.plot([], [], color=_STEP_COLOUR, linewidth=0.8, label="range step, weighted")
    highest = 100.0 * float(total.max()) / mean
    top = 100.0 * float(total[inside].max()) / mean
    if flat_dose is None:
        main.plot(depth, 100.0 * total / mean, color=_SUM_COLOUR, linewidth=1.4, label="sum of the steps")
    else:
        flat = np.asarray(flat_dose, dtype=np.float64)
        if flat.shape != depth.shape:
            raise InputError(f"{flat.shape} values of {quantity} for {len(depth)} depths")
        flat = 100.0 * flat / float(flat[inside].mean())
        main.plot(
            depth, 100.0 * total / mean, color=_SUM_COLOUR, linewidth=1.0, linestyle=(0, (5, 1.5)), label="dose, sum"
        )
        main.plot(depth, flat, color=_FLAT_COLOUR, linewidth=1.4, label=quantity)
        highest = max(highest, float(flat.max()))
        top = max(top, float(flat[inside].max()))
    main.hlines(
        [100.0 * (1.0 - flatness), 100.0 * (1.0 + flatness)],
        low,
        high,
        color=RULE,
        linewidth=0.6,
        linestyle=(0, (2, 2)),
        label="flatness band",
    )
    main.set_xlim(float(max(0.0, depth[0])), float(depth[-1]))
    main.set_ylim(0.0, 1.25 * highest)
    main.annotate(
        f"flat to ±{100 * flatness:.1f} %\n{low:.0f} to {high:.0f} mm",
        (0.5 * (low + high), max(top, 100.0 * (1.0 + flatness))),
        xytext=(0, 4),
        textcoords="offset points",
        ha="center",
        va="bottom",
        fontsize=7.0,
        path_effects=halo(),
    )
    main.set_xlabel("water-equivalent depth (mm)")
    main.set_ylabel(f"{quantity} (% of the interval's mean)" if flat_dose is None else "% of the interval's mean")
    percent = 100.0 * shares / shares.sum()
    gap = float(np.min(np.diff(np.sort(ranges)))) if len(ranges) > 1 else 5.0
    bars.bar(ranges, percent, width=0.8 * max(gap, 0.1), color=_SUM_COLOUR, linewidth=0.0)
    bars.set_xlabel("residual range (mm)")
    bars.set_ylabel("share of the particles (%)")
    letter_panel(main, "a", title)
    letter_panel(bars, "b", f"{used} steps in use")
    foot_legend(figure, main, ncols=5 if flat_dose is not None else 4)
    return figure


@styled
def ridge_profile_figure(
    step_width_mm: ArrayLike, thickness_mm: ArrayLike, *, material: str = "", pitch_mm: float = 0.0
) -> Figure:
    """Draw one ridge of a ridge filter that gives the same steps: width of each terrace against its thickness.

    Parameters
    ----------
    step_width_mm : array_like, shape (k,)
        Width of each terrace across the ridge, both flanks together.
    thickness_mm : array_like, shape (k,)
        Height of each terrace, physical mm of the filter's material.
    material : str
        What the filter is made of.
    pitch_mm : float
        Distance from ridge to ridge; the sum of the widths if zero.

    Returns
    -------
    Figure
        85 mm wide, the cross-section of one ridge, symmetric about its middle.
    """
    widths = np.asarray(step_width_mm, dtype=np.float64)
    heights = np.asarray(thickness_mm, dtype=np.float64)
    if widths.ndim != 1 or widths.shape != heights.shape or len(widths) == 0:
        raise InputError(f"{widths.shape} widths and {heights.shape} thicknesses", allowed="two equally long lists")
    order = np.argsort(heights, kind="stable")
    widths, heights = widths[order], heights[order]
    # Terraces run from the lowest at the foot to the highest in the middle, half a width on each flank.
    left = np.concatenate([[0.0], np.cumsum(widths / 2.0)])
    edges = np.concatenate([left, left[-1] + np.cumsum(widths[::-1] / 2.0)])
    profile = np.concatenate([heights, heights[::-1]])
    pitch = pitch_mm or float(widths.sum())
    figure = new_figure(
        COLUMN_MM,
        70.0,
        alt=f"Section of one ridge of {len(widths)} terraces, pitch {pitch:.1f} mm, height {heights.max():.1f} mm.",
    )
    axes = figure.subplots()
    axes.stairs(profile, edges, fill=True, color="#88CCEE", alpha=0.7)
    axes.stairs(profile, edges, color=_SUM_COLOUR, linewidth=0.9)
    axes.set_xlim(min(0.0, edges[0]), max(pitch, float(edges[-1])))
    axes.set_ylim(0.0, 1.08 * float(heights.max()) if heights.max() > 0.0 else 1.0)
    axes.set_xlabel("across one ridge (mm)")
    axes.set_ylabel(f"thickness{' of ' + material if material else ''} (mm)")
    axes.set_title(f"pitch {pitch:.2f} mm, {len(widths)} terraces", fontsize=7.0)
    return figure


@styled
def convergence_figure(
    objective: ArrayLike, *, parts: Mapping[str, ArrayLike] | None = None, stopped_because: str = ""
) -> Figure:
    """Draw how the objective fell while weights were chosen.

    Parameters
    ----------
    objective : array_like, shape (n,)
        Objective after each iteration, the start included.
    parts : mapping of str to array_like, optional
        Parts of the objective by goal.
    stopped_because : str
        The stopping rule that ended it.

    Returns
    -------
    Figure
        85 mm wide, log scale.
    """
    values = np.asarray(objective, dtype=np.float64)
    if values.ndim != 1 or len(values) == 0 or not np.all(np.isfinite(values)):
        raise InputError("an objective that is empty or not a number")
    figure = new_figure(
        COLUMN_MM,
        70.0,
        alt=(
            f"Objective against iteration: from {values[0]:.3g} to {values[-1]:.3g} in {len(values) - 1} iterations"
            f"{'; stopped because ' + stopped_because if stopped_because else ''}."
        ),
    )
    axes = figure.subplots()
    steps = np.arange(len(values))
    axes.plot(steps, np.where(values > 0.0, values, np.nan), color=INK, linewidth=1.3, label="whole objective")
    dashes = ((0, (5, 1.5)), (0, (2, 1)), (0, (4, 1, 1, 1)), (0, (1, 1)))
    colours = ("#332288", "#CC6677", "#44AA99", "#999933", "#882255", "#88CCEE")
    for i, (name, part) in enumerate((parts or {}).items()):
        part_values = np.asarray(part, dtype=np.float64)
        axes.plot(
            np.arange(len(part_values)),
            np.where(part_values > 0.0, part_values, np.nan),
            color=colours[i % len(colours)],
            linestyle=dashes[i % len(dashes)],
            label=name,
        )
    if np.any(values > 0.0):
        axes.set_yscale("log")
    axes.set_xlim(0, max(1, len(values) - 1))
    axes.set_xlabel("iteration")
    axes.set_ylabel("objective")
    if stopped_because:
        axes.set_title(f"stopped: {stopped_because}", fontsize=7.0)
    if parts:
        foot_legend(figure, axes, ncols=2)
    return figure


def _checked_steps(
    depth_mm: ArrayLike, step_dose: ArrayLike, residual_range_mm: ArrayLike, weights: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    depth = np.asarray(depth_mm, dtype=np.float64)
    curves = np.asarray(step_dose, dtype=np.float64)
    ranges = np.asarray(residual_range_mm, dtype=np.float64)
    shares = np.asarray(weights, dtype=np.float64)
    if curves.shape != (len(ranges), len(depth)) or ranges.shape != shares.shape:
        raise InputError(
            f"step doses of shape {curves.shape} for {len(ranges)} ranges, {len(shares)} weights, {len(depth)} depths",
            allowed="one depth dose and one weight for each range",
        )
    if float(shares.sum()) <= 0.0 or np.any(shares < 0.0):
        raise InputError("range steps without positive weights", allowed="weights of zero or more, not all zero")
    return depth, curves, ranges, shares

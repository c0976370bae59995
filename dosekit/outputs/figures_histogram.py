"""Volume histograms: how much of each structure receives at least a dose."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.errors import InputError
from dosekit.outputs.style import (
    INK,
    PAGE_MM,
    RULE,
    STRUCTURE_COLOURS,
    STRUCTURE_DASHES,
    new_figure,
    styled,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["Histogram", "draw_histograms", "histogram_figure", "structure_style"]

Histogram = tuple[ArrayLike, ArrayLike]
"""(dose in Gy, increasing; fraction of the volume that receives at least this dose, 1 to 0).

`dosekit.effects.histograms.VolumeHistogram.curve` gives such a pair.
"""


@styled
def histogram_figure(
    histograms: Mapping[str, Histogram],
    *,
    target: str | None = None,
    order: Sequence[str] | None = None,
    prescribed_gy: float | None = None,
    quantity: str = "dose",
    unit: str = "Gy",
    title: str = "",
) -> Figure:
    """Draw cumulative volume histograms.

    Parameters
    ----------
    histograms : mapping of str to (dose_gy, volume_fraction)
        One pair for each structure.
    target : str, optional
        Structure drawn in black and heavier.
    order : sequence of str, optional
        All structures of the volume, so that each keeps the colour it has in slices.
    prescribed_gy : float, optional
        Dose marked with a rule.
    quantity, unit : str
        What the dose axis shows, e.g. ``"effect-weighted dose"`` and ``"Gy (RBE)"``.
    title : str
        A few words.

    Returns
    -------
    Figure
        175 mm wide, legend at the right.
    """
    checked = {name: _checked(name, pair) for name, pair in histograms.items()}
    if not checked:
        raise InputError("no histogram to draw", remedy="name at least one structure")
    figure = new_figure(
        PAGE_MM,
        85.0,
        alt=f"Volume histograms of {quantity} for {', '.join(checked)}" + (f", {title}." if title else "."),
    )
    axes = figure.subplots()
    draw_histograms(axes, checked, target=target, order=order)
    if prescribed_gy is not None:
        axes.axvline(prescribed_gy, color=RULE, linewidth=0.7, linestyle=(0, (2, 2)), label="prescribed")
    axes.set_xlabel(f"{quantity} ({unit})")
    axes.set_ylabel("volume receiving at least this (%)")
    if title:
        axes.set_title(title)
    figure.legend(*axes.get_legend_handles_labels(), loc="outside right upper")
    return figure


def draw_histograms(
    axes: Axes,
    histograms: Mapping[str, Histogram],
    *,
    target: str | None = None,
    order: Sequence[str] | None = None,
    dash: object = None,
    labels: bool = True,
) -> None:
    """Draw cumulative histograms into a panel.

    Parameters
    ----------
    axes : Axes
        The panel.
    histograms : mapping of str to (dose_gy, volume_fraction)
        One pair for each structure.
    target : str, optional
        Structure drawn in black and heavier.
    order : sequence of str, optional
        All structures of the volume, so that each keeps the colour it has in slices.
    dash : object, optional
        One dash pattern for all lines, instead of one for each structure.
    labels : bool
        Whether lines enter a legend.
    """
    top = 0.0
    places = list(order) if order is not None else list(histograms)
    for name, pair in histograms.items():
        dose_gy, fraction = _checked(name, pair)
        place = places.index(name) if name in places else len(places)
        style = structure_style(name, index=place, target=target)
        if dash is not None:
            style["linestyle"] = dash
        axes.plot(dose_gy, 100.0 * fraction, **style | {"label": name if labels else "_nolegend_"})  # type: ignore[arg-type]
        top = max(top, float(dose_gy[fraction > 1e-3].max(initial=0.0)))
    axes.set_xlim(0.0, max(axes.get_xlim()[1] if axes.lines and not labels else 0.0, 1.04 * top or 1.0))
    axes.set_ylim(0.0, 103.0)
    axes.grid(visible=True)


def structure_style(name: str, *, index: int, target: str | None = None) -> dict[str, object]:
    """Return line settings of a structure; the target is black and heavy.

    Parameters
    ----------
    name : str
        The structure.
    index : int
        Its place in the list.
    target : str, optional
        Name of the target.

    Returns
    -------
    dict
        Keyword arguments for a line.
    """
    if _same(name, target):
        return {"color": INK, "linestyle": "-", "linewidth": 1.6}
    return {
        "color": STRUCTURE_COLOURS[index % len(STRUCTURE_COLOURS)],
        "linestyle": STRUCTURE_DASHES[index % len(STRUCTURE_DASHES)],
        "linewidth": 1.1,
    }


def _same(name: str, other: str | None) -> bool:
    return other is not None and name.casefold() == other.casefold()


def _checked(name: str, pair: Histogram) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    dose_gy, fraction = np.asarray(pair[0], np.float64), np.asarray(pair[1], np.float64)
    if dose_gy.shape != fraction.shape or dose_gy.ndim != 1 or len(dose_gy) == 0:
        raise InputError(f"histogram of {name!r} with {dose_gy.shape} doses and {fraction.shape} volumes")
    return dose_gy, fraction

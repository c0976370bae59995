"""From Hounsfield units to what the beam sees: density, relative stopping power, star energy per stop."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from dosekit.errors import InputError
from dosekit.outputs.style import INK, PAGE_MM, foot_legend, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from collections.abc import Mapping

    from matplotlib.figure import Figure

__all__ = ["calibration_figure"]

_CURVE_COLOUR = "#332288"


@styled
def calibration_figure(
    hu: ArrayLike,
    *,
    density_g_cm3: ArrayLike,
    relative_stopping_power: ArrayLike,
    star_energy_mev: ArrayLike | None = None,
    tissues: Mapping[str, tuple[float, float, float]] | None = None,
    title: str = "",
) -> Figure:
    """Draw a HU calibration.

    Parameters
    ----------
    hu : array_like, shape (n,)
        Hounsfield units, increasing.
    density_g_cm3, relative_stopping_power : array_like, shape (n,)
        Density and stopping power per length relative to water.
    star_energy_mev : array_like, shape (n,), optional
        Charged star energy in MeV per stopped negative pion.
    tissues : mapping of str to (hu, density, relative stopping power), optional
        The reference tissues the calibration rests on, drawn as points.
    title : str
        Which calibration.

    Returns
    -------
    Figure
        175 mm wide, one panel for each quantity.
    """
    x = np.asarray(hu, np.float64)
    columns = [
        ("density (g/cm³)", np.asarray(density_g_cm3, np.float64), 1),
        ("stopping power relative to water", np.asarray(relative_stopping_power, np.float64), 2),
    ]
    if star_energy_mev is not None:
        columns.append(("charged star energy (MeV per stop)", np.asarray(star_energy_mev, np.float64), 0))
    for label, values, _ in columns:
        if values.shape != x.shape:
            raise InputError(f"{len(x)} HU values and {values.shape} values of {label}")
    names = ", ".join(label.split(" (")[0] for label, _, _ in columns)
    figure = new_figure(
        PAGE_MM,
        70.0,
        alt=f"HU calibration{', ' + title if title else ''}: {names} against HU from {x[0]:.0f} to {x[-1]:.0f}.",
    )
    panels = np.atleast_1d(figure.subplots(1, len(columns)))
    for axes, letter, (label, values, column) in zip(panels, "abc", columns, strict=False):
        axes.plot(x, values, color=_CURVE_COLOUR, linewidth=1.1, label="calibration", zorder=2)
        if tissues and column:
            points = np.array(list(tissues.values()), dtype=np.float64)
            axes.plot(
                points[:, 0],
                points[:, column],
                marker="o",
                linestyle="none",
                markersize=2.6,
                markerfacecolor="white",
                markeredgecolor=INK,
                markeredgewidth=0.6,
                label="reference tissue",
                zorder=3,
            )
        axes.set_xlabel("HU")
        axes.set_ylabel(label)
        axes.grid(visible=True)
        letter_panel(axes, letter, title if letter == "a" else "")
    foot_legend(figure, panels[0], ncols=2)
    return figure

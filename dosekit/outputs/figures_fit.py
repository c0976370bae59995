"""A beam fitted to a measured depth dose: data, fit and what is left over."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike

from dosekit.errors import InputError
from dosekit.outputs.style import COLUMN_MM, INK, RULE, letter_panel, new_figure, styled

if TYPE_CHECKING:
    from collections.abc import Mapping

    from matplotlib.figure import Figure

__all__ = ["fit_figure"]

_FIT_COLOUR = "#CC6677"
_LINE_POINT = 9.1
_PANEL_POINT = 150.0


@styled
def fit_figure(
    depth_mm: ArrayLike,
    measured: ArrayLike,
    *,
    fit_depth_mm: ArrayLike,
    fitted: ArrayLike,
    sigma: ArrayLike | None = None,
    parameters: Mapping[str, tuple[float, float, str]] | None = None,
    source: str = "",
) -> Figure:
    """Draw measured points, the fitted curve and the residuals.

    Parameters
    ----------
    depth_mm, measured : array_like, shape (n,)
        Measured relative dose.
    fit_depth_mm, fitted : array_like, shape (m,)
        The fitted curve on the same scale; it is read between its points for the residuals.
    sigma : array_like, shape (n,), optional
        Standard uncertainty of the measured values.
    parameters : mapping of str to (value, standard error, unit), optional
        What was fitted.
    source : str
        Where the data come from.

    Returns
    -------
    Figure
        85 mm wide: (a) data and fit with the parameters, (b) residuals in % of the largest measured value.
    """
    depth, data = np.asarray(depth_mm, np.float64), np.asarray(measured, np.float64)
    line_depth, line = np.asarray(fit_depth_mm, np.float64), np.asarray(fitted, np.float64)
    if depth.shape != data.shape or line_depth.shape != line.shape or depth.ndim != 1 or len(depth) == 0:
        raise InputError("data and fit of unequal lengths", allowed="one value for each depth")
    scale = 100.0 / float(data.max())
    residual = scale * (data - np.interp(depth, line_depth, line))
    rms = float(np.sqrt(np.mean(residual**2)))
    figure = new_figure(
        COLUMN_MM,
        105.0,
        alt=(
            f"{len(depth)} measured depth-dose points{' (' + source + ')' if source else ''} with the fitted curve; "
            f"residuals have a root mean square of {rms:.2f} % of the largest value."
        ),
    )
    main, rest = figure.subplots(2, 1, sharex=True, height_ratios=(3.0, 1.1))
    errors = None if sigma is None else scale * np.asarray(sigma, np.float64)
    main.errorbar(
        depth, scale * data, yerr=errors, fmt="o", color=INK, markersize=2.4, elinewidth=0.5, label="data", zorder=3
    )
    main.plot(line_depth, scale * line, color=_FIT_COLOUR, linewidth=1.2, label="fit")
    main.set_ylabel("relative dose (%)")
    lines = [_parameter_line(name, *entry) for name, entry in (parameters or {}).items()]
    # The words stand above the highest point, so that they can never cover the curve.
    share = min(0.6, (_LINE_POINT * max(2, len(lines)) + 8.0) / _PANEL_POINT)
    main.set_ylim(0.0, 104.0 * max(1.0, float(line.max() * scale / 100.0)) / (1.0 - share))
    main.legend(loc="upper right")
    main.text(
        0.02,
        0.98,
        "\n".join(lines),
        transform=main.transAxes,
        ha="left",
        va="top",
        fontsize=6.5,
        linespacing=1.4,
        gid="parameters",
    )
    rest.axhline(0.0, color=RULE, linewidth=0.6)
    rest.errorbar(depth, residual, yerr=errors, fmt="o", color=INK, markersize=2.0, elinewidth=0.5)
    reach = 1.15 * max(float((np.abs(residual) + (0.0 if errors is None else errors)).max()), 0.5)
    rest.set_ylim(-reach, reach)
    rest.set_xlabel("depth (mm)")
    rest.set_ylabel("residual (%)")
    letter_panel(main, "a", "data and fit")
    letter_panel(rest, "b", f"data less fit, rms {rms:.2f} %")
    figure.align_ylabels()
    return figure


def _parameter_line(name: str, value: float, error: float, unit: str) -> str:
    tail = f" {unit}" if unit else ""
    if not np.isfinite(error) or error <= 0.0:
        return f"{name} {value:.4g}{tail}"
    digits = int(min(6, max(0, 1 - np.floor(np.log10(error)))))
    return f"{name} {value:.{digits}f} ± {error:.{digits}f}{tail}"

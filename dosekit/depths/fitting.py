"""Which beam made a measured depth-dose curve?

Momentum, momentum spread, contaminant fractions and an offset of depth are fitted to points of relative dose by least
squares (``scipy.optimize.least_squares``); the scale of the dose is eliminated in each step. Dose is taken as
energy per mm of a broad beam (the laterally integrated curve). The covariance is that of the linearised problem,
scaled by the mean square residual where no uncertainties are given. An offset of depth and the momentum nearly
stand for each other (only the plateau tells them apart): leave the offset out where the zero of depth is known.
Someone who reconstructs a historic beam from a printed figure starts here.
"""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.materials import Material
from dosekit.beams.beam import Beam
from dosekit.caution import CAUTION
from dosekit.depths.curves import depth_curve
from dosekit.depths.layers import Layers
from dosekit.errors import InputError

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["BeamFit", "fit_beam", "read_depth_dose"]

_SPREAD_FLOOR = 1e-4


@dataclass(frozen=True)
class BeamFit:
    """A fitted beam.

    Attributes
    ----------
    beam : Beam
        The beam that fits best.
    parameters : dict of str to float
        Fitted values: momentum_mev_c, momentum_sigma, offset_mm, and contaminant fractions by species.
    sigma : dict of str to float
        One standard deviation of each.
    covariance : ndarray
        Covariance in the order of `parameters`.
    residual_rms : float
        Root mean square residual, in units of the largest measured value.
    data : xarray.Dataset
        ``measured``, ``fitted``, ``residual`` against ``depth``; what a figure of the fit needs.
    """

    beam: Beam
    parameters: dict[str, float]
    sigma: dict[str, float]
    covariance: NDArray[np.float64] = field(repr=False)
    residual_rms: float
    data: xr.Dataset = field(repr=False)


def read_depth_dose(path: str | Path) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Read depth and relative dose from a CSV file with a header.

    Parameters
    ----------
    path : str or Path
        File whose first line names the columns, one beginning with ``depth`` (mm) and one with ``dose``; lines that
        start with ``#`` are skipped.

    Returns
    -------
    depth_mm, dose : ndarray
        Points in the order of depth.

    Raises
    ------
    InputError
        If the file cannot be read, or its columns are absent, swapped or hold anything but finite numbers.
    """
    place = Path(path)
    try:
        text = place.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"{place.name} cannot be read ({error.__class__.__name__})", allowed="a CSV text file"
        ) from None
    lines = [(n, line) for n, line in enumerate(text.splitlines(), 1) if line.strip() and not line.startswith("#")]
    if len(lines) < 2:
        raise InputError(f"{place.name} holds no points", allowed="a header and at least six rows")
    names = [name.strip().lower() for name in next(csv.reader([lines[0][1]]))]
    found = {}
    for want in ("depth", "dose"):
        match = [i for i, name in enumerate(names) if name.startswith((want, f"relative_{want}"))]
        if len(match) != 1:
            raise InputError(
                f"{place.name}: columns {', '.join(names)}",
                allowed="one column that begins with 'depth' (mm) and one that begins with 'dose'",
                remedy="name the columns depth_mm,dose",
            )
        found[want] = match[0]
    rows = []
    for number, line in lines[1:]:
        cells = next(csv.reader([line]))
        try:
            rows.append([float(cells[found["depth"]]), float(cells[found["dose"]])])
        except (ValueError, IndexError):
            raise InputError(
                f"{place.name}, line {number}: {line.strip()!r}", allowed="two numbers", remedy="mend the row"
            ) from None
    table = np.array(rows)
    _check_points(table[:, 0], table[:, 1], place.name)
    order = np.argsort(table[:, 0], kind="stable")
    return table[order, 0], table[order, 1]


def _check_points(depth: NDArray[np.float64], dose: NDArray[np.float64], name: str) -> None:
    """Refuse points that cannot be a depth-dose curve, among them swapped columns."""
    if depth.shape != dose.shape or depth.ndim != 1 or len(depth) < 6:
        raise InputError(f"{name}: {depth.shape} depths and {dose.shape} doses", allowed="at least six pairs")
    if not (np.all(np.isfinite(depth)) and np.all(np.isfinite(dose))):
        raise InputError(f"{name}: a value is missing or not finite", allowed="finite numbers", remedy="remove the row")
    if np.any(dose < 0.0) or np.max(dose) <= 0.0:
        raise InputError(f"{name}: negative dose, or none above zero", allowed="doses of 0 and more")
    if np.any(depth < -50.0) or np.max(depth) > 2000.0:
        raise InputError(f"{name}: depths from {np.min(depth):g} to {np.max(depth):g}", allowed="-50 to 2000 mm")
    turns = np.sum(np.diff(np.sign(np.diff(depth[np.diff(depth, prepend=depth[0] - 1.0) != 0.0]))) != 0.0)
    rising = np.all(np.diff(dose) > 0.0) or np.all(np.diff(dose) < 0.0)
    if len(np.unique(depth)) < len(depth) or (turns > 0 and rising):
        raise InputError(
            f"{name}: depths repeat or jump while doses run evenly; the columns look swapped",
            allowed="each depth (mm) once, in one column",
            remedy="check which column holds depth",
        )


def fit_beam(
    depth_mm: ArrayLike,
    dose: ArrayLike,
    beam: Beam,
    medium: str | Material | Layers = "water",
    *,
    free: tuple[str, ...] = ("momentum_mev_c", "momentum_sigma", "offset_mm"),
    uncertainty: ArrayLike | None = None,
    yields: str = "evaluated",
    star_scale: float = 1.0,
) -> BeamFit:
    """Fit a beam to a measured depth-dose curve.

    Parameters
    ----------
    depth_mm : array_like, shape (n,)
        Measured depths, mm.
    dose : array_like, shape (n,)
        Measured relative doses; any scale.
    beam : Beam
        Start values; species and everything that is not free.
    medium : str or Material or Layers
        What the curve was measured in.
    free : tuple of str
        What is fitted: ``momentum_mev_c``, ``momentum_sigma``, ``offset_mm`` (depth of the model at measured depth
        0, added to measured depths) and contaminant species, e.g. ``"e-"``.
    uncertainty : array_like, optional
        Standard deviations of the doses.
    yields, star_scale : str, float
        As in :func:`dosekit.depths.curves.depth_curve`.

    Returns
    -------
    BeamFit
        Beam, parameters, covariance, and a dataset of data, fit and residual.

    Raises
    ------
    InputError
        If the points are not a curve or there is nothing to fit.
    """
    import xarray as xr
    from scipy.interpolate import CubicSpline
    from scipy.optimize import least_squares

    depth, value = np.asarray(depth_mm, dtype=float), np.asarray(dose, dtype=float)
    _check_points(depth, value, "depth-dose points")
    if not free or len(set(free)) < len(free) or len(free) >= len(depth):
        raise InputError(
            f"{len(free)} free parameters for {len(depth)} points", allowed="different ones, fewer than points"
        )
    known = ("momentum_mev_c", "momentum_sigma", "offset_mm", "mu-", "mu+", "e-", "e+")
    for name in free:
        if name not in known:
            raise InputError(f"free parameter {name!r}", allowed=", ".join(known))
    peak = float(np.max(value))
    sigma = np.full(len(depth), peak) if uncertainty is None else np.asarray(uncertainty, dtype=float)
    if sigma.shape != depth.shape or not np.all(sigma > 0.0):
        raise InputError(
            "uncertainties that do not match the points or are not positive", allowed="one positive number each"
        )
    fractions = beam.contaminant_fractions
    start = {
        "momentum_mev_c": beam.momentum_mev_c,
        "momentum_sigma": max(beam.momentum_spread, 0.01),
        "offset_mm": 0.0,
        **{name: fractions.get(name, 0.1) for name in known[3:]},
    }
    limits = {
        "momentum_mev_c": (0.8 * beam.momentum_mev_c, 1.25 * beam.momentum_mev_c),
        "momentum_sigma": (_SPREAD_FLOOR, 0.2),
        "offset_mm": (-40.0, 40.0),
        **dict.fromkeys(known[3:], (0.0, 0.9)),
    }
    # steps well above the bin's own ripple; the curve is smooth over them
    steps = {"momentum_mev_c": 1e-3 * beam.momentum_mev_c, "momentum_sigma": 1e-3, "offset_mm": 0.5}
    longest = float(np.max(depth)) + 45.0
    if isinstance(medium, Layers):
        medium = medium.cut(max(longest, medium.total_mm))
        longest = medium.total_mm

    def made(point: NDArray[np.float64]) -> Beam:
        """Return the beam for a point of parameter space."""
        values = dict(zip(free, point, strict=True))
        mixed = {**fractions, **{n: max(float(values[n]), 0.0) for n in free if n in known[3:]}}
        total = math.fsum(mixed.values())
        if total > 1.0:
            mixed = {name: share / total for name, share in mixed.items()}
        return beam.replace(
            momentum_mev_c=float(values.get("momentum_mev_c", beam.momentum_mev_c)),
            momentum_sigma=float(values.get("momentum_sigma", beam.momentum_spread)),
            momentum_fwhm=None,
            contaminants=mixed,
        )

    def model(point: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the curve at the measured depths, scaled to the data."""
        curve = depth_curve(made(point), medium, yields=yields, bin_mm=1.0, depth_mm=longest, star_scale=star_scale)
        total = curve["energy"].sum("component").to_numpy()
        offset = dict(zip(free, point, strict=True)).get("offset_mm", 0.0)
        at = CubicSpline(curve["depth"].to_numpy(), total)(np.clip(depth + offset, 0.0, longest))
        factor = float(np.sum(at * value / sigma**2) / max(float(np.sum((at / sigma) ** 2)), 1e-300))
        return factor * at

    def residual(point: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return weighted residuals."""
        return np.asarray((model(point) - value) / sigma)

    def slope(point: NDArray[np.float64], factor: float = 1.0) -> NDArray[np.float64]:
        """Return the Jacobian by central differences with steps that the bins allow."""
        columns = []
        for index, name in enumerate(free):
            move = np.zeros(len(free))
            move[index] = factor * steps.get(name, 0.005)
            low = np.maximum(point - move, [limits[n][0] for n in free])
            high = np.minimum(point + move, [limits[n][1] for n in free])
            columns.append((residual(high) - residual(low)) / (high[index] - low[index]))
        return np.stack(columns, axis=1)

    bounds = ([limits[name][0] for name in free], [limits[name][1] for name in free])
    begin = np.clip([start[name] for name in free], np.array(bounds[0]) + 1e-9, np.array(bounds[1]) - 1e-9)
    found = least_squares(residual, begin, jac=slope, bounds=bounds, x_scale="jac", xtol=1e-8, ftol=1e-10, max_nfev=40)
    degrees = max(len(depth) - len(free) - 1, 1)
    noise = float(np.sum(found.fun**2)) / degrees if uncertainty is None else 1.0
    # wider steps for the covariance: momentum and offset nearly stand for each other, and ripple would hide it
    wide = slope(found.x, 3.0)
    covariance = noise * np.linalg.pinv(wide.T @ wide)
    fitted = model(found.x)
    data = xr.Dataset(
        {
            "measured": (("depth",), value, {"units": "relative"}),
            "fitted": (("depth",), fitted, {"units": "relative"}),
            "residual": (("depth",), value - fitted, {"units": "relative"}),
        },
        coords={"depth": ("depth", depth, {"units": "mm"})},
        attrs={"title": "beam fitted to a measured depth-dose curve", "caution": CAUTION},
    )
    return BeamFit(
        made(found.x),
        {name: float(x) for name, x in zip(free, found.x, strict=True)},
        {name: float(x) for name, x in zip(free, np.sqrt(np.maximum(np.diag(covariance), 0.0)), strict=True)},
        np.asarray(covariance),
        float(np.sqrt(np.mean((fitted - value) ** 2))) / peak,
        data,
    )

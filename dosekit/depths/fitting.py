"""Which beam made a measured depth-dose curve?

Momentum, momentum spread, contaminant fractions and an offset of depth are fitted to points of relative dose by least
squares (``scipy.optimize.least_squares``); the scale of the dose is eliminated in each step. Dose is taken as
energy per mm of a broad beam (the laterally integrated curve). The covariance is that of the linearised problem,
scaled by the mean square residual where no uncertainties are given.

An offset of depth and the momentum nearly stand for each other: both move the peak, and only the plateau tells them
apart. The offset is fixed unless asked for; where both are free, the fit runs in the range left behind the offset,
which is sure, and the offset, which is not, so that it converges; their covariance is carried back to the momentum.
Someone who reconstructs a historic beam from a printed figure starts here.
"""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.materials import Material
from dosekit.basis.particles import kinetic_energy_mev, momentum_mev_c
from dosekit.beams.beam import Beam
from dosekit.beams.ranges import range_table
from dosekit.caution import CAUTION
from dosekit.depths.curves import depth_curve
from dosekit.depths.layers import Layers
from dosekit.depths.measured import check_points, read_depth_dose
from dosekit.errors import FitWarning, InputError

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["BeamFit", "fit_beam", "read_depth_dose"]

_SPECIES = ("mu-", "mu+", "e-", "e+")
_KNOWN = ("momentum_mev_c", "momentum_sigma", "offset_mm", *_SPECIES)
_SPREAD = (1e-4, 0.2)
_LARGEST_OFFSET_MM = 40.0
_LARGEST_FRACTION = 0.9
_CLOSE = 0.98
"""Correlation from which two parameters are said to stand for each other."""

Vector = NDArray[np.float64]


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
    covariance: Vector = field(repr=False)
    residual_rms: float
    data: xr.Dataset = field(repr=False)

    @property
    def correlation(self) -> Vector:
        """Correlation in the order of `parameters`."""
        deviation = np.sqrt(np.maximum(np.diag(self.covariance), 1e-300))
        return np.asarray(self.covariance / np.outer(deviation, deviation))


def fit_beam(
    depth_mm: ArrayLike,
    dose: ArrayLike,
    beam: Beam,
    medium: str | Material | Layers = "water",
    *,
    free: tuple[str, ...] = ("momentum_mev_c", "momentum_sigma"),
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
        0, added to measured depths; ask for it only where the zero of depth is not known) and contaminant species,
        e.g. ``"e-"``.
    uncertainty : array_like, optional
        Standard deviations of the doses. Without them all points weigh the same, and the covariance is scaled by what
        is left over.
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

    Warns
    -----
    FitWarning
        If two parameters stand for each other (correlation over 0.98) or one ended at its limit.
    """
    from scipy.optimize import least_squares

    depth, value = np.asarray(depth_mm, dtype=float), np.asarray(dose, dtype=float)
    check_points(depth, value, "depth-dose points")
    _check_free(free, len(depth))
    sigma = np.full(len(depth), float(np.max(value))) if uncertainty is None else np.asarray(uncertainty, dtype=float)
    if sigma.shape != depth.shape or not np.all(sigma > 0.0):
        raise InputError(
            "uncertainties that do not match the points or are not positive", allowed="one positive number each"
        )
    problem = _Problem(depth, value, sigma, beam, medium, free, {"yields": yields, "star_scale": star_scale})
    found = least_squares(
        problem.residual, problem.start, jac=problem.slope, bounds=(problem.low, problem.high), x_scale="jac",
        xtol=1e-6, ftol=1e-7, max_nfev=40,
    )  # fmt: skip
    degrees = max(len(depth) - len(free) - 1, 1)
    noise = float(np.sum(found.fun**2)) / degrees if uncertainty is None else 1.0
    # wider steps for the covariance, so that the ripple of bins does not hide a weak dependence
    wide = problem.slope(found.x, 3.0)
    outward = problem.outward(found.x)
    covariance = outward @ (noise * np.linalg.pinv(wide.T @ wide)) @ outward.T
    fitted = problem.model(found.x)
    values = problem.values(found.x)
    result = BeamFit(
        problem.beam(found.x),
        values,
        dict(zip(free, (float(x) for x in np.sqrt(np.maximum(np.diag(covariance), 0.0))), strict=True)),
        np.asarray(covariance),
        float(np.sqrt(np.mean((fitted - value) ** 2)) / np.max(value)),
        _dataset(depth, value, fitted),
    )
    _warn(result, problem, found.x)
    return result


def _check_free(free: tuple[str, ...], points: int) -> None:
    """Refuse an empty, doubled, unknown or too long list of free parameters."""
    if not free or len(set(free)) < len(free) or len(free) >= points:
        raise InputError(
            f"{len(free)} free parameters for {points} points", allowed="different ones, fewer than points"
        )
    for name in free:
        if name not in _KNOWN:
            raise InputError(f"free parameter {name!r}", allowed=", ".join(_KNOWN))


def _dataset(depth: Vector, value: Vector, fitted: Vector) -> xr.Dataset:
    """Return data, fit and residual against depth."""
    import xarray as xr

    columns = {"measured": value, "fitted": fitted, "residual": value - fitted}
    return xr.Dataset(
        {name: (("depth",), column, {"units": "relative"}) for name, column in columns.items()},
        coords={"depth": ("depth", depth, {"units": "mm"})},
        attrs={"title": "beam fitted to a measured depth-dose curve", "caution": CAUTION},
    )


def _warn(fit: BeamFit, problem: _Problem, point: Vector) -> None:
    """Say what the numbers alone do not show."""
    names = list(fit.parameters)
    span = problem.high - problem.low
    for name, x, low, high in zip(names, point, problem.low + 1e-4 * span, problem.high - 1e-4 * span, strict=True):
        if not low < x < high:
            warnings.warn(
                f"the fit ended at the limit of {name}, {fit.parameters[name]:.4g}: its standard deviation means "
                "nothing; fix it, or start nearer",
                FitWarning,
                stacklevel=3,
            )
    for i, one in enumerate(names):
        for j in range(i):
            if abs(fit.correlation[i, j]) > _CLOSE:
                warnings.warn(
                    f"{names[j]} and {one} stand for each other (correlation {fit.correlation[i, j]:.3f}): the points "
                    "fix their combination, the depth of the peak, and hardly either of them; fix one that is known",
                    FitWarning,
                    stacklevel=3,
                )


class _Problem:
    """The model of a fit and its inner parameters, those of `free` with the momentum replaced by a range if need be."""

    def __init__(
        self,
        depth: Vector,
        value: Vector,
        sigma: Vector,
        beam: Beam,
        medium: str | Material | Layers,
        free: tuple[str, ...],
        settings: dict[str, str | float],
    ) -> None:
        self.depth, self.measured, self.sigma = depth, value, sigma
        self.first, self.free, self.settings = beam, free, settings
        self.longest = float(np.max(depth)) + 5.0 + _LARGEST_OFFSET_MM
        self.medium = medium
        if isinstance(medium, Layers):
            self.medium = medium.cut(max(self.longest, medium.total_mm))
            self.longest = self.medium.total_mm
        self.by_range = "momentum_mev_c" in free and "offset_mm" in free
        self.table = range_table(beam.particle, "water")
        momentum = beam.momentum_mev_c
        limits = {
            "momentum_mev_c": (0.8 * momentum, 1.25 * momentum),
            "momentum_sigma": _SPREAD,
            "offset_mm": (-_LARGEST_OFFSET_MM, _LARGEST_OFFSET_MM),
            **dict.fromkeys(_SPECIES, (0.0, _LARGEST_FRACTION)),
        }
        start = {
            "momentum_mev_c": momentum,
            "momentum_sigma": max(beam.momentum_spread, 0.01),
            "offset_mm": 0.0,
            **{name: beam.contaminant_fractions.get(name, 0.1) for name in _SPECIES},
        }
        # steps well above the ripple of bins; the curve is smooth over them
        steps = {"momentum_mev_c": 1e-3 * momentum, "momentum_sigma": 1e-3, "offset_mm": 0.5}
        if self.by_range:
            limits["momentum_mev_c"] = (self._range(0.8 * momentum), self._range(1.25 * momentum))
            start["momentum_mev_c"] = self._range(momentum)
            steps["momentum_mev_c"], steps["offset_mm"] = 0.5, 3.0
        self.low, self.high = np.array([limits[name] for name in free]).T
        self.steps = np.array([steps.get(name, 0.005) for name in free])
        self.start = np.clip([start[name] for name in free], self.low + 1e-9, self.high - 1e-9)

    def _range(self, momentum: float) -> float:
        """Return the range in water, mm."""
        return float(self.table.range_mm(kinetic_energy_mev(self.first.particle, momentum)))

    def values(self, point: Vector) -> dict[str, float]:
        """Return the parameters of `free` at a point."""
        values = {name: float(x) for name, x in zip(self.free, point, strict=True)}
        if self.by_range:
            reach = max(values["momentum_mev_c"] + values["offset_mm"], 2.0)
            values["momentum_mev_c"] = float(momentum_mev_c(self.first.particle, self.table.energy_mev(reach)))
        return values

    def outward(self, point: Vector) -> Vector:
        """Return d(parameters of `free`) / d(inner parameters)."""
        matrix = np.eye(len(self.free))
        if self.by_range:
            row, column = self.free.index("momentum_mev_c"), self.free.index("offset_mm")
            here = self.values(point)["momentum_mev_c"]
            per_mm = 2e-3 * here / (self._range(1.001 * here) - self._range(0.999 * here))
            matrix[row, row] = matrix[row, column] = per_mm
        return matrix

    def beam(self, point: Vector) -> Beam:
        """Return the beam at a point."""
        values = self.values(point)
        mixed = {**self.first.contaminant_fractions, **{n: max(values[n], 0.0) for n in self.free if n in _SPECIES}}
        total = math.fsum(mixed.values())
        if total > 1.0:
            mixed = {name: share / total for name, share in mixed.items()}
        return self.first.replace(
            momentum_mev_c=values.get("momentum_mev_c", self.first.momentum_mev_c),
            momentum_sigma=values.get("momentum_sigma", self.first.momentum_spread),
            momentum_fwhm=None,
            contaminants=mixed,
        )

    def model(self, point: Vector) -> Vector:
        """Return the curve at the measured depths, scaled to the data."""
        from scipy.interpolate import CubicSpline

        curve = depth_curve(self.beam(point), self.medium, bin_mm=1.0, depth_mm=self.longest, **self.settings)  # type: ignore[arg-type]
        total = curve["energy"].sum("component").to_numpy()
        offset = self.values(point).get("offset_mm", 0.0)
        place = np.clip(self.depth + offset, 0.0, self.longest)
        at = CubicSpline(curve["depth"].to_numpy(), total)(place)
        weight = 1.0 / self.sigma**2
        factor = float(np.sum(at * self.measured * weight) / max(float(np.sum(at * at * weight)), 1e-300))
        return np.asarray(factor * at)

    def residual(self, point: Vector) -> Vector:
        """Return weighted residuals."""
        return np.asarray((self.model(point) - self.measured) / self.sigma)

    def slope(self, point: Vector, factor: float = 1.0) -> Vector:
        """Return the Jacobian by central differences."""
        columns = []
        for index, step in enumerate(self.steps):
            move = np.zeros(len(point))
            move[index] = factor * step
            low, high = np.maximum(point - move, self.low), np.minimum(point + move, self.high)
            columns.append((self.residual(high) - self.residual(low)) / (high[index] - low[index]))
        return np.stack(columns, axis=1)

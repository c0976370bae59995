"""Where a depth dose peaks, ends and how high it stands: the numbers marked in figures and summaries.

The distal depths are read on the falling side by straight lines between bins. Peak-to-entrance
is the peak over the mean of the first 10 mm, or over the first tenth of the curve if it is
shorter than 100 mm (common practice: the very first bins lack the build-up of secondaries).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.errors import InputError

__all__ = ["CurveMarks", "curve_marks", "distal_depth_mm"]

ENTRANCE_MM = 10.0


@dataclass(frozen=True)
class CurveMarks:
    """What a depth dose is known by.

    Parameters
    ----------
    peak_depth_mm : float
        Depth of the largest value.
    peak : float
        The largest value, in the unit of the curve.
    entrance : float
        Mean over the entrance.
    distal_80_mm, distal_20_mm : float
        Depth behind the peak where 80 % and 20 % of it are left; nan where the curve ends before.
    """

    peak_depth_mm: float
    peak: float
    entrance: float
    distal_80_mm: float
    distal_20_mm: float

    @property
    def peak_to_entrance(self) -> float:
        """Peak over entrance."""
        return self.peak / self.entrance if self.entrance > 0.0 else float("nan")

    @property
    def distal_fall_mm(self) -> float:
        """Distance from 80 % to 20 % behind the peak."""
        return self.distal_20_mm - self.distal_80_mm


def distal_depth_mm(depth_mm: ArrayLike, dose: ArrayLike, *, fraction: float) -> float:
    """Return the last depth where the dose falls through a fraction of its maximum.

    Parameters
    ----------
    depth_mm : array_like, shape (n,)
        Increasing depths.
    dose : array_like, shape (n,)
        Dose at these depths.
    fraction : float
        Fraction of the maximum, between 0 and 1.

    Returns
    -------
    float
        Depth in mm; nan where the curve ends above this level.

    Examples
    --------
    >>> distal_depth_mm([0.0, 10.0, 20.0], [1.0, 2.0, 0.0], fraction=0.5)
    15.0
    """
    depth, values = _checked(depth_mm, dose)
    level = fraction * float(values.max())
    above = np.flatnonzero(values >= level)
    last = int(above[-1])
    if last + 1 >= len(values):
        return float("nan")
    upper, lower = float(values[last]), float(values[last + 1])
    part = (upper - level) / (upper - lower)
    return float(depth[last] + part * (depth[last + 1] - depth[last]))


def curve_marks(depth_mm: ArrayLike, dose: ArrayLike) -> CurveMarks:
    """Return peak, entrance and distal depths of a depth dose.

    Parameters
    ----------
    depth_mm : array_like, shape (n,)
        Increasing depths.
    dose : array_like, shape (n,)
        Dose at these depths, any unit.

    Returns
    -------
    CurveMarks
        The marks.

    Examples
    --------
    >>> marks = curve_marks([5.0, 15.0, 25.0, 35.0], [1.0, 1.0, 3.0, 0.0])
    >>> marks.peak_depth_mm, marks.peak_to_entrance
    (25.0, 3.0)
    """
    depth, values = _checked(depth_mm, dose)
    peak_index = int(np.argmax(values))
    length = float(depth[-1] - depth[0])
    reach = min(ENTRANCE_MM, 0.1 * length) if length < 10.0 * ENTRANCE_MM else ENTRANCE_MM
    start = depth <= depth[0] + reach
    return CurveMarks(
        peak_depth_mm=float(depth[peak_index]),
        peak=float(values[peak_index]),
        entrance=float(values[start].mean()),
        distal_80_mm=distal_depth_mm(depth, values, fraction=0.8),
        distal_20_mm=distal_depth_mm(depth, values, fraction=0.2),
    )


def _checked(depth_mm: ArrayLike, dose: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    depth, values = np.asarray(depth_mm, dtype=np.float64), np.asarray(dose, dtype=np.float64)
    if depth.ndim != 1 or depth.shape != values.shape or len(depth) < 2:
        raise InputError(
            f"a depth dose of shapes {depth.shape} and {values.shape}",
            allowed="two equally long lists of at least two numbers",
            remedy="give one dose for each depth",
        )
    if not (np.all(np.isfinite(depth)) and np.all(np.isfinite(values))):
        raise InputError("a depth dose with a value that is not a number", remedy="remove the damaged rows")
    if not np.all(np.diff(depth) > 0.0):
        raise InputError("depths that do not increase", allowed="strictly increasing depths")
    if float(values.max()) <= 0.0:
        raise InputError("a depth dose without any dose", allowed="at least one positive value")
    return depth, values

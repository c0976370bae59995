"""How good is a depth curve that should be flat over an interval?

Flatness is the largest deviation from the mean inside an interval, as a fraction of the mean.  Distal fall
is the depth difference from 80 to 20 percent of that mean behind the interval (linear interpolation between
bins).  Entrance is the first bin; the peak-to-entrance ratio is the largest value over the entrance.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

__all__ = ["ProfileMeasures", "falling_depth_mm", "profile_measures"]


@dataclass(frozen=True)
class ProfileMeasures:
    """Figures of merit of a flattened depth curve.

    Parameters
    ----------
    flatness : float
        Largest deviation from the mean in the judged interval, fraction of the mean.
    mean : float
        Mean in the judged interval, unit of the curve.
    judged_mm : (float, float)
        Interval that was judged, mm.
    distal_fall_mm : float
        Depth from 80 to 20 percent of the mean behind the interval, mm; NaN when the curve does not fall
        that far.
    entrance_share : float
        First bin over the mean.
    peak_to_entrance : float
        Largest value over the first bin.
    """

    flatness: float
    mean: float
    judged_mm: tuple[float, float]
    distal_fall_mm: float
    entrance_share: float
    peak_to_entrance: float


def profile_measures(depth_mm: ArrayLike, values: ArrayLike, *, judged_mm: tuple[float, float]) -> ProfileMeasures:
    """Measure a depth curve.

    Parameters
    ----------
    depth_mm, values : array_like, shape (n,)
        Bin centres in mm, ascending, and the curve.
    judged_mm : (float, float)
        Interval in which flatness is judged, mm.

    Returns
    -------
    ProfileMeasures
        Flatness, distal fall, entrance.

    Raises
    ------
    InputError
        If no bin lies in the interval, or the curve has no value there.

    Examples
    --------
    >>> measures = profile_measures([0, 1, 2, 3, 4], [1.0, 2.0, 2.2, 2.0, 0.0], judged_mm=(1, 3))
    >>> round(measures.flatness, 4), measures.peak_to_entrance
    (0.0645, 2.2)
    """
    depth, curve = np.asarray(depth_mm, dtype=np.float64), np.asarray(values, dtype=np.float64)
    low, high = judged_mm
    inside = (depth >= low - 1e-9) & (depth <= high + 1e-9)
    if not inside.any():
        raise InputError(
            f"no depth bin between {low:g} and {high:g} mm",
            allowed="an interval with at least one bin",
            remedy="widen the interval, or use smaller steps or finer bins",
        )
    part = curve[inside]
    mean = float(np.mean(part))
    if not mean > 0.0:
        raise InputError(
            "a depth curve without dose in the interval", allowed="some dose", remedy="check beam and interval"
        )
    end = int(np.flatnonzero(inside)[-1])
    fall = falling_depth_mm(depth, curve, level=0.2 * mean, start=end) - falling_depth_mm(
        depth, curve, level=0.8 * mean, start=end
    )
    entrance = float(curve[0])
    return ProfileMeasures(
        flatness=float(np.max(np.abs(part / mean - 1.0))),
        mean=mean,
        judged_mm=(float(low), float(high)),
        distal_fall_mm=float(fall),
        entrance_share=entrance / mean,
        peak_to_entrance=float(np.max(curve)) / entrance if entrance > 0.0 else float("inf"),
    )


def falling_depth_mm(depth_mm: ArrayLike, values: ArrayLike, *, level: float, start: int = 0) -> float:
    """Give the first depth behind a bin at which a curve has fallen to a level.

    Parameters
    ----------
    depth_mm, values : array_like, shape (n,)
        Bin centres in mm and the curve.
    level : float
        Value sought.
    start : int
        Index of the bin to begin at.

    Returns
    -------
    float
        Depth in mm, interpolated; NaN when the curve stays above.

    Examples
    --------
    >>> falling_depth_mm([0.0, 1.0, 2.0], [3.0, 2.0, 0.0], level=1.0)
    1.5
    """
    depth, curve = np.asarray(depth_mm, dtype=np.float64), np.asarray(values, dtype=np.float64)
    below = np.flatnonzero(curve[start:] <= level)
    if below.size == 0:
        return float("nan")
    index = start + int(below[0])
    if index == start:
        return float(depth[index])
    before, after = curve[index - 1], curve[index]
    return float(depth[index - 1] + (before - level) / (before - after) * (depth[index] - depth[index - 1]))

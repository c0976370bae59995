"""How much of a structure receives how much dose?

Every voxel enters with the share of it that lies inside the structure (0 to 1), so a thin structure
keeps its true volume on a coarse grid.  Two ways to see the dose inside one voxel are offered:

* constant (the default): the whole voxel has the dose of its centre;
* linear: the dose runs evenly over an interval of stated width about the centre value.  The width
  ``sqrt(sum over axes of (gradient x spacing)**2)`` gives the exact spread for a gradient along an axis
  and a box of the right variance for any other direction.

Definitions
-----------
``V(d)``
    share of the volume with a dose of at least ``d``.
``D_p``
    the largest dose that at least ``p`` percent of the volume receives (``D_2``: near-maximum,
    ``D_98``: near-minimum, ``D_50``: median).
Homogeneity
    ``(D_2 - D_98) / D_50``.

Source: ICRU Report 83, J. ICRU 10 (2010) section 3 (near-minimum, near-maximum, homogeneity; from memory).

What it does not do: it never interpolates the dose between voxel centres, and knows nothing of grids;
the caller hands over arrays of equal shape.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["VolumeHistogram", "dose_spread_gy", "volume_histogram"]

#: Rounding allowed when a summed volume share is compared with a percentage (double precision).
_SHARE_SLACK = 1e-12
#: Halvings of the dose interval when a percentile is sought in piecewise linear volume curves.
_HALVINGS = 60


@dataclass(frozen=True)
class VolumeHistogram:
    """Dose of the voxels of one structure, sorted, with their volumes.

    Parameters
    ----------
    dose_gy : ndarray, shape (n,)
        Dose at the voxel centres, ascending, in Gy.
    volume_cm3 : ndarray, shape (n,)
        Volume of each voxel inside the structure, in cm3.
    spread_gy : ndarray, shape (n,)
        Full width of the dose inside each voxel, in Gy; zeros for constant voxels.
    """

    dose_gy: NDArray[np.float64]
    volume_cm3: NDArray[np.float64]
    spread_gy: NDArray[np.float64]
    _reached: NDArray[np.float64] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        """Sum the volumes from the highest dose down."""
        reached = np.cumsum(self.volume_cm3[::-1])[::-1]
        object.__setattr__(self, "_reached", reached)

    @property
    def total_volume_cm3(self) -> float:
        """Volume of the structure, in cm3."""
        return float(self._reached[0])

    @property
    def mean_gy(self) -> float:
        """Mean dose over the volume, in Gy."""
        return float(np.dot(self.dose_gy, self.volume_cm3) / self._reached[0])

    @property
    def minimum_gy(self) -> float:
        """Smallest dose anywhere in the structure, in Gy."""
        return float(np.min(self.dose_gy - 0.5 * self.spread_gy))

    @property
    def maximum_gy(self) -> float:
        """Largest dose anywhere in the structure, in Gy."""
        return float(np.max(self.dose_gy + 0.5 * self.spread_gy))

    def volume_share(self, dose_gy: ArrayLike) -> NDArray[np.float64]:
        """Give the share of the volume with at least the stated dose.

        Parameters
        ----------
        dose_gy : array_like
            One dose or several, in Gy.

        Returns
        -------
        ndarray
            Shares from 0 to 1, shape of the input.

        Examples
        --------
        >>> volume_histogram([1.0, 2.0, 3.0, 4.0], [1, 1, 1, 1]).volume_share([0.0, 2.5, 5.0]).tolist()
        [1.0, 0.5, 0.0]
        """
        asked = np.asarray(dose_gy, dtype=np.float64)
        total = self._reached[0]
        if not self.spread_gy.any():
            first = np.searchsorted(self.dose_gy, asked.ravel(), side="left")
            padded = np.append(self._reached, 0.0)
            return np.asarray((padded[first] / total).reshape(asked.shape))
        shares = [self._linear_share(float(level)) for level in asked.ravel()]
        return np.asarray(shares).reshape(asked.shape)

    def dose_at_volume_gy(self, percent: float) -> float:
        """Give the largest dose that at least this percentage of the volume receives.

        Parameters
        ----------
        percent : float
            Percentage of the volume, above 0 and not above 100.

        Returns
        -------
        float
            ``D_percent`` in Gy.

        Examples
        --------
        >>> volume_histogram([1.0, 2.0, 3.0, 4.0], [1, 1, 1, 1]).dose_at_volume_gy(75)
        2.0
        """
        if not 0.0 < percent <= 100.0:
            raise InputError(
                f"a volume of {percent} percent",
                allowed="above 0 and up to 100 percent",
                remedy="ask for D2, D50, D95, D98 or the like",
            )
        share = percent / 100.0
        wanted_cm3 = (share - _SHARE_SLACK) * self._reached[0]
        if not self.spread_gy.any():
            last = int(np.searchsorted(-self._reached, -wanted_cm3, side="right")) - 1
            return float(self.dose_gy[max(last, 0)])
        low, high = self.minimum_gy, self.maximum_gy
        for _ in range(_HALVINGS):
            middle = 0.5 * (low + high)
            if self._linear_share(middle) >= share - _SHARE_SLACK:
                low = middle
            else:
                high = middle
        return float(low)

    def curve(
        self, points: int = 201, *, maximum_gy: float | None = None
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Give the cumulative curve at evenly spaced doses from zero.

        Parameters
        ----------
        points : int
            Number of doses, at least 2.
        maximum_gy : float, optional
            Last dose in Gy; the structure's own maximum when absent.

        Returns
        -------
        dose_gy, share : ndarray, shape (points,)
            Doses in Gy and volume shares.
        """
        last = self.maximum_gy if maximum_gy is None else maximum_gy
        dose = np.linspace(0.0, max(last, 0.0), points)
        return dose, self.volume_share(dose)

    @property
    def homogeneity(self) -> float:
        """``(D_2 - D_98) / D_50``; 0 is perfectly even (ICRU 83)."""
        middle = self.dose_at_volume_gy(50.0)
        if middle == 0.0:
            return float("nan")
        return (self.dose_at_volume_gy(2.0) - self.dose_at_volume_gy(98.0)) / middle

    def measures(self) -> dict[str, float]:
        """Give the usual measures by name: volume, mean, extremes, D2, D50, D95, D98, homogeneity."""
        measures = {
            "volume_cm3": self.total_volume_cm3,
            "mean_gy": self.mean_gy,
            "minimum_gy": self.minimum_gy,
            "maximum_gy": self.maximum_gy,
        }
        for percent in (2, 50, 95, 98):
            measures[f"d{percent}_gy"] = self.dose_at_volume_gy(percent)
        measures["homogeneity"] = self.homogeneity
        return measures

    def _linear_share(self, level_gy: float) -> float:
        """Share of the volume above a dose when dose runs evenly inside each voxel."""
        excess = self.dose_gy - level_gy
        spread = self.spread_gy
        above = np.where(excess >= 0.0, 1.0, 0.0)
        wide = spread > 0.0
        above[wide] = np.clip(0.5 + excess[wide] / spread[wide], 0.0, 1.0)
        return float(np.dot(above, self.volume_cm3) / self._reached[0])


def volume_histogram(
    dose_gy: ArrayLike,
    coverage: ArrayLike,
    *,
    voxel_cm3: ArrayLike = 1.0,
    spread_gy: ArrayLike | None = None,
) -> VolumeHistogram:
    """Sort the voxels of a structure by dose.

    Parameters
    ----------
    dose_gy : array_like, any shape
        Dose per voxel, in Gy.
    coverage : array_like, same shape
        Share of each voxel inside the structure, 0 to 1 (a mask of booleans does).
    voxel_cm3 : float or array_like
        Volume of a voxel in cm3.
    spread_gy : array_like, optional
        Full width of the dose inside each voxel in Gy (see `dose_spread_gy`); absent: constant voxels.

    Returns
    -------
    VolumeHistogram
        Only voxels with some coverage, ascending in dose.

    Raises
    ------
    InputError
        Shapes that differ, a coverage outside 0 to 1, a dose that is no number, or an empty structure.

    Examples
    --------
    >>> histogram = volume_histogram([[1.0, 2.0], [4.0, 9.0]], [[1, 1], [0.5, 0]], voxel_cm3=0.008)
    >>> round(histogram.total_volume_cm3, 6), histogram.mean_gy
    (0.02, 2.0)
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    share = np.asarray(coverage, dtype=np.float64)
    if dose.shape != share.shape:
        raise InputError(
            f"dose of shape {dose.shape} with a structure of shape {share.shape}",
            allowed="equal shapes",
            remedy="bring both onto one grid first",
        )
    if not np.all((share >= 0.0) & (share <= 1.0 + 1e-6)):
        raise InputError(
            "a structure coverage outside 0 to 1",
            allowed="0 (outside) to 1 (wholly inside)",
            remedy="give the share of each voxel inside the structure",
        )
    inside = share > 0.0
    if not inside.any():
        raise InputError(
            "a structure that covers no voxel",
            allowed="at least one voxel with some coverage",
            remedy="check that the structure lies in the dose grid, or use a finer grid",
        )
    chosen = dose[inside]
    if not np.all(np.isfinite(chosen)):
        raise InputError(
            "a dose that is not a number inside the structure",
            allowed="finite doses",
            remedy="look for NaN or infinite voxels in the map",
        )
    volume = (np.broadcast_to(np.asarray(voxel_cm3, dtype=np.float64), dose.shape) * share)[inside]
    if spread_gy is None:
        spread = np.zeros_like(chosen)
    else:
        spread = np.abs(np.broadcast_to(np.asarray(spread_gy, dtype=np.float64), dose.shape)[inside])
    order = np.argsort(chosen, kind="stable")
    return VolumeHistogram(dose_gy=chosen[order], volume_cm3=volume[order], spread_gy=spread[order])


def dose_spread_gy(dose_gy: ArrayLike) -> NDArray[np.float64]:
    """Estimate the full width of the dose inside each voxel from its neighbours.

    Parameters
    ----------
    dose_gy : array_like, shape (nz, ny, nx)
        Dose at evenly spaced voxel centres, in Gy.

    Returns
    -------
    ndarray, same shape
        ``sqrt(sum of squares of the central differences)`` in Gy; an axis of one voxel counts nothing.

    Examples
    --------
    >>> dose_spread_gy([[[0.0, 2.0, 4.0]]]).tolist()
    [[[2.0, 2.0, 2.0]]]
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    squares = np.zeros_like(dose)
    for axis, length in enumerate(dose.shape):
        if length > 1:
            squares += np.gradient(dose, axis=axis) ** 2
    return np.sqrt(squares)

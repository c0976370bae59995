"""Divide what is spread widely between a few fixed widths.

Each contribution to a quantity has, at every depth, a variance of its own. All that goes to the same quantity shares
one ladder of widths: a variance between two rungs is divided between them so that the variance of the sum is exact (a
sum of Gaussians). Below the lowest rung the core itself is the next one, where there is a core: what has hardly left
the beam yet stays with it, since the lattice of the broad parts is too coarse for less.

Displacements of a contribution may be unequal: a particle that left the beam at a distance s under a slope is
displaced by their product, and both vary. If its squared displacement goes as u^q, with u even between nothing and one
(q = 2 for events spread evenly along a path), Gaussians with variances as u^p come nearest that have the same mean
square and mean logarithm of the radius: since a Gaussian is not a ring, q - ln(1 + q) = p - ln(1 + p) + 0.577, and
p = 0 where this leaves nothing. Eight equal shares stand for them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Contribution", "divide"]

_MIDDLES = (np.arange(8) + 0.5) / 8.0
_POWERS = np.linspace(0.0, 12.0, 121)
_EULER = 0.5772156649015329
_MOST_WIDTHS = 7
_WIDTH_RATIO = 2.0
_SIGNIFICANT = 1e-4
_SMALLEST_MM = 1e-3
_LEAST_PART = 0.03  # smallest rung over the largest


@dataclass(frozen=True, eq=False)
class Contribution:
    """Something that is spread widely.

    Attributes
    ----------
    target : int
        To which quantity it goes.
    quantity : ndarray
        How much, shape (K, N).
    variance : ndarray
        Variance that it has as a member of the beam, shape (K, N), mm2.
    extra : ndarray
        Variance that comes on top, shape (K, N), mm2.
    unequal : ndarray or float
        Mean fourth power of the extra displacement over the square of its mean square, shape (K, N); 1 if all are the
        same.
    """

    target: int
    quantity: NDArray[np.float64]
    variance: NDArray[np.float64]
    extra: NDArray[np.float64]
    unequal: NDArray[np.float64] | float = 1.0

    def variances(self) -> list[NDArray[np.float64]]:
        """Return the variance of each of its equal shares, mm2.

        Returns
        -------
        list of ndarray
            From the least to the largest.
        """
        variance = np.maximum(self.variance, 0.0)
        more = np.maximum(self.unequal + 0.0 * self.extra, 1.0) - 1.0
        rings = more + np.sqrt(more * (more + 1.0))  # <u^2q> / <u^q>^2 = (q + 1)^2 / (2 q + 1)
        left = rings - np.log1p(rings) - _EULER
        if not (self.extra.any() and np.any(left > 0.0)):
            return [variance + self.extra]
        power = np.interp(left, _POWERS - np.log1p(_POWERS), _POWERS)
        sizes = np.exp(power * np.log(_MIDDLES)[:, None, None])
        return list(variance + sizes / sizes.mean(axis=0) * self.extra)


def divide(
    contributions: list[Contribution], core_mm2: NDArray[np.float64], *, narrowest_mm: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Divide all that goes to one quantity between fixed widths and the core.

    Parameters
    ----------
    contributions : list of Contribution
        What goes there, at least one.
    core_mm2 : ndarray
        Variance of the core, shape (K, N), mm2; infinite where nothing can be left with it.
    narrowest_mm : float
        Smallest width to be used where there is a core, mm.

    Returns
    -------
    sigma_mm : ndarray
        Widths, rising, shape (parts,), mm.
    values : ndarray
        How much has each width, shape (parts, K, N).
    kept : ndarray
        How much stays with the core, shape (K, N); it and all `values` add to the sum of the quantities.

    Examples
    --------
    >>> one = np.ones((1, 1))
    >>> sigma, values, kept = divide(
    ...     [Contribution(0, one, 2.0 * one, 0.0 * one)], 1.0 * one, narrowest_mm=2.0
    ... )
    >>> round(float(kept[0, 0] * 1.0 + (values[:, 0, 0] * sigma**2).sum()), 12)
    2.0
    """
    total = sum(one.quantity for one in contributions)
    most = float(np.max(total))
    low, high = np.inf, 0.0
    variances = [one.variances() for one in contributions]
    for one, each in zip(contributions, variances, strict=True):
        counts = one.quantity > _SIGNIFICANT * most
        if counts.any():
            low = min(low, float(each[0][counts].min()))
            high = max(high, float(each[-1][counts].max()))
    high = max(float(np.sqrt(high)), _SMALLEST_MM)
    low = max(float(np.sqrt(min(low, high**2))), _LEAST_PART * high, _SMALLEST_MM)
    if np.isfinite(core_mm2).any():
        low = max(low, narrowest_mm)
        high = max(high, low)
    number = int(np.clip(np.ceil(np.log(high / low) / np.log(_WIDTH_RATIO) - 1e-9) + 1, 1, _MOST_WIDTHS))
    sigma = np.linspace(np.sqrt(low), np.sqrt(high), number) ** 2
    squares = sigma**2
    values = np.zeros((number, *core_mm2.shape))
    flat, every = values.reshape(-1), np.arange(core_mm2.size)
    gaps = np.diff(squares)
    kept = np.zeros(core_mm2.shape)
    with_core = core_mm2 < squares[0]
    below = np.where(with_core, core_mm2, 0.0)
    for one, each in zip(contributions, variances, strict=True):
        share = one.quantity / len(each)
        for variance in each:
            inside = with_core & (variance < squares[0])
            stays = np.where(inside, share * np.clip((squares[0] - variance) / (squares[0] - below), 0.0, 1.0), 0.0)
            kept += stays
            goes = share - stays
            rung = np.clip(np.searchsorted(squares, variance, side="right") - 1, 0, max(number - 2, 0))
            if number == 1:
                values[0] += goes
                continue
            upper = goes * np.clip((variance - squares[rung]) / gaps[rung], 0.0, 1.0)
            place = rung.ravel() * goes.size + every
            flat[place] += (goes - upper).ravel()  # every place is met once
            flat[place + goes.size] += upper.ravel()
    return sigma, values, kept

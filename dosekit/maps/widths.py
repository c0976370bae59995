"""Spread in a plane: Gaussian taps on a lattice, a ladder of widths, and what a spot gives to each ray.

Variances are kept exactly. Wide Gaussians are sampled at the nodes (the error of their variance goes as
exp(-2 pi^2 sigma^2 / h^2)); under one lattice step the discrete Gaussian exp(-t) I_n(t) is used, whose variance is t at
any width (Lindeberg, IEEE Trans. Pattern Anal. Mach. Intell. 12 (1990) 234). A width between two rungs of the ladder is
shared between them so that the variance of the sum is exact.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import ive, ndtr

__all__ = ["REACH_SIGMAS", "gaussian_taps", "spot_profiles", "width_ladder"]

REACH_SIGMAS = 4.0
"""Gaussians are cut at this many sigmas and rescaled."""

_SMALLEST_RUNG_MM = 0.4
_MOST_RUNGS = 20


def width_ladder(widest_mm: float) -> tuple[NDArray[np.float64], float]:
    """Return the variances of the ladder, evenly spaced in sigma from zero.

    Parameters
    ----------
    widest_mm : float
        Largest sigma that must be reached, mm.

    Returns
    -------
    variances : ndarray
        Rungs, mm2.
    step_mm : float
        Distance of rungs in sigma, mm.
    """
    step = max(_SMALLEST_RUNG_MM, widest_mm / (_MOST_RUNGS - 2))
    count = int(np.ceil(widest_mm / step)) + 2
    return np.asarray((step * np.arange(count)) ** 2, dtype=np.float64), float(step)


def gaussian_taps(
    variance: NDArray[np.float64], *, largest: int | None = None
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return one-sided taps of Gaussians on a unit lattice.

    Parameters
    ----------
    variance : ndarray
        Variances in squared lattice steps, any shape.
    largest : int, optional
        Cut every kernel at this many steps.

    Returns
    -------
    taps : ndarray
        Weight of the centre and of each distance on one side, shape (..., reach + 1); both sides add to one.
    reach : ndarray
        Last distance that counts, shape of `variance`.

    Examples
    --------
    >>> taps, reach = gaussian_taps(np.array([0.0, 2.0]))
    >>> reach.tolist(), round(float(taps[1, 0] + 2 * taps[1, 1:].sum()), 12)
    ([0, 7], 1.0)
    """
    t = np.maximum(np.asarray(variance, dtype=np.float64), 0.0)
    reach = np.where(t > 1e-9, np.ceil(REACH_SIGMAS * np.sqrt(t) + 1.0 - 1e-9), 0.0).astype(np.int64)
    if largest is not None:
        reach = np.minimum(reach, largest)
    n = np.arange(int(reach.max(initial=0)) + 1)
    with np.errstate(divide="ignore", over="ignore", under="ignore"):
        sampled = np.exp(-(n**2) / (2.0 * np.maximum(t, 1e-12)[..., None]))
    small = t < 1.0
    if small.any():
        sampled[small] = ive(n, t[small][..., None])
    taps = np.where(n <= reach[..., None], sampled, 0.0)
    taps /= taps[..., :1] + 2.0 * taps[..., 1:].sum(axis=-1, keepdims=True)
    return taps, reach


def spot_profiles(
    centres_mm: NDArray[np.float64], sigma_mm: NDArray[np.float64], nodes_mm: NDArray[np.float64], *, spacing_mm: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return what spots give to each ray along one axis.

    Parameters
    ----------
    centres_mm : ndarray
        Centres of the spots, shape (n,), mm.
    sigma_mm : ndarray
        Sigma at each step, shape (K,), mm.
    nodes_mm : ndarray
        Rays, mm; they must cover every spot.
    spacing_mm : float
        Distance between rays, mm.

    Returns
    -------
    first : ndarray
        First ray of each spot, shape (n,).
    profile : ndarray
        Share of the spot for each ray from there, shape (n, rays, K); adds to one along the rays.
    """
    half = REACH_SIGMAS * float(sigma_mm.max()) + spacing_mm
    count = min(int(np.ceil(2.0 * half / spacing_mm)) + 2, len(nodes_mm))
    first = np.floor((centres_mm - half - nodes_mm[0]) / spacing_mm).astype(np.int64)
    first = np.clip(first, 0, len(nodes_mm) - count)
    rays = nodes_mm[first[:, None] + np.arange(count)]
    distance = ((rays - centres_mm[:, None]) / spacing_mm)[:, :, None]
    # a Gaussian averaged over the cell of a ray gains a twelfth of a squared step of variance
    squared = (sigma_mm / spacing_mm) ** 2 - 1.0 / 12.0
    wide = squared > 0.1
    width = np.sqrt(np.where(wide, squared, 1.0))
    averaged = ndtr((distance + 0.5) / width) - ndtr((distance - 0.5) / width)
    point = np.maximum(1.0 - np.abs(distance), 0.0) * np.ones_like(width)
    profile = np.where(wide, averaged, point)
    profile[np.abs(distance[:, :, 0]) * spacing_mm > half + 1e-9] = 0.0
    return first, np.ascontiguousarray(profile / profile.sum(axis=1, keepdims=True))

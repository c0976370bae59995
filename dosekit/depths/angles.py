"""Which directions does the one-dimensional transport know, and how are angles shared among them?

Sixteen direction cosines, Gauss-Legendre in intervals that grow narrower ahead, where nuclei scatter most: a particle
turned by 5 degrees must not lose the depth that one turned by 12 does. Scattering and emission laws are exp(kappa
cos chi) with kappa set by the mean cosine L(kappa) = coth kappa - 1/kappa; averaged over azimuth it is exp(kappa mu
mu') I0(kappa sqrt(1 - mu^2) sqrt(1 - mu'^2)), exactly. Where energy fixes the angle, it is a ring about the direction
before. Multiple scattering is diffusion on the sphere, d psi/ds = (T/2) d/dmu (1 - mu^2) d psi/dmu, by finite
volumes: the mean cosine falls as exp(-T s).
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ive

__all__ = ["COSINES", "WEIGHTS", "diffusion_matrices", "kappa_of", "ring_shares", "shares"]

_INTERVALS = ((-1.0, 0.0, 5), (0.0, 0.8, 5), (0.8, 0.97, 3), (0.97, 1.0, 3))  # low, high, nodes
_rules = [(low, high, *np.polynomial.legendre.leggauss(count)) for low, high, count in _INTERVALS]
COSINES: NDArray[np.float64] = np.concatenate([low + 0.5 * (high - low) * (1.0 + x) for low, high, x, _ in _rules])
"""Direction cosines with the beam axis, ascending, shape (16,)."""
WEIGHTS: NDArray[np.float64] = np.concatenate([0.5 * (high - low) * w for low, high, _, w in _rules])
"""Widths in cosine, summing to 2, shape (16,)."""
COSINES.setflags(write=False)
WEIGHTS.setflags(write=False)

_AZIMUTHS = 12
_KAPPA = np.concatenate([[0.0], np.geomspace(1e-3, 400.0, 600)])
_MEAN = np.concatenate([[0.0], 1.0 / np.tanh(_KAPPA[1:]) - 1.0 / _KAPPA[1:]])


def kappa_of(mean_cosine: ArrayLike) -> NDArray[np.float64]:
    """Return kappa for a mean cosine.

    Parameters
    ----------
    mean_cosine : array_like
        Mean cosine, -0.9975 to 0.9975 (clamped).

    Returns
    -------
    ndarray
        kappa, negative for backward emission.

    Examples
    --------
    >>> round(float(kappa_of(0.5)), 2)
    1.8
    """
    mean = np.asarray(mean_cosine, dtype=float)
    return np.asarray(np.sign(mean) * np.interp(np.abs(mean), _MEAN, _KAPPA))


def shares(kappa: ArrayLike, from_cosine: ArrayLike = 1.0) -> NDArray[np.float64]:
    """Return how an emission about a direction is shared among the sixteen cosines.

    Parameters
    ----------
    kappa : array_like
        Parameter of the law.
    from_cosine : array_like
        Cosine of the direction about which it is centred; same shape as kappa, or a scalar.

    Returns
    -------
    ndarray
        Shares, shape of kappa plus (16,), each summing to 1.
    """
    k, mu = np.broadcast_arrays(np.asarray(kappa, dtype=float), np.asarray(from_cosine, dtype=float))
    k, mu = k[..., None], mu[..., None]
    side = np.abs(k) * np.sqrt(np.maximum(1.0 - mu**2, 0.0)) * np.sqrt(1.0 - COSINES**2)
    along = k * mu * COSINES
    value = np.exp(along + side - np.max(along + side, axis=-1, keepdims=True)) * ive(0, side) * WEIGHTS
    return np.asarray(value / np.sum(value, axis=-1, keepdims=True))


def ring_shares(cosine: ArrayLike, from_cosine: ArrayLike = 1.0) -> NDArray[np.float64]:
    """Return how an emission at a fixed angle to a direction, all around it, is shared among the sixteen cosines.

    Parameters
    ----------
    cosine : array_like
        Cosine of the angle of emission.
    from_cosine : array_like
        Cosine of the direction about which it is centred; same shape, or one that broadcasts with it.

    Returns
    -------
    ndarray
        Shares, shape of both plus (16,), each summing to 1, with the right mean cosine inside the range of nodes.

    Examples
    --------
    >>> float((ring_shares(0.5) @ COSINES).round(9))
    0.5
    """
    emitted, before = np.broadcast_arrays(np.asarray(cosine, dtype=float), np.asarray(from_cosine, dtype=float))
    around = np.cos(np.pi * (np.arange(_AZIMUTHS) + 0.5) / _AZIMUTHS)
    aside = np.sqrt(np.maximum(1.0 - emitted**2, 0.0) * np.maximum(1.0 - before**2, 0.0))
    after = (emitted * before)[..., None] + aside[..., None] * around
    low = np.clip(np.searchsorted(COSINES, after) - 1, 0, len(COSINES) - 2)
    upper = np.clip((after - COSINES[low]) / (COSINES[low + 1] - COSINES[low]), 0.0, 1.0)
    places = np.arange(len(COSINES))
    share = np.where(low[..., None] == places, 1.0 - upper[..., None], 0.0)
    share += np.where(low[..., None] + 1 == places, upper[..., None], 0.0)
    return np.asarray(share.mean(axis=-2))


@lru_cache(maxsize=1)
def _diffusion_modes() -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return eigenvalues and left and right vectors of the diffusion operator on the cosine cells."""
    n = len(COSINES)
    edges = -1.0 + np.concatenate([[0.0], np.cumsum(WEIGHTS)])
    matrix = np.zeros((n, n))
    for j in range(n - 1):
        flow = 0.5 * (1.0 - edges[j + 1] ** 2) / (COSINES[j + 1] - COSINES[j])
        matrix[j, j] -= flow
        matrix[j, j + 1] += flow
        matrix[j + 1, j + 1] -= flow
        matrix[j + 1, j] += flow
    # acts on density; symmetric after scaling with the square root of the widths
    root = np.sqrt(WEIGHTS)
    symmetric = matrix / root[:, None] / root[None, :]
    values, vectors = np.linalg.eigh(0.5 * (symmetric + symmetric.T))
    return np.minimum(values, 0.0), vectors * root[:, None], vectors / root[:, None]


def diffusion_matrices(angle_variance: ArrayLike) -> NDArray[np.float64]:
    """Return matrices that turn numbers by direction after a stretch of multiple scattering.

    Parameters
    ----------
    angle_variance : array_like, shape (n,)
        Scattering power times length, rad2 of one projected angle.

    Returns
    -------
    ndarray, shape (n, 16, 16)
        Element (i, from, to); rows sum to 1.
    """
    values, left, right = _diffusion_modes()
    amount = np.atleast_1d(np.asarray(angle_variance, dtype=float))
    decay = np.exp(amount[:, None] * values[None, :])
    result = np.einsum("jm,im,lm->ijl", right, decay, left)
    result = np.maximum(result, 0.0)
    return np.asarray(result / np.sum(result, axis=2, keepdims=True))

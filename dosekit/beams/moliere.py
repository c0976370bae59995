"""How are sideways displacements distributed, beyond the Gaussian of many small scatterings?

Moliere's law (G. Moliere, Z. Naturforsch. 3a (1948) 78; H.A. Bethe, Phys. Rev. 89 (1953) 1256) carried to displacements
in a medium that slows the particle down. Scatterings are independent and small; one at distance L before the depth in
question shifts by L theta, so the law of the shift r in the plane has the Fourier transform exp(-Omega(k))::

    Omega(k) = int dz sum over elements chi_c^2(z) [g(k L chi_a) / chi_a^2 - g(k L chi_n) / chi_n^2 + electrons]
    g(x) = 1 - x K1(x) = int 2 t dt (1 - J0(x t)) / (1 + t^2)^2,     chi_c^2 dz = 0.157 Z^2 / A  rho dz / (pv)^2

with Moliere's screening angle chi_a (Bethe eqs. 17 and 21) and an upper angle chi_n = 68 MeV/c over p by the size of
the nucleus (form factor one half at 105 MeV/c, rms radius 2.7 fm of oxygen). Electrons scatter like nuclei of charge Z
between two angles: no heavy particle is turned by more than m_e / M, and the logarithm of the ratio is that of U. Fano,
Phys. Rev. 93 (1954) 117, as quoted by B. Gottschalk et al., Nucl. Instrum. Meth. B 74 (1993) 467:
ln(1130 Z^(-4/3) (beta gamma)^2) + u - beta^2 / 2 with u = 5.8 (hydrogen 3.6).

The share beyond a radius follows by a Hankel transform. It is described by three Gaussians: a core and two tails, at
`TAIL_SIGMAS` times its width, whose shares are fitted here. The differential Moliere power
(:mod:`dosekit.beams.scattering`) gives the single Gaussian of A.O. Hanson et al., Phys. Rev. 84 (1951) 634, whose
density falls to 1/e where the whole law does; beside tails the core must be a little narrower
(`core_variance_share`). That Gaussian and the law here agree on this radius to 1 % for protons; for pions and muons the
law is 2 % wider. Angles are taken as small, and the energy is that of the mean particle.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import j1, k1

from dosekit.basis.constants import FINE_STRUCTURE
from dosekit.basis.materials import Material, element, material
from dosekit.basis.particles import Particle, beta_gamma, momentum_mev_c, particle
from dosekit.beams.ranges import range_table
from dosekit.beams.scattering import fermi_eyges_moments, pv_mev

__all__ = ["TAIL_SIGMAS", "core_variance_share", "displacement_beyond", "tail_shares"]

TAIL_SIGMAS: tuple[float, float] = (2.0, 5.2)
"""Widths of the two tails over that of the core."""

_CHI_C_MEV2_CM2_G = 0.157  # Bethe (1953) eq. 10
_THOMAS_FERMI_MEV = 4.216e-3  # hbar c over 0.885 Bohr radii
_NUCLEAR_MEV = 68.0
_ELECTRON_MEV = 0.51099895
_EULER = 0.5772156649015329
_PATH_NODES = 24
_WAVE_NODES = 150
_HIGHEST_WAVE = 6.0  # over the width of the core
_RADII = np.array([0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 3.5, 4.0, 5.0, 6.0, 7.0, 8.0, 10.0])
_DEPTHS = np.array([0.02, 0.1, 0.3, 0.6, 0.85, 0.97])
_FITTING_STEPS = 8


def displacement_beyond(
    projectile: str | Particle,
    medium: str | Material,
    kinetic_energy_mev: float,
    *,
    depth_mm: float,
    radius_mm: ArrayLike,
    electrons: bool = True,
) -> NDArray[np.float64]:
    """Return the share of particles that multiple and single scattering have shifted by more than a radius.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle heavier than an electron.
    medium : str or Material
        Material or its name.
    kinetic_energy_mev : float
        Energy of the pencil beam at depth 0, MeV.
    depth_mm : float
        Depth, mm, less than the range.
    radius_mm : array_like, shape (n,)
        Radii, mm; up to some twelve times the width of the core.
    electrons : bool
        Whether electrons of the atoms scatter as well as nuclei.

    Returns
    -------
    ndarray, shape (n,)
        Shares.

    Examples
    --------
    >>> beyond = displacement_beyond("proton", "water", 150.0, depth_mm=100.0, radius_mm=[1.55])
    >>> round(float(beyond[0]), 1)  # at one sigma of the core
    0.6
    """
    sigma = float(np.sqrt(fermi_eyges_moments(projectile, medium, kinetic_energy_mev, depth_mm=depth_mm)[2]))
    nodes, weights = _quadrature(_WAVE_NODES)
    wave = 0.5 * _HIGHEST_WAVE / sigma * (nodes + 1.0)
    weights = 0.5 * _HIGHEST_WAVE / sigma * weights
    spread = np.exp(-_exponent(projectile, medium, kinetic_energy_mev, depth_mm, wave, electrons=electrons))
    radius = np.asarray(radius_mm, dtype=float)
    return np.asarray(1.0 - radius * (j1(radius[:, None] * wave) @ (spread * weights)))


def tail_shares(
    projectile: str | Particle, kinetic_energy_mev: float, depth_mm: ArrayLike, *, medium: str | Material = "water"
) -> NDArray[np.float64]:
    """Return the shares of the particles that lie in the two tails.

    Parameters
    ----------
    projectile : str or Particle
        Charged particle heavier than an electron.
    kinetic_energy_mev : float
        Energy at depth 0, MeV.
    depth_mm : array_like
        Depths, mm; shares are kept constant in the last 3 % of the range.
    medium : str or Material
        Material or its name.

    Returns
    -------
    ndarray, shape of `depth_mm` plus (2,)
        Shares, for each width of `TAIL_SIGMAS`.

    Examples
    --------
    >>> shares = tail_shares("proton", 150.0, 126.0)
    >>> float(shares[0].round(2)), float(shares[1].round(3))
    (0.05, 0.002)
    """
    depths, rows = _fitted(particle(projectile).name, material(medium), float(kinetic_energy_mev))
    at = np.asarray(depth_mm, dtype=float)
    return np.stack([np.interp(at, depths, column) for column in rows.T], axis=-1)


def core_variance_share(shares: ArrayLike) -> NDArray[np.float64]:
    """Return the variance of the core over that of the single Gaussian with the same 1/e radius.

    Parameters
    ----------
    shares : array_like, shape (..., 2)
        Shares of the tails.

    Returns
    -------
    ndarray, shape (...)
        Ratio, a few per cent under one.

    Examples
    --------
    >>> float(core_variance_share([0.0, 0.0])), float(core_variance_share([0.05, 0.003]).round(2))
    (1.0, 0.99)
    """
    tails = np.asarray(shares, dtype=float)
    squares = np.array([1.0, *TAIL_SIGMAS]) ** 2
    density = np.concatenate([1.0 - tails.sum(axis=-1, keepdims=True), tails], axis=-1) / squares
    wanted = np.exp(-1.0) * density.sum(axis=-1)
    x = np.ones(wanted.shape)  # squared 1/e radius over twice the variance of the core
    for _ in range(6):
        each = density * np.exp(-x[..., None] / squares)
        x = x + (each.sum(axis=-1) - wanted) / (each / squares).sum(axis=-1)
    return np.asarray(1.0 / x)


@lru_cache(maxsize=64)
def _fitted(name: str, medium: Material, energy_mev: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return depths and the fitted shares of the tails there."""
    depths = _DEPTHS * float(range_table(name, medium).range_mm(energy_mev))
    rows = []
    for depth in depths:
        sigma = float(np.sqrt(fermi_eyges_moments(name, medium, energy_mev, depth_mm=float(depth))[2]))
        wanted = displacement_beyond(name, medium, energy_mev, depth_mm=float(depth), radius_mm=sigma * _RADII)
        rows.append(_three_gaussians(np.maximum(wanted, 1e-6)))
    return depths, np.array(rows)


def _three_gaussians(wanted: NDArray[np.float64]) -> NDArray[np.float64]:
    """Fit the shares of the tails, and the width of the core, to what lies beyond `_RADII` by Gauss and Newton."""
    widths = np.array([1.0, *TAIL_SIGMAS])
    scale = wanted**-0.75  # between absolute and relative
    core, shares = 1.0, np.array([0.05, 0.004])
    for _ in range(_FITTING_STEPS):
        x = (_RADII[:, None] / (core * widths)) ** 2
        law = np.exp(-0.5 * x)
        parts = np.concatenate([[1.0 - shares.sum()], shares])
        slope = np.stack([(law * x) @ parts / core, law[:, 1] - law[:, 0], law[:, 2] - law[:, 0]], axis=1)
        step = np.linalg.lstsq(slope * scale[:, None], (wanted - law @ parts) * scale, rcond=None)[0]
        core = float(np.clip(core + step[0], 0.8, 1.3))
        shares = np.clip(shares + step[1:], 0.0, 0.2)
    return shares


@lru_cache(maxsize=4)
def _quadrature(number: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return nodes and weights of Gauss and Legendre, made once."""
    nodes, weights = np.polynomial.legendre.leggauss(number)
    return np.asarray(nodes), np.asarray(weights)


def _exponent(
    projectile: str | Particle,
    medium: str | Material,
    energy_mev: float,
    depth_mm: float,
    wave: NDArray[np.float64],
    *,
    electrons: bool,
) -> NDArray[np.float64]:
    """Return Omega at wave numbers, 1/mm."""
    moving, stuff = particle(projectile), material(medium)
    table = range_table(moving, stuff)
    nodes, weights = _quadrature(_PATH_NODES)
    path = 0.5 * depth_mm * (nodes + 1.0)
    energy = table.energy_mev(float(table.range_mm(energy_mev)) - path)
    momentum, pv = momentum_mev_c(moving, energy), pv_mev(moving, energy)
    beta, gamma = beta_gamma(moving, energy)
    per_path = 0.1 * stuff.density_g_cm3 * 0.5 * depth_mm * weights * (moving.charge / pv) ** 2
    shift = wave[:, None] * (depth_mm - path)
    total = np.zeros(len(wave))
    for symbol, fraction in stuff.mass_fractions:
        z, a = element(symbol).atomic_number, element(symbol).atomic_weight
        strength = _CHI_C_MEV2_CM2_G * fraction * z * z / a * per_path
        screen = _THOMAS_FERMI_MEV * z ** (1.0 / 3.0) / momentum
        screen = screen * np.sqrt(1.13 + 3.76 * (FINE_STRUCTURE * z * momentum / pv) ** 2)
        total += _scattered(shift, screen) @ strength
        if z > 1:
            total -= _scattered(shift, _NUCLEAR_MEV / momentum) @ strength
        if electrons:
            logarithm = np.log(1130.0 * z ** (-4.0 / 3.0) * (beta * gamma) ** 2) - 0.5 * beta**2
            logarithm += 5.8 if z > 1 else 3.6
            largest = _ELECTRON_MEV / moving.mass_mev * np.ones(len(path))
            smallest = largest * np.exp(-0.5 * np.maximum(logarithm, 0.0))
            total += (_scattered(shift, smallest) - _scattered(shift, largest)) @ (strength / z)
    return total


def _scattered(shift: NDArray[np.float64], angle: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return g(shift x angle) / angle^2, shape (wave numbers, path nodes)."""
    x = shift * angle
    series = 0.5 * x * x * (0.5 - _EULER - np.log(np.maximum(0.5 * x, 1e-300)))
    exact = 1.0 - x * k1(np.maximum(x, 1e-12))
    return np.asarray(np.where(x < 1e-3, series, exact) / angle**2)

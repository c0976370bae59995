"""Where does a hadron go after elastic scattering on a nucleus?

Laws are sums of exp(kappa cos) of the angle in the laboratory, kappa set by momentum and size of the nucleus.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.materials import element
from dosekit.basis.particles import particle

__all__ = ["elastic_laws", "elastic_mean_cosine", "mean_cosine_of"]

_HBAR_C_MEV_FM = 197.327
_PROTON_MEV = 938.272
_B0_FM = -0.061 * 1.414  # s wave, isoscalar with second order, m_pi^-1 = 1.414 fm
_C0_FM3 = 0.21 * 1.414**3  # p wave, isoscalar
_STEEPEST = 300.0
_HYDROGEN_SLOPE = 12.0  # (GeV/c)^-2
_LIGHT = 62.0  # mass number up to which nuclei count as light in the law of codes


def elastic_mean_cosine(
    symbol: str, projectile: str, kinetic_energy_mev: ArrayLike, *, yields: str = "evaluated"
) -> NDArray[np.float64]:
    """Return the mean cosine of elastic scattering on a nucleus.

    Parameters
    ----------
    symbol : str
        Element.
    projectile : str
        Projectile.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    ndarray
        Mean cosine, -1 to 1, of `elastic_laws`.
    """
    laws = elastic_laws(symbol, projectile, kinetic_energy_mev, yields=yields)
    return np.asarray(sum(share * mean_cosine_of(kappa) for share, kappa in laws))


def elastic_laws(
    symbol: str, projectile: str, kinetic_energy_mev: ArrayLike, *, yields: str = "evaluated"
) -> list[tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """Return laws exp(kappa cos) that together describe elastic scattering on a nucleus, each with its share.

    Pions: impulse approximation, |b0 + c0 k^2 cos|^2 exp(kappa cos), with the isoscalar s- and p-wave
    parameters b0 = -0.061 / m_pi and c0 = 0.21 / m_pi^3 of T. Ericson & T.E.O. Ericson, Ann. Phys. 36 (1966) 323
    and K. Stricker, H. McManus & J.A. Carr, Phys. Rev. C 19 (1979) 929 (from memory), and the form factor exp(-q^2
    r^2 / 3), so kappa = 2 k^2 r^2 / 3 with the rms radius r = 0.82 A^(1/3) + 0.58 fm (L.R.B. Elton, Nuclear Sizes
    (1961)). At 20 MeV the waves nearly cancel ahead and pions come backwards; over 50 MeV they go ahead. One law with
    the mean cosine of this stands for it. Hydrogen: isotropic in the centre of mass, turned forward in the
    laboratory by the recoil. Protons: d sigma/dt ~ exp(b t) with the slope that the optical theorem asks for,
    b = sigma_total^2 / (16 pi sigma_elastic), from the cross sections in use; kappa = 2 b k^2.

    Pions of the ``"cascade"`` set: the law of codes for all hadrons, a steep coherent and a flat incoherent part,
    d sigma/dt ~ A^1.63 exp(14.5 A^0.66 t) + 1.4 A^0.33 exp(10 t) up to A = 62 and A^1.33 exp(60 A^0.33 t) +
    0.4 A^0.40 exp(10 t) over it, t in (GeV/c)^2 (H. Fesefeldt, Aachen report PITHA 85/02 (1985), from memory); for
    hydrogen, where the two nearly agree, exp(12 t).

    Parameters
    ----------
    symbol : str
        Element.
    projectile : str
        Projectile.
    kinetic_energy_mev : array_like
        Kinetic energy, MeV.
    yields : {"evaluated", "cascade"}
        Yield set.

    Returns
    -------
    list of (ndarray, ndarray)
        Share, and kappa, negative for backward scattering; the shares add to one.
    """
    moving = particle(projectile)
    energy = np.asarray(kinetic_energy_mev, dtype=float)
    momentum = np.sqrt(energy * (energy + 2.0 * moving.mass_mev))
    wave = momentum / _HBAR_C_MEV_FM
    one = np.ones_like(energy)
    codes = yields == "cascade" and moving.name.startswith("pi")
    if symbol == "H":
        boost = (energy + moving.mass_mev) / _PROTON_MEV
        inner = (
            1e-3 * momentum / np.sqrt(1.0 + 2.0 * boost + (moving.mass_mev / _PROTON_MEV) ** 2)
        )  # in the centre of mass
        ahead = mean_cosine_of(2.0 * _HYDROGEN_SLOPE * inner**2) if codes else 0.0
        return [(one, _kappa_of(ahead + (2.0 / 3.0) * np.minimum(boost, 1.0)))]
    if codes:
        a = element(symbol).atomic_weight
        light = ((a**1.63, 14.5 * a**0.66), (1.4 * a**0.33, 10.0))
        heavy = ((a**1.33, 60.0 * a**0.33), (0.4 * a**0.40, 10.0))
        kappas = [2.0 * slope * (1e-3 * momentum) ** 2 for _, slope in (light if a <= _LIGHT else heavy)]
        weights = [
            height / slope * -np.expm1(-2.0 * kappa)
            for (height, slope), kappa in zip(light if a <= _LIGHT else heavy, kappas, strict=True)
        ]
        return [
            (weight / (weights[0] + weights[1]), np.minimum(kappa, _STEEPEST))
            for weight, kappa in zip(weights, kappas, strict=True)
        ]
    if not moving.name.startswith("pi"):
        from dosekit.beams.reactions import element_cross_sections_mb

        sections = element_cross_sections_mb(moving.name, symbol, energy, yields=yields)
        elastic = np.maximum(sections["elastic"], 1e-9)
        total = elastic + sections["absorption"] + sections["inelastic"] + sections["charge_exchange"]
        slope = 0.1 * total**2 / (16.0 * np.pi * elastic)
        return [(one, np.minimum(2.0 * slope * wave**2, _STEEPEST))]
    radius = 0.82 * element(symbol).atomic_weight ** (1.0 / 3.0) + 0.58
    kappa = 2.0 * wave**2 * radius**2 / 3.0
    mu = np.linspace(-1.0, 1.0, 401)
    law = (_B0_FM + _C0_FM3 * wave[..., None] ** 2 * mu) ** 2 * np.exp(kappa[..., None] * (mu - 1.0))
    return [(one, _kappa_of(np.sum(law * mu, axis=-1) / np.sum(law, axis=-1)))]


def mean_cosine_of(kappa: ArrayLike) -> NDArray[np.float64]:
    """Return coth(kappa) - 1/kappa, the mean cosine of exp(kappa cos).

    Parameters
    ----------
    kappa : array_like
        Steepness, negative for backward scattering.

    Returns
    -------
    ndarray
        Mean cosine, -1 to 1.

    Examples
    --------
    >>> float(mean_cosine_of(1.8).round(2))
    0.5
    """
    steep = np.asarray(kappa, dtype=float)
    safe = np.maximum(np.abs(steep), 1e-3)
    return np.asarray(np.sign(steep) * (1.0 / np.tanh(safe) - 1.0 / safe))


def _kappa_of(mean_cosine: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return kappa for mean cosines."""
    steep = np.concatenate([[0.0], np.geomspace(1e-3, _STEEPEST, 600)])
    return np.asarray(np.sign(mean_cosine) * np.interp(np.abs(mean_cosine), mean_cosine_of(steep), steep))

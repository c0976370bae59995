"""How effective are densely ionising star products?  A saturation-corrected microdosimetric form.

In a spherical site of diameter ``d`` crossed by straight tracks of constant LET ``L`` the lineal energy
``y`` has the triangular density ``f(y) = 2 y / (1.5 L)^2`` for ``0 < y < 1.5 L`` (mean ``L``, dose mean ``9
L / 8``).  Very dense tracks waste dose; the saturation-corrected mean is::

    y* = y0^2 integral (1 - exp(-y^2 / y0^2)) f(y) dy / integral y f(y) dy
       = (y0^2 / L) (1 - (1 - exp(-a^2)) / a^2),        a = 1.5 L / y0        (triangular density)

and the linear constant of a tissue rises with the saturation-corrected specific energy of a small domain::

    z* = 0.1602 y* / (pi r^2)       (Gy; y* in keV/um, r in um, unit density)
    alpha = alpha_x + beta_x (z* - z*_x),        beta = beta_x

``z*_x`` belongs to the reference photons, so that photons have an RBE of 1.

Sources: lineal energy of a sphere: ICRU Report 36 (1983), memory.  Saturation correction: Powers, Lyman &
Tobias (1968), as used by Kase et al., Radiat. Res. 166 (2006) 629, eq. 4, with y0 = 150 keV/um and domain
radius 0.42 um (values of that paper for one salivary-gland cell line, memory).  Linear constant: Hawkins,
Radiat. Res. 140 (1994) 366 and Int. J. Radiat. Biol. 69 (1996) 739.  Reference photons: dose-mean lineal
energy 2 keV/um of cobalt-60 (ICRU 36, memory).

Validity: ions up to about 450 keV/um, alpha/beta 1 to 30 Gy.  Both constants come from one cell line and
are used for all tissues; a component with a wide spread of LET is represented by its dose mean.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.effects.rbe import check_validity
from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from dosekit.effects.tissues import Tissue, TissueMap

__all__ = [
    "DOMAIN_RADIUS_UM",
    "REFERENCE_LINEAL_ENERGY_KEV_UM",
    "SATURATION_KEV_UM",
    "domain_energy_gy",
    "dose_mean_lineal_energy",
    "saturated_alpha",
    "saturated_lineal_energy",
    "saturated_mean",
]

#: Saturation parameter y0 (Kase et al. 2006, memory), keV/um.
SATURATION_KEV_UM = 150.0
#: Domain radius (Kase et al. 2006, memory), um.
DOMAIN_RADIUS_UM = 0.42
#: Dose-mean lineal energy of the reference photons (cobalt-60, ICRU 36, memory), keV/um.
REFERENCE_LINEAL_ENERGY_KEV_UM = 2.0
#: Gy per (keV/um over um^2) at unit density: 1.602176634e-16 J/keV over 1e-12 g/um^3.
_GY_UM2_PER_KEV_UM = 0.1602176634


def dose_mean_lineal_energy(let_kev_um: ArrayLike) -> NDArray[np.float64]:
    """Give the dose mean of the lineal energy in a sphere, ``9 L / 8``.

    Parameters
    ----------
    let_kev_um : array_like
        LET in keV/um.

    Returns
    -------
    ndarray
        keV/um.
    """
    return np.asarray(1.125 * np.asarray(let_kev_um, dtype=np.float64))


def saturated_lineal_energy(
    let_kev_um: ArrayLike, *, saturation_kev_um: float = SATURATION_KEV_UM
) -> NDArray[np.float64]:
    """Give the saturation-corrected mean lineal energy of tracks of one LET in a sphere.

    Parameters
    ----------
    let_kev_um : array_like
        LET in keV/um, not negative.
    saturation_kev_um : float
        Saturation parameter ``y0`` in keV/um.

    Returns
    -------
    ndarray
        ``y*`` in keV/um; ``9 L / 8`` for small LET, falling as ``y0^2 / L`` for large.

    Examples
    --------
    >>> [round(float(y), 2) for y in saturated_lineal_energy([1.0, 100.0])]
    [1.12, 82.77]
    """
    let = np.asarray(let_kev_um, dtype=np.float64)
    square = (1.5 * let / saturation_kev_um) ** 2
    small = square < 1e-3
    safe = np.where(small, 1.0, square)
    exact = 1.0 + np.expm1(-safe) / safe
    series = square / 2.0 - square**2 / 6.0 + square**3 / 24.0
    share = np.where(small, series, exact)
    return np.asarray(np.where(let > 0.0, saturation_kev_um**2 * share / np.where(let > 0.0, let, 1.0), 0.0))


def saturated_mean(
    lineal_energy_kev_um: ArrayLike, frequency: ArrayLike, *, saturation_kev_um: float = SATURATION_KEV_UM
) -> float:
    """Give the saturation-corrected mean of a measured or calculated lineal-energy spectrum.

    Parameters
    ----------
    lineal_energy_kev_um : array_like, shape (n,)
        Lineal energies in keV/um.
    frequency : array_like, shape (n,)
        Number of events at each (density times width of its bin).
    saturation_kev_um : float
        Saturation parameter ``y0`` in keV/um.

    Returns
    -------
    float
        ``y*`` in keV/um.

    Examples
    --------
    >>> round(saturated_mean([1.0], [1.0]), 4)
    1.0
    """
    y, f = np.asarray(lineal_energy_kev_um, dtype=np.float64), np.asarray(frequency, dtype=np.float64)
    energy = float(np.dot(y, f))
    if not energy > 0.0:
        raise InputError("a lineal-energy spectrum without energy", allowed="some events", remedy="check the spectrum")
    return float(saturation_kev_um**2 * np.dot(-np.expm1(-((y / saturation_kev_um) ** 2)), f) / energy)


def domain_energy_gy(lineal_energy_kev_um: ArrayLike, *, radius_um: float = DOMAIN_RADIUS_UM) -> NDArray[np.float64]:
    """Turn a lineal energy into the specific energy of a domain, in Gy.

    Parameters
    ----------
    lineal_energy_kev_um : array_like
        keV/um.
    radius_um : float
        Radius of the domain in um.

    Returns
    -------
    ndarray
        Gy.

    Examples
    --------
    >>> round(float(domain_energy_gy(1.0)), 4)
    0.2891
    """
    return np.asarray(_GY_UM2_PER_KEV_UM * np.asarray(lineal_energy_kev_um, dtype=np.float64) / (np.pi * radius_um**2))


def saturated_alpha(let_kev_um: ArrayLike, *, tissue: Tissue | TissueMap) -> NDArray[np.float64]:
    """Give the linear constant of a tissue for tracks of a LET.

    Parameters
    ----------
    let_kev_um : array_like
        Dose-averaged LET in keV/um.
    tissue : Tissue or TissueMap
        Constants for photons.

    Returns
    -------
    ndarray
        alpha in 1/Gy; never below 0.

    Warns
    -----
    ValidityWarning
        Outside the span of the model.

    Examples
    --------
    >>> from dosekit.effects.tissues import Tissue
    >>> float(saturated_alpha(16.0 / 9.0, tissue=Tissue("any", 0.3, 10.0)).round(4))
    0.3
    """
    check_validity("microdosimetric", let_kev_um=let_kev_um, alpha_beta_gy=tissue.alpha_beta_gy)
    excess = saturated_lineal_energy(let_kev_um) - REFERENCE_LINEAL_ENERGY_KEV_UM
    return np.maximum(tissue.alpha_per_gy + tissue.beta_per_gy2 * domain_energy_gy(excess), 0.0)

"""How effective are densely ionising star products?  A saturation-corrected microdosimetric form.

In a spherical site of diameter ``d`` crossed by straight tracks of constant LET ``L`` the lineal energy
``y`` has the triangular density ``f(y) = 2 y / (1.5 L)^2`` for ``0 < y < 1.5 L`` (mean ``L``, dose mean ``9
L / 8``).  Very dense tracks waste dose; the saturation-corrected mean is::

    y* = y0^2 integral (1 - exp(-y^2 / y0^2)) f(y) dy / integral y f(y) dy
       = (y0^2 / L) (1 - (1 - exp(-a^2)) / a^2),        a = 1.5 L / y0        (triangular density)

and the linear constant of a tissue rises with the saturation-corrected specific energy of a small domain::

    z* = 0.1602 y* / (pi r^2)       (Gy; y* in keV/um, r in um, unit density)
    alpha = alpha_x + beta_x (z* - z*_x),        beta = beta_x

``z*_x`` belongs to the electrons of the reference photons, put through the same form with their LET of 0.3 keV/um:
the 1.5 to 2 keV/um that straggling and delta rays add to the lineal energy of any sparse track (2 keV/um measured for
cobalt-60) are left out on both sides, so that sparse tracks and photons alike have an RBE of 1.

Star and reaction products have a wide spread of LET: ``y*`` is then averaged over their dose
(`dosekit.effects.let_spectra`), which is its definition for a mixture.

Sources: lineal energy of a sphere: ICRU Report 36 (1983), memory.  Saturation correction: Powers, Lyman &
Tobias (1968), as used by Kase et al., Radiat. Res. 166 (2006) 629, eq. 4, with y0 = 150 keV/um and domain
radius 0.42 um (values of that paper for one salivary-gland cell line, memory).  Linear constant: Hawkins,
Radiat. Res. 140 (1994) 366 and Int. J. Radiat. Biol. 69 (1996) 739.  LET of the electrons of cobalt-60:
0.2 to 0.3 keV/um (ICRU Report 16 (1970), memory).

Validity: mean LET up to about 450 keV/um, alpha/beta 1 to 30 Gy.  Both constants come from one cell line and
are used for all tissues.  Recoils of some 700 keV/um, a quarter of the dose of ``star_heavy``, lie where the form has
not been tested; it lets them waste nearly all of their dose.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.effects.let_spectra import spectral_mean
from dosekit.effects.rbe import check_validity
from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from dosekit.effects.tissues import Tissue, TissueMap

__all__ = [
    "DOMAIN_RADIUS_UM",
    "REFERENCE_LET_KEV_UM",
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
#: LET of the electrons of the reference photons (cobalt-60; ICRU Report 16, memory), keV/um.
REFERENCE_LET_KEV_UM = 0.3
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


def saturated_alpha(
    let_kev_um: ArrayLike, *, tissue: Tissue | TissueMap, component: str = "primary", beam_particle: str = "pi-"
) -> NDArray[np.float64]:
    """Give the linear constant of a tissue for tracks of a LET, or for a component of the dose of a mean LET.

    Parameters
    ----------
    let_kev_um : array_like
        Dose-averaged LET in keV/um.
    tissue : Tissue or TissueMap
        Constants for photons.
    component : str
        Component of the dose; those of `dosekit.effects.let_spectra.SPREAD` are averaged over their spectrum, for
        any other the LET is that of all tracks.
    beam_particle : str
        What reacts in flight.

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
    >>> float(saturated_alpha(0.3, tissue=Tissue("any", 0.3, 10.0)).round(4))
    0.3
    """
    check_validity("microdosimetric", let_kev_um=let_kev_um, alpha_beta_gy=tissue.alpha_beta_gy)
    mean = spectral_mean(saturated_lineal_energy, component, let_kev_um, beam_particle=beam_particle)
    excess = mean - saturated_lineal_energy(REFERENCE_LET_KEV_UM)
    return np.maximum(tissue.alpha_per_gy + tissue.beta_per_gy2 * domain_energy_gy(excess), 0.0)

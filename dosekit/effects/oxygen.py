"""How much more dose does a tissue short of oxygen need?

Sensitivity relative to no oxygen at a partial pressure ``p`` (Alper & Howard-Flanders, Nature 178 (1956)
978)::

    S(p) = (m p + K) / (p + K)

The oxygen enhancement ratio of a pressure is the dose there over the dose at full oxygen for the same
effect::

    OER(p) = m / S(p) = m (p + K) / (m p + K)

``m`` falls with LET (form of Scifoni et al., Phys. Med. Biol. 58 (2013) 3871, memory)::

    m(L) = 1 + (m0 - 1) / (1 + (L / L0)^3)

with m0 = 3 and K = 3 mmHg (Alper & Howard-Flanders; common values) and L0 = 94 keV/um (cube root of 8.27e5,
that paper, memory).  In a mixed field each component's effect-weighted dose counts ``1 / OER_c``, hence
``OER = sum X_c / sum (X_c / OER_c)``; within a component of wide spread ``1 / OER`` is averaged over the effect of its
spectrum (`dosekit.effects.let_spectra`).

Validity: acute hypoxia in cell culture, 0 to 160 mmHg, mean LET up to about 500 keV/um; a warning beyond.  One curve
serves all ions, though protons and helium lose the enhancement at a lower LET than carbon.
"""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING

import numpy as np

from dosekit.effects.let_spectra import SPREAD, spectral_mean
from dosekit.errors import InputError, ValidityWarning

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from numpy.typing import ArrayLike, NDArray

__all__ = [
    "HALF_PRESSURE_MMHG",
    "LARGEST_ENHANCEMENT",
    "TURNING_LET_KEV_UM",
    "largest_enhancement",
    "mixed_oxygen_enhancement",
    "oxygen_enhancement",
]

#: Enhancement of sparsely ionising radiation from no oxygen to full oxygen.
LARGEST_ENHANCEMENT = 3.0
#: Pressure at which half of the enhancement is reached, mmHg.
HALF_PRESSURE_MMHG = 3.0
#: LET at which half of the enhancement is lost, keV/um.
TURNING_LET_KEV_UM = 8.27e5 ** (1.0 / 3.0)


def largest_enhancement(let_kev_um: ArrayLike) -> NDArray[np.float64]:
    """Give the enhancement from no oxygen to full oxygen at a LET.

    Parameters
    ----------
    let_kev_um : array_like
        Dose-averaged LET in keV/um, not negative.

    Returns
    -------
    ndarray
        ``m``, from 3 down to 1.

    Warns
    -----
    ValidityWarning
        Above 500 keV/um.

    Examples
    --------
    >>> float(largest_enhancement(0.0)), round(float(largest_enhancement(TURNING_LET_KEV_UM)), 6)
    (3.0, 2.0)
    """
    let = np.asarray(let_kev_um, dtype=np.float64)
    if not np.all(let >= 0.0):
        raise InputError("a LET below 0 or no number", allowed="0 keV/um or more", remedy="check the LET map")
    if np.any(let > 500.0):
        warnings.warn(f"oxygen: LET up to {let.max():.3g} keV/um, made for 0 to 500", ValidityWarning, stacklevel=2)
    return _most(let)


def oxygen_enhancement(pressure_mmhg: ArrayLike, let_kev_um: ArrayLike = 0.0) -> NDArray[np.float64]:
    """Give the oxygen enhancement ratio: dose needed at a pressure over dose needed at full oxygen.

    Parameters
    ----------
    pressure_mmhg : array_like
        Partial pressure of oxygen in mmHg, not negative.
    let_kev_um : array_like
        Dose-averaged LET in keV/um.

    Returns
    -------
    ndarray
        From ``m`` without oxygen to 1 at high pressure.

    Warns
    -----
    ValidityWarning
        A pressure above 160 mmHg or a LET above 500 keV/um.

    Examples
    --------
    >>> float(oxygen_enhancement(0.0)), float(oxygen_enhancement(3.0))
    (3.0, 1.5)
    """
    pressure = np.asarray(pressure_mmhg, dtype=np.float64)
    if not np.all(pressure >= 0.0):
        raise InputError(
            "an oxygen pressure below 0 or no number", allowed="0 mmHg or more", remedy="check the pressure"
        )
    if np.any(pressure > 160.0):
        warnings.warn(
            f"oxygen: pressure up to {pressure.max():.3g} mmHg, made for 0 to 160", ValidityWarning, stacklevel=2
        )
    most = largest_enhancement(let_kev_um)
    return np.asarray(most * (pressure + HALF_PRESSURE_MMHG) / (most * pressure + HALF_PRESSURE_MMHG))


def mixed_oxygen_enhancement(
    weighted_dose_gy: Mapping[str, ArrayLike],
    let_kev_um: Mapping[str, ArrayLike],
    *,
    pressure_mmhg: ArrayLike = 0.0,
    effect_per_dose: Callable[[NDArray[np.float64]], NDArray[np.float64]] = np.ones_like,
    beam_particle: str = "pi-",
) -> NDArray[np.float64]:
    """Give the oxygen enhancement ratio of several kinds of radiation together.

    Parameters
    ----------
    weighted_dose_gy : mapping of str to array_like
        Effect-weighted dose of each component in Gy.
    let_kev_um : mapping of str to array_like
        Dose-averaged LET of each component in keV/um; a component left out counts as photons.
    pressure_mmhg : array_like
        Partial pressure of oxygen in mmHg.
    effect_per_dose : callable
        Effect per dose as a function of LET in keV/um, by which the spectrum of a component is weighted; all dose
        alike by default.
    beam_particle : str
        What reacts in flight.

    Returns
    -------
    ndarray
        Ratio; 1 where there is no dose.

    Examples
    --------
    >>> float(mixed_oxygen_enhancement({"primary": 1.0}, {}))
    3.0
    """
    parts = [np.asarray(dose, dtype=np.float64) for dose in weighted_dose_gy.values()]
    total = np.sum(np.broadcast_arrays(*parts), axis=0)
    reduced = np.zeros_like(total)
    for name, dose in zip(weighted_dose_gy, parts, strict=True):
        let = let_kev_um.get(name, 0.0)
        ratio = oxygen_enhancement(pressure_mmhg, let)
        if name in SPREAD:
            ratio = _spread_enhancement(name, let, pressure_mmhg, effect_per_dose, beam_particle)
        reduced = reduced + dose / ratio
    return np.where(total > 0.0, total / np.where(total > 0.0, reduced, 1.0), 1.0)


def _spread_enhancement(
    component: str,
    let_kev_um: ArrayLike,
    pressure_mmhg: ArrayLike,
    effect_per_dose: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    beam_particle: str,
) -> NDArray[np.float64]:
    """Give the enhancement of a component, ``1 / OER`` averaged over the effect of its spectrum.

    With ``1 / OER = p / (p + K) + (K / (p + K)) / m`` only the mean of ``1 / m`` depends on LET.
    """

    def kept(let: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(effect_per_dose(let) / _most(let))

    whole = spectral_mean(effect_per_dose, component, let_kev_um, beam_particle=beam_particle)
    part = spectral_mean(kept, component, let_kev_um, beam_particle=beam_particle)
    pressure = np.asarray(pressure_mmhg, dtype=np.float64)
    share = HALF_PRESSURE_MMHG / (pressure + HALF_PRESSURE_MMHG)
    return np.asarray(1.0 / ((1.0 - share) + share * part / np.where(whole > 0.0, whole, 1.0)))


def _most(let_kev_um: NDArray[np.float64]) -> NDArray[np.float64]:
    """Give the enhancement from no oxygen to full oxygen, without a check."""
    return np.asarray(1.0 + (LARGEST_ENHANCEMENT - 1.0) / (1.0 + (let_kev_um / TURNING_LET_KEV_UM) ** 3))

"""How many Hounsfield units does a material have? The parametrised attenuation of photons in a CT scanner.

With HU scaled so that water is 0 and nothing is -1000 (Schneider, Pedroni and Lomax, Phys. Med. Biol. 41 (1996) 111,
after Rutherford, Pullan and Isherwood, Neuroradiology 11 (1976) 15)::

    HU = 1000 (mu / mu_water - 1)
    mu / mu_water = (n_e / n_e,water) (1 + k1 Z1^1.86 + k2 Z2^3.62) / [the same bracket for water]
    Z1^1.86 = sum_i l_i Z_i^1.86,  Z2^3.62 = sum_i l_i Z_i^3.62,  l_i = share of the electrons that element i has

k1 and k2 are the coherent and the photo-electric coefficient of the scanner over its Klein-Nishina coefficient.

Sources
-------
Defaults k1 = 1.24e-3 and k2 = 3.06e-5: Schneider, Bortfeld and Schlegel, Phys. Med. Biol. 45 (2000) 459, for one
scanner at 120 kV (from memory). Another scanner has its own pair, got from a scan of known inserts.

Validity: tissues and plastics; heavy metals lie outside, as do beam hardening and scatter in the patient.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from dosekit.basis.materials import Material, element, material
from dosekit.errors import CalibrationError

__all__ = ["KAPPA_COHERENT", "KAPPA_PHOTO", "attenuation_per_density", "fit_kappas", "hounsfield_units"]

KAPPA_COHERENT = 1.24e-3
"""Coherent over Klein-Nishina coefficient; Schneider et al. 2000 (memory)."""
KAPPA_PHOTO = 3.06e-5
"""Photo-electric over Klein-Nishina coefficient; Schneider et al. 2000 (memory)."""


@dataclass(frozen=True)
class _Sums:
    """Electrons per gram and the two weighted sums of Z."""

    electrons: float
    coherent: float
    photo: float


def attenuation_per_density(
    medium: str | Material, *, kappa_coherent: float = KAPPA_COHERENT, kappa_photo: float = KAPPA_PHOTO
) -> float:
    """Return the photon attenuation per density relative to that of water.

    Parameters
    ----------
    medium : str or Material
        The composition; its density does not count.
    kappa_coherent, kappa_photo : float
        The scanner's coefficients over its Klein-Nishina coefficient.

    Returns
    -------
    float
        (mu / rho) over that of water.

    Examples
    --------
    >>> attenuation_per_density("water")
    1.0
    """

    def per_gram(substance: Material) -> float:
        sums = _sums(substance)
        return sums.electrons * (1.0 + kappa_coherent * sums.coherent + kappa_photo * sums.photo)

    return per_gram(material(medium)) / per_gram(material("water"))


def hounsfield_units(
    medium: str | Material, *, kappa_coherent: float = KAPPA_COHERENT, kappa_photo: float = KAPPA_PHOTO
) -> float:
    """Return the CT number of a material at its density.

    Parameters
    ----------
    medium : str or Material
        The material; its density counts.
    kappa_coherent, kappa_photo : float
        The scanner's coefficients over its Klein-Nishina coefficient.

    Returns
    -------
    float
        HU; water at 1 g/cm3 has 0.

    Examples
    --------
    >>> hounsfield_units("water")
    0.0
    >>> -1000 < hounsfield_units("air") < -998
    True
    """
    stuff = material(medium)
    ratio = attenuation_per_density(stuff, kappa_coherent=kappa_coherent, kappa_photo=kappa_photo)
    return 1000.0 * (ratio * stuff.density_g_cm3 / material("water").density_g_cm3 - 1.0)


def fit_kappas(measured: Mapping[str | Material, float]) -> tuple[float, float]:
    """Find a scanner's coefficients from the HU of known inserts (least squares).

    Parameters
    ----------
    measured : mapping of str or Material to float
        Insert (its density counts) and its measured HU; at least two that differ in composition.

    Returns
    -------
    tuple of float
        ``kappa_coherent`` and ``kappa_photo``.

    Raises
    ------
    CalibrationError
        When the inserts do not determine them, or the result is unphysical.

    Notes
    -----
    With a = 1 + HU / 1000, the relation is linear in both: n (1 + k1 C + k2 P) = a n_w (1 + k1 C_w + k2 P_w),
    with n the electrons per volume and C, P the sums of Z.

    Examples
    --------
    >>> inserts = ["adipose", "bone_cortical", "ptfe", "polyethylene"]
    >>> k1, k2 = fit_kappas({name: hounsfield_units(name) for name in inserts})
    >>> round(k1 / KAPPA_COHERENT, 6), round(k2 / KAPPA_PHOTO, 6)
    (1.0, 1.0)
    """
    water = _sums(material("water"))
    rows, right = [], []
    for name, units in measured.items():
        stuff = material(name)
        sums = _sums(stuff)
        density = stuff.density_g_cm3 * sums.electrons
        scaled = (1.0 + units / 1000.0) * water.electrons
        rows.append([density * sums.coherent - scaled * water.coherent, density * sums.photo - scaled * water.photo])
        right.append(scaled - density)
    matrix = np.array(rows).reshape(-1, 2)
    scale = np.abs(matrix).max(axis=0, initial=1e-300)
    if len(rows) < 2 or np.linalg.matrix_rank(matrix / scale, tol=1e-6) < 2:
        raise CalibrationError(
            f"{len(rows)} inserts do not determine two coefficients",
            allowed="at least two inserts of different composition besides water",
            remedy="add a bone-like and a fat-like insert",
        )
    solution = np.linalg.lstsq(matrix / scale, np.array(right), rcond=None)[0] / scale
    if not np.all(np.isfinite(solution)) or float(solution[1]) <= 0.0:
        raise CalibrationError(
            f"the inserts lead to coefficients {solution[0]:.3g} and {solution[1]:.3g}",
            allowed="a photo-electric coefficient above 0",
            remedy="check the HU of the inserts and their densities",
        )
    return float(solution[0]), float(solution[1])


def _sums(stuff: Material) -> _Sums:
    """Return electrons per molar mass and the sums over the electrons' shares."""
    electrons = coherent = photo = 0.0
    for symbol, fraction in stuff.mass_fractions:
        atom = element(symbol)
        here = fraction * atom.atomic_number / atom.atomic_weight
        electrons += here
        coherent += here * atom.atomic_number**1.86
        photo += here * atom.atomic_number**3.62
    return _Sums(electrons, coherent / electrons, photo / electrons)

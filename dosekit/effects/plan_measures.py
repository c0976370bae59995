"""How well does an isodose fit the target, and what do the body and the far tissue receive?

Conformity: treated volume over target volume; overlap ``2 |A and B| / (|A| + |B|)``; conformation number
``(TV_T / V_T) (TV_T / TV)`` with the treated volume TV, the target's V_T and TV_T common to both.

Sources: ICRU Report 83, J. ICRU 10 (2010) section 3 (from memory); Dice, Ecology 26 (1945) 297; van't Riet et al.,
Int. J. Radiat. Oncol. Biol. Phys. 37 (1997) 731.

What it does not do: it knows nothing of grids; the caller hands over arrays of equal shape.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

__all__ = ["conformity", "integral_dose_j", "outside_field_dose"]


def conformity(
    dose_gy: ArrayLike,
    target: ArrayLike,
    *,
    body: ArrayLike,
    level_gy: float,
    voxel_cm3: ArrayLike = 1.0,
) -> dict[str, float]:
    """Say how well an isodose fits the target.

    Parameters
    ----------
    dose_gy : array_like
        Dose per voxel, in Gy.
    target, body : array_like, same shape
        Coverage of target and body, 0 to 1.
    level_gy : float
        Dose whose isodose is judged (for example 95 % of the prescription), in Gy.
    voxel_cm3 : float or array_like
        Volume of a voxel in cm3.

    Returns
    -------
    dict
        ``treated_cm3`` (volume in the body with at least this dose), ``target_cm3``, ``covered_share`` of the
        target, ``conformity`` (treated over target volume), ``overlap`` (Dice), ``conformation_number``.

    Examples
    --------
    >>> measures = conformity([2.0, 2.0, 1.0, 0.0], [1, 0, 1, 0], body=[1, 1, 1, 1], level_gy=1.9)
    >>> measures["conformity"], measures["overlap"], measures["conformation_number"]
    (1.0, 0.5, 0.25)
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    voxel = np.broadcast_to(np.asarray(voxel_cm3, dtype=np.float64), dose.shape)
    target_share = np.asarray(target, dtype=np.float64)
    body_share = np.maximum(np.asarray(body, dtype=np.float64), target_share)
    reached = dose >= level_gy
    target_cm3 = float(np.sum(target_share * voxel))
    treated_cm3 = float(np.sum((body_share * voxel)[reached]))
    both_cm3 = float(np.sum((target_share * voxel)[reached]))
    if target_cm3 == 0.0:
        raise InputError("an empty target", allowed="a target with some volume", remedy="check the structure")
    covered = both_cm3 / target_cm3
    return {
        "treated_cm3": treated_cm3,
        "target_cm3": target_cm3,
        "covered_share": covered,
        "conformity": treated_cm3 / target_cm3,
        "overlap": 2.0 * both_cm3 / (treated_cm3 + target_cm3),
        "conformation_number": covered * both_cm3 / treated_cm3 if treated_cm3 > 0.0 else 0.0,
    }


def integral_dose_j(
    dose_gy: ArrayLike,
    density_g_cm3: ArrayLike,
    *,
    coverage: ArrayLike = 1.0,
    voxel_cm3: ArrayLike,
) -> float:
    """Give the energy imparted to a region, ``sum of dose x mass``, in joule.

    Parameters
    ----------
    dose_gy, density_g_cm3 : array_like
        Dose in Gy and density in g/cm3 per voxel.
    coverage : array_like
        Share of each voxel in the region; 1 everywhere when absent.
    voxel_cm3 : float or array_like
        Volume of a voxel in cm3.

    Returns
    -------
    float
        Energy in joule (Gy times kg).

    Examples
    --------
    >>> integral_dose_j([2.0, 1.0], [1.0, 1.0], voxel_cm3=500.0)
    1.5
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    mass_g = np.asarray(density_g_cm3, dtype=np.float64) * np.asarray(voxel_cm3, dtype=np.float64)
    return float(np.sum(dose * mass_g * np.asarray(coverage, dtype=np.float64)) / 1000.0)


def outside_field_dose(
    charged_dose_gy: ArrayLike,
    neutral_dose_gy: ArrayLike,
    *,
    body: ArrayLike,
    level_gy: float,
    voxel_cm3: ArrayLike = 1.0,
) -> dict[str, float]:
    """Describe the neutron (or photon) dose where the charged particles of the fields do not come.

    A voxel of the body lies outside the fields when the dose of all other components there is below a stated
    level; the level belongs in every table that quotes the result.

    Parameters
    ----------
    charged_dose_gy, neutral_dose_gy : array_like
        Dose of all other components and of the one asked about, in Gy.
    body : array_like
        Coverage of the body, 0 to 1.
    level_gy : float
        Charged dose below which a voxel is outside, in Gy.
    voxel_cm3 : float or array_like
        Volume of a voxel in cm3.

    Returns
    -------
    dict
        ``level_gy``, ``volume_cm3`` of the outside region, ``mean_gy``, ``maximum_gy`` (0 when no voxel is
        outside).

    Examples
    --------
    >>> outside_field_dose([5.0, 0.0, 0.0], [1.0, 0.2, 0.1], body=[1, 1, 1], level_gy=0.05)["mean_gy"]
    0.15000000000000002
    """
    neutral = np.asarray(neutral_dose_gy, dtype=np.float64)
    share = np.asarray(body, dtype=np.float64) * (np.asarray(charged_dose_gy, dtype=np.float64) < level_gy)
    volume = share * np.broadcast_to(np.asarray(voxel_cm3, dtype=np.float64), neutral.shape)
    total = float(np.sum(volume))
    return {
        "level_gy": float(level_gy),
        "volume_cm3": total,
        "mean_gy": float(np.sum(neutral * volume) / total) if total > 0.0 else 0.0,
        "maximum_gy": float(np.max(neutral[volume > 0.0])) if total > 0.0 else 0.0,
    }

"""How much more effective than photons is a dose of a given LET?  Published models by name.

Proton models with ``ab`` for alpha/beta and ``L`` for the dose-averaged LET::

    RBE_max = p0 + p1 L / ab                 (ratio of the alphas)
    RBE_min = q0 + q1 f(ab) L                (square root of the ratio of the betas)
    RBE(D)  = (sqrt(ab^2 + 4 ab D RBE_max + 4 D^2 RBE_min^2) - ab) / (2 D)

``carabe``: Carabe et al., Phys. Med. Biol. 57 (2012) 1159, f = 1/ab; ``wedenberg``: Wedenberg et al., Acta
Oncol. 52 (2013) 580, q1 = 0; ``mcnamara``: McNamara et al., Phys. Med. Biol. 60 (2015) 8399, f = sqrt(ab);
``rorvik_linear``: Rorvik et al., Med. Phys. 44 (2017) 2583, q1 = 0.  The constants lie in `rbe_models.csv`.

Quality factor of radiation protection, ICRP Publication 60 (1991), Table A-1::

    Q = 1 (L < 10),  0.32 L - 2.2 (10 to 100),  300 / sqrt(L) (above 100 keV/um)

Constant factors, one for each component of the dose, follow the historic practice.

Validity: the proton models were fitted to cell survival in proton beams (see `effect_validity.csv`).  Any
use for pions or for star products is an extrapolation; a use outside the spans of LET, alpha/beta or dose
warns.  ``Q`` serves radiation protection (stochastic effects at low dose), not the effect of a treatment.
"""

from __future__ import annotations

import warnings
from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.basis.tables import read_table
from dosekit.errors import InputError, UnknownNameError, ValidityWarning

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from numpy.typing import ArrayLike, NDArray

__all__ = [
    "check_validity",
    "component_factors",
    "proton_model_names",
    "quality_factor",
    "rbe",
    "rbe_extremes",
]

_SHAPES: dict[str, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = {
    "1/(alpha/beta)": lambda ratio: 1.0 / ratio,
    "sqrt(alpha/beta)": np.sqrt,
    "none": np.zeros_like,
}


@cache
def _models() -> dict[str, dict[str, float | str]]:
    """Read the constants once."""
    return {str(row["model"]): row for row in read_table("rbe_models").rows()}


def proton_model_names() -> tuple[str, ...]:
    """Give the names of the proton models."""
    return tuple(_models())


def rbe_extremes(
    model: str, let_kev_um: ArrayLike, *, alpha_beta_gy: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give the RBE at vanishing and at very large dose.

    Parameters
    ----------
    model : str
        ``carabe``, ``wedenberg``, ``mcnamara`` or ``rorvik_linear``.
    let_kev_um : array_like
        Dose-averaged LET in keV/um, not negative.
    alpha_beta_gy : array_like
        Ratio of the photon constants in Gy.

    Returns
    -------
    rbe_max, rbe_min : ndarray
        Ratio of the alphas, and root of the ratio of the betas.

    Raises
    ------
    UnknownNameError, InputError
        No such model; a LET below 0 or an alpha/beta not above 0.

    Warns
    -----
    ValidityWarning
        Outside the span of LET or alpha/beta of the fit.

    Examples
    --------
    >>> [round(float(part), 4) for part in rbe_extremes("wedenberg", 2.5, alpha_beta_gy=10.0)]
    [1.1085, 1.0]
    """
    if model not in _models():
        raise UnknownNameError("RBE model", model, _models())
    let, ratio = np.asarray(let_kev_um, dtype=np.float64), np.asarray(alpha_beta_gy, dtype=np.float64)
    check_validity(model, let_kev_um=let, alpha_beta_gy=ratio)
    row = _models()[model]
    shape = _SHAPES[str(row["f"])]
    largest = float(row["p0"]) + float(row["p1"]) * let / ratio
    smallest = float(row["q0"]) + float(row["q1"]) * shape(ratio) * let
    return np.asarray(largest), np.maximum(np.broadcast_to(smallest, largest.shape), 0.0)


def rbe(model: str, let_kev_um: ArrayLike, *, alpha_beta_gy: ArrayLike, dose_gy: ArrayLike) -> NDArray[np.float64]:
    """Give the RBE of protons at a dose.

    Parameters
    ----------
    model : str
        ``carabe``, ``wedenberg``, ``mcnamara`` or ``rorvik_linear``.
    let_kev_um, alpha_beta_gy : array_like
        Dose-averaged LET in keV/um; ratio of the photon constants in Gy.
    dose_gy : array_like
        Proton dose per fraction in Gy, not negative (0 gives the limit ``RBE_max``).

    Returns
    -------
    ndarray
        RBE.

    Warns
    -----
    ValidityWarning
        Outside the span of LET, alpha/beta or dose of the fit.

    Examples
    --------
    >>> round(float(rbe("mcnamara", 2.5, alpha_beta_gy=2.0, dose_gy=2.0)), 4)
    1.1936
    """
    dose = np.asarray(dose_gy, dtype=np.float64)
    if not np.all(dose >= 0.0):
        raise InputError("a dose below 0 or no number", allowed="0 Gy or more", remedy="check the map")
    largest, smallest = rbe_extremes(model, let_kev_um, alpha_beta_gy=alpha_beta_gy)
    check_validity(model, dose_gy=dose)
    ratio = np.asarray(alpha_beta_gy, dtype=np.float64)
    # multiplied out with the conjugate so that small doses keep their digits
    root = np.sqrt(ratio**2 + 4.0 * ratio * dose * largest + 4.0 * dose**2 * smallest**2)
    return np.asarray((2.0 * ratio * largest + 2.0 * dose * smallest**2) / (root + ratio))


def quality_factor(let_kev_um: ArrayLike) -> NDArray[np.float64]:
    """Give the quality factor of ICRP 60.

    Parameters
    ----------
    let_kev_um : array_like
        Unrestricted LET in water in keV/um, not negative.

    Returns
    -------
    ndarray
        ``Q``, from 1 to 30.

    Examples
    --------
    >>> quality_factor([5.0, 50.0, 100.0, 400.0]).tolist()
    [1.0, 13.8, 29.8, 15.0]
    """
    let = np.asarray(let_kev_um, dtype=np.float64)
    if not np.all(let >= 0.0):
        raise InputError("a LET below 0 or no number", allowed="0 keV/um or more", remedy="check the LET map")
    return np.where(let < 10.0, 1.0, np.where(let <= 100.0, 0.32 * let - 2.2, 300.0 / np.sqrt(np.maximum(let, 100.0))))


def component_factors(changes: Mapping[str, float] | None = None) -> dict[str, float]:
    """Give one constant factor for each component of the dose.

    Parameters
    ----------
    changes : mapping of str to float, optional
        Factors that replace those of `component_factors.csv`.

    Returns
    -------
    dict
        Component name to factor, all components in order.

    Raises
    ------
    UnknownNameError, InputError
        A name that is no component; a factor below 0.

    Examples
    --------
    >>> component_factors({"star_heavy": 2.5})["star_heavy"]
    2.5
    """
    table = read_table("component_factors", folder="effects")
    factors = {str(row["component"]): float(row["factor"]) for row in table.rows()}
    for name, factor in (changes or {}).items():
        if name not in COMPONENTS:
            raise UnknownNameError("component", name, COMPONENTS)
        if not 0.0 <= factor < float("inf"):
            raise InputError(
                f"factor {factor} for {name}", allowed="0 or more", remedy="1 means as effective as photons"
            )
        factors[name] = float(factor)
    return {name: factors[name] for name in COMPONENTS}


def check_validity(model: str, **given: ArrayLike) -> None:
    """Warn where a model is used outside the span of its data; refuse what cannot be.

    Parameters
    ----------
    model : str
        A row of `effect_validity.csv`.
    **given : array_like
        ``let_kev_um``, ``alpha_beta_gy``, ``dose_gy``.

    Raises
    ------
    InputError
        A value below 0 or no number; an alpha/beta of 0.

    Warns
    -----
    ValidityWarning
        Some value lies outside.
    """
    row = next(iter(read_table("effect_validity", folder="effects").where(model=model).rows()))
    columns = {"let_kev_um": "let", "alpha_beta_gy": "alpha_beta", "dose_gy": "dose"}
    for name, values in given.items():
        column = columns[name]
        array = np.asarray(values, dtype=np.float64)
        if array.size == 0:
            continue
        if not np.all(array >= 0.0) or (column == "alpha_beta" and not np.all(array > 0.0)):
            raise InputError(f"{name} below 0 or no number", allowed="above 0", remedy="check the input")
        low, high = float(row[f"{column}_low"]), float(row[f"{column}_high"])
        # dose below the span is met in every map and harmless: the low-dose limit RBE_max is part of the model
        too_low = column != "dose" and float(array.min()) < low
        if too_low or float(array.max()) > high:
            warnings.warn(
                f"{model}: {name} from {float(array.min()):.3g} to {float(array.max()):.3g}, "
                f"made for {low:g} to {high:g}; the result is an extrapolation",
                ValidityWarning,
                stacklevel=3,
            )

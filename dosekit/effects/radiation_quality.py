"""What is the LET of each component in a voxel?

Dose-averaged LET adds like energy: with depth curves ``q`` of a quantity and its LET ``L``, a fold of ``L
q`` in the place of ``q`` gives ``sum of L D`` in every voxel, and

    LET_d = (fold of L q) / (fold of q)

for each component (ICRU Report 16, 1970: dose-averaged LET; additivity is its definition).  `let_weighted`
makes the depth library for the second fold; stops are left alone, so that both folds carry the same stars,
whose components have the LET of their slowing-down spectra in water.

Validity: as the depth library's LET; the products of stars have one LET each, wherever they go.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.depths.quality import star_let_kev_um
from dosekit.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import ArrayLike, NDArray

    from dosekit.depths.library import DepthLibrary

__all__ = ["let_from_folds", "let_weighted", "total_let"]

#: Share of the largest dose below which a component's LET is not given (0 instead).
_LEAST_SHARE = 1e-6


def let_weighted(library: DepthLibrary) -> DepthLibrary:
    """Give a depth library whose energies are multiplied by their LET.

    Parameters
    ----------
    library : DepthLibrary
        Depth curves with LET.

    Returns
    -------
    DepthLibrary
        The same, energy quantities in MeV/mm times keV/um; stops and reactions unchanged.
    """
    quantities = {
        name: values * library.let[name] if name in library.let else values
        for name, values in library.quantities.items()
    }
    return replace(library, quantities=quantities)


def let_from_folds(
    dose_gy: Mapping[str, ArrayLike], weighted: Mapping[str, ArrayLike], *, yields: str = "evaluated"
) -> dict[str, NDArray[np.float64]]:
    """Give the LET of each component from two folds.

    Parameters
    ----------
    dose_gy : mapping of str to array_like
        Dose by component, Gy.
    weighted : mapping of str to array_like
        Outcome of the fold with the library of `let_weighted`, Gy times keV/um (star components are not
        used).
    yields : str
        Star yields; the LET of star products follows from their spectra, in water.

    Returns
    -------
    dict of str to ndarray
        Dose-averaged LET, keV/um; 0 where a component has next to no dose.

    Raises
    ------
    InputError
        If a component has no counterpart of its shape.

    Examples
    --------
    >>> let_from_folds({"primary": [2.0, 0.0]}, {"primary": [3.0, 0.0]})["primary"].tolist()
    [1.5, 0.0]
    """
    out = {}
    stars = star_let_kev_um("water", yields=yields)
    for name, values in dose_gy.items():
        dose = np.asarray(values, dtype=np.float64)
        if name in stars:
            out[name] = np.where(dose > 0.0, stars[name], 0.0)
            continue
        times = np.asarray(weighted.get(name, np.nan), dtype=np.float64)
        if name not in COMPONENTS or times.shape != dose.shape:
            raise InputError(
                f"no LET-weighted fold of component {name!r}",
                allowed="both folds with the same components and voxels",
                remedy="fold twice with the same fields and volume",
            )
        known = dose > _LEAST_SHARE * float(dose.max(initial=0.0))
        out[name] = np.where(known, np.maximum(times, 0.0) / np.where(known, dose, 1.0), 0.0)
    return out


def total_let(dose_gy: Mapping[str, ArrayLike], let_kev_um: Mapping[str, ArrayLike]) -> NDArray[np.float64]:
    """Give the LET averaged over the dose of all components.

    Parameters
    ----------
    dose_gy, let_kev_um : mapping of str to array_like
        Dose (Gy) and LET (keV/um) by component.

    Returns
    -------
    ndarray
        keV/um; 0 where there is no dose.

    Examples
    --------
    >>> float(total_let({"primary": 3.0, "star_heavy": 1.0}, {"primary": 1.0, "star_heavy": 101.0}))
    26.0
    """
    names = list(dose_gy)
    dose = np.sum(np.broadcast_arrays(*[np.asarray(dose_gy[name], dtype=np.float64) for name in names]), axis=0)
    product = np.sum(
        np.broadcast_arrays(
            *[np.asarray(dose_gy[n], dtype=np.float64) * np.asarray(let_kev_um[n], dtype=np.float64) for n in names]
        ),
        axis=0,
    )
    return np.where(dose > 0.0, product / np.where(dose > 0.0, dose, 1.0), 0.0)

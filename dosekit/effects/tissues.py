"""How sensitive is a tissue?  Linear-quadratic constants of the reference radiation by tissue and structure name.

Survival after a dose ``D`` of photons: ``exp(-(alpha D + beta D^2))``.  The table `data/tissues.csv` holds
``alpha`` and ``alpha/beta`` of a few tissues; its status is common practice, not measurement.  A structure
takes the tissue whose keyword its name contains (the longest keyword wins); a name that matches none takes
`late responding`.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.tables import read_table
from dosekit.errors import InputError, UnknownNameError

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["Tissue", "TissueMap", "tissue", "tissue_names", "tissue_of_structure"]

_FALLBACK = "late responding"


@dataclass(frozen=True)
class Tissue:
    """Linear-quadratic constants of a tissue for photons.

    Parameters
    ----------
    name : str
        Name.
    alpha_per_gy : float
        Linear constant, 1/Gy.
    alpha_beta_gy : float
        Ratio of linear to quadratic constant, Gy.
    """

    name: str
    alpha_per_gy: float
    alpha_beta_gy: float

    def __post_init__(self) -> None:
        """Refuse constants that are not positive."""
        for value, what in ((self.alpha_per_gy, "alpha"), (self.alpha_beta_gy, "alpha/beta")):
            if not 0.0 < value < float("inf"):
                raise InputError(
                    f"{what} of {value} for {self.name!r}", allowed="above 0", remedy="alpha/beta is 1 to 20 Gy"
                )

    @property
    def beta_per_gy2(self) -> float:
        """Quadratic constant, 1/Gy^2."""
        return self.alpha_per_gy / self.alpha_beta_gy


@dataclass(frozen=True, eq=False)
class TissueMap:
    """Linear-quadratic constants per voxel, for volumes with several tissues.

    Parameters
    ----------
    alpha_per_gy, alpha_beta_gy : ndarray
        Linear constant (1/Gy) and ratio (Gy) of each voxel, equal shapes.
    """

    alpha_per_gy: NDArray[np.float64]
    alpha_beta_gy: NDArray[np.float64]

    def __post_init__(self) -> None:
        """Refuse constants that are not positive."""
        if not (np.all(self.alpha_per_gy > 0.0) and np.all(self.alpha_beta_gy > 0.0)):
            raise InputError("alpha or alpha/beta not above 0", allowed="above 0", remedy="check the tissue map")

    @property
    def beta_per_gy2(self) -> NDArray[np.float64]:
        """Quadratic constant of each voxel, 1/Gy^2."""
        return np.asarray(self.alpha_per_gy / self.alpha_beta_gy)


@cache
def _tissues() -> dict[str, tuple[Tissue, tuple[str, ...]]]:
    """Read the table once."""
    return {
        str(row["tissue"]): (
            Tissue(str(row["tissue"]), float(row["alpha"]), float(row["alpha_beta"])),
            tuple(str(row["keywords"]).split()),
        )
        for row in read_table("tissues", folder="effects").rows()
    }


def tissue_names() -> tuple[str, ...]:
    """Give the names in the tissue table."""
    return tuple(_tissues())


def tissue(name: str) -> Tissue:
    """Give a tissue by name.

    Parameters
    ----------
    name : str
        A name in the table.

    Returns
    -------
    Tissue
        Its constants.

    Raises
    ------
    UnknownNameError
        If the table has no such tissue.

    Examples
    --------
    >>> tissue("nervous").alpha_beta_gy
    2.0
    """
    try:
        return _tissues()[name][0]
    except KeyError:
        raise UnknownNameError("tissue", name, _tissues()) from None


def tissue_of_structure(structure: str) -> Tissue:
    """Give the tissue that a structure's name suggests.

    Parameters
    ----------
    structure : str
        Name of a structure, any case.

    Returns
    -------
    Tissue
        The tissue with the longest keyword that begins a word of the name; `late responding` when none does.

    Examples
    --------
    >>> tissue_of_structure("Spinal Cord").name, tissue_of_structure("left kidney").name
    ('nervous', 'kidney')
    """
    words = [word for word in re.split(r"[^a-z]+", structure.lower()) if word]
    best, length = _FALLBACK, 0
    for name, (_, keywords) in _tissues().items():
        for keyword in keywords:
            if len(keyword) > length and any(word.startswith(keyword) for word in words):
                best, length = name, len(keyword)
    return tissue(best)

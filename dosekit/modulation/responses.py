"""How does the dose that counts answer to the weights?  Physical or effect-weighted, with its transpose.

A response gives the dose in the voxels that matter for a vector of weights, and pulls a slope with
respect to that dose back to a slope with respect to the weights.  Physical dose is linear, ``d = A w``.
Effect-weighted dose rests on two linear maps, ``A w`` (alpha times dose) and ``B w`` (root of beta times
dose), and the chain rule of `dosekit.effects.mixed_field`.  Nothing of the size voxels times weights is
kept.

The constants alpha and beta of the components in each voxel are held fixed while weights change; where
they follow from a LET map, `find_weights` may be repeated with the map of the last weights.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from dosekit.effects.mixed_field import weighted_dose_gy, weighted_dose_slopes
from dosekit.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    from dosekit.effects.tissues import Tissue, TissueMap

__all__ = ["EffectResponse", "FoldEffectResponse", "Judge", "LinearResponse", "Response"]


class Judge(Protocol):
    """Dose as a function of the weights, with no way back: enough to judge them."""

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the dose in each voxel (Gy), and anything else."""
        ...


class Response(Protocol):
    """Dose as a function of the weights.

    Attributes
    ----------
    shape : (int, int)
        Voxels and weights.
    """

    @property
    def shape(self) -> tuple[int, int]:
        """Voxels and weights."""
        ...

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the dose in each voxel (Gy), and what the way back needs."""
        ...

    def pull_back(self, slope: NDArray[np.float64], kept: Any) -> NDArray[np.float64]:
        """Turn a slope per voxel into a slope per weight."""
        ...


@dataclass(frozen=True, eq=False)
class LinearResponse:
    """Physical dose, or any sum of components with fixed factors.

    Parameters
    ----------
    operator : LinearOperator or matrix
        Weights to dose, Gy, with a transpose.
    """

    operator: Any

    @property
    def shape(self) -> tuple[int, int]:
        """Voxels and weights."""
        rows, columns = self.operator.shape
        return int(rows), int(columns)

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], None]:
        """Give the dose.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dose_gy : ndarray, shape (n,)
            Gy.
        kept : None
            Nothing is needed on the way back.
        """
        return np.asarray(self.operator @ weights, dtype=np.float64).ravel(), None

    def pull_back(self, slope: NDArray[np.float64], kept: None) -> NDArray[np.float64]:  # noqa: ARG002
        """Turn a slope per voxel into a slope per weight.

        Parameters
        ----------
        slope : ndarray, shape (n,)
            Slope with respect to the dose.
        kept : None
            Not used.

        Returns
        -------
        ndarray, shape (w,)
            Slope with respect to the weights.
        """
        return np.asarray(self.operator.T @ slope, dtype=np.float64).ravel()


@dataclass(frozen=True, eq=False)
class EffectResponse:
    """Effect-weighted dose from two linear maps.

    Parameters
    ----------
    linear, root : LinearOperator or matrix
        Weights to the sums of alpha times dose and of sqrt(beta) times dose.
    tissue : Tissue or TissueMap
        Photon constants, of all voxels or of each.
    fractions : int
        Number of equal fractions that the weights are for together.
    """

    linear: Any
    root: Any
    tissue: Tissue | TissueMap
    fractions: int = 1

    def __post_init__(self) -> None:
        """Refuse maps of different shape."""
        if tuple(self.linear.shape) != tuple(self.root.shape):
            raise InputError(
                f"linear maps of shape {self.linear.shape} and {self.root.shape}",
                allowed="equal shapes",
                remedy="build both from the same fields and voxels",
            )

    @property
    def shape(self) -> tuple[int, int]:
        """Voxels and weights."""
        rows, columns = self.linear.shape
        return int(rows), int(columns)

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the effect-weighted dose.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dose_gy : ndarray, shape (n,)
            Gy.
        kept : tuple of ndarray
            Slopes of the dose with respect to the two sums.
        """
        linear = np.asarray(self.linear @ weights, dtype=np.float64).ravel()
        root = np.asarray(self.root @ weights, dtype=np.float64).ravel()
        return _weighted(linear, root, self.tissue, self.fractions)

    def pull_back(self, slope: NDArray[np.float64], kept: Any) -> NDArray[np.float64]:
        """Turn a slope per voxel into a slope per weight.

        Parameters
        ----------
        slope : ndarray, shape (n,)
            Slope with respect to the dose.
        kept : tuple of ndarray
            From `dose`.

        Returns
        -------
        ndarray, shape (w,)
            Slope with respect to the weights.
        """
        by_linear, by_root = kept
        back = self.linear.T @ (by_linear * slope) + self.root.T @ (by_root * slope)
        return np.asarray(back, dtype=np.float64).ravel()


@dataclass(frozen=True, eq=False)
class FoldEffectResponse:
    """Effect-weighted dose from one pass of a fold that keeps the components apart.

    Parameters
    ----------
    operator : FoldOperator
        Offers ``components(weights)`` and ``with_factors(factors)``; one pass serves both sums in either
        direction.
    constants : mapping of str to (alpha, sqrt(beta))
        Per component, numbers or one value per voxel; from `EffectModel.constants`.
    tissue : Tissue or TissueMap
        Photon constants.
    fractions : int
        Number of equal fractions that the weights are for together.
    """

    operator: Any
    constants: Mapping[str, tuple[NDArray[np.float64], NDArray[np.float64]]]
    tissue: Tissue | TissueMap
    fractions: int = 1

    @property
    def shape(self) -> tuple[int, int]:
        """Voxels and weights."""
        rows, columns = self.operator.shape
        return int(rows), int(columns)

    def dose(self, weights: NDArray[np.float64]) -> tuple[NDArray[np.float64], Any]:
        """Give the effect-weighted dose.

        Parameters
        ----------
        weights : ndarray, shape (w,)
            Weights.

        Returns
        -------
        dose_gy : ndarray, shape (n,)
            Gy.
        kept : tuple of ndarray
            Slopes of the dose with respect to the two sums.
        """
        linear, root = np.zeros(self.shape[0]), np.zeros(self.shape[0])
        for name, dose in self.operator.components(weights).items():
            alpha, slope = self.constants[name]
            linear += alpha * dose
            root += slope * dose
        return _weighted(linear, root, self.tissue, self.fractions)

    def pull_back(self, slope: NDArray[np.float64], kept: Any) -> NDArray[np.float64]:
        """Turn a slope per voxel into a slope per weight.

        Parameters
        ----------
        slope : ndarray, shape (n,)
            Slope with respect to the dose.
        kept : tuple of ndarray
            From `dose`.

        Returns
        -------
        ndarray, shape (w,)
            Slope with respect to the weights.
        """
        by_linear, by_root = kept[0] * slope, kept[1] * slope
        factors = {name: alpha * by_linear + root * by_root for name, (alpha, root) in self.constants.items()}
        back = self.operator.with_factors(factors).T @ np.ones(self.shape[0])
        return np.asarray(back, dtype=np.float64).ravel()


def _weighted(
    linear: NDArray[np.float64], root: NDArray[np.float64], tissue: Tissue | TissueMap, fractions: int
) -> tuple[NDArray[np.float64], tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """Effect-weighted dose and its slopes."""
    dose = weighted_dose_gy(linear, root, tissue=tissue, fractions=fractions)
    return dose, weighted_dose_slopes(linear, root, tissue=tissue, fractions=fractions)

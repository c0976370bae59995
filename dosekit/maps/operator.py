"""The fold as a linear operator, and its transpose.

``A`` takes the weights of every spot and range step of every field (one long vector, field by field, spot by spot,
step by step) to the dose in chosen voxels, with the components added by given factors. ``A^T`` takes one number per
voxel back to one number per weight through the transpose of every loop, so that <A x, y> = <x, A^T y> to rounding.
Nothing of the size voxels x weights is kept.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.sparse.linalg import LinearOperator

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.errors import InputError, SizeError, UnknownNameError
from dosekit.maps.fields import Field
from dosekit.maps.fold import (
    DOSE_TO,
    GRAY_PER_MEV_PER_MM3,
    STAR_MAKER,
    dose_per_energy,
    fields_of,
    pencils_of,
)
from dosekit.maps.rays import matter_of
from dosekit.maps.tables import TARGETS

if TYPE_CHECKING:
    from scipy.sparse import csc_array

    from dosekit.depths.library import DepthLibrary
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["FoldOperator"]

_DIRECT = tuple(name for name in COMPONENTS if name not in STAR_COMPONENTS)
_LARGEST_MATRIX = 50_000_000


class FoldOperator(LinearOperator):
    """Weights of spots and steps to dose in chosen voxels.

    Parameters
    ----------
    fields : Field or iterable of Field
        The fields; their weights give the order of the vector and are not otherwise used.
    grid : VoxelGrid
        The volume.
    voxels : array_like, optional
        Mask [z, y, x] or rising flat indices of the voxels asked for; all by default.
    factors : mapping of str to float or ndarray, optional
        Factor of each component, one number or one for each chosen voxel; 1 for all by default. Components that
        are not named count zero once a mapping is given.
    yields : str
        Star yields.
    star_scale : float
        Factor on the charged energy of stars.
    dose_to : str
        ``"medium"`` or ``"water"``.
    libraries : mapping of str to DepthLibrary, optional
        Depth libraries by name of the field.

    Attributes
    ----------
    shape : tuple of int
        Chosen voxels by weights.
    voxels : ndarray
        Flat indices of the chosen voxels.
    """

    def __init__(
        self,
        fields: Field | Iterable[Field],
        grid: VoxelGrid,
        *,
        voxels: ArrayLike | None = None,
        factors: Mapping[str, float | NDArray[np.float64]] | None = None,
        yields: str = "evaluated",
        star_scale: float = 1.0,
        dose_to: str = "medium",
        libraries: Mapping[str, DepthLibrary] | None = None,
    ) -> None:
        self.fields = fields_of(fields)
        self.grid = grid
        self.yields = yields
        self.star_scale = star_scale
        if dose_to not in DOSE_TO:
            raise UnknownNameError("dose_to", dose_to, DOSE_TO)
        self.voxels = _chosen(voxels, grid)
        self.factors = _factors_of(factors, len(self.voxels))
        self.pencils = [
            pencils_of(field, grid, yields=yields, library=(libraries or {}).get(field.name)) for field in self.fields
        ]
        matter = matter_of(grid, self.fields[0].beam.particle)
        per_density = matter.rsp_per_density if dose_to == "medium" else np.ones_like(matter.rsp_per_density)
        self._direct_factor = np.tile(per_density * GRAY_PER_MEV_PER_MM3, (len(_DIRECT), 1))
        self._stops_factor = np.full((1, len(per_density)), -float(np.prod(grid.spacing_mm)))
        self._star_factor = dose_per_energy(grid, matter, dose_to=dose_to).reshape(-1)[self.voxels].astype(np.float64)
        self._makes_stars = any(field.beam.particle == STAR_MAKER for field in self.fields) and any(
            np.any(self.factors[name]) for name in STAR_COMPONENTS
        )
        count = sum(int(np.prod(field.shape)) for field in self.fields)
        super().__init__(dtype=np.dtype(np.float64), shape=(len(self.voxels), count))  # type: ignore[call-arg]

    def split(self, weights: ArrayLike) -> list[NDArray[np.float64]]:
        """Divide a vector of weights into one array for each field.

        Parameters
        ----------
        weights : array_like
            The vector.

        Returns
        -------
        list of ndarray
            Spots by steps for each field.
        """
        vector = _finite(weights, "weights")
        sizes = [int(np.prod(field.shape)) for field in self.fields]
        parts = np.split(vector, np.cumsum(sizes)[:-1])
        return [part.reshape(field.shape) for part, field in zip(parts, self.fields, strict=True)]

    def with_factors(self, factors: Mapping[str, float | NDArray[np.float64]]) -> FoldOperator:
        """Return the same operator with other factors; what was prepared is shared.

        Parameters
        ----------
        factors : mapping of str to float or ndarray
            As for the class.

        Returns
        -------
        FoldOperator
            The operator.
        """
        other = object.__new__(type(self))
        other.__dict__.update(self.__dict__)
        other.factors = _factors_of(factors, len(self.voxels))
        other._makes_stars = any(field.beam.particle == STAR_MAKER for field in self.fields) and any(
            np.any(other.factors[name]) for name in STAR_COMPONENTS
        )
        return other

    def components(self, weights: ArrayLike) -> dict[str, NDArray[np.float64]]:
        """Return the dose of every component in the chosen voxels, without factors.

        Parameters
        ----------
        weights : array_like
            The vector of weights.

        Returns
        -------
        dict of str to ndarray
            Dose in each chosen voxel, Gy.
        """
        return self._forward(weights, stars=True)

    def influence_matrix(self, *, drop: float = 0.0) -> csc_array:
        """Return the operator as a sparse matrix; for small problems.

        Parameters
        ----------
        drop : float
            Leave out what is below this part of a column's largest value.

        Returns
        -------
        scipy.sparse.csc_array
            Chosen voxels by weights, Gy per 1e9 particles.

        Raises
        ------
        SizeError
            When the full matrix would have more than 5e7 elements.
        """
        from scipy.sparse import csc_array, hstack

        rows, columns = self.shape
        if rows * columns > _LARGEST_MATRIX:
            raise SizeError(
                f"a matrix of {rows} voxels by {columns} weights",
                allowed=f"at most {_LARGEST_MATRIX} elements",
                remedy="choose fewer voxels, or use the operator itself",
            )
        blocks = []
        for n in range(columns):
            unit = np.zeros(columns)
            unit[n] = 1.0
            column = self.matvec(unit)
            column[np.abs(column) < drop * np.abs(column).max(initial=0.0)] = 0.0
            blocks.append(csc_array(column[:, None]))
        return csc_array(hstack(blocks))

    def _matvec(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the dose in the chosen voxels."""
        total = np.zeros(self.shape[0])
        for name, dose in self._forward(x, stars=self._makes_stars).items():
            total += self.factors[name] * dose
        return total

    def _rmatvec(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return one value for each weight."""
        values = _finite(x, "values")
        direct = np.stack([self.factors[name] * values for name in _DIRECT])
        places = np.arange(len(self.voxels), dtype=np.int64)
        stops = self._stops_wanted(values) if self._makes_stars else None
        out = []
        for pencils in self.pencils:
            if pencils.misses:
                out.append(np.zeros(int(np.prod(pencils.field.shape))))
                continue
            fine, coarse = pencils.gather(direct, self.voxels, places, factor=self._direct_factor, rows=_direct_rows())
            if stops is not None and pencils.field.beam.particle == STAR_MAKER:
                more_fine, more_coarse = pencils.gather(
                    stops, pencils.reach(), factor=self._stops_factor, rows=_stops_rows()
                )
                fine += more_fine
                coarse += more_coarse
            out.append(pencils.weights_of(fine, coarse).reshape(-1))
        return np.concatenate(out)

    def _forward(self, x: ArrayLike, *, stars: bool) -> dict[str, NDArray[np.float64]]:
        """Return the dose of each component in the chosen voxels."""
        direct = np.zeros((len(_DIRECT), len(self.voxels)))
        stops = np.zeros((1, int(np.prod(self.grid.shape))))
        places = np.arange(len(self.voxels), dtype=np.int64)
        for pencils, weights in zip(self.pencils, self.split(x), strict=True):
            if pencils.misses or not weights.any():
                continue
            fine, coarse = pencils.maps(weights)
            pencils.deposit(
                fine, coarse, self.voxels, places, factor=self._direct_factor, rows=_direct_rows(), out=direct
            )
            if stars and pencils.field.beam.particle == STAR_MAKER:
                pencils.deposit(fine, coarse, pencils.reach(), factor=self._stops_factor, rows=_stops_rows(), out=stops)
        doses = dict(zip(_DIRECT, direct, strict=True))
        if stars and stops.any():
            from dosekit.maps.stars import carry_stars

            carry = partial(carry_stars, grid=self.grid, yields=self.yields, star_scale=self.star_scale)
            volume = stops.reshape(self.grid.shape)
            energies = carry(np.maximum(volume, 0.0))
            if stops.min() < 0.0:  # weights of any sign: the difference of two numbers of stops
                less = carry(np.maximum(-volume, 0.0))
                energies = {name: energy - less[name] for name, energy in energies.items()}
            for name, energy in energies.items():
                doses[name] = np.asarray(energy, dtype=np.float64).reshape(-1)[self.voxels] * self._star_factor
        for name in COMPONENTS:
            doses.setdefault(name, np.zeros(len(self.voxels)))
        return doses

    def _stops_wanted(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return what one stop in each voxel adds to the sum of values times dose."""
        from dosekit.maps.stars import carry_stars_transposed

        wanted = {}
        for name in STAR_COMPONENTS:
            volume = np.zeros(int(np.prod(self.grid.shape)))
            volume[self.voxels] = self.factors[name] * values * self._star_factor
            wanted[name] = volume.reshape(self.grid.shape)
        stops = carry_stars_transposed(wanted, self.grid, yields=self.yields, star_scale=self.star_scale)
        return np.asarray(stops, dtype=np.float64).reshape(1, -1)


def _finite(values: ArrayLike, what: str) -> NDArray[np.float64]:
    """Return a vector, or refuse it."""
    vector = np.asarray(values, dtype=np.float64).reshape(-1)
    if not np.isfinite(vector).all():
        raise InputError(f"{what} that are not finite", allowed="finite numbers", remedy=f"correct the {what}")
    return vector


def _direct_rows() -> NDArray[np.int64]:
    """Return the row of each target among the components that need no stars."""
    return np.array([_DIRECT.index(name) if name in _DIRECT else -1 for name in TARGETS])


def _stops_rows() -> NDArray[np.int64]:
    """Return the row of each target when only stops are wanted."""
    return np.array([0 if name == "stops" else -1 for name in TARGETS])


def _chosen(voxels: ArrayLike | None, grid: VoxelGrid) -> NDArray[np.int64]:
    """Return flat indices in rising order."""
    count = int(np.prod(grid.shape))
    if voxels is None:
        return np.arange(count, dtype=np.int64)
    given: NDArray[Any] = np.asarray(voxels)
    if given.dtype == np.bool_ and given.shape == tuple(grid.shape):
        return np.flatnonzero(given).astype(np.int64)
    flat = given.astype(np.int64).reshape(-1)
    if len(flat) and (flat.min() < 0 or flat.max() >= count or np.any(np.diff(flat) <= 0)):
        raise InputError(
            "voxel indices that do not rise or lie outside the volume",
            allowed=f"a mask of shape {grid.shape}, or rising flat indices below {count}",
            remedy="sort the indices",
        )
    return flat


def _factors_of(
    factors: Mapping[str, float | NDArray[np.float64]] | None, count: int
) -> dict[str, NDArray[np.float64]]:
    """Return one factor for each component."""
    given = dict.fromkeys(COMPONENTS, 1.0) if factors is None else dict(factors)
    for name, factor in given.items():
        if name not in COMPONENTS:
            raise UnknownNameError("component", name, COMPONENTS)
        if np.shape(factor) not in {(), (count,)}:
            raise InputError(
                f"factors of shape {np.shape(factor)} for component {name!r}",
                allowed=f"one number, or one for each of {count} voxels",
                remedy="give the factors for the chosen voxels",
            )
    return {name: np.asarray(given.get(name, 0.0), dtype=np.float64) for name in COMPONENTS}

"""Do two dose maps agree?  The gamma index of a reference and an evaluated map.

For every reference point ``r`` with dose ``D``::

    gamma(r) = min over r' of sqrt( |r' - r|^2 / distance^2 + (D'(r') - D(r))^2 / tolerance^2 )

Source: Low, Harms, Mutic & Purdy, Med. Phys. 25 (1998) 656, equations 3-5.  A point passes with ``gamma <=
1``. The dose tolerance is a percentage of one dose (global) or of the local reference dose (local).  The
evaluated map is interpolated linearly on every axis at a lattice of points around ``r``; the lattice step
is one tenth of the distance tolerance unless stated, which bounds the overestimate of gamma by half a
lattice step over the distance tolerance.

Validity: maps on evenly spaced grids with axes along each other; one, two or three dimensions.  Points
outside the evaluated grid are never invented: a reference point with no lattice point inside it gets no
index (NaN).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

__all__ = ["Agreement", "gamma_index"]

_DIMENSIONS = 3


@dataclass(frozen=True)
class Agreement:
    """Outcome of a comparison of two dose maps.

    Parameters
    ----------
    gamma : ndarray
        Index per reference point, NaN where it was not asked (below the threshold) or cannot be given.
    pass_share : float
        Share of the judged points with an index not above 1.
    judged : int
        Number of judged points.
    distance_mm, dose_percent : float
        Tolerances.
    local : bool
        Whether the dose tolerance follows the local dose.
    """

    gamma: NDArray[np.float64]
    pass_share: float
    judged: int
    distance_mm: float
    dose_percent: float
    local: bool


def gamma_index(
    reference_gy: ArrayLike,
    evaluated_gy: ArrayLike,
    *,
    spacing_mm: float | Sequence[float],
    distance_mm: float = 3.0,
    dose_percent: float = 3.0,
    local: bool = False,
    threshold_percent: float = 10.0,
    normalisation_gy: float | None = None,
    origin_mm: Sequence[float] | None = None,
    evaluated_spacing_mm: float | Sequence[float] | None = None,
    evaluated_origin_mm: Sequence[float] | None = None,
    step_mm: float | None = None,
    largest_gamma: float = 2.0,
) -> Agreement:
    """Compare two dose maps by the gamma index.

    Parameters
    ----------
    reference_gy, evaluated_gy : array_like
        Doses with one, two or three axes, in Gy.
    spacing_mm : float or sequence
        Distance of the points along each array axis, in array order (z, y, x for a volume), in mm.
    distance_mm, dose_percent : float
        Tolerances.
    local : bool
        Take the percentage of the local reference dose instead of `normalisation_gy`.
    threshold_percent : float
        Reference points below this percentage of `normalisation_gy` are not judged.
    normalisation_gy : float, optional
        Dose that the percentages refer to; the reference maximum when absent.
    origin_mm, evaluated_origin_mm : sequence, optional
        Place of the first point along each array axis; zero when absent (evaluated: as the reference).
    evaluated_spacing_mm : float or sequence, optional
        Spacing of the evaluated map; that of the reference when absent.
    step_mm : float, optional
        Step of the search lattice; one tenth of `distance_mm` when absent.
    largest_gamma : float
        The search ends at this index; larger ones are reported as this value.

    Returns
    -------
    Agreement
        The index per point and the share that passes.

    Raises
    ------
    InputError
        Maps of different or unfit dimension, tolerances that are not positive, no point above the threshold.

    Examples
    --------
    >>> result = gamma_index([0.0, 1.0, 2.0], [0.0, 1.0, 2.0], spacing_mm=1.0)
    >>> result.pass_share, result.judged
    (1.0, 2)
    """
    reference = np.asarray(reference_gy, dtype=np.float64)
    evaluated = np.asarray(evaluated_gy, dtype=np.float64)
    dimensions = reference.ndim
    if not 1 <= dimensions <= _DIMENSIONS or evaluated.ndim != dimensions:
        raise InputError(
            f"maps with {reference.ndim} and {evaluated.ndim} axes",
            allowed="both with the same number of axes, 1 to 3",
            remedy="compare maps of one kind",
        )
    for value, what in (
        (distance_mm, "distance tolerance"),
        (dose_percent, "dose tolerance"),
        (largest_gamma, "largest index"),
    ):
        if not value > 0.0:
            raise InputError(f"a {what} of {value}", allowed="above 0", remedy="3 mm and 3 percent are customary")
    if not (np.all(np.isfinite(reference)) and np.all(np.isfinite(evaluated))):
        raise InputError("a dose that is not a number", allowed="finite doses", remedy="look for NaN in the maps")
    top = float(reference.max()) if normalisation_gy is None else float(normalisation_gy)
    spacing = _triple(spacing_mm, dimensions)
    other_spacing = spacing if evaluated_spacing_mm is None else _triple(evaluated_spacing_mm, dimensions)
    origin = _triple(0.0 if origin_mm is None else origin_mm, dimensions, filler=0.0)
    other_origin = origin if evaluated_origin_mm is None else _triple(evaluated_origin_mm, dimensions, filler=0.0)
    if not (np.all(spacing > 0.0) and np.all(other_spacing > 0.0)):
        raise InputError("a spacing that is not positive", allowed="above 0 mm", remedy="give the grid spacing")
    volume = reference.reshape((1,) * (_DIMENSIONS - dimensions) + reference.shape)
    other = evaluated.reshape((1,) * (_DIMENSIONS - dimensions) + evaluated.shape)
    judged = (volume >= threshold_percent / 100.0 * top) & (volume > 0.0)
    chosen = np.flatnonzero(judged)
    if chosen.size == 0:
        raise InputError(
            f"no reference point at or above {threshold_percent} percent of {top:g} Gy",
            allowed="at least one point with dose",
            remedy="lower the threshold or check the maps",
        )
    tolerance = dose_percent / 100.0 * (volume.ravel()[chosen] if local else np.full(chosen.size, top))
    step = distance_mm / 10.0 if step_mm is None else float(step_mm)
    if not step > 0.0:
        raise InputError(f"a search step of {step} mm", allowed="above 0", remedy="a tenth of the distance tolerance")
    steps = math.floor(largest_gamma * distance_mm / step + 1e-9)
    reach = np.array([0] * (_DIMENSIONS - dimensions) + [steps] * dimensions)
    low, high = _cell_extremes(other)
    cells, cell_squares = _cells_around(reach * step, other_spacing, distance_mm)
    from dosekit.effects.kernels import search_agreement  # compiled code is loaded only when needed

    found = np.empty(chosen.size)
    search_agreement(
        np.ascontiguousarray(volume), origin, spacing, chosen, tolerance,
        np.ascontiguousarray(other), other_origin, other_spacing, low, high,
        cells, cell_squares, step, reach, float(distance_mm), float(largest_gamma) ** 2, found,
    )  # fmt: skip
    gamma = np.full(reference.size, np.nan)
    gamma[chosen] = found
    given = found[~np.isnan(found)]
    return Agreement(
        gamma=gamma.reshape(reference.shape),
        pass_share=float(np.mean(given <= 1.0)) if given.size else float("nan"),
        judged=int(given.size),
        distance_mm=float(distance_mm),
        dose_percent=float(dose_percent),
        local=bool(local),
    )


def _cell_extremes(dose: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give the smallest and largest corner dose of every cell between neighbouring points."""
    low = high = dose
    for axis, length in enumerate(dose.shape):
        if length > 1:
            first: list[slice] = [slice(None)] * dose.ndim
            second = list(first)
            first[axis], second[axis] = slice(0, -1), slice(1, None)
            low = np.minimum(low[tuple(first)], low[tuple(second)])
            high = np.maximum(high[tuple(first)], high[tuple(second)])
    return np.ascontiguousarray(low), np.ascontiguousarray(high)


def _cells_around(
    reach_mm: NDArray[np.float64], spacing_mm: NDArray[np.float64], distance_mm: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """List the cells around the one a point lies in, by their least possible squared distance."""
    ends = [math.ceil(reach / width) + 1 for reach, width in zip(reach_mm, spacing_mm, strict=True)]
    lines = [np.arange(-end, end + 1) for end in ends]
    cells = np.stack([part.ravel() for part in np.meshgrid(*lines, indexing="ij")], axis=1)
    least = np.maximum(np.abs(cells) - 1, 0) * spacing_mm / distance_mm * (1.0 - 1e-9)
    squares = np.sum(least**2, axis=1)
    order = np.lexsort((cells[:, 2], cells[:, 1], cells[:, 0], np.sum(cells**2, axis=1), squares))
    return np.ascontiguousarray(cells[order]), np.ascontiguousarray(squares[order])


def _triple(value: float | Sequence[float], dimensions: int, *, filler: float = 1.0) -> NDArray[np.float64]:
    """Spread a number or a sequence over three axes, unused leading ones filled."""
    given = np.broadcast_to(np.asarray(value, dtype=np.float64), (dimensions,))
    return np.concatenate([np.full(_DIMENSIONS - dimensions, filler), given])

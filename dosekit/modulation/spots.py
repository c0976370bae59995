"""Where does a field put its spots to cover a target?

The target is seen along the field: every point of it is brought to the plane of the isocentre, straight for
a parallel beam, towards the source otherwise.  Spots lie on a lattice through the isocentre (square, or
hexagonal with rows 0.866 spacings apart), wherever the target's shadow is no farther than the margin.

What it does not do: it knows nothing of what lies before the target; ranges and weights are chosen elsewhere.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import InputError, SizeError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["SPOT_PATTERNS", "shadow_mm", "spots_over_shadow"]

SPOT_PATTERNS: tuple[str, ...] = ("square", "hexagonal")
"""Kinds of lattice."""

_MOST_SPOTS = 200_000


def shadow_mm(points_mm: ArrayLike, *, source_distance_mm: float | None = None) -> NDArray[np.float64]:
    """Project points along a field to the plane of the isocentre.

    Parameters
    ----------
    points_mm : array_like, shape (n, 3)
        Points in the field's axes: u, v, and w along the beam, isocentre at zero, mm.
    source_distance_mm : float, optional
        Distance from source to isocentre; parallel when absent.

    Returns
    -------
    ndarray, shape (n, 2)
        (u, v) in the plane of the isocentre, mm.

    Raises
    ------
    InputError
        If a point lies at or before the source.

    Examples
    --------
    >>> shadow_mm([[10.0, 0.0, 1000.0]], source_distance_mm=1000.0).tolist()
    [[5.0, 0.0]]
    """
    points = np.asarray(points_mm, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != 3:
        raise InputError(f"points of shape {points.shape}", allowed="shape (n, 3)", remedy="give u, v, w for each")
    if source_distance_mm is None:
        return np.array(points[:, :2])
    distance = source_distance_mm + points[:, 2]
    if not source_distance_mm > 0.0 or np.any(distance <= 0.0):
        raise InputError(
            f"a source {source_distance_mm:g} mm from the isocentre with points behind it",
            allowed="a source before all points",
            remedy="enlarge the source distance",
        )
    return np.asarray(points[:, :2] * (source_distance_mm / distance)[:, None])


def spots_over_shadow(
    shadow: ArrayLike,
    *,
    spacing_mm: float,
    margin_mm: float = 0.0,
    point_mm: float = 0.0,
    pattern: str = "square",
) -> NDArray[np.float64]:
    """Lay a lattice of spots over a shadow.

    Parameters
    ----------
    shadow : array_like, shape (n, 2)
        Points of the target in the plane of the isocentre, mm.
    spacing_mm : float
        Distance between neighbouring spots, mm.
    margin_mm : float
        Spots up to this far from the shadow are kept, mm.
    point_mm : float
        Width of the square that each point stands for (a voxel), mm; half its diagonal is added to the
        margin.
    pattern : str
        ``square`` or ``hexagonal``.

    Returns
    -------
    ndarray, shape (m, 2)
        Spots (u, v) by rows of rising v, each of rising u; a lattice point lies at (0, 0).

    Raises
    ------
    InputError, SizeError
        No points, a spacing that is not positive, no spot within reach, too many spots.

    Examples
    --------
    >>> spots_over_shadow([[0.0, 0.0]], spacing_mm=5.0, margin_mm=5.0).tolist()
    [[0.0, -5.0], [-5.0, 0.0], [0.0, 0.0], [5.0, 0.0], [0.0, 5.0]]
    """
    from scipy.spatial import cKDTree

    points = np.asarray(shadow, dtype=np.float64)
    if points.ndim != 2 or points.shape[1:] != (2,) or len(points) == 0 or not np.all(np.isfinite(points)):
        raise InputError(
            f"a shadow of shape {points.shape}", allowed="finite (u, v) pairs, at least one", remedy="check the target"
        )
    if pattern not in SPOT_PATTERNS:
        raise InputError(f"spot pattern {pattern!r}", allowed=", ".join(SPOT_PATTERNS), remedy="choose one of these")
    if not 0.0 < spacing_mm < np.inf or not 0.0 <= margin_mm < np.inf or not 0.0 <= point_mm < np.inf:
        raise InputError(
            f"spot spacing {spacing_mm} mm, margin {margin_mm} mm, point {point_mm} mm",
            allowed="a spacing above 0, margin and point of 0 or more",
            remedy="correct them",
        )
    row = spacing_mm * (np.sqrt(0.75) if pattern == "hexagonal" else 1.0)
    reach = margin_mm + point_mm * np.sqrt(0.5)
    low = np.floor((points.min(axis=0) - reach) / (spacing_mm, row)).astype(int) - 1
    high = np.ceil((points.max(axis=0) + reach) / (spacing_mm, row)).astype(int) + 1
    if float(np.prod((high - low + 1).astype(np.float64))) > 4 * _MOST_SPOTS:
        raise SizeError("a lattice of too many spots", allowed=f"at most {_MOST_SPOTS}", remedy="widen the spacing")
    v_index, u_index = np.meshgrid(np.arange(low[1], high[1] + 1), np.arange(low[0], high[0] + 1), indexing="ij")
    half = 0.5 * (np.abs(v_index) % 2) if pattern == "hexagonal" else 0.0
    lattice = np.stack([(u_index + half).ravel() * spacing_mm, v_index.ravel() * row], axis=1)
    distance, _ = cKDTree(points).query(lattice)
    spots = lattice[distance <= reach + 1e-9]
    if len(spots) == 0:
        raise InputError(
            f"no spot within {reach:g} mm of the target",
            allowed="at least one spot",
            remedy="use a smaller spacing or a larger margin",
        )
    return np.asarray(spots)

"""Where is the body? Its outline from density, when no structure gives it.

The largest connected part denser than a threshold is taken, thin bridges (a couch touching the back) are cut by an
opening, and cavities are filled slice by slice and then in the volume, so that lungs and airways count as body.
It does not know anatomy: an arm apart from the trunk is left out, a dense couch pressed flat to the skin may remain.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["BODY_DENSITY_G_CM3", "outline_from_density"]

BODY_DENSITY_G_CM3 = 0.4
"""Denser than this may be body, g/cm3 (a choice: between lung, 0.26, and fat, 0.95)."""


def outline_from_density(
    density_g_cm3: NDArray[Any],
    *,
    threshold_g_cm3: float = BODY_DENSITY_G_CM3,
    opening_voxels: int = 0,
    fill_slices: bool = True,
) -> NDArray[np.bool_]:
    """Return the mask of the body.

    Parameters
    ----------
    density_g_cm3 : ndarray
        Density [z, y, x], g/cm3.
    threshold_g_cm3 : float
        Denser voxels may be body.
    opening_voxels : int
        Bridges in a slice up to twice this many voxels wide are cut.
    fill_slices : bool
        Fill cavities slice by slice (a lung cut by the volume's end), not only those closed on all sides.

    Returns
    -------
    ndarray
        Mask [z, y, x], bool; all False when nothing is dense enough.

    Examples
    --------
    >>> density = np.zeros((3, 9, 9))
    >>> density[:, 2:7, 2:7] = 1.0
    >>> density[:, 4, 4] = 0.0
    >>> int(outline_from_density(density).sum())
    75
    """
    from scipy import ndimage

    outline = np.zeros(np.shape(density_g_cm3), dtype=bool)
    whole = np.asarray(density_g_cm3) > threshold_g_cm3
    box = tuple(
        slice(int(found[0]), int(found[-1]) + 1) if found.size else slice(0, 0)
        for found in (np.flatnonzero(whole.any(axis=others)) for others in ((1, 2), (0, 2), (0, 1)))
    )
    dense = whole[box]
    kept = dense
    if opening_voxels > 0:
        disc = _disc(opening_voxels)
        kept = ndimage.binary_erosion(dense, disc[np.newaxis])
    labels, count = ndimage.label(kept)
    if count == 0:
        return outline
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    body: NDArray[np.bool_] = labels == int(sizes.argmax())
    if opening_voxels > 0:
        body = ndimage.binary_dilation(body, disc[np.newaxis]) & dense
    if fill_slices:
        for plane in range(body.shape[0]):
            body[plane] = ndimage.binary_fill_holes(body[plane])
    outline[box] = ndimage.binary_fill_holes(body)
    return outline


def _disc(radius: int) -> NDArray[np.bool_]:
    """Return a disc of voxels of the given radius."""
    y, x = np.ogrid[-radius : radius + 1, -radius : radius + 1]
    disc: NDArray[np.bool_] = x * x + y * y <= radius * radius
    return disc

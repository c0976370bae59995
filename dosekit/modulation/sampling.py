"""Which voxels of a structure may stand for the others in a search for weights?

Dose changes over millimetres at a structure's edge, and over the width of a spot inside it.  Of the voxels at the edge
all that lie on a lattice of reach `EDGE_MM` are kept, of the others those on a lattice of reach `INNER_MM`; the
lattice takes the corners and the middles of blocks of ``s`` voxels a side, with ``s`` the largest number of
voxels within its reach, so that voxels wider than half the reach are all kept.  The share of the structure's volume
that edge and inside stand for stays what it was.

The choice follows from the indices alone: the same volume, the same voxels.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["EDGE_MM", "INNER_MM", "thinned_coverage"]

#: Reach of the lattice at the edge of a structure, mm.
EDGE_MM = 4.0
#: Reach of the lattice inside a structure, mm: about the spacing of spots.
INNER_MM = 8.0


def thinned_coverage(
    coverage: NDArray[np.float32], *, spacing_mm: tuple[float, float, float], edges: bool = True
) -> NDArray[np.float32]:
    """Keep some voxels of a structure, which stand for all of it.

    Parameters
    ----------
    coverage : ndarray [z, y, x]
        Share of each voxel inside the structure.
    spacing_mm : tuple of float
        Size of a voxel (x, y, z), mm.
    edges : bool
        Keep more voxels at the edge than inside; otherwise the inner lattice holds everywhere.

    Returns
    -------
    ndarray of float32 [z, y, x]
        Share that each kept voxel stands for, in voxels; 0 elsewhere.  The sum is that of the coverage.

    Examples
    --------
    >>> cube = np.ones((20, 20, 20), dtype=np.float32)
    >>> kept = thinned_coverage(cube, spacing_mm=(4.0, 4.0, 4.0))
    >>> int(np.count_nonzero(kept)) < 6000, round(float(kept.sum(dtype=float)))
    (True, 8000)
    """
    from scipy.ndimage import distance_transform_edt

    sampling = spacing_mm[::-1]
    covered = coverage > 0.0
    out = np.zeros_like(coverage, dtype=np.float32)
    if not covered.any():
        return out
    inner = covered
    if edges:
        padded = np.pad(coverage >= 1.0, 1)
        depth = distance_transform_edt(padded, sampling=sampling)[1:-1, 1:-1, 1:-1]
        inner = depth > max(EDGE_MM, 1.01 * max(sampling))
    for group, reach in ((inner, INNER_MM), (covered & ~inner, EDGE_MM)):
        if not group.any():
            continue
        chosen = group & _lattice(coverage.shape, sampling, reach)
        if not chosen.any():
            chosen = group
        whole = float(coverage[group].sum(dtype=np.float64))
        kept = float(coverage[chosen].sum(dtype=np.float64))
        out[chosen] = coverage[chosen] * np.float32(whole / kept)
    return out


def _lattice(shape: tuple[int, ...], sampling_mm: tuple[float, ...], reach_mm: float) -> NDArray[np.bool_]:
    """Mark the corners and middles of blocks of voxels."""
    corner, middle = np.ones((), dtype=bool), np.ones((), dtype=bool)
    for axis, (count, spacing) in enumerate(zip(shape, sampling_mm, strict=True)):
        size = max(int((reach_mm + 1e-6) / spacing), 1)
        place = np.arange(count) % size
        wide = [1] * len(shape)
        wide[axis] = count
        corner = corner & (place == 0).reshape(wide)
        middle = middle & (place == size // 2).reshape(wide)
    return np.asarray(corner | middle)

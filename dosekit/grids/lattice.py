"""A lattice of voxels along the patient axes: where are the centres, the edges and the corners?

Axes are DICOM patient axes (LPS); points and spacings are (x, y, z) in mm, shapes and indices (z, y, x).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from dosekit.errors import GridError, UnknownNameError

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["OnLattice", "triple"]

_AXES = {"x": 0, "y": 1, "z": 2}


class OnLattice:
    """Something that lies on a lattice of voxels.

    Attributes
    ----------
    origin_mm, spacing_mm : tuple of float
        Centre of voxel [0, 0, 0] and spacing (x, y, z), mm.
    """

    origin_mm: tuple[float, float, float]
    spacing_mm: tuple[float, float, float]

    @property
    def shape(self) -> tuple[int, int, int]:
        """Return the number of voxels (z, y, x)."""
        raise NotImplementedError

    @property
    def voxel_volume_mm3(self) -> float:
        """Return the volume of one voxel, mm3."""
        return self.spacing_mm[0] * self.spacing_mm[1] * self.spacing_mm[2]

    @property
    def lower_mm(self) -> tuple[float, float, float]:
        """Return the lower corner of the volume (x, y, z), mm; voxels are counted in full."""
        x, y, z = (o - 0.5 * s for o, s in zip(self.origin_mm, self.spacing_mm, strict=True))
        return x, y, z

    @property
    def upper_mm(self) -> tuple[float, float, float]:
        """Return the upper corner of the volume (x, y, z), mm."""
        counts = self.shape[::-1]
        x, y, z = (o + (n - 0.5) * s for o, n, s in zip(self.origin_mm, counts, self.spacing_mm, strict=True))
        return x, y, z

    def centres_mm(self, axis: str) -> NDArray[np.float64]:
        """Return the voxel centres along an axis.

        Parameters
        ----------
        axis : {"x", "y", "z"}
            The patient axis.

        Returns
        -------
        ndarray
            Positions, mm, increasing.
        """
        which = _axis(axis)
        return self.origin_mm[which] + self.spacing_mm[which] * np.arange(self.shape[2 - which], dtype=float)

    def edges_mm(self, axis: str) -> NDArray[np.float64]:
        """Return the voxel edges along an axis.

        Parameters
        ----------
        axis : {"x", "y", "z"}
            The patient axis.

        Returns
        -------
        ndarray
            One position more than there are voxels, mm, increasing.
        """
        which = _axis(axis)
        steps = np.arange(self.shape[2 - which] + 1, dtype=np.float64) - 0.5
        return np.asarray(self.origin_mm[which] + self.spacing_mm[which] * steps)

    def same_geometry(self, other: OnLattice, *, tolerance_mm: float = 1e-4) -> bool:
        """Say whether two volumes lie on the same lattice.

        Parameters
        ----------
        other : OnLattice
            The volume to compare with.
        tolerance_mm : float
            Largest distance between matching corners, mm.

        Returns
        -------
        bool
            True when every voxel of one lies on the same voxel of the other.
        """
        corners = zip(self.lower_mm + self.upper_mm, other.lower_mm + other.upper_mm, strict=True)
        return self.shape == other.shape and all(abs(a - b) <= tolerance_mm for a, b in corners)

    def index_box(
        self, lower_mm: Sequence[float], upper_mm: Sequence[float]
    ) -> tuple[tuple[int, int, int], tuple[int, int, int]]:
        """Return which voxels have their centres in a box.

        Parameters
        ----------
        lower_mm, upper_mm : sequence of float
            Corners of the box (x, y, z), mm.

        Returns
        -------
        tuple
            First voxel (z, y, x), and one past the last (z, y, x), both inside the volume.
        """
        first, last = [], []
        for axis in (2, 1, 0):
            count = self.shape[2 - axis]
            low = (lower_mm[axis] - self.origin_mm[axis]) / self.spacing_mm[axis]
            high = (upper_mm[axis] - self.origin_mm[axis]) / self.spacing_mm[axis]
            first.append(int(np.clip(np.ceil(low - 1e-6), 0, count)))
            last.append(int(np.clip(np.floor(high + 1e-6) + 1, 0, count)))
        return (first[0], first[1], first[2]), (last[0], last[1], last[2])

    def offset_in(self, whole: OnLattice) -> tuple[int, int, int]:
        """Return where this volume lies on the lattice of another.

        Parameters
        ----------
        whole : OnLattice
            A volume on the same lattice, e.g. the one this was cropped from.

        Returns
        -------
        tuple of int
            Index (z, y, x) of this volume's first voxel in the other.

        Raises
        ------
        GridError
            When the lattices differ.
        """
        steps = [(a - b) / s for a, b, s in zip(self.origin_mm, whole.origin_mm, whole.spacing_mm, strict=True)]
        same = np.allclose(self.spacing_mm, whole.spacing_mm, rtol=1e-6, atol=0.0)
        if not same or any(abs(step - round(step)) > 1e-3 for step in steps):
            raise GridError(
                "two volumes on different lattices",
                allowed="volumes with the same spacing and whole steps between them",
                remedy="resample one of them",
            )
        return round(steps[2]), round(steps[1]), round(steps[0])


def _axis(letter: str) -> int:
    """Return the index of an axis by its letter."""
    try:
        return _AXES[letter]
    except KeyError:
        raise UnknownNameError("axis", letter, _AXES) from None


def triple(values: Sequence[float], what: str) -> tuple[float, float, float]:
    """Return three finite numbers, or say what is wrong.

    Parameters
    ----------
    values : sequence of float
        The numbers.
    what : str
        What they are, for the message.

    Returns
    -------
    tuple of float
        (x, y, z).

    Raises
    ------
    GridError
        When they are not three finite numbers.
    """
    try:
        x, y, z = (float(v) for v in values)
    except (TypeError, ValueError):
        raise GridError(f"{what} {values!r}", allowed="three numbers (x, y, z), mm", remedy="correct it") from None
    if not all(np.isfinite((x, y, z))):
        raise GridError(f"{what} {values!r}", allowed="three finite numbers, mm", remedy="correct it")
    return x, y, z

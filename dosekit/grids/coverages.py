"""Structures of a volume: which share of each voxel belongs to them.

A structure is an array of coverage, 0 (outside) to 1 (inside), of the volume's shape. Most structures are small, so
only their box is stored; the full array is made when it is asked for.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import GridError, UnknownNameError
from dosekit.grids.lattice import OnLattice, triple

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["BoxedCoverage", "Coverages", "WithStructures"]


@dataclass(frozen=True, eq=False)
class BoxedCoverage:
    """Coverage inside a box of voxels, nothing outside it.

    Parameters
    ----------
    start : tuple of int
        First voxel of the box, (z, y, x).
    values : ndarray
        Coverage in the box [z, y, x], float32, 0 to 1.
    """

    start: tuple[int, int, int]
    values: NDArray[np.float32]

    @property
    def slices(self) -> tuple[slice, slice, slice]:
        """Return where the box lies in the volume, as slices (z, y, x)."""
        z, y, x = (slice(first, first + count) for first, count in zip(self.start, self.values.shape, strict=True))
        return z, y, x

    def dense(self, shape: tuple[int, int, int]) -> NDArray[np.float32]:
        """Return the coverage of the whole volume.

        Parameters
        ----------
        shape : tuple of int
            Shape of the volume (z, y, x).

        Returns
        -------
        ndarray
            Coverage [z, y, x], float32.
        """
        full = np.zeros(shape, dtype=np.float32)
        full[self.slices] = self.values
        return full

    @classmethod
    def from_dense(cls, coverage: NDArray[Any]) -> BoxedCoverage:
        """Store a full array by its box.

        Parameters
        ----------
        coverage : ndarray
            Coverage or mask [z, y, x].

        Returns
        -------
        BoxedCoverage
            The same coverage.
        """
        occupied = coverage != 0
        bounds = []
        for axis in range(3):
            others = tuple(other for other in range(3) if other != axis)
            found = np.flatnonzero(occupied.any(axis=others))
            bounds.append((int(found[0]), int(found[-1]) + 1) if found.size else (0, 0))
        box = tuple(slice(first, last) for first, last in bounds)
        values = np.array(coverage[box], dtype=np.float32)
        return cls((bounds[0][0], bounds[1][0], bounds[2][0]), values)


class Coverages(Mapping[str, "NDArray[np.float32]"]):
    """Named structures of one volume; a mapping from name to coverage [z, y, x].

    Parameters
    ----------
    shape : tuple of int
        Shape of the volume (z, y, x).
    structures : mapping
        Name to coverage: a full array, a boolean mask or a `BoxedCoverage`.

    Raises
    ------
    GridError
        When a structure does not fit the volume or is not between 0 and 1.

    Examples
    --------
    >>> mask = np.zeros((4, 4, 4), dtype=bool)
    >>> mask[1, 2, 3] = True
    >>> structures = Coverages((4, 4, 4), {"target": mask})
    >>> float(structures["target"].sum()), structures.boxed("target").start
    (1.0, (1, 2, 3))
    """

    def __init__(self, shape: tuple[int, int, int], structures: Mapping[str, NDArray[Any] | BoxedCoverage]) -> None:
        self._shape = shape
        self._boxes: dict[str, BoxedCoverage] = {}
        own = isinstance(structures, Coverages)
        for name in structures:
            given = structures.boxed(name) if isinstance(structures, Coverages) else structures[name]
            if not isinstance(given, BoxedCoverage):
                array = np.asarray(given)
                if array.shape != shape:
                    raise GridError(
                        f"structure {name!r} has shape {array.shape}",
                        allowed=f"the shape of its volume, {shape}",
                        remedy="resample the structure onto the volume",
                    )
                given = BoxedCoverage.from_dense(array)
            if not own:
                _check_box(name, given, shape)
            given.values.setflags(write=False)
            self._boxes[str(name)] = given

    def __getitem__(self, name: str) -> NDArray[np.float32]:
        """Return the full coverage of a structure."""
        return self._boxes[name].dense(self._shape)

    def __iter__(self) -> Iterator[str]:
        """Go through the names in the order they were given."""
        return iter(self._boxes)

    def __len__(self) -> int:
        """Count the structures."""
        return len(self._boxes)

    def __repr__(self) -> str:
        """Show the names."""
        return f"Coverages({list(self._boxes)})"

    def boxed(self, name: str) -> BoxedCoverage:
        """Return a structure as it is stored.

        Parameters
        ----------
        name : str
            The exact name.

        Returns
        -------
        BoxedCoverage
            The box and its values.
        """
        return self._boxes[name]


class WithStructures(OnLattice):
    """Something on a lattice that has structures.

    Attributes
    ----------
    structures : Coverages
        Name to coverage.
    roles : mapping
        Name to what the structure is for.
    """

    structures: Mapping[str, NDArray[np.float32]]
    roles: Mapping[str, str]

    def structure_name(self, name: str) -> str:
        """Return the exact name of a structure, found without regard to case.

        Parameters
        ----------
        name : str
            The name as the user writes it.

        Returns
        -------
        str
            The name as the volume has it.

        Raises
        ------
        UnknownNameError
            When there is no such structure, or several differ by case only; the nearest name is suggested.
        """
        if name in self.structures:
            return name
        matches = [known for known in self.structures if known.strip().lower() == name.strip().lower()]
        if len(matches) != 1:
            raise UnknownNameError("structure", name, self.structures)
        return matches[0]

    def structure(self, name: str) -> NDArray[np.float32]:
        """Return the coverage of a structure, found without regard to case.

        Parameters
        ----------
        name : str
            The name of the structure.

        Returns
        -------
        ndarray
            Coverage 0..1 [z, y, x], float32.
        """
        return self.structures[self.structure_name(name)]

    def role(self, name: str) -> str:
        """Return what a structure is for, as `voxels.ROLES` lists them.

        Parameters
        ----------
        name : str
            The name of the structure.

        Returns
        -------
        str
            The role; ``"other"`` when none was given.
        """
        return self.roles.get(self.structure_name(name), "other")

    def volume_cm3(self, name: str) -> float:
        """Return the volume of a structure, cm3.

        Parameters
        ----------
        name : str
            The name of the structure.

        Returns
        -------
        float
            Sum of coverage times voxel volume.
        """
        box = self._boxed(name)
        return float(box.values.sum(dtype=np.float64)) * self.voxel_volume_mm3 * 1e-3

    def centroid_mm(self, name: str) -> tuple[float, float, float]:
        """Return the centre of a structure, weighted by coverage.

        Parameters
        ----------
        name : str
            The name of the structure.

        Returns
        -------
        tuple of float
            (x, y, z), mm.

        Raises
        ------
        GridError
            When the structure covers no voxel.
        """
        box = self._boxed(name)
        weights = box.values.astype(np.float64)
        total = float(weights.sum())
        if total <= 0.0:
            raise GridError(
                f"structure {name!r} covers no voxel of the volume",
                allowed="a structure inside the volume",
                remedy="check the structure, or use a finer spacing",
            )
        z, y, x = (
            float((weights.sum(axis=tuple(other for other in range(3) if other != axis)) * positions).sum()) / total
            for axis, positions in enumerate(
                self.centres_mm(letter)[part] for letter, part in zip("zyx", box.slices, strict=True)
            )
        )
        return x, y, z

    def bounds_mm(self, name: str) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
        """Return the box of voxels around a structure.

        Parameters
        ----------
        name : str
            The name of the structure.

        Returns
        -------
        tuple
            Lower and upper corner (x, y, z), mm.
        """
        box = self._boxed(name)
        if 0 in box.values.shape:
            self.centroid_mm(name)  # raises
        lower = tuple(self.edges_mm(a)[s.start] for a, s in zip("xyz", box.slices[::-1], strict=True))
        upper = tuple(self.edges_mm(a)[s.stop] for a, s in zip("xyz", box.slices[::-1], strict=True))
        return triple(lower, "corner"), triple(upper, "corner")

    def _boxed(self, name: str) -> BoxedCoverage:
        """Return a structure as it is stored."""
        structures = self.structures
        assert isinstance(structures, Coverages)
        return structures.boxed(self.structure_name(name))


def _check_box(name: str, box: BoxedCoverage, shape: tuple[int, int, int]) -> None:
    """Refuse boxes that leave the volume or hold anything but shares."""
    ends = tuple(first + count for first, count in zip(box.start, box.values.shape, strict=True))
    if min(box.start) < 0 or any(end > size for end, size in zip(ends, shape, strict=True)):
        raise GridError(
            f"structure {name!r} spans voxels {box.start} to {ends}",
            allowed=f"voxels of a volume of shape {shape}",
            remedy="crop the structure to the volume",
        )
    if box.values.size and not (box.values.min() >= 0.0 and box.values.max() <= 1.0 + 1e-6):
        raise GridError(
            f"structure {name!r} holds coverage outside 0 to 1 (or not a number)",
            allowed="shares of a voxel between 0 and 1",
            remedy="divide by the largest value, or give a boolean mask",
        )

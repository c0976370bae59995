"""Cutting a volume into the three planes that figures show, with their extents and letters.

Views, for a volume on DICOM patient axes (x to the left, y to the back, z to the head):

* transverse, seen from the feet: right of the patient at the left of the picture, front at the top;
* coronal, seen from the front: right of the patient at the left, head at the top;
* sagittal, seen from the left: front at the left, head at the top.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import GridError, UnknownNameError

if TYPE_CHECKING:
    import xarray as xr

    from dosekit.grids.voxels import VoxelGrid

__all__ = ["PLANES", "DoseVolume", "Plane", "Slice", "cut", "dose_volume", "plane", "shown_box_mm"]

_AXES = "xyz"
_MARGIN_MM = 8.0
_SHOWN_DENSITY_G_CM3 = 0.15


@dataclass(frozen=True)
class Plane:
    """One way of looking at a volume.

    Parameters
    ----------
    name : str
        Its name.
    fixed, horizontal, vertical : str
        The axis that is cut, and those that run across and up or down the picture.
    upwards : bool
        Whether the vertical axis grows towards the top of the picture.
    letters : str
        Directions of the patient at the left, right, top and bottom of the picture.
    """

    name: str
    fixed: str
    horizontal: str
    vertical: str
    upwards: bool
    letters: str


PLANES = (
    Plane("transverse", "z", "x", "y", upwards=False, letters="RLAP"),
    Plane("coronal", "y", "x", "z", upwards=True, letters="RLSI"),
    Plane("sagittal", "x", "y", "z", upwards=True, letters="APSI"),
)


@dataclass(frozen=True)
class DoseVolume:
    """A dose summed over components, with the positions of its voxels.

    Parameters
    ----------
    gy : ndarray, shape (nz, ny, nx)
        Dose in Gy.
    x_mm, y_mm, z_mm : ndarray
        Voxel centres.
    """

    gy: NDArray[np.float32]
    x_mm: NDArray[np.float64]
    y_mm: NDArray[np.float64]
    z_mm: NDArray[np.float64]

    def centres_mm(self, axis: str) -> NDArray[np.float64]:
        """Return voxel centres along an axis."""
        return {"x": self.x_mm, "y": self.y_mm, "z": self.z_mm}[axis]

    @property
    def maximum_mm(self) -> tuple[float, float, float]:
        """Position (x, y, z) of the largest dose."""
        z, y, x = np.unravel_index(int(np.argmax(self.gy)), self.gy.shape)
        return float(self.x_mm[x]), float(self.y_mm[y]), float(self.z_mm[z])


@dataclass(frozen=True)
class Slice:
    """Values in one plane, rows along the vertical axis.

    Parameters
    ----------
    values : ndarray, shape (vertical, horizontal)
        The values.
    horizontal_mm, vertical_mm : ndarray
        Positions of columns and rows.
    """

    values: NDArray[np.float64]
    horizontal_mm: NDArray[np.float64]
    vertical_mm: NDArray[np.float64]

    @property
    def extent_mm(self) -> tuple[float, float, float, float]:
        """Outer edges: left, right, first row, last row."""
        dh, dv = _step_mm(self.horizontal_mm), _step_mm(self.vertical_mm)
        return (
            float(self.horizontal_mm[0] - dh / 2),
            float(self.horizontal_mm[-1] + dh / 2),
            float(self.vertical_mm[0] - dv / 2),
            float(self.vertical_mm[-1] + dv / 2),
        )


def plane(name: str) -> Plane:
    """Return a plane by name.

    Parameters
    ----------
    name : str
        ``"transverse"``, ``"coronal"`` or ``"sagittal"``.

    Returns
    -------
    Plane
        The plane.
    """
    for known in PLANES:
        if known.name == name:
            return known
    raise UnknownNameError("plane", name, [known.name for known in PLANES])


def dose_volume(dose: xr.Dataset, *, components: list[str] | None = None, variable: str = "dose") -> DoseVolume:
    """Sum a dose map over components.

    Parameters
    ----------
    dose : Dataset
        ``dose(component, z, y, x)`` or ``dose(z, y, x)`` on coordinates in mm.
    components : list of str, optional
        Which to sum; all without it.
    variable : str
        Name of the variable.

    Returns
    -------
    DoseVolume
        The sum and its positions.
    """
    array = dose[variable]
    if "component" in array.dims:
        array = array.transpose("component", "z", "y", "x")
        names = [str(name) for name in array["component"].values]
        chosen = names if components is None else components
        for name in chosen:
            if name not in names:
                raise UnknownNameError("component", name, names)
        gy = np.zeros(array.shape[1:], dtype=np.float32)
        for name in chosen:
            gy += np.asarray(array.values[names.index(name)], dtype=np.float32)
    else:
        gy = np.asarray(array.transpose("z", "y", "x").values, dtype=np.float32)
    x, y, z = (np.asarray(dose[axis].values, dtype=np.float64) for axis in _AXES)
    return DoseVolume(gy=gy, x_mm=x, y_mm=y, z_mm=z)


def cut(
    volume: NDArray[np.generic],
    centres_mm: dict[str, NDArray[np.float64]],
    view: Plane,
    *,
    at_mm: float,
) -> Slice:
    """Take the voxels nearest to a plane.

    Parameters
    ----------
    volume : ndarray, shape (nz, ny, nx)
        The values.
    centres_mm : dict of str to ndarray
        Voxel centres along x, y and z.
    view : Plane
        Which way to cut.
    at_mm : float
        Where, along the fixed axis.

    Returns
    -------
    Slice
        Copy of the values in that plane.
    """
    positions = centres_mm[view.fixed]
    half = _step_mm(positions) / 2
    if not positions[0] - half - 1e-6 <= at_mm <= positions[-1] + half + 1e-6:
        raise GridError(
            f"a {view.name} slice at {view.fixed} = {at_mm:g} mm",
            allowed=f"{positions[0] - half:g} to {positions[-1] + half:g} mm",
            remedy="choose a point inside the volume",
        )
    index = int(np.argmin(np.abs(positions - at_mm)))
    values = np.take(volume, index, axis="zyx".index(view.fixed))
    # The axes left over are in the order z, y, x; the vertical one comes first in each of the three views.
    return Slice(np.asarray(values, dtype=np.float64), centres_mm[view.horizontal], centres_mm[view.vertical])


def shown_box_mm(grid: VoxelGrid) -> dict[str, tuple[float, float]]:
    """Return the box around all matter denser than 0.15 g/cm3, with a margin, inside the volume.

    Parameters
    ----------
    grid : VoxelGrid
        The anatomy.

    Returns
    -------
    dict of str to (float, float)
        Limits along x, y and z in mm.
    """
    matter = np.asarray(grid.density_g_cm3) > _SHOWN_DENSITY_G_CM3
    box = {}
    for axis in _AXES:
        edges = np.asarray(grid.edges_mm(axis), dtype=np.float64)
        others = tuple(i for i, name in enumerate("zyx") if name != axis)
        held = np.flatnonzero(matter.any(axis=others))
        first, last = (int(held[0]), int(held[-1])) if len(held) else (0, len(edges) - 2)
        box[axis] = (
            max(float(edges[0]), float(edges[first]) - _MARGIN_MM),
            min(float(edges[-1]), float(edges[last + 1]) + _MARGIN_MM),
        )
    return box


def _step_mm(positions: NDArray[np.float64]) -> float:
    return float(positions[1] - positions[0]) if len(positions) > 1 else 1.0

"""A volume of voxels: density, material and structures on one lattice.

Axes are DICOM patient axes (LPS: x to the patient's left, y to the back, z to the head), the lattice is aligned
with them and every axis increases with its index. Arrays are indexed [z, y, x]; points and spacings are (x, y, z)
in millimetres; ``origin_mm`` is the centre of voxel [0, 0, 0].
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from dosekit.errors import GridError, UnknownNameError
from dosekit.grids.coverages import Coverages, WithStructures
from dosekit.grids.lattice import triple
from dosekit.grids.memory import check_memory

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from dosekit.basis.materials import Material

__all__ = ["ROLES", "VoxelGrid"]

ROLES = ("target", "organ_at_risk", "body", "other")
"""What a structure is for."""

_BODY_NAMES = ("body", "external", "outline", "skin", "patient")
_BYTES_PER_VOXEL = 6.0  # density float32 and material uint16
_BRIDGE_MM = 4.0  # half the width of what may join a couch to the body in a slice


@dataclass(frozen=True, eq=False)
class VoxelGrid(WithStructures):
    """A volume of voxels with density, material and structures.

    Parameters
    ----------
    origin_mm : tuple of float
        Centre of voxel [0, 0, 0], (x, y, z), mm, LPS.
    spacing_mm : tuple of float
        Distance between voxel centres (x, y, z), mm, above 0.
    density_g_cm3 : ndarray
        Density [z, y, x], float32, 0 or more.
    material_index : ndarray
        Index into `materials` [z, y, x], uint16.
    materials : tuple of Material
        The compositions; the density of a voxel comes from `density_g_cm3`.
    structures : mapping
        Name to coverage 0..1 [z, y, x] (float32), or to a boolean mask.
    roles : mapping
        Name of a structure to what it is for, one of `ROLES`.
    name : str
        Name of the volume, shown in outputs; never a patient's.
    frame_of_reference_uid : str, optional
        DICOM frame of reference.
    patient_position : str
        DICOM patient position, e.g. ``"HFS"``.
    source : dict
        Where the volume comes from (no identifiers of a patient).
    dicom_reference : object, optional
        What DICOM outputs must reference; never printed.
    hu : ndarray, optional
        CT numbers [z, y, x] as read, int16, before any clamping.

    Raises
    ------
    GridError
        When the parts do not fit each other.

    Examples
    --------
    >>> from dosekit.basis.materials import material
    >>> density = np.ones((2, 3, 4), dtype=np.float32)
    >>> grid = VoxelGrid((0, 0, 0), (1, 1, 2), density, density * 0, (material("water"),))
    >>> grid.shape, grid.edges_mm("z").tolist()
    ((2, 3, 4), [-1.0, 1.0, 3.0])
    """

    origin_mm: tuple[float, float, float]
    spacing_mm: tuple[float, float, float]
    density_g_cm3: NDArray[np.float32] = field(repr=False)
    material_index: NDArray[np.uint16] = field(repr=False)
    materials: tuple[Material, ...] = field(repr=False)
    structures: Mapping[str, NDArray[np.float32]] = field(default_factory=dict)
    roles: Mapping[str, str] = field(default_factory=dict)
    name: str = ""
    frame_of_reference_uid: str | None = field(default=None, repr=False)
    patient_position: str = "HFS"
    source: dict[str, Any] = field(default_factory=dict, repr=False)
    dicom_reference: object | None = field(default=None, repr=False)
    hu: NDArray[np.int16] | None = field(default=None, repr=False)
    _found_body: NDArray[np.bool_] | None = field(default=None, init=False, repr=False)

    def __post_init__(self) -> None:
        """Check the parts and make the arrays read-only."""
        _set = object.__setattr__
        _set(self, "origin_mm", triple(self.origin_mm, "origin"))
        _set(self, "spacing_mm", triple(self.spacing_mm, "spacing"))
        if min(self.spacing_mm) <= 0.0:
            raise GridError(
                f"voxel spacing {self.spacing_mm} mm", allowed="three values above 0", remedy="correct the spacing"
            )
        density = _frozen(self.density_g_cm3, np.float32)
        if density.ndim != 3 or 0 in density.shape:
            raise GridError(
                f"a density array of shape {density.shape}",
                allowed="three axes [z, y, x] with at least one voxel each",
                remedy="give the density of a volume",
            )
        if not bool(np.isfinite(density).all()) or float(density.min()) < 0.0:
            raise GridError(
                "densities that are negative or not a number",
                allowed="0 g/cm3 or more in every voxel",
                remedy="correct the density array",
            )
        index = _frozen(self.material_index, np.uint16)
        if index.shape != density.shape or int(index.max()) >= len(self.materials):
            raise GridError(
                f"material indices of shape {index.shape} up to {int(index.max()) if index.size else 0}",
                allowed=f"shape {density.shape} and indices below {len(self.materials)}",
                remedy="give one index per voxel into the list of materials",
            )
        _set(self, "density_g_cm3", density)
        _set(self, "material_index", index)
        _set(self, "materials", tuple(self.materials))
        _set(self, "structures", Coverages(self.shape, self.structures))
        for name, role in self.roles.items():
            if role not in ROLES:
                raise UnknownNameError(f"role of structure {name!r}", role, ROLES)
        _set(self, "roles", dict(self.roles))
        _set(self, "source", dict(self.source))
        if self.hu is not None:
            hu = _frozen(self.hu, np.int16)
            if hu.shape != density.shape:
                raise GridError(f"HU of shape {hu.shape}", allowed=f"shape {density.shape}", remedy="correct the HU")
            _set(self, "hu", hu)

    @property
    def shape(self) -> tuple[int, int, int]:
        """Return the number of voxels (z, y, x)."""
        z, y, x = self.density_g_cm3.shape
        return int(z), int(y), int(x)

    def body(self) -> NDArray[np.bool_]:
        """Return the mask of the body.

        A structure with the role ``"body"`` (or named so) gives it; otherwise the largest connected part denser than
        0.4 g/cm3, with its cavities filled.

        Returns
        -------
        ndarray
            Mask [z, y, x], bool, read-only.
        """
        if self._found_body is None:
            mask = self._find_body()
            mask.setflags(write=False)
            object.__setattr__(self, "_found_body", mask)
        assert self._found_body is not None
        return self._found_body

    def _find_body(self) -> NDArray[np.bool_]:
        """Take the body from a structure or from density."""
        named = [name for name, role in self.roles.items() if role == "body" and name in self.structures]
        named += [name for name in self.structures if name.strip().lower() in _BODY_NAMES]
        if named:
            return np.asarray(self.structures[named[0]] >= 0.5)
        from dosekit.grids.outlines import outline_from_density

        bridge = 0 if self.hu is None else round(_BRIDGE_MM / min(self.spacing_mm[:2]))  # a scan may show its couch
        return outline_from_density(self.density_g_cm3, opening_voxels=min(bridge, 8))

    # ------------------------------------------------------------------ matter
    def relative_stopping_power(self, particle: str = "pi-", kinetic_energy_mev: float = 60.0) -> NDArray[np.float32]:
        """Return the stopping power relative to water, per length.

        Parameters
        ----------
        particle : str
            Name of the particle.
        kinetic_energy_mev : float
            Kinetic energy at which it is taken, MeV.

        Returns
        -------
        ndarray
            Relative stopping power [z, y, x], float32; proportional to density in one composition.
        """
        from dosekit.beams.stopping import relative_stopping_power

        per_density = np.array(
            [
                relative_stopping_power(matter, particle, kinetic_energy_mev=kinetic_energy_mev) / matter.density_g_cm3
                for matter in self.materials
            ],
            dtype=np.float32,
        )
        return per_density[self.material_index] * self.density_g_cm3

    # ------------------------------------------------------------------ other lattices
    def crop(
        self,
        lower_mm: Sequence[float] | None = None,
        upper_mm: Sequence[float] | None = None,
        *,
        structure: str | None = None,
        margin_mm: float = 0.0,
    ) -> VoxelGrid:
        """Return a part of the volume on the same lattice.

        Parameters
        ----------
        lower_mm, upper_mm : sequence of float, optional
            Corners of the box to keep (x, y, z), mm; by default the whole volume or the structure's box.
        structure : str, optional
            Keep the box of this structure.
        margin_mm : float
            Added to the box on every side, mm.

        Returns
        -------
        VoxelGrid
            The voxels whose centres lie in the box.

        Raises
        ------
        GridError
            When no voxel is left.
        """
        box = (self.lower_mm, self.upper_mm) if structure is None else self.bounds_mm(structure)
        low = [float(v) - margin_mm for v in (box[0] if lower_mm is None else lower_mm)]
        high = [float(v) + margin_mm for v in (box[1] if upper_mm is None else upper_mm)]
        first, last = self.index_box(low, high)
        if any(b <= a for a, b in zip(first, last, strict=True)):
            raise GridError(
                f"a box from {tuple(low)} to {tuple(high)} mm holds no voxel centre",
                allowed=f"a box that overlaps {self.lower_mm} to {self.upper_mm} mm",
                remedy="move or enlarge the box",
            )
        part = tuple(slice(a, b) for a, b in zip(first, last, strict=True))
        x, y, z = (o + s * f for o, s, f in zip(self.origin_mm, self.spacing_mm, first[::-1], strict=True))
        return replace(
            self,
            origin_mm=(x, y, z),
            density_g_cm3=np.ascontiguousarray(self.density_g_cm3[part]),
            material_index=np.ascontiguousarray(self.material_index[part]),
            structures={name: np.ascontiguousarray(self.structures[name][part]) for name in self.structures},
            hu=None if self.hu is None else np.ascontiguousarray(self.hu[part]),
        )

    def resample(self, spacing_mm: float | Sequence[float]) -> VoxelGrid:
        """Return the volume on a lattice of another spacing, with the same lower corner.

        Density is averaged by volume and coverage likewise, so that the mass and the volume of every structure are
        kept; the material is the one with the largest share of the new voxel. A last voxel that hangs over the old
        volume counts what hangs over as empty. CT numbers are not carried along.

        Parameters
        ----------
        spacing_mm : float or sequence of float
            New spacing (x, y, z) or one for all, mm.

        Returns
        -------
        VoxelGrid
            The resampled volume.

        Raises
        ------
        SizeError
            When the new volume would not fit into memory.
        """
        from dosekit.grids.resampling import resample_grid

        new = triple([spacing_mm] * 3 if isinstance(spacing_mm, int | float) else spacing_mm, "spacing")
        if min(new) <= 0.0:
            raise GridError(f"a spacing of {new} mm", allowed="values above 0", remedy="correct the spacing")
        return resample_grid(self, new)

    def replace(self, **changes: Any) -> VoxelGrid:
        """Return a copy with other values.

        Parameters
        ----------
        **changes
            Fields of the class and their new values.

        Returns
        -------
        VoxelGrid
            The changed copy.
        """
        return replace(self, **changes)

    def with_structure(self, name: str, coverage: NDArray[Any], *, role: str = "other") -> VoxelGrid:
        """Return a copy with one structure more.

        Parameters
        ----------
        name : str
            Name of the structure; one of the same name is replaced.
        coverage : ndarray
            Coverage or mask [z, y, x].
        role : str
            What it is for, one of `ROLES`.

        Returns
        -------
        VoxelGrid
            The volume with the structure.
        """
        structures: dict[str, Any] = {known: self._boxed(known) for known in self.structures}
        structures[name] = coverage
        return replace(self, structures=structures, roles={**self.roles, name: role})

    def with_sphere(
        self, name: str, centre_mm: Sequence[float], radius_mm: float, *, role: str = "target"
    ) -> VoxelGrid:
        """Return a copy with a sphere drawn as a structure.

        Parameters
        ----------
        name : str
            Name of the structure.
        centre_mm : sequence of float
            Centre (x, y, z), mm.
        radius_mm : float
            Radius, mm.
        role : str
            What it is for.

        Returns
        -------
        VoxelGrid
            The volume with the sphere.

        Raises
        ------
        GridError
            When the sphere lies outside the volume.
        """
        from dosekit.grids.shapes import Ellipsoid, coverage_of

        sphere = Ellipsoid(centre_mm=triple(centre_mm, "centre"), radii_mm=(float(radius_mm),) * 3)
        box = coverage_of(sphere, origin_mm=self.origin_mm, spacing_mm=self.spacing_mm, shape=self.shape)
        if not box.values.size or float(box.values.max()) <= 0.0:
            raise GridError(
                f"sphere {name!r} at {tuple(centre_mm)} mm with radius {radius_mm} mm lies outside the volume",
                allowed=f"a sphere that overlaps {self.lower_mm} to {self.upper_mm} mm",
                remedy="move the sphere",
            )
        structures: dict[str, Any] = {known: self._boxed(known) for known in self.structures}
        structures[name] = box
        return replace(self, structures=structures, roles={**self.roles, name: role})


def check_volume(shape: Sequence[int], *, what: str, bytes_per_voxel: float = 2 * _BYTES_PER_VOXEL) -> None:
    """Refuse a volume that would not fit into memory.

    Parameters
    ----------
    shape : sequence of int
        Voxels along each axis.
    what : str
        What the volume is, for the message.
    bytes_per_voxel : float
        Memory each voxel takes while it is being made.

    Raises
    ------
    SizeError
        When it is too large.
    """
    voxels = 1.0
    for count in shape:
        voxels *= float(count)
    check_memory(voxels * bytes_per_voxel, what=f"{what} of {' x '.join(str(n) for n in shape)} voxels")


def _frozen(array: NDArray[Any], dtype: Any) -> NDArray[Any]:
    """Return a read-only, contiguous view or copy of the wanted type."""
    made = np.ascontiguousarray(array, dtype=dtype).view()
    made.setflags(write=False)
    return made

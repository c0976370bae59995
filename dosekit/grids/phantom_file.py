"""A phantom as it is written down: a TOML file, checked line by line.

The file says how large the volume is, what fills it, and which solids lie in it, in order: a later solid replaces an
earlier one where both lie. Lengths are in mm, axes are patient axes (LPS)::

    name = "block"                      # shown in outputs
    description = "One line for people."
    size_mm = [200, 200, 300]           # x, y, z
    lower_mm = [-100, 0, -150]          # lower corner; the centre of the volume is at 0 when left out
    spacing_mm = [2, 2, 2]              # voxels, unless the user asks for others
    background = "air"                  # a material by name
    patient_position = "HFS"            # HFS when left out

    [materials.foam]                    # mixtures of one's own, by base, parts or fractions
    base = "lung_tissue"
    density_g_cm3 = 0.2

    [[shape]]
    kind = "box"                        # box, cylinder, ellipsoid or slab
    lower_mm = [-100, 0, -150]          # box: lower_mm and upper_mm, or centre_mm and size_mm
    upper_mm = [100, 100, 150]
    material = "water"                  # left out: the solid draws a structure only
    density_g_cm3 = 1.0                 # left out: the material's own
    structure = "tank"                  # left out: no structure
    role = "body"                       # target, organ_at_risk, body or other
    cut_from = ["shell"]                # structures drawn before that this solid is taken out of

    # cylinder:  axis = "z", centre_mm, length_mm, radius_mm or radii_mm = [a, b] (in the order of the axes)
    # ellipsoid: centre_mm, radius_mm or radii_mm = [x, y, z]
    # slab:      axis = "y", from_mm, to_mm

Unknown keys are refused and the nearest known key is named.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from dosekit.basis.materials import Material, from_fractions, material, mixture
from dosekit.errors import DosekitError, GridError, UnknownNameError
from dosekit.grids.shapes import Box, Cylinder, Ellipsoid, Shape, Slab

__all__ = ["PhantomFile", "Solid", "load_phantom_file", "parse_phantom"]

_AXES = {"x": 0, "y": 1, "z": 2}
_ROLES = ("target", "organ_at_risk", "body", "other")
_POSITIONS = ("HFS", "FFS", "HFP", "FFP")
_LARGEST_FILE_BYTES = 1_000_000
_LARGEST_LENGTH_MM = 1.0e5

Triple = tuple[float, float, float]


@dataclass(frozen=True)
class Solid:
    """One solid of a phantom.

    Parameters
    ----------
    shape : Shape
        Its form.
    material : Material, optional
        What it is made of, with its density; None draws a structure only.
    structure : str, optional
        Name of the structure it belongs to.
    role : str, optional
        What the structure is for.
    cut_from : tuple of str
        Structures, drawn by earlier solids, that this solid is taken out of.
    """

    shape: Shape
    material: Material | None = None
    structure: str | None = None
    role: str | None = None
    cut_from: tuple[str, ...] = ()


@dataclass(frozen=True)
class PhantomFile:
    """A phantom as it is written down.

    Parameters
    ----------
    name, description : str
        Shown in outputs.
    size_mm, lower_mm, spacing_mm : tuple of float
        Extent, lower corner and voxel spacing (x, y, z), mm.
    background : Material
        What fills the volume.
    solids : tuple of Solid
        In order; later ones replace earlier ones.
    patient_position : str
        DICOM patient position.
    source : dict
        Where the file lies and its hash.
    """

    name: str
    description: str
    size_mm: Triple
    lower_mm: Triple
    spacing_mm: Triple
    background: Material
    solids: tuple[Solid, ...]
    patient_position: str = "HFS"
    source: dict[str, str] = field(default_factory=dict)


def load_phantom_file(path: str | Path) -> PhantomFile:
    """Read and check a phantom file.

    Parameters
    ----------
    path : str or Path
        The TOML file.

    Returns
    -------
    PhantomFile
        What it says.

    Raises
    ------
    GridError
        When it cannot be read or says something impossible; file and place are named.
    """
    import hashlib

    file = Path(path)
    try:
        if file.stat().st_size > _LARGEST_FILE_BYTES:
            raise GridError(f"{file.name} has {file.stat().st_size} bytes", allowed="a phantom file below 1 MB")
        raw = file.read_bytes()
        said = tomllib.loads(raw.decode("utf-8"))
    except OSError as problem:
        raise GridError(
            f"phantom file {str(path)!r} cannot be read: {problem.strerror or problem}",
            allowed="a readable TOML file",
            remedy="check the path",
        ) from None
    except (ValueError, RecursionError) as problem:
        if isinstance(problem, DosekitError):
            raise
        raise GridError(
            f"{file.name} is not valid TOML: {problem}", allowed="TOML 1.0 in UTF-8", remedy="correct the line"
        ) from None
    made = parse_phantom(said, where=file.name)
    return PhantomFile(**{**_fields(made), "source": {"file": file.name, "sha256": hashlib.sha256(raw).hexdigest()}})


def parse_phantom(said: Mapping[str, Any], *, where: str = "phantom") -> PhantomFile:
    """Check what a phantom file says.

    Parameters
    ----------
    said : mapping
        The parsed TOML.
    where : str
        Name of the file, for messages.

    Returns
    -------
    PhantomFile
        The checked description.

    Raises
    ------
    GridError
        Unknown keys, missing keys, impossible values.
    UnknownNameError
        Unknown materials, kinds, axes or roles.

    Examples
    --------
    >>> tank = parse_phantom({"name": "tank", "size_mm": [10, 10, 10], "spacing_mm": 1, "background": "water"})
    >>> tank.lower_mm
    (-5.0, -5.0, -5.0)
    """
    top = _Entry(said, where)
    top.only(
        "name", "description", "size_mm", "lower_mm", "spacing_mm", "background", "patient_position", "materials",
        "shape",
    )  # fmt: skip
    size = top.triple("size_mm", positive=True)
    own = _own_materials(top)
    position = top.text("patient_position", default="HFS")
    if position not in _POSITIONS:
        raise UnknownNameError(f"patient_position in {where}", position, _POSITIONS)
    shapes = said.get("shape", [])
    if not isinstance(shapes, list):
        raise top.wrong("shape", shapes, "a list, written as [[shape]] once per solid")
    solids = tuple(_solid(_Entry(one, f"{where}, shape {n}"), own) for n, one in enumerate(shapes, start=1))
    drawn: set[str] = set()
    for solid in solids:
        for name in solid.cut_from:
            if name not in drawn:
                raise UnknownNameError(f"earlier structure in cut_from of {where}", name, drawn)
        drawn |= {solid.structure} if solid.structure else set()
    return PhantomFile(
        name=top.text("name"),
        description=top.text("description", default=""),
        size_mm=size,
        lower_mm=top.triple("lower_mm", default=(-size[0] / 2, -size[1] / 2, -size[2] / 2)),
        spacing_mm=top.triple("spacing_mm", positive=True, single=True),
        background=_matter(top, "background", own),
        solids=solids,
        patient_position=position,
    )


class _Entry:
    """A table of the file, with checks that name the place."""

    def __init__(self, said: Any, where: str) -> None:
        if not isinstance(said, Mapping):
            raise GridError(f"{where}: {said!r}", allowed="a table of keys and values", remedy="correct the file")
        self.said = said
        self.where = where

    def only(self, *known: str) -> None:
        """Refuse keys that are not known, naming the nearest."""
        for key in self.said:
            if key not in known:
                near = get_close_matches(str(key), known, n=1, cutoff=0.4)
                raise GridError(
                    f"{self.where}: unknown key {key!r}",
                    allowed=", ".join(known),
                    remedy=f"did you mean {near[0]!r}?" if near else "remove the key",
                )

    def wrong(self, key: str, value: Any, allowed: str) -> GridError:
        """Return the error for a value that cannot be."""
        return GridError(f"{self.where}: {key} = {value!r}", allowed=allowed, remedy=f"correct {key}")

    def __contains__(self, key: str) -> bool:
        """Say whether a key is there."""
        return key in self.said

    def get(self, key: str, default: Any) -> Any:
        """Return a value that must be there unless it has a default."""
        if key in self.said:
            return self.said[key]
        if default is None:
            raise GridError(f"{self.where}: {key} is missing", allowed=f"a value for {key}", remedy=f"add {key}")
        return default

    def text(self, key: str, *, default: str | None = None) -> str:
        """Return a text."""
        value = self.get(key, default)
        if not isinstance(value, str) or (default is None and not value.strip()) or len(value) > 500:
            raise self.wrong(key, value, "a text of 1 to 500 characters")
        return value

    def number(self, key: str, *, positive: bool = False, default: float | None = None) -> float:
        """Return a finite number."""
        return self._number(key, self.get(key, default), positive=positive)

    def numbers(self, key: str, count: int, *, positive: bool = False) -> tuple[float, ...]:
        """Return a list of finite numbers."""
        value = self.get(key, None)
        if not isinstance(value, list | tuple) or len(value) != count:
            raise self.wrong(key, value, f"a list of {count} numbers")
        return tuple(self._number(key, one, positive=positive) for one in value)

    def triple(
        self, key: str, *, positive: bool = False, single: bool = False, default: Triple | None = None
    ) -> Triple:
        """Return three numbers (one for all, if allowed)."""
        if key not in self.said and default is not None:
            return default
        value = self.get(key, None)
        if single and isinstance(value, int | float):
            number = self._number(key, value, positive=positive)
            return number, number, number
        x, y, z = self.numbers(key, 3, positive=positive)
        return x, y, z

    def _number(self, key: str, value: Any, *, positive: bool) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise self.wrong(key, value, "a finite number")
        if abs(value) > _LARGEST_LENGTH_MM or (positive and value <= 0):
            raise self.wrong(key, value, f"{'above 0' if positive else 'at least -1e5'} and at most 1e5")
        return float(value)


def _own_materials(top: _Entry) -> dict[str, Material]:
    """Make the file's own mixtures."""
    own: dict[str, Material] = {}
    table = _Entry(top.said.get("materials", {}), f"{top.where}, materials")
    for name, said in table.said.items():
        entry = _Entry(said, f"{top.where}, materials.{name}")
        entry.only("base", "parts", "fractions", "density_g_cm3", "mean_excitation_ev")
        ways = [way for way in ("base", "parts", "fractions") if way in entry]
        if len(ways) != 1:
            raise GridError(
                f"{entry.where}: {' and '.join(ways) or 'no composition'}",
                allowed="exactly one of base, parts, fractions",
                remedy="say in one way what the material is made of",
            )
        density = entry.number("density_g_cm3", positive=True)
        if ways == ["base"]:
            base = material(entry.text("base"), density_g_cm3=density)
            own[name] = base.replace(name=name)
            continue
        shares = _Entry(said[ways[0]], f"{entry.where}.{ways[0]}")
        amounts = {key: shares.number(key) for key in shares.said}
        if ways == ["parts"]:
            own[name] = mixture(name, list(amounts.items()), density)
        else:
            excitation = entry.number("mean_excitation_ev", positive=True) if "mean_excitation_ev" in entry else None
            own[name] = from_fractions(name, amounts, density, excitation)
    return own


def _matter(entry: _Entry, key: str, own: Mapping[str, Material]) -> Material:
    """Return a material by name, at the density the entry asks for."""
    name = entry.text(key)
    density = entry.number("density_g_cm3", positive=True) if "density_g_cm3" in entry else None
    if name in own:
        return own[name] if density is None else own[name].replace(density_g_cm3=density)
    try:
        return material(name, density_g_cm3=density)
    except UnknownNameError:
        from dosekit.basis.materials import material_names

        raise UnknownNameError(f"material in {entry.where}", name, [*own, *material_names()]) from None


_SHAPE_KEYS = {
    "box": ("lower_mm", "upper_mm", "centre_mm", "size_mm"),
    "cylinder": ("axis", "centre_mm", "length_mm", "radius_mm", "radii_mm"),
    "ellipsoid": ("centre_mm", "radius_mm", "radii_mm"),
    "slab": ("axis", "from_mm", "to_mm"),
}


def _solid(entry: _Entry, own: Mapping[str, Material]) -> Solid:
    """Check one solid."""
    kind = entry.text("kind")
    if kind not in _SHAPE_KEYS:
        raise UnknownNameError(f"kind of solid in {entry.where}", kind, _SHAPE_KEYS)
    entry.only("kind", *_SHAPE_KEYS[kind], "material", "density_g_cm3", "structure", "role", "cut_from")
    matter = _matter(entry, "material", own) if "material" in entry else None
    if matter is None and "density_g_cm3" in entry:
        raise GridError(
            f"{entry.where}: density_g_cm3 without material", allowed="a density beside a material", remedy="add it"
        )
    name = entry.text("structure") if "structure" in entry else None
    if matter is None and name is None:
        raise GridError(
            f"{entry.where}: neither material nor structure",
            allowed="a solid with a material, a structure or both",
            remedy="say what the solid is",
        )
    role = entry.text("role") if "role" in entry else None
    if role is not None and role not in _ROLES:
        raise UnknownNameError(f"role in {entry.where}", role, _ROLES)
    if role is not None and name is None:
        raise GridError(f"{entry.where}: role without structure", allowed="a role beside a structure", remedy="name it")
    return Solid(_form(entry, kind), matter, name, role, _cuts(entry))


def _cuts(entry: _Entry) -> tuple[str, ...]:
    """Return the structures a solid is taken out of."""
    names = entry.get("cut_from", [])
    if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
        raise entry.wrong("cut_from", names, "a list of names of structures")
    return tuple(names)


def _form(entry: _Entry, kind: str) -> Shape:
    """Return the form of a solid."""
    if kind == "box":
        if "centre_mm" in entry:
            centre, size = entry.triple("centre_mm"), entry.triple("size_mm", positive=True)
            x, y, z = ((c - s / 2, c + s / 2) for c, s in zip(centre, size, strict=True))
            return Box((x[0], y[0], z[0]), (x[1], y[1], z[1]))
        lower, upper = entry.triple("lower_mm"), entry.triple("upper_mm")
        if any(a >= b for a, b in zip(lower, upper, strict=True)):
            raise entry.wrong("upper_mm", upper, f"larger than lower_mm {lower} along each axis")
        return Box(lower, upper)
    if kind == "ellipsoid":
        if "radius_mm" in entry:
            r = entry.number("radius_mm", positive=True)
            return Ellipsoid(entry.triple("centre_mm"), (r, r, r))
        return Ellipsoid(entry.triple("centre_mm"), entry.triple("radii_mm", positive=True))
    letter = entry.text("axis")
    if letter not in _AXES:
        raise UnknownNameError(f"axis in {entry.where}", letter, _AXES)
    axis = _AXES[letter]
    if kind == "slab":
        start, stop = entry.number("from_mm"), entry.number("to_mm")
        if start >= stop:
            raise entry.wrong("to_mm", stop, f"larger than from_mm {start}")
        return Slab(axis, start, stop)
    if "radius_mm" in entry:
        r = entry.number("radius_mm", positive=True)
        radii = (r, r)
    else:
        a, b = entry.numbers("radii_mm", 2, positive=True)
        radii = (a, b)
    return Cylinder(axis, entry.triple("centre_mm"), radii, entry.number("length_mm", positive=True))


def _fields(made: PhantomFile) -> dict[str, Any]:
    """Return the fields of a description by name."""
    return {name: getattr(made, name) for name in made.__dataclass_fields__}

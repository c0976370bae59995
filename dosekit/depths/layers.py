"""What does the beam pass through, from the surface on?

A stack of slabs that are wide compared with the beam, each of one material and thickness.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from dosekit.basis.materials import Material, material
from dosekit.errors import InputError

__all__ = ["LONGEST_MM", "Layers", "as_layers"]

LONGEST_MM = 1e4
"""Thickest slab, mm."""


@dataclass(frozen=True)
class Layers:
    """A stack of slabs along the beam.

    Parameters
    ----------
    parts : iterable of (str or Material, float)
        Materials (or names) and thicknesses in mm, in the order in which the beam meets them.

    Raises
    ------
    InputError
        If there is no slab, or a thickness is not positive and finite.

    Examples
    --------
    >>> Layers([("muscle_skeletal", 50), ("water", 250)]).total_mm
    300.0
    """

    parts: tuple[tuple[Material, float], ...]

    def __init__(self, parts: Iterable[tuple[str | Material, float]]) -> None:
        clean: list[tuple[Material, float]] = []
        for entry in parts:
            try:
                name, thickness = entry
                thickness = float(thickness)
            except (TypeError, ValueError):
                raise InputError(f"layer {entry!r}", allowed="pairs of material and thickness in mm") from None
            if not (math.isfinite(thickness) and 0.0 < thickness <= LONGEST_MM):
                raise InputError(
                    f"layer thickness of {thickness} mm", allowed=f"more than 0, at most {LONGEST_MM:.0f} mm"
                )
            clean.append((material(name), thickness))
        if not clean:
            raise InputError("a stack without layers", allowed="at least one layer")
        object.__setattr__(self, "parts", tuple(clean))

    def __iter__(self) -> Iterator[tuple[Material, float]]:
        """Yield material and thickness, mm."""
        return iter(self.parts)

    @property
    def total_mm(self) -> float:
        """Thickness of the stack, mm."""
        return math.fsum(thickness for _, thickness in self.parts)

    @property
    def edges_mm(self) -> tuple[float, ...]:
        """Depths of the boundaries, from 0 to the total, mm."""
        edges = [0.0]
        for _, thickness in self.parts:
            edges.append(edges[-1] + thickness)
        return tuple(edges)

    @property
    def uniform(self) -> bool:
        """Whether all slabs are of one material."""
        return len({stuff for stuff, _ in self.parts}) == 1

    def cut(self, depth_mm: float) -> Layers:
        """Return the stack with another total thickness; the last slab is cut or continued.

        Parameters
        ----------
        depth_mm : float
            Thickness wanted, mm.

        Returns
        -------
        Layers
            The stack.
        """
        left = float(depth_mm)
        parts: list[tuple[Material, float]] = []
        for stuff, thickness in self.parts:
            if left <= 1e-9:
                break
            parts.append((stuff, min(thickness, left)))
            left -= thickness
        if left > 1e-9:
            stuff, thickness = parts[-1]
            parts[-1] = (stuff, thickness + left)
        return Layers(parts)


def as_layers(medium: str | Material | Layers, depth_mm: float) -> Layers:
    """Return any medium as a stack of the given total thickness.

    Parameters
    ----------
    medium : str or Material or Layers
        Material, its name, or a stack.
    depth_mm : float
        Thickness, mm.

    Returns
    -------
    Layers
        The stack.
    """
    return medium.cut(depth_mm) if isinstance(medium, Layers) else Layers([(medium, depth_mm)])

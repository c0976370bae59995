"""Dose of charged mesons, chiefly negative pions, for research; RESEARCH ONLY - NOT FOR CLINICAL USE.

The public names below load their rooms on first use, so that ``import dosekit``
costs next to nothing.

>>> import dosekit as dk
>>> dk.material("water").density_g_cm3
1.0
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOMES = {
    "Beam": "dosekit.beams.beam",
    "Field": "dosekit.maps.fields",
    "Layers": "dosekit.depths.layers",
    "Material": "dosekit.basis.materials",
    "VoxelGrid": "dosekit.grids.voxels",
    "depth_curve": "dosekit.depths.curves",
    "depth_library": "dosekit.depths.library",
    "fit_beam": "dosekit.depths.fitting",
    "fold": "dosekit.maps.fold",
    "material": "dosekit.basis.materials",
    "mixture": "dosekit.basis.materials",
    "particle": "dosekit.basis.particles",
    "phantom": "dosekit.grids.phantoms",
    "range_steps": "dosekit.modulation.steps",
    "read_ct": "dosekit.grids.ct",
    "run": "dosekit.studies.pipeline",
}

__all__ = ["__version__", *sorted(_HOMES)]  # noqa: PLE0604

if TYPE_CHECKING:
    from dosekit.basis.materials import Material, material, mixture
    from dosekit.basis.particles import particle
    from dosekit.beams.beam import Beam
    from dosekit.depths.curves import depth_curve
    from dosekit.depths.fitting import fit_beam
    from dosekit.depths.layers import Layers
    from dosekit.depths.library import depth_library
    from dosekit.grids.ct import read_ct
    from dosekit.grids.phantoms import phantom
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.maps.fields import Field
    from dosekit.maps.fold import fold
    from dosekit.modulation.steps import range_steps
    from dosekit.studies.pipeline import run


def __getattr__(name: str) -> Any:
    """Load a public name from its room on first use."""
    if name in _HOMES:
        value = getattr(import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'dosekit' has no attribute {name!r}")


def __dir__() -> list[str]:
    """List the public names, loaded or not."""
    return sorted(__all__)

"""Which tissues does a body consist of, from air to bone? The chain a HU calibration runs along.

Compositions and densities are those of the table of reference materials. Inflated lung and spongy bone are made of
them here.
"""

from __future__ import annotations

from dosekit.basis.materials import Material, material, mixture

__all__ = ["usual_chain"]

_CHAIN: tuple[tuple[str, float | None], ...] = (
    ("air", None),
    ("lung_tissue", 0.26),  # inflated lung, ICRU Report 46 (1992) and the note in the table of materials
    ("adipose", None),
    ("soft_tissue", None),
    ("muscle_skeletal", None),
    ("skin", None),
    ("spongy_bone", None),  # a mixture of the others, see below
    ("bone_compact", None),
    ("bone_cortical", None),
)
_SPONGY_SHARE = 0.21
"""Volume share of cortical bone in spongy bone, the rest marrow: about 300 HU (a choice).

Without it the chain would run from skin straight to compact bone and give trabecular bone a density 4 % too high:
vertebrae and the heads of long bones are marrow with some cortical bone, and lie on the line between the two.
"""


def usual_chain() -> list[Material]:
    """Return the tissues of the usual chain, by rising HU.

    Returns
    -------
    list of Material
        The tissues, each at its density.

    Examples
    --------
    >>> [tissue.name for tissue in usual_chain()][:3]
    ['air', 'lung_tissue', 'adipose']
    """
    made = {"spongy_bone": _spongy_bone()}
    return [made[name] if name in made else material(name, density_g_cm3=density) for name, density in _CHAIN]


def _spongy_bone() -> Material:
    """Return marrow (half fat, half blood by mass) with cortical bone in it."""
    fat, blood, bone = material("adipose"), material("blood"), material("bone_cortical")
    marrow = 1.0 / (0.5 / fat.density_g_cm3 + 0.5 / blood.density_g_cm3)
    density = _SPONGY_SHARE * bone.density_g_cm3 + (1.0 - _SPONGY_SHARE) * marrow
    mineral = _SPONGY_SHARE * bone.density_g_cm3 / density
    half = 0.5 * (1.0 - mineral)
    return mixture("spongy_bone", [(fat, half), (blood, half), (bone, mineral)], density)

"""Physical constants, each with its source.

CODATA 2018 recommended values (Tiesinga et al., Rev. Mod. Phys. 93 (2021) 025010);
particle masses and lives are in :mod:`dosekit.basis.particles`.
"""

from __future__ import annotations

__all__ = [
    "ATOMIC_MASS_MEV",
    "AVOGADRO_PER_MOL",
    "BETHE_CONSTANT_MEV_CM2_MOL",
    "CLASSICAL_ELECTRON_RADIUS_CM",
    "ELECTRON_MASS_MEV",
    "FINE_STRUCTURE",
    "GRAY_PER_MEV_PER_GRAM",
    "PION_REST_ENERGY_MEV",
    "SPEED_OF_LIGHT_MM_NS",
]

AVOGADRO_PER_MOL = 6.02214076e23
"""Avogadro constant, exact, 1/mol."""

ELECTRON_MASS_MEV = 0.51099895
"""Electron rest energy, MeV."""

ATOMIC_MASS_MEV = 931.49410242
"""Unified atomic mass unit, MeV."""

CLASSICAL_ELECTRON_RADIUS_CM = 2.8179403262e-13
"""Classical electron radius, cm."""

FINE_STRUCTURE = 7.2973525693e-3
"""Fine-structure constant."""

BETHE_CONSTANT_MEV_CM2_MOL = 0.307075
"""4 pi N_A r_e^2 m_e c^2, MeV cm2/mol (PDG, Review of Particle Physics, passage of particles through matter)."""

SPEED_OF_LIGHT_MM_NS = 299.792458
"""Speed of light, exact, mm/ns."""

GRAY_PER_MEV_PER_GRAM = 1.602176634e-10
"""1 MeV/g in Gy, from the exact elementary charge."""

PION_REST_ENERGY_MEV = 139.57039
"""Charged pion rest energy, MeV (PDG)."""

"""What is matter made of, as far as stopping, capture and scattering care?

A material is a density, a mean excitation energy and mass fractions of elements. Where no mean
excitation energy is given, Bragg additivity supplies it:

    ln I = sum_i w_i (Z_i / A_i) ln I_i / sum_i w_i (Z_i / A_i)

with the atomic values for compounds of ICRU Report 37 (1984). Densities, compositions and values of I of the
reference materials are those of ICRP and ICRU; water has I = 78 eV after ICRU Report 90 (2016).

Phases, molecular binding beyond the value of I, and crystal structure play no part.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from dosekit.basis.constants import AVOGADRO_PER_MOL
from dosekit.basis.tables import read_table
from dosekit.errors import MaterialError, UnknownNameError

__all__ = [
    "Element",
    "Material",
    "element",
    "element_symbols",
    "from_fractions",
    "material",
    "material_names",
    "mixture",
]

_DENSITY_LIMIT_G_CM3 = 25.0


@dataclass(frozen=True)
class Element:
    """A chemical element in a compound.

    Attributes
    ----------
    symbol : str
        Chemical symbol.
    atomic_number : int
        Z.
    atomic_weight : float
        Standard atomic weight, u.
    mean_excitation_ev : float
        Mean excitation energy in a liquid or solid compound, eV.
    """

    symbol: str
    atomic_number: int
    atomic_weight: float
    mean_excitation_ev: float


@lru_cache(maxsize=1)
def _elements() -> dict[str, Element]:
    """Read the elements once."""
    return {
        str(row["symbol"]): Element(
            str(row["symbol"]),
            int(row["atomic_number"]),
            float(row["atomic_weight"]),
            float(row["mean_excitation_compound_ev"]),
        )
        for row in read_table("elements").rows()
    }


def element(symbol: str) -> Element:
    """Return an element by symbol.

    Parameters
    ----------
    symbol : str
        Chemical symbol, e.g. ``"Ca"``.

    Returns
    -------
    Element
        The element.

    Raises
    ------
    UnknownNameError
        If the table has no such element.
    """
    known = _elements()
    if symbol not in known:
        raise UnknownNameError("element", symbol, known)
    return known[symbol]


def element_symbols() -> tuple[str, ...]:
    """Return the symbols of all elements, by atomic number.

    Returns
    -------
    tuple of str
        Symbols.
    """
    return tuple(_elements())


@dataclass(frozen=True)
class Material:
    """A material: density, mean excitation energy and mass fractions.

    Attributes
    ----------
    name : str
        Name.
    density_g_cm3 : float
        Mass density, g/cm3.
    mean_excitation_ev : float
        Mean excitation energy I, eV.
    mass_fractions : tuple of (str, float)
        Element symbols and mass fractions, sorted by atomic number, summing to 1.
    """

    name: str
    density_g_cm3: float
    mean_excitation_ev: float
    mass_fractions: tuple[tuple[str, float], ...]

    def __post_init__(self) -> None:
        """Check density, I and fractions."""
        if not 0.0 < self.density_g_cm3 <= _DENSITY_LIMIT_G_CM3:
            raise MaterialError(
                f"density {self.density_g_cm3!r} g/cm3 for {self.name!r}",
                allowed=f"more than 0, at most {_DENSITY_LIMIT_G_CM3:g} g/cm3",
            )
        if not 1.0 < self.mean_excitation_ev < 1500.0:
            raise MaterialError(
                f"mean excitation energy {self.mean_excitation_ev!r} eV for {self.name!r}",
                allowed="1 to 1500 eV",
            )
        total = math.fsum(fraction for _, fraction in self.mass_fractions)
        if not abs(total - 1.0) < 1e-9 or any(not fraction > 0.0 for _, fraction in self.mass_fractions):
            raise MaterialError(
                f"mass fractions of {self.name!r} sum to {total:.6g}",
                allowed="positive fractions that sum to 1",
            )

    def fraction(self, symbol: str) -> float:
        """Return the mass fraction of an element, 0 if absent.

        Parameters
        ----------
        symbol : str
            Chemical symbol.

        Returns
        -------
        float
            Mass fraction.
        """
        return dict(self.mass_fractions).get(symbol, 0.0)

    def atoms_per_gram(self, symbol: str) -> float:
        """Return the number of atoms of an element in a gram.

        Parameters
        ----------
        symbol : str
            Chemical symbol.

        Returns
        -------
        float
            Atoms per gram, 1/g.
        """
        return self.fraction(symbol) * AVOGADRO_PER_MOL / element(symbol).atomic_weight

    @cached_property
    def z_over_a(self) -> float:
        """Electrons per unit of molar mass, mol/g."""
        return math.fsum(w * element(s).atomic_number / element(s).atomic_weight for s, w in self.mass_fractions)

    @cached_property
    def electrons_per_gram(self) -> float:
        """Electrons per gram, 1/g."""
        return self.z_over_a * AVOGADRO_PER_MOL

    @cached_property
    def electron_density_per_cm3(self) -> float:
        """Electrons per cubic centimetre, 1/cm3."""
        return self.electrons_per_gram * self.density_g_cm3

    @cached_property
    def relative_electron_density(self) -> float:
        """Electron density over that of water (1 g/cm3)."""
        return self.electron_density_per_cm3 / material("water").electron_density_per_cm3

    def replace(self, **changes: Any) -> Material:
        """Return a copy with some attributes changed.

        Parameters
        ----------
        **changes : Any
            Attributes of the new material.

        Returns
        -------
        Material
            The new material.
        """
        return replace(self, **changes)


@lru_cache(maxsize=1)
def _materials() -> dict[str, Material]:
    """Read the reference materials once, fractions normalised to exactly 1."""
    table = read_table("materials")
    symbols = [name for name in table.columns if name not in ("name", "density", "mean_excitation_ev")]
    found: dict[str, Material] = {}
    for row in table.rows():
        fractions = {s: float(row[s]) for s in symbols if np.isfinite(row[s]) and row[s] > 0.0}
        found[str(row["name"])] = Material(
            str(row["name"]), float(row["density"]), float(row["mean_excitation_ev"]), _normalised(fractions)
        )
    return found


def material_names() -> tuple[str, ...]:
    """Return the names of the reference materials.

    Returns
    -------
    tuple of str
        Names in table order.
    """
    return tuple(_materials())


@lru_cache(maxsize=1024)
def material(name: str | Material, density_g_cm3: float | None = None) -> Material:
    """Return a reference material by name, at its own density or another.

    Parameters
    ----------
    name : str or Material
        Name of a reference material; a material is returned as it is (with the density, if given).
    density_g_cm3 : float, optional
        Another density, g/cm3.

    Returns
    -------
    Material
        The material.

    Raises
    ------
    UnknownNameError
        If there is no such material.
    MaterialError
        If the density is not above 0.

    Examples
    --------
    >>> material("lung_tissue", density_g_cm3=0.30).density_g_cm3
    0.3
    """
    if isinstance(name, Material):
        found = name
    else:
        known = _materials()
        if name not in known:
            raise UnknownNameError("material", name, known)
        found = known[name]
    if density_g_cm3 is None:
        return found
    return found.replace(density_g_cm3=float(density_g_cm3))


def from_fractions(
    name: str,
    mass_fractions: Mapping[str, float],
    density_g_cm3: float,
    mean_excitation_ev: float | None = None,
) -> Material:
    """Make a material from mass fractions of elements.

    Parameters
    ----------
    name : str
        Name.
    mass_fractions : mapping of str to float
        Element symbol to mass fraction; must sum to 1 within 0.5 %, then normalised.
    density_g_cm3 : float
        Density, g/cm3.
    mean_excitation_ev : float, optional
        Mean excitation energy, eV; by Bragg additivity if not given.

    Returns
    -------
    Material
        The material.

    Raises
    ------
    MaterialError
        If the fractions do not sum to 1 or are negative.
    UnknownNameError
        If an element is not in the table.

    Examples
    --------
    >>> round(from_fractions("heavy", {"H": 0.1, "Ca": 0.9}, 2.0).mean_excitation_ev, 1)
    139.3
    """
    for symbol, fraction in mass_fractions.items():
        element(symbol)
        if not math.isfinite(fraction) or fraction < 0.0:
            raise MaterialError(f"mass fraction {fraction!r} of {symbol} in {name!r}", allowed="0 to 1")
    total = math.fsum(mass_fractions.values())
    if abs(total - 1.0) > 0.005:
        raise MaterialError(f"mass fractions of {name!r} sum to {total:.5g}", allowed="1 within 0.5 %")
    fractions = _normalised({s: f for s, f in mass_fractions.items() if f > 0.0})
    excitation = _bragg_mean_excitation_ev(fractions) if mean_excitation_ev is None else mean_excitation_ev
    return Material(name, float(density_g_cm3), float(excitation), fractions)


def mixture(name: str, parts: Iterable[tuple[Material | str, float]], density_g_cm3: float) -> Material:
    """Mix materials by mass; the mean excitation energies add after Bragg.

    Parameters
    ----------
    name : str
        Name.
    parts : iterable of (Material or str, float)
        Materials and their mass fractions; must sum to 1 within 0.5 %.
    density_g_cm3 : float
        Density of the mixture, g/cm3.

    Returns
    -------
    Material
        The mixture.

    Raises
    ------
    MaterialError
        If the parts do not sum to 1.

    Examples
    --------
    >>> mix = mixture("half", [("water", 0.5), ("bone_cortical", 0.5)], 1.3)
    >>> round(mix.fraction("Ca"), 4)
    0.1125
    """
    known = [(material(part), float(fraction)) for part, fraction in parts]
    total = math.fsum(fraction for _, fraction in known)
    if not known or abs(total - 1.0) > 0.005 or any(not fraction >= 0.0 for _, fraction in known):
        raise MaterialError(
            f"parts of {name!r} sum to {total:.5g}", allowed="fractions >= 0 that sum to 1 within 0.5 %"
        )
    fractions: dict[str, float] = {}
    weight = 0.0
    log_excitation = 0.0
    for part, fraction in known:
        share = fraction / total
        for symbol, inner in part.mass_fractions:
            fractions[symbol] = fractions.get(symbol, 0.0) + share * inner
        weight += share * part.z_over_a
        log_excitation += share * part.z_over_a * math.log(part.mean_excitation_ev)
    clean = {symbol: fraction for symbol, fraction in fractions.items() if fraction > 0.0}
    return Material(name, float(density_g_cm3), math.exp(log_excitation / weight), _normalised(clean))


def _normalised(fractions: Mapping[str, float]) -> tuple[tuple[str, float], ...]:
    """Return fractions sorted by atomic number, summing to 1."""
    total = math.fsum(fractions.values())
    ordered = sorted(fractions, key=lambda symbol: element(symbol).atomic_number)
    return tuple((symbol, fractions[symbol] / total) for symbol in ordered)


def _bragg_mean_excitation_ev(fractions: Iterable[tuple[str, float]]) -> float:
    """Return I of a compound by Bragg additivity, eV."""
    weight = 0.0
    log_sum = 0.0
    for symbol, fraction in fractions:
        atom = element(symbol)
        electrons = fraction * atom.atomic_number / atom.atomic_weight
        weight += electrons
        log_sum += electrons * math.log(atom.mean_excitation_ev)
    return math.exp(log_sum / weight)

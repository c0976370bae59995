"""What is a beam, as an experimenter knows it?

Particle, momentum (or kinetic energy) and its spread, spot size, divergence and their correlation per axis, what
else is in the beam, and a range shifter in front of the patient. Checked when made; a beam that cannot exist, or
whose range in water is under 2 mm, is refused with the reason.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from dosekit.basis.materials import Material, material
from dosekit.basis.particles import Particle, particle, particle_names
from dosekit.basis.particles import kinetic_energy_mev as _kinetic
from dosekit.basis.particles import momentum_mev_c as _momentum
from dosekit.errors import BeamError, UnknownNameError

__all__ = ["BEAM_SPECIES", "CONTAMINANT_SPECIES", "Beam"]

BEAM_SPECIES: tuple[str, ...] = ("pi-", "pi+", "mu-", "mu+", "proton", "e-", "e+")
"""Particles a beam can be made of."""

CONTAMINANT_SPECIES: tuple[str, ...] = ("mu-", "mu+", "e-", "e+")
"""Particles that can come along with the main species."""

SHORTEST_RANGE_MM = 2.0
_LARGEST_MOMENTUM_SIGMA = 0.25
_FWHM_PER_SIGMA = 2.0 * math.sqrt(2.0 * math.log(2.0))


@dataclass(frozen=True)
class Beam:
    """A beam at the surface of the patient or phantom (or of its range shifter).

    Give exactly one of `momentum_mev_c` and `kinetic_energy_mev`, and at most one of `momentum_sigma` and
    `momentum_fwhm`.

    Parameters
    ----------
    particle : str
        Main species: pi-, pi+, mu-, mu+, proton, e- or e+.
    momentum_mev_c : float, optional
        Mean momentum, MeV/c.
    kinetic_energy_mev : float, optional
        Mean kinetic energy, MeV.
    momentum_sigma : float, optional
        Standard deviation of the momentum over its mean; 0 if neither this nor the next is given.
    momentum_fwhm : float, optional
        Full width at half maximum of the momentum over its mean (Gaussian).
    spot_sigma_mm : float or (float, float)
        Standard deviation of position, x and y, mm.
    divergence_sigma_mrad : float or (float, float)
        Standard deviation of the angle, x and y, mrad.
    correlation : float or (float, float)
        Correlation of position and angle, x and y; > 0 spreads, < 0 converges.
    contaminants : mapping of str to float, optional
        Muons and electrons of the same momentum, per particle of the main species; their sum is at most 1.
    range_shifter : str or Material or (material, mm), optional
        Material of the range shifter, or the pair of material and thickness in mm that always stays in the beam.
    range_shifter_gap_mm : float
        Air between the shifter and the surface, mm.

    Raises
    ------
    BeamError
        If the beam cannot exist or its range in water is under 2 mm.
    UnknownNameError
        If a particle is not known.

    Examples
    --------
    >>> beam = Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02)
    >>> round(beam.kinetic_energy_mev, 1)
    80.4
    """

    particle: str
    momentum_mev_c: float = None  # type: ignore[assignment]  # filled in below when the energy is given
    kinetic_energy_mev: float = None  # type: ignore[assignment]
    momentum_sigma: float | None = None
    momentum_fwhm: float | None = None
    spot_sigma_mm: float | tuple[float, float] = 5.0
    divergence_sigma_mrad: float | tuple[float, float] = 0.0
    correlation: float | tuple[float, float] = 0.0
    contaminants: Mapping[str, float] | tuple[tuple[str, float], ...] | None = None
    range_shifter: str | Material | tuple[str | Material, float] | None = None
    range_shifter_gap_mm: float = 0.0
    momentum_spread: float = field(init=False, default=0.0)

    def __post_init__(self) -> None:
        """Check everything and fill in what follows from the rest."""
        name = self.particle.name if isinstance(self.particle, Particle) else self.particle
        if name not in BEAM_SPECIES:
            raise UnknownNameError("beam particle", name, BEAM_SPECIES)

        def put(key: str, value: Any) -> None:
            """Set an attribute of the frozen object while it is made."""
            object.__setattr__(self, key, value)

        put("particle", name)
        momentum = _number(self.momentum_mev_c, "momentum", "MeV/c")
        energy = _number(self.kinetic_energy_mev, "kinetic energy", "MeV")
        if (momentum is None) == (energy is None):
            raise BeamError(
                "momentum and kinetic energy are both given, or both missing",
                allowed="exactly one of momentum_mev_c and kinetic_energy_mev",
            )
        for value, what, top, unit in (
            (momentum, "momentum", 2000.0, "MeV/c"),
            (energy, "kinetic energy", 1000.0, "MeV"),
        ):
            if value is not None and not 0.0 < value <= top:
                raise BeamError(f"{what} of {value:g} {unit}", allowed=f"more than 0, at most {top:g} {unit}")
        if energy is not None:
            momentum = float(_momentum(name, energy))
        elif momentum is not None:
            energy = float(_kinetic(name, momentum))
        put("momentum_mev_c", momentum)
        put("kinetic_energy_mev", energy)
        self._check_spread(put)
        self._check_optics(put)
        self._check_contaminants(put)
        self._check_shifter(put)
        from dosekit.beams.ranges import csda_range_mm

        reach = float(csda_range_mm(name, "water", self.kinetic_energy_mev))
        if reach < SHORTEST_RANGE_MM:
            raise BeamError(
                f"{name} of {self.momentum_mev_c:.4g} MeV/c ({self.kinetic_energy_mev:.3g} MeV) go {reach:.2g} mm in water",  # noqa: E501
                allowed=f"a range of at least {SHORTEST_RANGE_MM:g} mm",
                remedy="raise the momentum (MeV/c)",
            )

    def _check_spread(self, put: Any) -> None:
        """Check the momentum spread, given in one of two ways."""
        put("momentum_sigma", _number(self.momentum_sigma, "momentum_sigma", ""))
        put("momentum_fwhm", _number(self.momentum_fwhm, "momentum_fwhm", ""))
        both = self.momentum_sigma is not None and self.momentum_fwhm is not None
        if both and abs((self.momentum_fwhm or 0.0) / _FWHM_PER_SIGMA - (self.momentum_sigma or 0.0)) > 1e-12:
            raise BeamError("momentum_sigma and momentum_fwhm are both given", allowed="one of them")
        sigma = self.momentum_sigma
        if sigma is None:
            sigma = 0.0 if self.momentum_fwhm is None else self.momentum_fwhm / _FWHM_PER_SIGMA
        if not 0.0 <= sigma <= _LARGEST_MOMENTUM_SIGMA:
            raise BeamError(
                f"momentum spread (sigma over mean) of {sigma:g}",
                allowed=f"0 to {_LARGEST_MOMENTUM_SIGMA:g}",
                remedy="give a fraction, e.g. 0.02 for 2 %",
            )
        put("momentum_spread", float(sigma))

    def _check_optics(self, put: Any) -> None:
        """Check spot, divergence, correlation and gap."""
        for key, what, low, high, unit in (
            ("spot_sigma_mm", "spot sigma", 0.0, 500.0, "mm"),
            ("divergence_sigma_mrad", "divergence sigma", 0.0, 300.0, "mrad"),
            ("correlation", "correlation of position and angle", -1.0, 1.0, ""),
        ):
            value = getattr(self, key)
            pair = tuple(value) if isinstance(value, (tuple, list)) else (value,)
            if len(pair) not in (1, 2):
                raise BeamError(f"{what} with {len(pair)} numbers", allowed="one number, or one each for x and y")
            clean = tuple(_required(item, what, unit) for item in pair)
            for item in clean:
                if not low <= item <= high:
                    raise BeamError(
                        f"{what} of {item:g} {unit}".rstrip(), allowed=f"{low:g} to {high:g} {unit}".rstrip()
                    )
            put(key, clean if len(clean) == 2 else clean[0])
        gap = _required(self.range_shifter_gap_mm, "range shifter gap", "mm")
        if not 0.0 <= gap <= 3000.0:
            raise BeamError(f"range shifter gap of {gap:g} mm", allowed="0 to 3000 mm")
        put("range_shifter_gap_mm", gap)

    def _check_contaminants(self, put: Any) -> None:
        """Check the fractions of contaminants; kept as a sorted tuple so that beams can be compared and hashed."""
        given = self.contaminants or {}
        pairs = dict(given)
        clean: list[tuple[str, float]] = []
        for name, fraction in pairs.items():
            if name not in CONTAMINANT_SPECIES:
                known = CONTAMINANT_SPECIES if name not in particle_names() else ()
                if known:
                    raise UnknownNameError("contaminant", name, known)
                raise BeamError(f"contaminant {name!r}", allowed=", ".join(CONTAMINANT_SPECIES))
            if name == self.particle:
                raise BeamError(f"contaminant {name!r} is the main species", allowed="another species")
            value = _required(fraction, f"fraction of {name}", "")
            if not 0.0 <= value <= 1.0:
                raise BeamError(f"fraction {value:g} of contaminant {name}", allowed="0 to 1 per beam particle")
            clean.append((name, value))
        total = math.fsum(fraction for _, fraction in clean)
        if total > 1.0:
            raise BeamError(f"contaminant fractions sum to {total:g}", allowed="at most 1 per beam particle")
        put("contaminants", tuple(sorted(clean)))

    def _check_shifter(self, put: Any) -> None:
        """Check the range shifter: a material, or a material with a fixed thickness."""
        shifter = self.range_shifter
        if shifter is None:
            return
        if isinstance(shifter, (str, Material)):
            put("range_shifter", material(shifter))
            return
        if len(shifter) != 2:
            raise BeamError("range shifter", allowed="a material, or (material, thickness in mm)")
        thickness = _required(shifter[1], "range shifter thickness", "mm")
        if not 0.0 <= thickness <= 2000.0:
            raise BeamError(f"range shifter of {thickness:g} mm", allowed="0 to 2000 mm")
        put("range_shifter", (material(shifter[0]), thickness))

    @property
    def species(self) -> Particle:
        """The main particle."""
        return particle(self.particle)

    @property
    def contaminant_fractions(self) -> dict[str, float]:
        """Contaminants per particle of the main species."""
        return dict(self.contaminants or ())

    @property
    def shifter_material(self) -> Material | None:
        """Material of the range shifter, if there is one."""
        shifter = self.range_shifter
        if shifter is None:
            return None
        return material(shifter[0]) if isinstance(shifter, tuple) else material(shifter)

    @property
    def fixed_shifter_mm(self) -> float:
        """Thickness of shifter material that always stays in the beam, mm."""
        return float(self.range_shifter[1]) if isinstance(self.range_shifter, tuple) else 0.0

    def axis(self, number: int) -> tuple[float, float, float]:
        """Return the optics of one transverse axis.

        Parameters
        ----------
        number : int
            0 for x, 1 for y.

        Returns
        -------
        sigma_mm, divergence_rad, correlation : float
            Standard deviations of position (mm) and angle (rad), and their correlation.
        """

        def pick(value: Any) -> float:
            """Return the number of this axis."""
            return float(value[number] if isinstance(value, tuple) else value)

        return pick(self.spot_sigma_mm), 1e-3 * pick(self.divergence_sigma_mrad), pick(self.correlation)

    def replace(self, **changes: Any) -> Beam:
        """Return a copy with some parameters changed.

        Parameters
        ----------
        **changes : Any
            Parameters of the new beam.

        Returns
        -------
        Beam
            The new beam, checked anew.
        """
        if changes.get("kinetic_energy_mev") is not None:
            changes.setdefault("momentum_mev_c", None)
        else:
            changes["kinetic_energy_mev"] = None
        if changes.get("momentum_sigma") is not None:
            changes.setdefault("momentum_fwhm", None)
        if changes.get("momentum_fwhm") is not None:
            changes.setdefault("momentum_sigma", None)
        return replace(self, **changes)


def _number(value: Any, what: str, unit: str) -> float | None:
    """Return a finite number or None."""
    return None if value is None else _required(value, what, unit)


def _required(value: Any, what: str, unit: str) -> float:
    """Return a finite number or say what was found."""
    if isinstance(value, bool) or not isinstance(value, (int, float, np.integer, np.floating)):
        raise BeamError(f"{what} {value!r} is not a number", allowed=f"a number {unit}".rstrip())
    number = float(value)
    if not math.isfinite(number):
        raise BeamError(f"{what} is {number}", allowed=f"a finite number {unit}".rstrip())
    return number

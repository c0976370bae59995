"""Depth curves of one beam over residual range, as the fold and the range steps need them.

Everything is in water, against water-equivalent depth behind the surface. With ``mode="shifter"`` the beam keeps
its momentum and a water-equivalent thickness in front takes range away, so that one solution serves all steps. With
``mode="momentum"`` each step has its own momentum and nothing in front. The residual range is the mean depth at
which unscattered particles stop.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.basis.materials import Material, material
from dosekit.basis.particles import kinetic_energy_mev, momentum_mev_c
from dosekit.beams.beam import Beam
from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import YIELDS
from dosekit.beams.scattering import fermi_eyges_moments
from dosekit.beams.stopping import relative_stopping_power
from dosekit.beams.straggling import mean_range_excess_mm
from dosekit.depths.curves import check_star_scale, warn_of_energy
from dosekit.depths.quality import star_let_kev_um
from dosekit.depths.solver import Solution, solve
from dosekit.depths.stars import star_deposits
from dosekit.errors import InputError, ReachError, SizeError, UnknownNameError

__all__ = ["MODES", "QUANTITIES", "DepthLibrary", "depth_library", "mean_projected_range_mm"]

MODES: tuple[str, ...] = ("shifter", "momentum")
"""Ways to change the range."""

QUANTITIES: tuple[str, ...] = (
    "core", "scattered", "in_flight_charged", "in_flight_neutral", "decay", "contaminant_muon", "contaminant_electron",
    "core_stops", "scattered_stops", "reactions",
    "scattered_near", "scattered_oblique", "scattered_wide",
    "scattered_near_stops", "scattered_oblique_stops", "scattered_wide_stops",
)  # fmt: skip
"""Keys of the quantities: MeV/mm per incident particle, or 1/mm for stops and reactions.

``scattered_near`` (direction cosine over 0.9), ``scattered_oblique`` (0.5 to 0.9) and ``scattered_wide`` are classes
that sum to ``scattered``, with widths of their own; likewise their stops.
"""

_COMPONENT_OF = {
    "core": "primary",
    "scattered": "primary",
    "in_flight_charged": "in_flight",
    "in_flight_neutral": "in_flight",
    "decay": "decay",
    "contaminant_muon": "contaminant_muon",
    "contaminant_electron": "contaminant_electron",
}
_NEUTRAL_SIGMA_MM = 100.0
"""Of the energy that neutrons of 50 to 120 MeV and photons of pi0 leave within 300 mm of where they start, one axis: 99
to 116 mm (:mod:`dosekit.capture.profiles`, water)."""
_NEUTRAL_UNEQUAL = 2.16
"""It is even in radius to 300 mm, 1.8 for <r^4>/<r^2>^2, times 1.2 for <sin^4>/<sin^2>^2 of all directions (neutrons;
photons of pi0, which build up before they fade, 1.8)."""
_WIDTH_MM = 600.0


@dataclass(frozen=True)
class DepthLibrary:
    """Depth curves in water over residual range.

    Attributes
    ----------
    beam : Beam
        The beam.
    yields : str
        Yield set.
    mode : str
        How the range is changed.
    residual_range_mm : ndarray, shape (K,)
        Residual range behind the surface, mm of water.
    shift_mm : ndarray, shape (K,)
        Water-equivalent thickness in front of the surface, mm; 0 in mode ``"momentum"``.
    momentum_mev_c : ndarray, shape (K,)
        Momentum in front of the shifter, MeV/c.
    bin_mm : float
        Bin, mm.
    depth_mm : ndarray, shape (N,)
        Bin centres, mm of water behind the surface.
    quantities : dict of str to ndarray, shape (K, N)
        See `QUANTITIES`; per incident particle of the main species. Star energy is not among them.
    extra_sigma_mm : dict of str to ndarray, shape (K, N)
        Standard deviation of one transverse axis to be added in quadrature to the width of the core.
    kinetic_energy_mev : ndarray, shape (K, N)
        Mean kinetic energy of the core, MeV.
    let : dict of str to ndarray, shape (K, N)
        Dose-averaged LET of the energy quantities, keV/um.
    unequal : dict of str to ndarray, shape (K, N)
        Mean squared extra variance over the square of its mean: how unequal displacements are; 1 if all are the same.
    """

    beam: Beam
    yields: str
    mode: str
    residual_range_mm: NDArray[np.float64]
    shift_mm: NDArray[np.float64]
    momentum_mev_c: NDArray[np.float64]
    bin_mm: float
    depth_mm: NDArray[np.float64] = field(repr=False)
    quantities: dict[str, NDArray[np.float64]] = field(repr=False)
    extra_sigma_mm: dict[str, NDArray[np.float64]] = field(repr=False)
    kinetic_energy_mev: NDArray[np.float64] = field(repr=False)
    let: dict[str, NDArray[np.float64]] = field(repr=False)
    unequal: dict[str, NDArray[np.float64]] = field(repr=False, default_factory=dict)

    def depth_dose(
        self, components: bool = True, *, star_scale: float = 1.0, width_mm: float | None = 600.0
    ) -> NDArray[np.float64]:
        """Return depth dose in water with the stars folded in along depth.

        Parameters
        ----------
        components : bool
            Whether components stay apart.
        star_scale : float
            Factor on the charged energy of stars.
        width_mm : float, optional
            Width of the square over which star neutrons and photons are summed, mm; None without end.

        Returns
        -------
        ndarray, shape (K, component, N) or (K, N)
            MeV/mm per incident particle, in the order of :data:`dosekit.basis.components.COMPONENTS`.
        """
        check_star_scale(star_scale)
        table = np.zeros((len(self.residual_range_mm), len(COMPONENTS), len(self.depth_mm)))
        for name, component in _COMPONENT_OF.items():
            table[:, COMPONENTS.index(component)] += self.quantities[name]
        if self.beam.particle == "pi-":
            water = material("water")
            stops = self.quantities["core_stops"] + self.quantities["scattered_stops"]
            edges = self.bin_mm * np.arange(len(self.depth_mm) + 1.0)
            stars = star_deposits(
                stops,
                edges_mm=edges,
                layer=np.zeros(len(self.depth_mm), dtype=np.int64),
                materials=(water,),
                yields=self.yields,
                star_scale=star_scale,
                width_mm=width_mm,
            )
            for name in STAR_COMPONENTS:
                table[:, COMPONENTS.index(name)] += stars[name]
        return table if components else np.sum(table, axis=1)

    def component_let(self) -> NDArray[np.float64]:
        """Return the dose-averaged LET by component.

        Returns
        -------
        ndarray, shape (K, component, N)
            keV/um; stars at the mean of their slowing-down spectra.
        """
        shape = (len(self.residual_range_mm), len(COMPONENTS), len(self.depth_mm))
        energy, weighted = np.zeros(shape), np.zeros(shape)
        for name, component in _COMPONENT_OF.items():
            place = COMPONENTS.index(component)
            energy[:, place] += self.quantities[name]
            weighted[:, place] += self.quantities[name] * self.let[name]
        result = weighted / np.where(energy > 1e-15, energy, 1.0)
        for name, value in star_let_kev_um("water", yields=self.yields).items():
            result[:, COMPONENTS.index(name)] = value
        return result


def mean_projected_range_mm(species: str, momentum: float, medium: str | Material = "water") -> float:
    """Return the mean depth at which particles stop that are not scattered by nuclei.

    Parameters
    ----------
    species : str
        Particle.
    momentum : float
        Momentum, MeV/c.
    medium : str or Material
        Material.

    Returns
    -------
    float
        CSDA range, plus the straggling excess, less the detour by multiple scattering, mm.

    Examples
    --------
    >>> round(mean_projected_range_mm("pi-", 170.0), 0)
    196.0
    """
    energy = float(kinetic_energy_mev(species, momentum))
    table = range_table(species, medium)
    reach = float(table.range_mm(energy))
    path = reach * (1.0 - (1.0 - np.linspace(0.0, 1.0, 301)) ** 2)
    middle = 0.5 * (path[1:] + path[:-1])
    angle = fermi_eyges_moments(species, medium, energy, depth_mm=middle)[0]
    projected = float(np.sum(np.exp(-np.minimum(angle, 1.0)) * np.diff(path)))
    return projected + mean_range_excess_mm(species, medium, energy)


def depth_library(
    beam: Beam,
    residual_ranges_mm: ArrayLike | Sequence[float],
    *,
    mode: str = "shifter",
    yields: str = "evaluated",
    bin_mm: float = 1.0,
    depth_mm: float | None = None,
) -> DepthLibrary:
    """Return depth curves in water for a set of residual ranges.

    Parameters
    ----------
    beam : Beam
        The beam in front of its range shifter.
    residual_ranges_mm : array_like, shape (K,)
        Residual ranges behind the surface, mm of water, more than 1.
    mode : {"shifter", "momentum"}
        How the range is changed.
    yields : {"evaluated", "cascade"}
        Yield set.
    bin_mm : float
        Bin, mm.
    depth_mm : float, optional
        Depth covered; by default 1.2 times the longest range plus 120 mm, which holds most of the neutron tail.

    Returns
    -------
    DepthLibrary
        The curves.

    Raises
    ------
    InputError
        If a range, bin or mode makes no sense.
    ReachError
        If the beam is too short for a residual range.

    Warns
    -----
    ValidityWarning
        If the beam is faster than what its reactions are made for.

    Examples
    --------
    >>> library = depth_library(Beam("pi-", momentum_mev_c=150), [100.0, 120.0])
    >>> library.quantities["core"].shape == (2, len(library.depth_mm))
    True
    """
    if mode not in MODES:
        raise UnknownNameError("library mode", mode, MODES)
    if yields not in YIELDS:
        raise UnknownNameError("yield set", yields, YIELDS)
    warn_of_energy(beam)
    residual = np.atleast_1d(np.asarray(residual_ranges_mm, dtype=float))
    if residual.ndim != 1 or len(residual) == 0 or not np.all(np.isfinite(residual)) or np.any(residual <= 1.0):
        raise InputError(
            "residual ranges that are empty, not finite or not over 1 mm", allowed="mm of water, more than 1"
        )
    if not (math.isfinite(bin_mm) and 0.05 <= bin_mm <= 20.0):
        raise InputError(f"bin of {bin_mm} mm", allowed="0.05 to 20 mm")
    longest = float(np.max(residual))
    covered = 1.2 * longest + 120.0 if depth_mm is None else float(depth_mm)
    bins = math.ceil(covered / bin_mm)
    if bins * len(residual) > 5_000_000:
        raise SizeError(f"a library of {len(residual)} ranges and {bins} bins", allowed="5 million numbers")
    if mode == "shifter":
        return _by_shifter(beam, residual, bins, bin_mm, yields)
    return _by_momentum(beam, residual, bins, bin_mm, yields)


def _by_shifter(beam: Beam, residual: NDArray[np.float64], bins: int, bin_mm: float, yields: str) -> DepthLibrary:
    """Solve once and look at it from behind each thickness."""
    stuff = beam.shifter_material
    fixed = 0.0 if stuff is None else beam.fixed_shifter_mm * relative_stopping_power(stuff, beam.particle)
    reach = mean_projected_range_mm(beam.particle, beam.momentum_mev_c)
    shift = reach - fixed - residual
    if np.any(shift < -1e-6):
        raise ReachError(
            f"residual range {float(np.max(residual)):.1f} mm from a beam that goes {reach - fixed:.1f} mm in water",
            allowed=f"up to {reach - fixed:.1f} mm",
            remedy="raise the momentum or take out range shifter",
        )
    shift = np.maximum(shift, 0.0)
    in_front = shift + fixed
    total = float(np.max(in_front)) + bins * bin_mm
    parts = _parts(beam, beam.momentum_mev_c, math.ceil(total / bin_mm), bin_mm, yields)
    base = bin_mm * np.arange(bins + 1.0)

    def moved(name: str) -> NDArray[np.float64]:
        """Return amounts per mm behind each thickness."""
        running = np.concatenate([[0.0], np.cumsum(parts.amount[name])])
        at = np.arange(len(running)) * bin_mm
        return np.stack([np.diff(np.interp(base + front, at, running)) / bin_mm for front in in_front])

    centres = base[:-1] + 0.5 * bin_mm
    at = bin_mm * (np.arange(len(parts.energy)) + 0.5)

    def look(values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return values at depths behind each thickness."""
        return np.stack([np.interp(centres + front, at, values) for front in in_front])

    return DepthLibrary(
        beam, yields, "shifter", residual, shift, np.full(len(residual), beam.momentum_mev_c), bin_mm, centres,
        {name: moved(name) for name in QUANTITIES}, {name: look(values) for name, values in parts.sigma.items()},
        look(parts.energy), {name: look(values) for name, values in parts.let.items()},
        {name: look(values) for name, values in parts.unequal.items()},
    )  # fmt: skip


def _by_momentum(beam: Beam, residual: NDArray[np.float64], bins: int, bin_mm: float, yields: str) -> DepthLibrary:
    """Solve for each momentum."""
    stuff = beam.shifter_material
    fixed = 0.0 if stuff is None else beam.fixed_shifter_mm * relative_stopping_power(stuff, beam.particle)
    table = range_table(beam.particle, "water")
    momenta = []
    for wanted in residual + fixed:
        reach = float(wanted)
        for _ in range(4):
            momentum = float(momentum_mev_c(beam.particle, float(table.energy_mev(reach))))
            reach += float(wanted) - mean_projected_range_mm(beam.particle, momentum)
        momenta.append(momentum)
    front = math.ceil(fixed / bin_mm)
    rows = [_parts(beam, momentum, bins + front, bin_mm, yields) for momentum in momenta]
    keep = slice(front, front + bins)
    return DepthLibrary(
        beam, yields, "momentum", residual, np.zeros(len(residual)), np.array(momenta), bin_mm,
        np.asarray(bin_mm * (np.arange(bins) + 0.5), dtype=np.float64),
        {name: np.stack([row.amount[name][keep] for row in rows]) / bin_mm for name in QUANTITIES},
        {name: np.stack([row.sigma[name][keep] for row in rows]) for name in rows[0].sigma},
        np.stack([row.energy[keep] for row in rows]),
        {name: np.stack([row.let[name][keep] for row in rows]) for name in rows[0].let},
        {name: np.stack([row.unequal[name][keep] for row in rows]) for name in rows[0].unequal},
    )  # fmt: skip


@dataclass(frozen=True)
class _Parts:
    """Amounts per bin, LET, widths and mean energy of one solution in water."""

    amount: dict[str, NDArray[np.float64]]
    let: dict[str, NDArray[np.float64]]
    sigma: dict[str, NDArray[np.float64]]
    unequal: dict[str, NDArray[np.float64]]
    energy: NDArray[np.float64]


def _parts(beam: Beam, momentum: float, bins: int, bin_mm: float, yields: str) -> _Parts:
    """Solve for main species and contaminants and sort into library quantities."""
    water = material("water")
    layers = ((water, bins * bin_mm),)
    settings = {
        "spread": beam.momentum_spread,
        "layers": layers,
        "bin_mm": bin_mm,
        "yields": yields,
        "width_mm": _WIDTH_MM,
    }
    main = solve(beam.particle, momentum, **settings)  # type: ignore[arg-type]
    names = ("core", "scattered", "in_flight_charged", "in_flight_neutral", "decay")
    amount = {name: main.deposit[name] for name in names}
    let = {name: main.let[name] for name in names}
    # energy from muon captures is small; it is kept with the decays so that no energy is lost
    for name in ("capture_light", "capture_heavy", "capture_neutron", "capture_photon"):
        if name in main.deposit:
            total = amount["decay"] + main.deposit[name]
            let["decay"] = (amount["decay"] * let["decay"] + main.deposit[name] * main.let[name]) / np.where(
                total > 1e-15, total, 1.0
            )
            amount["decay"] = total
    depth = np.asarray(bin_mm * (np.arange(bins) + 0.5), dtype=np.float64)
    sigma = {
        name: main.extra_sigma_mm.get(name, np.zeros(bins)) for name in ("scattered", "in_flight_charged", "decay")
    }
    sigma["in_flight_neutral"] = np.full(bins, _NEUTRAL_SIGMA_MM)
    core = _core_variance(beam.particle, momentum, depth)
    for target, first in (("contaminant_muon", "mu"), ("contaminant_electron", "e")):
        amount[target], weighted, variance = np.zeros(bins), np.zeros(bins), np.zeros(bins)
        for name, fraction in beam.contaminant_fractions.items():
            if not name.startswith(first) or fraction <= 0.0:
                continue
            extra: Solution = solve(name, momentum, admixture=True, **settings)  # type: ignore[arg-type]
            here = fraction * np.sum(list(extra.deposit.values()), axis=0)
            amount[target] = amount[target] + here
            weighted = weighted + fraction * np.sum(
                [extra.deposit[key] * extra.let[key] for key in extra.deposit], axis=0
            )
            variance = variance + here * np.maximum(_core_variance(name, momentum, depth) - core, 0.0)
        safe = np.where(amount[target] > 1e-15, amount[target], 1.0)
        let[target] = weighted / safe
        sigma[target] = np.sqrt(variance / safe)
    unequal = {"in_flight_neutral": np.full(bins, _NEUTRAL_UNEQUAL)}
    for name, (given, stopped, width, ratio) in main.classes.items():
        amount[name], amount[f"{name}_stops"], sigma[name], unequal[name] = given, stopped, width, ratio
    amount["core_stops"], amount["scattered_stops"] = main.stops["core"], main.stops["scattered"]
    amount["reactions"] = main.channels["absorption"] + main.channels["inelastic"] + main.channels["charge_exchange"]
    mean = 0.5 * (main.core.mean_energy[1:] + main.core.mean_energy[:-1])
    return _Parts(amount, let, sigma, unequal, mean)


def _core_variance(species: str, momentum: float, depth: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the Fermi-Eyges variance of one axis of a pencil, mm2."""
    energy = float(kinetic_energy_mev(species, momentum))
    return fermi_eyges_moments(species, "water", energy, depth_mm=depth)[2]

"""What does one species of a beam do in a stack of layers? All parts together, before stars.

1. the beam until its first nuclear scattering (:mod:`dosekit.depths.core`), 2. particles of the same kind that come
out of elastic and inelastic collisions, all generations, 3. charged and neutral products of reactions in flight, 4.
muons and electrons from decays in flight and at rest. Everything per particle at depth 0, in fine bins.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dosekit.basis.materials import Material
from dosekit.basis.particles import kinetic_energy_mev, particle
from dosekit.beams.decay import MUON_ENERGY_AT_REST_MEV
from dosekit.beams.electrons import electron_stopping_powers
from dosekit.beams.reactions import CHANNELS, reactions
from dosekit.depths.angles import COSINES
from dosekit.depths.coarse import CoarseGrid, coarse_grid, regrid
from dosekit.depths.core import Core, bin_edges, solve_core
from dosekit.depths.decays import follow_decays
from dosekit.depths.deltas import carry_deltas
from dosekit.depths.leptons import carry_electrons
from dosekit.depths.products import Carried, charged_products, neutral_products
from dosekit.depths.scattered import Scattered, add_later, classes_of, width_of
from dosekit.depths.tables import GROUP_ENERGY_MEV

__all__ = ["Solution", "solve"]

_PION_REST = 139.57039
_ELECTRON_REST = 0.51099895
_NEUTRAL_STEPS = 2.0
"""Cell of neutral products, which vary slowly, in steps of residual range."""
_DECAY_STEPS = {"pi-": 2.0, "pi+": 0.5, "mu-": 0.5, "mu+": 0.5, "proton": 2.0}
"""Cell of decays in the same unit; electrons from a thin layer of stops have a sharp maximum there."""
_LEAST_DECAY_STEP_G_CM2 = 0.1
"""Electrons go 20 cm, however short the range of the beam is."""


@dataclass(frozen=True)
class Solution:
    """What one species does, per particle at depth 0.

    Attributes
    ----------
    species : str
        Beam particle.
    core : Core
        The beam before its first nuclear scattering.
    grid : CoarseGrid
        The coarse grid of everything else.
    deposit : dict of str to ndarray, shape (bins,)
        Energy per bin, MeV: core, scattered, in_flight_charged, in_flight_neutral, decay, capture_light, capture_heavy,
        capture_neutron, capture_photon (muon capture only).
    let : dict of str to ndarray, shape (bins,)
        Energy-averaged LET of the same parts, keV/um.
    stops : dict of str to ndarray, shape (bins,)
        Particles brought to rest: core, scattered.
    channels : dict of str to ndarray, shape (bins,)
        Reactions by channel, all generations, and ``decay`` (in flight).
    decays_at_rest : ndarray, shape (bins,)
        Decays of stopped particles.
    extra_sigma_mm : dict of str to ndarray, shape (bins,)
        Standard deviation of one transverse axis since the particle left the beam, mm: scattered, in_flight_charged,
        decay.
    classes : dict of str to (deposit, stops, sigma, unequal)
        Scattered particles in three classes of direction, ``scattered_near`` (cosine over 0.9), ``scattered_oblique``
        (0.5 to 0.9) and ``scattered_wide``: MeV and number per bin, standard deviation as above, mm, and the mean
        squared variance over its squared mean. The first two sum to ``scattered``.
    ledger : dict of str to float
        Energy, MeV: in, escaped, neutrino, binding, electron_rest and, for negative pions, star (rest energy given to
        captures).
    """

    species: str
    core: Core
    grid: CoarseGrid
    deposit: dict[str, NDArray[np.float64]] = field(repr=False)
    let: dict[str, NDArray[np.float64]] = field(repr=False)
    stops: dict[str, NDArray[np.float64]] = field(repr=False)
    channels: dict[str, NDArray[np.float64]] = field(repr=False)
    decays_at_rest: NDArray[np.float64] = field(repr=False)
    ledger: dict[str, float] = field(repr=False)
    extra_sigma_mm: dict[str, NDArray[np.float64]] = field(repr=False)
    classes: dict[str, tuple[NDArray[np.float64], ...]] = field(repr=False)


def solve(
    species: str,
    momentum: float,
    *,
    spread: float,
    layers: tuple[tuple[Material, float], ...],
    bin_mm: float,
    yields: str,
    nuclear: bool = True,
    decays: bool = True,
    width_mm: float | None = None,
    admixture: bool = False,
) -> Solution:
    """Follow one species through a stack.

    Parameters
    ----------
    species : str
        pi-, pi+, mu-, mu+, proton, e- or e+.
    momentum : float
        Mean momentum, MeV/c.
    spread : float
        Standard deviation of momentum over mean.
    layers : tuple of (Material, float)
        Materials and thicknesses, mm.
    bin_mm : float
        Bin, mm.
    yields : str
        Yield set.
    nuclear, decays : bool
        Whether reactions and decay happen.
    width_mm : float, optional
        Width of the square over which the energy of neutrons and photons is summed, mm.
    admixture : bool
        Whether this is a small part of a beam, for which wider cells of decays are enough.

    Returns
    -------
    Solution
        The result; the most recent ones are kept.
    """
    return _solve(
        species, float(momentum), float(spread), layers, float(bin_mm), yields, nuclear, decays, width_mm, admixture
    )


@lru_cache(maxsize=24)
def _solve(
    species: str,
    momentum: float,
    spread: float,
    layers: tuple[tuple[Material, float], ...],
    bin_mm: float,
    yields: str,
    nuclear: bool,
    decays: bool,
    width_mm: float | None,
    admixture: bool,
) -> Solution:
    """Put the parts together."""
    if species in ("e-", "e+"):
        return _electrons(species, momentum, spread, layers, bin_mm)
    core = solve_core(
        species, momentum, spread=spread, layers=layers, bin_mm=bin_mm, yields=yields, nuclear=nuclear, decays=decays
    )
    energy = float(kinetic_energy_mev(species, momentum))
    grid = coarse_grid(species, energy, layers=layers, edges_mm=core.edges_mm, layer=core.layer)
    top = float(np.max(core.event_energy, initial=energy))
    scattered = Scattered(species, core, grid, top, yields, nuclear=nuclear, decays=decays)
    parts: dict[str, Carried] = {"scattered": scattered.carried}
    charged = charged_products(species, scattered.core_reactions, grid, yields=yields)
    charged.add(charged_products(species, scattered.later_reactions, grid, yields=yields, isotropic=True))
    charged.deposit += scattered.recoil
    charged.let_weighted += scattered.recoil * 100.0
    parts["in_flight_charged"] = charged
    reacted = scattered.core_reactions + scattered.later_reactions
    steps = (
        _NEUTRAL_STEPS * grid.step_mm,
        max(
            (max(_DECAY_STEPS[species], 1.0) if admixture else _DECAY_STEPS[species]) * grid.step_mm,
            _LEAST_DECAY_STEP_G_CM2 * 10.0 / grid.reference.density_g_cm3,
        ),
    )
    wide, close = (
        coarse_grid(species, energy, layers=layers, edges_mm=core.edges_mm, layer=core.layer, step_mm=step)
        for step in steps
    )
    neutral, emitted = neutral_products(species, regrid(reacted, grid, wide), wide, yields=yields, width_mm=width_mm)
    decayed, rest = follow_decays(species, core, grid, close, scattered, yields, width_mm)

    to_bins = grid.to_bins
    built_up = carry_deltas(
        species,
        core.deposit,
        edges_mm=core.edges_mm,
        energy_mev=core.mean_energy,
        materials=tuple(stuff for stuff, _ in layers),
        layer=core.layer,
    )
    deposit = {"core": built_up, **{name: to_bins(part.deposit) for name, part in parts.items()}}
    deposit["in_flight_neutral"] = wide.to_bins(neutral)
    stopped = {"core": core.stops, "scattered": to_bins(scattered.carried.stops)}
    # the muon of a pion at rest goes 1.4 mm in water: it stays in its bin
    at_rest = (stopped["core"] + stopped["scattered"]) * (MUON_ENERGY_AT_REST_MEV if species == "pi+" else 0.0)
    deposit["decay"] = close.to_bins(decayed.deposit) + at_rest
    weighted = {"core": core.let_weighted, **{name: to_bins(part.let_weighted) for name, part in parts.items()}}
    weighted["decay"] = close.to_bins(decayed.let_weighted) + 1.5 * at_rest
    weighted["in_flight_neutral"] = 15.0 * deposit["in_flight_neutral"]
    for name, (amount, quality) in rest.capture.items():
        deposit[name] = close.to_bins(amount)
        weighted[name] = quality * deposit[name]
    let = {name: weighted[name] / np.where(deposit[name] > 1e-15, deposit[name], 1.0) for name in deposit}
    let["core"] = core.let_weighted / np.where(core.deposit > 1e-15, core.deposit, 1.0)
    channels = {name: core.channels[name].copy() for name in (*CHANNELS, "decay")}
    add_later(channels, scattered, grid, species, yields)

    rest_energy = particle(species).mass_mev if species != "proton" else 0.0
    stars = float(np.sum(core.stops) + np.sum(stopped["scattered"])) * _PION_REST if species == "pi-" else 0.0
    left = scattered.carried.stops.sum() - stopped["scattered"].sum()
    out = scattered.carried.escaped
    emitted_mev = math.fsum(float(np.sum(values)) for values in emitted.values())
    made = {name: part.deposit for name, part in parts.items()} | {"decay": decayed.deposit}
    made |= {name: amount for name, (amount, _) in rest.capture.items()}
    kept = {**deposit, "decay": deposit["decay"] - at_rest}
    escaped = math.fsum(
        [
            float(np.sum(core.deposit) - np.sum(built_up)),
            core.energy_out + float(core.number[-1]) * rest_energy,
            float(out[0] + out[2] + (out[1] + out[3]) * rest_energy),
            float(left) * {"pi-": _PION_REST, "pi+": MUON_ENERGY_AT_REST_MEV}.get(species, 0.0),
            float(charged.escaped[0] + charged.escaped[2]),
            emitted_mev - float(np.sum(kept["in_flight_neutral"])),
            # what lies in the last cells beyond the stack
            *(float(np.sum(values) - np.sum(kept[name])) for name, values in made.items()),
        ]
    )
    ledger = {
        "in": core.energy_in + rest_energy,
        "escaped": escaped + rest.escaped,
        "neutrino": rest.neutrino,
        "binding": _binding(species, reacted, grid, yields) + rest.binding,
        "electron_rest": rest.electron_rest,
        "star": stars,
    }
    return Solution(
        species, core, grid, deposit, let, stopped, channels,
        close.to_bins(rest.at_rest), ledger,
        {"decay": width_of(decayed, close), **{name: width_of(part, grid) for name, part in parts.items()}},
        classes_of(scattered.carried, grid),
    )  # fmt: skip


def _binding(species: str, reacted: NDArray[np.float64], grid: CoarseGrid, yields: str) -> float:
    """Return the energy bound in reactions, MeV."""
    total = 0.0
    for index, stuff in enumerate(grid.materials):
        table = reactions(species, stuff, yields=yields)
        here = np.sum(reacted[grid.stuff == index], axis=0)
        total += float(np.sum(here * table.at(table.reaction_share * table.binding_mev, GROUP_ENERGY_MEV)))
    return total


def _electrons(
    species: str,
    momentum: float,
    spread: float,
    layers: tuple[tuple[Material, float], ...],
    bin_mm: float,
) -> Solution:
    """Follow an electron beam: no unscattered part, only the coarse transport."""
    edges, layer = bin_edges(layers, bin_mm)
    energy = float(kinetic_energy_mev(species, momentum))
    total_mm = float(edges[-1])
    step = max(total_mm / 120.0, 1.0)
    grid = coarse_grid(species, energy, layers=layers, edges_mm=edges, layer=layer, step_mm=step)
    z = np.linspace(-2.0, 2.0, 9) if spread > 0.0 else np.zeros(1)
    weight = np.exp(-0.5 * z**2)
    energies = kinetic_energy_mev(species, momentum * np.maximum(1.0 + spread * z, 0.05))
    # they enter at the face and are carried from the middle of the first cell: the half step before is given here
    per_mm = 0.1 * grid.reference.density_g_cm3 * electron_stopping_powers(grid.reference, energies)[0]
    entered = np.maximum(energies - 0.5 * step * per_mm, 1e-3)
    first = float(np.sum((energies - entered) * weight) / np.sum(weight))
    number = np.zeros(grid.cells)
    number[0] = 1.0
    angular = np.zeros(len(COSINES))
    angular[-1] = 1.0
    run, photons = carry_electrons(
        (np.asarray(entered), weight / np.sum(weight)), number, angular, grid, positron=species == "e+"
    )
    run.deposit[0] += first
    run.let_weighted[0] += first * float(np.mean(per_mm))
    bins = len(layer)
    empty = np.zeros(bins)
    mean = float(np.sum(energies * weight) / np.sum(weight))
    core = Core(
        edges, layer, empty, empty, empty, dict.fromkeys((*CHANNELS, "decay"), empty),
        np.zeros(bins + 1), np.zeros(bins + 1), np.zeros((1, bins)), np.zeros((1, bins)), np.zeros((3, 1, bins)),
        np.zeros(bins + 1), np.zeros((1, bins + 1)), np.zeros((2, bins + 1)), mean, 0.0,
    )  # fmt: skip
    deposit = {"core": empty, "scattered": grid.to_bins(run.deposit)}
    weighted = grid.to_bins(run.let_weighted)
    let = {"core": empty, "scattered": weighted / np.where(deposit["scattered"] > 1e-15, deposit["scattered"], 1.0)}
    ledger = {
        "in": mean,
        "escaped": photons
        + float(run.escaped[0] + run.escaped[2] + np.sum(run.deposit) - np.sum(deposit["scattered"])),
        "neutrino": 0.0,
        "binding": 0.0,
        "electron_rest": -2.0 * _ELECTRON_REST * float(np.sum(run.stops)) if species == "e+" else 0.0,
        "star": 0.0,
    }
    for name in ("in_flight_charged", "in_flight_neutral", "decay"):
        deposit[name], let[name] = empty, empty
    return Solution(
        species, core, grid, deposit, let, {"core": empty, "scattered": grid.to_bins(run.stops)},
        dict.fromkeys((*CHANNELS, "decay"), empty), empty, ledger, {"scattered": width_of(run, grid)},
        classes_of(run, grid),
    )  # fmt: skip

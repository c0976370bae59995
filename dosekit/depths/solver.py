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
from dosekit.beams.decay import MICHEL_MEAN_ENERGY_MEV, MUON_ENERGY_AT_REST_MEV
from dosekit.beams.electrons import electron_stopping_powers
from dosekit.beams.reactions import CHANNELS, reactions
from dosekit.depths.angles import COSINES
from dosekit.depths.coarse import CoarseGrid, coarse_grid, regrid
from dosekit.depths.core import Core, bin_edges, solve_core
from dosekit.depths.deltas import carry_deltas
from dosekit.depths.kernels import gather_products, march, score_events
from dosekit.depths.leptons import carry_electrons, decay_muons, michel_electrons
from dosekit.depths.muons import muon_capture_products
from dosekit.depths.products import (
    AHEAD_COSINES,
    Carried,
    charged_products,
    neutral_products,
)
from dosekit.depths.tables import GROUP_ENERGY_MEV, SpeciesTable, node_spread, species_table

__all__ = ["Solution", "solve"]

_PION_REST = 139.57039
_MUON_REST = 105.6583755
_ELECTRON_REST = 0.51099895
_NEUTRAL_STEPS = 2.0
"""Cell of neutral products, which vary slowly, in steps of residual range."""
_DECAY_STEPS = {"pi-": 2.0, "pi+": 0.5, "mu-": 0.5, "mu+": 0.5, "proton": 2.0}
"""Cell of decays in the same unit; electrons from a thin layer of stops have a sharp maximum there."""
_LEAST_DECAY_STEP_G_CM2 = 0.1
"""Electrons go 20 cm, however short the range of the beam is."""
_NO_BREMSSTRAHLUNG = ("cascade",)
"""Yield sets whose results list no bremsstrahlung among their processes, and show no photons far from decays."""


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
    scattered = _Scattered(species, core, grid, top, yields, nuclear=nuclear, decays=decays)
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
    decayed, rest = _decays(species, core, grid, close, scattered, yields, width_mm)

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
    _add_later(channels, scattered, grid, species, yields)

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
        {"decay": _width(decayed, close), **{name: _width(part, grid) for name, part in parts.items()}},
        _classes(scattered.carried, grid),
    )  # fmt: skip


def _classes(part: Carried, grid: CoarseGrid) -> dict[str, tuple[NDArray[np.float64], ...]]:
    """Split scattered particles by direction: near the beam, oblique to it, and wide."""
    left_given, left_stopped, before = grid.to_bins(part.deposit), grid.to_bins(part.stops), np.zeros((4, grid.cells))
    result: dict[str, tuple[NDArray[np.float64], ...]] = {}
    for name, row in zip(("scattered_near", "scattered_oblique", "scattered_wide"), part.ahead, strict=True):
        own = row - before
        here = np.clip(grid.to_bins(own[0]), 0.0, left_given), np.clip(grid.to_bins(own[1]), 0.0, left_stopped)
        if name == "scattered_wide":
            here = left_given, left_stopped
        left_given, left_stopped, before = left_given - here[0], left_stopped - here[1], row
        width = _spread(own[2], own[0], grid)
        unequal = _spread(own[3], own[0], grid) / np.maximum(width**2, 1e-12)  # both are roots
        result[name] = (*here, width, np.where(width > 0.0, unequal**2, 1.0))
    return result


def _width(part: Carried, grid: CoarseGrid) -> NDArray[np.float64]:
    """Return the standard deviation of one transverse axis in fine bins, mm."""
    return _spread(part.sideways, part.deposit, grid)


def _spread(sideways: NDArray[np.float64], deposit: NDArray[np.float64], grid: CoarseGrid) -> NDArray[np.float64]:
    """Return the root of the mean variance in fine bins, mm; cells without deposit take their neighbours'."""
    variance = sideways / np.where(deposit > 1e-15, deposit, 1.0)
    known = np.flatnonzero(deposit > 1e-9 * max(float(np.max(deposit)), 1e-300))
    if len(known) == 0:
        return np.zeros(len(grid.place_of_edge) - 1)
    middle = 0.5 * (grid.place_of_edge[1:] + grid.place_of_edge[:-1]) - 0.5
    return np.asarray(np.sqrt(np.maximum(np.interp(middle, known, variance[known]), 0.0)))


class _Scattered:
    """Beam particles after their first nuclear scattering, all generations."""

    def __init__(
        self, species: str, core: Core, grid: CoarseGrid, top: float, yields: str, *, nuclear: bool, decays: bool
    ) -> None:
        groups = len(GROUP_ENERGY_MEV)
        from dosekit.beams.ranges import range_table

        reach = float(range_table(species, grid.reference).range_mm(top))
        nodes = 8 * (int(np.ceil(reach / grid.step_mm / 8.0)) + 1)
        table = species_table(
            species,
            grid.reference,
            grid.materials,
            step_mm=grid.step_mm,
            nodes=nodes,
            yields=yields,
            nuclear=nuclear,
            decays=decays,
        )
        by_node = np.zeros((2, grid.cells, nodes))
        by_group = np.zeros((2, grid.cells, groups))
        score_events(
            core.events,
            core.event_energy,
            grid.cell_of_bin,
            core.event_parts,
            table.energy,
            GROUP_ENERGY_MEV,
            by_node,
            by_group,
        )
        source = np.zeros((nodes, grid.cells, len(COSINES)))
        self.recoil = np.zeros(grid.cells)
        self.carried = Carried(grid.cells)
        self.core_reactions, self.core_decays = by_group[0], by_group[1]
        self.later_reactions, self.later_decays = np.zeros((grid.cells, groups)), np.zeros((grid.cells, groups))
        self.counts = np.zeros((3, grid.cells))
        self.forward = np.zeros((2, grid.cells))
        if nuclear and np.any(by_node > 0.0):
            scattered = np.stack([node_spread(row[:, None], table.energy) for row in table.elastic_to])
            gather_products(by_node[0], grid.stuff, scattered, table.start_elastic, source)
            for spread, angular in zip(table.reemit, table.start_reemit, strict=True):
                gather_products(by_node[1], grid.stuff, spread, angular, source)
            loss = table.energy[None, :] - table.elastic_to
            self.recoil += np.sum(by_node[0] * loss[grid.stuff], axis=1)
            self.recoil += self._run(table, grid, source)

    def _run(self, table: SpeciesTable, grid: CoarseGrid, source: NDArray[np.float64]) -> NDArray[np.float64]:
        """Carry all generations."""
        result: NDArray[np.float64] = march(
            source, COSINES, grid.step_mm, table.energy, table.let, grid.stuff, table.chance, table.parts,
            table.elastic_to, table.reemit, table.turn_elastic, table.turn_reemit, np.zeros((0, 0, 0)), np.zeros(0),
            table.group_low, table.group_weight, self.carried.deposit, self.carried.let_weighted,
            self.carried.stops, self.counts, self.later_reactions, self.later_decays, self.forward,
            self.carried.escaped, np.zeros((0, 0)), self.carried.sideways,
            AHEAD_COSINES, self.carried.ahead,
        )  # fmt: skip
        return result


@dataclass
class _Rest:
    """What happens to particles at rest and to neutrinos, by cell and in sum."""

    at_rest: NDArray[np.float64]
    capture: dict[str, tuple[NDArray[np.float64], float]]
    neutrino: float = 0.0
    escaped: float = 0.0
    binding: float = 0.0
    electron_rest: float = 0.0


def _decays(
    species: str,
    core: Core,
    fine: CoarseGrid,
    grid: CoarseGrid,
    scattered: _Scattered,
    yields: str,
    width_mm: float | None,
) -> tuple[Carried, _Rest]:
    """Follow muons and electrons from decays in flight and at rest."""
    total = Carried(grid.cells)
    rest = _Rest(np.zeros(grid.cells), {})
    if species == "proton":
        return total, rest
    positive = species in ("pi+", "mu+")
    muon = "mu+" if positive else "mu-"
    stopped = grid.to_cells(core.stops) + regrid(scattered.carried.stops, fine, grid)
    first, later = (regrid(rows, fine, grid) for rows in (scattered.core_decays, scattered.later_decays))
    muons = np.zeros(grid.cells)
    electrons = np.zeros(grid.cells)
    if species in ("pi-", "pi+"):
        for decays, isotropic in ((first, False), (later, True)):
            flown = decay_muons(muon, decays, grid, isotropic=isotropic)
            total.add(flown)
            muons += flown.stops
            count = np.sum(decays, axis=0)
            pion = float(np.sum(count * (GROUP_ENERGY_MEV + _PION_REST)))
            gone = float(flown.escaped[0] + flown.escaped[2] + (flown.escaped[1] + flown.escaped[3]) * _MUON_REST)
            rest.escaped += gone
            rest.neutrino += pion * (1.0 - (MUON_ENERGY_AT_REST_MEV + _MUON_REST) / _PION_REST)
        if positive:
            rest.at_rest = stopped.copy()
            rest.neutrino += float(np.sum(stopped)) * (_PION_REST - MUON_ENERGY_AT_REST_MEV - _MUON_REST)
            muons += stopped
    else:
        muons += stopped
        # muons that decay in flight: their electron starts where they are, boost neglected
        flying = np.sum(first + later, axis=1)
        count = np.sum(first + later, axis=0)
        rest.neutrino += float(np.sum(count * GROUP_ENERGY_MEV))
        electrons += flying
    caught = np.zeros(grid.cells)
    if not positive:
        products = muon_capture_products(muons, grid, yields=yields, width_mm=width_mm)
        caught = products.caught
        rest.capture.update(products.deposit)
        rest.neutrino += products.neutrino
        rest.escaped += products.escaped
        rest.binding += products.binding
    electrons += muons - caught
    if not species.startswith("pi"):
        rest.at_rest = muons - caught
    run, photons = michel_electrons(
        electrons, grid, positron=positive, radiates=yields not in _NO_BREMSSTRAHLUNG, width_mm=width_mm
    )
    total.add(run)
    gone_number = float(run.escaped[1] + run.escaped[3])
    number = float(np.sum(electrons))
    rest.escaped += photons + float(run.escaped[0] + run.escaped[2]) + gone_number * _ELECTRON_REST
    # an electron keeps its rest energy; a positron gives its own and that of an electron of the medium to photons
    rest.electron_rest += (number - gone_number) * (-_ELECTRON_REST if positive else _ELECTRON_REST)
    rest.neutrino += number * (_MUON_REST - MICHEL_MEAN_ENERGY_MEV - _ELECTRON_REST)
    return total, rest


def _binding(species: str, reacted: NDArray[np.float64], grid: CoarseGrid, yields: str) -> float:
    """Return the energy bound in reactions, MeV."""
    total = 0.0
    for index, stuff in enumerate(grid.materials):
        table = reactions(species, stuff, yields=yields)
        here = np.sum(reacted[grid.stuff == index], axis=0)
        total += float(np.sum(here * table.at(table.reaction_share * table.binding_mev, GROUP_ENERGY_MEV)))
    return total


def _add_later(
    channels: dict[str, NDArray[np.float64]], scattered: _Scattered, grid: CoarseGrid, species: str, yields: str
) -> None:
    """Add events of scattered particles, split by channel at their energy groups."""
    channels["elastic"] += grid.to_bins(scattered.counts[0])
    channels["decay"] += grid.to_bins(scattered.counts[2])
    split = {name: np.zeros(grid.cells) for name in CHANNELS}
    for index, stuff in enumerate(grid.materials):
        table = reactions(species, stuff, yields=yields)
        rows = {name: table.at(table.per_mm[name], GROUP_ENERGY_MEV) for name in CHANNELS[:3]}
        rows["elastic"] = table.at(table.struck_hydrogen_per_mm, GROUP_ENERGY_MEV)
        total = np.maximum(sum(rows.values()), 1e-30)
        here = grid.stuff == index
        for name, row in rows.items():
            split[name][here] = scattered.later_reactions[here] @ (row / total)
    for name, values in split.items():
        channels[name] += grid.to_bins(values)


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
        dict.fromkeys((*CHANNELS, "decay"), empty), empty, ledger, {"scattered": _width(run, grid)},
        _classes(run, grid),
    )  # fmt: skip

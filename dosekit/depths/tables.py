"""What can happen to a particle on its way down one step of residual range? Tables for the transport.

All particles other than the unscattered beam move in steps of a fixed residual range h in a reference material (the
medium itself where it is uniform, else water). This file turns cross sections, decay, emission spectra and angles into
numbers per step and node for each material of a stack.

Spectra of emitted particles are beta distributions on (0, highest energy) with the mean and the root mean square of the
tables; angles follow exp(kappa cos) with the mean cosine of the tables. Protons that come out of reactions of protons
go the more ahead the more energy they keep: kappa is proportional to the slope a(E) of C. Kalbach, Phys. Rev. C 37
(1988) 2350 (from memory), with a factor such that the mean cosine (weighted by energy) is the tabled one. Protons and
the hydrogen that they strike share the energy evenly between nothing and all, and the angle follows from it.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv

from dosekit.basis.materials import Material
from dosekit.basis.particles import particle
from dosekit.beams.decay import decay_per_mm
from dosekit.beams.ranges import range_table
from dosekit.beams.reactions import Reactions, reactions
from dosekit.depths.angles import COSINES, kappa_of, ring_shares, shares

__all__ = [
    "GROUP_ENERGY_MEV",
    "SpeciesTable",
    "beta_samples",
    "group_weights",
    "node_spread",
    "product_spread",
    "species_table",
]

GROUP_ENERGY_MEV: NDArray[np.float64] = np.array([0.0, 5, 10, 20, 30, 40, 50, 60, 70, 80, 100, 120, 150, 200, 260.0])
"""Energies of the projectile between which products of reactions and decays are interpolated, MeV."""

_SAMPLES = 24
_ENERGY_CLASSES = 4  # of what comes out of a nucleus
_KALBACH_LIMITS_MEV = (130.0, 41.0)
_PAIR_CLASSES = 6  # of two protons that share the energy


@dataclass(frozen=True)
class SpeciesTable:
    """Numbers per step for one species.

    Attributes
    ----------
    name : str
        Species.
    step_mm : float
        Step of residual range in the reference material, mm.
    energy : ndarray, shape (nodes,)
        Energy with residual range k h, MeV.
    let : ndarray, shape (materials, nodes)
        Stopping power on the way down from a node, keV/um (MeV/mm).
    chance, parts : ndarray, shape (materials, nodes) and (materials, nodes, 3)
        Chance of an event and its parts elastic, reaction, decay.
    elastic_to : ndarray, shape (materials, nodes)
        Energy after elastic scattering, MeV.
    reemit : ndarray, shape (classes, materials, nodes, nodes)
        Particles of the same kind after a reaction, in classes of energy with directions of their own.
    turn_elastic : ndarray, shape (materials, nodes, 16, 16)
        Directions after elastic scattering.
    turn_reemit : ndarray, shape (classes, materials, nodes, 16, 16)
        Directions after reactions.
    start_elastic : ndarray, shape (materials, nodes, 16)
        Directions after elastic scattering of the beam.
    start_reemit : ndarray, shape (classes, materials, nodes, 16)
        Directions after reactions of the beam.
    group_low, group_weight : ndarray, shape (nodes,)
        Energy group of a node and share of the next one.
    """

    name: str
    step_mm: float
    energy: NDArray[np.float64] = field(repr=False)
    let: NDArray[np.float64] = field(repr=False)
    chance: NDArray[np.float64] = field(repr=False)
    parts: NDArray[np.float64] = field(repr=False)
    elastic_to: NDArray[np.float64] = field(repr=False)
    reemit: NDArray[np.float64] = field(repr=False)
    turn_elastic: NDArray[np.float64] = field(repr=False)
    turn_reemit: NDArray[np.float64] = field(repr=False)
    start_elastic: NDArray[np.float64] = field(repr=False)
    start_reemit: NDArray[np.float64] = field(repr=False)
    group_low: NDArray[np.int64] = field(repr=False)
    group_weight: NDArray[np.float64] = field(repr=False)


def group_weights(energy_mev: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return the energy group below each energy and the share of the group above.

    Parameters
    ----------
    energy_mev : ndarray
        Energies, MeV.

    Returns
    -------
    low : ndarray of int
        Index into `GROUP_ENERGY_MEV`.
    weight : ndarray
        Share of the next group, 0 to 1.
    """
    low = np.clip(np.searchsorted(GROUP_ENERGY_MEV, energy_mev) - 1, 0, len(GROUP_ENERGY_MEV) - 2)
    gap = GROUP_ENERGY_MEV[low + 1] - GROUP_ENERGY_MEV[low]
    return low.astype(np.int64), np.clip((energy_mev - GROUP_ENERGY_MEV[low]) / gap, 0.0, 1.0)


def beta_samples(
    mean: NDArray[np.float64], rms: NDArray[np.float64], top: NDArray[np.float64], *, samples: int = _SAMPLES
) -> NDArray[np.float64]:
    """Return equally likely energies of a beta distribution on (0, top), scaled to the exact mean.

    Parameters
    ----------
    mean, rms, top : ndarray, shape (n,)
        Mean, root mean square and highest energy, MeV.
    samples : int
        Energies per distribution.

    Returns
    -------
    ndarray, shape (n, samples)
        Energies, MeV, ascending.
    """
    share = np.clip(mean / np.maximum(top, 1e-9), 1e-6, 0.98)
    variance = np.clip((rms**2 - mean**2) / np.maximum(top, 1e-9) ** 2, 1e-6, 0.95 * share * (1.0 - share))
    total = share * (1.0 - share) / variance - 1.0
    alpha, beta = np.maximum(share * total, 0.05), np.maximum((1.0 - share) * total, 0.05)
    middle = (np.arange(samples) + 0.5) / samples
    drawn = betaincinv(alpha[:, None], beta[:, None], middle[None, :]) * top[:, None]
    found = np.mean(drawn, axis=1)
    return np.asarray(np.minimum(drawn * (mean / np.maximum(found, 1e-12))[:, None], top[:, None]))


def node_spread(energy_mev: NDArray[np.float64], nodes_mev: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return sets of energies as numbers on nodes; linear weights keep number and energy.

    Parameters
    ----------
    energy_mev : ndarray, shape (n, samples)
        Equally likely energies, MeV; those above the last node are put on it.
    nodes_mev : ndarray, shape (nodes,)
        Node energies, ascending from 0.

    Returns
    -------
    ndarray, shape (n, nodes)
        Numbers that sum to 1 per row.
    """
    n, samples = energy_mev.shape
    nodes = len(nodes_mev)
    low = np.clip(np.searchsorted(nodes_mev, energy_mev) - 1, 0, nodes - 2)
    weight = np.clip((energy_mev - nodes_mev[low]) / (nodes_mev[low + 1] - nodes_mev[low]), 0.0, 1.0)
    rows = np.repeat(np.arange(n), samples) * nodes
    flat = np.bincount(rows + low.ravel(), weights=(1.0 - weight).ravel(), minlength=n * nodes)
    flat = flat + np.bincount(rows + low.ravel() + 1, weights=weight.ravel(), minlength=n * nodes)
    return np.asarray(flat.reshape(n, nodes) / samples)


def product_spread(
    table: Reactions, species: str, nodes_mev: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return a product of reactions by energy group of the projectile: numbers on nodes and shares by direction.

    Parameters
    ----------
    table : Reactions
        Reactions in one material.
    species : str
        Product.
    nodes_mev : ndarray, shape (nodes,)
        Node energies of the product.

    Returns
    -------
    spread : ndarray, shape (groups, nodes)
        Particles per reaction.
    angular : ndarray, shape (groups, 16)
        Shares by direction, about the direction of the beam.
    """
    group = GROUP_ENERGY_MEV
    share = table.reaction_share
    number = table.at(share * table.number[species], group)
    held = table.at(share * table.number[species] * table.mean_energy_mev[species], group)
    mean = held / np.where(number > 0.0, number, 1.0)
    rms = table.at(table.rms_energy_mev[species], group)
    available = group + (139.57 if table.projectile in ("pi-", "pi+") else 0.0)
    top = np.maximum(np.maximum(available - 8.0, 1.2 * mean), 0.5)
    samples = beta_samples(np.maximum(mean, 1e-6), np.maximum(rms, mean), top, samples=40)
    angular = shares(kappa_of(table.at(table.mean_cosine[species], group)))
    return node_spread(samples, nodes_mev) * number[:, None], angular


def species_table(
    name: str,
    reference: Material,
    materials: tuple[Material, ...],
    *,
    step_mm: float,
    nodes: int,
    yields: str,
    nuclear: bool = True,
    decays: bool = True,
) -> SpeciesTable:
    """Return the numbers per step of a species in the materials of a stack.

    Parameters
    ----------
    name : str
        Species.
    reference : Material
        Material in which residual range is counted.
    materials : tuple of Material
        Materials of the stack.
    step_mm : float
        Step, mm of the reference.
    nodes : int
        Number of nodes, 0 included.
    yields : str
        Yield set.
    nuclear, decays : bool
        Whether reactions and decay happen.

    Returns
    -------
    SpeciesTable
        The numbers; made once, then kept.
    """
    return _species_table(name, reference, materials, float(step_mm), int(nodes), yields, nuclear, decays)


@lru_cache(maxsize=64)
def _species_table(
    name: str,
    reference: Material,
    materials: tuple[Material, ...],
    step: float,
    nodes: int,
    yields: str,
    nuclear: bool,
    decays: bool,
) -> SpeciesTable:
    """Make the numbers per step."""
    energy = range_table(name, reference).energy_mev(step * np.arange(nodes))
    middle = np.concatenate([[0.5 * energy[1]], 0.5 * (energy[1:] + energy[:-1])])
    middle = np.maximum(middle, 1e-3)
    count = len(materials)
    directions = len(COSINES)
    let = np.empty((count, nodes))
    chance = np.zeros((count, nodes))
    parts = np.zeros((count, nodes, 3))
    elastic_to = np.tile(energy, (count, 1))
    classes = _ENERGY_CLASSES + _PAIR_CLASSES if name == "proton" else 1
    reemit = np.zeros((classes, count, nodes, nodes))
    turn_elastic = np.zeros((count, nodes, directions, directions))
    turn_reemit = np.zeros((classes, count, nodes, directions, directions))
    start_elastic = np.zeros((count, nodes, directions))
    start_reemit = np.zeros((classes, count, nodes, directions))
    base = range_table(name, reference).stopping_mev_mm(middle)
    for m, stuff in enumerate(materials):
        stopping = range_table(name, stuff).stopping_mev_mm(middle)
        let[m] = stopping
        path = step * base / stopping
        rates = np.zeros((nodes, 3))
        if decays:
            rates[:, 2] = decay_per_mm(name, middle)
        if nuclear and name in ("pi-", "pi+", "proton"):
            table = reactions(name, stuff, yields=yields)
            rates[:, 0] = table.at(table.per_mm["elastic"], middle)
            struck = table.at(table.struck_hydrogen_per_mm, middle)
            rates[:, 1] = table.at(table.reaction_per_mm, middle) + struck
            elastic_to[m] = np.maximum(energy - table.at(table.elastic_loss_mev, energy), 0.0)
            top = np.maximum(energy - 1.0, 0.05)
            number = table.at(table.number[name], energy)
            mean = np.clip(table.at(table.mean_energy_mev[name], energy), 1e-3, 0.97 * top)
            rms = np.clip(table.at(table.rms_energy_mev[name], energy), mean, np.sqrt(mean * top))
            share = table.at(table.reaction_share, energy)
            drawn = beta_samples(mean, rms, top)
            cosine = table.at(table.mean_cosine[name], energy)
            kappa = kappa_of(cosine)[:, None]
            if name == "proton":
                kappa = _slopes(drawn, cosine, energy)
            out = np.split(drawn, kappa.shape[1], axis=1)
            for n, part in enumerate(out):
                reemit[n, m] = node_spread(part, energy) * (share * number / len(out))[:, None]
                turn_reemit[n, m] = shares(kappa[:, n, None], COSINES[None, :])
                start_reemit[n, m] = shares(kappa[:, n])
            for n in range(len(out), classes):
                part, ahead = _pair(energy, n - len(out))
                reemit[n, m] = 2.0 * (1.0 - share)[:, None] * node_spread(part, energy) / _PAIR_CLASSES
                turn_reemit[n, m] = ring_shares(ahead[:, None, :], COSINES[None, :, None]).mean(axis=2)
                start_reemit[n, m] = ring_shares(ahead).mean(axis=1)
            bounces = sum(table.at(rate, energy) for rate, _ in table.elastic_laws)
            for rate, steep in table.elastic_laws:
                kappa = table.at(steep, energy)
                part = table.at(rate, energy) / np.maximum(bounces, 1e-30)
                turn_elastic[m] += part[:, None, None] * shares(kappa[:, None], COSINES[None, :])
                start_elastic[m] += part[:, None] * shares(kappa)
        total = np.sum(rates, axis=1)
        chance[m] = -np.expm1(-total * path)
        parts[m] = rates / np.where(total > 0.0, total, 1.0)[:, None]
    low, weight = group_weights(energy)
    return SpeciesTable(
        name, step, energy, let, chance, parts, elastic_to, reemit, turn_elastic, turn_reemit, start_elastic,
        start_reemit, low, weight,
    )  # fmt: skip


def _slopes(
    drawn_mev: NDArray[np.float64], mean_cosine: NDArray[np.float64], before_mev: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return kappa of each energy class: Kalbach's slope times a factor that gives the mean cosine.

    a = 0.04 X + 1.8e-6 X^3 + 6.7e-7 Y^4 with X and Y the emitted energy times the smaller of 1 and 130 MeV (41 MeV for
    Y) over the energy before; binding energies are left out.
    """
    classes = np.stack(np.split(drawn_mev, _ENERGY_CLASSES, axis=1), axis=1)
    energy = classes.mean(axis=2)
    part = energy / np.maximum(before_mev, 1e-6)[:, None]
    x, y = (part * np.minimum(before_mev, limit)[:, None] for limit in _KALBACH_LIMITS_MEV)
    slope = 0.04 * x + 1.8e-6 * x**3 + 6.7e-7 * y**4
    weight = energy / np.maximum(energy.sum(axis=1, keepdims=True), 1e-12)
    low, high = np.zeros(len(energy)), np.full(len(energy), 200.0)
    for _ in range(40):
        factor = 0.5 * (low + high)
        kappa = np.clip(factor[:, None] * slope, 1e-3, 400.0)
        found = (weight * (1.0 / np.tanh(kappa) - 1.0 / kappa)).sum(axis=1)
        low, high = np.where(found < mean_cosine, factor, low), np.where(found < mean_cosine, high, factor)
    return np.asarray(np.minimum(0.5 * (low + high)[:, None] * slope, 400.0))


def _pair(energy_mev: NDArray[np.float64], which: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return energies in one class of two protons that share the energy, and the cosines at which they go.

    cos^2 = E (T + 2 m) / (T (E + 2 m)), from the conservation of energy and momentum.
    """
    per_class = _SAMPLES // _PAIR_CLASSES
    part = (np.arange(per_class) + which * per_class + 0.5) / _SAMPLES
    mass = 2.0 * particle("proton").mass_mev
    held = energy_mev[:, None] * part[None, :]
    return held, np.sqrt(part * (energy_mev[:, None] + mass) / (held + mass))

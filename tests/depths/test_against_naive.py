"""Fast transport against the readable oracle."""

from __future__ import annotations

import numpy as np
import pytest

import dosekit as dk
from dosekit.basis.particles import particle
from dosekit.beams.ranges import range_table
from dosekit.beams.scattering import scattering_power_rad2_mm
from dosekit.beams.straggling import range_shape, range_variance_mm2
from dosekit.depths.angles import COSINES
from dosekit.depths.coarse import coarse_grid
from dosekit.depths.core import solve_core
from dosekit.depths.products import carry

import naive

pytestmark = pytest.mark.naive


@pytest.mark.parametrize("cells", [7, 23])
def test_particles_carried_in_moving_frames(cells, rng):
    layers = ((dk.material("water"), 3.0 * cells),)
    edges = np.linspace(0.0, 3.0 * cells, 3 * cells + 1)
    grid = coarse_grid(
        "proton", 50.0, layers=layers, edges_mm=edges, layer=np.zeros(3 * cells, dtype=np.int64), step_mm=3.0
    )
    assert grid.cells == cells
    nodes = range_table("proton", "water").energy_mev(3.0 * np.arange(11))
    source = rng.random((11, cells, 16)) * (rng.random((11, cells, 16)) < 0.05)
    deposit, stops, escaped = naive.carried_straight(source, COSINES, 3.0, nodes, cells)
    scores = carry(source.copy(), grid, nodes, np.ones((1, 11)))
    np.testing.assert_allclose(scores.deposit, deposit, rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(scores.stops, stops, rtol=1e-10, atol=1e-12)
    assert scores.escaped[0] + scores.escaped[2] == pytest.approx(escaped, rel=1e-10)


def test_slowing_down_with_straggling():
    water = dk.material("water")
    core = solve_core(
        "pi-",
        140.0,
        spread=0.0,
        layers=((water, 150.0),),
        bin_mm=2.5,
        yields="cascade",
        nuclear=False,
        decays=False,
        detour=False,
    )
    table = range_table("pi-", water)
    energy = float(dk.Beam("pi-", momentum_mev_c=140).kinetic_energy_mev)
    reach = float(table.range_mm(energy))
    left = table.energy_mev(np.maximum(reach - core.edges_mm, 0.0))
    deviation = np.sqrt(range_variance_mm2("pi-", water, energy) - range_variance_mm2("pi-", water, left))
    x, density = range_shape("pi-", water, energy)
    slow = naive.slowing_down(
        table.energy_mev, reach, core.edges_mm, core.edges_mm, deviation, x[::4], density[::4] / np.sum(density[::4])
    )
    # classes are a fifth of the deviation wide, and the fast code adds the 0.03 mm of Lewis (1952)
    np.testing.assert_allclose(core.deposit, slow, rtol=0.0, atol=1e-2 * max(slow))
    assert float(np.sum(core.deposit)) == pytest.approx(sum(slow), rel=2e-4)


@pytest.mark.slow
@pytest.mark.parametrize(("name", "start_mev"), [("pi-", 80.384), ("proton", 150.0)])
def test_stops_against_histories(name, start_mev, rng):
    """Mean, deviation and Gaussian core of stops; the core feels the shape, which is Vavilov's to first order."""
    water = dk.material("water")
    table = range_table(name, water)
    depth = naive.stopping_depths(
        start_mev,
        mass_mev=particle(name).mass_mev,
        electrons_per_mm3=water.electron_density_per_cm3 * 1e-3,
        stopping_mev_mm=table.stopping_mev_mm,
        scattering_rad2_mm=lambda t: scattering_power_rad2_mm(name, water, t, start_energy_mev=start_mev),
        step_mm=0.5,
        cut_mev=0.05,
        count=20000,
        rng=rng,
    )
    curve = dk.depth_curve(
        dk.Beam(name, kinetic_energy_mev=start_mev), water, nuclear=False, decays=False, bin_mm=0.25, depth_mm=220.0
    )
    z, stops = curve["depth"].to_numpy(), curve["stops"].to_numpy() * 0.25
    mean = float(np.sum(z * stops))
    deviation = float(np.sqrt(np.sum((z - mean) ** 2 * stops)))
    noise = deviation / np.sqrt(len(depth))
    # half a per mille of the range and the noise of the histories
    assert mean == pytest.approx(np.mean(depth), abs=5e-4 * mean + 3.0 * noise)
    assert deviation == pytest.approx(np.std(depth), rel=0.03)
    assert np.interp(0.5, np.cumsum(stops), z + 0.125) == pytest.approx(np.median(depth), abs=5e-4 * mean + 4.0 * noise)

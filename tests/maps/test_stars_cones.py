"""Directions and sweeps: quadrature, conservation, transposes, symmetry, density scaling, threads."""

from __future__ import annotations

import numba
import numpy as np
import pytest

from dosekit.errors import InputError
from dosekit.maps.cones import Cones
from dosekit.maps.cones_directions import DIRECTION_SETS, direction_set
from dosekit.maps.stars_coarse import Blocks, block_factors

import naive

RATES = np.array([0.05, 0.3, 2.0])


@pytest.mark.parametrize("count", list(DIRECTION_SETS))
def test_directions_integrate_low_polynomials(count):
    """Each set has the cube's symmetry and integrates x^2 and x^4 over the sphere exactly (1/3 and 1/5)."""
    units, weights = direction_set(count)
    assert units.shape == (count, 3)
    assert weights.min() > 0.0
    np.testing.assert_allclose(np.linalg.norm(units, axis=1), 1.0, atol=1e-12)
    for axis in range(3):
        assert weights @ units[:, axis] == pytest.approx(0.0, abs=1e-12)
        assert weights @ units[:, axis] ** 2 == pytest.approx(1 / 3, abs=1e-9)
        assert weights @ units[:, axis] ** 4 == pytest.approx(1 / 5, abs=1e-9)


def test_unknown_sets_and_empty_emission_are_refused():
    with pytest.raises(InputError, match="26, 50"):
        direction_set(49)
    with pytest.raises(InputError, match="weight"):
        Cones((1.0, 1.0, 1.0), 26, lambda units: np.zeros(len(units))).lines()


@pytest.mark.naive
@pytest.mark.parametrize("spacing", [(1.0, 1.0, 1.0), (1.0, 1.7, 2.5)])
def test_sweeps_equal_rays_followed_one_by_one(rng, spacing):
    scale = rng.uniform(0.0, 2.0, (3, 4, 3))
    emitted = rng.uniform(-0.2, 1.0, (3, 3, 4, 3))
    cones = Cones(spacing, 26)
    fast = cones.carry(scale, RATES, sources_mev=emitted)
    np.testing.assert_allclose(fast, naive.carry_along(cones.lines(), scale, RATES, emitted), rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("count", [26, 86])
def test_stops_and_sources_say_the_same(rng, count):
    shape = (6, 5, 7)
    scale, stops = rng.uniform(0.1, 1.5, shape), rng.uniform(0.0, 1.0, shape)
    index, energies = rng.integers(0, 2, shape).astype(np.uint16), rng.normal(size=(2, 3))
    cones = Cones((1.0, 1.2, 0.9), count)
    first = cones.carry(scale, RATES, stops=stops, material=index, energies_mev=energies)
    second = cones.carry(scale, RATES, sources_mev=np.moveaxis(energies[index] * stops[..., None], -1, 0))
    np.testing.assert_allclose(first, second, rtol=1e-10, atol=1e-12)


@pytest.mark.parametrize("widening", [False, True])
def test_no_energy_is_made_and_all_is_kept_in_a_large_body(rng, widening):
    scale = np.ones((25, 25, 25))
    emitted = np.zeros((3, 25, 25, 25))
    emitted[:, 12, 12, 12] = (1.0, 2.0, 3.0)
    cones = Cones((20.0, 20.0, 20.0), 50)
    left = cones.carry_widening(scale, RATES, emitted) if widening else cones.carry(scale, RATES, sources_mev=emitted)
    assert left.min() >= 0.0
    assert left.sum() == pytest.approx(6.0, rel=1e-5)
    thin = (
        cones.carry_widening(0.01 * scale, RATES, emitted)
        if widening
        else cones.carry(0.01 * scale, RATES, sources_mev=emitted)
    )
    assert 0.0 < thin.sum() < 6.0


def test_empty_space_takes_nothing():
    scale = np.ones((9, 9, 9))
    scale[:, :, 5:] = 0.0
    emitted = np.zeros((3, 9, 9, 9))
    emitted[:, 4, 4, 4] = 1.0
    left = Cones((1.0, 1.0, 1.0), 50).carry(scale, RATES, sources_mev=emitted)
    assert left[:, :, 5:].max() == 0.0


def test_a_gap_of_air_is_crossed():
    """Beyond a gap lies what would lie there without the gap, for rays along the axis."""
    rates = np.array([0.2])
    plain, gap = np.ones((1, 1, 12)), np.ones((1, 1, 12))
    gap[..., 4:8] = 0.0
    emitted = np.zeros((1, 1, 1, 12))
    emitted[..., 0] = 1.0
    only_x = Cones((1.0, 1.0, 1.0), 26, lambda units: (units[:, 0] > 0.99).astype(float))
    a = only_x.carry(plain, rates, sources_mev=emitted)[0, 0]
    b = only_x.carry(gap, rates, sources_mev=emitted)[0, 0]
    np.testing.assert_allclose(b[8:], a[4:8], rtol=1e-12)
    np.testing.assert_allclose(b[:4], a[:4], rtol=1e-12)


@pytest.mark.parametrize("widening", [False, True])
def test_cube_symmetry(widening):
    """A point in the middle of a uniform cube: the result does not change under the cube's 48 turns and mirrors."""
    scale = np.ones((11, 11, 11))
    emitted = np.zeros((3, 11, 11, 11))
    emitted[:, 5, 5, 5] = 1.0
    cones = Cones((2.0, 2.0, 2.0), 86)
    left = cones.carry_widening(scale, RATES, emitted) if widening else cones.carry(scale, RATES, sources_mev=emitted)
    for order in ((0, 2, 1), (1, 0, 2), (2, 1, 0), (1, 2, 0)):
        np.testing.assert_allclose(left.transpose(order), left, rtol=1e-10, atol=1e-13)
    for axis in range(3):
        np.testing.assert_allclose(np.flip(left, axis), left, rtol=1e-10, atol=1e-13)


def test_density_scales_distances(rng):
    """Spacing halved and density doubled leaves every voxel's energy (Fano, O'Connor)."""
    scale = rng.uniform(0.2, 1.5, (6, 7, 5))
    emitted = rng.uniform(0.0, 1.0, (3, 6, 7, 5))
    wide = Cones((2.0, 3.0, 2.5), 50).carry(scale, RATES, sources_mev=emitted)
    dense = Cones((1.0, 1.5, 1.25), 50).carry(2.0 * scale, RATES, sources_mev=emitted)
    np.testing.assert_allclose(dense, wide, rtol=1e-12)


@pytest.mark.parametrize("widening", [False, True])
@pytest.mark.parametrize("shape", [(5, 8, 6), (9, 4, 7), (1, 6, 6)])
def test_transposes_are_exact(rng, shape, widening):
    scale = rng.uniform(0.0, 1.5, shape)
    emitted, wanted = rng.normal(size=(3, *shape)), rng.normal(size=shape)
    cones = Cones((1.0, 1.4, 2.2), 50)
    if widening:
        forward, back = cones.carry_widening(scale, RATES, emitted), cones.gather_widening(scale, RATES, wanted)
    else:
        forward, back = cones.carry(scale, RATES, sources_mev=emitted), cones.gather(scale, RATES, wanted)
    assert (forward * wanted).sum() == pytest.approx((back * emitted).sum(), rel=1e-10)


@pytest.mark.parametrize("widening", [False, True])
def test_thread_count_changes_no_bit(rng, widening):
    scale = rng.uniform(0.1, 1.5, (12, 13, 11))
    emitted = rng.uniform(0.0, 1.0, (3, 12, 13, 11))
    cones = Cones((2.0, 2.0, 2.0), 50)
    before = numba.get_num_threads()
    results = []
    try:
        for threads in (1, min(2, numba.config.NUMBA_NUM_THREADS)):
            numba.set_num_threads(threads)
            left = (
                cones.carry_widening(scale, RATES, emitted)
                if widening
                else cones.carry(scale, RATES, sources_mev=emitted)
            )
            results.append(left.tobytes())
    finally:
        numba.set_num_threads(before)
    assert results[0] == results[1]


def test_blocks_keep_energy_and_transpose(rng):
    shape = (7, 9, 8)
    mass = rng.uniform(0.0, 2.0, shape)
    blocks = Blocks(shape, (2, 3, 4), mass)
    energy = rng.uniform(size=blocks.coarse_shape)
    spread = blocks.spread(energy)
    np.testing.assert_allclose(blocks.summed(spread), energy, rtol=1e-12)
    wanted = rng.normal(size=shape)
    assert (spread * wanted).sum() == pytest.approx((energy * blocks.spread_transposed(wanted)).sum(), rel=1e-10)
    stops, per_mode = rng.normal(size=shape), rng.normal(size=(2, *blocks.coarse_shape))
    material, table = rng.integers(0, 3, shape).astype(np.uint16), rng.normal(size=(3, 2))
    worth = np.zeros(shape)
    blocks.sources_transposed(per_mode, material, table, worth)
    assert (blocks.sources(stops, material, table) * per_mode).sum() == pytest.approx((stops * worth).sum(), rel=1e-10)


def test_block_factors_never_vanish():
    assert block_factors((5.0, 9.0, 1.0), 8.0) == (8, 1, 1)

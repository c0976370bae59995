"""The fast fold against the readable one, on small odd-shaped cases."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.maps.fields import Field
from dosekit.maps.pencils import field_pencils
from dosekit.maps.rays import matter_of
from dosekit.maps.tables import TARGETS
from dosekit.maps.widths import gaussian_taps, spot_profiles

import naive
from invented_fields import BEAM, invented_library, mixed_grid

pytestmark = pytest.mark.naive


@pytest.mark.parametrize(("gantry", "distance"), [(0.0, None), (25.0, 600.0)])
def test_core_on_planes(gantry, distance, rng):
    grid = mixed_grid((3, 6, 4), rng, spacing_mm=(4.0, 4.0, 5.0))
    beam = BEAM.replace(spot_sigma_mm=(2.0, 2.6), divergence_sigma_mrad=(10.0, 0.0), range_shifter="water")
    field = Field("f", beam, (1, 2, 3), gantry, 0, [[0, 0], [3, 1]], [0.0, 12.0], source_distance_mm=distance)
    pencils = field_pencils(field, matter_of(grid), invented_library(beam, [0.0, 12.0]))
    weights = rng.uniform(0, 1e-9, field.shape)
    fast, _ = pencils.maps(weights)
    slow = naive.fold_core_on_planes(pencils, weights)
    np.testing.assert_allclose(fast[..., 0], slow, rtol=1e-10, atol=1e-13 * slow.max())


def test_voxels_sample_the_maps(rng):
    grid = mixed_grid((4, 7, 5), rng, spacing_mm=(2.0, 2.0, 2.0))
    field = Field("f", BEAM, (1, 2, 3), 25.0, 10.0, [[0, 0]], [0.0])
    pencils = field_pencils(field, matter_of(grid), invented_library(BEAM, [0.0]))
    fine, coarse = pencils.maps(field.weights)
    voxels, rows = pencils.voxels(), np.where(np.arange(len(TARGETS)) == 0, 0, -1)
    out = np.zeros((1, int(np.prod(grid.shape))))
    factor = rng.uniform(0.5, 2.0, (1, len(grid.materials)))
    pencils.deposit(fine, 0.0 * coarse, voxels, voxels, factor=factor, rows=rows, out=out)
    centres = np.stack(np.meshgrid(*[grid.centres_mm(axis) for axis in "zyx"], indexing="ij"), -1)[..., ::-1]
    beam = pencils.planes.frame.to_beam(centres.reshape(-1, 3))
    first = np.array([pencils.planes.w_mm[0], pencils.fine.v_mm[0], pencils.fine.u_mm[0]])
    step = np.array([np.diff(pencils.planes.w_mm[:2])[0], pencils.fine.spacing_mm, pencils.fine.spacing_mm])
    places = (beam[:, ::-1] - first) / step
    energy = fine[..., 0]
    inside = np.all((places > 1.0) & (places < np.array(energy.shape) - 2.0), axis=1)
    assert inside.sum() > 20
    for n in np.flatnonzero(inside):
        wanted = naive.sample_by_spline(energy, places[n]) * factor[0, grid.material_index.ravel()[n]]
        assert out[0, n] == pytest.approx(wanted, rel=1e-10)


@pytest.mark.parametrize("spacing", [(2.0, 2.0, 2.0), (4.0, 3.0, 5.0), (1.0, 3.0, 2.0)])
@pytest.mark.parametrize(("gantry", "couch"), [(0, 0), (90, 0), (180, 0), (270, 90)])
def test_straight_fields_are_read_as_any_other(spacing, gantry, couch, rng, monkeypatch):
    """Interpolating along one axis after the other gives what one point after the other gives."""
    grid = mixed_grid((5, 9, 7), rng, spacing_mm=spacing)
    field = Field("f", BEAM, (1, 2, 3), gantry, couch, [[0, 0], [6, -4]], [0.0, 20.0])
    pencils = field_pencils(field, matter_of(grid), invented_library(BEAM, [0.0, 20.0]))
    fine, coarse = pencils.maps(field.weights)
    fine, coarse = fine + rng.random(fine.shape), coarse + rng.random(coarse.shape)
    chosen = np.sort(rng.choice(pencils.voxels(), size=100, replace=False))
    factor, rows = rng.uniform(-1, 1, (len(TARGETS), len(grid.materials))), np.arange(len(TARGETS))

    def read():
        everywhere, some = np.zeros((len(TARGETS), grid.density_g_cm3.size)), np.zeros((len(TARGETS), 100))
        pencils.deposit(fine, coarse, pencils.reach(), factor=factor, rows=rows, out=everywhere)
        pencils.deposit(fine, coarse, chosen, np.arange(100), factor=factor, rows=rows, out=some)
        np.testing.assert_allclose(everywhere[:, chosen], some, rtol=1e-12)
        return everywhere

    straight = read()
    monkeypatch.setattr("dosekit.maps.passes.runs_straight", lambda planes: False)
    np.testing.assert_allclose(straight, read(), rtol=1e-11, atol=1e-13 * np.abs(straight).max())


@pytest.mark.parametrize("variance", [0.0, 0.05, 0.7, 1.0, 3.3, 40.0])
def test_taps(variance):
    taps, reach = gaussian_taps(np.array([variance]))
    np.testing.assert_allclose(taps[0], naive.gaussian_weights(variance, len(taps[0])), rtol=1e-12)
    n = np.arange(reach[0] + 1)
    # the cut at four sigmas takes a thousandth of the variance
    assert 2.0 * (taps[0] * n**2).sum() == pytest.approx(variance, rel=2e-3, abs=1e-9)


@pytest.mark.parametrize("sigma", [0.2, 1.0, 5.0])
def test_spots_keep_their_particles_place_and_size(sigma):
    nodes = np.arange(-30.0, 31.0)
    centres = np.array([0.0, 0.3, -4.7])
    first, profile = spot_profiles(centres, np.array([sigma]), nodes, spacing_mm=1.0)
    for n, centre in enumerate(centres):
        rays = nodes[first[n] + np.arange(profile.shape[1])]
        share = profile[n, :, 0]
        assert share.sum() == pytest.approx(1.0, abs=1e-12)
        assert (share * rays).sum() == pytest.approx(centre, abs=2e-3)
        if sigma >= 1.0:
            assert (share * (rays - centre) ** 2).sum() == pytest.approx(sigma**2, rel=3e-3)

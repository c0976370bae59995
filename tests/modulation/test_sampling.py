"""Voxels that stand for the rest: volume, edges, determinism."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.modulation.sampling import thinned_coverage


def sphere(spacing, radius=30.0):
    axes = [np.arange(-radius - 4.0, radius + 4.1, step) for step in spacing[::-1]]
    z, y, x = np.meshgrid(*axes, indexing="ij")
    return np.clip((radius - np.sqrt(x**2 + y**2 + z**2)) / spacing[0] + 0.5, 0.0, 1.0).astype(np.float32)


@pytest.mark.parametrize("spacing", [(2.0, 2.0, 2.0), (4.0, 4.0, 4.0), (3.0, 3.0, 5.0)])
@pytest.mark.parametrize("edges", [True, False])
def test_volume_is_kept_and_nothing_is_invented(spacing, edges):
    coverage = sphere(spacing)
    kept = thinned_coverage(coverage, spacing_mm=spacing, edges=edges)
    assert kept.sum(dtype=float) == pytest.approx(coverage.sum(dtype=float), rel=1e-5)
    assert np.all(coverage[kept > 0.0] > 0.0)
    assert 0 < np.count_nonzero(kept) < 0.8 * np.count_nonzero(coverage)
    np.testing.assert_array_equal(kept, thinned_coverage(coverage, spacing_mm=spacing, edges=edges))


def test_edge_voxels_of_four_millimetres_are_all_kept():
    coverage = sphere((4.0, 4.0, 4.0))
    kept = thinned_coverage(coverage, spacing_mm=(4.0, 4.0, 4.0))
    partial = (coverage > 0.0) & (coverage < 1.0)
    assert np.all(kept[partial] > 0.0)


def test_voxels_wider_than_half_the_reach_are_all_kept():
    coverage = sphere((6.0, 6.0, 6.0))
    np.testing.assert_allclose(thinned_coverage(coverage, spacing_mm=(6.0, 6.0, 6.0)), coverage, rtol=1e-6)


def test_a_smooth_dose_has_the_mean_it_has_in_all_voxels():
    coverage = sphere((2.0, 2.0, 2.0))
    z, y, x = np.indices(coverage.shape)
    dose = 1.0 + 0.01 * x - 0.02 * y + 1e-3 * (z - 17.0) ** 2
    kept = thinned_coverage(coverage, spacing_mm=(2.0, 2.0, 2.0))
    whole = np.average(dose, weights=coverage)
    assert np.average(dose, weights=kept) == pytest.approx(whole, rel=0.01)


def test_single_voxels_and_empty_structures():
    one = np.zeros((5, 5, 5), dtype=np.float32)
    assert not thinned_coverage(one, spacing_mm=(2.0, 2.0, 2.0)).any()
    one[1, 3, 2] = 0.4
    np.testing.assert_array_equal(thinned_coverage(one, spacing_mm=(2.0, 2.0, 2.0)), one)

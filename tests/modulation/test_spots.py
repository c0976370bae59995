"""Spots over the shadow of a target: projection, coverage, margin, lattice."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial import cKDTree

from dosekit.errors import InputError, SizeError
from dosekit.modulation.spots import shadow_mm, spots_over_shadow


def disc(radius_mm, step_mm=1.0):
    line = np.arange(-np.floor(radius_mm / step_mm), np.floor(radius_mm / step_mm) + 1) * step_mm
    u, v = np.meshgrid(line, line)
    inside = u**2 + v**2 <= radius_mm**2
    return np.stack([u[inside], v[inside]], axis=1)


def test_parallel_shadow_drops_the_depth():
    assert shadow_mm([[1.0, 2.0, 99.0]]).tolist() == [[1.0, 2.0]]


def test_rays_from_a_source_meet_their_points(rng):
    points = rng.uniform(-50.0, 50.0, (20, 3))
    shadow = shadow_mm(points, source_distance_mm=800.0)
    source = np.array([0.0, 0.0, -800.0])
    on_plane = np.concatenate([shadow, np.zeros((20, 1))], axis=1)
    np.testing.assert_allclose(np.cross(points - source, on_plane - source), 0.0, atol=1e-8)


@given(
    radius=st.floats(2.0, 40.0),
    spacing=st.floats(2.0, 12.0),
    margin=st.floats(0.0, 15.0),
    pattern=st.sampled_from(["square", "hexagonal"]),
)
def test_margin_is_kept_and_the_target_covered(radius, spacing, margin, pattern):
    shadow = disc(radius)
    spots = spots_over_shadow(shadow, spacing_mm=spacing, margin_mm=margin, pattern=pattern)
    tree = cKDTree(spots)
    assert cKDTree(shadow).query(spots)[0].max() <= margin + 1e-6
    if margin >= spacing:
        # no point of the target is farther from a spot than half the diagonal of a cell
        assert tree.query(shadow)[0].max() <= spacing * np.sqrt(0.5) + 1e-6
    if len(spots) > 1:
        assert tree.query(spots, k=2)[0][:, 1].min() >= spacing * (1.0 - 1e-9)
    assert [0.0, 0.0] in spots.tolist()


def test_count_on_a_large_disc_is_its_area():
    for pattern, cell in (("square", 9.0), ("hexagonal", 9.0 * np.sqrt(0.75))):
        spots = spots_over_shadow(disc(60.0), spacing_mm=3.0, point_mm=1.0, pattern=pattern)
        assert len(spots) == pytest.approx(np.pi * 60.0**2 / cell, rel=0.03)


def test_unfit_input_is_refused():
    for shadow, more in (
        (np.zeros((0, 2)), {}),
        ([[np.nan, 0.0]], {}),
        ([[0.0, 0.0]], {"spacing_mm": 0.0}),
        ([[0.0, 0.0]], {"margin_mm": -1.0}),
        ([[2.5, 2.5]], {}),
        ([[0.0, 0.0]], {"pattern": "round"}),
    ):
        with pytest.raises(InputError):
            spots_over_shadow(shadow, **({"spacing_mm": 5.0} | more))
    with pytest.raises(SizeError):
        spots_over_shadow([[0.0, 0.0], [1e5, 1e5]], spacing_mm=1.0)
    with pytest.raises(InputError):
        shadow_mm([[0.0, 0.0]])
    with pytest.raises(InputError):
        shadow_mm([[0.0, 0.0, -900.0]], source_distance_mm=800.0)

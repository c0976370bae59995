"""Aiming against closed forms: a box of target in water, in a stack, from several sides."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.basis.materials import material
from dosekit.beams.stopping import relative_stopping_power
from dosekit.grids.voxels import VoxelGrid
from dosekit.maps.frames import beam_frame
from dosekit.studies.aiming import aim


def _box(density=1.0):
    """A cube of water of 120 mm with a 40 x 20 x 30 mm target about the origin."""
    shape = (60, 60, 60)
    centres = np.arange(60) * 2.0 - 59.0
    inside = (
        (np.abs(centres)[:, None, None] < 15.0)
        & (np.abs(centres)[None, :, None] < 10.0)
        & (np.abs(centres)[None, None, :] < 20.0)
    )
    return VoxelGrid(
        (-59.0, -59.0, -59.0),
        (2.0, 2.0, 2.0),
        np.full(shape, density, dtype=np.float32),
        np.zeros(shape, dtype=np.uint16),
        (material("water"),),
        {"target": inside.astype(np.float32)},
        {"target": "target"},
    )


@pytest.mark.parametrize(("gantry", "half"), [(0, 10.0), (90, 20.0), (180, 10.0), (270, 20.0)])
def test_a_box_in_water_gives_its_own_depths(gantry, half):
    aimed = aim(beam_frame((0.0, 0.0, 0.0), gantry_deg=gantry), _box(), "target", spacing_mm=5, margin_mm=3)
    np.testing.assert_allclose(aimed.near_mm, 60.0 - half, atol=1.1)
    np.testing.assert_allclose(aimed.far_mm, 60.0 + half, atol=1.1)


def test_depths_scale_with_density():
    frame = beam_frame((0.0, 0.0, 0.0), gantry_deg=0)
    one = aim(frame, _box(), "target", spacing_mm=10, margin_mm=3)
    two = aim(frame, _box(density=0.5), "target", spacing_mm=10, margin_mm=3)
    np.testing.assert_allclose(two.near_mm, 0.5 * one.near_mm, rtol=1e-5)
    assert relative_stopping_power("water") == pytest.approx(1.0)


def test_spots_cover_the_shadow_and_stay_within_the_margin():
    aimed = aim(beam_frame((0.0, 0.0, 0.0), gantry_deg=0), _box(), "target", spacing_mm=5, margin_mm=4)
    assert np.abs(aimed.spots_mm[:, 0]).max() == 20.0
    assert np.abs(aimed.spots_mm[:, 1]).max() == 15.0
    assert aimed.inside.sum() >= 7 * 5


def test_a_diverging_beam_sees_the_same_depths_on_its_axis():
    frame = beam_frame((0.0, 0.0, 0.0), gantry_deg=0, source_distance_mm=1000.0)
    aimed = aim(frame, _box(), "target", spacing_mm=5, margin_mm=0)
    axis = np.argmin(np.hypot(*aimed.spots_mm.T))
    assert aimed.near_mm[axis] == pytest.approx(50.0, abs=1.1)
    assert aimed.far_mm[axis] == pytest.approx(70.0, abs=1.1)

"""Figures of radiation quality: what is drawn, where nothing is drawn, what is refused."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

import dosekit as dk
from dosekit.errors import InputError
from dosekit.outputs.figures_quality import quality_slices_figure


@pytest.fixture(scope="module")
def torso():
    return dk.phantom("torso", spacing_mm=8.0)


def maps(grid, *, effect=True):
    dose = np.zeros((2, *grid.shape), dtype=np.float32)
    dose[:, :, : grid.shape[1] // 2] = 1.0  # 2 Gy in front, nothing behind
    axes = {axis: grid.centres_mm(axis) for axis in "zyx"}
    found = xr.Dataset(
        {
            "dose": (("component", "z", "y", "x"), dose),
            "let": (("z", "y", "x"), np.full(grid.shape, 12.0, dtype=np.float32)),
        },
        coords={"component": ["primary", "star_light"], **axes},
    )
    if effect:
        found["effect_dose"] = (("z", "y", "x"), 1.4 * dose.sum(axis=0))
    return found


def washes(figure):
    """Return the second picture of each panel, the wash over the anatomy."""
    return [axes.images[1] for axes in figure.axes if len(axes.images) > 1]


def test_let_and_ratio_are_drawn_where_there_is_dose(torso):
    figure = quality_slices_figure(maps(torso), torso, reference_gy=2.0, point_mm=(0.0, 0.0, -70.0))
    let, ratio = (np.asarray(image.get_array()) for image in washes(figure))
    assert set(np.unique(let)) == {0.0, 12.0}
    np.testing.assert_allclose(np.unique(ratio), [0.0, 1.4], rtol=1e-6)
    for image in washes(figure):
        alpha, values = np.asarray(image.get_alpha()), np.asarray(image.get_array())
        assert (alpha[values == 0.0] == 0.0).all()
        assert (alpha[values > 0.0] > 0.0).all()
    assert "2 %" in figure.get_label()


def test_without_effect_there_is_one_panel(torso):
    figure = quality_slices_figure(maps(torso, effect=False), torso, reference_gy=2.0, target="target")
    assert len(washes(figure)) == 1


def test_maps_without_let_or_dose_are_refused(torso):
    with pytest.raises(InputError, match="let"):
        quality_slices_figure(maps(torso).drop_vars("let"), torso, reference_gy=2.0)
    with pytest.raises(InputError, match="everywhere"):
        quality_slices_figure(maps(torso), torso, reference_gy=1e4)

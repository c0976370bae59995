"""Volume histograms and plan measures against closed forms and the readable oracle."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dosekit.effects.histograms import dose_spread_gy, volume_histogram
from dosekit.effects.plan_measures import conformity, integral_dose_j, outside_field_dose
from dosekit.errors import InputError

import naive

RADIUS_MM, CENTRE_GY, GRADIENT_GY_MM = 20.0, 60.0, 0.5


def sphere_share_above(height_mm):
    """Share of a sphere above a plane at this signed height over its centre (spherical cap)."""
    return (RADIUS_MM - height_mm) ** 2 * (2 * RADIUS_MM + height_mm) / (4 * RADIUS_MM**3)


def sphere_percentile_gy(percent):
    """Dose that `percent` of the sphere receives in the linear gradient: root of the cap cubic by Newton."""
    height = 0.0
    for _ in range(60):
        slope = -3.0 * (RADIUS_MM**2 - height**2) / (4 * RADIUS_MM**3)
        height -= (sphere_share_above(height) - percent / 100.0) / slope
    return CENTRE_GY + GRADIENT_GY_MM * height


def sliced_sphere(slabs):
    """Sphere cut in slabs across the gradient: exact covered share, dose at the slab centres."""
    edges = np.linspace(-RADIUS_MM, RADIUS_MM, slabs + 1)
    thickness = edges[1] - edges[0]
    volume = np.pi * (RADIUS_MM**2 * np.diff(edges) - np.diff(edges**3) / 3.0)
    box = (2 * RADIUS_MM) ** 2 * thickness
    centres = 0.5 * (edges[1:] + edges[:-1])
    return CENTRE_GY + GRADIENT_GY_MM * centres, volume / box, box / 1000.0


@pytest.mark.parametrize("percent", [2, 5, 50, 95, 98])
def test_sphere_in_linear_gradient(percent, evidence):
    dose, share, voxel_cm3 = sliced_sphere(4000)
    spread = np.full_like(dose, dose[1] - dose[0])
    histogram = volume_histogram(dose, share, voxel_cm3=voxel_cm3, spread_gy=spread)
    expected = sphere_percentile_gy(percent)
    ours = histogram.dose_at_volume_gy(percent)
    evidence(
        what=f"D{percent} of a sphere in a linear dose gradient",
        source="closed form: volume of a spherical cap",
        value=expected,
        ours=ours,
        unit="Gy",
        bar="1e-6 relative",
        kind="truth",
    )
    assert ours == pytest.approx(expected, rel=1e-6)
    assert histogram.volume_share(expected) == pytest.approx(percent / 100.0, abs=1e-6)
    assert histogram.total_volume_cm3 == pytest.approx(4 / 3 * np.pi * RADIUS_MM**3 / 1000.0, rel=1e-12)
    assert histogram.mean_gy == pytest.approx(CENTRE_GY, rel=1e-12)


def test_sphere_on_a_coarse_three_dimensional_grid():
    """A voxelised sphere of 3 mm voxels keeps volume and percentiles to grid accuracy, better than a mask."""
    spacing, finer = 3.0, 9
    count = 16
    sub = (np.arange(count * finer) + 0.5) * spacing / finer - count * spacing / 2
    z, y, x = np.meshgrid(sub, sub, sub, indexing="ij")
    inside = (x**2 + y**2 + z**2 <= RADIUS_MM**2).astype(float)
    share = inside.reshape(count, finer, count, finer, count, finer).mean(axis=(1, 3, 5))
    centres = (np.arange(count) + 0.5) * spacing - count * spacing / 2
    dose = np.broadcast_to((CENTRE_GY + GRADIENT_GY_MM * centres)[:, None, None], share.shape)
    histogram = volume_histogram(dose, share, voxel_cm3=0.027, spread_gy=dose_spread_gy(dose))
    assert histogram.total_volume_cm3 == pytest.approx(33.510, rel=2e-3)
    for percent in (2, 50, 98):
        assert histogram.dose_at_volume_gy(percent) == pytest.approx(sphere_percentile_gy(percent), abs=0.15)


def test_uniform_dose():
    histogram = volume_histogram(np.full((3, 4, 5), 2.5), np.linspace(0.1, 1.0, 60).reshape(3, 4, 5))
    for percent in (0.5, 2, 50, 95, 98, 100):
        assert histogram.dose_at_volume_gy(percent) == 2.5
    assert histogram.volume_share([0.0, 2.5, 2.5000001]).tolist() == [1.0, 1.0, 0.0]
    assert histogram.homogeneity == 0.0
    assert histogram.mean_gy == pytest.approx(2.5, rel=1e-14)


def test_step_with_fractional_voxels():
    """One quarter of the volume (part of it in half voxels) at 3 Gy, the rest at 1 Gy."""
    histogram = volume_histogram([3.0, 3.0, 1.0, 1.0], [0.5, 0.5, 1.0, 1.0])
    third = 100.0 / 3.0
    assert histogram.dose_at_volume_gy(third - 1e-6) == 3.0
    assert histogram.dose_at_volume_gy(third) == 3.0
    assert histogram.dose_at_volume_gy(third + 1e-6) == 1.0
    assert histogram.volume_share([1.0, 1.0 + 1e-9, 3.0, 3.1]) == pytest.approx([1.0, 1 / 3, 1 / 3, 0.0], abs=1e-14)
    assert histogram.mean_gy == pytest.approx(5.0 / 3.0, rel=1e-14)


@pytest.mark.naive
@given(
    voxels=st.lists(
        st.tuples(st.floats(0.0, 80.0), st.floats(0.01, 1.0)),
        min_size=1,
        max_size=25,
    ),
    percent=st.floats(0.5, 100.0),
    level=st.floats(0.0, 90.0),
)
def test_equals_oracle(voxels, percent, level):
    doses, volumes = zip(*voxels, strict=True)
    histogram = volume_histogram(doses, volumes)
    assert histogram.dose_at_volume_gy(percent) == naive.dose_at_volume(doses, volumes, percent)
    assert histogram.volume_share(level) == pytest.approx(naive.volume_share(doses, volumes, level), abs=1e-12)


def test_truths(rng):
    dose = rng.uniform(0, 50, (6, 7, 8))
    share = rng.uniform(0, 1, (6, 7, 8))
    histogram = volume_histogram(dose, share)
    _doses, shares = histogram.curve(301)
    assert np.all(np.diff(shares) <= 0.0)
    assert shares[0] == 1.0
    # the area under the cumulative curve is the mean
    fine, curve = histogram.curve(20001)
    assert np.trapezoid(curve, fine) == pytest.approx(histogram.mean_gy, rel=1e-4)
    scaled = volume_histogram(3.0 * dose, share)
    assert scaled.dose_at_volume_gy(95) == pytest.approx(3.0 * histogram.dose_at_volume_gy(95), rel=1e-14)
    assert scaled.homogeneity == pytest.approx(histogram.homogeneity, rel=1e-12)
    assert volume_histogram(dose.ravel()[::-1], share.ravel()[::-1]).measures() == pytest.approx(histogram.measures())


def test_linear_voxels_turn_into_constant_ones_as_the_spread_vanishes(rng):
    dose, share = rng.uniform(1, 2, 50), rng.uniform(0.1, 1, 50)
    constant = volume_histogram(dose, share)
    linear = volume_histogram(dose, share, spread_gy=1e-9)
    for percent in (3.3, 47.1, 96.7):
        assert linear.dose_at_volume_gy(percent) == pytest.approx(constant.dose_at_volume_gy(percent), abs=1e-8)


def test_conformity_closed_forms():
    perfect = conformity([2.0, 2.0, 0.0], [1, 1, 0], body=[1, 1, 1], level_gy=1.9)
    assert perfect["conformity"] == perfect["overlap"] == perfect["conformation_number"] == 1.0
    # treated twice the target and all of it: conformity 2, overlap 2/3, conformation number 1/2
    wide = conformity([2.0, 2.0, 2.0, 2.0], [1, 1, 0, 0], body=[1, 1, 1, 1], level_gy=1.9, voxel_cm3=0.5)
    assert (wide["conformity"], wide["conformation_number"]) == (2.0, 0.5)
    assert wide["overlap"] == pytest.approx(2 / 3, rel=1e-14)
    missed = conformity([0.0, 0.0, 2.0], [1, 1, 0], body=[1, 1, 1], level_gy=1.9)
    assert (missed["covered_share"], missed["conformation_number"], missed["overlap"]) == (0.0, 0.0, 0.0)


def test_integral_dose_is_energy():
    # 2 litres of water at 1.5 Gy: 3 J
    assert integral_dose_j(np.full(2000, 1.5), np.ones(2000), voxel_cm3=1.0) == pytest.approx(3.0, rel=1e-14)


def test_outside_field_dose_counts_only_outside():
    charged = np.array([10.0, 10.0, 0.0, 0.0, 0.0])
    neutral = np.array([5.0, 5.0, 0.3, 0.1, 0.2])
    body = np.array([1.0, 1.0, 1.0, 1.0, 0.0])
    outside = outside_field_dose(charged, neutral, body=body, level_gy=0.1, voxel_cm3=2.0)
    assert outside == pytest.approx({"level_gy": 0.1, "volume_cm3": 4.0, "mean_gy": 0.2, "maximum_gy": 0.3})
    nothing = outside_field_dose(charged, neutral, body=body, level_gy=-1.0)
    assert nothing["volume_cm3"] == nothing["mean_gy"] == 0.0


@pytest.mark.parametrize(
    ("dose", "share", "words"),
    [
        ([1.0, 2.0], [1.0], "shape"),
        ([1.0], [1.5], "coverage"),
        ([1.0], [float("nan")], "coverage"),
        ([1.0], [0.0], "no voxel"),
        ([float("nan")], [1.0], "not a number"),
    ],
)
def test_unfit_input_is_refused(dose, share, words):
    with pytest.raises(InputError, match=words):
        volume_histogram(dose, share)


@pytest.mark.parametrize("percent", [0.0, -1.0, 100.1, float("nan")])
def test_unfit_percentage_is_refused(percent):
    with pytest.raises(InputError, match="percent"):
        volume_histogram([1.0], [1.0]).dose_at_volume_gy(percent)
